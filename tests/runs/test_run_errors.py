"""One clear message for each thing that can be wrong with the input."""

import netCDF4
import numpy as np
import pytest

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs import open_runs, read_catalogue


def message(files, **options):
    with pytest.raises(InputError) as caught:
        read_catalogue(files, **options)
    return str(caught.value)


def test_missing_file(tmp_path):
    path = tmp_path / "gone.nc"
    assert message(path) == (
        f"{path}: expected a NetCDF file; found no such file. "
        "Next: check the path, or wait until the run has written it."
    )


@pytest.mark.parametrize(
    ("content", "found"),
    [
        (b"lead,member,t2m\n6,0,280.1\n", "a text file"),
        (b"", "an empty file"),
        (b"GRIB\x00\x00\x01\x02", "a GRIB file"),
        (b"\x1f\x8b\x08\x00rest", "a gzip-compressed file"),
        (b"\x00\x01\x02\x03" * 9, "a file of another format"),
    ],
)
def test_not_netcdf(tmp_path, content, found):
    path = tmp_path / "a.nc"
    path.write_bytes(content)
    assert message(path) == (
        f"{path}: expected a NetCDF file; found {found}. "
        "Next: convert the file to NetCDF, or leave it out."
    )


@pytest.mark.parametrize("form", ["NETCDF3_CLASSIC", "NETCDF3_64BIT", "NETCDF4"])
def test_truncated(tmp_path, truth, run_dataset, form):
    path = tmp_path / "a.nc"
    run_dataset(truth[0]).to_netcdf(path, format=form)
    size = path.stat().st_size
    with path.open("r+b") as stream:
        stream.truncate(size - 200)
    text = message(path)
    assert text.startswith(f"{path}: expected a complete NetCDF file; found a ")
    assert text.endswith("Next: transfer the file again, or leave it out.")
    if form != "NETCDF4":
        assert "found a file cut short by 200 bytes" in text


@pytest.mark.parametrize("version", ["NETCDF3_CLASSIC", "NETCDF3_64BIT", "NETCDF3_64BIT_DATA"])
@pytest.mark.parametrize("records", [0, 1, 3])
@pytest.mark.parametrize("variables", [1, 2])
def test_complete_classic_files_are_not_called_truncated(tmp_path, version, records, variables):
    from ensemble_horizon.runs.classic import classic_shortfall

    path = tmp_path / "a.nc"
    with netCDF4.Dataset(path, "w", format=version) as file:
        file.createDimension("time", None)
        file.createDimension("x", 7)
        file.title = "odd"
        fixed = file.createVariable("x", "i2", ("x",))
        fixed.units, fixed[:] = "m", 1
        for number in range(variables):
            values = file.createVariable(f"v{number}", "i1" if number else "i2", ("time", "x"))
            if records:
                values[:records] = np.ones((records, 7))
    assert classic_shortfall(str(path)) == 0
    with path.open("r+b") as stream:
        stream.truncate(path.stat().st_size - 4)
    assert classic_shortfall(str(path)) > 0


def test_variable_that_is_not_there(tmp_path, truth, run_dataset):
    path = tmp_path / "a.nc"
    data = run_dataset(truth[0])
    data["msl"] = data.t2m * 2
    data.to_netcdf(path)
    assert message(path, variables="tm2") == (
        f"{path}: expected the variable 'tm2'; found the variables t2m, msl. "
        "Next: ask for t2m, which is nearest."
    )
    assert "Next: take one of those named" in message(path, variables="qqq")


def test_one_absent_variable_of_two_is_refused_too(member_files):
    text = message(member_files[0], variables=["t2m", "t2n"])
    assert "expected the variable 't2n'; found the variables t2m" in text


def test_no_data_variable(tmp_path):
    path = tmp_path / "a.nc"
    with netCDF4.Dataset(path, "w") as file:
        file.createDimension("x", 3)
        file.createVariable("x", "f4", ("x",))[:] = 1
    assert "expected a data variable; found only x" in message(path)


def test_undecodable_time(tmp_path, truth, run_dataset):
    path = tmp_path / "a.nc"
    run_dataset(truth[0]).to_netcdf(path)
    with netCDF4.Dataset(path, "a") as file:
        file["time"].units = "hours since yesterday"
    assert "expected times in 'time'" in message(path)


def test_differing_starts_name_the_remedy(tmp_path, truth, run_dataset):
    for m, run in enumerate(truth):
        run_dataset(run, start=f"2024-01-0{m + 1}", member=m).to_netcdf(tmp_path / f"{m}.nc")
    text = message(str(tmp_path / "*.nc"))
    assert "expected members that share their starts" in text
    assert "found 3 members, each under one of 3 starts only" in text
    assert "set lagged = true if this is a lagged ensemble" in text


def test_members_without_numbers(member_files):
    text = message(member_files)
    assert "expected a member number (realization)" in text
    assert f"the same start and lead in {member_files[0]}" in text
    assert "use a template with {member}" in text


def test_broken_files_become_faults_and_the_rest_is_read(member_files, tmp_path, truth):
    member_files[1].write_text("no data today")
    template = str(tmp_path / "m{member:02d}.nc")
    catalogue = read_catalogue(template)
    assert catalogue.members == (0, 2)
    (fault,) = catalogue.faults
    assert (fault.kind, fault.member) == ("unreadable-file", 1)
    assert fault.message == "expected a NetCDF file; found a text file"
    np.testing.assert_array_equal(catalogue.read("t2m", 0), truth[[0, 2]])
    with pytest.raises(InputError, match="found a text file"):
        read_catalogue(template, strict=True)


