"""Stored numbers and values: packing, fill values, and the fast reader against the library."""

import netCDF4
import numpy as np
import pytest

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.runs import close_files, open_runs, read_catalogue


def write(path, stored, attributes=None, fill=None, form="NETCDF4", chunks=None, dims=None):
    """Write one variable exactly as stored, and return the library's own decoding of it."""
    dims = dims or ("member", "step", "lat", "lon")
    with netCDF4.Dataset(path, "w", format=form) as file:
        for name, size in zip(dims, stored.shape, strict=True):
            file.createDimension(name, size)
        step = file.createVariable("step", "f8", ("step",))
        step.units = "hours"
        step[:] = 6.0 * np.arange(1, stored.shape[dims.index("step")] + 1)
        start = file.createVariable("start", "f8")
        start.units, start[...] = "hours since 2024-01-05", 0
        options = {} if chunks is None else {"chunksizes": chunks, "zlib": True}
        values = file.createVariable("v", stored.dtype, dims, fill_value=fill, **options)
        values.setncatts({"units": "K", **(attributes or {})})
        values.set_auto_maskandscale(False)
        values[:] = stored
    with netCDF4.Dataset(path) as file:
        # netCDF4-python is the outside reference for what the attributes mean.
        return np.ma.filled(np.ma.asarray(file["v"][:], dtype="f8"), np.nan)


def numbers(dtype, low, high):
    rng = np.random.default_rng(7)
    return rng.integers(low, high, (3, 4, 5, 6), endpoint=True).astype(dtype)


CASES = {
    "packed": (numbers("i2", -300, 300), {"scale_factor": 0.01, "add_offset": 273.15}, None),
    "packed with fill": (
        numbers("i2", -5, 5), {"scale_factor": 0.01, "add_offset": 273.15}, -5),
    "missing value": (numbers("i2", -5, 5), {"missing_value": np.int16(3)}, None),
    "two missing values": (
        numbers("i2", -5, 5), {"missing_value": np.array([3, 4], "i2")}, -5),
    "unsigned bytes": (
        numbers("i1", -128, 127), {"_Unsigned": "true", "scale_factor": 0.5}, -1),
    "unsigned shorts": (numbers("u2", 0, 65535), {"scale_factor": np.float32(0.1)}, 65535),
    "valid range": (numbers("i2", -9, 9), {"valid_range": np.array([-4, 4], "i2")}, None),
    "valid minimum": (numbers("f4", -9, 9), {"valid_min": np.float32(-4)}, None),
    "long integers": (numbers("i4", -9, 9), {"scale_factor": 0.1}, 2),
    "doubles": (numbers("f8", -9, 9), {}, 2.0),
    "float fill": (numbers("f4", -9, 9), {}, np.float32(2.0)),
    "float nan fill": (np.where(numbers("f4", 0, 3) == 1, np.nan, 7).astype("f4"), {}, np.nan),
    "cells never written": (
        np.where(numbers("f4", 0, 3) == 1, netCDF4.default_fillvals["f4"], 7).astype("f4"),
        {}, None),
}  # fmt: skip


@pytest.mark.parametrize("form", ["NETCDF3_64BIT_DATA", "NETCDF4"])
@pytest.mark.parametrize("case", CASES)
def test_decoding_matches_the_library(tmp_path, case, form):
    stored, attributes, fill = CASES[case]
    expected = write(tmp_path / "a.nc", stored, attributes, fill, form)
    catalogue = read_catalogue(tmp_path / "a.nc")
    values = catalogue.read("v", 0)
    wide = stored.dtype in (np.dtype("i4"), np.dtype("f8"))
    assert values.dtype == catalogue.dtype("v") == (np.float64 if wide else np.float32)
    np.testing.assert_allclose(values, expected, rtol=2e-7)
    assert np.isnan(values).any() == np.isnan(expected).any()


def test_packing_is_not_left_in_the_attributes(tmp_path):
    write(tmp_path / "a.nc", *CASES["packed"])
    data = open_runs(tmp_path / "a.nc")
    assert data.v.attrs == {"units": "K"}


@pytest.mark.parametrize(
    "dims",
    [
        ("member", "step", "lat", "lon"), ("step", "member", "lat", "lon"),
        ("lat", "lon", "step", "member"), ("step", "lat", "member", "lon"),
    ],
)  # fmt: skip
@pytest.mark.parametrize(
    ("leads", "members", "window"),
    [
        (slice(None), slice(None), ()),
        (slice(1, 3), [2], (slice(0, 5), slice(2, 4))),
        ([3, 0], [2, 0], (slice(1, 2), slice(None))),
        ([0, 9, 5], slice(0, 2), ()),
        (2, 1, ()),
    ],
)
def test_any_part_in_any_order(tmp_path, dims, leads, members, window):
    usual = ("member", "step", "lat", "lon")
    values = np.random.default_rng(1).normal(size=(3, 10, 5, 6)).astype("f4")
    stored = values.transpose([usual.index(name) for name in dims])
    write(tmp_path / "a.nc", np.ascontiguousarray(stored), dims=dims)
    part = read_catalogue(tmp_path / "a.nc").read("v", 0, leads, members, window)
    rows = np.arange(3)[members].reshape(-1, 1)
    columns = np.arange(10)[leads].reshape(1, -1)
    expected = values[rows, columns]
    if window:
        expected = expected[(slice(None), slice(None), *window)]
    np.testing.assert_array_equal(part, expected)


