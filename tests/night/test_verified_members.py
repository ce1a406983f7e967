"""Members that `verify` must not use: left out of the whole start, as `estimate` does."""

import csv

import numpy as np
import pytest
import xarray as xr
from verification_archive import HOURS, LATITUDES, Archive

from ensemble_horizon.errors import InputError
from ensemble_horizon.night.verification import reading
from ensemble_horizon.runs import Catalogue

REGION = "[regions.North]\nsouth = 0\n[sites.Quay]\nlatitude = 20\nlongitude = 20\n"
MAPS = 'maps = "pooled"\nfigures = false'
VARIABLE = "plausible = [200, 350]\ncriteria = [{tolerance = 1.5}]"
RUNS = "minimum_members = 5\n"
NORTH = LATITUDES > 0
WEIGHTS = np.cos(np.radians(LATITUDES[NORTH]))[:, None] * np.ones(5)


@pytest.fixture
def archive(tmp_path):
    return Archive(tmp_path, starts=12)


@pytest.fixture
def reads(monkeypatch):
    """Starts of which a block was read, in order."""
    found = []
    plain = reading.read_part

    def counted(catalogue, name, block, damage):
        found.append(block.start)
        return plain(catalogue, name, block, damage)

    monkeypatch.setattr(reading, "read_part", counted)
    return found


def scores(archive, place="North", column="value"):
    found = {}
    with (archive.folder / "out" / "scores.csv").open(newline="") as file:
        for row in csv.DictReader(file):
            if row["place"] == place:
                found.setdefault(row["score"], []).append(float(row[column] or "nan"))
    return {name: np.array(values) for name, values in found.items()}


def maps(archive):
    with xr.open_dataset(archive.folder / "out" / "score_maps.nc") as data:
        return data.load()


def mean_square(archive, without, at=slice(None)):
    """RMSE (lead,) of the mean over the North, of the members that are left at each start."""
    squares = []
    for start in np.arange(len(archive.moments))[at]:
        kept = np.delete(archive.members[start], sorted(without.get(start, ())), axis=0)
        error = (kept.mean(axis=0) - archive.truth[start])[:, NORTH]
        squares.append((error**2 * WEIGHTS).sum((-2, -1)) / WEIGHTS.sum())
    return np.sqrt(np.mean(squares, axis=0))


def bad(archive, kind):
    """Spoil member 3 at start 2: the lead that is spoilt is lead 1, the others are sound."""
    if kind == "implausible":
        archive.members[2, 3, 1, 0, 0] = 1e6
    elif kind == "gap":
        archive.members[2, 3, 1, 0, 0] = np.nan
    elif kind == "no lead":
        archive.members[2, 3, 1] = np.nan
    else:
        archive.members[2, 3] = archive.members[2, 1]


@pytest.mark.parametrize("kind", ["implausible", "gap", "no lead", "copy"])
def test_a_bad_member_is_left_out_of_its_whole_start(archive, reads, kind):
    bad(archive, kind)
    archive.write()
    result = archive.verify(REGION, variable=VARIABLE, runs=RUNS, products=MAPS)
    assert "verifying again without 3" in result.stderr.replace("member ", "").replace("s ", "")
    assert "2031-01-21T00:00" in result.stderr
    assert scores(archive)["rmse"] == pytest.approx(mean_square(archive, {2: [3]}), rel=1e-5)
    # Only this start a second time.
    assert sorted(reads) == sorted([*range(12), 2])
    # Maps and places from the same members: a site is a point of the map.
    point = maps(archive).isel(latitude=1, longitude=2)
    for name in ("rmse", "crps", "skill_climatology", "anomaly_correlation"):
        assert point[f"t2_{name}"].values == pytest.approx(
            scores(archive, "Quay")[name], rel=1e-5, abs=1e-6
        )


def test_gaps_are_used_or_refused_where_the_settings_say_so(archive, refusal):
    archive.members[2, 3, 1] = np.nan
    archive.write()
    archive.verify(REGION, runs=RUNS + 'incomplete = "use"')
    wanted = mean_square(archive, {})
    kept = mean_square(archive, {2: [3]})
    assert scores(archive)["rmse"][[0, 2, 3]] == pytest.approx(wanted[[0, 2, 3]], rel=1e-5)
    assert scores(archive)["rmse"][1] == pytest.approx(kept[1], rel=1e-5)
    result = archive.verify(REGION, runs=RUNS + 'incomplete = "stop"', status=3)
    refusal(result, 3, "member 3 at 2031-01-21T00:00", "without faults")


