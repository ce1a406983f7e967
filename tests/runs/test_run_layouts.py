"""Layouts of files: whatever the source looks like, the canonical dataset is the same."""

import cftime
import netCDF4
import numpy as np
import pytest
import xarray as xr

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs import open_analyses, open_runs, read_catalogue

START = np.datetime64("2024-01-05T00:00", "ns")
LEADS = [6.0, 12.0, 18.0, 24.0]


def check(data, truth, starts=1):
    assert data.t2m.dims == ("start", "lead", "member", "latitude", "longitude")
    assert data.lead.values.tolist() == LEADS
    assert data.lead.attrs["units"] == "hours"
    assert data.member.values.tolist() == [0, 1, 2]
    assert data.start.values[0] == START
    assert data.sizes["start"] == starts
    expected = START + np.array(LEADS).astype("timedelta64[h]")
    np.testing.assert_array_equal(data.valid.values[0], expected)
    assert data.t2m.dtype == np.float32
    np.testing.assert_array_equal(data.t2m.values[0], truth.swapaxes(0, 1))


def test_one_file_per_member(member_files, truth, tmp_path):
    check(open_runs(str(tmp_path / "m{member:02d}.nc")), truth)


def test_one_file_per_start_with_all_members(tmp_path, truth, run_dataset):
    for day in (5, 6):
        runs = [run_dataset(v + (day - 5), start=f"2024-01-0{day}", member=m)
                for m, v in enumerate(truth)]  # fmt: skip
        xr.concat(runs, "realization").to_netcdf(tmp_path / f"{day}.nc")
    data = open_runs(str(tmp_path / "*.nc"))
    check(data, truth, starts=2)
    np.testing.assert_array_equal(data.t2m.values[1], (truth + 1).swapaxes(0, 1))


def test_one_file_per_member_and_lead(tmp_path, truth):
    for m, run in enumerate(truth):
        for hour, field in zip(LEADS, run, strict=True):
            data = xr.Dataset(
                {"t2m": (("lat", "lon"), field)},
                coords={"lat": np.linspace(80, -80, 5), "lon": np.arange(6) * 60.0},
            )
            data.to_netcdf(tmp_path / f"20240105_{m:02d}_{hour:03.0f}.nc")
    check(open_runs(str(tmp_path / "{start:%Y%m%d}_{member:02d}_{lead:03d}.nc")), truth)
    check(open_runs(str(tmp_path / "*_{member:02d}_{lead:03d}.nc"), start="2024-01-05"), truth)


def test_several_leads_per_file(tmp_path, truth, run_dataset):
    for m, run in enumerate(truth):
        for part in (slice(0, 3), slice(3, 4)):
            data = run_dataset(run[part], leads=tuple(LEADS[part]), member=m)
            data.to_netcdf(tmp_path / f"{m}_{part.start}.nc")
    check(open_runs(str(tmp_path / "*.nc")), truth)


@pytest.mark.parametrize(
    ("lead", "attributes"),
    [
        (np.array(LEADS, "f4"), {"units": "hours", "standard_name": "forecast_period"}),
        (np.array(LEADS, "f4") / 24, {"units": "days", "standard_name": "forecast_period"}),
        (np.array(LEADS, "i4") * 60, {"units": "minutes", "standard_name": "forecast_period"}),
        (np.array(LEADS, "i8").astype("timedelta64[h]").astype("timedelta64[ns]"), {}),
    ],
)
def test_lead_units_and_dimension_order(tmp_path, truth, lead, attributes):
    # The names are foreign and the order is unusual: (member, latitude, longitude, lead).
    data = xr.Dataset(
        {"t2m": (("number", "lat", "lon", "step"), np.moveaxis(truth, 1, -1))},
        coords={
            "number": [0, 1, 2],
            "step": ("step", lead, attributes),
            "lat": ("lat", np.linspace(80, -80, 5), {"units": "degrees_north"}),
            "lon": ("lon", np.arange(6) * 60.0, {"units": "degrees_east"}),
            "time": ((), START, {"standard_name": "forecast_reference_time"}),
        },
    )
    data.to_netcdf(tmp_path / "all.nc")
    check(open_runs(tmp_path / "all.nc"), truth)


def test_standard_names_go_before_names(tmp_path, truth):
    # Every name here suggests another role than the standard_name states.
    data = xr.Dataset(
        {"t2m": (("level", "time", "number", "step"), truth)},
        coords={
            "level": ("level", [0, 1, 2], {"standard_name": "realization"}),
            "time": ("time", LEADS, {"standard_name": "forecast_period", "units": "hours"}),
            "number": ("number", np.linspace(80, -80, 5), {"standard_name": "latitude"}),
            "step": ("step", np.arange(6) * 60.0, {"standard_name": "longitude"}),
            "lat": ((), START, {"standard_name": "forecast_reference_time"}),
        },
    )
    data.to_netcdf(tmp_path / "all.nc")
    check(open_runs(tmp_path / "all.nc"), truth)


