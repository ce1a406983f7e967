"""Ensembles that say little: few leads, no spread, no growth, a limit that is not reached."""

import numpy as np
import pytest

HOURS = 12.0 * np.arange(12)
BOTH = "[variables.t2]\ncriteria = [{tolerance = 1.5}, {saturation_fraction = 0.5}]"


def law(night) -> list[str]:
    data = night.curves()["t2_law"]
    names = str(data.attrs["flag_meanings"]).split()
    values = list(np.atleast_1d(data.attrs["flag_values"]))
    return [names[values.index(int(code))] for code in data.values.ravel()]


@pytest.mark.parametrize("count", [2, 3, 4])
def test_too_few_leads_for_a_fit_still_give_the_spread(night, growing, logistic, count):
    size = logistic(HOURS[:count])
    night.write(growing(size))
    night.settings(BOTH)
    rows = night.estimated()
    np.testing.assert_allclose(night.spread()[0], size, rtol=1e-6)
    assert law(night) == ["none"]
    assert {row["law"] for row in rows} == {"none"}
    assert {row["doubling_time"] for row in rows} == {""}
    tolerance, fraction = rows
    assert (tolerance["status"], tolerance["horizon"]) == ("beyond_run", "")
    assert (fraction["status"], fraction["horizon"]) == ("no_data", "")
    assert fraction["threshold"] == ""
    assert {row["projected"] for row in rows} == {""}


def test_too_few_leads_still_reach_a_tolerance_within_them(night, growing):
    night.write(growing([0.5, 1.0, 2.0, 3.0]))
    night.settings()
    (row,) = night.estimated()
    assert row["status"] == "reached"
    # Halfway between 12 h (1.0) and 24 h (2.0), or at the geometric mean: within that step.
    assert 12 < float(row["horizon"]) < 24
    assert row["law"] == "none"


def test_too_few_leads_are_told_on_stderr_or_in_the_table(night, growing):
    night.write(growing([0.5, 1.0, 2.0, 3.0]))
    night.settings()
    result = night.estimate()
    assert result.exit_code == 0
    assert "none" in result.stdout or "no fit" in result.stdout


def test_a_single_lead(night, growing):
    night.write(growing([0.5]))
    night.settings()
    result = night.estimate()
    assert result.exit_code in (0, 3), result.stderr
    assert "Traceback" not in result.stderr
    if result.exit_code == 0:
        (row,) = night.rows()
        assert (row["status"], row["horizon"], row["law"]) == ("beyond_run", "", "none")


def test_all_members_equal(night, growing):
    one = growing()[:1]
    night.write(np.repeat(one, 6, axis=0))
    night.settings(BOTH)
    result = night.estimate()
    assert result.exit_code in (0, 3), result.stderr
    assert "Traceback" not in result.stderr
    if result.exit_code == 0:
        for row in night.rows():
            assert row["status"] in ("no_growth", "no_data")
            assert row["horizon"] == ""
            assert row["projected"] == ""
        np.testing.assert_array_equal(night.spread(), 0.0)
        assert law(night) == ["none"]
    else:
        assert "equal" in result.stderr or "same" in result.stderr or "identical" in result.stderr


def test_constant_fields(night):
    night.write(np.full((6, 12, 6, 8), 281.25))
    night.settings(BOTH)
    result = night.estimate()
    assert result.exit_code in (0, 3), result.stderr
    assert "Traceback" not in result.stderr
    if result.exit_code == 0:
        assert {row["status"] for row in night.rows()} <= {"no_growth", "no_data"}
        assert {row["horizon"] for row in night.rows()} == {""}


def test_constant_in_time_but_not_over_members_has_no_growth(night, growing):
    night.write(growing(np.full(12, 0.8)))
    night.settings()
    (row,) = night.estimated()
    assert (row["status"], row["horizon"]) == ("no_growth", "")


