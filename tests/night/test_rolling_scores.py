"""Rolling verification: the same numbers as `verify`, and each start read once."""

import csv
import logging
import shutil
from decimal import Decimal
from pathlib import Path

import netCDF4
import numpy as np
import pytest
import xarray as xr
from verification_archive import DEVIATION, HOURS, MEAN, Archive, _write

from ensemble_horizon.errors import ProductError
from ensemble_horizon.night.verification.rolling import rolling_scores, write_rolling
from ensemble_horizon.night.verification.shelf import Shelf
from ensemble_horizon.products.score_sums import read_score_sums
from ensemble_horizon.runs import Catalogue, assembly
from ensemble_horizon.settings import read_settings

REGION = "[regions.North]\nsouth = 0\n[sites.Quay]\nlatitude = 20\nlongitude = 20\n"
ANALYSES = 'files = "analyses.nc"'
FAR = "2032-01-01T00:00"


class Chain:
    """Runs named by their start, every ten days, and nights on them."""

    def __init__(self, folder, starts=6, **options):
        self.archive = Archive(folder, starts=starts, members=5, **options)
        self.folder, self.filed = folder, folder / "archive" / "scores"
        self.analyses = True

    def run_file(self, start):
        stamp = str(self.archive.moments[start]).replace("-", "")
        return self.folder / f"run_{stamp}.nc"

    def label(self, start):
        return f"{self.archive.moments[start]}:00"

    def write(self, **options):
        self.archive.write(**options)
        for start in range(len(self.archive.moments)):
            (self.folder / f"run_{start:03d}.nc").rename(self.run_file(start))

    def settings(self, more=REGION, *, starts=30, old=ANALYSES, new=ANALYSES, **changes):
        """Settings with a window of so many starts."""
        night = f'[night]\narchive = "archive"\nverify_starts = {starts}\n'
        path = self.archive.settings(more + night, **changes)
        text = path.read_text().replace('"run_*.nc"', '"run_{start:%Y%m%dT%H}.nc"')
        path.write_text(text.replace(old, new))
        return read_settings(path)

    def night(self, start=None, more=REGION, **changes):
        """A night, by the number of its start or after all of them."""
        tonight = FAR if start is None else self.label(start)
        return rolling_scores(self.settings(more, **changes), tonight, self.filed)

    def verified(self, more=REGION, **changes):
        """Bytes of the tables that `verify` writes of all runs that are there."""
        self.settings(more, **changes)
        self.archive.run("verify", self.folder / "settings.toml")
        return self.tables(self.folder / "out")

    def tables(self, folder):
        return [(folder / name).read_bytes() for name in ("scores.csv", "skill_limits.csv")]

    def written(self, found):
        write_rolling(self.folder / "night", found, {"version": "1"}, figures=False)
        return self.tables(self.folder / "night")

    def observe(self, skip=(), sites=("Quay",)):
        """Observations at a site: the truth of its grid point and half a degree."""
        lines = ["time,site,value"]
        for start, moment in enumerate(self.archive.moments):
            for lead, hours in enumerate(HOURS):
                if (start, lead) not in skip:
                    when = moment + np.timedelta64(int(hours), "h")
                    value = self.archive.truth[start, lead, 1, 2] + 0.5
                    lines += [f"{when}:00Z,{site},{value}" for site in sites]
        (self.folder / "mast.csv").write_text("\n".join(lines) + "\n")


OBSERVED = REGION + '[observations.t2]\nfile = "mast.csv"\n'


@pytest.fixture
def chain(tmp_path):
    return Chain(tmp_path)


@pytest.fixture
def long_chain(tmp_path):
    """As many starts as intervals need."""
    return Chain(tmp_path, starts=12)


@pytest.fixture
def log_text(monkeypatch, caplog):
    """The log in full, also where a command has begun or silenced it before."""
    monkeypatch.setattr(logging.getLogger("ensemble_horizon"), "propagate", True)
    with caplog.at_level(logging.WARNING, "ensemble_horizon"):
        yield caplog


@pytest.fixture
def reads(monkeypatch):
    """Files whose headers, and whose values, are read."""
    found = {"headers": [], "values": []}
    header, read = assembly.read_header, Catalogue.read

    def read_header(file, *arguments, **options):
        found["headers"].append(Path(file.path).name)
        return header(file, *arguments, **options)

    def read_values(self, variable, start, *arguments, **options):
        numbers = self._table(variable).source[start]
        found["values"] += {Path(self.sources[int(n)].path).name for n in numbers[numbers >= 0]}
        return read(self, variable, start, *arguments, **options)

    monkeypatch.setattr(assembly, "read_header", read_header)
    monkeypatch.setattr(Catalogue, "read", read_values)
    return found


