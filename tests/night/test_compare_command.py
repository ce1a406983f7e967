"""Two versions compared: gains that are known by construction, and pairs that hardly fit."""

from __future__ import annotations

import csv
from pathlib import Path

import netCDF4
import numpy as np
import pytest
import xarray as xr
from click.testing import CliRunner

from ensemble_horizon.cli.main import group

HOURS = 12.0 * np.arange(12)
LATITUDES, LONGITUDES = np.array([60.0, 50.0]), np.array([0.0, 10.0, 20.0])
TOLERANCE, RATE = 2.0, 0.03
FIRST = np.datetime64("2031-02-14T00", "ns")
LIMITS = 12.0 * np.array([3, 5, 4, 6, 3, 5, 6, 4, 5, 3, 4, 6])  # of twelve starts, on leads
GAINS = 12.0 * np.array([1, 0, 2, 1, 2, 0, 1, 1, 0, 2, 1, 1])
VARIABLE = "[variables.t2]\ncriteria = [{tolerance = 2.0}]"
PLACES = "[regions.north]\nsouth = 55\n[sites.tower]\nlatitude = 50\nlongitude = 10"


def write_version(
    folder: Path,
    limits: np.ndarray,
    *,
    hours: np.ndarray = HOURS,
    first: np.datetime64 = FIRST,
    latitudes: np.ndarray = LATITUDES,
    members: int = 6,
    name: str = "t2",
    units: str = "K",
) -> None:
    """One file a start, whose spread at every point is 2 exp(0.03 (t - limit)) to rounding.

    So it passes 2 at the limit, in closed form; limits (start,) or (start, latitude, longitude).
    """
    folder.mkdir(parents=True, exist_ok=True)
    shape = (latitudes.size, LONGITUDES.size)
    limits = np.broadcast_to(limits.reshape(limits.shape + (1,) * (3 - limits.ndim)),
                             (limits.shape[0], *shape))  # fmt: skip
    for number, limit in enumerate(limits):
        pattern = np.random.default_rng(number).normal(size=(members, 1, *shape))
        pattern -= pattern.mean(axis=0)
        pattern /= pattern.std(axis=0, ddof=1)
        size = TOLERANCE * np.exp(RATE * (hours[:, None, None] - limit))
        start = first + number * np.timedelta64(24, "h")
        data = xr.Dataset(
            {
                name: (
                    ("realization", "lead", "latitude", "longitude"),
                    280 + pattern * size,
                    {"units": units},
                )
            },
            coords={
                "realization": ("realization", np.arange(members),
                                {"standard_name": "realization", "units": "1"}),
                "lead": ("lead", hours, {"standard_name": "forecast_period", "units": "hours"}),
                "latitude": ("latitude", latitudes, {"units": "degrees_north"}),
                "longitude": ("longitude", LONGITUDES, {"units": "degrees_east"}),
                "start": ((), start, {"standard_name": "forecast_reference_time"}),
            },
        )  # fmt: skip
        stamp = np.datetime_as_string(start, unit="h").replace("-", "").replace("T", "")
        encoding = {"start": {"units": "hours since 2031-01-01 00:00", "dtype": "f8"}}
        data.to_netcdf(folder / f"{stamp}.nc", encoding=encoding)


