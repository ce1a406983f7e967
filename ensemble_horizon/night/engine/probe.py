"""Are the workers of a cluster fit: have they the package, and do they see the same files?

They are asked by functions that every Python has, as one that lacks the package could not even
read a function of ours.
"""

from __future__ import annotations

import importlib.metadata
import importlib.util
import logging
import os
import platform
import tempfile
from collections.abc import Callable, Collection, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, NamedTuple, Protocol

from ensemble_horizon.errors import EnsembleHorizonError

_DISTRIBUTION, _PACKAGE = "ensemble-horizon", "ensemble_horizon"
_NUMERICAL = ("numpy", "scipy", "netCDF4")

log = logging.getLogger(__name__)


class Asker(Protocol):
    """Runs a function on workers and gives back results, or errors, by address (a dask client)."""

    def run(self, function: Callable[..., Any], *args: Any, **options: Any) -> dict[str, Any]:
        """Run ``function`` with these arguments on each of ``options["workers"]``."""


class _Unfit(NamedTuple):
    """What is wrong with a worker."""

    expected: str
    found: str
    remedy: str


def require_fit(
    asker: Asker, workers: Collection[str], files: Collection[str], folder: Path | None
) -> None:
    """Refuse to go on where a worker cannot do the tasks.

    Parameters
    ----------
    asker : dask client
    workers : collection of str
        Addresses.
    files : collection of str
        Files that the workers must see as this process does.
    folder : Path or None
        A folder that they must be able to write to.

    Raises
    ------
    EnsembleHorizonError
        if one has another Python, lacks the package, has another version of it, or does not see
        the files or the folder. All such workers are named.
    """
    left = sorted(workers)
    unfit: dict[str, _Unfit] = {}
    for check in (_check_python, _check_package, _check_version):
        unfit |= check(asker, left)
        left = [address for address in left if address not in unfit]
    for path in files:
        unfit |= _check_file(asker, left, path)
        left = [address for address in left if address not in unfit]
    if folder is not None:
        unfit |= _check_folder(asker, left, folder)
    if unfit:
        raise _refusal(unfit)
    _tell_other_libraries(asker, left)


def _ask(asker: Asker, workers: list[str], function: Callable[..., Any], *args: Any) -> Any:
    if not workers:
        return {}
    return asker.run(function, *args, workers=workers, on_error="return")


def _check_python(asker: Asker, workers: list[str]) -> dict[str, _Unfit]:
    here = platform.python_version()
    return {
        address: _Unfit(
            f"Python {_minor(here)}, as here", _told(there, "Python "),
            "start that worker with the Python of this command",
        )
        for address, there in _ask(asker, workers, platform.python_version).items()
        if isinstance(there, BaseException) or _minor(there) != _minor(here)
    }  # fmt: skip


def _check_package(asker: Asker, workers: list[str]) -> dict[str, _Unfit]:
    remedy = f"install {_DISTRIBUTION} in the environment of that worker"
    return {
        address: _Unfit(f"the package {_DISTRIBUTION}", "that it is not installed there", remedy)
        for address, there in _ask(asker, workers, importlib.util.find_spec, _PACKAGE).items()
        if there is None or isinstance(there, BaseException)
    }


def _check_version(asker: Asker, workers: list[str]) -> dict[str, _Unfit]:
    here = importlib.metadata.version(_DISTRIBUTION)
    found = _ask(asker, workers, importlib.metadata.version, _DISTRIBUTION)
    return {
        address: _Unfit(
            f"{_DISTRIBUTION} {here}, as here", _told(there, "version "),
            f"install {_DISTRIBUTION} {here} in the environment of that worker",
        )
        for address, there in found.items()
        if there != here
    }  # fmt: skip


def _check_file(asker: Asker, workers: list[str], path: str) -> dict[str, _Unfit]:
    here = Path(path).stat()
    remedy = "put the files on a file system that all workers mount under the same path"
    unfit = {}
    for address, there in _ask(asker, workers, os.stat, path).items():
        if isinstance(there, BaseException):
            found = f"that it does not see it ({_told(there)})"
        # Whole seconds: some file systems keep no more.
        elif (there.st_size, int(there.st_mtime)) != (here.st_size, int(here.st_mtime)):
            found = "another file there, of other size or time"
        else:
            continue
        unfit[address] = _Unfit(f"to see {path} as it is here", found, remedy)
    return unfit


def _check_folder(asker: Asker, workers: list[str], folder: Path) -> dict[str, _Unfit]:
    expected = f"to write to {folder}, as tasks do"
    remedy = "put the products on a file system that all workers mount under the same path"
    unfit = {}
    with _sign(folder) as sign:
        for address, there in _ask(asker, workers, os.stat, str(sign)).items():
            if isinstance(there, BaseException):
                found = f"that it does not see what is written there ({_told(there)})"
                unfit[address] = _Unfit(expected, found, remedy)
    rest = [address for address in workers if address not in unfit]
    for address, there in _ask(asker, rest, os.access, str(folder), os.W_OK).items():
        if there is not True:
            remedy = "let the user that the worker runs as write there"
            unfit[address] = _Unfit(expected, "that it may not", remedy)
    return unfit


@contextmanager
def _sign(folder: Path) -> Iterator[Path]:
    """A file that no other file system has."""
    with tempfile.NamedTemporaryFile(dir=folder, prefix=".ensemble-horizon-") as file:
        yield Path(file.name)


def _tell_other_libraries(asker: Asker, workers: list[str]) -> None:
    for name in _NUMERICAL:
        here = importlib.metadata.version(name)
        found = _ask(asker, workers, importlib.metadata.version, name)
        other = [f"{address} ({_told(there)})" for address, there in found.items() if there != here]
        if other:
            log.warning(
                "%s %s here, other versions at %s: last digits may differ",
                name, here, ", ".join(other),
            )  # fmt: skip


def _refusal(unfit: dict[str, _Unfit]) -> EnsembleHorizonError:
    first = next(iter(unfit.values()))
    others = [f"worker {address}: {item.found}" for address, item in list(unfit.items())[1:]]
    found = "; ".join([first.found, *others])
    return EnsembleHorizonError(
        f"worker {next(iter(unfit))}",
        expected=first.expected,
        found=found,
        remedy=f"{first.remedy}, or stop that worker"
        if not others
        else f"{first.remedy}, and see to the others likewise, or stop them",
    )


def _minor(version: str) -> str:
    return ".".join(version.split(".")[:2])


def _told(answer: object, before: str = "") -> str:
    """An answer in words."""
    if isinstance(answer, OSError) and answer.strerror:
        return answer.strerror
    if isinstance(answer, BaseException):
        return f"{type(answer).__name__}: {answer}"
    return f"{before}{answer}"