@pytest.mark.parametrize(
    "changes",
    [{}, {"variable": 'units = "degF"\ncriteria = [{tolerance = 1.5}]'}, {"climatology": False}],
)
def test_scores_are_those_of_verify_to_the_last_digit(long_chain, changes):
    # Start 3 lacks analyses within, start 5 its own, start 7 all of them.
    long_chain.write(skip={(3, 2), (3, 3), (5, 0), *((7, lead) for lead in range(6))})
    long_chain.observe(skip={(4, 1), *((8, lead) for lead in range(6))})
    long_chain.archive.members[2, 1, 3] = np.nan
    long_chain.archive.write_start(2, path=long_chain.run_file(2))
    changes["runs"] = "control = 0\nminimum_members = 2"  # one of five has no value at a lead
    wanted = long_chain.verified(OBSERVED, **changes)
    found = long_chain.night(more=OBSERVED, **changes)
    assert len(found.verified) == 12
    assert long_chain.written(found) == wanted
    again = long_chain.night(more=OBSERVED, **changes)
    assert (again.verified, again.archived) == ((), found.verified)
    assert long_chain.written(again) == wanted
    text = " | ".join(found.left_out)
    assert "2031-01-31T00:00: t2: no analysis at 2 of 6: 2031-02-01T00:00" in text
    assert "2031-03-12T00:00: t2: no analysis at 6 of 6" in text
    assert "2031-03-22T00:00: t2: no observation at Quay at 6 of 6" in text
    assert again.left_out == found.left_out
    with xr.open_dataset(long_chain.folder / "night" / "scores.nc") as data:
        assert "no analysis at 2 of 6" in data.attrs["provenance_not_verified"]
        assert data.attrs["provenance_starts"] == "2031-01-01T00:00 to 2031-04-21T00:00"


def test_ranks_are_those_of_verify(chain):
    # Analyses that equal members: ties are broken at random, and alike in both.
    chain.archive.truth[:] = np.round(chain.archive.truth)
    chain.archive.members[:] = np.round(chain.archive.members)
    chain.write()
    chain.verified()
    chain.written(chain.night())
    with (
        xr.open_dataset(chain.folder / "out" / "scores.nc") as one,
        xr.open_dataset(chain.folder / "night" / "scores.nc") as other,
    ):
        assert one.t2_rank_share.values.tobytes() == other.t2_rank_share.values.tobytes()
        assert one.t2_rank_p_value.values.tobytes() == other.t2_rank_p_value.values.tobytes()


def test_a_night_reads_only_the_start_that_became_verifiable(chain, reads):
    chain.write()
    first = chain.night(4, starts=3)
    assert first.verified == tuple(chain.label(n) for n in range(1, 4))
    assert {name for name in reads["values"] if name.startswith("run")} == {
        chain.run_file(n).name for n in range(1, 4)
    }
    for seen in reads.values():
        seen.clear()
    second = chain.night(5, starts=3)
    assert (second.verified, second.starts[0]) == ((chain.label(4),), chain.label(2))
    assert second.archived == tuple(chain.label(n) for n in range(2, 4))
    for seen in reads.values():
        assert {name for name in seen if name.startswith("run")} == {chain.run_file(4).name}
        seen.clear()
    third = chain.night(5, starts=3)
    assert (third.starts, third.verified) == (second.starts, ())
    assert not [name for name in reads["headers"] if name.startswith("run")]
    assert reads["values"] == []
    # The window is what `verify` takes when only those starts are there.
    for start in (0, 1, 5):
        chain.run_file(start).unlink()
    assert chain.written(third) == chain.verified()


def test_only_analyses_of_the_starts_in_question_are_opened(chain, reads):
    chain.write()
    with xr.open_dataset(chain.folder / "analyses.nc", decode_times=False) as data:
        for hour in data.time.values:
            when = chain.archive.moments[0] + np.timedelta64(int(hour), "h")
            stamp = str(when).replace("-", "")
            data.sel(time=[hour]).to_netcdf(chain.folder / f"analysis_{stamp}.nc")
    (chain.folder / "analyses.nc").unlink()
    new = {"new": 'files = "analysis_{start:%Y%m%dT%H}.nc"'}
    chain.night(4, **new)
    reads["headers"].clear()
    assert chain.night(5, **new).verified == (chain.label(4),)
    opened = sorted({name for name in reads["headers"] if name.startswith("analysis")})
    newest = f"analysis_{str(chain.archive.moments[5] + 60).replace('-', '')}.nc"
    # The six of the start, the one before, which might reach beyond its date, and the newest.
    assert opened[0] == "analysis_20310202T12.nc"
    assert opened[1:3] == ["analysis_20310210T00.nc", "analysis_20310210T12.nc"]
    assert opened[6:] == ["analysis_20310212T12.nc", newest]


