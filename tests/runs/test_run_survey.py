"""The survey: every fault is named with its file and member, and the verdict follows."""

import json
import zlib
from pathlib import Path

import netCDF4
import numpy as np
import pytest
from survey_cases import only, set_values

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.runs import read_catalogue, survey_runs
from ensemble_horizon.runs.faults import KINDS, Fault


def test_sound_runs_are_usable_as_is(runs):
    report = survey_runs(runs(), expected_members=5, plausible={"t2m": (200, 330)})
    assert (report.verdict, report.faults, report.notes) == ("usable", (), ())
    assert report.summary() == "usable as is"
    assert report.members == (0, 1, 2, 3, 4)
    assert report.leads == (6.0, 12.0, 18.0, 24.0)
    assert report.usable


def test_missing_members(runs):
    template = runs({1: lambda data: None, 3: lambda data: None})
    report = survey_runs(template, expected_members=5)
    assert [fault.kind for fault in report.faults] == ["missing-member"] * 2
    assert report.missing == (1, 3)
    assert report.drop == ()
    assert report.summary() == "usable without members 1 and 3"
    assert survey_runs(template).summary() == "usable as is"
    assert survey_runs(template, expected_members=[0, 2, 4]).verdict == "usable"


def test_numbers_from_one_when_the_last_is_there(tmp_path, truth, run_dataset):
    for m, run in enumerate(truth):
        run_dataset(run).to_netcdf(tmp_path / f"m{m + 1:02d}.nc")
    template = str(tmp_path / "m{member:02d}.nc")
    assert survey_runs(template, expected_members=3).verdict == "usable"
    assert survey_runs(template, expected_members=5).missing == (0, 4)


def test_missing_leads(runs):
    template = runs({2: lambda data: data.isel(time=slice(0, 2))})
    report = survey_runs(template)
    fault = only(report)
    assert (fault.kind, fault.member, fault.lead, fault.file) == (
        "missing-lead", 2, 18.0, runs.path(2))  # fmt: skip
    assert fault.message == "'t2m' lacks leads 18, 24 h"
    assert report.drop == (2,)
    assert report.summary() == "usable without member 2"
    kept = survey_runs(template, incomplete="use")
    assert (kept.verdict, kept.drop) == ("usable", ())
    stopped = survey_runs(template, incomplete="stop")
    assert stopped.verdict == "not_usable"
    assert stopped.reasons[0] == "a fault stops the job, as asked"


def test_expected_leads(runs):
    report = survey_runs(runs(), expected_leads=[6, 12, 18, 24, 30])
    assert only(report).message == "no member has lead 30 h"


def test_one_long_member_does_not_make_the_others_short(runs, run_dataset):
    longer = np.concatenate([runs.values[2], runs.values[2][:1] + 1])
    template = runs({2: lambda data: run_dataset(longer)})
    assert survey_runs(template).verdict == "usable"


def test_unreadable_and_truncated_files(runs):
    template = runs()
    Path(runs.path(1)).write_text("text")
    Path(runs.path(3)).write_bytes(Path(runs.path(3)).read_bytes()[:3000])
    report = survey_runs(template, expected_members=5)
    assert [(f.kind, f.member) for f in report.faults] == [
        ("unreadable-file", 1), ("unreadable-file", 3)]  # fmt: skip
    assert "found a text file" in report.faults[0].message
    assert "found a truncated or damaged file" in report.faults[1].message
    assert report.summary() == "usable without members 1 and 3"
    # The names tell which members should be there, even when nothing was expected.
    assert survey_runs(template).missing == (1, 3)


def test_a_broken_file_that_does_not_say_its_member(tmp_path, truth, run_dataset):
    for m, run in enumerate(truth):
        run_dataset(run, member=m).to_netcdf(tmp_path / f"{m}.nc")
    (tmp_path / "3.nc").write_text("text")
    report = survey_runs(str(tmp_path / "*.nc"))
    assert report.lost_files == (str(tmp_path / "3.nc"),)
    assert report.summary() == f"usable without the file {tmp_path / '3.nc'}"


def test_unreadable_fields_in_a_sound_file(runs):
    template = runs()
    rng = np.random.default_rng(0)
    with netCDF4.Dataset(runs.path(2), "a") as file:
        file.renameVariable("t2m", "old")
        values = file.createVariable(
            "t2m", "f4", ("time", "latitude", "longitude"), zlib=True, chunksizes=(1, 5, 6)
        )
        values.units, values[:] = "K", rng.normal(280, 5, (4, 5, 6))
    stored = read_catalogue(runs.path(2), variables="t2m").read("t2m", 0)[0]
    content = bytearray(Path(runs.path(2)).read_bytes())
    # Spoil the compressed chunk of one lead: it is found by what it decompresses to.
    found = None
    for position in range(len(content) - 2):
        if content[position] == 0x78:
            try:
                data = zlib.decompressobj().decompress(bytes(content[position:]))
            except zlib.error:
                continue
            shuffled = stored[2].ravel().view("u1").reshape(-1, 4).T.tobytes()
            if data == shuffled or data == stored[2].tobytes():
                found = position
    assert found is not None
    content[found + 10 : found + 30] = bytes(20)
    Path(runs.path(2)).write_bytes(content)
    report = survey_runs(template, variables="t2m")
    fault = only(report)
    assert (fault.kind, fault.member, fault.lead) == ("unreadable-data", 2, 18.0)
    assert fault.message.startswith("lead 18 h cannot be read: a read error")
    assert report.drop == (2,)