def test_absent_fields_are_nan(tmp_path, truth, run_dataset):
    run_dataset(truth[0], member=0).to_netcdf(tmp_path / "0.nc")
    run_dataset(truth[1, :2], leads=(6.0, 12.0), member=1).to_netcdf(tmp_path / "1.nc")
    catalogue = read_catalogue(str(tmp_path / "*.nc"))
    present = np.array([[[True, True], [True, True], [True, False], [True, False]]])
    np.testing.assert_array_equal(catalogue.present("t2m"), present)
    values = catalogue.read("t2m", 0)
    np.testing.assert_array_equal(values[0], truth[0])
    np.testing.assert_array_equal(values[1, :2], truth[1, :2])
    assert np.isnan(values[1, 2:]).all()


def test_window_must_fit(member_files):
    catalogue = read_catalogue(member_files[0])
    with pytest.raises(ArgumentError, match="expected 2 slices"):
        catalogue.read("t2m", 0, window=(slice(0, 2),))
    with pytest.raises(ArgumentError, match="without a step"):
        catalogue.read("t2m", 0, window=(slice(0, 4, 2), slice(None)))
    with pytest.raises(ArgumentError, match="did you mean 't2m'"):
        catalogue.read("t2", 0)


def test_blocks_follow_the_chunks(tmp_path):
    stored = np.zeros((2, 12, 40, 60), "f4")
    field = 2 * 40 * 60 * 4

    def block(chunks, budget):
        write(tmp_path / "a.nc", stored, chunks=chunks)
        found = read_catalogue(tmp_path / "a.nc").blocks(("v",), 0, budget)
        first = [found.leads[0], *(spans[0] for spans in found.axes)]
        assert found.size == 8 * np.prod([stop for _, stop in first])
        return first[0][1], tuple(stop for _, stop in first[1:])

    assert block((1, 1, 40, 60), 2 * field) == (2, (40, 60))
    assert block((1, 1, 40, 60), field - 1)[1] == (40, 60)
    assert block((1, 4, 40, 60), 9 * field) == (8, (40, 60))
    assert block((1, 4, 40, 60), 99 * field) == (12, (40, 60))
    # Four leads of everything are too much: rows of chunks, never a part of a chunk.
    assert block((1, 4, 10, 60), 2 * field) == (4, (20, 60))
    assert block((1, 12, 10, 15), 1 * field) == (12, (10, 15))
    assert block((1, 12, 10, 15), 1) == (12, (10, 15))
    assert block(None, field // 2) == (1, (20, 60))


def test_every_chunk_is_read_once(tmp_path, monkeypatch):
    from ensemble_horizon.runs import opening, reading

    stored = np.random.default_rng(3).normal(size=(2, 12, 40, 60)).astype("f4")
    write(tmp_path / "a.nc", stored, chunks=(1, 4, 10, 20))
    chunks: list[tuple] = []
    original = reading._read_slab

    def counting(source, variable, along, bounds):
        ranges = [(int(a[0]), int(a[-1]) + 1) for a in along] + list(bounds)
        spans = [range(first // size, -(-last // size))
                 for (first, last), size in zip(ranges, (1, 4, 10, 20), strict=True)]  # fmt: skip
        chunks.extend((a, b, c, d) for a in spans[0] for b in spans[1]
                      for c in spans[2] for d in spans[3])  # fmt: skip
        return original(source, variable, along, bounds)

    monkeypatch.setattr(reading, "_read_slab", counting)
    catalogue = read_catalogue(tmp_path / "a.nc")
    data = opening.to_dataset(catalogue, budget=2 * 12 * 10 * 60 * 4 // 2)
    np.testing.assert_array_equal(data.v.values[0], stored.swapaxes(0, 1))
    assert data.v.data.npartitions == 12
    assert len(chunks) == len(set(chunks)) == 2 * 3 * 4 * 3


def test_subset_and_without(member_files, truth, tmp_path):
    catalogue = read_catalogue(str(tmp_path / "m{member:02d}.nc"))
    two = catalogue.subset(members=[2, 0])
    assert two.members == (2, 0)
    np.testing.assert_array_equal(two.read("t2m", 0), truth[[2, 0]])
    rest = catalogue.without([1, 99])
    assert rest.members == (0, 2)
    np.testing.assert_array_equal(rest.read("t2m", 0), truth[[0, 2]])
    masked = catalogue.without(at=[("2024-01-05T00:00", 1)])
    assert masked.members == (0, 1, 2)
    assert np.isnan(masked.read("t2m", 0)[1]).all()
    assert len({catalogue.token, two.token, rest.token, masked.token}) == 4
    close_files()
