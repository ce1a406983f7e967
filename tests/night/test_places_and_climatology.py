"""Regions and sites off the grid, and climatologies that do not fit the runs."""

import netCDF4
import numpy as np
import pytest

LATITUDES = np.linspace(65.0, 40.0, 6)
LONGITUDES = np.linspace(-10.0, 25.0, 8)
FRACTION = "[variables.t2]\ncriteria = [{climatology_fraction = 0.5}]"
FILE = '[climatology]\nfile = "climate.nc"'


def climate(night, values, *, name="t2", latitudes=LATITUDES, longitudes=LONGITUDES, units="K"):
    """climate.nc with a standard deviation (latitude, longitude)."""
    with netCDF4.Dataset(night.folder / "climate.nc", "w") as file:
        for axis, points, unit in (
            ("latitude", latitudes, "degrees_north"),
            ("longitude", longitudes, "degrees_east"),
        ):
            file.createDimension(axis, len(points))
            variable = file.createVariable(axis, "f8", (axis,))
            variable.setncatts({"standard_name": axis, "units": unit})
            variable[:] = points
        field = file.createVariable(name, "f8", ("latitude", "longitude"), fill_value=-9999.0)
        field.setncatts({"units": units, "cell_methods": "time: standard_deviation"})
        field[:] = np.ma.masked_invalid(values)


@pytest.mark.parametrize(
    "table",
    [
        "[regions.far]\nsouth = -40\nnorth = -20",
        "[regions.far]\nwest = 100\neast = 120",
        "[sites.far]\nlatitude = -30\nlongitude = 3",
        "[sites.far]\nlatitude = 50\nlongitude = -90",
    ],
)
def test_a_place_off_the_grid(night, refusal, table):
    night.write()
    night.settings(more=f"[regions.near]\nsouth = 45\n{table}")
    refusal(night.estimate(), 2, "far")
    assert night.written() == []


def test_a_site_within_reach_of_the_grid_is_taken(night):
    night.write()
    night.settings(more="[sites.near]\nlatitude = 39.0\nlongitude = 3\nreach_km = 400")
    (row,) = night.estimated()
    assert row["status"] == "reached"


def test_a_site_out_of_its_own_reach(night, refusal):
    night.write()
    night.settings(more="[sites.tower]\nlatitude = 52.5\nlongitude = 2.5\nreach_km = 10")
    refusal(night.estimate(), 2, "tower", "10 km")
    assert night.written() == []


@pytest.mark.parametrize(
    ("table", "key"),
    [
        ("[sites.a]\nlatitude = 95\nlongitude = 3", "sites.a"),
        ("[regions.a]\nsouth = 60\nnorth = 45", "regions.a"),
        ('[sites.a]\nlatitude = "north"\nlongitude = 3', "sites.a.latitude"),
        ("[sites.a]\nlatitude = nan\nlongitude = 3", "sites.a"),
    ],
)
def test_a_place_that_is_nowhere(night, refusal, table, key):
    night.write()
    night.settings(more=table)
    refusal(night.estimate(), 2, key)
    assert night.written() == []


def test_a_region_and_a_site_of_the_same_name(night, refusal):
    night.write()
    night.settings(more="[regions.a]\nsouth = 45\n[sites.a]\nlatitude = 50\nlongitude = 3")
    refusal(night.estimate(), 2, "sites.a", "same name")


def test_a_climatology_on_the_grid_of_the_runs(night):
    night.write()
    climate(night, np.full((6, 8), 3.0))
    night.settings(FRACTION, more=FILE)
    (row,) = night.estimated()
    assert row["status"] == "reached"
    assert float(row["threshold"]) == pytest.approx(1.5)
    assert row["threshold_units"] == "K"


def test_a_climatology_of_a_region_averages_variances(night):
    night.write()
    deviation = np.random.default_rng(4).uniform(1.0, 4.0, (6, 8))
    climate(night, deviation)
    night.settings(FRACTION, more=FILE)
    (row,) = night.estimated()
    weights = np.cos(np.deg2rad(LATITUDES))[:, None] * np.ones(8)
    mean = np.sqrt((deviation**2 * weights).sum() / weights.sum())
    assert float(row["threshold"]) == pytest.approx(0.5 * mean, rel=1e-4)


def test_a_climatology_in_other_units_is_converted(night):
    night.write()
    climate(night, np.full((6, 8), 3.0 * 1.8), units="degF")
    night.settings(FRACTION, more=FILE)
    (row,) = night.estimated()
    assert float(row["threshold"]) == pytest.approx(1.5, rel=1e-5)