def test_members_that_are_wrong_are_never_used(archive):
    archive.members[2, 3, 1, 0, 0] = 1e6
    archive.write()
    archive.verify(REGION, variable=VARIABLE, runs=RUNS + 'incomplete = "use"')
    assert scores(archive)["rmse"] == pytest.approx(mean_square(archive, {2: [3]}), rel=1e-5)


def test_a_start_with_too_few_members_is_left_out_and_named(archive, refusal):
    archive.members[2, :4, 1, 0, 0] = 1e6
    archive.write()
    result = archive.verify(REGION, variable=VARIABLE, runs=RUNS, products=MAPS)
    assert "t2 at 2031-01-21T00:00: left out, expected at least 5 usable members" in result.stderr
    assert "found 4; member 0: values from" in result.stderr
    text = (archive.folder / "out" / "README_scores.txt").read_text()
    assert "t2 at 2031-01-21T00:00: left out" in text
    rest = [start for start in range(12) if start != 2]
    assert scores(archive)["rmse"] == pytest.approx(mean_square(archive, {}, rest), rel=1e-5)
    assert set(scores(archive, column="starts")["rmse"]) == {11}
    # The fields of the start are taken back from the maps, and its scratch is void.
    point, site = maps(archive).isel(latitude=1, longitude=2), scores(archive, "Quay")
    assert point.t2_rmse.values == pytest.approx(site["rmse"], rel=1e-5)
    low = scores(archive, "Quay", "low")["skill_climatology"]
    assert point.t2_skill_climatology_low.values == pytest.approx(low, rel=1e-4)
    assert point.t2_skill_climatology.values == pytest.approx(site["skill_climatology"], rel=1e-4)


def test_no_start_left_is_refused(archive, refusal):
    archive.members[:, :4, 1, 0, 0] = 1e6
    archive.write()
    result = archive.verify(REGION, variable=VARIABLE, runs=RUNS, status=3)
    refusal(result, 3, "runs of t2", "minimum_members", "2031-01-01T00:00: left out")


def test_ranks_among_fewer_members_take_their_share_of_all_ranks(archive):
    """Rank r among 7 covers shares r/8 to (r + 1)/8: of 9 ranks, number r or r + 1."""
    archive.members[2, 3, 1, 0, 0] = 1e6
    archive.write()
    archive.verify(REGION, variable=VARIABLE, runs=RUNS)
    truth = archive.truth[:, :, 1, 2]
    members = archive.members[:, :, :, 1, 2]
    others = [start for start in range(12) if start != 2]
    rank = (members < truth[:, None]).sum(axis=1)
    short = (np.delete(members[2], 3, axis=0) < truth[2]).sum(axis=0)
    with xr.open_dataset(archive.folder / "out" / "scores.nc") as data:
        counts = data.t2_rank_share.sel(t2_place=1).values * 12
    for lead in range(HOURS.size):
        left = counts[lead] - np.bincount(rank[others, lead], minlength=9)
        (place,) = np.flatnonzero(np.round(left, 6))
        assert left[place] == pytest.approx(1.0)
        assert place in (short[lead], short[lead] + 1)


def test_an_unreadable_field_takes_its_member_out_of_the_start(archive, monkeypatch):
    archive.write()
    plain = Catalogue.read

    def broken(self, name, start, leads=slice(None), members=slice(None), window=None):
        one = members == 3 or members == slice(None)
        there = leads == 1 or (isinstance(leads, list) and 1 in leads)
        if name == "t2" and len(self.members) > 1 and start == 2 and one and there:
            raise InputError("run_002.nc", expected="values", found="damage", remedy="mend it")
        return plain(self, name, start, leads, members, window)

    monkeypatch.setattr(Catalogue, "read", broken)
    result = archive.verify(REGION, runs=RUNS)
    assert "12 h cannot be read: damage" in result.stderr
    assert scores(archive)["rmse"] == pytest.approx(mean_square(archive, {2: [3]}), rel=1e-5)


def test_as_many_workers_as_one_where_members_are_left_out(archive):
    archive.members[2, 3, 1, 0, 0] = 1e6
    archive.members[5, 1, 3] = np.nan
    archive.write()
    archive.verify(REGION, variable=VARIABLE, runs=RUNS, products=MAPS)
    alone, fields = scores(archive), maps(archive)
    archive.verify(REGION, variable=VARIABLE, runs=RUNS, products=MAPS, workers=2)
    for name, values in scores(archive).items():
        np.testing.assert_array_equal(values, alone[name])
    xr.testing.assert_allclose(maps(archive), fields, rtol=1e-6)
