"""The two-layer channel against conservation laws, closed forms and independent solvers."""

import numpy as np
import pytest
from scipy import integrate as quadrature
from scipy import linalg

from ensemble_horizon import toys

FREE = {"relaxation_rate": 0.0, "drag_rate": 0.0, "diffusion_rate": 0.0}
DAY = 86400.0


def free_channel(waves=1, modes=2, **more):
    return toys.TwoLayerChannel(zonal_waves=waves, meridional_modes=modes, **FREE, **more)


def lively(channel, seed=1):
    """A state with 10 to 20 m/s in jets and waves of both layers."""
    k, l = channel.basis.wavenumbers()  # noqa: E741
    speed = np.random.default_rng(seed).standard_normal(channel.size) * 10.0
    return speed / np.tile(np.sqrt(k**2 + l**2), 2) / np.sqrt(channel.basis.count)


def zonal_flow(channel, upper, lower=0.0):
    """A state of pure zonal flow, ``upper`` and ``lower`` the peaks of a sine across (m/s)."""
    state = np.zeros((2, channel.basis.count))
    state[:, 0] = np.array([upper, lower]) * channel.width / np.pi / np.sqrt(2.0)
    return state.ravel()


def test_smallest_form_has_six_modes_a_layer():
    # Charney and Straus 1980: two zonal and four wave modes a layer.
    assert toys.system("two-layer-channel").basis.count == 6
    assert toys.system("two-layer-channel").size == 12


@pytest.mark.parametrize(("waves", "modes"), [(1, 2), (3, 4), (6, 6)])
def test_truncation_itself_conserves(waves, modes):
    """The change of energy and potential enstrophy vanishes term by term, before any time step."""
    channel = free_channel(waves, modes)
    for seed in range(3):
        state = lively(channel, seed)
        change = channel.tendency(state)
        # Both are quadratic: the derivative is (f(x + c) - f(x - c)) / 2, exactly.
        for invariant in (channel.energy, channel.potential_enstrophy):
            rate = 0.5 * (invariant(state + change) - invariant(state - change))
            scale = np.sqrt(invariant(state) * invariant(change))
            assert abs(rate) < 1e-12 * scale


@pytest.mark.parametrize(("waves", "modes"), [(1, 2), (4, 4)])
def test_time_step_conserves_to_its_order(waves, modes):
    # Phillips 1954: without forcing and friction both are constant. Runge-Kutta of order four
    # loses them at order four or better (five for a pure oscillation).
    # Taken over several states, for the drift of a single one can pass through zero.
    channel = free_channel(waves, modes)
    states = np.stack([lively(channel, seed) for seed in range(8)])
    drift = []
    for steps in (48, 96, 192):
        end = toys.integrate(channel, states, steps, 3.0 / steps, every=steps).states[-1]
        drift.append(
            [
                np.sqrt(np.mean((invariant(end) / invariant(states) - 1) ** 2))
                for invariant in (channel.energy, channel.potential_enstrophy)
            ]
        )
    orders = np.log2(np.array(drift[:-1]) / np.array(drift[1:]))
    assert np.all(orders > 3.7)
    assert np.all(np.array(drift[-1]) < 1e-7)


def test_energy_and_enstrophy_are_what_they_say():
    """Compare with sums over a fine grid of finite differences."""
    channel = free_channel(2, 3)
    state = lively(channel)
    y = np.linspace(0, channel.width, 1201)
    x = channel.length * np.arange(600) / 600
    points = channel.basis.points(x, y)
    psi = channel.basis.values(state.reshape(2, -1), points)  # x, layer, y
    d_y = np.gradient(psi, y, axis=-1, edge_order=2)
    d_x = (np.roll(psi, -1, axis=0) - np.roll(psi, 1, axis=0)) / (2 * (x[1] - x[0]))
    kinetic = np.trapezoid((d_x**2 + d_y**2).mean(axis=0).mean(axis=0), y) / channel.width / 2
    shear = psi[:, 0] - psi[:, 1]
    potential = channel.coupling * np.trapezoid((shear**2).mean(axis=0), y) / channel.width / 4
    assert channel.energy(state) == pytest.approx(kinetic + potential, rel=1e-4)
    q = channel.basis.values(channel.vorticity(state), points)
    enstrophy = np.trapezoid((q**2).mean(axis=0).mean(axis=0), y) / channel.width / 2
    assert channel.potential_enstrophy(state) == pytest.approx(enstrophy, rel=1e-4)


