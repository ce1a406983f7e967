"""`toy run` from the settings file to an archive that the other commands read."""

import csv
import json
import tomllib
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from click.testing import CliRunner

import ensemble_horizon as eh
from ensemble_horizon import toys
from ensemble_horizon.cli.main import group
from ensemble_horizon.runs import open_analyses
from ensemble_horizon.settings.rehearsal import read_rehearsal

ROOT = Path(__file__).parents[2]
SETTINGS = """
title = "Ring"
[system]
name = "lorenz-96"
[truth]
spin_up = 5.0
climate = 20.0
[analyses]
amplitude = 0.2
norm = "area-weighted"
[forecast]
starts = 3
start_spacing = 0.4
leads = 11
lead_spacing = 0.1
members = 5
seed = 3
[versions.A]
[versions.B]
parameters = { forcing = 9.0 }
[archive]
folder = "archive"
precision = "float64"
layout = "start"
"""


class Desk:
    """A settings file, its archive, and the commands run on them."""

    def __init__(self, folder):
        self.config = folder / "rehearsal.toml"
        self.archive = folder / "archive"
        self.write()

    def write(self, *changes):
        text = SETTINGS
        for old, new in changes:
            assert old in text
            text = text.replace(old, new)
        self.config.write_text(text, encoding="utf-8")

    def run(self, *arguments):
        given = [str(item) for item in arguments or ("toy", "run", self.config)]
        return CliRunner().invoke(group, given, catch_exceptions=False)

    def made(self):
        result = self.run()
        assert result.exit_code == 0, result.stderr
        return result.stdout

    def files(self):
        found = (path for path in self.archive.rglob("*") if path.is_file())
        return sorted(path.relative_to(self.archive).as_posix() for path in found)


@pytest.fixture
def desk(tmp_path):
    return Desk(tmp_path)


STARTS = ["20310214T0000", "20310216T0000", "20310218T0000"]  # 0.4 units of five days apart


@pytest.mark.parametrize("layout", ["start", "member"])
def test_the_archive_is_read_like_real_runs(desk, layout):
    desk.write(('"start"', f'"{layout}"'))
    said = desk.made()
    assert "6 ensembles of 5 members x 11 leads made; 19 analyses" in said
    names = [f"{start}.nc" for start in STARTS]
    if layout == "member":
        names = [f"{start}/member{member:02d}.nc" for start in STARTS for member in range(5)]
    others = ["A.toml", "B.toml", "analyses.nc", "climatology.nc", "rehearsal.json", "truth.nc"]
    assert desk.files() == sorted([f"{v}/{name}" for v in "AB" for name in names] + others)

    experiment = read_rehearsal(desk.config).experiment()
    pattern = "*.nc" if layout == "start" else "*/member*.nc"
    analyses = open_analyses(desk.archive / "analyses.nc").load()
    truth = open_analyses(desk.archive / "truth.nc").load()
    for version in "AB":
        runs = eh.open_runs(str(desk.archive / version / pattern)).load()
        assert runs.x.dims == ("start", "lead", "member", "cell")
        assert runs.lead.values == pytest.approx(12.0 * np.arange(11), abs=1e-9)
        assert runs.start.values.astype("M8[s]").tolist() == [
            np.datetime64(f"{s[:4]}-{s[4:6]}-{s[6:8]}").astype("M8[s]").item() for s in STARTS
        ]
        # Every valid time has its analysis, to the nanosecond.
        assert set(runs.valid.values.ravel()) <= set(analyses.valid.values)
        for number in range(3):
            moment = toys.moment_of_start(experiment, number)
            blocks = [block.states for block in toys.run_forecast(experiment, version, moment)]
            assert np.array_equal(runs.x[number].values, np.concatenate(blocks))
            when = runs.start.values[number]
            assert np.array_equal(truth.x.sel(valid=when).values, moment.truth)
            analysis = toys.analysis_at(experiment, moment)
            assert np.array_equal(analyses.x.sel(valid=when).values, analysis)


def test_errors_and_spread_of_the_archive_agree(desk):
    """Along the run of a perfect model, too: |mean - truth|^2 = (1 + 1/M) spread^2 in the mean."""
    desk.write(("starts = 3", "starts = 60"), ("amplitude = 0.2", "amplitude = 0.02"))
    desk.made()
    runs = eh.open_runs(str(desk.archive / "A" / "*.nc")).x.load()
    truth = open_analyses(desk.archive / "truth.nc").x.load()
    error = (runs.mean("member") - truth.sel(valid=runs.valid)) ** 2
    spread = runs.var("member", ddof=1)
    ratio = (error.mean(("start", "cell")) / spread.mean(("start", "cell"))).values / (1 + 1 / 5)
    # Growing errors lie along few directions, so 60 starts weigh like some 60 numbers of chi-square
    # each with one degree: sqrt(2 / 60) = 0.18.
    assert ratio == pytest.approx(1.0, abs=3 * 0.18)
    assert ratio[0] == pytest.approx(1.0, abs=0.1)


