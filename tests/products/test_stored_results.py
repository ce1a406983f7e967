"""Products read back: the same numbers, names, limits and drawings as those that were written."""

from __future__ import annotations

import cftime
import netCDF4
import numpy as np
import pytest
import xarray as xr
from synthetic_products import GRIDS, Result, make_curves, make_maps

from ensemble_horizon.errors import ArgumentError, InputError
from ensemble_horizon.products.curve_file import write_horizon_file
from ensemble_horizon.products.folder import write_products
from ensemble_horizon.products.limits import limits
from ensemble_horizon.products.map_file import write_map_file
from ensemble_horizon.products.nights import night_of
from ensemble_horizon.products.stored import read_provenance, read_results

HOSTILE = 'wind / "speed" <script>alert(1)</script> & söuth; ../..'
STARTS = ("2031-01-05T00", "2031-01-06T12:30")


def written(folder, results, provenance):
    write_horizon_file(folder / "horizons.nc", results, provenance)
    maps = [result.maps for result in results if result.maps is not None]
    if maps:
        write_map_file(folder / "horizon_maps.nc", maps, provenance)
    return read_results(folder)


def assert_same(found, given):
    """Values, dimensions, coordinates; every attribute that was given for the dataset."""
    assert_same_longitude(found, given)
    expected = given.assign({name: given[name].astype(found[name].dtype) for name in given})
    found, expected = (part.drop_vars("longitude", errors="ignore") for part in (found, expected))
    xr.testing.assert_equal(found, expected)
    for name in given.data_vars:
        assert found[name].dims == given[name].dims, name
    for name, value in given.attrs.items():
        assert found.attrs[name] == value, name


def assert_same_longitude(found, given):
    """Up to whole turns: across the date line they rise steadily in a file, as CF asks."""
    assert ("longitude" in found.coords) == ("longitude" in given.coords)
    if "longitude" in given.coords:
        assert found["longitude"].dims == given["longitude"].dims
        turns = (found["longitude"].values - given["longitude"].values) / 360
        np.testing.assert_allclose(turns, np.rint(turns), atol=1e-12)


@pytest.mark.parametrize("pooled", [False, True], ids=["single", "pooled"])
@pytest.mark.parametrize("starts", [STARTS[:1], STARTS], ids=["one", "two"])
def test_curves_come_back(tmp_path, provenance, starts, pooled):
    curves = make_curves(chance=True, pooled=pooled, starts=starts)
    curves = curves.assign_attrs(hold=12.0, confidence=0.9, last_lead=240.0, lead_units="hours")
    rules = ["tolerance 2.5", "saturation fraction 0.7", "chance 0.3 beyond 17"]
    curves = curves.assign_coords(criterion_rule=("criterion", rules))
    (found,) = written(tmp_path, [Result(curves)], provenance)
    assert found.maps is None
    assert_same(found.curves, curves)
    assert found.curves["law"].attrs["flag_values"] == curves["law"].attrs["flag_values"]
    assert found.curves["lead"].attrs["units"] == "hours"
    # repr, because NaN is not equal to itself.
    assert repr(limits([found])) == repr(limits([Result(curves)]))


def test_names_that_no_file_may_have_come_back(tmp_path, provenance):
    names = {"places": (HOSTILE, "a b", "a_b", "é"), "criteria": ("x/y", "x y")}
    results = [
        Result(make_curves(variable=name, long_name=f"{name} long", units=unit, **names))
        for name, unit in ((HOSTILE, "m s-1"), ("wind speed", "furlongs/fortnight"),
                           ("wind/speed", "K"), ("place", "1"), ("start", "1"), ("lead", "1"))
    ]  # fmt: skip
    found = written(tmp_path, results, provenance)
    assert [one.curves.attrs["variable"] for one in found] == [
        HOSTILE, "wind speed", "wind/speed", "place", "start", "lead"
    ]  # fmt: skip
    for one, given in zip(found, results, strict=True):
        assert_same(one.curves, given.curves)
    assert repr(limits(found)) == repr(limits(results))


