"""The NetCDF products against the CF rules of the open compliance checker, and read back."""

from __future__ import annotations

import tracemalloc
import warnings

import cftime
import numpy as np
import pytest
import xarray as xr
from synthetic_products import GRIDS, Result, make_curves, make_maps, regular

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.products.curve_file import write_horizon_file
from ensemble_horizon.products.map_file import map_file, write_map_file
from ensemble_horizon.products.netcdf import valid_name
from ensemble_horizon.vocabulary import CAUTION, Status

HIGH, MEDIUM = 3, 2


def complaints(path):
    """Return what the compliance checker (test cf:1.11) holds against a file."""
    with warnings.catch_warnings():
        # Warnings of the checker's own dependencies are not ours to raise.
        warnings.simplefilter("ignore")
        from compliance_checker.runner import CheckSuite

        CheckSuite.load_all_available_checkers()
        suite = CheckSuite()
        dataset = suite.load_dataset(str(path))
        groups, errors = suite.run_all(dataset, ["cf:1.11"])["cf:1.11"]
        dataset.close()
    assert not errors
    assert len(groups) > 10
    return [
        (group.weight, group.name, group.msgs, [child.msgs for child in group.children or []])
        for group in groups
        if group.value[0] != group.value[1] and group.weight >= MEDIUM
    ]


def test_the_checker_does_complain_about_a_bad_file(tmp_path):
    data = xr.Dataset({"a b": ("t", [1.0])}, attrs={"Conventions": "CF-1.11"})
    data.to_netcdf(tmp_path / "bad.nc")
    assert complaints(tmp_path / "bad.nc")


def test_the_curve_file_keeps_the_cf_rules(tmp_path, provenance):
    # The checker's time grows with the square of the number of fields, so a few of each kind.
    kept = ["spread", "fitted", "doubling_time", "growth_rate", "law", "members", "threshold"]
    kept += ["horizon", "low", "high", "projected", "status", "chance"]
    curves = make_curves(chance=True, pooled=True, starts=("2031-01-05", "2031-01-06"))
    results = [
        Result(curves[kept]),
        Result(
            make_curves(
                variable="2t / é",
                long_name="2 m temperature",
                units="K",
                places=("North bank", "Elsewhere"),
                criteria=("warm/cold",),
            )[["spread", *kept[-6:-1]]]
        ),
    ]
    path = write_horizon_file(tmp_path / "horizons.nc", results, provenance)
    assert complaints(path) == []
    with xr.open_dataset(path) as file:
        assert file.attrs["Conventions"] == "CF-1.11" and file.attrs["comment"] == CAUTION
        assert file.attrs["input_count"] == 20 and "16 more" in file.attrs["inputs"]
        assert 'files = "runs/*.nc"' in file.attrs["settings"]
        assert "0.1.0" in file.attrs["source"] and "estimate" in file.attrs["history"]
        assert file["start"].attrs["standard_name"] == "forecast_reference_time"
        assert file["lead"].attrs["standard_name"] == "forecast_period"
        status = file["wind_speed_status"]
        assert status.dtype == np.int8
        assert status.attrs["flag_meanings"].split() == [value.name for value in Status]
        assert status.attrs["flag_values"].dtype == np.int8
        assert list(file["place_name"].values[-2:]) == ["Quiet bay", "Elsewhere"]
        assert file["v_2t_e_horizon"].attrs["long_name"] == "lead-time limit: 2 m temperature"


def test_the_curve_file_holds_the_numbers(tmp_path, provenance):
    curves = make_curves(chance=True, pooled=True, starts=("2031-01-05", "2031-01-06"))
    path = write_horizon_file(tmp_path / "h.nc", [Result(curves)], provenance)
    single, pooled = curves.isel(start=[0, 1]), curves.isel(start=2)
    with xr.open_dataset(path, decode_timedelta=False) as file:
        np.testing.assert_array_equal(file["start"], single["start"])
        for name in ("spread", "horizon", "low", "high", "chance", "doubling_time"):
            found = file[f"wind_speed_{name}"].transpose("start", ...).values
            np.testing.assert_array_equal(found, single[name].values)
            np.testing.assert_array_equal(file[f"wind_speed_pooled_{name}"], pooled[name].values)
        np.testing.assert_array_equal(file["wind_speed_threshold"][0, :2, 0], [2.5, 0.7 * 4.8])
        assert np.isnan(file["wind_speed_threshold"][0, 2, 0])
        np.testing.assert_array_equal(file["wind_speed_threshold_fraction"][:, 2], 0.3)
        assert file["wind_speed_threshold"].attrs["units"] == "m s-1"