def test_units_and_grids(runs):
    def shift(data):
        return data.assign_coords(longitude=data.longitude + 1)

    def celsius(data):
        data.t2m.attrs["units"] = "degC"
        return data

    report = survey_runs(runs({0: celsius, 4: shift}))
    assert sorted((f.kind, f.member) for f in report.faults) == [
        ("grid-difference", 4), ("unit-difference", 0)]  # fmt: skip
    assert report.summary() == "usable without members 0 and 4"


def test_leads_out_of_order_and_doubled(runs):
    template = runs({
        1: lambda data: data.isel(time=[1, 0, 2, 3]),
        3: lambda data: data.isel(time=[0, 1, 1, 2, 3]),
    })  # fmt: skip
    report = survey_runs(template)
    assert [(n.kind, n.member) for n in report.notes] == [("leads-out-of-order", 1)]
    assert [(f.kind, f.member) for f in report.faults] == [("duplicate-lead", 3)]


def test_a_member_from_another_start(runs, run_dataset):
    stale = run_dataset(runs.values[2], start="2024-01-04T00:00")
    report = survey_runs(runs({2: lambda data: stale}))
    fault = only(report)
    assert (fault.kind, fault.member) == ("start-differs", 2)
    assert "starts at 2024-01-04T00:00, where 4 of 5 members start at 2024-01-05T00:00" in (
        fault.message
    )
    assert report.summary() == "usable without member 2"


def test_one_member_is_not_usable(member_files):
    report = survey_runs(member_files[0])
    assert report.verdict == "not_usable"
    assert report.summary() == "not usable"
    assert report.reasons == ("1 usable member, where at least 2 are needed",)


def test_a_fault_at_one_start_leaves_the_other_starts_alone(tmp_path, truth, run_dataset):
    for day in (4, 5, 6):
        for m, run in enumerate(truth):
            data = run_dataset(run + day, start=f"2024-01-0{day}")
            if (day, m) == (5, 1):
                data.t2m.values[2, 0, 0] = np.nan
            if (day, m) != (6, 2):
                data.to_netcdf(tmp_path / f"{day}_{m}.nc")
    template = str(tmp_path / "*_{member:d}.nc")
    report = survey_runs(template)
    assert report.verdict == "usable_without"
    assert report.drop == ()
    assert report.drop_at == (("2024-01-05T00:00", 1),)
    assert report.missing_at == (("2024-01-06T00:00", 2),)
    assert report.summary() == (
        "usable without member 1 at 2024-01-05T00:00; without member 2 at 2024-01-06T00:00"
    )
    left = read_catalogue(template).without(at=report.drop_at)
    expected = np.array([[True, True, True], [True, False, True], [True, True, False]])
    np.testing.assert_array_equal(left.present("t2m").all(axis=1), expected)
    short = survey_runs(template, minimum_members=3)
    assert short.short_starts == ("2024-01-05T00:00", "2024-01-06T00:00")
    assert short.summary() == ("usable without the starts 2024-01-05T00:00, 2024-01-06T00:00")


def test_headers_only_reads_no_data(runs, monkeypatch):
    from ensemble_horizon.runs import reading

    template = runs({1: set_values(..., np.nan), 2: lambda data: data.isel(time=[0])})
    monkeypatch.setattr(reading, "_read_slab", lambda *args: pytest.fail("data were read"))
    report = survey_runs(template, content=False)
    assert [(f.kind, f.member) for f in report.faults] == [("missing-lead", 2)]


def test_every_field_is_read_once(runs, monkeypatch):
    from ensemble_horizon.runs import reading

    fields = []
    original = reading._read_slab

    def counting(source, variable, along, bounds):
        fields.append(int(np.prod([part.size for part in along])))
        return original(source, variable, along, bounds)

    monkeypatch.setattr(reading, "_read_slab", counting)
    seen = []
    survey_runs(runs(), progress=lambda done, total: seen.append((done, total)))
    assert sum(fields) == 20
    assert seen[-1] == (20, 20)


def test_text_and_json(runs):
    report = survey_runs(runs({3: set_values(..., np.nan)}), expected_members=6)
    text = report.text()
    assert "Verdict:   usable without members 3 and 5" in text
    assert "member 3, start 2024-01-05T00:00: 't2m' has up to 30 missing of 30 cells" in text
    assert "member 5: no file holds it" in text
    assert runs.path(3) in text
    copy = json.loads(json.dumps(report.as_dict()))
    assert copy["verdict"] == "usable_without"
    assert copy["drop"] == [3]
    assert copy["missing"] == [5]
    assert {fault["kind"] for fault in copy["faults"]} == {"missing-cells", "missing-member"}


def test_arguments(runs):
    template = runs()
    with pytest.raises(ArgumentError, match="expected one of drop, use, stop"):
        survey_runs(template, incomplete="keep")
    with pytest.raises(ArgumentError, match="lowest and the highest plausible value"):
        survey_runs(template, plausible={"t2m": (300, 200)})


def test_kinds_are_a_closed_table():
    assert all(isinstance(Fault(kind), Fault) for kind in KINDS)
    with pytest.raises(ValueError, match="unknown kind"):
        Fault("other")