@pytest.mark.parametrize(
    "pair", [("wind", "wind spread"), ("wind spread", "wind"), ("wind", "wind pooled"),
             ("wind", "wind doubling time"), ("wind criterion", "wind")]
)  # fmt: skip
def test_fields_of_two_variables_do_not_meet_in_one_name(tmp_path, provenance, pair):
    # wind has the field spread_low, and wind spread the field low.
    results = [
        Result(
            make_curves(variable=name, seed=seed, pooled=True),
            make_maps(GRIDS["tiny"](), variable=name, seed=seed),
        )
        for seed, name in enumerate(pair)
    ]
    for one, given in zip(written(tmp_path, results, provenance), results, strict=True):
        assert_same(one.curves, given.curves)
        assert_same(one.maps.drop_vars("start_label"), given.maps.drop_vars("lead"))


def test_variables_with_other_starts_places_and_leads(tmp_path, provenance):
    results = [
        Result(make_curves(starts=STARTS)),
        Result(make_curves(variable="t", units="K", starts=STARTS[1:], places=("B", "Quiet bay"))),
        Result(make_curves(variable="u", last=120.0, starts=STARTS[:1], pooled=True)),
    ]
    for one, given in zip(written(tmp_path, results, provenance), results, strict=True):
        assert_same(one.curves, given.curves)


@pytest.mark.parametrize("name", list(GRIDS))
def test_maps_come_back(tmp_path, provenance, name):
    maps = make_maps(GRIDS[name](), starts=STARTS)
    result = Result(make_curves(starts=STARTS), maps)
    (found,) = written(tmp_path, [result], provenance)
    assert_same(found.maps.drop_vars("start_label"), maps.drop_vars("lead"))
    assert list(found.maps["start_label"].values) == ["2031-01-05T00:00", "2031-01-06T12:30"]
    assert (found.maps.attrs["lead_units"], found.maps.attrs["last_lead"]) == ("hours", 240.0)
    assert found.maps["status"].attrs["flag_meanings"].split()[1] == "beyond_run"


def test_maps_on_several_grids_with_other_starts(tmp_path, provenance):
    grids = {"wind": "tiny", HOSTILE: "cells", "t": "rotated", "y": "tiny"}
    results = [
        Result(
            make_curves(variable=name, starts=STARTS),
            make_maps(GRIDS[grid](), variable=name, starts=STARTS[number % 2 :], seed=number),
        )
        for number, (name, grid) in enumerate(grids.items())
    ]
    for one, given in zip(written(tmp_path, results, provenance), results, strict=True):
        assert_same(one.maps.drop_vars("start_label"), given.maps.drop_vars("lead"))


def pooled_maps(maps):
    """The maps with a second start that stands for all."""
    both = xr.concat([maps, maps.assign(horizon=maps["horizon"] + 1)], "start", data_vars="all",
                     coords="minimal", compat="override", join="override")  # fmt: skip
    starts = np.array([maps["start"].values[0], np.datetime64("NaT", "ns")])
    return both.assign_coords(start=starts, start_label=("start", ["2031-01-05T00:00", "all"]))


@pytest.mark.parametrize("which", [[0, 1], [1]], ids=["both", "alone"])
def test_pooled_maps_come_back(tmp_path, provenance, which):
    maps = pooled_maps(make_maps(GRIDS["cells"]())).isel(start=which)
    (found,) = written(tmp_path, [Result(make_curves(pooled=True), maps)], provenance)
    assert_same(found.maps, maps.drop_vars("lead"))


