"""Numbers of the products against plain numpy on the values that were written."""

import numpy as np
import pytest

LATITUDES = np.linspace(65.0, 40.0, 6)
LONGITUDES = np.linspace(-10.0, 25.0, 8)
WEIGHTS = np.cos(np.deg2rad(LATITUDES))[:, None] * np.ones(8)


def uneven(members=6, seed=11) -> np.ndarray:
    """Values (member, lead, latitude, longitude) whose spread differs from point to point."""
    rng = np.random.default_rng(seed)
    size = 4.0 / (1 + 19 * np.exp(-0.06 * 12.0 * np.arange(12)))
    local = rng.uniform(0.5, 2.0, (6, 8))
    pattern = rng.normal(size=(members, 1, 6, 8)) + 0.2 * rng.normal(size=(members, 12, 6, 8))
    return 280 + pattern * local * size[:, None, None]


def over(values: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """Root of the weighted mean of the variance over members, divisor M - 1, by lead."""
    variance = values.std(axis=0, ddof=1) ** 2
    return np.sqrt((variance * weights).sum(axis=(1, 2)) / weights.sum())


def test_spread_of_domain_region_and_site_by_hand(night):
    values = night.write(uneven())
    night.settings(
        more="[regions.box]\nsouth = 47.5\nnorth = 62.5\nwest = -7.5\neast = 12.5\n"
        "[regions.all]\n"
        "[sites.tower]\nlatitude = 54.0\nlongitude = 6.0"
    )
    night.estimated()
    data = night.curves()
    places = [str(name) for name in data["place_name"].values]
    spread = dict(zip(places, night.spread(), strict=True))
    rows = (LATITUDES > 47.5) & (LATITUDES < 62.5)
    columns = (LONGITUDES > -7.5) & (LONGITUDES < 12.5)
    inside = np.where(rows[:, None] & columns, WEIGHTS, 0.0)
    np.testing.assert_allclose(spread["box"], over(values, inside), rtol=1e-6)
    np.testing.assert_allclose(spread["all"], over(values, WEIGHTS), rtol=1e-6)
    np.testing.assert_allclose(spread["tower"], values[:, :, 2, 3].std(axis=0, ddof=1), rtol=1e-6)
    np.testing.assert_allclose(data["lead"].values, 12.0 * np.arange(12))


def test_the_default_place_is_the_whole_domain(night):
    values = night.write(uneven())
    night.settings()
    (row,) = night.estimated()
    assert row["place"] == "domain"
    np.testing.assert_allclose(night.spread()[0], over(values, WEIGHTS), rtol=1e-6)


def test_a_region_across_the_date_line(night):
    values = uneven()
    longitudes = np.array([160.0, 165, 170, 175, 180, 185, 190, 195])
    night.write(values, longitudes=longitudes)
    night.settings(more="[regions.line]\nwest = 172.5\neast = -172.5")
    night.estimated()
    inside = WEIGHTS * ((longitudes > 172.5) & (longitudes < 187.5))
    np.testing.assert_allclose(night.spread()[0], over(values, inside), rtol=1e-6)


def test_kelvin_to_fahrenheit_scales_the_spread(night):
    values = night.write(uneven())
    night.settings('[variables.t2]\nunits = "degF"\ncriteria = [{tolerance = 3.0}]')
    (fahrenheit,) = night.estimated()
    np.testing.assert_allclose(night.spread()[0], 1.8 * over(values, WEIGHTS), rtol=1e-6)
    assert night.curves()["t2_spread"].attrs["units"] == "degF"
    night.settings(f"[variables.t2]\ncriteria = [{{tolerance = {3.0 / 1.8}}}]")
    (kelvin,) = night.estimated()
    assert float(fahrenheit["horizon"]) == pytest.approx(float(kelvin["horizon"]), rel=1e-4)
    assert float(fahrenheit["doubling_time"]) == pytest.approx(
        float(kelvin["doubling_time"]), rel=1e-3
    )


def test_metres_to_knots(night):
    values = night.write(uneven(), name="gust", units="m s-1")
    night.settings('[variables.gust]\nunits = "knot"\ncriteria = [{tolerance = "1 m s-1"}]')
    (row,) = night.estimated()
    knot = 1852 / 3600
    np.testing.assert_allclose(night.spread("gust")[0], over(values, WEIGHTS) / knot, rtol=1e-6)
    assert float(row["threshold"]) == pytest.approx(1 / knot, rel=1e-5)


def test_speed_is_the_length_of_the_vector(night, write_member):
    u, v = uneven(seed=1) - 278.0, uneven(seed=2) - 283.0
    for number in range(6):
        write_member(night.member(number), {"u10": u[number], "v10": v[number]}, units="m s-1")
    night.settings('[variables.wind]\nspeed = ["u10", "v10"]\ncriteria = [{tolerance = 1.0}]')
    night.estimated()
    np.testing.assert_allclose(night.spread("wind")[0], over(np.hypot(u, v), WEIGHTS), rtol=1e-6)
    assert night.curves()["wind_spread"].attrs["units"] == "m s-1"


def test_components_in_different_units_are_refused_or_converted(night, write_member):
    import netCDF4

    u, v = uneven(seed=1) - 278.0, uneven(seed=2) - 283.0
    for number in range(6):
        write_member(night.member(number), {"u10": u[number], "v10": v[number]}, units="m s-1")
        with netCDF4.Dataset(night.member(number), "a") as file:
            file["v10"].units = "km h-1"
    night.settings(
        '[variables.wind]\nspeed = ["u10", "v10"]\nunits = "m s-1"\ncriteria = [{tolerance = 1}]'
    )
    result = night.estimate()
    if result.exit_code == 0:
        right = over(np.hypot(u, v / 3.6), WEIGHTS)
        np.testing.assert_allclose(night.spread("wind")[0], right, rtol=1e-6)
    else:
        assert result.exit_code in (2, 3)
        assert "km h-1" in result.stderr


def test_the_chance_criterion_counts_members_far_from_the_median(night):
    values = night.write(uneven(members=8))
    night.settings(
        "[variables.t2]\ncriteria = [{chance = {beyond = 2.0, probability = 0.25}}]",
        more="[sites.tower]\nlatitude = 55.0\nlongitude = 5.0",
    )
    (row,) = night.estimated()
    here = values[:, :, 2, 3]
    share = (np.abs(here - np.median(here, axis=0)) > 2.0).mean(axis=0)
    np.testing.assert_allclose(night.curves()["t2_chance"].values.ravel(), share, atol=1e-9)
    assert (row["threshold"], row["threshold_units"]) == ("0.25", "1")
    first = np.flatnonzero(share > 0.25)[0]
    assert 12.0 * (first - 1) <= float(row["horizon"]) <= 12.0 * first


def test_values_packed_as_integers(night):
    import netCDF4

    values = uneven()
    night.write(values)
    scale = 0.005
    packed = np.round((values - 280) / scale).astype("i2")
    for number in range(6):
        with netCDF4.Dataset(night.member(number), "a") as file:
            file.renameVariable("t2", "unused")
            field = file.createVariable("t2", "i2", ("time", "latitude", "longitude"))
            field.setncatts({"units": "K", "scale_factor": scale, "add_offset": 280.0})
            field.set_auto_maskandscale(False)
            field[:] = packed[number]
    night.settings()
    night.estimated()
    # Single precision holds 280 K to 1.5e-5 K.
    right = over(280 + packed * scale, WEIGHTS)
    np.testing.assert_allclose(night.spread()[0], right, atol=1.5e-5)


def test_leads_counted_from_the_start_whatever_the_time_units(night):
    import netCDF4

    values = night.write(uneven())
    for number in range(6):
        with netCDF4.Dataset(night.member(number), "a") as file:
            file["time"].units = "minutes since 2031-02-14 00:00"
            file["time"][:] = 720.0 * np.arange(12)
    night.settings()
    night.estimated()
    np.testing.assert_allclose(night.curves()["lead"].values, 12.0 * np.arange(12))
    np.testing.assert_allclose(night.spread()[0], over(values, WEIGHTS), rtol=1e-6)


def test_the_same_night_twice_gives_the_same_numbers(night):
    night.write(uneven())
    night.settings()
    first = night.estimated()
    assert night.estimated() == first


def test_csv_and_netcdf_agree(night):
    night.write(uneven())
    night.settings("[variables.t2]\ncriteria = [{tolerance = 1.5}, {saturation_fraction = 0.5}]")
    rows = night.estimated()
    data = night.curves()
    names = [str(name) for name in data["t2_criterion_name"].values]
    assert names == [row["criterion"] for row in rows]
    found = data["t2_horizon"].values.ravel()
    np.testing.assert_allclose([float(row["horizon"]) for row in rows], found, rtol=1e-5)
