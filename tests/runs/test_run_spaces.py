"""Space in the files: grids of every kind, levels, and dimensions nobody knows."""

import numpy as np
import pytest
import xarray as xr

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs import open_runs, read_catalogue

START = np.datetime64("2024-01-05T00:00", "ns")
LEADS = [6.0, 12.0, 18.0, 24.0]


def curvilinear(truth, projected=True):
    x, y = np.arange(6) * 1e4, np.arange(5) * 1e4
    coords = {
        "member": [0, 1, 2],
        "step": ("step", LEADS, {"units": "hours"}),
        "start": ((), START),
        "lat": (("y", "x"), 50 + y[:, None] / 1e5 + x / 1e7, {"units": "degrees_north"}),
        "lon": (("y", "x"), 5 + x[None, :] / 7e4 + y[:, None] * 0, {"units": "degrees_east"}),
    }
    if projected:
        coords["y"] = ("y", y, {"standard_name": "projection_y_coordinate", "units": "m"})
        coords["x"] = ("x", x, {"standard_name": "projection_x_coordinate", "units": "m"})
    return xr.Dataset({"t2m": (("member", "step", "y", "x"), truth)}, coords=coords)


@pytest.mark.parametrize("projected", [True, False])
def test_two_dimensional_coordinates(tmp_path, truth, projected):
    source = curvilinear(truth, projected)
    source.to_netcdf(tmp_path / "a.nc")
    data = open_runs(tmp_path / "a.nc")
    assert data.t2m.dims == ("start", "lead", "member", "y", "x")
    assert data.latitude.dims == data.longitude.dims == ("y", "x")
    np.testing.assert_array_equal(data.latitude, source.lat)
    assert ("y" in data.coords) == projected
    assert read_catalogue(tmp_path / "a.nc").grid.kind == "curvilinear"
    np.testing.assert_array_equal(data.t2m.values[0], truth.swapaxes(0, 1))


def test_foreign_names_of_two_dimensional_coordinates(tmp_path, truth):
    renamed = curvilinear(truth, projected=False).rename(
        y="south_north", x="west_east", lat="XLAT", lon="XLONG"
    )
    renamed.to_netcdf(tmp_path / "a.nc")
    data = open_runs(tmp_path / "a.nc")
    assert data.t2m.dims == ("start", "lead", "member", "y", "x")
    np.testing.assert_array_equal(data.longitude, renamed.XLONG)


def test_unstructured_cells(tmp_path, truth):
    flat = truth.reshape(3, 4, 30)
    data = xr.Dataset(
        {"t2m": (("member", "step", "ncells"), flat)},
        coords={
            "step": ("step", LEADS, {"units": "hours"}),
            "start": ((), START),
            "clat": ("ncells", np.linspace(-80, 80, 30), {"units": "degrees_north"}),
            "clon": ("ncells", np.linspace(0, 350, 30), {"units": "degrees_east"}),
        },
    )
    data.to_netcdf(tmp_path / "a.nc")
    opened = open_runs(tmp_path / "a.nc")
    assert opened.t2m.dims == ("start", "lead", "member", "cell")
    assert read_catalogue(tmp_path / "a.nc").grid.kind == "cells"
    np.testing.assert_array_equal(opened.latitude, data.clat)
    np.testing.assert_array_equal(opened.t2m.values[0], flat.swapaxes(0, 1))


def test_point_series(tmp_path, truth):
    series = truth[:, :, 0, 0]
    data = xr.Dataset(
        {"t2m": (("member", "step"), series)},
        coords={
            "step": ("step", LEADS, {"units": "hours"}),
            "start": ((), START),
            "lat": ((), 52.0, {"units": "degrees_north"}),
            "lon": ((), 4.5, {"units": "degrees_east"}),
        },
    )
    data.to_netcdf(tmp_path / "a.nc")
    opened = open_runs(tmp_path / "a.nc")
    assert opened.t2m.dims == ("start", "lead", "member")
    assert read_catalogue(tmp_path / "a.nc").grid.kind == "none"
    assert float(opened.latitude) == 52.0
    np.testing.assert_array_equal(opened.t2m.values[0], series.T)


def with_levels(truth):
    values = np.stack([truth, truth + 100, truth + 200], axis=2)
    return xr.Dataset(
        {"t": (("member", "step", "plev", "lat", "lon"), values),
         "t2m": (("member", "step", "lat", "lon"), truth)},
        coords={
            "step": ("step", LEADS, {"units": "hours"}),
            "start": ((), START),
            "plev": ("plev", [1000.0, 850.0, 500.0], {"units": "hPa"}),
            "lat": np.linspace(80, -80, 5),
            "lon": np.arange(6) * 60.0,
        },
    )  # fmt: skip


