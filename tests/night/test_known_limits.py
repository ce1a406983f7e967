"""The loop closed: archives of systems whose growth is known, read and fitted like real runs."""

import csv

import numpy as np
import pytest
import xarray as xr
from click.testing import CliRunner

import ensemble_horizon as eh
from ensemble_horizon.cli.main import group
from ensemble_horizon.night.rehearsal import rehearse
from ensemble_horizon.settings.rehearsal import rehearsal_from

RING_HOURS = 120.0  # in a unit of time of Lorenz's ring of 1996
SMALL = 1e-10


def archive(folder, system, **tables):
    """Make an archive with float64 fields and return where it stands."""
    given = {
        "system": {"name": system},
        "archive": {"folder": str(folder), "precision": "float64"},
        "engine": {"workers": 1},
    }
    return rehearse(rehearsal_from(given | tables)).folder


def forecast(starts, start_spacing, leads, lead_spacing, members=8):
    return {
        "starts": starts, "start_spacing": start_spacing, "leads": leads,
        "lead_spacing": lead_spacing, "members": members,
    }  # fmt: skip


def spreads(folder, names, hours):
    """Spread (start, lead) over all ``names`` and their cells together, leads in model time."""
    runs = eh.open_runs(str(folder / "A" / "*.nc"))
    square = sum(eh.spread(runs[name]) ** 2 for name in names)
    curve = np.sqrt(square.mean([dim for dim in square.dims if dim not in ("start", "lead")]))
    curve = curve.compute().assign_coords(lead=curve.lead / hours)
    curve.lead.attrs["units"] = "1"
    return curve.assign_attrs(units="1")


BREEDING = {
    "analyses": {"amplitude": SMALL},
    # Bred until they point to what grows, so that the first leads count, too; in pairs, lest all
    # members of a start point to the same side.
    "perturbations": {
        "amplitude": SMALL,
        "paired": True,
        "method": "bred-vectors",
        "options": {"cycle": 0.5, "cycles": 20},
    },
}


@pytest.mark.slow
@pytest.mark.parametrize(
    ("system", "names", "hours", "times", "published"),
    [
        # Sprott, Chaos and Time-Series Analysis; Lorenz and Emanuel 1998 (both from memory)
        ("lorenz-63", ["x", "y", "z"], 24.0, forecast(60, 15.0, 61, 0.25), 0.906),
        ("lorenz-96", ["x"], RING_HOURS, forecast(60, 10.5, 71, 0.15), 1.685),
    ],
)
def test_growth_and_horizon_of_chaotic_systems(tmp_path, system, names, hours, times, published):
    folder = archive(tmp_path / "archive", system, forecast=times, **BREEDING)
    curve = spreads(folder, names, hours)
    # Starts follow one another without overlap, so that they count as independent. Up to 1000 times
    # the first spread growth is far from saturation; so it is up to the lead 7.5 everywhere.
    first = float(curve.isel(lead=0).max())
    low, high = (eh.horizon(curve, tolerance=factor * first) for factor in (30, 1000))
    assert (low.status == eh.Status.reached).all()
    assert (high.status == eh.Status.reached).all()
    early = curve.sel(lead=slice(None, 7.5))
    rates = eh.fit_growth(early, law="exponential", scale="log").growth_rate.values
    doubt = rates.std(ddof=1) / np.sqrt(rates.size)
    assert doubt < 0.05 * published
    assert rates.mean() == pytest.approx(published, abs=3 * doubt)
    # One horizon comes early where spread swells and shrinks on the way; the time from one to the
    # next does not, in the mean (renewal theory).
    between = high.horizon.values - low.horizon.values
    doubt = between.std(ddof=1) / np.sqrt(between.size)
    assert between.mean() == pytest.approx(np.log(1000 / 30) / published, abs=3 * doubt)


@pytest.mark.slow
def test_a_smaller_error_buys_the_time_that_reach_says(tmp_path):
    """Far below saturation k times smaller errors buy ln k / rate, with the published rate."""
    factor, curves = 4.0, []
    for size in (SMALL, SMALL / factor):
        tables = {key: {**table, "amplitude": size} for key, table in BREEDING.items()}
        times = forecast(40, 7.5, 51, 0.15)
        folder = archive(tmp_path / f"{size:g}", "lorenz-96", forecast=times, **tables)
        curves.append(spreads(folder, ["x"], RING_HOURS))
    tolerance = 100 * float(curves[0].isel(lead=0).max())
    first, second = (eh.horizon(curve, tolerance=tolerance).horizon.values for curve in curves)
    gain = second - first
    doubt = gain.std(ddof=1) / np.sqrt(gain.size)
    assert gain.mean() == pytest.approx(np.log(factor) / 1.685, abs=3 * doubt)
    fit = eh.fit_growth(curves[0], law="exponential", scale="log")
    said = eh.reach(fit, tolerance=tolerance, error_factor=factor).gained.values.ravel()
    doubt += said.std(ddof=1) / np.sqrt(said.size)
    assert gain.mean() == pytest.approx(said.mean(), abs=3 * doubt)


