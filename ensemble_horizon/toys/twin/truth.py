"""The run that counts as the truth, moment by moment."""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.integration import march
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.toys.twin.experiment import TwinExperiment


class Moment(NamedTuple):
    """The truth (N,) at one time of analysis.

    ``step`` counts from the first start and is negative before it; ``time`` is the same in units of
    time. ``past`` holds the truth at the earlier steps that analysis and members are made with.
    """

    step: int
    time: float
    truth: Array
    past: dict[int, Array]


def follow_truth(experiment: TwinExperiment) -> Iterator[Moment]:
    """Run the truth and yield every moment of analysis, those of the climate first.

    Nothing is kept but what the next moments need of the past, so memory does not grow with the
    length of the run.

    Raises
    ------
    ArgumentError
        If the truth stops being finite; the message says when.

    Examples
    --------
    >>> from ensemble_horizon import toys
    >>> experiment = toys.TwinExperiment(
    ...     system=toys.system("lorenz-63"),
    ...     versions={"A": toys.ModelVersion(toys.system("lorenz-63"))},
    ...     starts=2, start_spacing=0.5, leads=3, lead_spacing=0.5, members=2, climate=1.0,
    ...     analyses=toys.Displacement(amplitude=0.1),
    ... )
    >>> [moment.time for moment in follow_truth(experiment)]
    [-1.0, -0.5, 0.0, 0.5, 1.0, 1.5]
    """
    every, dt = experiment.lead_steps, experiment.step
    climate = round(experiment.climate / experiment.lead_spacing) * every
    first = -max(climate, *experiment.lags, 0)
    last = (experiment.analysis_count - 1) * every
    longest = max(experiment.lags, default=0)
    kept: dict[int, Array] = {}
    for step, state in _states(experiment, first, last):
        if any((step + lag) % every == 0 for lag in experiment.lags):
            kept[step] = state
        kept.pop(step - longest - 1, None)
        if step % every or step < -climate:
            continue
        past = {step - lag: kept[step - lag] for lag in experiment.lags} if step >= 0 else {}
        yield Moment(step, step * dt, state, past)


def moment_of_start(experiment: TwinExperiment, number: int) -> Moment:
    """Return the moment of start ``number``, the truth being run that far and no further."""
    if not 0 <= number < experiment.starts:
        raise ArgumentError(
            "number",
            expected=f"a start from 0 to {experiment.starts - 1}",
            found=str(number),
            remedy="count from 0",
        )
    wanted = number * experiment.start_steps
    return next(moment for moment in follow_truth(experiment) if moment.step == wanted)


def _states(experiment: TwinExperiment, first: int, last: int) -> Iterator[tuple[int, Array]]:
    """Yield step and state from ``first`` to ``last``, after the spin-up."""
    system, dt = experiment.system, experiment.step
    spin_up = system.spin_up if experiment.spin_up is None else experiment.spin_up
    settling = round(spin_up / dt)
    begin = (first - settling) * dt
    run = march(system, system.default_state(), settling + last - first, dt, 1, begin)
    for step, state in enumerate(run, start=first - settling):
        if step >= first:
            yield step, state
