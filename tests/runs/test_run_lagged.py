"""Lagged ensembles: invented ones, and a real one read independently with iris."""

import numpy as np
import pytest

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs import open_runs, read_catalogue, survey_runs


@pytest.fixture
def lagged(tmp_path, run_dataset):
    """Three runs, 6 h apart, each of 6 leads every 6 h; values are the hours of valid time."""

    def write(number=True):
        for m in range(3):
            start = np.datetime64("2024-01-05T00") + np.timedelta64(6 * m, "h")
            hours = 6.0 * m + 6.0 * np.arange(1, 7)
            values = np.broadcast_to(hours[:, None, None] + m / 10, (6, 5, 6)).astype("f4")
            data = run_dataset(values, start=str(start), member=m if number else None)
            data.to_netcdf(tmp_path / f"{m}.nc")
        return str(tmp_path / "*.nc")

    return write


def test_members_are_aligned_on_valid_time(lagged):
    data = open_runs(lagged(), lagged=True)
    assert data.start.values == [np.datetime64("2024-01-05T12", "ns")]
    # Valid times common to all: 18 h to 36 h after the first start.
    assert data.lead.values.tolist() == [6.0, 12.0, 18.0, 24.0]
    assert data.member.values.tolist() == [0, 1, 2]
    hours = data.t2m.values[0, :, :, 0, 0]
    np.testing.assert_allclose(hours, [[h, h + 0.1, h + 0.2] for h in (18, 24, 30, 36)])


def test_members_without_numbers_are_numbered_from_the_latest_start(lagged):
    data = open_runs(lagged(number=False), lagged=True)
    assert data.member.values.tolist() == [0, 1, 2]
    np.testing.assert_allclose(data.t2m.values[0, 0, :, 0, 0], [18.2, 18.1, 18.0])


def test_a_gap_inside_the_span_stays_nan(lagged, tmp_path, run_dataset):
    files = lagged()
    values = np.full((5, 5, 6), 1.0, "f4")
    data = run_dataset(values, start="2024-01-05T06", leads=(6.0, 12.0, 24.0, 30.0, 36.0), member=1)
    data.to_netcdf(tmp_path / "1.nc")
    opened = open_runs(files, lagged=True)
    assert opened.lead.values.tolist() == [6.0, 12.0, 18.0, 24.0]
    assert np.isnan(opened.t2m.values[0, :, 1]).all(axis=(1, 2)).tolist() == [
        False, True, False, False]  # fmt: skip
    report = survey_runs(files, lagged=True)
    assert [(f.kind, f.member, f.lead) for f in report.faults] == [("missing-lead", 1, 12.0)]


def test_equal_numbers_under_several_starts_are_told_apart(tmp_path, run_dataset, truth):
    for hour in (0, 6):
        for m in range(2):
            data = run_dataset(truth[m] + hour, start=f"2024-01-05T{hour:02d}", member=m)
            data.to_netcdf(tmp_path / f"{hour}_{m}.nc")
    data = open_runs(str(tmp_path / "*.nc"), lagged=True)
    assert data.member.values.tolist() == [
        "2024-01-05T00:00 0", "2024-01-05T00:00 1", "2024-01-05T06:00 0", "2024-01-05T06:00 1"
    ]  # fmt: skip
    np.testing.assert_array_equal(data.t2m.values[0, 0, 2], truth[0, 0] + 6)
    np.testing.assert_array_equal(data.t2m.values[0, 0, 0], truth[0, 1])


def test_runs_that_do_not_overlap(tmp_path, run_dataset, truth):
    for m, day in enumerate((5, 15)):
        data = run_dataset(truth[m], start=f"2024-01-{day:02d}", member=m)
        data.to_netcdf(tmp_path / f"{m}.nc")
    with pytest.raises(InputError, match="expected valid times common to all starts"):
        open_runs(str(tmp_path / "*.nc"), lagged=True)


# The real ensemble: 13 members on 7 start days, 6 monthly means, member 6 absent.


@pytest.fixture
def glosea4(glosea4_files):
    return str(glosea4_files[0].parent / "ensemble_{member:03d}.nc")


def test_real_ensemble_survey(glosea4, glosea4_files):
    report = survey_runs(
        glosea4, expected_members=14, lagged=True, plausible={"surface_temperature": (180, 340)}
    )
    assert [(f.kind, f.member) for f in report.faults] == [("missing-member", 6)]
    assert report.missing == (6,)
    assert report.summary() == "usable without member 6"
    assert len(report.files) == 13
    assert report.grid == "145 x 192 points, rectilinear"
    assert "lagged-starts" in {note.kind for note in report.notes}


def test_real_ensemble_needs_lagged(glosea4):
    with pytest.raises(InputError, match=r"13 members, each under one of 7 starts only"):
        read_catalogue(glosea4)


def test_real_ensemble_needs_numbers(glosea4_files):
    with pytest.raises(InputError, match=r"use a template with \{member\}"):
        read_catalogue(glosea4_files, lagged=True)


def test_real_ensemble_against_iris(glosea4, glosea4_cubes):
    data = open_runs(glosea4, lagged=True)
    field = data.surface_temperature
    assert field.dims == ("start", "lead", "member", "latitude", "longitude")
    assert field.shape == (1, 6, 13, 145, 192)
    assert field.attrs["units"] == "K"
    assert data.member.values.tolist() == list(glosea4_cubes)
    assert data.start.values[0] == np.datetime64("2011-07-24T00:00")
    # The files count 564, 1296, ... hours for the members of the latest start.
    latest = glosea4_cubes[13]
    np.testing.assert_array_equal(data.lead.values, latest.coord("forecast_period").points)
    times = latest.coord("time")
    assert str(times.units) == "hours since 1970-01-01 00:00:00"
    dates = np.datetime64("1970-01-01", "ns") + times.points.astype("timedelta64[h]")
    np.testing.assert_array_equal(data.valid.values[0], dates)
    stack = np.stack([cube.data for cube in glosea4_cubes.values()])
    spread = field.std("member", ddof=1).values[0]
    np.testing.assert_allclose(spread, stack.std(axis=0, ddof=1), rtol=1e-3, atol=1e-4)
    np.testing.assert_array_equal(field.values[0], stack.swapaxes(0, 1))
    np.testing.assert_allclose(data.latitude, latest.coord("latitude").points)
