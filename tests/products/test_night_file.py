"""The file of a night: there and back, and no changed byte goes unnoticed."""

from __future__ import annotations

import shutil
import subprocess
from dataclasses import replace
from datetime import datetime

import cftime
import netCDF4
import numpy as np
import pytest
from synthetic_products import Result, make_curves

from ensemble_horizon.errors import ArgumentError, InputError, ProductError
from ensemble_horizon.products import night_file
from ensemble_horizon.products.limits import limits
from ensemble_horizon.products.night_file import (
    NewerNightError,
    night_from,
    read_night_file,
    write_night_file,
)
from ensemble_horizon.products.nights import (
    Measure,
    Night,
    date_of,
    night_name,
    night_of,
    start_of_name,
)
from ensemble_horizon.products.sealed import seal
from ensemble_horizon.vocabulary import Status

ABOUT = {"created": datetime(2031, 1, 5, 6), "version": "1", "title": "a night"}
HOSTILE = 'wind / "speed" <script>alert(1)</script> & söuth; ../..'
STARTS = ("2031-01-05T00", "2031-01-06T12:30")
PLAIN = Measure("tolerance", "tolerance 2.5", 2.5, "m s-1", "m s-1", "hours", 6.0, 0.0)


def a_night(**options):
    curves = make_curves(**{"chance": True, "places": (HOSTILE, "b", "c", "d", "e"), **options})
    return night_of([Result(curves.assign_attrs(hold=12.0))])


def test_there_and_back(tmp_path):
    curves = [
        make_curves(variable=HOSTILE, chance=True).assign_attrs(hold=12.0),
        make_curves(variable="t", units="K", lead_units="days", last=10.0),
    ]
    night = night_of(map(Result, curves))
    path = write_night_file(tmp_path / night.name, night, ABOUT)
    found = read_night_file(path)
    assert repr(found) == repr(night)  # repr, because NaN is not equal to itself
    assert found.start == np.datetime64("2031-01-05T00") and path.name == "20310105T00.nc"
    rows = {limit.key: limit for limit in found.limits}
    for limit in limits(map(Result, curves)):
        row = rows[limit.variable, limit.place, limit.criterion]
        assert (row.status, row.last_lead) == (limit.status, limit.last_lead)
        np.testing.assert_equal((row.horizon, row.low, row.high),
                                (limit.horizon, limit.low, limit.high))  # fmt: skip
        assert row.measure.hold == (12.0 if limit.variable == HOSTILE else 0.0)
        assert row.measure.units == ("m s-1" if limit.variable == HOSTILE else "K")
        assert row.measure.lead_units == ("hours" if limit.variable == HOSTILE else "days")
    assert {row.status for row in found.limits} == set(Status)


def test_the_same_night_gives_the_same_bytes(tmp_path):
    paths = [write_night_file(tmp_path / name, a_night(), ABOUT) for name in ("a.nc", "b.nc")]
    assert paths[0].read_bytes() == paths[1].read_bytes()
    assert sorted(path.name for path in tmp_path.iterdir()) == ["a.nc", "b.nc"]


def test_other_programs_read_the_file(tmp_path):
    path = write_night_file(tmp_path / "n.nc", a_night(), ABOUT)
    with netCDF4.Dataset(path) as file:
        assert file["place"][0] == HOSTILE and file.Conventions == "CF-1.11"
        assert netCDF4.num2date(file["start"][...], file["start"].units).isoformat() == (
            "2031-01-05T00:00:00"
        )
    if shutil.which("ncdump"):
        assert "place" in subprocess.run(
            ["ncdump", "-h", str(path)], capture_output=True, text=True, check=True
        ).stdout  # fmt: skip


def test_the_digest_is_that_of_sha256sum(tmp_path):
    path = write_night_file(tmp_path / "n.nc", a_night(), ABOUT)
    body, _, line = path.read_bytes().rpartition(b"\nsha256 ")
    (tmp_path / "body").write_bytes(body)
    told = subprocess.run(["sha256sum", str(tmp_path / "body")], capture_output=True, check=True)
    assert told.stdout.split()[0] == line.strip()