def test_other_units_become_a_fault(tmp_path, truth, run_dataset):
    for m, run in enumerate(truth):
        units = ("K", "degC", "kelvin")[m]
        run_dataset(run, units=units).to_netcdf(tmp_path / f"m{m:02d}.nc")
    catalogue = read_catalogue(str(tmp_path / "m{member:02d}.nc"))
    (fault,) = catalogue.faults
    assert (fault.kind, fault.member) == ("unit-difference", 1)
    assert fault.message == "'t2m' in 'degC', where the others have 'K'"
    assert catalogue.members == (0, 2)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda data: data.isel(longitude=slice(0, 5)), "5 x 5 points instead of 5 x 6"),
        (lambda data: data.assign_coords(latitude=data.latitude + 0.5),
         "latitude that differs by up to 0.5"),
        (lambda data: data.isel(latitude=slice(None, None, -1)),
         "latitude that differs by up to 160"),
    ],
)  # fmt: skip
def test_other_grid_becomes_a_fault(tmp_path, truth, run_dataset, change, words):
    for m, run in enumerate(truth):
        data = run_dataset(run)
        (change(data) if m == 1 else data).to_netcdf(tmp_path / f"m{m:02d}.nc")
    catalogue = read_catalogue(str(tmp_path / "m{member:02d}.nc"))
    (fault,) = catalogue.faults
    assert (fault.kind, fault.member) == ("grid-difference", 1)
    assert words in fault.message
    with pytest.raises(InputError, match="expected files that agree with each other"):
        read_catalogue(str(tmp_path / "m{member:02d}.nc"), strict=True)


def test_leads_out_of_order_are_read_in_order(tmp_path, truth, run_dataset):
    for m, run in enumerate(truth):
        data = run_dataset(run)
        (data.isel(time=[2, 0, 3, 1]) if m == 1 else data).to_netcdf(tmp_path / f"m{m:02d}.nc")
    catalogue = read_catalogue(str(tmp_path / "m{member:02d}.nc"))
    (fault,) = catalogue.faults
    assert (fault.kind, fault.member) == ("leads-out-of-order", 1)
    np.testing.assert_array_equal(catalogue.read("t2m", 0), truth)
    np.testing.assert_array_equal(catalogue.read("t2m", 0, slice(1, 3), [1]), truth[[1], 1:3])


def test_doubled_leads(tmp_path, truth, run_dataset):
    for m, run in enumerate(truth):
        data = run_dataset(run)
        (data.isel(time=[0, 1, 1, 2, 3]) if m == 1 else data).to_netcdf(tmp_path / f"m{m:02d}.nc")
    catalogue = read_catalogue(str(tmp_path / "m{member:02d}.nc"))
    (fault,) = catalogue.faults
    assert (fault.kind, fault.member, fault.lead) == ("duplicate-lead", 1, 12.0)
    assert fault.message == "lead 12 h of 't2m' is there twice; the first is used"
    np.testing.assert_array_equal(catalogue.read("t2m", 0), truth)


def test_one_member_is_allowed(member_files, truth):
    data = open_runs(member_files[0])
    assert data.member.values.tolist() == [0]
    np.testing.assert_array_equal(data.t2m.values[0, :, 0], truth[0])


def test_the_name_and_the_file_disagree(tmp_path, truth, run_dataset):
    run_dataset(truth[0], start="2024-01-04").to_netcdf(tmp_path / "20240105.nc")
    catalogue = read_catalogue(str(tmp_path / "{start:%Y%m%d}.nc"))
    (fault,) = catalogue.faults
    assert fault.kind == "time-mismatch"
    assert "2024-01-04T00:00 inside the file, 2024-01-05T00:00 in its name" in fault.message


def test_a_file_that_breaks_later_says_so(member_files):
    catalogue = read_catalogue(member_files[0])
    member_files[0].unlink()
    with pytest.raises(InputError, match="found no such file"):
        catalogue.read("t2m", 0)


def test_damaged_data_inside_a_sound_file(tmp_path):
    path = tmp_path / "a.nc"
    rng = np.random.default_rng(0)
    with netCDF4.Dataset(path, "w") as file:
        for name, size in (("step", 4), ("lat", 50), ("lon", 60)):
            file.createDimension(name, size)
        step = file.createVariable("step", "f8", ("step",))
        step.units, step[:] = "hours", [6, 12, 18, 24]
        start = file.createVariable("start", "f8")
        start.units, start[...] = "hours since 2024-01-05", 0
        values = file.createVariable(
            "v", "f4", ("step", "lat", "lon"), zlib=True, chunksizes=(1, 50, 60)
        )
        values[:] = rng.normal(size=(4, 50, 60))
    content = bytearray(path.read_bytes())
    middle = len(content) // 2
    content[middle : middle + 64] = bytes(64)
    path.write_bytes(content)
    catalogue = read_catalogue(path)
    with pytest.raises(InputError) as caught:
        catalogue.read("v", 0)
    assert "expected to read 'v'; found a read error" in str(caught.value)
    assert "the file is damaged" in str(caught.value)