@pytest.mark.slow
def test_reach_from_the_command_agrees_with_a_second_archive(tmp_path):
    """Up to half of saturation, within the intervals that `estimate` gives both horizons.

    The intervals hold the law for true. With other starts of the same system (climate = 100) the
    largest tolerance fell outside them by 4 h of 102: near half of saturation the law's own error
    is as large as the noise of 60 starts.
    """
    factor, tolerances, found = 4.0, (0.5, 1.0, 1.8), []
    for size in (0.1, 0.1 / factor):
        folder = archive(
            tmp_path / f"{size:g}", "lorenz-96", truth={"climate": 0.0},
            analyses={"amplitude": size, "norm": "area-weighted"},
            forecast=forecast(60, 1.0, 41, 0.2, members=10),
        )  # fmt: skip
        settings = folder / "A.toml"
        more = "".join(f"{{ tolerance = {item} }}, " for item in tolerances)
        text = settings.read_text().replace("criteria = [", f"criteria = [{more}")
        settings.write_text(f'{text}figures = false\nmaps = "none"\n[growth]\nlaw = "logistic"\n')
        result = CliRunner().invoke(group, ["estimate", str(settings), "--quiet"])
        assert result.exit_code == 0, result.stderr
        with (folder / "products_A" / "horizons.csv").open(newline="") as file:
            rows = [row for row in csv.DictReader(file) if row["start"] == "all"]
        found.append({row["criterion"]: row for row in rows})
    with xr.open_dataset(tmp_path / "0.1" / "products_A" / "horizons.nc") as stored:
        names = [name for name in stored if str(name).startswith("x_pooled_")]
        fit = stored[names].rename({name: name.removeprefix("x_pooled_") for name in names}).load()
    said = eh.reach(fit, tolerance=tolerances, error_factor=factor).gained.values.ravel()
    for tolerance, gain in zip(tolerances, said, strict=True):
        coarse, fine = (
            {
                key: float(rows[f"tolerance {tolerance:g}"][key])
                for key in ("horizon", "low", "high")
            }
            for rows in found
        )
        measured = fine["horizon"] - coarse["horizon"]
        above = np.hypot(fine["high"] - fine["horizon"], coarse["horizon"] - coarse["low"])
        below = np.hypot(fine["horizon"] - fine["low"], coarse["high"] - coarse["horizon"])
        assert measured - below < gain < measured + above, tolerance


@pytest.mark.parametrize("system", ["spiral-sink", "van-der-pol"])
def test_where_errors_do_not_grow_there_is_no_limit(tmp_path, system):
    folder = archive(
        tmp_path / "archive", system, analyses={"amplitude": 1e-3},
        forecast=forecast(8, 7.5, 81, 0.5, members=10),
    )  # fmt: skip
    # Starts all round the orbit (its period is 6.66), as spread swells and shrinks on the way.
    names = list(eh.open_runs(str(folder / "A" / "*.nc")).data_vars)
    curve = spreads(folder, names, 24.0)
    pooled = np.sqrt((curve**2).mean("start")).assign_attrs(units="1")
    assert eh.horizon(pooled, tolerance=0.1).status == eh.Status.no_growth


@pytest.mark.slow
def test_spread_saturates_at_the_climate_of_a_long_run(tmp_path):
    folder = archive(
        tmp_path / "archive", "lorenz-96", truth={"climate": 400.0},
        analyses={"amplitude": 0.1, "norm": "area-weighted"},
        forecast=forecast(30, 1.2, 41, 0.4, members=20),
    )  # fmt: skip
    curve = spreads(folder, ["x"], RING_HOURS)
    pooled = np.sqrt((curve**2).mean("start")).assign_attrs(units="1")
    fit = eh.fit_growth(pooled, law="logistic")
    with xr.open_dataset(folder / "climatology.nc") as climate:
        level = float(np.sqrt((climate.x**2).mean()))
    # 600 members of 40 sites each: the spread's sampling noise is below a hundredth.
    assert float(fit.saturation) == pytest.approx(level, rel=0.03)
    assert float(pooled[-5:].mean()) == pytest.approx(level, rel=0.03)