def test_climatology_is_that_of_the_truth(desk):
    desk.write(("climate = 20.0", "climate = 0.0"))
    desk.made()
    truth = open_analyses(desk.archive / "truth.nc").x.load()
    with xr.open_dataset(desk.archive / "climatology.nc") as climate:
        assert climate.x.values == pytest.approx(truth.std("valid", ddof=1).values, rel=1e-12)
        assert climate.x.attrs["cell_methods"] == "time: standard_deviation"
        assert climate.x_mean.values == pytest.approx(truth.mean("valid").values, rel=1e-12)
        assert climate.x_mean.attrs["cell_methods"] == "time: mean"


def test_estimate_takes_the_settings_as_they_are(desk):
    desk.made()
    result = desk.run("estimate", desk.archive / "B.toml", "--quiet")
    assert result.exit_code == 0, result.stderr
    with (desk.archive / "products_B" / "horizons.csv").open(newline="") as file:
        rows = list(csv.DictReader(file))
    assert {row["criterion"] for row in rows} == {
        "climatology fraction 0.5",
        "saturation fraction 0.5",
    }
    assert {row["members"] for row in rows} == {"5"}


def test_a_perfect_ensemble_has_skill_over_climatology_until_it_is_one(desk):
    """`verify` takes the settings as they are, climatological mean and all."""
    desk.write(
        ("climate = 20.0", "climate = 200.0"), ("starts = 3", "starts = 24"),
        ("start_spacing = 0.4", "start_spacing = 1.0"), ("leads = 11", "leads = 14"),
        ("lead_spacing = 0.1", "lead_spacing = 0.5"), ("members = 5", "members = 10"),
        ("[versions.B]\nparameters = { forcing = 9.0 }\n", ""),
    )  # fmt: skip
    desk.made()
    result = desk.run("verify", desk.archive / "A.toml", "--quiet")
    assert result.exit_code == 0, result.stderr
    scores = {}
    with (desk.archive / "products_A" / "scores.csv").open(newline="") as file:
        for row in csv.DictReader(file):
            ends = [float(row[key] or "nan") for key in ("value", "low", "high")]
            scores.setdefault(row["score"], []).append(ends)
    value, low, high = np.array(scores["skill_climatology"]).T
    # At the start the analysis lies in the middle of members that scatter by 0.2 about it. Normal
    # errors s: E|x| - E|x - x'|/2 = (sqrt(2) - 1) s / sqrt(pi); climatology has sigma / sqrt(pi).
    with xr.open_dataset(desk.archive / "climatology.nc") as climate:
        sigma = float(climate.x.mean())
    assert value[0] == pytest.approx(1 - (np.sqrt(2) - 1) * 0.2 / sigma, abs=0.003)
    assert (np.diff(value[:6]) < 0).all()
    assert low[3] > 0.2  # 180 hours
    # Errors double in two days (Lorenz 1996): after a month nothing is left, in nine of ten
    # intervals a lead; of four that depend on each other two at least.
    assert np.abs(value[-4:]).max() < 0.12
    assert ((low < 0) & (high > 0))[-4:].sum() >= 2
    assert ((low < value) & (value < high)).all()
    correlation = np.array(scores["anomaly_correlation"]).T[0]
    assert correlation[0] > 0.999
    assert np.abs(correlation[-4:]).max() < 0.3


def test_a_rerun_completes_what_is_missing_and_leaves_the_rest(desk):
    desk.made()
    before = {name: (desk.archive / name).stat().st_mtime_ns for name in desk.files()}
    lost = f"B/{STARTS[1]}.nc"
    with xr.open_dataset(desk.archive / lost) as data:
        values = data.x.values
    for name in (lost, "truth.nc"):
        (desk.archive / name).unlink()
    assert "1 ensembles of 5 members x 11 leads made, 5 kept from before" in desk.made()
    after = {name: (desk.archive / name).stat().st_mtime_ns for name in desk.files()}
    assert {name for name in after if after[name] != before[name]} == {lost, "truth.nc"}
    with xr.open_dataset(desk.archive / lost) as data:
        assert np.array_equal(data.x.values, values)