def test_variables_with_other_places_and_starts_are_filled_not_shifted(tmp_path, provenance):
    first = make_curves(starts=("2031-01-05", "2031-01-06"))
    second = make_curves(variable="t", units="K", starts=("2031-01-06",), places=("B", "Quiet bay"))
    path = write_horizon_file(tmp_path / "h.nc", [Result(first), Result(second)], provenance)
    with xr.open_dataset(path) as file:
        names = list(file["place_name"].values)
        assert names == [*first.place.values, "B"]
        here = file["t_spread"].isel(start=1, place=names.index("B")).values
        np.testing.assert_array_equal(here, second["spread"].values[0, 0])
        assert (file["t_status"].isel(start=0) == Status.no_data).all()
        assert np.isnan(file["t_horizon"].isel(place=0)).all()


@pytest.mark.parametrize("calendar", ["360_day", "noleap"])
def test_other_calendars(tmp_path, provenance, calendar):
    starts = np.array([cftime.datetime(2031, 2, 28, calendar=calendar)], dtype=object)
    curves = make_curves().drop_vars("start_label").assign_coords(start=starts)
    path = write_horizon_file(tmp_path / "h.nc", [Result(curves)], provenance)
    with xr.open_dataset(path, decode_times=xr.coders.CFDatetimeCoder(use_cftime=True)) as file:
        assert file["start"].values[0] == starts[0]


def test_leads_in_model_time_units(tmp_path, provenance):
    curves = make_curves(lead_units="1")[["spread", "horizon", "growth_rate"]]
    path = write_horizon_file(tmp_path / "h.nc", [Result(curves)], provenance)
    assert complaints(path) == []
    with xr.open_dataset(path) as file:
        assert file["lead"].attrs["units"] == "1" and "standard_name" not in file["lead"].attrs


def test_mixed_lead_units_are_refused_and_nothing_is_left(tmp_path, provenance):
    results = [Result(make_curves()), Result(make_curves(variable="x", lead_units="1"))]
    with pytest.raises(ArgumentError, match="leads in the same units"):
        write_horizon_file(tmp_path / "h.nc", results, provenance)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("name", ["date-line", "rotated", "cells"])
def test_maps_keep_the_cf_rules(tmp_path, provenance, name):
    maps = make_maps(GRIDS[name]())
    other = make_maps(GRIDS["tiny"](), variable="t 2", criteria=("x",))
    fields = ["horizon", "status", "threshold"]
    path = write_map_file(tmp_path / "maps.nc", [maps, other[fields]], provenance)
    assert complaints(path) == []


def test_maps_hold_the_numbers_on_every_grid(tmp_path, provenance, grid):
    maps = make_maps(grid, starts=("2031-01-05", "2031-01-06"))
    other = make_maps(GRIDS["tiny"](), variable="t 2", starts=("2031-01-06",), criteria=("x",))
    path = write_map_file(tmp_path / "maps.nc", [maps, other], provenance)
    with xr.open_dataset(path, decode_timedelta=False) as file:
        assert file.sizes["start"] == 2
        for name in ("horizon", "low", "high", "status", "growth_rate", "law"):
            found = file[f"wind_speed_{name}"].transpose("start", ...).values
            np.testing.assert_array_equal(found, maps[name].values)
        # The start that the second variable lacks.
        assert (file["t_2_status"].isel(start=0) == Status.no_data).all()
        assert np.isnan(file["t_2_horizon"].isel(start=0)).all()
        assert file["wind_speed_status"].dtype == np.int8
        assert file["wind_speed_horizon"].encoding["zlib"]
        assert file["wind_speed_horizon"].encoding["shuffle"]
        assert file["wind_speed_horizon"].encoding["complevel"] <= 2
        if "y" in maps.dims or "cell" in maps.dims:
            assert {"latitude", "longitude"} <= set(file["wind_speed_horizon"].coords)


def test_maps_grow_start_by_start_in_flat_memory(tmp_path, provenance):
    grid = regular(np.linspace(90, -90, 181), np.arange(0, 360, 1.0))
    starts = [f"2031-01-{day:02d}" for day in range(1, 9)]

    def peak(count):
        one = make_maps(grid, starts=starts[:1])
        tracemalloc.start()
        with map_file(tmp_path / f"{count}.nc", provenance) as target:
            for start in starts[:count]:
                stamp = np.array([start], dtype="datetime64[ns]")
                target.append(one.assign_coords(start=("start", stamp)))
        size = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        return size

    # Eight starts take 9 MB together; the writer holds none of them back.
    assert peak(8) < peak(2) + 300_000
    with xr.open_dataset(tmp_path / "8.nc") as file:
        assert file.sizes["start"] == 8
        assert file["start"].values[-1] == np.datetime64("2031-01-08")