@pytest.mark.parametrize("level", [850, 850.0, {"t": 850}])
def test_level_chosen_by_value(tmp_path, truth, level):
    with_levels(truth).to_netcdf(tmp_path / "a.nc")
    opened = open_runs(tmp_path / "a.nc", level=level)
    np.testing.assert_array_equal(opened.t.values[0], (truth + 100).swapaxes(0, 1))
    np.testing.assert_array_equal(opened.t2m.values[0], truth.swapaxes(0, 1))


def test_level_not_chosen(tmp_path, truth):
    with_levels(truth).to_netcdf(tmp_path / "a.nc")
    with pytest.raises(InputError) as caught:
        open_runs(tmp_path / "a.nc", variables="t")
    assert "expected one level of 't'" in str(caught.value)
    assert "found 3 levels along 'plev': 1000, 850, 500 hPa" in str(caught.value)
    assert "level=1000" in str(caught.value)
    assert open_runs(tmp_path / "a.nc", variables="t2m").t2m.shape == (1, 4, 3, 5, 6)


def test_level_that_is_not_there(tmp_path, truth):
    with_levels(truth).to_netcdf(tmp_path / "a.nc")
    with pytest.raises(InputError, match=r"expected the level 700 .* found the levels 1000, 850"):
        open_runs(tmp_path / "a.nc", variables="t", level=700)


def test_a_level_asked_of_a_variable_without_levels(tmp_path, truth):
    with_levels(truth).isel(plev=0, drop=True).to_netcdf(tmp_path / "a.nc")
    with pytest.raises(InputError, match=r"expected the level 850 of 't'; found no levels at all"):
        open_runs(tmp_path / "a.nc", variables="t", level={"t": 850})


def test_a_scalar_level_must_be_the_one_asked_for(tmp_path, truth):
    with_levels(truth).isel(plev=1).to_netcdf(tmp_path / "a.nc")
    assert open_runs(tmp_path / "a.nc", variables="t", level={"t": 850}).t.size
    with pytest.raises(InputError, match=r"found one level only, 850"):
        open_runs(tmp_path / "a.nc", variables="t", level={"t": 500})


def test_one_level_needs_no_choice(tmp_path, truth):
    with_levels(truth).isel(plev=[2]).to_netcdf(tmp_path / "a.nc")
    opened = open_runs(tmp_path / "a.nc", variables="t")
    np.testing.assert_array_equal(opened.t.values[0], (truth + 200).swapaxes(0, 1))


def test_unknown_dimension_is_refused(tmp_path, truth):
    data = with_levels(truth).rename(plev="quantity").drop_vars("quantity")
    data.to_netcdf(tmp_path / "a.nc")
    with pytest.raises(InputError, match="found the dimension 'quantity' of size 3"):
        open_runs(tmp_path / "a.nc", variables="t")


def test_variables_with_unknown_dimensions_are_skipped_with_a_note(tmp_path, truth, run_dataset):
    data = run_dataset(truth[0])
    data["odd"] = (("time", "quantity"), np.ones((4, 3)))
    data.to_netcdf(tmp_path / "a.nc")
    catalogue = read_catalogue(tmp_path / "a.nc")
    assert list(catalogue.variables) == ["t2m"]
    (note,) = catalogue.faults
    assert note.kind == "variable-skipped"
    assert "'odd' is left out: the dimension 'quantity' of size 3" in note.message


def test_long_coordinates_are_held_once(tmp_path):
    y, x = np.meshgrid(np.linspace(40, 60, 200), np.linspace(0, 20, 150), indexing="ij")
    for m, shift in enumerate((0.0, 0.0, 0.5)):
        data = xr.Dataset(
            {"v": (("y", "x"), np.full((200, 150), m, "f4"))},
            coords={
                "lat": (("y", "x"), y + shift, {"units": "degrees_north"}),
                "lon": (("y", "x"), x, {"units": "degrees_east"}),
            },
        )
        data.to_netcdf(tmp_path / f"2024010500_{m}_006.nc")
    catalogue = read_catalogue(str(tmp_path / "{start}_{member:d}_{lead:03d}.nc"))
    assert catalogue.members == (0, 1)
    assert [(f.kind, f.member) for f in catalogue.faults] == [("grid-difference", 2)]
    np.testing.assert_array_equal(catalogue.grid.coords["latitude"], y)
