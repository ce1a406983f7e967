"""Mistakes in the settings: all at once, each with its key, status 2, nothing written."""

import pytest


def test_every_mistake_at_once_with_its_key_and_the_nearest(night, refusal):
    night.write()
    night.config.write_text(
        """
[runs]
files = "m{member:02d}.nc"
minimum_member = 4
incomplete = "skip"
[variables.t2]
sorce = "t2"
hold = -3
criteria = [{tolerance = 1.5}, {tolerence = 2.0}, {saturation_fraction = 1.5}]
[growth]
law = "logistics"
[regions.north]
suoth = 45
[sites.buoy]
latitude = 41
[produkts]
folder = "out"
""",
        encoding="utf-8",
    )
    text = refusal(
        night.estimate(), 2,
        "runs.minimum_member: unknown key; did you mean 'minimum_members'?",
        "runs.incomplete", "'skip'",
        "variables.t2.sorce: unknown key; did you mean 'source'?",
        "variables.t2.hold",
        "variables.t2.criteria[1].tolerence: unknown key; did you mean 'tolerance'?",
        "variables.t2.criteria[2].saturation_fraction",
        "growth.law", "did you mean 'logistic'?",
        "regions.north.suoth: unknown key; did you mean 'south'?",
        "sites.buoy.longitude: missing",
        "produkts: unknown key; did you mean 'products'?",
        "products: missing",
    )  # fmt: skip
    assert str(night.config) in text
    assert "growth.law: one of auto" in text
    assert night.written() == []


def test_mistakes_of_spelling_and_of_sense_at_once(night, refusal):
    night.write()
    night.settings(
        """
[variables.t2]
units = "K"
plausible = [340, 180]
hold = "long"
criteria = [{tolerance = "5 kg"}, {tolerence = 2.0}, {name = "a", tolerance = 1.5},
    {name = "a", tolerance = 2.0}, {climatology_fraction = 0.5}, {name = "b", tolerance = "1 s"}]
[variables.wind]
speed = "u10"
criteria = []
""",
        more="[regions.a]\nsouth = 60\nnorth = 45\n[regions.b]\nsuoth = 60\n"
        "[sites.b]\nlatitude = 95\nlongitude = 3",
    )
    refusal(
        night.estimate(), 2,
        "variables.t2.plausible", "variables.t2.hold", "variables.t2.criteria[0].tolerance",
        "variables.t2.criteria[1].tolerence: unknown key", "variables.t2.criteria[3].name",
        "variables.t2.criteria[4].climatology_fraction", "variables.t2.criteria[5].tolerance",
        "variables.wind.speed", "variables.wind.criteria",
        "regions.a", "regions.b.suoth: unknown key", "sites.b: a region has the same name",
        "sites.b: expected", "found 13:",
    )  # fmt: skip
    assert night.written() == []


def test_an_unknown_key_without_a_near_one_lists_the_known(night, refusal):
    night.settings(more="[growth]\nzzz = 1")
    refusal(night.estimate(), 2, "growth.zzz: unknown key", "confidence", "law", "scale")


def test_an_unknown_key_below_chance(night, refusal):
    night.settings("[variables.t2]\ncriteria = [{chance = {beyond = 2.0, probabilty = 0.2}}]")
    refusal(
        night.estimate(), 2,
        "variables.t2.criteria[0].chance.probabilty: unknown key; did you mean 'probability'?",
        "variables.t2.criteria[0].chance.probability: missing",
    )  # fmt: skip


def test_an_unknown_key_in_the_climatology_table(night, refusal):
    night.settings(more='[climatology]\nfiles = "c.nc"')
    refusal(night.estimate(), 2, "climatology.files: unknown key; did you mean 'file'?")


def test_a_table_where_a_value_belongs_and_the_reverse(night, refusal):
    night.config.write_text('runs = 3\nvariables = "t2"\n[products.folder]\n', encoding="utf-8")
    refusal(night.estimate(), 2, "runs: ", "variables: ", "products.folder: ")


def test_a_scalar_where_a_named_table_belongs(night, refusal):
    night.settings("[variables]\nt2 = 3")
    refusal(night.estimate(), 2, "variables.t2: ")


def test_an_unknown_law_is_refused_with_the_known_ones(night, refusal):
    night.write()
    night.settings(more='[growth]\nlaw = "gompertz"')
    refusal(night.estimate(), 2, "growth.law", "'gompertz'", "exponential", "logistic", "power")
    assert night.written() == []


def test_a_settings_file_that_is_not_there(night, refusal):
    refusal(night.run("estimate", night.folder / "none.toml"), 2, "none.toml", "No such file")


def test_a_folder_as_a_settings_file(night, refusal):
    refusal(night.run("estimate", night.folder), 2, str(night.folder))


def test_a_settings_file_that_is_no_toml(night, refusal):
    night.config.write_text("runs:\n  files: a.nc\n", encoding="utf-8")
    refusal(night.estimate(), 2, "settings.toml", "TOML", "line 1")


def test_a_binary_settings_file(night, refusal):
    night.config.write_bytes(bytes(range(256)))
    text = refusal(night.estimate(), 2, "settings.toml")
    assert "\x00" not in text


def test_a_netcdf_file_as_a_settings_file(night, refusal):
    night.write()
    refusal(night.run("estimate", night.member(0)), 2, "m00.nc")


def test_an_empty_settings_file(night, refusal):
    night.config.write_text("", encoding="utf-8")
    refusal(night.estimate(), 2, "runs: missing", "variables: missing", "products: missing")


