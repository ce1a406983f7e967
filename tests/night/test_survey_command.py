"""The command ``survey``: on files and on settings, its verdict, its exit status, its JSON."""

import json

import numpy as np


def damage(path, *, keep=0.5):
    whole = path.read_bytes()
    path.write_bytes(whole[: int(len(whole) * keep)])


def verdict(result) -> str:
    (line,) = [line for line in result.stdout.splitlines() if line.startswith("Verdict:")]
    return line.partition(":")[2].strip()


def test_good_runs_by_settings_template_glob_and_list(night):
    night.write(numbered=True)
    night.settings()
    for target in (
        [night.config], [night.files], [night.folder / "m*.nc"],
        [night.member(number) for number in range(6)],
    ):  # fmt: skip
        result = night.run("survey", *target)
        assert result.exit_code == 0, result.stderr
        assert result.stderr == ""
        assert verdict(result) == "usable as is"
        assert "Members:   6 " in result.stdout
        assert "Leads:     12 (0 to 132 h)" in result.stdout
        assert "6 x 8 points" in result.stdout


def test_members_without_numbers_need_a_template(night, refusal):
    night.write()
    refusal(night.run("survey", night.folder / "m*.nc"), 3, "m01.nc", "member number", "{member}")


def test_a_truncated_file_among_good_ones(night):
    night.write()
    damage(night.member(3))
    for target in (night.files, night.settings()):
        result = night.run("survey", target)
        assert result.exit_code == 0, result.stderr
        assert verdict(result) == "usable without member 3"
        assert "m03.nc" in result.stdout
        assert "truncated" in result.stdout


def test_a_damaged_block_behind_a_good_header(night):
    import netCDF4

    values = night.write()
    target, source = night.member(3), night.member(2)
    with netCDF4.Dataset(target, "w") as file, netCDF4.Dataset(source) as good:
        for name, size in good.dimensions.items():
            file.createDimension(name, len(size))
        for name, field in good.variables.items():
            packed = {"zlib": True, "fletcher32": True} if name == "t2" else {}
            copy = file.createVariable(name, "f8", field.dimensions, **packed)
            copy.setncatts({k: v for k, v in field.__dict__.items() if k != "_FillValue"})
            copy[...] = values[3] if name == "t2" else field[...]
    whole = bytearray(night.member(3).read_bytes())
    middle = len(whole) * 3 // 5
    whole[middle : middle + 400] = bytes(400)
    night.member(3).write_bytes(whole)
    night.settings()
    result = night.run("survey", night.config)
    assert result.exit_code == 0, result.stderr
    assert verdict(result) == "usable without member 3"
    estimate = night.estimate()
    assert estimate.exit_code == 0, estimate.stderr
    assert "member 3" in estimate.stderr or "m03.nc" in estimate.stderr
    assert night.rows()[0]["members"] == "5"


def test_one_good_member_is_not_usable(night, growing, refusal):
    night.write(growing()[:1])
    for target in (night.member(0), night.settings()):
        result = night.run("survey", target)
        refusal(result, 3, "1 usable member")
        assert verdict(result) == "not usable"


def test_too_many_broken_members_are_not_usable(night, tmp_path):
    night.write()
    damage(night.member(1))
    damage(night.member(4))
    night.settings(runs="minimum_members = 5")
    report = tmp_path / "report.json"
    result = night.run("survey", night.config, "--json", report)
    assert result.exit_code == 3
    assert verdict(result) == "not usable"
    assert "4 usable members" in result.stdout
    found = json.loads(report.read_text(encoding="utf-8"))
    assert found["verdict"] != "usable"
    assert found["reasons"]


def test_runs_that_are_not_there(night, refusal):
    refusal(night.run("survey", night.folder / "none*.nc"), 3, "none*.nc")
    refusal(night.run("survey", night.folder / "none{member}.nc"), 3, "none{member}.nc")
    refusal(night.run("survey", night.folder / "none.nc"), 3, "none.nc")


def test_a_directory_and_a_text_file(night):
    folder = night.folder / "runs.nc"
    folder.mkdir()
    text = night.folder / "text.nc"
    text.write_text("lead,member\n")
    for target in (folder, text):
        result = night.run("survey", target)
        assert result.exit_code == 3
        assert "Traceback" not in result.stderr
        assert target.name in result.stdout + result.stderr


def test_settings_with_mistakes(night, refusal):
    night.settings(more="[growth]\nlow = 'auto'")
    refusal(night.run("survey", night.config), 2, "growth.low: unknown key; did you mean 'law'?")
    refusal(night.run("survey", night.folder / "none.toml"), 2, "none.toml")


def test_the_json_report_holds_what_is_there(night, tmp_path):
    values = night.write()
    values[2, 5] = np.nan
    night.write(values)
    report = tmp_path / "report.json"
    result = night.run("survey", night.files, "--json", report)
    assert result.exit_code == 0
    assert verdict(result) == "usable without member 2"
    found = json.loads(report.read_text(encoding="utf-8"))
    assert found["summary"] == "usable without member 2"
    assert found["drop"] == [2]
    assert found["members"] == [0, 1, 2, 3, 4, 5]
    assert found["leads"] == [12.0 * lead for lead in range(12)]
    assert found["variables"] == ["t2"]
    assert found["starts"] == ["2031-02-14T00:00"]
    assert len(found["files"]) == 6
    assert any("lead 60 h" in json.dumps(fault) for fault in found["faults"])


def test_the_json_report_where_it_cannot_be_written(night, refusal):
    night.write()
    blocked = night.folder / "file"
    blocked.write_text("kept")
    refusal(night.run("survey", night.files, "--json", blocked / "report.json"), 2, "report.json")
    assert blocked.read_text() == "kept"


def test_headers_only_leaves_the_values_unread(night):
    values = night.write()
    values[2, 5] = np.nan
    night.write(values)
    result = night.run("survey", night.files, "--headers-only")
    assert result.exit_code == 0
    assert verdict(result) == "usable as is"


def test_members_that_are_missing_from_the_expected_list(night):
    night.write()
    night.settings(runs="members = [0, 1, 2, 3, 4, 5, 6, 9]")
    result = night.run("survey", night.config)
    assert result.exit_code == 0
    assert verdict(result) == "usable without members 6 and 9"


def test_all_members_equal_is_suspect(night, growing):
    night.write(np.repeat(growing()[:1], 6, axis=0))
    result = night.run("survey", night.files)
    assert "equal" in result.stdout or "same" in result.stdout or "identical" in result.stdout


def test_constant_fields_are_suspect(night):
    night.write(np.full((6, 12, 6, 8), 281.25))
    result = night.run("survey", night.files)
    assert "constant" in result.stdout


def test_a_land_mask_is_no_fault(night, growing):
    values = growing()
    values[:, :, 1:4, 2:5] = np.nan
    night.write(values)
    result = night.run("survey", night.files)
    assert result.exit_code == 0
    assert verdict(result) == "usable as is"
    assert "Faults" not in result.stdout


def test_no_variable_of_the_settings_is_there(night):
    night.write()
    night.settings('[variables.wind]\nsource = "wnd"\ncriteria = [{tolerance = 1.5}]')
    result = night.run("survey", night.config)
    assert result.exit_code == 3
    assert "wnd" in result.stdout + result.stderr
    assert "Traceback" not in result.stderr
