"""The methods of perturbation by name."""

from __future__ import annotations

from dataclasses import fields
from typing import Any

from ensemble_horizon.checks import require_choice
from ensemble_horizon.toys.perturbations.bred import BredVectors
from ensemble_horizon.toys.perturbations.lagged import LaggedStarts
from ensemble_horizon.toys.perturbations.lyapunov import BackwardLyapunovVectors
from ensemble_horizon.toys.perturbations.method import Perturbation
from ensemble_horizon.toys.perturbations.random_fields import Correlated, Gaussian
from ensemble_horizon.toys.perturbations.singular import SingularVectors

PERTURBATIONS: dict[str, type[Perturbation]] = {
    kind.name: kind
    for kind in (
        Gaussian,
        Correlated,
        BredVectors,
        BackwardLyapunovVectors,
        SingularVectors,
        LaggedStarts,
    )
}


def perturbation(name: str, **options: Any) -> Perturbation:
    """Return the method called ``name`` with its options set.

    Parameters
    ----------
    name : str
        A key of `PERTURBATIONS`.
    **options
        Options of the method; the others keep their default. Their values are checked when the
        method is used, where the system and its time step are known.

    Raises
    ------
    ArgumentError
        If there is no such method or option.

    Examples
    --------
    >>> perturbation("correlated", length=3.0).length
    3.0
    >>> from ensemble_horizon.errors import ArgumentError
    >>> try:
    ...     perturbation("singular-vectors", windw=1.0)
    ... except ArgumentError as error:
    ...     print(error)
    option of singular-vectors: expected one of window, count, dt; found 'windw'.
    Next: did you mean 'window'?
    """
    kind = PERTURBATIONS[require_choice(name, PERTURBATIONS, "method")]
    known = [entry.name for entry in fields(kind)]
    for key in options:
        require_choice(key, known, f"option of {name}")
    return kind(**options)