def test_time_dimension_with_auxiliary_forecast_period(tmp_path, truth, run_dataset):
    for m, run in enumerate(truth):
        data = run_dataset(run, member=m).drop_vars("forecast_reference_time")
        data = data.assign_coords(
            forecast_period=("time", LEADS, {"standard_name": "forecast_period", "units": "hours"})
        )
        data.to_netcdf(tmp_path / f"{m}.nc")
    check(open_runs(str(tmp_path / "*.nc")), truth)


def test_starts_and_leads_along_one_dimension(tmp_path, truth):
    # A time dimension that runs through two starts, as joined files have it.
    values = np.concatenate([truth, truth + 1], axis=1)
    starts = np.repeat([START, START + np.timedelta64(24, "h")], 4)
    data = xr.Dataset(
        {"t2m": (("realization", "record", "lat", "lon"), values)},
        coords={
            "realization": ("realization", [0, 1, 2]),
            "forecast_reference_time": (
                "record", starts, {"standard_name": "forecast_reference_time"}),
            "forecast_period": (
                "record", LEADS * 2, {"standard_name": "forecast_period", "units": "hours"}),
            "lat": np.linspace(80, -80, 5),
            "lon": np.arange(6) * 60.0,
        },
    )  # fmt: skip
    data.to_netcdf(tmp_path / "all.nc")
    opened = open_runs(tmp_path / "all.nc")
    check(opened, truth, starts=2)
    np.testing.assert_array_equal(opened.t2m.values[1], (truth + 1).swapaxes(0, 1))


def test_two_dimensional_valid_time(tmp_path, truth):
    starts = np.array([START, START + np.timedelta64(12, "h")])
    valid = starts[:, None] + np.array(LEADS).astype("timedelta64[h]")
    data = xr.Dataset(
        {"t2m": (("start", "n", "member", "lat", "lon"),
                 np.stack([truth, truth + 1]).swapaxes(1, 2))},
        coords={
            "start": ("start", starts, {"standard_name": "forecast_reference_time"}),
            "time": (("start", "n"), valid, {"standard_name": "time"}),
            "lat": np.linspace(80, -80, 5),
            "lon": np.arange(6) * 60.0,
        },
    ).rename(n="lead")  # fmt: skip
    data.to_netcdf(tmp_path / "all.nc")
    check(open_runs(tmp_path / "all.nc"), truth, starts=2)


@pytest.mark.parametrize("form", ["NETCDF3_CLASSIC", "NETCDF3_64BIT", "NETCDF4", "NETCDF4_CLASSIC"])
def test_file_formats(tmp_path, truth, run_dataset, form):
    for m, run in enumerate(truth):
        run_dataset(run, member=m).to_netcdf(tmp_path / f"{m}.nc", format=form)
    check(open_runs(str(tmp_path / "*.nc")), truth)


@pytest.mark.parametrize("south_first", [True, False])
@pytest.mark.parametrize("first_longitude", [0.0, -180.0])
def test_the_order_of_the_source_is_kept(
    tmp_path, truth, run_dataset, south_first, first_longitude
):
    for m, run in enumerate(truth):
        run_dataset(
            run, member=m, south_first=south_first, first_longitude=first_longitude
        ).to_netcdf(tmp_path / f"{m}.nc")
    data = open_runs(str(tmp_path / "*.nc"))
    check(data, truth)
    assert (np.diff(data.latitude) > 0).all() == south_first
    assert data.longitude.values[0] == first_longitude
    assert data.latitude.attrs["units"] == "degrees_north"


def test_other_calendar(tmp_path, truth, run_dataset):
    for m, run in enumerate(truth):
        data = run_dataset(run, member=m)
        dates = [cftime.Datetime360Day(2024, 2, 30) + np.timedelta64(int(h), "h").item()
                 for h in LEADS]  # fmt: skip
        data = data.assign_coords(
            time=("time", dates, {"standard_name": "time"}),
            forecast_reference_time=(
                (), cftime.Datetime360Day(2024, 2, 30), {"standard_name": "forecast_reference_time"}
            ),
        )  # fmt: skip
        data.to_netcdf(tmp_path / f"{m}.nc")
    opened = open_runs(str(tmp_path / "*.nc"))
    assert opened.start.values[0] == cftime.Datetime360Day(2024, 2, 30)
    assert opened.valid.values[0, -1] == cftime.Datetime360Day(2024, 3, 1)
    assert opened.lead.values.tolist() == LEADS
    assert read_catalogue(str(tmp_path / "*.nc")).calendar == "360_day"
    np.testing.assert_array_equal(opened.t2m.values[0], truth.swapaxes(0, 1))


def test_members_named_by_text(tmp_path, truth, run_dataset):
    for name, run in zip(("ctl", "p1", "p2"), truth, strict=True):
        run_dataset(run).to_netcdf(tmp_path / f"run_{name}.nc")
    data = open_runs(str(tmp_path / "run_{member}.nc"))
    assert data.member.values.tolist() == ["ctl", "p1", "p2"]
    np.testing.assert_array_equal(data.t2m.values[0], truth.swapaxes(0, 1))


