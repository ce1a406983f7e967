"""Gravitating bodies against Kepler's closed form, published orbits and conservation laws."""

import numpy as np
import pytest
import xarray as xr
from cf_units import Unit
from scipy.optimize import brentq
from scipy.stats import t as student

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError

PERIOD = 2.0 * np.pi
GRAVITATING = ("two-body", "figure-eight", "compact-planets")


@pytest.fixture(params=GRAVITATING)
def system(request):
    return toys.system(request.param)


def on_the_ellipse(eccentricity, time):
    """Second body seen from the first (4,): Kepler's equation E - e sin E = t, solved by scipy."""
    anomaly = brentq(lambda E: E - eccentricity * np.sin(E) - time, -1.0, time + 2.0, xtol=1e-14)
    root, sine, cosine = np.sqrt(1 - eccentricity**2), np.sin(anomaly), np.cos(anomaly)
    place = np.array([cosine - eccentricity, root * sine])
    return np.concatenate([place, np.array([-sine, root * cosine]) / (1 - eccentricity * cosine)])


def relative(state):
    return state[..., 1::2] - state[..., ::2]


@pytest.mark.parametrize(("eccentricity", "share"), [(0.0, 0.5), (0.3, 0.25), (0.8, 0.01)])
def test_adaptive_runs_follow_kepler(eccentricity, share):
    pair = toys.TwoBody(eccentricity=eccentricity, share=share)
    times = np.array([0.0, 0.4, 2.0, 3.3, 6.0, 14.7])
    exact = np.array([on_the_ellipse(eccentricity, time) for time in times])
    run = toys.integrate_adaptively(pair, pair.default_state(), times, rtol=1e-12)
    assert relative(run.states) == pytest.approx(exact, abs=1e-9)


@pytest.mark.parametrize(("eccentricity", "share"), [(0.0, 0.5), (0.3, 0.25), (0.5, 0.01)])
def test_symplectic_runs_follow_kepler(eccentricity, share):
    pair = toys.TwoBody(eccentricity=eccentricity, share=share)
    run = toys.integrate(pair, pair.default_state(), 1500, 0.01, every=100)
    exact = np.array([on_the_ellipse(eccentricity, time) for time in run.times])
    assert relative(run.states) == pytest.approx(exact, abs=1e-7)
    for part in pair.centre_of_mass(run.states):
        assert np.abs(part).max() < 1e-13


def test_energy_and_angular_momentum_of_an_ellipse_in_closed_form():
    # Reduced mass mu = share (1 - share), a = 1: E = -mu / 2, L = mu sqrt(1 - e^2).
    pair = toys.TwoBody(eccentricity=0.6, share=0.2)
    run = toys.integrate_adaptively(pair, pair.default_state(), [0.0, 1.0, 3.0])
    assert pair.energy(run.states) == pytest.approx(np.full(3, -0.08), abs=1e-9)
    assert pair.angular_momentum(run.states) == pytest.approx(np.full((3, 1), 0.128), abs=1e-9)


def test_errors_of_two_bodies_grow_in_proportion_to_time():
    pair = toys.TwoBody()
    start = toys.perturb(pair, pair.default_state(), 20, amplitude=1e-7, seed=3)
    a_turn = round(PERIOD / pair.step)
    run = toys.integrate(pair, start, 24 * a_turn, PERIOD / a_turn, every=a_turn)
    spread = np.sqrt(relative(run.states).var(axis=1, ddof=1).sum(axis=-1))
    turns = np.arange(5, 25)
    power, _ = np.polyfit(np.log(turns), np.log(spread[turns]), 1)
    assert power == pytest.approx(1.0, abs=0.02)
    # By Kepler's third law alone: da = 2 a^2 (v dv + r dr / r^3), dM = -3/2 da t, v at the start.
    separation = relative(start)
    radius = np.linalg.norm(separation[:, :2], axis=-1)
    axes = 1.0 / (2.0 / radius - (separation[:, 2:] ** 2).sum(axis=-1))
    flow = np.linalg.norm(relative(pair.tendency(pair.default_state())))
    expected = 1.5 * axes.std(ddof=1) * PERIOD * flow
    slope = np.polyfit(turns, spread[turns], 1)[0]
    assert slope == pytest.approx(expected, rel=0.01)


