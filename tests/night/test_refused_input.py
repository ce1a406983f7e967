"""Input that cannot be used: one message, status 3, and nothing in the product folder."""

import numpy as np
import pytest


def test_a_glob_without_a_match_is_named(night, refusal):
    night.settings(files="nothing_*.nc")
    refusal(night.estimate(), 3, "nothing_*.nc")
    assert night.written() == []


def test_a_template_without_a_match_is_named(night, refusal):
    night.write()
    night.settings(files="night_{start:%Y%m%d}/m{member:03d}.nc")
    refusal(night.estimate(), 3, "night_{start:%Y%m%d}/m{member:03d}.nc")
    assert night.written() == []


def test_a_template_whose_fields_do_not_fit_the_names_is_named(night, refusal):
    night.write()
    night.settings(files="m{member:03d}.nc")
    refusal(night.estimate(), 3, "m{member:03d}.nc")
    assert night.written() == []


def test_a_directory_in_place_of_files(night, refusal):
    (night.folder / "runs.nc").mkdir()
    night.settings(files="runs.nc")
    text = refusal(night.estimate(), 3, "runs.nc")
    assert "director" in text or "folder" in text
    assert night.written() == []


def test_a_directory_among_the_files_is_no_run(night, refusal):
    night.write()
    night.member(6).mkdir()
    night.settings()
    result = night.estimate()
    if result.exit_code == 0:
        assert "m06.nc" in result.stderr
        assert night.rows()[0]["members"] == "6"
    else:
        refusal(result, 3, "m06.nc")


def test_text_files_named_nc(night, refusal):
    for number in range(3):
        night.member(number).write_text("lead,member\n0,1\n")
    night.settings()
    refusal(night.estimate(), 3, "m00.nc")
    assert night.written() == []


def test_empty_files(night, refusal):
    for number in range(3):
        night.member(number).touch()
    night.settings()
    refusal(night.estimate(), 3, "m00.nc")
    assert night.written() == []


def test_truncated_files_only(night, refusal):
    night.write()
    for number in range(6):
        whole = night.member(number).read_bytes()
        night.member(number).write_bytes(whole[: len(whole) // 2])
    night.settings()
    refusal(night.estimate(), 3, "m00.nc")
    assert night.written() == []


def test_a_file_that_is_not_there(night, refusal):
    night.settings(files="absent.nc")
    refusal(night.estimate(), 3, "absent.nc")
    assert night.written() == []


def test_a_variable_that_is_not_there_with_the_nearest_names(night, refusal):
    night.write(name="air_temperature")
    night.settings('[variables.t2]\nsource = "air_temprature"\ncriteria = [{tolerance = 1.5}]')
    refusal(night.estimate(), 3, "m00.nc", "'air_temprature'", "air_temperature, which is nearest")
    assert night.written() == []


def test_a_component_of_a_speed_that_is_not_there(night, refusal):
    night.write(name="u10")
    night.settings('[variables.wind]\nspeed = ["u10", "v10"]\ncriteria = [{tolerance = 1.5}]')
    refusal(night.estimate(), 3, "'v10'", "u10")
    assert night.written() == []


def test_one_member_has_no_spread(night, growing, refusal):
    night.write(growing()[:1])
    night.settings()
    refusal(night.estimate(), 3, "member")
    assert night.written() == []


def test_one_member_is_refused_even_where_the_settings_ask_for_two(night, growing, refusal):
    night.write(growing()[:1])
    night.settings(runs="minimum_members = 2")
    refusal(night.estimate(), 3, "member", "2")
    assert night.written() == []


def test_fewer_members_than_the_minimum(night, growing):
    night.write(growing()[:4])
    night.settings(runs="minimum_members = 5")
    result = night.estimate()
    # Either the run is refused, or the products say that there is too little data.
    if result.exit_code == 0:
        assert [row["status"] for row in night.rows()] == ["no_data"]
        assert night.rows()[0]["horizon"] == ""
        assert "minimum" in result.stderr or "5" in result.stderr
    else:
        assert result.exit_code == 3
        assert "found 4 usable members" in result.stderr
        assert "5" in result.stderr
        assert night.written() == []


def test_members_on_different_grids(night, growing, write_member, refusal):
    night.write()
    values = growing(shape=(5, 8))
    write_member(night.member(3), {"t2": values[3]}, latitudes=np.linspace(65, 40, 5))
    night.settings(runs='incomplete = "stop"')
    refusal(night.estimate(), 3, "m03.nc")
    assert night.written() == []


def test_units_that_cannot_be_converted(night, refusal):
    night.write()
    night.settings('[variables.t2]\nunits = "m s-1"\ncriteria = [{tolerance = 1.5}]')
    result = night.estimate()
    refusal(result, result.exit_code, "'K'", "m s-1")
    assert result.exit_code in (2, 3)
    assert night.written() == []


@pytest.mark.parametrize("name", ["runs", "m{member}.txt"])
def test_no_traceback_without_debug_but_one_with_it(night, name):
    night.settings(files=name)
    assert "Traceback" not in night.estimate().stderr
    told = night.estimate("--debug")
    assert told.exit_code == 3
    assert "Traceback" in told.stderr
    assert told.stderr.splitlines()[-1].startswith("ensemble-horizon: ")
