"""Perturbed members around a control, by any method, singly or in plus-minus pairs."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ensemble_horizon.checks import require_choice, require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System, require_states
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.toys.perturbations.method import Perturbation, Start, require_whole
from ensemble_horizon.toys.perturbations.registry import perturbation


def perturb(
    system: System,
    state: npt.ArrayLike,
    members: int,
    *,
    amplitude: float | None,
    seed: int,
    norm: str = "euclidean",
    method: str | Perturbation = "gaussian",
    paired: bool = False,
    scale: npt.ArrayLike | None = None,
    time: float = 0.0,
    **options: Any,
) -> Array:
    """Return ``members`` states (members, N) around ``state`` (N,).

    Every member lies at the distance ``amplitude`` from ``state`` in the chosen norm. The
    displacement has that norm to within its own rounding, 1e-15 of it; a sum of state and
    displacement cannot be finer than the state, so that of a displacement a million times smaller
    than the state ten digits are left.

    Parameters
    ----------
    system : System
    state : array (N,)
        The control at the start of the ensemble.
    members : int
        Number of perturbed states; the control is not one of them.
    amplitude : float or None
        Length of every displacement, in the units of the norm. None leaves displacements that have
        a size of their own as they are (method "lagged").
    seed : int
        Seed of the random numbers; the same seed gives the same members, bit for bit on the same
        machine.
    norm : str
        A key of ``system.norms()``.
    method : str or Perturbation
        A key of `PERTURBATIONS`, or a method with its options from `perturbation`.
    paired : bool
        Members 2 k and 2 k + 1 are the control plus and minus the k-th displacement, and the mean
        of the two is the control to the last bit (see Notes).
    scale : array (N,), optional
        Option of the methods "gaussian" and "correlated": relative size of the displacement by
        variable, 1 if left out.
    time : float
        Time of ``state``; it matters only to systems driven from outside.
    **options
        Other options of the method, such as ``length`` of "correlated" or ``past`` of
        "bred-vectors". They are told in the docstrings of ``toys.PERTURBATIONS[name]``.

    Returns
    -------
    array (members, N)
        For methods with ``nested`` set, member m is the same however many members are asked for;
        for the others it is so to within rounding.

    Raises
    ------
    ArgumentError
        If an argument is out of range, the method or an option unknown, a state from the past
        missing, or more vectors asked for than there are variables.

    Notes
    -----
    In a pair, the member farther from zero is rounded first, variable by variable, and the other
    is twice the control minus it. That difference is a number the machine has wherever the
    displacement is at most three times the control in size, or the control is zero; the pair's
    mean is then exact. Where the displacement is larger still no pair of numbers has that mean,
    and it is met to within the rounding of the displacement.

    Examples
    --------
    >>> from ensemble_horizon import toys
    >>> lorenz, control = toys.system("lorenz-63"), np.array([1.0, 2.0, 20.0])
    >>> states = perturb(lorenz, control, 4, amplitude=0.01, seed=7)
    >>> states.shape, np.linalg.norm(states - control, axis=-1).round(9).tolist()
    ((4, 3), [0.01, 0.01, 0.01, 0.01])

    Bred vectors need the control as it was before; the state is what it has become:

    >>> past = toys.settled(lorenz)
    >>> now = toys.integrate(lorenz, past, 500, every=500).states[-1]
    >>> pair = perturb(
    ...     lorenz, now, 2, amplitude=1e-3, seed=7, paired=True,
    ...     method="bred-vectors", past=past, cycle=0.5, cycles=10,
    ... )
    >>> bool(np.all(pair.mean(axis=0) == now))
    True
    """
    wanted = require_whole(members, "members")
    if paired and wanted % 2:
        raise ArgumentError(
            "members",
            expected="an even number, as they come in pairs",
            found=str(wanted),
            remedy=f"take {wanted + 1}, or paired=False",
        )
    found = displacements(
        system,
        state,
        wanted // 2 if paired else wanted,
        amplitude=amplitude,
        seed=seed,
        norm=norm,
        method=method,
        scale=scale,
        time=time,
        **options,
    )
    control = np.asarray(state, dtype=float)
    return plus_and_minus(control, found) if paired else np.asarray(control + found)


def displacements(
    system: System,
    state: npt.ArrayLike,
    members: int,
    *,
    amplitude: float | None,
    seed: int,
    norm: str = "euclidean",
    method: str | Perturbation = "gaussian",
    scale: npt.ArrayLike | None = None,
    time: float = 0.0,
    **options: Any,
) -> Array:
    """Return the displacements (members, N) that `perturb` adds to ``state`` (N,).

    They have the norm ``amplitude`` to within rounding of their own, and may be added to another
    state: what grows along one run, to the analysis of it. Parameters and errors are those of
    `perturb`.

    Examples
    --------
    >>> from ensemble_horizon.toys.systems.lorenz import Lorenz63
    >>> found = displacements(Lorenz63(), [1.0, 2.0, 20.0], 2, amplitude=1e-20, seed=7)
    >>> (np.linalg.norm(found, axis=-1) / 1e-20).round(12).tolist()
    [1.0, 1.0]
    """
    if scale is not None:
        options["scale"] = scale
    chosen = _require_method(method, options)
    start = _require_start(system, state, amplitude, norm, time, chosen)
    random = np.random.default_rng(require_whole(seed, "seed", 0))
    found = chosen.displacements(start, require_whole(members, "members"), random)
    if start.amplitude is None:
        return found
    length = start.measure.length(found)
    if not np.all(length > 0):
        raise ArgumentError(
            f"method {chosen.name}",
            expected=f"displacements above zero in the {norm} norm",
            found=f"{int(np.count_nonzero(~(length > 0)))} that are not",
            remedy="check scale or length",
        )
    return found * (start.amplitude / length[..., None])


def plus_and_minus(control: Array, displacements: Array) -> Array:
    """Return control + d and control - d by turns (2 K, N), their mean the control exactly.

    `perturb` tells how far exactness goes.

    Examples
    --------
    >>> plus_and_minus(np.array([1.0, -2.0]), np.array([[0.5, 0.25]])).tolist()
    [[1.5, -1.75], [0.5, -2.25]]
    """
    outer = control + np.copysign(displacements, control)
    inner = 2.0 * control - outer
    outward = np.signbit(displacements) == np.signbit(control)
    pairs = [np.where(outward, outer, inner), np.where(outward, inner, outer)]
    return np.stack(pairs, axis=1).reshape(-1, control.size)


def _require_method(method: str | Perturbation, options: dict[str, Any]) -> Perturbation:
    if not isinstance(method, Perturbation):
        return perturbation(method, **options)
    if options:
        raise ArgumentError(
            f"option {next(iter(options))}",
            expected=f"no options beside a method of its own ({method.name})",
            found=", ".join(options),
            remedy="set them when you make the method",
        )
    return method


def _require_start(
    system: System,
    state: npt.ArrayLike,
    amplitude: float | None,
    norm: str,
    time: float,
    method: Perturbation,
) -> Start:
    control = require_states(system, state, "state")
    if control.ndim != 1:
        raise ArgumentError(
            "state",
            expected=f"one state of {system.size} variables",
            found=f"shape {control.shape}",
            remedy="perturb the control of one start at a time",
        )
    if amplitude is None and not method.own_size:
        raise ArgumentError(
            "amplitude",
            expected=f"a number, as the displacements of {method.name} have no size of their own",
            found="None",
            remedy="give the length of the displacements",
        )
    if not np.isfinite(time):
        raise ArgumentError(
            "time", expected="a finite number", found=repr(time), remedy="correct the time"
        )
    norms = system.norms()
    measure = norms[require_choice(norm, norms, "norm")]
    length = None if amplitude is None else require_positive(amplitude, "amplitude", zero=True)
    return Start(system, control, float(time), measure, length)
