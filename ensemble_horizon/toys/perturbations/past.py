"""The run that leads up to the start: what is checked of it, and the tangent along it."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System, require_states
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.toys.perturbations.method import Start
from ensemble_horizon.toys.schemes import tangent_step

# The run up to the start is made again, perhaps beside other states; matrix products then round
# differently. What is told apart here is another run, not another rounding.
SAME_RUN = float(np.sqrt(np.finfo(float).eps))


def require_past(start: Start, past: npt.ArrayLike | None, span: float) -> Array:
    """Return the control (N,) as it was at ``start.time - span``."""
    if past is None:
        raise ArgumentError(
            "past",
            expected=f"the control at time {start.time - span:g}, {span:g} before the start",
            found="nothing",
            remedy="a chaotic system cannot be run backwards: keep an earlier state, and take as "
            "state what integrate makes of it",
        )
    earlier = require_states(start.system, past, "past")
    if earlier.ndim != 1:
        raise ArgumentError(
            "past",
            expected=f"one state of {start.system.size} variables",
            found=f"shape {earlier.shape}",
            remedy="give the control alone",
        )
    return earlier


def require_arrival(start: Start, arrived: Array, span: float) -> None:
    """Raise `ArgumentError` unless the run from the past has come to the control.

    It has if the difference is below sqrt(eps) = 1.5e-8 of the control, in the norm: the same run
    in the same steps comes to the same bits, or to within rounding that has grown on the way.
    """
    distance = float(start.measure.length(arrived - start.control))
    allowed = SAME_RUN * float(start.measure.length(start.control))
    if not distance <= allowed:
        raise ArgumentError(
            "past",
            expected=f"a state that leads to the control in a time of {span:g} "
            f"(to within {allowed:.2g} in the {start.measure.name} norm)",
            found=f"a run that ends {distance:.3g} from it",
            remedy="check the time between the two states and dt",
        )


def tangent_run(
    system: System, state: Array, displacements: Array, steps: int, dt: float, time: float
) -> tuple[Array, Array]:
    """Return the state (..., N) and infinitesimal displacements (..., K, N) after ``steps``."""
    for number in range(steps):
        with np.errstate(over="ignore", invalid="ignore"):
            moved = tangent_step(system, state[..., None, :], displacements, dt, time + number * dt)
        state, displacements = moved[0][..., 0, :], moved[1]
        if not np.all(np.isfinite(displacements)) or not np.all(np.isfinite(state)):
            raise ArgumentError(
                f"tangent run of {system.name}",
                expected="finite displacements",
                found=f"some not finite at time {(number + 1) * dt:g} (step {number + 1})",
                remedy=f"take a step shorter than dt={dt:g}, or a shorter time",
            )
    return state, displacements
