"""Three starts with four members each: one row per start, and the pooled rows."""

import numpy as np
import pytest

STARTS = ("2031-02-14 00:00", "2031-02-15 00:00", "2031-02-16 12:00")
FILES = "{start:%Y%m%d%H}/m{member:02d}.nc"
WEIGHTS = np.cos(np.deg2rad(np.linspace(65.0, 40.0, 6)))[:, None] * np.ones(8)
COLUMNS = [
    "start",
    "variable",
    "place",
    "criterion",
    "threshold",
    "threshold_units",
    "horizon",
    "low",
    "high",
    "horizon_units",
    "status",
    "projected",
    "doubling_time",
    "law",
    "members",
]


@pytest.fixture
def starts(night, growing, logistic, write_member):
    """Values (start, member, lead, latitude, longitude), written to folders by start."""
    hours = 12.0 * np.arange(12)
    values = np.stack(
        [
            growing(logistic(hours, first=0.1 * (1 + number)), members=4, seed=number)
            for number in range(3)
        ]
    )
    for start, members in zip(STARTS, values, strict=True):
        folder = start.replace("-", "").replace(" ", "").replace(":", "")[:10]
        for number, field in enumerate(members):
            write_member(
                night.folder / folder / f"m{number:02d}.nc",
                {"t2": field, "w2": 1.5 * field}, start=start,
            )  # fmt: skip
    return values


def test_rows_by_start_variable_place_and_criterion(night, starts):
    night.settings(
        "[variables.t2]\ncriteria = [{tolerance = 1.5}, {saturation_fraction = 0.5}]\n"
        "[variables.w2]\ncriteria = [{tolerance = 2.0}]",
        runs="minimum_members = 4",
        files=FILES,
        more="[regions.north]\nsouth = 52\n[sites.tower]\nlatitude = 50\nlongitude = 0",
    )
    rows = night.estimated()
    assert list(rows[0]) == COLUMNS
    keys = {(r["start"], r["variable"], r["place"], r["criterion"]) for r in rows}
    times = [*(start.replace(" ", "T") + ":00" for start in STARTS), "all"]
    assert keys == {
        (time, variable, place, criterion)
        for time in times
        for place in ("north", "tower")
        for variable, criterion in (
            ("t2", "tolerance 1.5"), ("t2", "saturation fraction 0.5"), ("w2", "tolerance 2"),
        )
    }  # fmt: skip
    assert len(rows) == len(keys) == 24
    # A larger initial error leaves less time.
    by_start = [
        float(r["horizon"]) for r in rows
        if r["place"] == "tower" and r["criterion"] == "tolerance 1.5" and r["start"] != "all"
    ]  # fmt: skip
    assert by_start == sorted(by_start, reverse=True)
    assert by_start[0] > by_start[-1]


def test_pooling_averages_variances(night, starts):
    night.settings(runs="minimum_members = 4", files=FILES)
    rows = night.estimated()
    data = night.curves()
    by_start = np.sqrt((starts.var(axis=1, ddof=1) * WEIGHTS).sum(axis=(2, 3)) / WEIGHTS.sum())
    spread = data["t2_spread"].squeeze("place").transpose("start", "lead").values
    np.testing.assert_allclose(spread[:3], by_start, rtol=1e-6)
    pooled = np.sqrt((by_start**2).mean(axis=0))
    names = [name for name in data.data_vars if "pooled" in str(name) and "spread" in str(name)]
    assert names, list(data.data_vars)
    exact = [name for name in names if not str(name).endswith(("_low", "_high"))]
    np.testing.assert_allclose(data[exact[0]].values.ravel(), pooled, rtol=1e-6)
    crossing = np.interp(np.log(1.5), np.log(pooled), 12.0 * np.arange(12))
    (row,) = [row for row in rows if row["start"] == "all"]
    assert float(row["horizon"]) == pytest.approx(crossing, abs=2.0)


def test_one_start_has_no_pooled_rows(night, starts):
    night.settings(runs='minimum_members = 4\nstarts = ["2031-02-15T00"]', files=FILES)
    rows = night.estimated()
    assert [row["start"] for row in rows] == ["2031-02-15T00:00:00"]


def test_the_latest_start_only(night, starts):
    night.settings(runs='minimum_members = 4\nstarts = "latest"', files=FILES)
    rows = night.estimated()
    assert [row["start"] for row in rows] == ["2031-02-16T12:00:00"]


def test_fewer_members_than_the_minimum_at_one_start(night, starts):
    (night.folder / "2031021500" / "m03.nc").unlink()
    night.settings(runs="minimum_members = 4", files=FILES)
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert "2031-02-15" in result.stderr
    rows = {row["start"]: row for row in night.rows()}
    if "2031-02-15T00:00:00" in rows:
        assert rows["2031-02-15T00:00:00"]["status"] == "no_data"
    assert rows["2031-02-14T00:00:00"]["status"] == "reached"


def test_maps_pooled(night, starts):
    import xarray as xr

    night.settings(
        runs="minimum_members = 4", files=FILES, products='maps = "pooled"\nfigures = false'
    )
    night.estimated()
    with xr.open_dataset(night.products / "horizon_maps.nc", decode_times=False) as data:
        horizon = data["t2_pooled_horizon"].squeeze()
        assert horizon.shape == (6, 8)
        # The spread of every point is the pooled one by construction.
        variance = starts.var(axis=1, ddof=1)[..., 0, 0].mean(axis=0)
        crossing = np.interp(np.log(1.5), 0.5 * np.log(variance), 12.0 * np.arange(12))
        np.testing.assert_allclose(horizon.values, crossing, atol=2.0)