def test_the_figure_eight_closes_to_its_published_digits():
    # Chenciner and Montgomery 2000; eight digits of the start, five of the period (from memory).
    eight = toys.FigureEight()
    start = eight.default_state()
    end = toys.integrate_adaptively(eight, start, [6.32591398]).states[0]
    assert end == pytest.approx(start, abs=1e-6)
    third = toys.integrate_adaptively(eight, start, [6.32591398 / 3.0]).states[0]
    # After a third of the period the bodies have changed places, in one direction or the other.
    places = third[:6].reshape(2, 3), start[:6].reshape(2, 3)
    shifts = [np.abs(places[0] - np.roll(places[1], n, axis=1)).max() for n in (0, 1, 2)]
    assert min(shifts[1:]) < 1e-6 < 0.1 < shifts[0]
    assert eight.energy(start) == pytest.approx(-1.287146, abs=1e-5)
    assert eight.angular_momentum(start) == pytest.approx([0.0], abs=1e-8)


def test_small_errors_of_the_figure_eight_stay_small():
    eight = toys.FigureEight()
    start = toys.perturb(eight, eight.default_state(), 5, amplitude=1e-5, seed=1)
    end = toys.integrate(eight, start, 1260, 10 * 6.32591398 / 1260, every=1260).states[-1]
    assert np.linalg.norm(end - start, axis=-1).max() < 1e-2


def test_symplectic_and_adaptive_runs_agree(system):
    start = system.default_state()
    fine = toys.integrate(system, start, 800, system.step / 8, every=800).states[-1]
    adaptive = toys.integrate_adaptively(system, start, [100 * system.step], rtol=1e-12)
    assert adaptive.states[0] == pytest.approx(fine, abs=3e-8 * np.abs(start).max())


def test_acceleration_is_the_slope_of_the_potential():
    # Softened and not, two dimensions and three, unequal masses.
    for system in (
        toys.TwoBody(share=0.1, softening=0.4),
        toys.FigureEight(softening=0.3),
        toys.CompactPlanets(planets=2, softening=0.02),
    ):
        state = toys.perturb(system, system.default_state(), 1, amplitude=0.01, seed=6)[0]
        half, small = system.size // 2, 1e-4 * np.abs(state).max()
        masses = np.tile(system.masses, system.dimensions)
        slope = [
            (system.energy(state + small * unit) - system.energy(state - small * unit)) / small / 2
            for unit in np.eye(system.size)[:half]
        ]
        force = masses * system.acceleration(state[:half])
        assert force == pytest.approx(-np.array(slope), abs=1e-6 * np.abs(force).max())


def test_planets_keep_keplers_third_law_and_their_spacing():
    planets = toys.CompactPlanets(planets=4, planet_mass=3.0, spacing=7.0)
    # One year for one au round one solar mass, a year of Gauss's constant: 2 pi / k days.
    year = 2 * np.pi / 0.01720209895
    mass = planets.masses[0] + planets.masses[1]
    assert planets.periods == pytest.approx(year * np.sqrt(planets.axes**3 / mass), rel=1e-12)
    hill = (2 * planets.masses[1] / (3 * planets.masses[0])) ** (1 / 3)
    means = (planets.axes[1:] + planets.axes[:-1]) / 2
    assert np.diff(planets.axes) / (hill * means) == pytest.approx(np.full(3, 7.0), rel=1e-12)


