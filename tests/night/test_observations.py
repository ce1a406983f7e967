"""Observations from CSV files: what is read, what is refused, and scores against them."""

import csv

import numpy as np
import pytest
from verification_archive import Archive

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs.observations import read_observations


@pytest.fixture
def mast(tmp_path):
    def write(*rows, header="time,site,value", encoding="utf-8"):
        path = tmp_path / "mast.csv"
        path.write_bytes("\n".join([header, *rows]).encode(encoding))
        return path

    return write


def test_offsets_from_utc_are_converted(mast):
    found = read_observations(mast(
        "2031-02-14T06:00+02:00,Quay,1.5", "2031-02-14T01:00-03:00,Pier,2",
        "2031-02-14T05:00Z,Quay,3",
    ))  # fmt: skip
    day = np.datetime64("2031-02-14").astype("M8[us]").astype(int)
    hour = 3_600_000_000
    assert found.values == {"Quay": {day + 4 * hour: 1.5, day + 5 * hour: 3.0},
                            "Pier": {day + 4 * hour: 2.0}}  # fmt: skip
    assert found.with_offset


def test_times_without_offset_are_utc_and_empty_cells_no_observation(mast):
    path = mast("1970-01-01T00:00,Quay,1", "1970-01-01T01:00,Quay,", "1970-01-01 02:00,Quay,NaN")
    found = read_observations(path)
    assert found.values == {"Quay": {0: 1.0}}
    assert (found.rows, found.empty, found.with_offset) == (3, 2, False)


@pytest.mark.parametrize(
    ("rows", "words"),
    [
        (["2031-02-14T06:00Z,Q,1", "2031-02-14T07:00,Q,1"], ["line 3", "all have an offset"]),
        (["14.02.2031 06:00,Q,1"], ["line 2", "ISO 8601", "'14.02.2031 06:00'"]),
        (["2031-02-14T06:00,Q,7,5"], ["line 2", "3 cells", "found more", "decimal points"]),
        (["2031-02-14T06:00,Q"], ["line 2", "3 cells", "found fewer"]),
        (['2031-02-14T06:00,Q,"7,5"'], ["line 2", "a number", "'7,5'", "decimal point"]),
        (["2031-02-14T06:00,Q,1", "2031-02-14T06:00,Q,2"], ["one value for 'Q'", "1 and 2"]),
        (["2031-02-14T06:00,Q,"], ["at least one observation", "1 rows, none with a value"]),
    ],
)
def test_what_is_no_observation_is_refused(mast, rows, words):
    path = mast(*rows)
    with pytest.raises(InputError) as error:
        read_observations(path)
    for word in words:
        assert word in str(error.value)


def test_files_that_are_none_are_refused(mast, tmp_path):
    with pytest.raises(InputError, match=r"columns time, site, value.*found when, site, value"):
        read_observations(mast("2031-02-14T06:00,Q,1", header="when,site,value"))
    with pytest.raises(InputError, match="CSV file in UTF-8"):
        read_observations(mast("2031-02-14T06:00,Kaï,1", encoding="latin-1"))
    with pytest.raises(InputError, match="No such file"):
        read_observations(tmp_path / "none.csv")
    assert read_observations(mast("1970-01-01,Q,1", header="when,site,value"), time="when").values


@pytest.fixture
def archive(tmp_path):
    made = Archive(tmp_path, starts=12)
    made.write()
    return made


def observations(archive, offset="Z", units=0.0, name="Quay", skip=()):
    """The truth at the site plus a tenth, at its valid times, as a CSV text."""
    lines = ["when;site;value".replace(";", ",")]
    for start, moment in enumerate(archive.moments):
        for lead, hours in enumerate(archive.hours):
            if (start, lead) in skip:
                continue
            when = moment + np.timedelta64(int(hours), "h")
            value = archive.truth[start, lead, 1, 2] + 0.1 - units
            lines.append(f"{np.datetime_as_string(when, unit='m')}{offset},{name},{value:.9f}")
    return "\n".join(lines) + "\n"


SITE = "[sites.Quay]\nlatitude = 20\nlongitude = 20\n"
TABLE = '[observations.t2]\nfile = "mast.csv"\ntime = "when"\n{}\n' + SITE


def rows_of(archive, against):
    with (archive.folder / "out" / "scores.csv").open(newline="") as file:
        return [row for row in csv.DictReader(file) if row["against"] == against]


@pytest.mark.parametrize(("offset", "units", "line"), [
    ("Z", 0.0, ""), ("", 0.0, ""), ("Z", 273.15, 'units = "degC"'),
])  # fmt: skip
def test_scores_against_observations(archive, offset, units, line):
    skip = {(0, 2), (3, 1)}
    text = observations(archive, offset, units, skip=skip)
    (archive.folder / "mast.csv").write_text(text)
    result = archive.verify(TABLE.format(line), analyses=False)
    assert "no observation at Quay at 2 of" in result.stderr
    told = "converted to UTC" if offset else "taken as UTC"
    assert result.stderr.count(told) == 1
    mean = archive.members.mean(axis=1)[..., 1, 2]
    error = mean - archive.truth[..., 1, 2] - 0.1
    for start, lead in skip:
        error[start, lead] = np.nan
    found = [row for row in rows_of(archive, "observation") if row["score"] == "rmse"]
    assert [row["place"] for row in found] == ["Quay"] * len(archive.hours)
    wanted = np.sqrt(np.nanmean(error**2, axis=0))
    assert [float(row["value"]) for row in found] == pytest.approx(wanted, rel=1e-5)
    assert [int(row["starts"]) for row in found] == [12, 11, 11, 12, 12, 12]


def test_both_truths_stand_side_by_side(archive):
    (archive.folder / "mast.csv").write_text(observations(archive))
    archive.verify(TABLE.format(""))
    for against, shift in (("analysis", 0.0), ("observation", 0.1)):
        found = [
            r for r in rows_of(archive, against) if r["score"] == "bias" and r["place"] == "Quay"
        ]
        error = (archive.members.mean(axis=1) - archive.truth)[..., 1, 2].mean(axis=0) - shift
        assert [float(row["value"]) for row in found] == pytest.approx(error, rel=1e-4, abs=1e-5)


def test_unknown_sites_and_times_are_told(archive, refusal):
    (archive.folder / "mast.csv").write_text(observations(archive, name="Kay"))
    result = archive.verify(TABLE.format(""), status=3)
    refusal(result, 3, "observations at a site of the settings (Quay)", "found observations at Kay")
    late = observations(archive).replace(":00Z", ":04Z")
    (archive.folder / "mast.csv").write_text(late)
    refusal(
        archive.verify(TABLE.format(""), status=3), 3, "miss one by 4 to 4 min", "none is shifted"
    )


def test_a_start_without_its_own_observation_keeps_its_scores(archive):
    """Persistence of it is missing then, and nothing else."""
    (archive.folder / "mast.csv").write_text(observations(archive, skip={(4, 0)}))
    archive.verify(TABLE.format(""), analyses=False)
    found = {(r["score"], float(r["lead"])): r for r in rows_of(archive, "observation")}
    last = float(archive.hours[-1])
    assert found["crps", last]["starts"] == "12"
    assert found["persistence_rmse", last]["starts"] == "11"