def test_another_experiment_does_not_get_into_the_archive(desk, refusal):
    desk.made()
    before = desk.files()
    desk.write(("seed = 3", "seed = 4"))
    refusal(desk.run(), 2, "archive", "archive made with other settings", "archive.folder")
    assert desk.files() == before
    # What changes no number may change.
    desk.write(('title = "Ring"', 'title = "Round"'))
    assert "6 kept from before" in desk.made()


def test_a_folder_of_other_things_is_left_alone(desk, refusal):
    desk.archive.mkdir()
    (desk.archive / "letters.txt").write_text("Dear all")
    refusal(desk.run(), 2, "a folder with letters.txt", "empty this one")
    assert desk.files() == ["letters.txt"]


def test_an_unstable_step_leaves_nothing_half_written(desk, refusal):
    desk.write(
        ("parameters = { forcing = 9.0 }", "dt = 0.5"), ("leads = 11", "leads = 3"),
        ("lead_spacing = 0.1", "lead_spacing = 1.0"), ("start_spacing = 0.4", "start_spacing = 1"),
    )  # fmt: skip
    refusal(desk.run(), 2, "version B, start 0", "not finite at time", "(step ", "dt=0.5")
    hidden = [name for name in desk.files() if "/." in f"/{name}"]
    assert not hidden
    assert not [name for name in desk.files() if name.startswith("B/")]


def test_every_mistake_is_told_at_once(desk, refusal):
    desk.write(
        ("starts = 3", "strats = 3"), ("amplitude = 0.2", "amplitude = -0.2"),
        ('layout = "start"', 'layout = "ring"'),
    )  # fmt: skip
    refusal(
        desk.run(), 2, "forecast.strats: unknown key; did you mean 'starts'?",
        "forecast.starts: missing", "analyses.amplitude: greater than or equal to 0; found -0.2",
        "archive.layout: 'start' or 'member'; found 'ring'",
    )  # fmt: skip


def test_names_are_held_against_the_toys(desk, refusal):
    desk.write(
        ("forcing = 9.0", "forcng = 9.0"),
        ("amplitude = 0.2", 'amplitude = 0.2\nmethod = "correlatd"'),
    )
    refusal(
        desk.run(), 2, "versions.B.parameters.forcng", "did you mean 'forcing'?",
        "analyses: ", "did you mean 'correlated'?",
    )  # fmt: skip
    desk.write(('"lorenz-96"', '"lorens-96"'))
    refusal(desk.run(), 2, "system.name", "did you mean 'lorenz-96'?")
    desk.write(('folder = "archive"', 'folder = "archive"\nfields = ["y"]'))
    refusal(desk.run(), 2, "archive: fields: expected one of x, found 'y'")
    assert desk.files() == []


def test_run_files_keep_the_conventions(desk):
    """Judged by the open CF compliance checker."""
    suite_of = pytest.importorskip("compliance_checker.suite")
    desk.write(
        ('"lorenz-96"', '"two-layer-channel"'), ("amplitude = 0.2", "amplitude = 1e5"),
        ("parameters = { forcing = 9.0 }", "parameters = { shear = 31.0 }"),
        ("lead_spacing = 0.1", "lead_spacing = 0.25"), ("start_spacing = 0.4", "start_spacing = 2"),
        ('"float64"', '"float32"\ngrid = [5, 6]'),
    )  # fmt: skip
    desk.made()
    suite = suite_of.CheckSuite()
    suite.load_all_available_checkers()
    for name in (f"A/{STARTS[0]}.nc", "analyses.nc", "climatology.nc"):
        dataset = suite.load_dataset(str(desk.archive / name))
        for scores, errors in suite.run_all(dataset, ["cf:1.11"]).values():
            assert not errors, name
            faults = [
                (score.name, score.msgs)
                for score in scores
                if score.value not in (True,) and score.value[0] < score.value[1]
            ]
            assert faults == [], name


def test_the_manifest_and_the_settings_say_what_made_them(desk):
    desk.made()
    manifest = json.loads((desk.archive / "rehearsal.json").read_text())
    assert manifest["settings"] == desk.config.read_text()
    settings = tomllib.loads((desk.archive / "B.toml").read_text())
    assert settings["runs"] == {
        "files": "B/*.nc", "members": 5, "minimum_members": 5, "starts": "all",
    }  # fmt: skip
    with xr.open_dataset(desk.archive / "B" / f"{STARTS[0]}.nc") as data:
        assert data.attrs["source"].startswith("B: Lorenz 1996")
        assert "forcing=9" in data.attrs["source"]