def test_planets_start_on_the_ellipses_that_were_asked_for():
    planets = toys.CompactPlanets(planets=4, eccentricity=0.07, inclination=2.5)
    r, v = (part.reshape(3, -1) for part in planets.split(planets.default_state()))
    r, v = (r[:, 1:] - r[:, :1]).T, (v[:, 1:] - v[:, :1]).T
    # Two-body elements of each planet about the star (energy, angular momentum, Laplace vector).
    mu = 0.01720209895**2 * (planets.masses[0] + planets.masses[1])
    distance = np.linalg.norm(r, axis=1)
    axes = 1.0 / (2.0 / distance - (v**2).sum(axis=1) / mu)
    turning = np.cross(r, v)
    towards = np.cross(v, turning) / mu - r / distance[:, None]
    tilt = np.degrees(np.arccos(turning[:, 2] / np.linalg.norm(turning, axis=1)))
    assert axes == pytest.approx(planets.axes, rel=1e-12)
    assert np.linalg.norm(towards, axis=1) == pytest.approx(np.full(4, 0.07), rel=1e-10)
    assert tilt == pytest.approx(np.full(4, 2.5), rel=1e-10)
    for part in planets.centre_of_mass(planets.default_state()):
        assert np.abs(part).max() < 1e-15


@pytest.mark.slow
def test_planets_are_chaotic_and_stay_together():
    """Linear growth, the most that planets on quiet orbits show, adds ln 2 when time doubles."""
    planets = toys.CompactPlanets()
    members, turns = 12, 500
    start = toys.perturb(planets, planets.default_state(), members, amplitude=1e-6, seed=4)
    states = start
    vectors = np.random.default_rng(5).standard_normal(states.shape)
    a_turn = round(planets.periods[0] / planets.step)
    nearest, farthest, growth, halfway = 1.0, 0.0, np.zeros(members), None
    for turn in range(2 * turns):
        for _ in range(a_turn):
            states, vectors = toys.tangent_step(planets, states, vectors, planets.step)
        length = np.linalg.norm(vectors, axis=-1)
        growth, vectors = growth + np.log(length), vectors / length[:, None]
        halfway = growth if turn + 1 == turns else halfway
        places = planets.split(states)[0].reshape(members, 3, -1)
        apart = np.linalg.norm(places[..., :, None] - places[..., None, :], axis=1)
        nearest = min(nearest, apart[apart > 0.0].min())
        farthest = max(farthest, apart.max())
    second = growth - halfway
    half_width = student.ppf(0.975, members - 1) * second.std(ddof=1) / np.sqrt(members)
    assert second.mean() - half_width > 4.0 * np.log(2.0)
    assert nearest > 0.005
    assert farthest < 0.14
    assert np.abs(planets.energy(states) / planets.energy(start) - 1.0).max() < 2e-6


def test_planets_alone_round_their_star_stay_on_their_ellipse():
    lone = toys.CompactPlanets(planets=1)
    start = lone.default_state()
    end = toys.integrate_adaptively(lone, start, lone.periods, rtol=1e-12).states[0]
    assert end == pytest.approx(start, abs=1e-9)


def test_a_spacing_beyond_any_orbit_is_refused():
    with pytest.raises(ArgumentError, match="compact-planets: spacing: expected below 9") as told:
        toys.CompactPlanets(planet_mass=3000.0, star_mass=0.6, spacing=12.0)
    assert told.value.remedy == "take a smaller spacing, or planets of less mass"


def test_bodies_that_meet_are_told():
    pair = toys.TwoBody()
    with pytest.raises(ArgumentError, match=r"integrate\(two-body\).*not finite at time"):
        toys.integrate(pair, np.zeros(8), 3)


def test_fields_have_units_that_udunits_knows(system):
    start = toys.perturb(system, system.default_state(), 3, amplitude=1e-6, seed=1)
    for on_grid in (True, False):
        run = toys.run_ensemble(system, start, steps=4, every=2, on_grid=on_grid)
        assert isinstance(run, xr.Dataset)
        assert list(run.data_vars) == list(system.variables)
        place, speed = (Unit(run[name].attrs["units"]) for name in ("x1", "vx1"))
        clock = Unit(system.time_units)
        assert speed == place / clock
    norm = system.norms()["euclidean"]
    assert norm.units == system.state_units
    assert "velocities counted by the way they make in one unit of time" in norm.meaning
    d = np.random.default_rng(2).standard_normal(system.size)
    bodies = len(system.masses)
    assert system.norms()["area-weighted"].length(d) == pytest.approx(
        np.linalg.norm(d) / np.sqrt(bodies), rel=1e-12
    )
