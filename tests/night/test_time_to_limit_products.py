"""Time to the limit over the starts of an estimate: the table, from limits that are known."""

import csv

import numpy as np
import pytest
from click.testing import CliRunner
from test_compare_command import LIMITS, VARIABLE, Pair, write_version

from ensemble_horizon.cli.main import group


def estimated(folder, limits):
    pair = Pair(folder)
    write_version(folder / "old", limits)
    config = pair.settings("old", VARIABLE, products='maps = "none"\nfigures = false')
    result = CliRunner().invoke(group, ["estimate", str(config)], catch_exceptions=False)
    assert result.exit_code == 0, result.stderr
    return folder / "out_old"


def rows_of(products):
    with (products / "time_to_limit.csv").open(newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


def test_quartiles_and_mean_of_limits_that_are_known(tmp_path):
    """Limits 36, 48, 60, 72 h, three starts each: a quarter is met at 36, half at 48."""
    products = estimated(tmp_path, LIMITS)
    for row in rows_of(products):
        found = [float(row[name]) for name in ("quarter", "half", "three_quarters", "mean")]
        assert found == pytest.approx([36, 48, 60, LIMITS.mean()], abs=1e-4)
        assert (row["starts"], row["reached"], row["censored"]) == ("12", "12", "0")
        assert float(row["mean_low"]) < LIMITS.mean() < float(row["mean_high"])
    text = (products / "README.txt").read_text(encoding="utf-8")
    assert "time_to_limit.csv: when how many" in text and "  three_quarters: " in text


def test_limits_beyond_the_run_are_counted_as_such(tmp_path):
    row = rows_of(estimated(tmp_path, np.where(LIMITS < 60, LIMITS, 200.0)))[0]
    assert (row["reached"], row["censored"]) == ("6", "6")
    assert [float(row[name]) for name in ("quarter", "half")] == pytest.approx([36, 48], abs=1e-4)
    assert (row["three_quarters"], row["three_quarters_status"]) == ("", "beyond_run")
    # Six of twelve count as 132 hours, the end of the run.
    assert float(row["mean"]) == pytest.approx((3 * 36 + 3 * 48 + 6 * 132) / 12, abs=1e-4)


def test_one_start_has_no_distribution(tmp_path):
    products = estimated(tmp_path, LIMITS[:1])
    assert not (products / "time_to_limit.csv").exists()