def test_pooled_maps_stand_beside_the_starts(tmp_path, provenance):
    single = make_maps(GRIDS["rotated"](), starts=("2031-01-05", "2031-01-06"))
    nothing = np.array(["NaT"], dtype="datetime64[ns]")
    pooled = make_maps(GRIDS["rotated"](), seed=9).assign_coords(
        start=("start", nothing), start_label=("start", ["all"])
    )
    path = write_map_file(tmp_path / "both.nc", [single, pooled], provenance)
    with xr.open_dataset(path, decode_timedelta=False) as file:
        assert file.sizes["start"] == 2
        found = file["wind_speed_pooled_horizon"]
        assert found.dims == ("wind_speed_criterion", "y", "x")
        assert found.attrs["long_name"].endswith("(all starts pooled)")
        np.testing.assert_array_equal(found.values, pooled["horizon"].values[0])
        found = file["wind_speed_horizon"].transpose("start", ...).values
        np.testing.assert_array_equal(found, single["horizon"].values)
    alone = write_map_file(tmp_path / "alone.nc", [pooled], provenance)
    assert complaints(alone) == []
    with xr.open_dataset(alone, decode_timedelta=False) as file:
        assert "start" not in file.sizes
        found = file["wind_speed_pooled_status"].values
        np.testing.assert_array_equal(found, pooled["status"].values[0])


def test_units_that_nobody_can_read_are_kept_apart(tmp_path, provenance):
    maps = make_maps(GRIDS["tiny"](), units="gpm")
    path = write_map_file(tmp_path / "m.nc", [maps], provenance)
    with xr.open_dataset(path) as file:
        assert file["wind_speed_saturation"].attrs["units_as_given"] == "gpm"
        assert "units" not in file["wind_speed_saturation"].attrs


def test_lazy_maps_are_computed_one_start_at_a_time(tmp_path, provenance):
    starts = ("2031-01-05", "2031-01-06", "2031-01-07")
    maps = make_maps(GRIDS["tiny"](), starts=starts)
    path = write_map_file(tmp_path / "m.nc", [maps.chunk({"start": 1})], provenance)
    with xr.open_dataset(path, decode_timedelta=False) as file:
        found = file["wind_speed_horizon"].transpose("start", ...).values
        np.testing.assert_array_equal(found, maps["horizon"].values)


def test_maps_out_of_order_twice_or_changed_are_refused(tmp_path, provenance):
    early, late = (
        make_maps(GRIDS["tiny"](), starts=(start,)) for start in ("2031-01-05", "2031-01-06")
    )
    for second, words in ((early, "rising order"), (late, "a second time")):
        with (
            pytest.raises(ArgumentError, match=words),
            map_file(tmp_path / "m.nc", provenance) as target,
        ):
            target.append(late)
            target.append(second)
    with (
        pytest.raises(ArgumentError, match="further field 'extra'"),
        map_file(tmp_path / "m.nc", provenance) as target,
    ):
        target.append(early)
        target.append(late.assign(extra=late["growth_rate"]))
    assert list(tmp_path.iterdir()) == []
    starts = np.concatenate([late.start.values, early.start.values])
    with map_file(tmp_path / "m.nc", provenance, starts=starts) as target:
        target.append(late)
        target.append(early)
    with xr.open_dataset(tmp_path / "m.nc") as file:
        assert file.indexes["start"].is_monotonic_increasing


def test_longitudes_across_the_date_line_rise_steadily(tmp_path, provenance):
    path = write_map_file(tmp_path / "m.nc", [make_maps(GRIDS["date-line"]())], provenance)
    with xr.open_dataset(path) as file:
        assert np.all(np.diff(file["longitude"].values) > 0)
        assert file["longitude"].values[-1] > 180


def test_names_from_the_settings_become_valid_and_stay_apart():
    taken: set[str] = set()
    names = [valid_name(label, taken) for label in ("a/b", "a b", 'a"b', "__", "9", "Ωmega")]
    assert names == ["a_b", "a_b_2", "a_b_3", "unnamed", "v_9", "mega"]
