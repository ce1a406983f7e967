"""Twin experiments: what is drawn, what it is drawn around, and what is kept in memory."""

import tracemalloc
from dataclasses import replace
from functools import partial

import numpy as np
import pytest
from scipy import stats

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError

CHANNEL = {"zonal_waves": 4, "meridional_modes": 4, "length": 1.5e7, "width": 8.0e6}


def experiment(name="lorenz-96", version=None, **changes):
    system = toys.system(name) if isinstance(name, str) else name
    settings = {
        "system": system,
        "versions": {"A": toys.ModelVersion(version or system)},
        "starts": 3,
        "start_spacing": 0.5,
        "leads": 6,
        "lead_spacing": 0.25,
        "members": 4,
        "seed": 11,
        "spin_up": 5.0,
        "analyses": toys.Displacement(amplitude=0.1),
    }
    return toys.TwinExperiment(**{**settings, **changes})


def forecast(one, version, moment, block=8):
    """All leads (leads, members, N) of a start."""
    return np.concatenate([b.states for b in toys.run_forecast(one, version, moment, block)])


def moments(one):
    return {moment.step: moment for moment in toys.follow_truth(one)}


@pytest.mark.parametrize("name", ["lorenz-63", "lorenz-96"])
def test_a_start_made_alone_is_the_same_to_the_last_bit(name):
    one = experiment(name)
    together = moments(one)
    for number in range(one.starts):
        moment = together[number * one.start_steps]
        alone = toys.moment_of_start(one, number)
        assert np.array_equal(alone.truth, moment.truth)
        whole = forecast(one, "A", moment)
        assert np.array_equal(forecast(one, "A", alone, block=1), whole)
        fewer_starts = replace(one, starts=number + 1)
        assert np.array_equal(forecast(fewer_starts, "A", alone), whole)


def test_members_do_not_depend_on_how_many_there_are():
    small, large = experiment(members=4), experiment(members=9)
    moment = toys.moment_of_start(small, 2)
    few, many = (toys.initial_members(one, moment) for one in (small, large))
    assert np.array_equal(few, many[:4])


def test_every_start_and_every_seed_draws_anew():
    one = experiment()
    errors = [toys.analysis_at(one, m) - m.truth for m in moments(one).values()]
    errors += [toys.analysis_at(replace(one, seed=12), m) - m.truth for m in moments(one).values()]
    assert len({error.tobytes() for error in errors}) == len(errors)


def test_spread_is_as_large_as_the_error_at_lead_zero():
    """Members and truth lie alike about the analysis: E|mean - truth|^2 = a^2 (1 + 1/M)."""
    size, members = 0.3, 10
    one = experiment(
        starts=60, members=members, leads=2, analyses=toys.Displacement(amplitude=size)
    )
    spread, error = [], []
    for step, moment in moments(one).items():
        if step % one.start_steps or step > 59 * one.start_steps:
            continue
        states = toys.initial_members(one, moment)
        analysis = toys.analysis_at(one, moment)
        assert np.linalg.norm(analysis - moment.truth) == pytest.approx(size, rel=1e-12)
        assert np.linalg.norm(states - analysis, axis=-1) == pytest.approx(size, rel=1e-12)
        spread.append(states.var(axis=0, ddof=1).sum())
        error.append(np.sum((states.mean(axis=0) - moment.truth) ** 2))
    # |mean p|^2 holds 45 products p_i . p_j, each with the weight 2 / M^2; the error holds them and
    # 10 products e . p_i with the weight 2 / M. Each has the variance a^4 / N, at 60 starts.
    doubt = 2 / members**2 * np.sqrt(np.array([45, 45 + 10 * members**2]) / (40 * 60))
    assert np.mean(spread) / size**2 == pytest.approx(1.0, abs=4 * doubt[0])
    assert np.mean(error) / size**2 == pytest.approx(1 + 1 / members, abs=4 * doubt[1])


def test_the_truth_is_like_one_more_member():
    """Its rank among the members at lead zero is uniform (chi-square, scipy)."""
    one = experiment(starts=60, members=9, leads=2)
    counts = np.zeros(10)
    for step, moment in moments(one).items():
        if step % one.start_steps == 0 and step <= 59 * one.start_steps:
            rank = np.sum(toys.initial_members(one, moment) < moment.truth, axis=0)
            counts += np.bincount(rank, minlength=10)
    assert counts.sum() == 60 * 40
    assert stats.chisquare(counts).pvalue > 0.001


def test_the_control_is_the_analysis_itself():
    one = experiment(control=True, members=5)
    moment = toys.moment_of_start(one, 1)
    states, analysis = toys.initial_members(one, moment), toys.analysis_at(one, moment)
    assert states.shape == (5, 40)
    assert np.array_equal(states[0], analysis)
    assert np.linalg.norm(states[1:] - analysis, axis=-1) == pytest.approx(0.1, rel=1e-12)


