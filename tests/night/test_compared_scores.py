"""Differences of scores between two versions, against what the files themselves give."""

import csv
from itertools import combinations

import numpy as np
import pytest
import xarray as xr
from click.testing import CliRunner
from scipy import stats

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


def test_the_netcdf_product_has_what_the_table_has(archive, compared):
    rows = {(row["score"], float(row["lead"])): row for row in compared[1]}
    with xr.open_dataset(archive / "versions_A_B" / "versions.nc") as data:
        assert data["x_scored_place_name"].values.tolist() == ["domain"]
        assert data["x_scored_place_against"].values.tolist() == ["analysis"]
        for (score, lead), row in rows.items():
            here = data.sel(lead=lead).isel(x_scored_place=0)
            for column, ending in (
                ("difference", "difference"), ("low", "difference_low"),
                ("high", "difference_high"), ("p_value", "p_value"), ("a", "a"), ("b", "b"),
                ("adjusted_p_value", "adjusted_p_value"), ("starts", "starts"),
            ):  # fmt: skip
                held = float(here[f"x_{score}_{ending}"])
                told = float(row[column]) if row[column] else np.nan
                assert held == pytest.approx(told, rel=1e-5, abs=1e-9, nan_ok=True), (score, column)
            assert int(here[f"x_{score}_survives"]) == (row["survives"] == "yes")
        difference = data["x_crps_difference"]
        assert difference.dims == ("x_scored_place", "lead")
        assert data["lead"].attrs["units"] == "hours"
        assert "x_crps_difference_low" in difference.attrs["ancillary_variables"]
        assert "B less A" in difference.attrs["long_name"]
        assert (
            data["x_squared_error_reason"].attrs["flag_meanings"] == "given few_starts no_scatter"
        )


@pytest.mark.slow
def test_the_netcdf_product_with_scores_complies_with_cf(archive, compared):
    from test_compliant_products import complaints

    assert complaints(archive / "versions_A_B" / "versions.nc") == ""


def test_rows_are_judged_together(compared):
    # Benjamini and Hochberg 1995, by scipy, over all rows that have a p-value.
    told = [row for row in compared[1] if row["p_value"]]
    expected = stats.false_discovery_control([float(row["p_value"]) for row in told])
    found = [float(row["adjusted_p_value"]) for row in told]
    np.testing.assert_allclose(found, expected, rtol=1e-4, atol=1e-12)
    assert all(
        (row["survives"] == "yes") == (p <= 0.1) for row, p in zip(told, expected, strict=True)
    )
    assert all(row["survives"] == "" for row in compared[1] if not row["p_value"])


def test_each_variable_has_its_figure(archive, compared):
    assert (archive / "versions_A_B" / "figures" / "x_score_differences.png").is_file()


def compare_with(archive, name, text):
    """What is printed where B has other settings, in one line, and the rows of the scores."""
    (archive / f"{name}.toml").write_text(text, encoding="utf-8")
    folder = archive / f"against_{name}"
    result = run("compare", archive / "A.toml", archive / f"{name}.toml", "--folder", folder)
    assert result.exit_code == 0, result.stderr
    with (folder / "score_differences.csv").open(encoding="utf-8") as file:
        return " ".join(result.stdout.split()), list(csv.DictReader(file))


def without_members(archive, count, folder):
    """B without its last members."""
    (archive / folder).mkdir()
    for path in sorted((archive / "B").glob("*.nc")):
        with xr.open_dataset(path, decode_times=False) as data:
            member = next(
                dim for dim in data.x.dims if data[dim].attrs.get("standard_name") == "realization"
            )
            data.isel({member: slice(0, count)}).to_netcdf(archive / folder / path.name)
    text = (archive / "B.toml").read_text(encoding="utf-8").replace('"B/*.nc"', f'"{folder}/*.nc"')
    return text.replace("members = 6", f"members = {count}")


@pytest.mark.slow
def test_squared_errors_are_those_of_as_many_members(archive):
    text = without_members(archive, 3, "C").replace("minimum_members = 5", "minimum_members = 2")
    printed, rows = compare_with(archive, "three", text)
    assert "scores: squared errors of both are those of the mean of 3 members" in printed
    assert "A has 6 members and three 3" in printed
    analyses = open_analyses(str(archive / "analyses.nc")).x.load()
    ensemble = eh.open_runs(str(archive / "A" / "*.nc")).x.load()
    truth = analyses.sel(valid=ensemble.valid).transpose("start", "lead", "cell")
    # For members alike, the squared error of the mean of 3 of 6, averaged over all 20 choices.
    expected = np.mean(
        [
            ((ensemble.isel(member=list(three)).mean("member") - truth.values) ** 2).values
            for three in combinations(range(6), 3)
        ],
        axis=(0, 1, 3),
    )
    found = [float(row["a"]) for row in rows if row["score"] == "squared_error"]
    np.testing.assert_allclose(found, expected, rtol=1e-5)


@pytest.mark.slow
def test_gaps_of_the_analyses_are_listed(archive):
    with xr.open_dataset(archive / "analyses.nc", decode_times=False) as data:
        time = next(dim for dim in data.x.dims if "since" in data[dim].attrs.get("units", ""))
        data.isel({time: slice(0, -2)}).to_netcdf(archive / "fewer.nc")
    text = (archive / "B.toml").read_text(encoding="utf-8")
    printed, rows = compare_with(archive, "gap", text.replace("analyses.nc", "fewer.nc"))
    assert "scores of gap: x: no analysis at 2 of" in printed
    assert "scores of A: x: no analysis" not in printed
    last = [row for row in rows if float(row["lead"]) == 240.0]
    assert {row["starts"] for row in last} == {"11"}


@pytest.mark.slow
def test_calibrated_versions_have_the_noise_of_their_factors(archive):
    plain = {}
    for version in "AB":
        text = (archive / f"{version}.toml").read_text(encoding="utf-8")
        text += "\n[verification]\nfactor_uncertainty = 0.9\n"
        (archive / "loose.toml").write_text(text, encoding="utf-8")
        factors = archive / f"factors_{version}.nc"
        result = run("verify", archive / "loose.toml", "--calibration", factors)
        assert result.exit_code == 0, result.stderr
        plain[version] = text.replace("products_", "calibrated_")
        text = f'{plain[version]}[calibration]\nfile = "factors_{version}.nc"\n'
        (archive / f"calibrated_{version}.toml").write_text(text, encoding="utf-8")
    folder = archive / "both_calibrated"
    names = [archive / f"calibrated_{version}.toml" for version in "AB"]
    result = run("compare", *names, "--folder", folder)
    assert result.exit_code == 0, result.stderr
    assert "uncertainty of the factors is in the intervals" in " ".join(result.stdout.split())
    with xr.open_dataset(folder / "versions.nc") as data:
        error = data["x_shared_error"].isel(place=0).values
        reach = (data["x_gained_high"] - data["x_gained_low"]).isel(place=0).values / 2
    assert (error > 0).all()
    assert (reach > error * stats.norm.ppf(0.95)).all()


def test_one_version_without_analyses_is_told(archive):
    bare = archive / "bare.toml"
    text = (archive / "B.toml").read_text(encoding="utf-8")
    bare.write_text(text.replace('[analyses]\nfiles = "analyses.nc"\n', ""), encoding="utf-8")
    result = run("compare", archive / "A.toml", bare, "--folder", archive / "other")
    assert result.exit_code == 0
    assert "scores: the settings of bare name no analyses" in result.stdout
    assert not (archive / "other" / "score_differences.csv").exists()
