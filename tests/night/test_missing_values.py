"""Missing and implausible values, missing members, and broken files among good ones."""

import numpy as np
import pytest


def striped(growing, number=2):
    """A whole lead and some rows of one member are missing."""
    values = growing()
    values[number, 5] = np.nan
    values[number, 7:, 2] = np.nan
    return values


def area_spread(values, latitudes=None) -> np.ndarray:
    """Root of the area-weighted mean variance of (member, lead, y, x), by plain numpy."""
    latitudes = np.linspace(65.0, 40.0, 6) if latitudes is None else latitudes
    weights = np.cos(np.deg2rad(latitudes))[:, None] * np.ones(values.shape[-1])
    variance = values.std(axis=0, ddof=1) ** 2
    weights = np.where(np.isnan(variance), 0.0, weights)
    return np.sqrt(np.nansum(variance * weights, axis=(1, 2)) / weights.sum(axis=(1, 2)))


def test_a_striped_member_is_dropped_and_named(night, growing):
    values = night.write(striped(growing))
    night.settings(runs='incomplete = "drop"')
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert "member 2" in result.stderr
    assert "t2" in result.stderr
    assert {row["members"] for row in night.rows()} == {"5"}
    kept = np.delete(values, 2, axis=0)
    np.testing.assert_allclose(night.spread()[0], area_spread(kept), rtol=1e-6)


def test_drop_is_the_default(night, growing):
    night.write(striped(growing))
    night.settings()
    (row,) = night.estimated()
    assert row["members"] == "5"


def test_a_striped_member_is_used_where_it_has_values(night, growing):
    values = night.write(striped(growing))
    night.settings(runs='incomplete = "use"')
    night.estimated()
    spread = night.spread()[0]
    variance = np.nanvar(values, axis=0, ddof=1)
    weights = np.cos(np.deg2rad(np.linspace(65.0, 40.0, 6)))[:, None] * np.ones(8)
    used = np.sqrt((variance * weights).sum(axis=(1, 2)) / weights.sum())
    np.testing.assert_allclose(spread, used, rtol=1e-6)


def test_a_striped_member_stops_the_night(night, growing, refusal):
    night.write(striped(growing))
    night.settings(runs='incomplete = "stop"')
    refusal(night.estimate(), 3, "member 2", "t2")
    assert night.written() == []


@pytest.mark.parametrize("first", [0, 5, 11])
def test_a_member_without_a_whole_lead_is_dropped_and_named(night, growing, first):
    values = growing()
    values[2, first] = np.nan
    night.write(values)
    night.settings()
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert {row["members"] for row in night.rows()} == {"5"}
    kept = np.delete(values, 2, axis=0)
    np.testing.assert_allclose(night.spread()[0], area_spread(kept), rtol=1e-6)
    assert "member 2" in result.stderr


def test_a_member_without_a_whole_lead_stops_the_night(night, growing, refusal):
    values = growing()
    values[2, 5] = np.nan
    night.write(values)
    night.settings(runs='incomplete = "stop"')
    refusal(night.estimate(), 3, "member 2", "t2")
    assert night.written() == []


def test_a_member_whose_second_half_is_missing_is_dropped(night, growing):
    """A file that was made whole and filled only as far as the run came."""
    values = growing()
    values[1, 6:] = np.nan
    night.write(values)
    night.settings()
    (row,) = night.estimated()
    assert row["members"] == "5"
    kept = np.delete(values, 1, axis=0)
    np.testing.assert_allclose(night.spread()[0], area_spread(kept), rtol=1e-6)


@pytest.mark.parametrize("policy", ["drop", "use", "stop"])
def test_a_land_mask_common_to_all_members_is_no_fault(night, growing, policy):
    values = growing()
    values[:, :, 1:4, 2:5] = np.nan
    night.write(values)
    night.settings(runs=f'incomplete = "{policy}"')
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert result.stderr == ""
    assert night.rows()[0]["members"] == "6"
    np.testing.assert_allclose(night.spread()[0], area_spread(values), rtol=1e-6)