def test_a_start_waits_for_its_last_analysis(chain):
    last = {(5, lead) for lead in range(4, 6)}
    chain.write(skip=last)
    found = chain.night()
    assert found.waiting == (chain.label(5),)
    assert len(found.starts) == 5
    (chain.folder / "analyses.nc").unlink()
    chain.write()
    found = chain.night()
    assert (found.verified, found.waiting) == ((chain.label(5),), ())


def test_a_run_that_is_longer_than_the_others_waits(chain):
    chain.write()
    chain.night(4)
    with xr.open_dataset(chain.run_file(4), decode_times=False) as data:
        longer = data.load()
    extra = longer.isel(time=[-1]).assign_coords(time=[40 * 24.0])
    xr.concat([longer, extra.assign_coords(time=("time", [960.0], longer.time.attrs))], "time",
              data_vars="minimal").to_netcdf(chain.run_file(4))  # fmt: skip
    found = chain.night(5)
    assert found.waiting == (chain.label(4),)
    assert chain.label(4) not in found.starts


def test_long_and_short_runs_that_take_turns(chain):
    """Each is verified as soon as it is over, and none takes the place of another that is."""
    chain.write()
    for start in (1, 3, 5):
        with xr.open_dataset(chain.run_file(start), decode_times=False) as data:
            short = data.load().isel(time=slice(0, 3))
        short.to_netcdf(chain.run_file(start))
    with xr.open_dataset(chain.folder / "analyses.nc", decode_times=False) as data:
        whole = data.load()
    (chain.folder / "analyses.nc").unlink()
    # Until 36 h after start 4: it is not over, though a short run from there would be.
    whole.isel(time=slice(0, 28)).to_netcdf(chain.folder / "analyses.nc")
    chain.night(4, starts=2)
    found = chain.night(5, starts=3)
    assert (found.waiting, found.verified) == ((chain.label(4),), (chain.label(1),))
    assert found.starts == tuple(chain.label(n) for n in (1, 2, 3))
    (chain.folder / "analyses.nc").unlink()
    # Until 24 h after start 5, whose run is over, though a long one would not be.
    whole.isel(time=slice(0, 33)).to_netcdf(chain.folder / "analyses.nc")
    found = chain.night(starts=3)
    assert (found.waiting, found.verified) == ((), (chain.label(4), chain.label(5)))


@pytest.mark.parametrize("damage", ["byte", "foreign", "other start"])
def test_a_broken_file_is_set_aside_and_its_start_verified_again(chain, damage):
    chain.write()
    before = chain.written(chain.night())
    path = chain.filed / "20310131T00.nc"
    whole = path.read_bytes()
    if damage == "byte":
        path.write_bytes(whole[:4000] + bytes([whole[4000] ^ 1]) + whole[4001:])
    elif damage == "foreign":
        with netCDF4.Dataset(path, "w") as file:
            file.setncattr("title", "another file")
    else:
        shutil.copy(chain.filed / "20310210T00.nc", path)
    strange = path.read_bytes()
    found = chain.night()
    assert found.verified == ("2031-01-31T00:00",)
    assert len(found.archived) == 5
    (note,) = found.notes
    assert str(path) in note
    assert "is broken" in note
    assert (chain.filed / "set_aside" / path.name).read_bytes() == strange
    assert path.read_bytes() == whole
    assert chain.written(found) == before


def test_a_broken_file_whose_runs_are_gone_is_missing(chain):
    chain.write()
    chain.night()
    path = chain.filed / "20310131T00.nc"
    path.write_bytes(path.read_bytes()[:999])
    chain.run_file(3).unlink()
    found = chain.night()
    assert found.missing == ("2031-01-31T00:00",)
    assert len(found.starts) == 5
    assert found.left_out == ("2031-01-31T00:00: neither sums nor runs are there any more",)
    assert chain.written(found) == chain.verified()