@pytest.mark.parametrize("name", ["rehearsal.toml", "rehearsal_60_starts.toml"])
def test_sample_settings_are_sound(name):
    settings = read_rehearsal(ROOT / "configs" / name)
    experiment = settings.experiment()
    assert experiment.perturbations is None  # as large as the analysis error, and alike
    assert not experiment.control
    assert settings.folder.parent == ROOT
    if name == "rehearsal_60_starts.toml":
        assert (experiment.starts, experiment.members, experiment.leads) == (60, 20, 41)


def test_list_names_every_system_with_what_is_known(desk):
    result = desk.run("toy", "list")
    assert result.exit_code == 0
    for kind in toys.SYSTEMS.values():
        assert kind.name in result.stdout
    assert "leading exponent 0.906" in result.stdout
    assert "rho = 28" in result.stdout


def test_exponents_stand_beside_published_ones(desk):
    wolf = ("sigma=16", "rho=45.92", "beta=4")
    options = [item for text in wolf for item in ("--parameters", text)]
    result = desk.run("toy", "exponents", "lorenz-63", *options, "--length", "500")
    assert result.exit_code == 0, result.stderr
    cells = [line.split("│")[1:-1] for line in result.stdout.splitlines() if "exponent 1" in line]
    _, value, low, high, _, published, source = (cell.strip() for cell in cells[0])
    assert float(low) < float(value) < float(high)
    assert float(value) == pytest.approx(1.50, abs=0.1)  # Wolf et al. 1985
    assert (published, source[:4]) == ("1.5", "Wolf")
    # At other parameters the literature is silent.
    other = desk.run("toy", "exponents", "lorenz-63", "--parameters", "rho=29", "--length", "100")
    assert "Sprott" not in other.stdout


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("lorenz-63", "--count", "4"), ("count", "at most the 3 variables", "4")),
        (("lorenz-36",), ("did you mean 'lorenz-",)),
        (("lorenz-63", "--parameters", "roh=1"), ("did you mean 'rho'?",)),
        (("lorenz-63", "--parameters", "rho"), ("--parameters", "NAME=VALUE", "'rho'")),
        (("lorenz-63", "--parameters", "rho=-1"), ("rho", "above 0")),
        (("lorenz-63", "--method", "pair"), ("did you mean 'pairs'?",)),
        (("lorenz-63", "--method", "pairs", "--count", "2"), ("leading exponent only",)),
    ],
)
def test_exponents_refuse(desk, refusal, arguments, words):
    refusal(desk.run("toy", "exponents", *arguments), 2, *words)


def test_a_folder_that_holds_nothing_yet_takes_other_settings(desk):
    # What an unstable step leaves behind must not stand in the way of a better one.
    desk.archive.mkdir()
    manifest = desk.archive / "rehearsal.json"
    manifest.write_text('{"fingerprint": "of another"}', encoding="utf-8")
    desk.made()
    assert "of another" not in manifest.read_text(encoding="utf-8")
    manifest.write_text('{"fingerprint": "of another"}', encoding="utf-8")
    assert desk.run().exit_code == 2


def test_a_tolerance_of_no_variable_is_refused_before_anything_is_made(desk, refusal):
    desk.write(
        ('layout = "start"', 'layout = "start"\n[criteria]\ntolerances = { xx = 1.0 }'),
    )
    refusal(desk.run(), 2, "criteria.tolerances: expected one of x; found 'xx'")
    assert desk.files() == []


def test_floats_are_read_as_positions(desk):
    desk.write(
        ('name = "lorenz-96"', 'name = "double-gyre-floats"'),
        ("spin_up = 5.0\nclimate = 20.0", ""),
        ("amplitude = 0.2", "amplitude = 100.0"),
        ("start_spacing = 0.4", "start_spacing = 0.5"),
        ("lead_spacing = 0.1", "lead_spacing = 0.25"),
        ("parameters = { forcing = 9.0 }", "parameters = { swing = 0.1 }"),
        ('layout = "start"', 'layout = "start"\n[criteria]\ntolerances = { position = 150.0 }'),
    )
    desk.made()
    table = tomllib.loads((desk.archive / "A.toml").read_text(encoding="utf-8"))
    assert table["variables"]["position"]["position"] == ["x_position", "y_position"]
    assert desk.run("estimate", desk.archive / "A.toml").exit_code == 0
    with (desk.archive / "products_A" / "horizons.csv").open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert {row["variable"] for row in rows} == {"position"}
    assert {row["threshold_units"] for row in rows} == {"m"}
