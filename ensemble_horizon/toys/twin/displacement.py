"""How the states of an experiment are displaced, and what of the past that takes."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, fields
from typing import Any

import numpy as np

from ensemble_horizon.checks import require_choice, require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System
from ensemble_horizon.toys.perturbations.method import require_whole, steps_in
from ensemble_horizon.toys.perturbations.registry import perturbation

Lags = tuple[int, ...]


@dataclass(frozen=True, kw_only=True)
class Displacement:
    """Structure and size of analysis errors, or of the perturbations of members.

    Parameters
    ----------
    amplitude : float or None
        Length of every displacement in ``norm``; None for methods that have a size of their own.
    method : str
        A key of `ensemble_horizon.toys.PERTURBATIONS`.
    norm : str
        A key of ``system.norms()``.
    paired : bool
        Members come in plus-minus pairs; no use for analysis errors, of which there is one a time.
    options : mapping
        Options of the method, but for ``past`` and ``dt``: the experiment knows both.

    Examples
    --------
    >>> Displacement(amplitude=0.1, method="correlated", options={"length": 2.0}).norm
    'euclidean'
    """

    amplitude: float | None
    method: str = "gaussian"
    norm: str = "euclidean"
    paired: bool = False
    options: Mapping[str, Any] = field(default_factory=dict)

    @property
    def from_analyses(self) -> bool:
        """Whether the method starts from earlier analyses rather than from the run itself."""
        return self.method == "lagged"

    @property
    def stepping(self) -> bool:
        """Whether the method runs the system, so that it must know the step."""
        kind = perturbation(self.method, **self.options)
        return any(option.name == "dt" for option in fields(kind))

    def check(self, system: System) -> None:
        """Raise `ArgumentError` unless ``system`` can be displaced in this way."""
        kind = perturbation(self.method, **self.options)
        for key in ("past", "dt"):
            if key in self.options:
                raise ArgumentError(
                    f"option {key} of {self.method}",
                    expected="to be left to the experiment, which knows it",
                    found=repr(self.options[key]),
                    remedy="leave it out",
                )
        require_choice(self.norm, system.norms(), "norm")
        if self.amplitude is not None:
            require_positive(self.amplitude, "amplitude", zero=True)
        elif not kind.own_size:
            raise ArgumentError(
                "amplitude",
                expected=f"a number, as {self.method} displacements have no size of their own",
                found="nothing",
                remedy="give the length of the displacements",
            )

    def lags(self, dt: float) -> Lags:
        """Return how many steps before a moment the method needs states, none for most methods."""
        return _LAGS[self.method](self.options, dt) if self.method in _LAGS else ()

    def past_lags(self, dt: float, analyses: Displacement) -> Lags:
        """Return the lags at which the truth itself is needed.

        Those of the method, and where it starts from earlier ``analyses`` also what these need.
        """
        own = self.lags(dt)
        if not self.from_analyses:
            return own
        return tuple(sorted({*own, *(lag + more for lag in own for more in analyses.lags(dt))}))


def _breeding(options: Mapping[str, Any], dt: float) -> Lags:
    cycles = require_whole(options.get("cycles", 10), "cycles")
    return (cycles * steps_in(_given(options, "cycle"), dt, "cycle"),)


def _span(options: Mapping[str, Any], dt: float) -> Lags:
    return (steps_in(_given(options, "span"), dt, "span"),)


def _ages(options: Mapping[str, Any], dt: float) -> Lags:
    if "ages" not in options:
        raise ArgumentError(
            "ages", expected="a list of times", found="nothing", remedy="give ages as option"
        )
    ages = np.asarray(options["ages"], dtype=float).ravel()
    return tuple(steps_in(require_positive(age, "ages"), dt, "ages") for age in ages)


def _given(options: Mapping[str, Any], option: str) -> float:
    if option not in options:
        raise ArgumentError(
            option, expected="a length of time", found="nothing", remedy=f"give {option} as option"
        )
    return require_positive(options[option], option)


_LAGS: dict[str, Callable[[Mapping[str, Any], float], Lags]] = {
    "bred-vectors": _breeding,
    "backward-lyapunov-vectors": _span,
    "lagged": _ages,
}