def test_sums_outlive_the_runs(chain):
    chain.write()
    before = chain.written(chain.night())
    for start in range(5):
        chain.run_file(start).unlink()
    found = chain.night()
    assert len(found.archived) == 6
    assert chain.written(found) == before


def test_sums_of_other_places_are_not_mixed(chain):
    chain.write()
    chain.night()
    for start in range(2):
        chain.run_file(start).unlink()
    moved = REGION.replace("south = 0", "south = 30")
    found = chain.night(more=moved)
    assert found.verified == tuple(chain.label(n) for n in range(2, 6))
    assert found.missing == tuple(chain.label(n) for n in range(2))
    (text,) = found.left_out
    assert "t2: left out, because they were verified with other places, and cannot be again" in text
    assert chain.label(0) in text
    assert chain.written(found) == chain.verified(moved)
    # What only the words or the level of a limit depend on changes nothing.
    named = {"variable": 'label = "air"\ncriteria = [{tolerance = 9}]'}
    assert chain.night(more=moved + "[verification]\nskill = 0.5\n", **named).verified == ()


def test_another_climatology_is_another_definition(chain):
    chain.write()
    chain.night()
    fields = {"deviation": np.full((4, 5), DEVIATION), "mean": np.full((4, 5), MEAN + 1)}
    _write(chain.folder / "climatology.nc", {}, fields, "2031-01-01T00", "K")
    chain.run_file(0).unlink()
    found = chain.night()
    assert len(found.verified) == 5
    (text,) = found.left_out
    assert "were verified with another climatology, and cannot be again" in text
    assert chain.written(found) == chain.verified()


def test_a_new_variable_leaves_the_others_as_they_are(chain, reads):
    chain.write()
    chain.night(climatology=False)
    for start in range(3):
        chain.run_file(start).unlink()
    reads["values"].clear()
    more = "[variables.warm]\nsource = 't2'\ncriteria = [{tolerance = 1}]\n"
    more += '[analyses.names]\nwarm = "t2"\n'
    found = chain.night(more=REGION + more, climatology=False)
    assert [result.frame.starts for result in found.results] == [6, 3]
    assert found.verified == tuple(chain.label(n) for n in range(3, 6))
    runs = [name for name in reads["values"] if name.startswith("run")]
    assert len(runs) == len(set(runs)) == 3
    names = [item.name for item in read_score_sums(chain.filed / "20310220T00.nc").variables]
    assert names == ["t2", "warm"]


def test_another_grid_is_left_out_and_not_read(chain, reads):
    chain.write()
    for start in range(3):
        path = chain.run_file(start)
        with xr.open_dataset(path, decode_times=False) as data:
            moved = data.load().assign_coords(
                longitude=("longitude", data.longitude.values + 2, data.longitude.attrs)
            )
        moved.to_netcdf(path)
    found = chain.night()
    assert found.missing == tuple(chain.label(n) for n in range(3))
    assert found.left_out == (
        f"{', '.join(found.missing)}: not verified: t2 has another grid or other units than at "
        "2031-02-20T00:00",
    )
    assert not {chain.run_file(n).name for n in range(3)} & set(reads["values"])


def test_a_start_that_cannot_be_used_does_not_stop_the_others(chain):
    chain.write()
    chain.run_file(3).write_bytes(chain.run_file(3).read_bytes()[:3000])
    found = chain.night()
    assert found.missing == (chain.label(3),)
    assert len(found.starts) == 5
    (text,) = found.left_out
    assert text.startswith("2031-01-31T00:00: not verified: ")
    assert "run_20310131T00.nc" in text
    # Mended, it is verified in the next night.
    chain.archive.write_start(3, path=chain.run_file(3))
    found = chain.night()
    assert (found.verified, found.missing) == ((chain.label(3),), ())


def test_fewer_members_at_a_start(chain):
    chain.write()
    with xr.open_dataset(chain.run_file(4), decode_times=False) as data:
        less = data.load().isel(member=slice(None, 4))
    less.to_netcdf(chain.run_file(4))
    runs = "control = 0\nminimum_members = 2"
    wanted = chain.verified(runs=runs)
    found = chain.night(runs=runs)
    assert chain.written(found) == wanted
    share = found.results[0].places["rank_share"]
    assert share.sizes["rank"] == 6
    assert share.sum("rank").values == pytest.approx(1.0)