def test_a_site_in_the_mask_says_so(night, growing):
    values = growing()
    values[:, :, 1, 2] = np.nan
    night.write(values)
    night.settings(more="[sites.inland]\nlatitude = 60.0\nlongitude = 0.0")
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    (row,) = night.rows()
    assert (row["place"], row["status"], row["horizon"]) == ("inland", "no_data", "")


def test_all_values_missing(night, growing, refusal):
    night.write(np.full_like(growing(), np.nan))
    night.settings()
    result = night.estimate()
    if result.exit_code == 0:
        assert {row["status"] for row in night.rows()} == {"no_data"}
    else:
        refusal(result, 3, "t2")


def test_values_outside_the_plausible_range(night, growing):
    values = growing()
    values[4, 8, 0, 0] = 999.0
    night.write(values)
    night.settings("[variables.t2]\nplausible = [180, 340]\ncriteria = [{tolerance = 1.5}]")
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert "member 4" in result.stderr
    assert "999" in result.stderr
    assert night.rows()[0]["members"] == "5"
    kept = np.delete(values, 4, axis=0)
    np.testing.assert_allclose(night.spread()[0], area_spread(kept), rtol=1e-6)


def test_the_plausible_range_counts_in_the_units_of_the_settings(night):
    night.write()
    night.settings(
        '[variables.t2]\nunits = "degC"\nplausible = [-90, 60]\ncriteria = [{tolerance = 1.5}]'
    )
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert result.stderr == ""
    assert night.rows()[0]["members"] == "6"


def test_every_member_outside_the_plausible_range(night, refusal):
    night.write()
    night.settings("[variables.t2]\nplausible = [0, 50]\ncriteria = [{tolerance = 1.5}]")
    refusal(night.estimate(), 3, "plausible", "t2")
    assert night.written() == []


def test_a_truncated_file_among_good_ones(night, growing):
    values = night.write()
    whole = night.member(3).read_bytes()
    night.member(3).write_bytes(whole[: len(whole) // 2])
    night.settings()
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert "m03.nc" in result.stderr or "member 3" in result.stderr
    assert night.rows()[0]["members"] == "5"
    kept = np.delete(values, 3, axis=0)
    np.testing.assert_allclose(night.spread()[0], area_spread(kept), rtol=1e-6)


def test_a_truncated_file_stops_the_night_where_asked(night, refusal):
    night.write()
    whole = night.member(3).read_bytes()
    night.member(3).write_bytes(whole[: len(whole) // 2])
    night.settings(runs='incomplete = "stop"')
    refusal(night.estimate(), 3, "m03.nc")
    assert night.written() == []


def test_a_member_that_ends_early_is_dropped(night, growing):
    values = growing()
    night.write(values)
    night.write(values[:1, :7])  # member 0 again, seven leads of twelve
    night.settings()
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert "member 0" in result.stderr
    assert night.rows()[0]["members"] == "5"
    np.testing.assert_allclose(night.spread()[0], area_spread(values[1:]), rtol=1e-6)


def test_members_missing_from_the_expected_number(night):
    night.write()
    night.settings(runs="members = 8")
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert "8" in result.stderr
    assert "6" in result.stderr
    assert night.rows()[0]["members"] == "6"


def test_members_missing_from_the_expected_list(night):
    night.write()
    night.settings(runs="members = [0, 1, 2, 3, 4, 5, 6, 9]")
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert "6 and 9" in result.stderr or "6, 9" in result.stderr
    assert night.rows()[0]["members"] == "6"


def test_members_missing_from_the_expected_list_stop_the_night(night, refusal):
    night.write()
    night.settings(runs='members = [0, 1, 2, 3, 4, 5, 9]\nincomplete = "stop"')
    refusal(night.estimate(), 3, "9")
    assert night.written() == []


def test_a_control_that_is_not_there(night):
    night.write()
    night.settings(runs="control = 42")
    result = night.estimate()
    assert result.exit_code in (0, 2, 3)
    assert "42" in result.stderr
    assert "control" in result.stderr
