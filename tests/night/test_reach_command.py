"""The command ``reach``: after an estimate, before one, and asked for what is not there."""

import re

import numpy as np


def ask(night, *options, variable="t2", tolerance="1.0"):
    return night.run("reach", night.config, "--variable", variable, "--tolerance", tolerance,
                     *options)  # fmt: skip


def test_before_estimate_it_says_to_run_estimate_first(night, refusal):
    night.write()
    night.settings()
    text = refusal(ask(night), 3, "estimate", str(night.products))
    assert "estimate" in text.partition("Next: ")[2]
    assert night.written() == []


def test_what_half_the_initial_error_buys(night):
    night.write()
    night.settings()
    night.estimated()
    result = ask(night, "--smaller", "2")
    assert result.exit_code == 0, result.stderr
    # Logistic law: halving the error buys ln(2 (1 - e / 2L) / (1 - e / L)) / rate hours.
    known = np.log(2 * (1 - 0.1 / 8) / (1 - 0.1 / 4)) / 0.06
    gained = [int(hours) for hours in re.findall(r"\(\+(\d+) h\)", result.stdout)]
    assert gained == [round(known)]
    first = np.log((4 / 0.1 - 1) / (4 / 1.0 - 1)) / 0.06
    assert f"{round(first)} h" in result.stdout
    assert "official" in result.stdout


def test_a_variable_that_is_not_there(night, refusal):
    night.write()
    night.settings()
    night.estimated()
    refusal(ask(night, variable="t3"), 2, "t3", "t2")


def test_a_place_that_is_not_there(night, refusal):
    night.write()
    night.settings(more="[regions.north]\nsouth = 45")
    night.estimated()
    refusal(ask(night, "--place", "nroth"), 2, "nroth", "north")


def test_one_place_of_two(night):
    night.write()
    night.settings(more="[regions.north]\nsouth = 52\n[regions.south]\nnorth = 52")
    night.estimated()
    result = ask(night, "--place", "south")
    assert result.exit_code == 0
    assert "south" in result.stdout
    assert "north" not in result.stdout


def test_amounts_that_mean_nothing(night, refusal):
    night.write()
    night.settings()
    night.estimated()
    refusal(ask(night, tolerance="-1"), 2, "tolerance", "-1")
    refusal(ask(night, tolerance="0"), 2, "tolerance", "0")
    refusal(ask(night, tolerance="nan"), 2, "tolerance", "nan")
    refusal(ask(night, "--smaller", "0"), 2, "smaller", "0")
    refusal(ask(night, "--smaller", "-2"), 2, "smaller", "-2")
    assert ask(night, tolerance="much").exit_code == 2


def test_a_tolerance_above_saturation_has_no_limit(night):
    night.write()
    night.settings()
    night.estimated()
    result = ask(night, tolerance="6.0")
    assert result.exit_code == 0
    assert "no limit" in result.stdout


def test_no_law_was_fitted(night, growing):
    night.write(growing([0.5, 0.6, 0.7]))
    night.settings()
    night.estimated()
    result = ask(night)
    assert result.exit_code == 0, result.stderr
    assert "no law could be fitted" in result.stdout
    assert "no fit" in result.stdout
    assert "nan" not in result.stdout


def test_products_that_are_no_products(night, refusal):
    night.write()
    night.settings()
    night.products.mkdir()
    (night.products / "horizons.nc").write_text("no NetCDF")
    text = refusal(ask(night), 3, "horizons.nc", "estimate")
    assert "http" not in text  # words of a library, not of the user


def test_products_of_other_settings(night, refusal):
    """A variable that came into the settings after the estimate."""
    night.write()
    night.settings()
    night.estimated()
    night.settings('[variables.t9]\nsource = "t2"\ncriteria = [{tolerance = 1.5}]')
    refusal(ask(night, variable="t9"), 3, "t9", "estimate")
