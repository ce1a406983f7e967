"""Positions as a variable: drift with a known rate of separation, from files to limits.

Members drift together along a parallel and separate exponentially: opposite pairs at the ends of
great circles through their middle, so that the mean position is the middle and the spread is
s0 exp(rate t) exactly, wherever on the globe.
"""

import netCDF4
import numpy as np
import pytest
import xarray as xr

import ensemble_horizon as eh

MEMBERS, RATE, FIRST = 12, 0.08, 200.0  # per hour, metres
HOURS = 2.0 * np.arange(37)
RADIUS = 6_371_000.0
DRIFT = '[variables.drift]\nposition = ["lat", "lon"]\n'
TOLERANCE = DRIFT + 'criteria = [{tolerance = "10 km"}]'


def true_horizon(size, first=FIRST):
    """When s0 exp(rate t) passes a size."""
    return np.log(size / first) / RATE


def ahead(latitude, longitude, distance, bearing):
    """Where a great circle leads (the direct problem of any textbook of navigation), degrees."""
    phi, angle = np.radians(latitude), distance / RADIUS
    sine = np.sin(phi) * np.cos(angle) + np.cos(phi) * np.sin(angle) * np.cos(bearing)
    turn = np.arctan2(
        np.sin(bearing) * np.sin(angle) * np.cos(phi), np.cos(angle) - np.sin(phi) * sine
    )
    return np.degrees(np.arcsin(sine)), longitude + np.degrees(turn)


