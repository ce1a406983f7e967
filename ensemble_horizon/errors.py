"""The errors of the package.

    EnsembleHorizonError          exit status 1: a fault of ours
    ├── SettingsError             2: the settings file or the command line
    ├── ArgumentError             2: an argument of a public function (also a ValueError)
    ├── ProductError              2: the products cannot be written where the settings say
    └── InputError                3: the input cannot be used

Every message has four parts: the culprit, what was expected, what was found, what to do next.
"""

from __future__ import annotations


class EnsembleHorizonError(Exception):
    """Base of all errors raised on purpose.

    Parameters
    ----------
    culprit : str
        The file, key, argument or member at fault.
    expected, found : str
        What should have been there, and what was.
    remedy : str
        What the reader can do next.

    Examples
    --------
    >>> print(InputError("m03.nc", expected="NetCDF", found="plain text", remedy="remove it"))
    m03.nc: expected NetCDF; found plain text. Next: remove it.
    """

    exit_status = 1

    def __init__(self, culprit: str, *, expected: str, found: str, remedy: str) -> None:
        self.culprit = culprit
        self.expected = expected
        self.found = found
        self.remedy = remedy
        super().__init__(culprit, expected, found, remedy)

    def __reduce__(self) -> tuple[object, ...]:
        # Errors cross process borders, and Exception would call __init__ with positions only.
        return _rebuild, (type(self), self.culprit, self.expected, self.found, self.remedy)

    def __str__(self) -> str:
        found, remedy = _ended(self.found), _ended(self.remedy)
        return f"{self.culprit}: expected {self.expected}; found {found} Next: {remedy}"


def _ended(text: str) -> str:
    """End a sentence that may have ended already."""
    return text if text.endswith((".", "?")) else f"{text}."


class SettingsError(EnsembleHorizonError):
    """The settings file or the command line asks for something that cannot be done."""

    exit_status = 2


class ArgumentError(EnsembleHorizonError, ValueError):
    """An argument of a public function is outside what it accepts."""

    exit_status = 2


class ProductError(EnsembleHorizonError):
    """A product cannot be written where the settings say."""

    exit_status = 2


class InputError(EnsembleHorizonError):
    """Input files are missing, broken, or do not hold what is asked of them."""

    exit_status = 3


def _rebuild(
    kind: type[EnsembleHorizonError], culprit: str, expected: str, found: str, remedy: str
) -> EnsembleHorizonError:
    return kind(culprit, expected=expected, found=found, remedy=remedy)