def test_a_climatology_in_units_of_something_else(night, refusal):
    night.write()
    climate(night, np.full((6, 8), 3.0), units="m s-1")
    night.settings(FRACTION, more=FILE)
    refusal(night.estimate(), 3, "climate.nc", "m s-1", "K")
    assert night.written() == []


def test_a_climatology_whose_latitudes_run_the_other_way(night):
    night.write()
    deviation = np.linspace(1, 4, 6)[:, None] * np.ones(8)
    climate(night, deviation[::-1], latitudes=LATITUDES[::-1])
    night.settings(FRACTION, more=FILE + "\n[sites.a]\nlatitude = 65\nlongitude = 0")
    result = night.estimate()
    if result.exit_code == 0:
        (row,) = night.rows()
        assert float(row["threshold"]) == pytest.approx(0.5, rel=1e-5)
    else:
        assert result.exit_code == 3
        assert "climate.nc" in result.stderr


@pytest.mark.parametrize("shape", [(5, 8), (6, 7)])
def test_a_climatology_on_another_grid(night, refusal, shape):
    night.write()
    climate(
        night, np.full(shape, 3.0),
        latitudes=np.linspace(65, 40, shape[0]), longitudes=np.linspace(-10, 25, shape[1]),
    )  # fmt: skip
    night.settings(FRACTION, more=FILE)
    refusal(night.estimate(), 3, "climate.nc", "grid")
    assert night.written() == []


def test_a_climatology_of_the_same_shape_elsewhere(night, refusal):
    night.write()
    climate(night, np.full((6, 8), 3.0), latitudes=LATITUDES - 60)
    night.settings(FRACTION, more=FILE)
    refusal(night.estimate(), 3, "climate.nc")
    assert night.written() == []


def test_a_climatology_without_the_variable(night, refusal):
    night.write()
    climate(night, np.full((6, 8), 3.0), name="t2_sd")
    night.settings(FRACTION, more=FILE)
    refusal(night.estimate(), 3, "climate.nc", "t2", "t2_sd")
    assert night.written() == []


def test_a_climatology_whose_variable_has_another_name(night):
    night.write()
    climate(night, np.full((6, 8), 3.0), name="t2_sd")
    night.settings(FRACTION, more=FILE + '\nnames = {t2 = "t2_sd"}')
    (row,) = night.estimated()
    assert float(row["threshold"]) == pytest.approx(1.5)


def test_a_climatology_that_is_not_there(night, refusal):
    night.write()
    night.settings(FRACTION, more=FILE)
    refusal(night.estimate(), 3, "climate.nc")
    assert night.written() == []


def test_a_climatology_that_is_text(night, refusal):
    night.write()
    (night.folder / "climate.nc").write_text("sd\n3.0\n")
    night.settings(FRACTION, more=FILE)
    refusal(night.estimate(), 3, "climate.nc")
    assert night.written() == []


def test_a_climatology_criterion_without_the_table(night, refusal):
    night.write()
    night.settings(FRACTION)
    refusal(night.estimate(), 2, "variables.t2.criteria[0].climatology_fraction", "[climatology]")
    assert night.written() == []


@pytest.mark.parametrize("value", [0.0, np.nan, -1.0])
def test_a_climatology_without_spread(night, value):
    night.write()
    climate(night, np.full((6, 8), value))
    night.settings(FRACTION, more=FILE)
    result = night.estimate()
    assert result.exit_code in (0, 3), result.stderr
    assert "Traceback" not in result.stderr
    if result.exit_code == 0:
        (row,) = night.rows()
        assert (row["status"], row["horizon"]) == ("no_data", "")
    else:
        assert "climate.nc" in result.stderr
        assert night.written() == []


def test_a_climatology_with_gaps_counts_where_it_has_values(night):
    night.write()
    deviation = np.full((6, 8), 3.0)
    deviation[0, :] = np.nan
    climate(night, deviation)
    night.settings(
        FRACTION,
        more=FILE + "\n[sites.gap]\nlatitude = 65\nlongitude = 0\n"
        "[sites.good]\nlatitude = 50\nlongitude = 0",
    )
    rows = {row["place"]: row for row in night.estimated()}
    assert (rows["gap"]["status"], rows["gap"]["horizon"]) == ("no_data", "")
    assert rows["good"]["status"] == "reached"