class Pair:
    """Two versions in one folder, old and new, and what the command says about them."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.products = folder / "versions_old_new"

    def settings(
        self, name: str, variables: str = VARIABLE, *, runs: str = "", more: str = PLACES,
        products: str = 'maps = "none"\nfigures = false',
    ) -> Path:  # fmt: skip
        path = self.folder / f"{name}.toml"
        path.write_text(
            f'[runs]\nfiles = "{name}/*.nc"\n{runs}\n{variables}\n{more}\n[engine]\nworkers = 1\n'
            f'[products]\nfolder = "out_{name}"\n{products}\n',
            encoding="utf-8",
        )
        return path

    def compare(self, *options: object):
        command = ["compare", self.folder / "old.toml", self.folder / "new.toml", *options]
        return CliRunner().invoke(group, [str(item) for item in command], catch_exceptions=False)

    def compared(self, *options: object) -> list[dict[str, str]]:
        result = self.compare(*options)
        assert result.exit_code == 0, result.stderr
        self.printed = result.stdout
        with (self.products / "versions.csv").open(newline="", encoding="utf-8") as file:
            return list(csv.DictReader(file))


@pytest.fixture
def pair(tmp_path):
    return Pair(tmp_path)


@pytest.fixture
def both(pair):
    """The new version gains the hours that it should, on twelve starts."""
    write_version(pair.folder / "old", LIMITS)
    write_version(pair.folder / "new", LIMITS + GAINS)
    pair.settings("old")
    pair.settings("new")
    return pair


def test_a_gain_known_in_closed_form_comes_out(both):
    rows = both.compared()
    assert [(row["place"], row["kind"]) for row in rows] == [("north", "region"), ("tower", "site")]
    for row in rows:
        assert float(row["horizon_a"]) == pytest.approx(LIMITS.mean(), abs=1e-4)
        assert float(row["horizon_b"]) == pytest.approx((LIMITS + GAINS).mean(), abs=1e-4)
        assert float(row["hours_gained"]) == pytest.approx(GAINS.mean(), abs=1e-4)
        assert float(row["low"]) < GAINS.mean() < float(row["high"])
        assert float(row["low"]) > 0
        assert float(row["p_value"]) < 0.01
        assert (row["starts"], row["units"], row["reason"]) == ("12", "hours", "given")
        assert (row["beyond_a"], row["beyond_b"], row["survives"]) == ("0", "0", "yes")
    assert "new holds longer in 2 of 2 rows, old in 0" in both.printed
    assert "12 common starts, 2031-02-14 00:00 UTC to 2031-02-25 00:00 UTC" in both.printed
    assert "rest on the spread of the members, not on errors" in both.printed


def test_the_other_way_round_the_sign_turns(both):
    there = float(both.compared()[0]["hours_gained"])
    (both.folder / "old.toml").rename(both.folder / "x.toml")
    (both.folder / "new.toml").rename(both.folder / "old.toml")
    (both.folder / "x.toml").rename(both.folder / "new.toml")
    back = both.compared()
    assert float(back[0]["hours_gained"]) == pytest.approx(-there, abs=1e-9)
    assert "new holds longer in 0 of 2 rows, old in 2." in both.printed


def test_limits_beyond_the_run_count_up_to_its_end(pair):
    """Restricted means: each horizon or 126 h, whichever comes first."""
    late, end = LIMITS + 60.0, 126.0
    leads = np.append(HOURS[:11], end)
    write_version(pair.folder / "old", late, hours=leads)
    write_version(pair.folder / "new", late + GAINS, hours=leads)
    pair.settings("old")
    pair.settings("new")
    row = pair.compared()[0]
    old, new = np.minimum(late, end), np.minimum(late + GAINS, end)
    assert float(row["hours_gained"]) == pytest.approx((new - old).mean(), abs=1e-4)
    assert int(row["beyond_a"]) == (late > end).sum() == 3
    assert int(row["beyond_b"]) == (late + GAINS > end).sum() == 4
    assert float(row["counted_to"]) == end


def test_identical_versions_gain_nothing_and_nothing_is_claimed(pair):
    for name in ("old", "new"):
        write_version(pair.folder / name, LIMITS)
        pair.settings(name, products='maps = "each"\nfigures = true')
    for row in pair.compared():
        assert float(row["hours_gained"]) == 0
        assert (row["p_value"], row["low"], row["survives"]) == ("", "", "")
        assert row["reason"] == "no_scatter"
    assert "no difference" in pair.printed
    with xr.open_dataset(pair.products / "versions.nc") as data:
        assert (data.t2_map_gained == 0).all()
        assert not data.t2_map_survives.any()
        assert data.t2_map_p_value.isnull().all()


def test_maps_set_apart_what_survives(pair):
    """The northern row gains, the southern one gains and loses alike."""
    gains = np.zeros((12, 2, 3))
    gains[:, 0] = GAINS[:, np.newaxis]
    gains[:, 1] = 12.0 * np.tile([1.0, -1.0], 6)[:, np.newaxis]
    limits = LIMITS[:, np.newaxis, np.newaxis] + np.zeros((2, 3))
    write_version(pair.folder / "old", limits)
    write_version(pair.folder / "new", limits + gains)
    for name in ("old", "new"):
        pair.settings(name, products='maps = "pooled"\nfigures = true')
    pair.compared()
    with xr.open_dataset(pair.products / "versions.nc") as data:
        gained = data.t2_map_gained.squeeze("t2_criterion")
        assert gained.sel(latitude=60).values == pytest.approx(GAINS.mean(), abs=1e-3)
        assert gained.sel(latitude=50).values == pytest.approx(0.0, abs=1e-3)
        survives = data.t2_map_survives.squeeze("t2_criterion")
        assert survives.sel(latitude=60).all() and not survives.sel(latitude=50).any()
        assert survives.attrs["flag_meanings"] == "no yes"
        assert data.attrs["version_a"] == "old" and data.attrs["start_count"] == 12
    figures = sorted(path.name for path in (pair.products / "figures").iterdir())
    assert figures == ["hours_gained.png", "t2_gained_tolerance_2.png", "t2_time_to_limit.png"]


@pytest.mark.parametrize(("criterion", "fits"), [("tolerance = 2.0", 0),
                                                 ("saturation_fraction = 0.5", 24)])  # fmt: skip
def test_maps_fit_laws_only_where_a_criterion_rests_on_one(pair, monkeypatch, criterion, fits):
    from ensemble_horizon.horizon import map_limits

    counted = []
    real = map_limits.select_where_enough

    def counting(*arguments):
        counted.append(1)
        return real(*arguments)

    monkeypatch.setattr(map_limits, "select_where_enough", counting)
    write_version(pair.folder / "old", LIMITS)
    write_version(pair.folder / "new", LIMITS + GAINS)
    for name in ("old", "new"):
        pair.settings(name, f"[variables.t2]\ncriteria = [{{{criterion}}}]",
                      products='maps = "each"\nfigures = false')  # fmt: skip
    pair.compared()
    assert len(counted) == fits  # a batch for each of twelve starts of both
    if not fits:
        with xr.open_dataset(pair.products / "versions.nc") as data:
            np.testing.assert_allclose(data.t2_map_gained, GAINS.mean(), atol=1e-3)


def test_only_common_starts_count_and_the_others_are_listed(pair):
    day = np.timedelta64(24, "h")
    write_version(pair.folder / "old", LIMITS)
    write_version(pair.folder / "new", (LIMITS + GAINS)[1:], first=FIRST + day)
    # A start of the old version that would spoil the mean, and that must not even be read.
    spoilt = pair.folder / "old" / "2031021400.nc"
    with xr.open_dataset(spoilt) as data:
        broken = data.load().assign(t2=data.t2 * np.nan)
    broken.to_netcdf(spoilt)
    pair.settings("old")
    pair.settings("new")
    row = pair.compared()[0]
    assert row["starts"] == "11"
    assert float(row["hours_gained"]) == pytest.approx(GAINS[1:].mean(), abs=1e-4)
    assert "starts only in old: 2031-02-14T00:00" in pair.printed


def test_few_starts_give_a_gain_but_no_interval(pair):
    write_version(pair.folder / "old", LIMITS[:4])
    write_version(pair.folder / "new", (LIMITS + GAINS)[:4])
    pair.settings("old")
    pair.settings("new")
    row = pair.compared()[0]
    assert float(row["hours_gained"]) == pytest.approx(GAINS[:4].mean(), abs=1e-4)
    assert (row["low"], row["p_value"], row["reason"]) == ("", "", "few_starts")
    assert "4 common starts are too few" in pair.printed


@pytest.mark.parametrize(("common", "told"), [(0, "found none"), (1, "found 1 (")])
def test_fewer_than_two_common_starts_are_refused(pair, refusal, common, told):
    later = FIRST + (12 - common) * np.timedelta64(24, "h")
    write_version(pair.folder / "old", LIMITS)
    write_version(pair.folder / "new", LIMITS, first=later)
    pair.settings("old")
    pair.settings("new")
    refusal(pair.compare(), 3, told, "at least two starts that both have")
    assert not pair.products.exists()


def test_latest_start_only_is_refused_with_the_key(both, refusal):
    both.settings("new", runs='starts = "latest"')
    refusal(both.compare(), 3, 'runs.starts = "all"')


def test_a_start_that_stands_there_twice_is_not_counted_twice(both):
    for name in ("old", "new"):
        source = both.folder / name / "2031021400.nc"
        (both.folder / name / "again.nc").write_bytes(source.read_bytes())
    row = both.compared()[0]
    assert row["starts"] == "12"
    assert float(row["hours_gained"]) == pytest.approx(GAINS.mean(), abs=1e-4)


def test_what_is_not_common_is_listed_and_the_rest_compared(both):
    criteria = "[variables.t2]\ncriteria = [{tolerance = 2.0}, "
    copy = '[variables.copy]\nsource = "t2"\ncriteria = [{tolerance = 1.0}]'
    both.settings(
        "old",
        f'{criteria}{{tolerance = 1.0}}, {{name = "gale", tolerance = 1.5}}]\n{copy}',
        more=f"{PLACES}\n[sites.mast]\nlatitude = 60\nlongitude = 0",
    )
    both.settings(
        "new",
        f'{criteria}{{name = "gale", tolerance = 1.7}}]',
        more=PLACES.replace("south = 55", "south = 56"),
    )
    rows = both.compared()
    assert [(row["place"], row["criterion"]) for row in rows] == [("tower", "tolerance 2")]
    printed = " ".join(both.printed.split())
    for words in (
        "variable copy: only in old",
        "site mast: only in old",
        "region north: it does not lie in the same place in both",
        "criterion of t2 tolerance 1: only in old",
        "criterion of t2 gale: not the same in both",
    ):
        assert words in printed
    assert "site mast: only in old" in (both.products / "README.txt").read_text(encoding="utf-8")


@pytest.mark.parametrize(
    ("variables", "more", "told"),
    [
        ('[variables.u]\nsource = "t2"\ncriteria = [{tolerance = 2.0}]', PLACES, "variables"),
        ("[variables.t2]\ncriteria = [{tolerance = 1.0}]", PLACES, "criteria"),
        (VARIABLE, "[sites.mast]\nlatitude = 60\nlongitude = 0", "regions or sites"),
        (VARIABLE.replace("criteria", "hold = 12\ncriteria"), PLACES, "hold"),
    ],
)
def test_nothing_in_common_is_refused(both, refusal, variables, more, told):
    both.settings("new", variables, more=more)
    refusal(both.compare(), 2, told, "settings of old and new")


def test_other_grids_are_compared_by_place_without_maps(pair):
    write_version(pair.folder / "old", LIMITS)
    write_version(pair.folder / "new", LIMITS + GAINS, latitudes=np.array([60.0, 55.5, 50.0]))
    for name in ("old", "new"):
        pair.settings(name, products='maps = "each"\nfigures = false')
    rows = pair.compared()
    assert float(rows[0]["hours_gained"]) == pytest.approx(GAINS.mean(), abs=1e-4)
    assert "maps: the grids differ" in pair.printed
    with xr.open_dataset(pair.products / "versions.nc") as data:
        assert not [name for name in data.data_vars if "_map_" in str(name)]


def test_other_ranges_of_leads_count_from_the_common_first_to_the_common_end(pair):
    """Leads from 48 h in one, to 72 h in the other: earlier limits are met at 48."""
    write_version(pair.folder / "old", LIMITS, hours=HOURS[:7])
    write_version(pair.folder / "new", LIMITS + GAINS, hours=HOURS[4:])
    pair.settings("old")
    pair.settings("new")
    row = pair.compared()[0]
    old, new = np.clip(LIMITS, 48, 72), np.clip(LIMITS + GAINS, 48, 72)
    assert float(row["hours_gained"]) == pytest.approx((new - old).mean(), abs=1e-4)
    assert "horizons count from 48 to 72 hours" in " ".join(pair.printed.split())


def test_leads_without_overlap_are_refused(pair, refusal):
    write_version(pair.folder / "old", LIMITS, hours=HOURS[:4])
    write_version(pair.folder / "new", LIMITS, hours=HOURS[5:])
    pair.settings("old")
    pair.settings("new")
    refusal(pair.compare(), 3, "leads of old and new", "4 leads from 0 to 36 hours")


def test_other_units_and_members(pair):
    write_version(pair.folder / "old", LIMITS)
    write_version(pair.folder / "new", LIMITS + GAINS, members=8)
    pair.settings(
        "old", f'{VARIABLE}\n[variables.c]\nsource = "t2"\ncriteria = [{{tolerance = 1}}]'
    )
    pair.settings(
        "new",
        f'{VARIABLE}\n[variables.c]\nsource = "t2"\nunits = "degC"\ncriteria = [{{tolerance = 1}}]',
    )
    rows = pair.compared()
    assert {row["variable"] for row in rows} == {"t2"}
    printed = " ".join(pair.printed.split())
    assert "variable c: in 'K' and in 'degC'" in printed
    assert "old has 6 members and new 8" in printed


def test_the_folder_of_a_version_is_not_written_over(both, refusal):
    refusal(both.compare("--folder", both.folder / "out_new"), 2, "products of new", "--folder")
    (both.folder / "other").mkdir()
    (both.folder / "other" / "README.txt").write_text("Products of Ensemble Horizon\n\nFiles\n")
    refusal(both.compare("--folder", both.folder / "other"), 2, "name another folder")


def test_a_second_comparison_replaces_the_first(both):
    both.settings("old", products='maps = "each"\nfigures = true')
    both.settings("new", products='maps = "each"\nfigures = true')
    both.compared()
    assert (both.products / "figures" / "t2_gained_tolerance_2.png").is_file()
    both.settings("old")
    both.compared()
    assert sorted(path.name for path in both.products.iterdir()) == [
        "README.txt", "versions.csv", "versions.nc",
    ]  # fmt: skip


def test_labels_and_quiet(both, refusal):
    result = both.compare("--labels", "cycle 48", "cycle 49", "--quiet")
    assert (result.exit_code, result.stdout) == (0, "")
    with xr.open_dataset(both.folder / "versions_cycle 48_cycle 49" / "versions.nc") as data:
        assert data.attrs["version_b"] == "cycle 49"
    refusal(both.compare("--labels", "x", "x"), 2, "--labels", "two different names")


def test_files_of_the_same_name_are_told_apart_by_their_folders(tmp_path):
    for name, limits in (("january", LIMITS), ("june", LIMITS + GAINS)):
        one = Pair(tmp_path / name)
        write_version(one.folder / "runs", limits)
        one.settings("runs")
    command = ["compare", *(str(tmp_path / name / "runs.toml") for name in ("january", "june"))]
    result = CliRunner().invoke(group, command, catch_exceptions=False)
    assert result.exit_code == 0, result.stderr
    assert "Lead time gained by june/runs over january/runs" in result.stdout


def test_another_confidence_is_told(both):
    both.settings("new", more=f"{PLACES}\n[growth]\nconfidence = 0.8")
    narrow = both.compared()[0]
    words = "intervals are given at 90 %, as the settings of old ask; those of new ask for 80 %"
    assert words in " ".join(both.printed.split())
    assert words in (both.products / "README.txt").read_text(encoding="utf-8").replace("\n", " ")
    both.settings("new")
    assert both.compared()[0]["low"] == narrow["low"]
    assert "intervals are given at" not in both.printed


def spoil(path: Path, member: int) -> None:
    """Give one member of a file a field without a value at one lead."""
    with netCDF4.Dataset(path, "a") as file:
        file["t2"][member, 3] = np.nan


def test_members_that_count_in_one_version_only_are_told(both):
    for member, day in ((2, 14), (4, 16), (1, 17)):
        spoil(both.folder / "old" / f"203102{day}00.nc", member)
    spoil(both.folder / "new" / "2031021800.nc", 0)
    for name in ("old", "new"):  # left out alike: nothing to tell of it
        spoil(both.folder / name / "2031022000.nc", 5)
    both.compared()
    printed = " ".join(both.printed.split())
    assert (
        "t2: at 4 of 12 starts not the same members count in both (2031-02-14T00:00: member 2 only "
        "in new; 2031-02-16T00:00: member 4 only in new; 2031-02-17T00:00: member 1 only in new; "
        "2031-02-18T00:00: member 0 only in old)" in printed
    )
    assert "4 faults in old: t2, member 2, start 2031-02-14T00:00: no value at all at" in printed
    assert "; and 1 more" in printed
    assert "2 faults in new: " in printed


def test_alike_versions_have_nothing_to_tell_of_members(both):
    both.compared()
    for words in ("members count in both", "fault", "has 6 members"):
        assert words not in both.printed


def test_ensembles_of_other_sizes_are_told(pair):
    write_version(pair.folder / "old", LIMITS)
    write_version(pair.folder / "new", LIMITS + GAINS, members=5)
    pair.settings("old")
    pair.settings("new")
    pair.compared()
    printed = " ".join(pair.printed.split())
    assert "old has 6 members and new 5: the spread of fewer members is noisier" in printed
    assert "members count in both" not in printed


def test_the_netcdf_product_complies_with_cf(both):
    from test_compliant_products import complaints

    for name in ("old", "new"):
        both.settings(name, products='maps = "each"\nfigures = false')
    both.compared()
    assert complaints(both.products / "versions.nc") == ""


def on_a_year_of_360_days(folder: Path) -> None:
    for path in folder.glob("*.nc"):
        with netCDF4.Dataset(path, "a") as file:
            file["start"].calendar = "360_day"


def test_other_calendars(both, refusal):
    on_a_year_of_360_days(both.folder / "old")
    refusal(both.compare(), 3, "one calendar", "360_day and standard")
    on_a_year_of_360_days(both.folder / "new")
    assert float(both.compared()[0]["hours_gained"]) == pytest.approx(GAINS.mean(), abs=1e-4)