def test_a_shorter_run_and_a_site_observed_since(chain):
    chain.write()
    with xr.open_dataset(chain.run_file(0), decode_times=False) as data:
        short = data.load().isel(time=slice(0, 4))
    short.to_netcdf(chain.run_file(0))
    sites = OBSERVED + "[sites.Light]\nlatitude = -20\nlongitude = 20\n"
    chain.observe()
    chain.night(4, more=sites)
    chain.observe(sites=("Quay", "Light"))
    found = chain.night(more=sites)
    data = found.results[0].places
    rows = list(zip(data["place"].values, data["against"].values, strict=True))
    assert rows[-2:] == [("Quay", "observation"), ("Light", "observation")]
    starts = data["starts"].sel(score="rmse").values
    assert starts[rows.index(("North", "analysis"))].tolist() == [6, 6, 6, 6, 5, 5]
    assert starts[-1].tolist() == [2] * 6


def test_observations_alone(chain):
    chain.write()
    (chain.folder / "analyses.nc").unlink()
    chain.observe(skip={(5, 5)})
    found = chain.night(more=OBSERVED, analyses=False)
    assert found.waiting == (chain.label(5),)
    assert len(found.starts) == 5
    chain.observe()
    found = chain.night(more=OBSERVED, analyses=False)
    assert found.verified == (chain.label(5),)
    assert chain.written(found) == chain.verified(OBSERVED, analyses=False)
    assert "for Quay, by its observations." in told(found)[0]


def test_without_truth_nothing_is_verified_and_the_reason_told(chain):
    chain.write()
    found = chain.night(analyses=False)
    assert (found.results, found.starts, found.skill()) == ((), (), ())
    assert found.notes == (
        "Nothing is verified: the settings name neither analyses nor observations.",
    )
    assert found.no_skill() == found.notes[0]
    assert write_rolling(chain.folder / "night", found, {}) == []
    assert not (chain.folder / "night").exists()
    assert not chain.filed.exists()


def test_without_analyses_of_tonight_the_archive_still_counts(chain, log_text):
    chain.write()
    before = chain.written(chain.night(5))
    (chain.folder / "analyses.nc").unlink()
    found = chain.night()
    assert len(found.archived) == 5
    assert found.waiting == (chain.label(5),)
    (text,) = found.troubles
    assert text.startswith(
        "No further past start could be verified; the scores are of the 5 starts in the archive. "
    )
    assert "analyses.nc" in text
    assert text in log_text.text
    assert (found.notes, found.too_early) == ((), False)
    assert chain.written(found) == before


def test_without_analyses_and_archive_there_is_nothing_and_it_is_told(chain, log_text):
    chain.write()
    (chain.folder / "analyses.nc").unlink()
    found = chain.night()
    (text,) = found.troubles
    assert text.startswith("No past start could be verified. ")
    assert text in log_text.text
    assert (found.results, found.too_early) == ((), False)


def test_before_the_first_start_is_over_it_is_too_early(chain):
    chain.write()
    found = chain.night(0)
    assert (found.results, found.troubles, found.too_early) == ((), (), True)
    assert found.no_skill()


def test_runs_analyses_and_observations_may_move(chain):
    """Other names of files, the same content: past sums hold, also of runs that are gone."""
    chain.write()
    chain.observe()
    before = chain.written(chain.night(more=OBSERVED))
    (chain.folder / "truth").mkdir()
    for name in ("analyses.nc", "mast.csv"):
        (chain.folder / name).rename(chain.folder / "truth" / name)
    for start in range(4):
        chain.run_file(start).unlink()
    (chain.folder / "runs").mkdir()
    for start in (4, 5):
        chain.run_file(start).rename(chain.folder / "runs" / chain.run_file(start).name)
    chain.settings(OBSERVED)
    path = chain.folder / "settings.toml"
    text = path.read_text()
    for old, new in (
        ('"run_', '"runs/run_'), ('"analyses.nc"', '"truth/analyses.nc"'),
        ('"mast.csv"', '"truth/mast.csv"'),
    ):  # fmt: skip
        assert old in text
        text = text.replace(old, new)
    path.write_text(text)
    settings = read_settings(path)
    found = rolling_scores(settings, FAR, chain.filed)
    assert (len(found.archived), found.verified, found.left_out) == (6, (), ())
    assert chain.written(found) == before


def test_positions_are_left_out_by_name(chain):
    chain.write()
    more = '[variables.drift]\nposition = ["lat", "lon"]\ncriteria = [{tolerance = 1}]\n'
    found = chain.night(more=REGION + more)
    assert found.notes == ("drift is not verified, because it is a position.",)
    assert len(found.verified) == 6