def pairs(shape, seed=1):
    """Distances (units of the spread) and bearings of opposite pairs (member, 1, *shape)."""
    rng = np.random.default_rng(seed)
    half = (MEMBERS // 2, 1, *shape)
    distance = np.tile(rng.uniform(0.3, 1.0, half), (2, 1, *[1] * len(shape)))
    distance /= np.sqrt((distance**2).sum(axis=0) / (MEMBERS - 1))
    bearing = rng.uniform(0, 2 * np.pi, half)
    return distance, np.concatenate([bearing, bearing + np.pi])


def drifting(latitude, longitude, first=FIRST, hours=HOURS, seed=1):
    """Latitudes and longitudes (member, lead, *release) of members released at these points."""
    latitude, longitude = np.asarray(latitude, float), np.asarray(longitude, float)
    distance, bearing = pairs(latitude.shape, seed)
    time = hours.reshape(1, -1, *[1] * latitude.ndim)
    size = np.broadcast_to(first, latitude.shape) * np.exp(RATE * time)
    return ahead(latitude, longitude + 0.05 * time, distance * size, bearing)


def write(
    path,
    fields,
    *,
    dims=("release",),
    coords=None,
    units=("degrees_north", "degrees_east"),
    member=True,
):
    """Fields (member, lead, *dims), or (lead, *dims) of one member, named as they come."""
    with netCDF4.Dataset(path, "w") as file:
        shape = next(iter(fields.values())).shape
        names = (*(("member",) if member else ()), "time", *dims)
        for name, size in zip(names, shape, strict=True):
            file.createDimension(name, size)
        time = file.createVariable("time", "f8", ("time",))
        time.setncatts({"standard_name": "time", "units": "hours since 2031-02-14 00:00"})
        time[:] = HOURS[: shape[names.index("time")]]
        reference = file.createVariable("forecast_reference_time", "f8", ())
        reference.setncatts(
            {"standard_name": "forecast_reference_time", "units": "hours since 2031-02-14 00:00"}
        )
        reference[...] = 0.0
        for name, (over, values) in (coords or {}).items():
            place = file.createVariable(name, "f8", over)
            unit = "degrees_north" if name == "latitude" else "degrees_east"
            place.setncatts({"standard_name": name, "units": unit})
            place[:] = values
        for (name, values), unit in zip(fields.items(), units, strict=True):
            variable = file.createVariable(name, "f8", names, fill_value=-9999.0)
            variable.units = unit
            variable[:] = np.ma.masked_invalid(values)
    return path


SPOTS = np.array([10.0, 20.0, -35.0, 60.0]), np.array([179.0, -150.0, 20.0, 0.0])


def at_spots(path, first=FIRST, **options):
    latitude, longitude = drifting(*SPOTS, first=first)
    coords = {"latitude": (("release",), SPOTS[0]), "longitude": (("release",), SPOTS[1])}
    write(path, {"lat": latitude, "lon": longitude}, coords=coords, **options)
    return latitude, longitude


def test_release_points_on_cells_from_files_to_limits(night):
    first = np.array([100.0, 200.0, 400.0, 800.0])
    at_spots(night.folder / "drift.nc", first)
    night.settings(
        TOLERANCE, files="drift.nc", products='maps = "each"\nfigures = false',
        more="[regions.east]\nwest = 170\neast = -140\n[regions.all]\n"
        "[sites.off]\nlatitude = -35\nlongitude = 20",
    )  # fmt: skip
    rows = {row["place"]: row for row in night.estimated()}
    data = night.curves()
    assert data["drift_spread"].attrs["units"] == "m"
    growth = np.exp(RATE * HOURS)
    weights = np.cos(np.radians(SPOTS[0]))
    for number, (place, size) in enumerate(
        (
            ("east", np.sqrt(np.average(first[:2] ** 2, weights=weights[:2]))),
            ("all", np.sqrt(np.average(first**2, weights=weights))),
            ("off", 400.0),
        )
    ):
        np.testing.assert_allclose(night.spread("drift")[number], size * growth, rtol=1e-5)
        row = rows[place]
        # The curve is straight between leads: rate x step^2 / 8 is the most it can be early.
        assert 0 <= true_horizon(1e4, size) - float(row["horizon"]) < RATE * 4 / 8 + 0.01
        assert float(row["doubling_time"]) == pytest.approx(np.log(2) / RATE, rel=0.01)
        assert (row["status"], row["law"], row["threshold"]) == ("reached", "exponential", "10000")
        low, high = float(row["low"]), float(row["high"])
        assert low < float(row["horizon"]) < high
    with xr.open_dataset(night.products / "horizon_maps.nc", decode_times=False) as maps:
        limits = maps["drift_horizon"].values.ravel()
        status = maps["drift_status"].values.ravel()
    assert (status == 0).all()
    late = true_horizon(1e4, first) - limits
    assert ((late > -0.01) & (late < RATE * 4 / 8 + 0.01)).all()


def test_a_grid_of_release_points_in_kilometres(night):
    latitudes, longitudes = np.linspace(58.0, 50.0, 5), np.linspace(-4.0, 5.0, 6)
    grid = np.meshgrid(latitudes, longitudes, indexing="ij")
    latitude, longitude = drifting(*grid)
    write(
        night.folder / "drift.nc", {"lat": latitude, "lon": longitude},
        dims=("latitude", "longitude"),
        coords={"latitude": (("latitude",), latitudes), "longitude": (("longitude",), longitudes)},
    )  # fmt: skip
    night.settings(
        DRIFT + 'units = "km"\ncriteria = [{tolerance = 10.0}, {tolerance = "2000 m", '
        'name = "close"}, {saturation_fraction = 0.5}]',
        files="drift.nc", products='maps = "each"\nmap_intervals = true\nfigures = false',
    )  # fmt: skip
    rows = night.estimated()
    np.testing.assert_allclose(night.spread("drift")[0], 0.2 * np.exp(RATE * HOURS), rtol=1e-5)
    assert night.curves()["drift_spread"].attrs["units"] == "km"
    assert rows[0]["threshold_units"] == "km"
    for row, size in zip(rows[:2], (1e4, 2e3), strict=True):
        assert float(row["horizon"]) == pytest.approx(true_horizon(size), abs=0.05)
    with xr.open_dataset(night.products / "horizon_maps.nc", decode_times=False) as maps:
        assert maps["drift_horizon"].shape[-2:] == (5, 6)
        close = maps["drift_horizon"].values.reshape(-1, 5, 6)[1]
        low = maps["drift_low"].values.reshape(-1, 5, 6)[1]
        rate = maps["drift_growth_rate"].values
    np.testing.assert_allclose(close, true_horizon(2e3), atol=0.05)
    np.testing.assert_allclose(rate, RATE, rtol=0.01)
    assert (low < close).all()


@pytest.mark.parametrize("start", [(0.0, 178.0), (89.7, 30.0), (-60.0, 0.0)])
def test_one_float_across_the_date_line_and_at_the_pole(night, start):
    latitude, longitude = drifting(*start)
    write(
        night.folder / "drift.nc",
        {"lat": latitude, "lon": (longitude + 180) % 360 - 180}, dims=(),
    )  # fmt: skip
    night.settings(TOLERANCE, files="drift.nc")
    (row,) = night.estimated()
    np.testing.assert_allclose(night.spread("drift")[0], FIRST * np.exp(RATE * HOURS), rtol=1e-6)
    assert row["place"] == "series"
    assert float(row["horizon"]) == pytest.approx(true_horizon(1e4), abs=0.05)


def test_one_float_with_a_file_for_every_member(night):
    latitude, longitude = drifting(45.0, -20.0)
    for number in range(MEMBERS):
        fields = {"lat": latitude[number], "lon": longitude[number]}
        write(night.member(number), fields, dims=(), member=False)
    night.settings(TOLERANCE)
    (row,) = night.estimated()
    assert float(row["horizon"]) == pytest.approx(true_horizon(1e4), abs=0.05)
    assert row["members"] == str(MEMBERS)


def test_positions_on_a_plane(night):
    distance, bearing = pairs(())
    size = 0.2 * np.exp(RATE * HOURS)
    x = 500.0 + distance * size * np.cos(bearing) + 0.3 * HOURS
    y = 6000.0 + distance * size * np.sin(bearing)
    write(night.folder / "drift.nc", {"x": x, "y": y}, dims=(), units=("km", "km"))
    for units, factor in (("", 1.0), ('units = "km"\n', 1000.0)):
        night.settings(
            f'[variables.drift]\nposition = ["x", "y"]\n{units}'
            'criteria = [{tolerance = "10 km"}]', files="drift.nc",
        )  # fmt: skip
        (row,) = night.estimated()
        expected = np.sqrt(x.var(axis=0, ddof=1) + y.var(axis=0, ddof=1)) * 1000 / factor
        np.testing.assert_allclose(night.spread("drift")[0], expected, rtol=1e-9)
        assert float(row["horizon"]) == pytest.approx(true_horizon(1e4), abs=0.05)


def test_release_points_on_a_plane_without_latitudes(night, refusal):
    distance, bearing = pairs((3, 4))
    size = FIRST * np.exp(RATE * HOURS)[:, np.newaxis, np.newaxis]
    fields = {
        "px": distance * size * np.cos(bearing),
        "py": distance * size * np.sin(bearing) + 4e5,
    }
    write(night.folder / "drift.nc", fields, dims=("y", "x"), units=("m", "m"))
    table = '[variables.drift]\nposition = ["px", "py"]\ncriteria = [{tolerance = "10 km"}]'
    products = 'maps = "each"\nfigures = true'
    night.settings(table, files="drift.nc", products=products)
    (row,) = night.estimated()
    assert row["place"] == "domain"
    np.testing.assert_allclose(night.spread("drift")[0], size.ravel(), rtol=1e-6)
    with xr.open_dataset(night.products / "horizon_maps.nc", decode_times=False) as maps:
        np.testing.assert_allclose(maps["drift_horizon"], true_horizon(1e4), atol=0.05)
    night.settings(table, files="drift.nc", more="[regions.bay]\nsouth = 50")
    refusal(night.estimate(), 2, "bay", "no latitude and longitude")


def test_the_public_function_on_opened_runs(night):
    latitude, longitude = at_spots(night.folder / "drift.nc")
    runs = eh.open_runs(night.folder / "drift.nc", variables=["lat", "lon"])
    found = eh.position_spread(runs.lat, runs.lon)
    assert found.chunks is not None
    expected = np.broadcast_to(FIRST * np.exp(RATE * HOURS)[:, np.newaxis], (HOURS.size, 4))
    np.testing.assert_allclose(found.isel(start=0).transpose("lead", ...), expected, rtol=1e-6)
    write(night.folder / "one.nc", {"lat": latitude[..., 0], "lon": longitude[..., 0]}, dims=())
    runs = eh.open_runs(night.folder / "one.nc", variables=["lat", "lon"])
    found = eh.position_spread(runs.lat, runs.lon).isel(start=0)
    assert found.dims == ("lead",)
    np.testing.assert_allclose(found, expected[:, 0], rtol=1e-6)
    limit = eh.horizon(found.compute(), tolerance=1e4)
    assert float(limit.horizon) == pytest.approx(true_horizon(1e4), abs=0.05)


def test_members_released_at_one_point_have_no_spread_at_first(night):
    at_spots(night.folder / "drift.nc")
    with netCDF4.Dataset(night.folder / "drift.nc", "a") as file:
        for name in ("lat", "lon"):
            file[name][:, 0] = np.broadcast_to(file[name][:1, 0], (MEMBERS, 4))
    night.settings(TOLERANCE, files="drift.nc", products='maps = "each"\nfigures = false')
    (row,) = night.estimated()
    assert float(row["horizon"]) == pytest.approx(true_horizon(1e4), abs=0.05)
    assert float(row["doubling_time"]) == pytest.approx(np.log(2) / RATE, rel=1e-3)
    assert row["members"] == str(MEMBERS)
    assert night.spread("drift")[0, 0] == 0
    survey = night.run("survey", night.config)
    assert survey.exit_code == 0
    assert survey.stdout.count("identical") == 2  # once for each coordinate
    assert "all members are identical in 'lat' at lead 0 h" in survey.stdout
    with xr.open_dataset(night.products / "horizon_maps.nc", decode_times=False) as maps:
        np.testing.assert_allclose(maps["drift_horizon"], true_horizon(1e4), atol=0.05)


def test_chance_counts_members_far_from_the_median_position(night):
    latitude, longitude = at_spots(night.folder / "drift.nc")
    night.settings(
        DRIFT + 'units = "km"\ncriteria = [{chance = {beyond = "5 km", probability = 0.5}}]',
        files="drift.nc", products='maps = "each"\nfigures = false',
        more="[sites.off]\nlatitude = -35\nlongitude = 20",
    )  # fmt: skip
    (row,) = night.estimated()
    # About the middle of opposite pairs both medians lie within the innermost pair: work them out
    # on the tangent plane, whose error over 100 km is 1e-4.
    north = np.radians(latitude[..., 2] + 35) * RADIUS
    turn = np.radians(longitude[..., 2] - (20 + 0.05 * HOURS))
    east = turn * np.cos(np.radians(latitude[..., 2])) * RADIUS
    far = np.hypot(east - np.median(east, axis=0), north - np.median(north, axis=0)) > 5e3
    share = far.mean(axis=0)
    near = HOURS < 50
    np.testing.assert_allclose(night.curves()["drift_chance"].values.ravel()[near], share[near])
    crossed = np.flatnonzero(share > 0.5)[0]
    assert HOURS[crossed - 1] <= float(row["horizon"]) <= HOURS[crossed]
    with xr.open_dataset(night.products / "horizon_maps.nc", decode_times=False) as maps:
        assert float(maps["drift_horizon"].values.ravel()[2]) == pytest.approx(
            float(row["horizon"]), rel=1e-5
        )


def test_a_climatology_of_distances(night):
    at_spots(night.folder / "drift.nc")
    with netCDF4.Dataset(night.folder / "climate.nc", "w") as file:
        file.createDimension("one", 1)
        variable = file.createVariable("rms", "f8", ("one",))
        variable.units = "km"
        variable[:] = 20.0
    night.settings(
        DRIFT + "criteria = [{climatology_fraction = 0.5}]", files="drift.nc",
        more='[climatology]\nfile = "climate.nc"\nnames = {drift = "rms"}',
    )  # fmt: skip
    (row,) = night.estimated()
    assert float(row["threshold"]) == pytest.approx(1e4)
    assert float(row["horizon"]) == pytest.approx(true_horizon(1e4), abs=0.05)


def test_starts_are_pooled(night):
    for day in range(14, 20):
        latitude, longitude = drifting(*SPOTS, first=FIRST * (day - 12), seed=day)
        path = night.folder / f"drift_203102{day}.nc"
        coords = {"latitude": (("release",), SPOTS[0]), "longitude": (("release",), SPOTS[1])}
        write(path, {"lat": latitude, "lon": longitude}, coords=coords)
        with netCDF4.Dataset(path, "a") as file:
            for name in ("time", "forecast_reference_time"):
                file[name].units = f"hours since 2031-02-{day} 00:00"
    night.settings(TOLERANCE, files="drift_*.nc", products='maps = "pooled"\nfigures = false')
    rows = {row["start"]: row for row in night.estimated()}
    assert len(rows) == 7
    size = FIRST * np.sqrt(np.mean((np.arange(14, 20) - 12.0) ** 2))
    assert float(rows["all"]["horizon"]) == pytest.approx(true_horizon(1e4, size), abs=0.05)
    with xr.open_dataset(night.products / "horizon_maps.nc", decode_times=False) as maps:
        np.testing.assert_allclose(maps["drift_pooled_horizon"], true_horizon(1e4, size), atol=0.05)


def test_half_the_initial_error_buys_one_doubling_time(night):
    at_spots(night.folder / "drift.nc")
    night.settings(TOLERANCE, files="drift.nc")
    night.estimated()
    result = night.run(
        "reach", night.config, "--variable", "drift", "--tolerance", "10000", "--smaller", "2"
    )
    assert result.exit_code == 0, result.stderr
    # Exponential growth: ln(2) / rate, whatever the size.
    assert f"(+{np.log(2) / RATE:.1f} h)" in result.stdout
    assert f"{true_horizon(1e4):.0f} h" in result.stdout


def test_a_member_with_a_latitude_beyond_the_pole_is_not_used(night):
    at_spots(night.folder / "drift.nc")
    with netCDF4.Dataset(night.folder / "drift.nc", "a") as file:
        file["lat"][3, 7, 1] = 123.0
    night.settings(TOLERANCE, files="drift.nc")
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert "outside the plausible -90 to 90 degrees_north, at lead 14 h" in result.stderr
    assert night.rows()[0]["members"] == str(MEMBERS - 1)
    survey = night.run("survey", night.config)
    assert "outside the plausible -90 to 90" in survey.stdout + survey.stderr


@pytest.mark.parametrize("part", ["lat", "lon"])
def test_a_position_with_either_part_missing_is_missing(night, part):
    at_spots(night.folder / "drift.nc")
    with netCDF4.Dataset(night.folder / "drift.nc", "a") as file:
        file[part][5, 4:, 2] = np.nan
    night.settings(TOLERANCE, files="drift.nc", runs='incomplete = "use"')
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert "1 cell without a value" in result.stderr
    with xr.open_dataset(night.folder / "drift.nc", decode_times=False) as data:
        lat = data["lat"].values.copy()
        lon = data["lon"].values.copy()
    lat[5, 4:, 2] = lon[5, 4:, 2] = np.nan
    weights = np.cos(np.radians(SPOTS[0]))
    phi, along = np.radians(lat), np.radians(lon)
    unit = np.stack([np.cos(phi) * np.cos(along), np.cos(phi) * np.sin(along), np.sin(phi)])
    middle = np.nanmean(unit, axis=1, keepdims=True)
    middle /= np.linalg.norm(middle, axis=0)
    angle = 2 * np.arcsin(np.linalg.norm(unit - middle, axis=0) / 2)  # chord to arc
    variance = np.nansum((RADIUS * angle) ** 2, axis=0) / (np.isfinite(angle).sum(axis=0) - 1)
    expected = np.sqrt(variance @ weights / weights.sum())
    np.testing.assert_allclose(night.spread("drift")[0], expected, rtol=1e-5)
    night.settings(TOLERANCE, files="drift.nc")
    night.estimate()
    assert night.rows()[0]["members"] == str(MEMBERS - 1)


def test_units_that_make_no_position_are_refused(night, refusal):
    for units, status in (
        (("degrees_east", "degrees_north"), 2),
        (("degrees_north", "m"), 2),
        (("m", "km"), 2),
        (("K", "K"), 2),
        (("degrees_north", ""), 3),
    ):
        at_spots(night.folder / "drift.nc", units=units)
        night.settings(TOLERANCE, files="drift.nc")
        words = ["variables.drift.position", "degrees_north", "'lat'", *filter(None, units)]
        refusal(night.estimate(), status, *words)
        refusal(night.run("survey", night.config), status, "variables.drift.position")
    at_spots(night.folder / "drift.nc")
    night.settings(DRIFT + 'units = "K"\ncriteria = [{tolerance = 1.0}]', files="drift.nc")
    refusal(night.estimate(), 2, "variables.drift.units", "'K'", "'m'")


def test_a_coordinate_that_is_not_there_is_refused_with_its_key(night, refusal):
    at_spots(night.folder / "drift.nc")
    night.settings(TOLERANCE.replace('"lon"', '"lonn"'), files="drift.nc")
    refusal(night.estimate(), 3, "'lonn'", "variables.drift.position")


def test_keys_that_do_not_go_with_a_position_are_refused(night, refusal):
    at_spots(night.folder / "drift.nc")
    for more, word in (
        ('source = "lat"', "source and position"),
        ('speed = ["lat", "lon"]', "speed and position"),
        ("plausible = [0, 10]", "plausible"),
    ):
        night.settings(f"{DRIFT}{more}\ncriteria = [{{tolerance = 1.0}}]", files="drift.nc")
        refusal(night.estimate(), 2, "variables.drift", word)
    night.settings(TOLERANCE.replace('"lon"', '"lat"'), files="drift.nc")
    refusal(night.estimate(), 2, "variables.drift.position", "two different")
