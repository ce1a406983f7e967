"""Analyses, members and their runs, one start at a time."""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.integration import march
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.toys.perturbations.members import displacements, plus_and_minus
from ensemble_horizon.toys.twin.displacement import Displacement
from ensemble_horizon.toys.twin.experiment import TwinExperiment
from ensemble_horizon.toys.twin.truth import Moment

_ANALYSES, _MEMBERS = 0, 1  # streams of random numbers


class Block(NamedTuple):
    """Some leads of one start: ``first`` lead and states (leads, members, N) of the version."""

    first: int
    states: Array


def analysis_at(experiment: TwinExperiment, moment: Moment) -> Array:
    """Return the analysis (N,): the truth of the moment plus an error of its own seed."""
    return _analysis(experiment, moment.step, {**moment.past, moment.step: moment.truth})


def initial_members(experiment: TwinExperiment, moment: Moment) -> Array:
    """Return the members (members, N) of the start at ``moment``, in the truth's variables.

    Examples
    --------
    >>> from ensemble_horizon import toys
    >>> lorenz = toys.system("lorenz-63")
    >>> experiment = toys.TwinExperiment(
    ...     system=lorenz, versions={"A": toys.ModelVersion(lorenz)},
    ...     starts=2, start_spacing=0.5, leads=3, lead_spacing=0.5, members=4,
    ...     analyses=toys.Displacement(amplitude=0.1),
    ... )
    >>> moment = toys.moment_of_start(experiment, 1)
    >>> members, analysis = initial_members(experiment, moment), analysis_at(experiment, moment)
    >>> lorenz.norms()["euclidean"].length(members - analysis).round(9).tolist()
    [0.1, 0.1, 0.1, 0.1]
    """
    truth = {**moment.past, moment.step: moment.truth}
    control = _analysis(experiment, moment.step, truth)
    how = experiment.members_perturbed_by
    count = experiment.members - experiment.control
    seed = _seed(experiment, _MEMBERS, moment.step)
    moved = _displaced(experiment, how, control, count, seed, moment.step, truth)
    return np.concatenate([control[None], moved]) if experiment.control else moved


def run_forecast(
    experiment: TwinExperiment, version: str, moment: Moment, block: int = 8
) -> Iterator[Block]:
    """Run all members of the start at ``moment`` by a version, and yield ``block`` leads a time.

    Nothing else is kept, so memory does not grow with the length of the run. A start gives the same
    numbers, bit for bit, alone or among others, on the same machine with as many linear-algebra
    threads.

    Raises
    ------
    ArgumentError
        If a state stops being finite: the message says at which time and step, of which start.
    """
    model = experiment.version(version).system
    dt, every = experiment.steps_per_lead(version)
    members = experiment.system.carried_over(initial_members(experiment, moment), model)
    run = march(model, members, every * (experiment.leads - 1), dt, every, moment.time)
    waiting: list[Array] = []
    first = 0
    try:
        for state in run:
            waiting.append(state)
            if len(waiting) == block:
                yield Block(first, np.stack(waiting))
                first, waiting = first + block, []
    except ArgumentError as error:
        number = moment.step // experiment.start_steps
        raise ArgumentError(
            f"version {version}, start {number}: {error.culprit}",
            expected=error.expected,
            found=error.found,
            remedy=error.remedy,
        ) from error
    if waiting:
        yield Block(first, np.stack(waiting))


def _analysis(experiment: TwinExperiment, step: int, truth: dict[int, Array]) -> Array:
    seed = _seed(experiment, _ANALYSES, step)
    return _displaced(experiment, experiment.analyses, truth[step], 1, seed, step, truth)[0]


def _displaced(
    experiment: TwinExperiment,
    how: Displacement,
    around: Array,
    count: int,
    seed: int,
    step: int,
    truth: dict[int, Array],
) -> Array:
    """Return ``count`` states (count, N) displaced from ``around``."""
    lags = how.lags(experiment.step)
    options = dict(how.options)
    centre = around
    if how.from_analyses:
        options["past"] = [_analysis(experiment, step - lag, truth) for lag in lags]
    elif lags:
        # What grows along the truth; the analysis itself has no past that leads to it.
        centre, options["past"] = truth[step], truth[step - lags[0]]
    if how.stepping:
        options["dt"] = experiment.step
    paired = how.paired and count > 1
    moved = displacements(
        experiment.system,
        centre,
        count // 2 if paired else count,
        amplitude=how.amplitude,
        seed=seed,
        norm=how.norm,
        method=how.method,
        time=step * experiment.step,
        **options,
    )
    return plus_and_minus(around, moved) if paired else around + moved


def _seed(experiment: TwinExperiment, stream: int, step: int) -> int:
    """Return the seed of one stream at one step, whatever else is drawn."""
    entropy = (experiment.seed, stream, abs(step), int(step < 0))
    return int(np.random.SeedSequence(entropy).generate_state(1, np.uint64)[0])