def test_zero_spread_at_the_first_lead(night, growing, logistic):
    size = logistic(HOURS)
    size[0] = 0.0
    night.write(growing(size))
    night.settings(BOTH)
    rows = night.estimated()
    assert [row["status"] for row in rows] == ["reached", "reached"]
    assert rows[0]["law"] != "none"
    np.testing.assert_allclose(night.spread()[0], size, rtol=1e-6, atol=1e-9)
    # logistic law: t = ln((last / first - 1) / (last / E - 1)) / rate
    known = np.log((4.0 / 0.1 - 1) / (4.0 / 1.5 - 1)) / 0.06
    assert float(rows[0]["horizon"]) == pytest.approx(known, abs=2.0)


def test_a_known_logistic_growth_is_found_again(night, growing, logistic):
    night.write(growing(logistic(HOURS)))
    night.settings(BOTH)
    tolerance, fraction = night.estimated()
    first = np.log((4.0 / 0.1 - 1) / (4.0 / 1.5 - 1)) / 0.06
    assert float(tolerance["horizon"]) == pytest.approx(first, abs=2.0)
    assert float(fraction["horizon"]) == pytest.approx(np.log(39.0) / 0.06, abs=2.0)
    assert float(fraction["threshold"]) == pytest.approx(2.0, rel=0.05)
    assert float(tolerance["doubling_time"]) == pytest.approx(np.log(2) / 0.06, rel=0.05)
    assert (tolerance["threshold"], tolerance["threshold_units"]) == ("1.5", "K")
    assert tolerance["horizon_units"] == "hours"
    assert float(tolerance["low"]) < first < float(tolerance["high"])


def test_decaying_spread_has_no_growth(night, growing):
    night.write(growing(3.0 * np.exp(-HOURS / 40)))
    night.settings("[variables.t2]\ncriteria = [{tolerance = 4.0}, {saturation_fraction = 0.5}]")
    rows = night.estimated()
    assert [row["status"] for row in rows] == ["no_growth", "no_growth"]
    assert {row["horizon"] for row in rows} == {""}
    assert {row["projected"] for row in rows} == {""}


def test_a_decaying_spread_above_its_tolerance_is_exceeded_at_the_start(night, growing):
    night.write(growing(3.0 * np.exp(-HOURS / 40)))
    night.settings()
    (row,) = night.estimated()
    assert (row["status"], row["horizon"]) == ("at_start", "")


def test_a_limit_that_is_not_reached_is_censored(night, growing, logistic):
    night.write(growing(logistic(HOURS[:6])))
    night.settings("[variables.t2]\ncriteria = [{tolerance = 3.0}]")
    (row,) = night.estimated()
    assert (row["status"], row["horizon"]) == ("beyond_run", "")
    data = night.curves()
    assert np.isnan(data["t2_horizon"].values).all()
    if row["projected"]:
        assert float(row["projected"]) > 60.0


def test_a_hold_longer_than_the_run(night, refusal):
    night.write()
    night.settings("[variables.t2]\nhold = 400\ncriteria = [{tolerance = 1.5}]")
    result = night.estimate()
    if result.exit_code == 0:
        (row,) = night.rows()
        assert (row["status"], row["horizon"]) == ("beyond_run", "")
        assert "hold" in result.stderr
    else:
        refusal(result, 2, "hold", "400", "132")
        assert night.written() == []


def test_a_limit_below_the_spread_of_the_first_lead(night):
    night.write()
    night.settings("[variables.t2]\ncriteria = [{tolerance = 0.05}]")
    (row,) = night.estimated()
    assert (row["status"], row["horizon"]) == ("at_start", "")


def test_the_readme_of_the_products_says_where_the_horizon_is_empty(night):
    # A horizon is a number only where its status is "reached" (Status in the vocabulary).
    night.write()
    night.settings("[variables.t2]\ncriteria = [{tolerance = 0.05}]")
    (row,) = night.estimated()
    lines = (night.products / "README.txt").read_text(encoding="utf-8").splitlines()
    (told,) = [line.strip() for line in lines if line.strip().startswith("horizon:")]
    promised = "at_start" in told.partition("unless")[2]
    assert (row["horizon"] != "") == promised, told