def test_every_flipped_byte_and_every_cut_is_noticed(tmp_path):
    whole = write_night_file(tmp_path / "n.nc", a_night(), ABOUT).read_bytes()
    rng = np.random.default_rng(1)
    places = {0, 8, len(whole) - 1, len(whole) - 40, len(whole) - 74}
    places |= set(rng.integers(0, len(whole), 300).tolist())
    for place in sorted(places):
        changed = bytearray(whole)
        changed[place] ^= 1 << int(rng.integers(8))
        with pytest.raises(InputError, match="whole and unchanged"):
            night_from(bytes(changed), "n.nc")
    for length in (0, 1, 10, 73, 74, len(whole) // 2, len(whole) - 1):
        with pytest.raises(InputError, match=r"n\.nc: expected the file of a night"):
            night_from(whole[:length], "n.nc")
    with pytest.raises(InputError, match="cut off or changed"):
        night_from(whole + b"x", "n.nc")


def test_a_foreign_file_is_named(tmp_path):
    path = tmp_path / "20310105T00.nc"
    with netCDF4.Dataset(path, "w") as file:
        file.title = "something else"
    with pytest.raises(InputError, match=r"20310105T00\.nc.*not the file of a night"):
        read_night_file(path)
    with pytest.raises(InputError, match=r"none\.nc: expected a file that can be read"):
        read_night_file(tmp_path / "none.nc")
    with pytest.raises(InputError, match="Is a directory"):
        read_night_file(tmp_path)


def test_a_sealed_file_of_another_kind_is_broken_too(tmp_path):
    with netCDF4.Dataset(tmp_path / "x.nc", "w") as file:
        file.title = "sealed, but no night"
    (tmp_path / "t.nc").write_text("sealed text")
    for name in ("x.nc", "t.nc"):
        seal(tmp_path / name)
        with pytest.raises(InputError, match=rf"{name}.*found a file of another kind"):
            read_night_file(tmp_path / name)


def test_a_file_of_a_newer_program_is_not_called_broken(tmp_path, monkeypatch):
    monkeypatch.setattr(night_file, "LAYOUT", 2)
    path = tmp_path / "n.nc"
    write_night_file(path, a_night(), ABOUT)
    monkeypatch.undo()
    with pytest.raises(NewerNightError, match="found layout 2"):
        read_night_file(path)


def test_writing_is_refused_where_a_night_would_not_come_back(tmp_path):
    night = a_night()
    with pytest.raises(ArgumentError, match="at least one limit"):
        write_night_file(tmp_path / "n.nc", Night(night.start, ()), ABOUT)
    with pytest.raises(ArgumentError, match="30 limits, 15 of them different"):
        write_night_file(tmp_path / "n.nc", Night(night.start, night.limits * 2), ABOUT)
    cut = replace(night.limits[0], place="a\0b")
    with pytest.raises(ProductError, match="without control characters"):
        write_night_file(tmp_path / "n.nc", Night(night.start, (cut,)), ABOUT)
    (tmp_path / "n.nc").mkdir()
    with pytest.raises(ProductError, match="a folder of that name"):
        write_night_file(tmp_path / "n.nc", night, ABOUT)
    assert [path.name for path in tmp_path.iterdir()] == ["n.nc"]


def test_one_start_of_several(tmp_path):
    curves = make_curves(starts=STARTS, pooled=True)
    night = night_of([Result(curves)], STARTS[1])
    assert night.name == "20310106T1230.nc"
    assert repr(night) == repr(night_of([Result(curves.isel(start=[1]))]))
    with pytest.raises(ArgumentError, match=r"none named.*2031-01-05T00:00:00, 2031-01-06T12:30"):
        night_of([Result(curves)])
    with pytest.raises(ArgumentError, match="one of the starts of the results"):
        night_of([Result(curves)], "2031-01-07T00Z")
    with pytest.raises(ArgumentError, match="found 'tonight'"):
        night_of([Result(curves)], "tonight")


@pytest.mark.parametrize(
    ("start", "words"),
    [(7.0, "a number"), (cftime.Datetime360Day(2031, 2, 30), "a date of the calendar 360_day")],
)
def test_starts_that_are_no_dates_are_not_filed(start, words):
    starts = np.array([start], dtype=object if isinstance(start, cftime.datetime) else float)
    curves = make_curves().assign_coords(start=starts).drop_vars("start_label")
    with pytest.raises(InputError, match=f"found {words}. Next: estimate these runs without"):
        night_of([Result(curves)])


@pytest.mark.parametrize("text", ["2031-02-14T00", "2031-02-14T06:30", "2031-12-31T23:59:59"])
def test_names_tell_the_start(text):
    assert start_of_name(night_name(date_of(text))) == np.datetime64(text)


@pytest.mark.parametrize(
    "name",
    ["20310214T0600.nc", "20310230T00.nc", "20310214T24.nc", "x20310214T00.nc", "20310214T00.nc~",
     ".20310214T00.abcd.part.nc", "20310214T00-2.nc", "20310214.nc", "²0310214T00.nc"],
)  # fmt: skip
def test_names_that_are_not_those_of_nights(name):
    assert start_of_name(name) is None


@pytest.mark.parametrize(
    "change",
    [{"kind": "climatology_fraction"}, {"threshold": 2.6}, {"threshold_units": "knot"},
     {"units": "knot"}, {"lead_units": "days"}, {"hold": 0.0}, {"first_lead": 6.0}],
)  # fmt: skip
def test_another_measure_is_not_compared(change):
    assert PLAIN.equals(replace(PLAIN, threshold=2.5 * (1 + 1e-9)))
    assert not PLAIN.equals(replace(PLAIN, **change))
    assert not replace(PLAIN, **change).equals(PLAIN)


def test_rules_are_compared_where_the_threshold_does_not_tell_them():
    chance = replace(PLAIN, kind="chance", rule="chance 0.3 beyond 17", threshold=0.3)
    assert chance.equals(chance)
    assert not chance.equals(replace(chance, rule="chance 0.3 beyond 20"))
    assert not replace(chance, rule="").equals(replace(chance, rule=""))
    fraction = replace(PLAIN, kind="saturation_fraction", rule="saturation fraction 0.7")
    assert fraction.equals(replace(fraction, threshold=3.1))
    assert not fraction.equals(replace(fraction, rule="saturation fraction 0.5"))
    # Where there is no threshold there is no limit, which counts as a night without data.
    assert fraction.equals(replace(fraction, rule="", threshold=float("nan")))
    assert PLAIN.equals(replace(PLAIN, threshold=float("nan")))


def test_rules_are_taken_from_the_curves():
    curves = make_curves(criteria=("gale", "chance 0.3 beyond 17"))
    curves["criterion_kind"] = ("criterion", ["saturation_fraction", "chance"])
    curves["threshold"][..., 0] = 0.7 * curves["saturation"]
    rules = {limit.criterion: limit.measure.rule for limit in night_of([Result(curves)]).limits}
    assert rules == {
        "gale": "saturation fraction 0.7",
        "chance 0.3 beyond 17": "chance 0.3 beyond 17",
    }
    told = curves.assign_coords(criterion_rule=("criterion", ["saturation fraction 0.8", "c"]))
    rules = [limit.measure.rule for limit in night_of([Result(told)]).limits[:2]]
    assert rules == ["saturation fraction 0.8", "c"]