def test_advection_against_adaptive_quadrature():
    """Project J(psi, q) on each basis function with scipy's adaptive rule instead of ours."""
    channel = free_channel(1, 2)
    length, width = channel.length, channel.width
    k, l = 2 * np.pi / length, np.pi / width  # noqa: E741
    psi = lively(channel).reshape(2, -1)[0]
    q = channel.vorticity(lively(channel))[0]

    def parts(c, x, y):
        a, b = np.array([1, 2]) * l, k
        wave = c[2:4] * 2 * np.cos(b * x) + c[4:6] * 2 * np.sin(b * x)
        turn = b * (-c[2:4] * 2 * np.sin(b * x) + c[4:6] * 2 * np.cos(b * x))
        d_x = np.sum(turn * np.sin(a * y))
        d_y = np.sum(-np.sqrt(2) * a * c[:2] * np.sin(a * y) + wave * a * np.cos(a * y))
        return d_x, d_y

    def determinant(x, y):
        (px, py), (qx, qy) = parts(psi, x, y), parts(q, x, y)
        return px * qy - py * qx

    tests = [
        lambda x, y: np.sqrt(2) * np.cos(l * y),
        lambda x, y: 2 * np.cos(k * x) * np.sin(2 * l * y),
        lambda x, y: 2 * np.sin(k * x) * np.sin(l * y),
    ]
    expected = [
        quadrature.dblquad(
            lambda y, x, test=test: (
                determinant(x * length, y * width) * test(x * length, y * width)
            ),
            0,
            1,
            0,
            1,
            epsabs=1e-18,
            epsrel=1e-9,
        )[0]
        for test in tests
    ]
    points, weights = channel.basis.quadrature()
    g, h = channel.basis.gradient(psi, points), channel.basis.gradient(q, points)
    found = channel.basis.project(g.x * h.y - g.y * h.x, points, weights)
    assert found[[0, 3, 4]] == pytest.approx(expected, rel=1e-7)


def test_rossby_waves_have_the_textbook_frequencies():
    # Barotropic -beta k / K^2, baroclinic -beta k / (K^2 + Rd^-2): Phillips 1954; Pedlosky 1987,
    # Geophysical Fluid Dynamics, chapter 6 (from memory).
    channel = free_channel(3, 2)
    k, l = channel.basis.wavenumbers()  # noqa: E741
    square = k**2 + l**2
    omega = np.concatenate(
        [channel.beta * k / square, channel.beta * k / (square + channel.deformation_radius**-2)]
    )
    found = linalg.eigvals(channel.jacobian(np.zeros(channel.size)))
    assert np.abs(found.real).max() < 1e-12
    # Cosine and sine of a wave share a pair +-omega; a zonal mode has frequency zero.
    expected = np.sort(np.abs(omega)) * DAY
    assert np.sort(np.abs(found.imag)) == pytest.approx(expected, abs=1e-9)


def test_forcing_and_friction_act_at_their_closed_form_rates():
    """For a zonal mode: relaxation wears the shear down at r / (1 + (K Rd)^2) exactly."""
    channel = toys.TwoLayerChannel(relaxation_rate=0.3, drag_rate=0.0, diffusion_rate=0.0)
    l = np.pi / channel.width  # noqa: E741
    rates = linalg.eigvals(channel.jacobian(np.zeros(12))).real
    expected = -0.3 / (1 + (l * channel.deformation_radius) ** 2)
    assert np.abs(rates - expected).min() < 1e-12
    state = np.zeros((2, 6))
    state[0] = channel.equilibrium
    assert channel.tendency(state.ravel()) == pytest.approx(np.zeros(12), abs=1e-3)

    # Without coupling of the layers to speak of, drag wears the lower one down at its own rate.
    loose = toys.TwoLayerChannel(
        relaxation_rate=0.0, drag_rate=0.25, diffusion_rate=0.0, deformation_radius=1e12
    )
    lower = np.zeros((2, 6))
    lower[1, :2] = [1e6, -2e6]
    assert loose.tendency(lower.ravel())[6:8] == pytest.approx([-2.5e5, 5e5], rel=1e-9)

    # Diffusion acts on potential vorticity, at the given rate where the scale is shortest.
    thick = toys.TwoLayerChannel(relaxation_rate=0.0, drag_rate=0.0, diffusion_rate=3.0)
    rates = linalg.eigvals(thick.jacobian(np.zeros(12))).real
    assert rates.min() == pytest.approx(-3.0, rel=1e-9)


def growth_of_phillips_problem(channel, upper, lower, levels=240):
    """Fastest growth (day-1) of wave number one on U = peak * sin(pi y / width), by differences.

    q_t + U q_x + (beta - U'' +- F (U1 - U2)) psi_x = 0 in each layer, psi = 0 at the walls.
    """
    y = channel.width * np.arange(1, levels) / levels
    step = channel.width / levels
    flow = np.outer([upper, lower], np.sin(np.pi * y / channel.width))
    curvature = -flow * (np.pi / channel.width) ** 2
    across = channel.coupling * (flow[0] - flow[1])
    gradient = channel.beta - curvature + np.stack([across, -across])
    k = 2 * np.pi / channel.length
    second = (
        np.diag(np.full(levels - 2, 1.0), 1)
        + np.diag(np.full(levels - 2, 1.0), -1)
        - 2 * np.eye(levels - 1)
    ) / step**2
    eye = np.eye(levels - 1)
    laplacian = second - (k**2 + channel.coupling) * eye
    vorticity = np.block([[laplacian, channel.coupling * eye], [channel.coupling * eye, laplacian]])
    advection = -1j * k * (np.diag(flow.ravel()) @ vorticity + np.diag(gradient.ravel()))
    return linalg.eigvals(linalg.solve(vorticity, advection)).real.max() * DAY