def test_members_as_characters(tmp_path, truth):
    with netCDF4.Dataset(tmp_path / "a.nc", "w") as file:
        for name, size in (("ens", 3), ("n", 4), ("step", 4), ("lat", 5), ("lon", 6)):
            file.createDimension(name, size)
        label = file.createVariable("realization", "S1", ("ens", "n"))
        label.standard_name = "realization"
        label[:] = netCDF4.stringtochar(np.array(["m001", "m002", "m003"], "S4"))
        step = file.createVariable("step", "f8", ("step",))
        step.units, step[:] = "hours", LEADS
        start = file.createVariable("start", "f8")
        start.units, start[...] = "hours since 2024-01-05", 0
        values = file.createVariable("t2m", "f4", ("ens", "step", "lat", "lon"))
        values.coordinates, values[:] = "realization start", truth
    data = open_runs(tmp_path / "a.nc")
    assert data.member.values.tolist() == ["m001", "m002", "m003"]
    np.testing.assert_array_equal(data.t2m.values[0], truth.swapaxes(0, 1))


def test_variables_in_files_of_their_own(tmp_path, truth, run_dataset):
    for m, run in enumerate(truth):
        run_dataset(run).to_netcdf(tmp_path / f"t2m_{m}.nc")
        run_dataset(run * 2, name="msl", units="Pa").to_netcdf(tmp_path / f"msl_{m}.nc")
    for wanted in (None, ["t2m", "msl"]):
        data = open_runs(str(tmp_path / "*_{member:d}.nc"), variables=wanted)
        check(data, truth)
        np.testing.assert_array_equal(data.msl.values[0], (truth * 2).swapaxes(0, 1))
        assert data.msl.attrs["units"] == "Pa"


def test_time_beside_lead_without_start_is_refused(tmp_path, truth):
    data = xr.Dataset(
        {"t2m": (("time", "step", "lat", "lon"), truth)},
        coords={
            "time": ("time", START + np.arange(3).astype("timedelta64[D]")),
            "step": ("step", LEADS, {"units": "hours"}),
        },
    )
    data.to_netcdf(tmp_path / "a.nc")
    with pytest.raises(InputError, match="if 'time' holds starts, give it the standard_name"):
        open_runs(tmp_path / "a.nc")


def test_no_reference_time(tmp_path, truth, run_dataset):
    for m, run in enumerate(truth):
        run_dataset(run).drop_vars("forecast_reference_time").to_netcdf(tmp_path / f"m{m:02d}.nc")
    with pytest.raises(InputError) as caught:
        open_runs(str(tmp_path / "m{member:02d}.nc"))
    assert "expected a reference time" in str(caught.value)
    assert "use a template with {start}" in str(caught.value)
    assert "or give start=" in str(caught.value)
    check(open_runs(str(tmp_path / "m{member:02d}.nc"), start="2024-01-05"), truth)


def test_analyses_need_no_reference_time(tmp_path, truth, run_dataset):
    for day, fields in zip((5, 6), truth, strict=False):
        data = run_dataset(fields, start=f"2024-01-0{day}").drop_vars("forecast_reference_time")
        data.to_netcdf(tmp_path / f"{day}.nc")
    opened = open_analyses(str(tmp_path / "*.nc"))
    assert opened.t2m.dims == ("valid", "latitude", "longitude")
    assert opened.valid.values[0] == START + np.timedelta64(6, "h")
    np.testing.assert_array_equal(opened.t2m.values, np.concatenate([truth[0], truth[1]]))


def test_a_point_series_named_like_a_time(tmp_path, truth):
    data = xr.Dataset(
        {"t": (("step",), truth[0, :, 0, 0], {"units": "K", "standard_name": "air_temperature"})},
        coords={"step": ("step", LEADS, {"units": "hours"}), "start": ((), START)},
    )
    data.to_netcdf(tmp_path / "a.nc")
    opened = open_runs(tmp_path / "a.nc")
    np.testing.assert_array_equal(opened.t.values[0, :, 0], truth[0, :, 0, 0])


def test_leads_in_model_time(tmp_path, truth):
    data = xr.Dataset(
        {"v": (("start", "lead", "member", "cell"), truth.reshape(1, 4, 3, 30))},
        coords={
            "start": ("start", [START], {"standard_name": "forecast_reference_time"}),
            "lead": ("lead", [0.0, 0.1, 0.2, 0.3],
                     {"standard_name": "forecast_period", "units": "1"}),
            "member": [0, 1, 2],
        },
    )  # fmt: skip
    data.to_netcdf(tmp_path / "toy.nc")
    opened = open_runs(tmp_path / "toy.nc")
    assert opened.lead.attrs["units"] == "1"
    assert opened.lead.values.tolist() == [0.0, 0.1, 0.2, 0.3]
    assert "valid" not in opened.coords
    np.testing.assert_array_equal(opened.v, data.v)


def test_lead_of_the_name_and_of_the_file_disagree(tmp_path, truth, run_dataset):
    run_dataset(truth[0, :1]).to_netcdf(tmp_path / "012.nc")
    (fault,) = read_catalogue(str(tmp_path / "{lead:03d}.nc")).faults
    assert fault.kind == "time-mismatch"
    assert fault.message == "lead 6 h inside the file, 12 h in its name"