def test_pairs_have_the_analysis_as_their_mean():
    one = experiment(perturbations=toys.Displacement(amplitude=0.2, paired=True))
    moment = toys.moment_of_start(one, 1)
    pairs = toys.initial_members(one, moment).reshape(2, 2, 40)
    assert np.array_equal(pairs.mean(axis=1), np.tile(toys.analysis_at(one, moment), (2, 1)))


@pytest.mark.parametrize("name", ["lorenz-63", "van-der-pol", "double-gyre-floats"])
def test_a_perfect_model_from_a_perfect_analysis_follows_the_truth(name):
    """Among them a system that is driven from outside: its time must pass."""
    system = toys.system(name)
    every = 10 * system.step
    one = experiment(
        name, lead_spacing=every, start_spacing=2 * every, spin_up=3 * every,
        analyses=toys.Displacement(amplitude=0.0),
    )  # fmt: skip
    truth = {step: moment.truth for step, moment in moments(one).items()}
    for number in range(one.starts):
        run = forecast(one, "A", toys.moment_of_start(one, number))
        valid = [number * one.start_steps + lead * one.lead_steps for lead in range(one.leads)]
        expected = np.stack([truth[step] for step in valid])
        assert run == pytest.approx(np.repeat(expected[:, None], 4, axis=1), rel=1e-9, abs=1e-9)


def test_versions_start_from_the_same_members():
    """A coarser channel starts from what its truncation keeps of the finer one's members."""
    fine, coarse = (
        toys.system("two-layer-channel", **{**CHANNEL, "zonal_waves": waves}) for waves in (4, 3)
    )
    how = toys.Displacement(
        amplitude=1.0, norm="total-energy", method="correlated", options={"length": 8e5}
    )
    one = experiment(
        fine, spin_up=10.0, analyses=how,
        versions={"A": toys.ModelVersion(fine), "B": toys.ModelVersion(coarse)},
    )  # fmt: skip
    moment = toys.moment_of_start(one, 0)
    first = {name: forecast(one, name, moment)[0] for name in "AB"}
    kept = [fine.variables.index(name) for name in coarse.variables]
    assert np.array_equal(first["B"], first["A"][:, kept])


def test_one_scale_forecasts_a_truth_of_two():
    truth = toys.system("lorenz-96-two-scales", sites=8, fast_sites=4)
    model = toys.system("lorenz-96", sites=8, forcing=9.0)
    one = experiment(truth, model, spin_up=1.0)
    moment = toys.moment_of_start(one, 1)
    run = forecast(one, "A", moment)
    assert np.array_equal(run[0], toys.initial_members(one, moment)[:, :8])
    # Each advances by a step of its own.
    assert one.steps_per_lead("A") == (0.05, 5)
    assert one.lead_steps == 50


def test_bred_perturbations_grow_where_noise_decays():
    """White noise first changes at the mean of the diagonal of the Jacobian, -1 for this ring.

    Bred vectors have turned towards what grows, at 1.685 in the mean (Lorenz and Emanuel 1998).
    """
    growth = []
    for method, options in (("gaussian", {}), ("bred-vectors", {"cycle": 0.25, "cycles": 8})):
        how = toys.Displacement(amplitude=1e-6, method=method, options=options)
        one = experiment(
            starts=12, leads=2, dt=0.005, lead_spacing=0.005, control=True, members=6,
            analyses=toys.Displacement(amplitude=1e-6), perturbations=how,
        )  # fmt: skip
        rates = []
        for number in range(one.starts):
            run = forecast(one, "A", toys.moment_of_start(one, number))
            distance = np.linalg.norm(run[:, 1:] - run[:, :1], axis=-1)
            assert distance[0] == pytest.approx(1e-6, rel=1e-6)
            rates.append(np.log(distance[1] / distance[0]) / one.lead_spacing)
        growth.append(np.mean(rates))
    assert growth[0] == pytest.approx(-1.0, abs=0.3)
    assert growth[1] == pytest.approx(1.685, abs=0.8)


def test_lagged_members_are_runs_from_earlier_analyses():
    how = toys.Displacement(amplitude=None, method="lagged", options={"ages": [0.25, 0.5, 0.75]})
    one = experiment("lorenz-63", members=4, control=True, perturbations=how)
    moment = toys.moment_of_start(one, 2)
    members = toys.initial_members(one, moment)
    history = moments(one)
    for member, age in enumerate([0.25, 0.5, 0.75], start=1):
        steps = round(age / one.step)
        earlier = toys.analysis_at(one, history[moment.step - steps])
        expected = toys.integrate(one.system, earlier, steps, every=steps).states[-1]
        assert members[member] == pytest.approx(expected, rel=1e-12)


