"""Differences of scores between two versions, against what the files themselves give."""

import csv

import numpy as np
import pytest
import xarray as xr
from click.testing import CliRunner

import ensemble_horizon as eh
from ensemble_horizon.cli.main import group
from ensemble_horizon.runs import open_analyses

REHEARSAL = """
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
starts = 12
start_spacing = 1.0
leads = 9
lead_spacing = 0.25
members = 6
seed = 3
[versions.A]
[versions.B]
parameters = { forcing = 12.0 }  # half as much again as the truth
[archive]
folder = "archive"
precision = "float64"
"""


def run(*arguments):
    return CliRunner().invoke(group, [str(item) for item in arguments], catch_exceptions=False)


@pytest.fixture(scope="module")
def archive(tmp_path_factory):
    folder = tmp_path_factory.mktemp("rehearsal")
    (folder / "r.toml").write_text(REHEARSAL, encoding="utf-8")
    assert run("toy", "run", folder / "r.toml").exit_code == 0
    return folder / "archive"


@pytest.fixture(scope="module")
def compared(archive):
    result = run("compare", archive / "A.toml", archive / "B.toml")
    assert result.exit_code == 0, result.stderr
    with (archive / "versions_A_B" / "score_differences.csv").open(encoding="utf-8") as file:
        return result.stdout, list(csv.DictReader(file))


def test_differences_are_those_of_the_files(archive, compared):
    # Ring sites weigh alike. Recomputed by xarray from the files, start by start.
    analyses = open_analyses(str(archive / "analyses.nc")).x.load()
    expected = {}
    for version in "AB":
        ensemble = eh.open_runs(str(archive / version / "*.nc")).x.load()
        truth = analyses.sel(valid=ensemble.valid).transpose("start", "lead", "cell")
        error = ensemble.mean("member") - truth.values
        expected[version, "squared_error"] = (error**2).mean(("start", "cell"))
        # CRPS by its definition (Ferro 2014 for the fair one): every pair of members.
        gap = np.abs(ensemble.values[:, :, :, None] - ensemble.values[:, :, None]).sum((2, 3))
        first = np.abs(ensemble - xr.DataArray(truth.values, dims=truth.dims)).mean("member")
        fair = first - xr.DataArray(gap / (2 * 6 * 5), dims=truth.dims)
        expected[version, "crps"] = fair.mean(("start", "cell"))
    rows = [row for row in compared[1] if row["against"] == "analysis"]
    assert len(rows) == 2 * 9
    for row in rows:
        number = round(float(row["lead"]) / 30.0)  # a quarter of five days
        a, b = (float(expected[version, row["score"]][number]) for version in "AB")
        assert float(row["a"]) == pytest.approx(a, rel=1e-5)
        assert float(row["b"]) == pytest.approx(b, rel=1e-5)
        assert float(row["difference"]) == pytest.approx(b - a, abs=1e-5 * max(a, b))
        assert row["starts"] == "12"


def test_the_version_that_is_wrong_is_found(compared):
    printed, rows = compared
    late = [row for row in rows if row["score"] == "crps" and float(row["lead"]) >= 120.0]
    assert all(float(row["low"]) > 0 for row in late)
    assert all(float(row["p_value"]) < 0.1 for row in late)
    first = next(row for row in rows if row["score"] == "crps" and float(row["lead"]) == 0.0)
    assert (first["reason"], first["low"]) == ("no_scatter", "")  # the same members at first
    assert "CRPS of B less that of A" in printed
    assert "Above zero B errs more" in printed


def test_one_version_without_analyses_is_told(archive):
    bare = archive / "bare.toml"
    text = (archive / "B.toml").read_text(encoding="utf-8")
    bare.write_text(text.replace('[analyses]\nfiles = "analyses.nc"\n', ""), encoding="utf-8")
    result = run("compare", archive / "A.toml", bare, "--folder", archive / "other")
    assert result.exit_code == 0
    assert "scores: the settings of bare name no analyses" in result.stdout
    assert not (archive / "other" / "score_differences.csv").exists()