def test_a_settings_file_with_a_byte_order_mark(night):
    # Editors of some systems write one (common practice); the text behind it is plain TOML.
    night.write()
    night.settings()
    night.config.write_bytes(b"\xef\xbb\xbf" + night.config.read_bytes())
    result = night.estimate()
    assert result.exit_code in (0, 2)
    if result.exit_code == 2:
        assert "byte order mark" in result.stderr


@pytest.mark.parametrize("text", ["5 kg", "5 furlongs", "5 m", "knot", "5", "five knot", ""])
def test_a_tolerance_in_units_of_something_else(night, refusal, text):
    night.write(name="wind", units="m s-1")
    night.settings(f'[variables.wind]\nunits = "m s-1"\ncriteria = [{{tolerance = "{text}"}}]')
    refusal(night.estimate(), 2, "variables.wind.criteria[0].tolerance")
    assert night.written() == []


def test_a_tolerance_in_wrong_units_where_the_files_state_the_units(night, refusal):
    night.write(name="wind", units="m s-1")
    night.settings('[variables.wind]\ncriteria = [{tolerance = "5 kg"}]')
    refusal(night.estimate(), 2, "variables.wind.criteria[0].tolerance", "kg", "m s-1")
    assert night.written() == []


@pytest.mark.parametrize("units", ['units = "m s-1"\n', ""])
def test_a_tolerance_in_other_units_of_the_same_kind(night, units):
    night.write(name="wind", units="m s-1")
    night.settings(f'[variables.wind]\n{units}criteria = [{{tolerance = "5 knot"}}]')
    (row,) = night.estimated()
    # 1 knot = 1852 m an hour (international nautical mile, exact by definition).
    assert float(row["threshold"]) == pytest.approx(5 * 1852 / 3600, rel=1e-5)
    assert row["threshold_units"] == "m s-1"


def test_a_tolerance_of_temperature_is_a_difference(night):
    night.write()
    night.settings('[variables.t2]\nunits = "degC"\ncriteria = [{tolerance = "2.7 degF"}]')
    (row,) = night.estimated()
    assert float(row["threshold"]) == pytest.approx(1.5, rel=1e-5)


@pytest.mark.parametrize("amount", ["0", "-1.5", "nan", "inf"])
def test_a_tolerance_must_be_a_finite_amount_above_zero(night, refusal, amount):
    night.write()
    night.settings(f"[variables.t2]\ncriteria = [{{tolerance = {amount}}}]")
    refusal(night.estimate(), 2, "variables.t2.criteria[0].tolerance")
    assert night.written() == []


@pytest.mark.parametrize(
    "criteria",
    [
        "{tolerance = 1.5}, {tolerance = 1.5}",
        '{name = "crane", tolerance = 1.5}, {name = "crane", tolerance = 2.0}',
        '{name = "tolerance 1.5", saturation_fraction = 0.5}, {tolerance = 1.5}',
    ],
)
@pytest.mark.parametrize("units", ['units = "K"\n', ""])
def test_two_criteria_of_the_same_label(night, refusal, criteria, units):
    night.write()
    night.settings(f"[variables.t2]\n{units}criteria = [{criteria}]")
    refusal(night.estimate(), 2, "variables.t2.criteria[1]")
    assert night.written() == []


def test_a_criterion_of_two_kinds_or_none(night, refusal):
    night.settings("[variables.t2]\ncriteria = [{tolerance = 1, saturation_fraction = 0.5}, {}]")
    refusal(
        night.estimate(), 2,
        "variables.t2.criteria[0]: exactly one of", "found tolerance, saturation_fraction",
        "variables.t2.criteria[1]: exactly one of", "found none",
    )  # fmt: skip


def test_no_criteria(night, refusal):
    night.settings("[variables.t2]\ncriteria = []")
    text = refusal(night.estimate(), 2, "variables.t2.criteria")
    assert "after validation" not in text  # words of a library, not of the user


def test_units_that_are_no_units(night, refusal):
    night.write()
    night.settings('[variables.t2]\nunits = "splines"\ncriteria = [{tolerance = 1.5}]')
    result = night.estimate()
    refusal(result, 2, "splines", "variables.t2")
    assert night.written() == []


@pytest.mark.parametrize("wanted", ['"2024-13-45"', '"yesterday"'])
def test_a_start_that_is_no_time(night, refusal, wanted):
    night.write()
    night.settings(runs=f"starts = [{wanted}]")
    refusal(night.estimate(), 2, wanted.strip('"'))
    assert night.written() == []


def test_a_start_that_the_runs_do_not_have(night, refusal):
    night.write()
    night.settings(runs='starts = ["2031-02-15T00"]')
    refusal(night.estimate(), 2, "2031-02-15", "2031-02-14")
    assert night.written() == []


def test_settings_are_never_run_as_code(night, refusal):
    night.write()
    mark = night.folder / "ran"
    night.settings(
        f"[variables.t2]\nsource = \"__import__('pathlib').Path('{mark}').touch()\"\n"
        "criteria = [{tolerance = 1.5}]"
    )
    refusal(night.estimate(), 3)
    assert not mark.exists()


def test_usage_mistakes_of_the_command_line_have_status_two(night):
    assert night.run("estimate").exit_code == 2
    assert night.run("estimat").exit_code == 2
    assert night.run("survey").exit_code == 2
    assert night.run("estimate", "--nonsense", night.config).exit_code == 2
    assert night.run("reach", night.config, "--variable", "t2").exit_code == 2