def test_one_start_of_several(tmp_path, provenance):
    curves = make_curves(starts=STARTS, pooled=True)
    maps = make_maps(GRIDS["tiny"](), starts=STARTS)
    written(tmp_path, [Result(curves, maps)], provenance)
    for start in (STARTS[1], f"{STARTS[1]}Z", np.datetime64(STARTS[1])):
        (found,) = read_results(tmp_path, start)
        assert_same(found.curves, curves.isel(start=[1]))
        assert_same(found.maps.drop_vars("start_label"), maps.isel(start=[1]).drop_vars("lead"))
        assert str(night_of([found]).start) == "2031-01-06T12:30:00"
    with pytest.raises(InputError, match=r"expected the start 2031-01-07.*2031-01-06T12:30:00"):
        read_results(tmp_path, "2031-01-07")
    with pytest.raises(ArgumentError, match="a date such as"):
        read_results(tmp_path, "yesterday")


def test_starts_of_other_calendars_and_starts_that_are_numbers(tmp_path, provenance):
    for number, start in enumerate((cftime.Datetime360Day(2031, 2, 30), 3.0)):
        starts = np.array([start], dtype=object if number == 0 else float)
        curves = make_curves().drop_vars("start_label").assign_coords(start=starts)
        (found,) = written(tmp_path / str(number), [Result(curves)], provenance)
        assert_same(found.curves, curves)


def test_what_is_written_again_is_the_same_file(tmp_path, provenance):
    provenance = {**provenance, "created": np.datetime64("2031-01-05T06", "s").item()}
    results = [
        Result(make_curves(chance=True, pooled=True, starts=STARTS), make_maps(GRIDS["tiny"]())),
        Result(
            make_curves(variable=HOSTILE, starts=STARTS[:1]),
            make_maps(GRIDS["cells"](), variable=HOSTILE),
        ),
    ]
    for one in results:
        for part in (one.curves, one.maps):
            part["threshold"].attrs["long_name"] = "threshold of the criterion"
    found = written(tmp_path / "a", results, provenance)
    written(tmp_path / "b", found, provenance)
    for name in ("horizons.nc", "horizon_maps.nc"):
        with (
            netCDF4.Dataset(tmp_path / "a" / name) as one,
            netCDF4.Dataset(tmp_path / "b" / name) as two,
        ):
            assert list(one.variables) == list(two.variables)
            for key, variable in one.variables.items():
                assert repr(variable) == repr(two[key])
                np.testing.assert_array_equal(variable[:], two[key][:])


def test_figures_of_what_was_read_are_the_same(tmp_path, provenance):
    result = Result(make_curves(chance=True), make_maps(GRIDS["date-line"]()))
    write_products(tmp_path / "a", [result], provenance)
    write_products(tmp_path / "b", read_results(tmp_path / "a"), provenance)
    figures = sorted(path.name for path in (tmp_path / "a" / "figures").iterdir())
    assert len(figures) == 3
    for name in [*(f"figures/{figure}" for figure in figures), "horizons.csv"]:
        assert (tmp_path / "a" / name).read_bytes() == (tmp_path / "b" / name).read_bytes(), name


def test_provenance_is_read(tmp_path, provenance):
    written(tmp_path, [Result(make_curves())], {**provenance, "calibration": "by x.nc"})
    found = read_provenance(tmp_path)
    assert found["provenance_calibration"] == "by x.nc"
    assert found["settings"] == provenance["settings"]


def test_no_products_broken_products_and_old_products(tmp_path, provenance):
    with pytest.raises(InputError, match=r"horizons\.nc: expected the products of an estimate"):
        read_results(tmp_path)
    path = write_horizon_file(tmp_path / "horizons.nc", [Result(make_curves())], provenance)
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) // 2])
    with pytest.raises(InputError, match="expected products that can be read"):
        read_results(tmp_path)
    path.write_bytes(whole)
    with netCDF4.Dataset(path, "a") as file:
        for name in file["wind_speed_criterion_name"].ncattrs():
            file["wind_speed_criterion_name"].delncattr(name)
    with pytest.raises(InputError, match="make the products again with estimate"):
        read_results(tmp_path)
