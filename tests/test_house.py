"""The house: imports run one way, rooms stay small, the public names are these."""

import ast
from pathlib import Path

import pytest

import ensemble_horizon as eh

PACKAGE = Path(eh.__file__).parent
ORDER = [
    "__main__",
    "cli",
    "night",
    "settings",
    "products",
    "versions",
    "horizon",
    "growth",
    "skill",
    "spread",
    "serial",
    "runs",
    "toys",
    "checks",
    "vocabulary",
    "errors",
]
MODULES = sorted(PACKAGE.rglob("*.py"))
PUBLIC = [
    "CAUTION",
    "ArgumentError",
    "EnsembleHorizonError",
    "InputError",
    "ProductError",
    "Region",
    "SettingsError",
    "Site",
    "Status",
    "anomaly_correlation",
    "anomaly_products",
    "apply_calibration",
    "area_curve",
    "bias",
    "calibration_factor",
    "calibration_on_grid",
    "climatology_crps",
    "compare_horizons",
    "compare_scores",
    "compare_versions",
    "crps",
    "doubling_table",
    "exceedance",
    "false_discovery",
    "fit_growth",
    "horizon",
    "open_runs",
    "outside_share",
    "persistence",
    "position_spread",
    "rank_counts",
    "rank_flatness",
    "reach",
    "rmse",
    "sampling",
    "score_interval",
    "site_curve",
    "skill_limits",
    "skill_score",
    "spread",
    "spread_and_error",
    "spread_error_ratio",
    "status_names",
    "survey_runs",
    "time_to_limit",
    "toys",
]


def imported(path):
    """Names of modules of the package that a file imports, wherever in the file."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            names = [f"{node.module}.{alias.name}" for alias in node.names]
        else:
            continue
        yield from (name for name in names if name.startswith("ensemble_horizon."))


def room(path):
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_imports_run_downward(path):
    if path == PACKAGE / "__init__.py":
        return
    floor = ORDER.index(room(path))
    for name in imported(path):
        target = name.split(".")[1]
        assert ORDER.index(target) >= floor, f"{path} imports {name}, which lies above it"


def test_toys_import_only_the_three_below():
    for path in (PACKAGE / "toys").rglob("*.py"):
        for name in imported(path):
            assert name.split(".")[1] in ("toys", "checks", "vocabulary", "errors"), (path, name)


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_rooms_stay_small_and_say_what_they_are(path):
    text = path.read_text(encoding="utf-8")
    assert len(text.splitlines()) <= 350
    assert ast.get_docstring(ast.parse(text))


def test_public_names():
    assert sorted(eh.__all__, key=str.lower) == sorted(PUBLIC, key=str.lower)
    for name in PUBLIC:
        assert getattr(eh, name).__doc__ or isinstance(getattr(eh, name), str)


def test_the_package_docstring_tells_the_order_of_the_house():
    told = [name for name in ORDER if f"\n``{name}``" in eh.__doc__]
    assert len(told) >= 10
    assert sorted(told, key=lambda name: eh.__doc__.index(f"\n``{name}``")) == told


def test_plotting_libraries_load_late():
    import subprocess
    import sys

    code = "import sys, ensemble_horizon, ensemble_horizon.night.writing as b; "
    code += "print('matplotlib' in sys.modules)"
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert found.stdout.strip() == "False"


def test_errors_survive_the_way_between_processes():
    import pickle

    error = eh.InputError("m03.nc", expected="NetCDF", found="text", remedy="remove it")
    again = pickle.loads(pickle.dumps(error))
    assert str(again) == str(error)
    assert type(again) is eh.InputError
    assert again.exit_status == 3