@pytest.mark.parametrize(("upper", "lower"), [(30.0, -10.0), (20.0, -20.0)])
def test_normal_modes_grow_as_the_finite_difference_problem_says(upper, lower):
    # Eastward above and westward below, so that the mode's steering level lies between the layers
    # and not at the walls, where sines converge slowly.
    channel = free_channel(1, 30, length=4.0e6)
    exact = np.linalg.eigvals(channel.jacobian(zonal_flow(channel, upper, lower)))
    assert exact.real.max() > 0.2
    assert exact.real.max() == pytest.approx(
        growth_of_phillips_problem(channel, upper, lower), rel=2e-3
    )


@pytest.mark.parametrize(("waves", "modes"), [(1, 2), (2, 6)])
def test_small_normal_mode_grows_at_its_eigenvalue(waves, modes):
    channel = free_channel(waves, modes, length=4.0e6)
    base = zonal_flow(channel, 40.0)
    assert np.abs(channel.tendency(base)).max() < 1e-6 * np.abs(base).max()
    values, vectors = np.linalg.eig(channel.jacobian(base))
    fastest = np.argmax(values.real)
    rate, mode = values[fastest], vectors[:, fastest]
    assert rate.real > 0.2
    run = toys.integrate(channel, base + 1.0 * mode.real, 240, 1 / 48, every=48)
    moved = run.states - base
    expected = (np.exp(rate * run.times)[:, None] * mode).real
    assert moved == pytest.approx(expected, abs=2e-3 * np.abs(expected[-1]).max())


def test_wind_is_the_slope_of_the_streamfunction():
    channel = free_channel(3, 4)
    state = lively(channel)
    radius = 6.371e6
    latitude = channel.latitude + np.array([-5.0, 0.0, 7.0])
    longitude = np.array([3.0, 20.0])
    small = 1e-3
    here = channel.evaluate(state, latitude, longitude)
    for layer in ("upper", "lower"):
        name = f"streamfunction_{layer}"
        north = channel.evaluate(state, latitude + small, longitude)[name]
        south = channel.evaluate(state, latitude - small, longitude)[name]
        east = channel.evaluate(state, latitude, longitude + small)[name]
        west = channel.evaluate(state, latitude, longitude - small)[name]
        metres = 2 * np.radians(small) * radius
        assert here[f"eastward_wind_{layer}"] == pytest.approx(-(north - south) / metres, rel=1e-5)
        parallel = metres * np.cos(np.radians(channel.latitude))
        assert here[f"northward_wind_{layer}"] == pytest.approx((east - west) / parallel, rel=1e-5)


def test_no_flow_through_the_walls_and_periodic_along():
    channel = free_channel(3, 4)
    half = np.degrees(0.5 * channel.width / 6.371e6)
    walls = channel.latitude + np.array([-half, half])
    around = np.degrees(channel.length / (6.371e6 * np.cos(np.radians(channel.latitude))))
    found = channel.evaluate(lively(channel), walls, [1.0, 9.0, 1.0 + around])
    for layer in ("upper", "lower"):
        assert np.abs(found[f"northward_wind_{layer}"]).max() < 1e-9
        psi = found[f"streamfunction_{layer}"]
        assert psi[:, 0] == pytest.approx(psi[:, 1], rel=1e-9)
    inside = channel.evaluate(lively(channel), [channel.latitude], [1.0, 1.0 + around])
    assert inside["eastward_wind_upper"][0, 0] == pytest.approx(
        inside["eastward_wind_upper"][0, 1], rel=1e-9
    )


def test_equilibrium_jet_has_its_shape():
    channel = toys.TwoLayerChannel(meridional_modes=20, shear=50.0, jet_width=8e5)
    state = np.zeros((2, channel.basis.count))
    state[0] = channel.equilibrium
    y = np.array([0.0, 4e5, 8e5, -1.2e6])
    latitude = channel.latitude + np.degrees(y / 6.371e6)
    flow = channel.evaluate(state.ravel(), latitude, [0.0])["eastward_wind_upper"][:, 0]
    assert flow == pytest.approx(50.0 / np.cosh(y / 8e5) ** 2, abs=0.5)