def test_a_killed_run_goes_on_where_it_was(chain, monkeypatch):
    chain.write()
    wanted = chain.written(chain.night())
    files = {path.name: path.read_bytes() for path in chain.filed.iterdir()}
    nothing_told = (chain.folder / "night" / "README_scores.txt").read_bytes()
    shutil.rmtree(chain.filed)
    file, filed = Shelf.file, []

    def third_time_killed(self, sums):
        if len(filed) == 3:
            raise KeyboardInterrupt
        filed.append(sums.label)
        return file(self, sums)

    monkeypatch.setattr(Shelf, "file", third_time_killed)
    with pytest.raises(KeyboardInterrupt):
        chain.night()
    monkeypatch.undo()
    # What kill -9 leaves of a file that was being written.
    (chain.filed / ".20310121T00.0123abcd.part.nc").write_bytes(b"half")
    found = chain.night()
    assert list(found.archived) == sorted(filed)
    assert {path.name: path.read_bytes() for path in chain.filed.iterdir()} == files
    assert chain.written(found) == wanted
    assert (chain.folder / "night" / "README_scores.txt").read_bytes() == nothing_told


def test_an_archive_that_cannot_be_written_is_named(chain):
    chain.write()
    chain.filed.parent.mkdir()
    chain.filed.write_text("a file")
    with pytest.raises(ProductError, match="a file stands in the way"):
        chain.night()


def test_runs_whose_names_tell_no_start(chain):
    chain.write()
    settings = chain.settings()
    path = chain.folder / "settings.toml"
    path.write_text(path.read_text().replace("{start:%Y%m%dT%H}", "*"))
    settings = read_settings(path)
    found = rolling_scores(settings, chain.archive.moments[4].astype("datetime64[ns]"),
                           chain.filed)  # fmt: skip
    assert found.verified == tuple(chain.label(n) for n in range(4))
    for start in (4, 5):
        chain.run_file(start).unlink()
    assert chain.written(found) == chain.verified()


def told(found):
    """What is known of all variables and places, in sentences."""
    return [text for item in found.skill() for text in item.sentences()]


def two_digits(text):
    """To two significant digits, by the decimal module."""
    value = Decimal(text)
    return str(value.quantize(Decimal(1).scaleb(value.adjusted() - 1)))


def test_sentences_say_what_the_tables_say(long_chain):
    long_chain.write()
    found = long_chain.night(more=REGION + "[verification]\nskill = 0.5\n")
    long_chain.written(found)
    (here,) = [item for item in found.skill() if item.place == "North"]
    spread, skill = here.sentences()
    assert found.no_skill() == ""
    with (long_chain.folder / "night" / "scores.csv").open(newline="") as file:
        rows = [row for row in csv.DictReader(file) if row["place"] == "North"]
    (row,) = [r for r in rows if r["score"] == "spread_error_ratio" and r["lead"] == "24"]
    numbers = [two_digits(row[name]) for name in ("value", "low", "high")]
    low, high = float(row["low"]), float(row["high"])
    parting = "the members part too little" if high < 1 else "the members part too much"
    if low < 1 < high:
        parting = "the members part about right"
        if low < 0.8 or high > 1.25:
            parting = "it cannot be told whether the members part too little or too much"
    assert spread == (
        f"t2: over the last 12 verified starts {parting}: the spread was {numbers[0]} "
        f"({numbers[1]} to {numbers[2]}) of the error of the mean at 24 h for North."
    )
    with (long_chain.folder / "night" / "skill_limits.csv").open(newline="") as file:
        limits = {row["score"]: row for row in csv.DictReader(file) if row["place"] == "North"}
    limit = limits["skill_climatology"]
    assert limit["status"] == "reached"
    ends = [f"{float(limit[name]):.0f}" for name in ("horizon", "low", "high")]
    assert skill == (
        f"t2: skill over climatology above 0.5 ended at {ends[0]} h ({ends[1]} to {ends[2]}), "
        f"significant until {float(limit['significant_until']):.0f} h, for North."
    )


def test_few_starts_are_told_as_such(chain, caplog):
    chain.write()
    with caplog.at_level(logging.WARNING):
        found = chain.night(1)
    assert told(found)[0].startswith(
        "t2: over the last verified start it cannot be told whether the members part too little or "
        "too much: the spread was "
    )
    assert "(too few starts for an interval)" in told(found)[0]
    assert "few" not in caplog.text