def peak(consume):
    tracemalloc.start()
    try:
        consume()
        return tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()


def test_memory_does_not_grow_with_the_length_of_a_run():
    def run(leads):
        one = experiment(leads=leads, members=50)
        moment = toys.moment_of_start(one, 0)
        for _ in toys.run_forecast(one, "A", moment):
            pass

    def truth(starts):
        how = toys.Displacement(
            amplitude=0.1, method="bred-vectors", options={"cycle": 0.5, "cycles": 2}
        )
        for _ in toys.follow_truth(experiment(starts=starts, perturbations=how)):
            pass

    for consume in (run, truth):
        consume(2)  # what is loaded or remembered at the first use
        short, long = (peak(partial(consume, size)) for size in (20, 200))
        assert long < 1.1 * short + 20_000, consume.__name__


def test_an_unstable_step_is_told_with_its_start_time_and_step():
    one = experiment(dt=0.05)
    wild = replace(
        one,
        lead_spacing=1.0,
        start_spacing=1.0,
        versions={"B": toys.ModelVersion(one.system, dt=0.5)},
    )
    moment = toys.moment_of_start(wild, 1)
    with pytest.raises(ArgumentError, match=r"version B, start 1.*not finite at time .*\(step "):
        forecast(wild, "B", moment)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"analyses": toys.Displacement(amplitude=-0.1)}, ("amplitude", "at least zero", "-0.1")),
        ({"analyses": toys.Displacement(amplitude=0.1, method="gausian")}, ("'gaussian'",)),
        ({"analyses": toys.Displacement(amplitude=0.1, norm="energy")}, ("norm", "euclidean")),
        ({"analyses": toys.Displacement(amplitude=None)}, ("amplitude", "size of their own")),
        ({"start_spacing": 0.3}, ("start_spacing", "multiple of lead_spacing 0.25", "0.3")),
        ({"lead_spacing": 0.26, "start_spacing": 0.52}, ("lead_spacing", "time step 0.05")),
        ({"members": 1}, ("members", "at least 2")),
        ({"versions": {}}, ("versions", "at least one")),
        ({"versions": {"B": toys.ModelVersion(toys.system("lorenz-63"))}}, ("version B",)),
        ({"hours_per_time_unit": -1.0}, ("hours_per_time_unit", "above zero")),
        (
            {"perturbations": toys.Displacement(amplitude=0.1, paired=True), "control": True},
            ("even number", "3"),
        ),
        (
            {"perturbations": toys.Displacement(amplitude=0.1, method="lagged")},
            ("ages", "a list of times"),
        ),
        (
            {
                "perturbations": toys.Displacement(
                    amplitude=0.1, method="bred-vectors", options={"past": [0.0]}
                )
            },
            ("option past", "left to the experiment"),
        ),
    ],
)
def test_refused(changes, words):
    with pytest.raises(ArgumentError) as refusal:
        experiment(**changes)
    for word in words:
        assert word in str(refusal.value)


def test_more_singular_vectors_than_variables():
    how = toys.Displacement(amplitude=0.1, method="singular-vectors", options={"window": 0.25})
    one = experiment("lorenz-63", members=5, perturbations=how)
    with pytest.raises(ArgumentError, match="at most the 3 variables of lorenz-63; found 5"):
        toys.initial_members(one, toys.moment_of_start(one, 0))


def test_a_real_clock_cannot_be_renamed():
    channel = toys.system("two-layer-channel", **CHANNEL)
    with pytest.raises(ArgumentError, match="hours_per_time_unit: expected 24"):
        experiment(channel, hours_per_time_unit=12.0)
    assert experiment(hours_per_time_unit=None).hours == 120.0  # Lorenz 1996: five days


def test_fields_on_a_grid_are_the_channel_between_its_points():
    """On the grid of the system itself both ways must agree."""
    channel = toys.system("two-layer-channel", **CHANNEL)
    states = toys.settled(channel)[None]
    plan = toys.FieldPlan(channel, ("northward_wind_lower",), (16, 32))
    (field,) = plan.fields(channel, states)
    assert field.values.shape == (1, 16, 32)
    latitude, longitude = (plan.coordinates()[name][1] for name in ("latitude", "longitude"))
    found = channel.evaluate(states, latitude, longitude)["northward_wind_lower"]
    assert np.array_equal(field.values, found)
    with pytest.raises(ArgumentError, match="did you mean 'northward_wind_lower'"):
        toys.FieldPlan(channel, ("northward_wind_lowr",))
    with pytest.raises(ArgumentError, match="grid: expected a system with fields between"):
        toys.FieldPlan(toys.system("lorenz-96"), (), (4, 8))
