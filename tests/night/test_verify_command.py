"""`verify` from files to scores, held against plain numpy and scipy on the same numbers."""

import csv

import numpy as np
import pytest
import xarray as xr
from scipy import stats
from verification_archive import DEVIATION, HOURS, LATITUDES, MEAN, Archive

REGION = "[regions.North]\nsouth = 0\n[sites.Quay]\nlatitude = 20\nlongitude = 20\n"
NORTH = LATITUDES > 0
WEIGHTS = np.cos(np.radians(LATITUDES[NORTH]))[:, None] * np.ones(5)


@pytest.fixture
def archive(tmp_path):
    return Archive(tmp_path)


def rows(archive):
    with (archive.folder / "out" / "scores.csv").open(newline="") as file:
        return list(csv.DictReader(file))


def scores(archive, place, column="value", against="analysis"):
    """Scores (lead,) of a place by name; NaN where the cell is empty."""
    found = {}
    for row in rows(archive):
        if (row["place"], row["against"]) == (place, against):
            found.setdefault(row["score"], []).append(float(row[column] or "nan"))
    return {name: np.array(values) for name, values in found.items()}


def area_mean(field):
    """Mean over the region of fields (..., latitude, longitude)."""
    return (field[..., NORTH, :] * WEIGHTS).sum((-2, -1)) / WEIGHTS.sum()


def plain_crps(members, truth):
    """Fair CRPS by its definition: every pair of members."""
    number = members.shape[1]
    away = np.abs(members - truth[:, None]).mean(axis=1)
    pairs = np.abs(members[:, :, None] - members[:, None]).sum(axis=(1, 2))
    return away - pairs / (2 * number * (number - 1))


def normal_crps(truth):
    """CRPS of the climatological normal distribution (Gneiting et al. 2005, from memory)."""
    z = (truth - MEAN) / DEVIATION
    normal = stats.norm
    return DEVIATION * (z * (2 * normal.cdf(z) - 1) + 2 * normal.pdf(z) - 1 / np.sqrt(np.pi))


def wanted_scores(members, truth, average):
    number = members.shape[1]
    mean, control = members.mean(axis=1), members[:, 0]
    still = np.broadcast_to(truth[:, :1], truth.shape)

    def over_all(field):
        return average(field).mean(axis=0)

    def correlation(forecast):
        f, a = forecast - MEAN, truth - MEAN
        return over_all(f * a) / np.sqrt(over_all(f**2) * over_all(a**2))

    low, high = members.min(axis=1), members.max(axis=1)
    variance = members.var(axis=1, ddof=1)
    squared = (mean - truth) ** 2
    crps = over_all(plain_crps(members, truth))
    with np.errstate(divide="ignore"):
        skill_persistence = 1 - crps / over_all(np.abs(still - truth))
    skill_persistence[0] = np.nan
    return {
        "bias": over_all(mean - truth),
        "rmse": np.sqrt(over_all(squared)),
        "spread": np.sqrt(over_all(variance)),
        "spread_error_ratio": np.sqrt(
            (number + 1) / number * over_all(variance) / over_all(squared)
        ),
        "crps": crps,
        "skill_climatology": 1 - crps / over_all(normal_crps(truth)),
        "skill_persistence": skill_persistence,
        "anomaly_correlation": correlation(mean),
        "outside": over_all((truth < low) | (truth > high)),
        "outside_expected": np.full(HOURS.size, 2 / (number + 1)),
        "control_bias": over_all(control - truth),
        "control_rmse": np.sqrt(over_all((control - truth) ** 2)),
        "control_error": over_all(np.abs(control - truth)),
        "control_anomaly_correlation": correlation(control),
        "climatology_rmse": np.sqrt(over_all((truth - MEAN) ** 2)),
        "persistence_rmse": np.sqrt(over_all((still - truth) ** 2)),
    }


def test_scores_are_those_of_their_definitions(archive):
    archive.write()
    archive.verify(REGION)
    for place, average in (("North", area_mean), ("Quay", lambda field: field[..., 1, 2])):
        wanted = wanted_scores(archive.members, archive.truth, average)
        found = scores(archive, place)
        assert list(found) == list(wanted)
        for name, values in wanted.items():
            np.testing.assert_allclose(
                found[name], values, rtol=2e-5, atol=2e-6, err_msg=f"{name} {place}"
            )
    assert set(scores(archive, "North", "starts")["rmse"]) == {30}


def test_ranks_are_counted(archive):
    archive.write()
    archive.verify(REGION)
    rank = (archive.members < archive.truth[:, None]).sum(axis=1)
    with xr.open_dataset(archive.folder / "out" / "scores.nc") as data:
        share = data.t2_rank_share.sel(t2_place=1)  # the site
        for lead in range(HOURS.size):
            wanted = np.bincount(rank[:, lead, 1, 2], minlength=9) / 30
            assert share.isel(lead=lead).values == pytest.approx(wanted, abs=1e-9)
        assert share.sum("t2_rank").values == pytest.approx(1.0)
        assert ((data.t2_rank_p_value > 0) & (data.t2_rank_p_value <= 1)).all()


def test_a_consistent_ensemble_is_found_so_and_a_narrow_one_not(archive, tmp_path):
    archive.write()
    archive.verify(REGION)
    low, high = (scores(archive, "North", end)["spread_error_ratio"] for end in ("low", "high"))
    # Nine in ten intervals hold the truth, and leads are drawn apart: four of six at least, but
    # for one case in sixty (binomial).
    assert ((low < 1) & (high > 1)).sum() >= 4
    with xr.open_dataset(archive.folder / "out" / "scores.nc") as data:
        assert (data.t2_rank_p_value.sel(t2_place=0) > 0.05).sum() >= 4
    (tmp_path / "narrow").mkdir()
    narrow = Archive(tmp_path / "narrow", scale=0.6)
    narrow.write()
    narrow.verify(REGION)
    # The mean of 8 members errs by 1 + 0.6^2 / 8; of 300 errors the RMSE scatters by 1/sqrt(600).
    ratio = 0.6 * np.sqrt((1 + 1 / 8) / (1 + 0.6**2 / 8))
    found = scores(narrow, "North")["spread_error_ratio"]
    assert found == pytest.approx(ratio, abs=3 * ratio / np.sqrt(600))
    assert (scores(narrow, "North", "high")["spread_error_ratio"] < 0.75).all()
    with xr.open_dataset(narrow.folder / "out" / "scores.nc") as data:
        assert (data.t2_rank_p_value.sel(t2_place=0) < 0.01).all()
    assert (scores(narrow, "North")["outside"] > 1.3 * 2 / 9).all()


def test_skill_ends_where_the_curves_cross(archive):
    archive.write()
    more = REGION + "[verification]\nskill = 0.5\ncorrelation = 0.8\n"
    result = archive.verify(more)
    found = scores(archive, "North")
    with (archive.folder / "out" / "skill_limits.csv").open(newline="") as file:
        limits = {row["score"]: row for row in csv.DictReader(file) if row["place"] == "North"}
    for name, level in (("skill_climatology", 0.5), ("anomaly_correlation", 0.8)):
        curve = found[name]
        after = int(np.argmax(curve <= level))
        share = (curve[after - 1] - level) / (curve[after - 1] - curve[after])
        horizon = HOURS[after - 1] + share * 12
        assert limits[name]["status"] == "reached"
        assert float(limits[name]["horizon"]) == pytest.approx(horizon, rel=1e-4)
        assert float(limits[name]["low"]) < horizon < float(limits[name]["high"])
        assert float(limits[name]["significant_until"]) == float(limits[name]["low"])
        assert float(limits[name]["level"]) == level
    assert "anomaly correlation > 0.8" in result.stdout


def test_maps_are_those_of_their_definitions(archive):
    archive.write()
    archive.verify(REGION, products='maps = "pooled"\nfigures = true')
    drawn = sorted(path.name for path in (archive.folder / "out" / "figures").iterdir())
    with xr.open_dataset(archive.folder / "out" / "score_maps.nc") as data:
        data.load()
    for row, column in ((0, 0), (2, 4)):
        wanted = wanted_scores(
            archive.members, archive.truth, lambda field, r=row, c=column: field[..., r, c]
        )
        for name in ("bias", "rmse", "spread_error_ratio", "crps", "skill_climatology",
                     "anomaly_correlation"):  # fmt: skip
            found = data[f"t2_{name}"].isel(latitude=row, longitude=column)
            np.testing.assert_allclose(found, wanted[name], rtol=1e-4, atol=1e-5, err_msg=name)
    # A point's limit is that of a site there.
    archive.verify("[sites.Corner]\nlatitude = 50\nlongitude = 0\n")
    with (archive.folder / "out" / "skill_limits.csv").open(newline="") as file:
        limits = {row["score"]: row for row in csv.DictReader(file)}
    one = data.isel(latitude=0, longitude=0, t2_limit=0)
    assert str(one.t2_limit_name.values) == "skill_climatology"
    site = limits["skill_climatology"]
    meanings = data.t2_status.attrs["flag_meanings"].split()
    assert meanings[int(one.t2_status)] == site["status"]
    for name, column in (("t2_horizon", "horizon"), ("t2_horizon_low", "low"),
                         ("t2_significant_until", "significant_until")):  # fmt: skip
        assert float(one[name]) == pytest.approx(
            float(site[column] or "nan"), rel=1e-4, nan_ok=True
        )
    # Figures of the first run have no successor in the second.
    assert drawn == ["t2_limit_anomaly_correlation.png", "t2_limit_skill_climatology.png",
                     "t2_ranks.png", "t2_scores.png"]  # fmt: skip
    assert not (archive.folder / "out" / "figures").exists()


def test_missing_analyses_are_listed_and_skipped(archive):
    gone = {(3, 2), (3, 3), (7, 0)}
    archive.write(skip=gone)
    result = archive.verify(REGION)
    assert "no analysis at 3 of 180" in result.stderr
    assert "2031-02-01T00:00" in result.stderr  # start 3, lead 24 h
    truth = archive.truth.copy()
    for place in gone:
        truth[place] = np.nan
    error = archive.members.mean(axis=1) - truth
    wanted = np.sqrt(np.nanmean(area_mean(error**2), axis=0))
    assert scores(archive, "North")["rmse"] == pytest.approx(wanted, rel=1e-5)
    assert scores(archive, "North", "starts")["rmse"].tolist() == [29, 30, 29, 29, 30, 30]
    # Start 7 has no persistence without the analysis of its own time.
    assert scores(archive, "North", "starts")["persistence_rmse"].tolist() == [
        29,
        29,
        28,
        28,
        29,
        29,
    ]
    text = (archive.folder / "out" / "README_scores.txt").read_text()
    assert "Not verified" in text
    assert "2031-02-01T00:00" in text
    with xr.open_dataset(archive.folder / "out" / "scores.nc") as data:
        assert "3 of 180" in data.attrs["provenance_not_verified"]


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"shift": 0.05}, ["180 of them miss one by 3 to 3 min", "none is shifted"]),
        ({"shift": 24 * 3650.0}, ["none; they run from 2040-12-29T00:00", "name those of"]),
        ({"analysis_units": "m"}, ["units that convert to 'K'", "'m'"]),
        ({"analysis_units": ""}, ["units 'K'", "no units in the file"]),
    ],
)  # fmt: skip
def test_analyses_that_do_not_fit_are_refused(archive, refusal, changes, words):
    archive.write(**changes)
    refusal(archive.verify(REGION, status=3), 3, "analyses", *words)
    assert not (archive.folder / "out").exists()


def test_analyses_in_other_units_are_converted(archive):
    archive.write(analysis_units="degC")
    archive.verify(REGION)
    wanted = wanted_scores(archive.members, archive.truth, area_mean)
    assert scores(archive, "North")["bias"] == pytest.approx(wanted["bias"], abs=1e-5)


def test_results_come_in_the_units_asked_for(archive):
    archive.write()
    archive.verify(REGION, variable='units = "degF"\ncriteria = [{tolerance = 1.5}]')
    wanted = wanted_scores(archive.members, archive.truth, area_mean)
    for name in ("bias", "rmse", "spread", "crps", "climatology_rmse"):
        assert scores(archive, "North")[name] == pytest.approx(
            1.8 * wanted[name], rel=1e-4, abs=1e-5
        )
    found = scores(archive, "North")["skill_climatology"]
    assert found == pytest.approx(wanted["skill_climatology"], rel=1e-4)


def test_analyses_on_another_grid_are_refused(archive, refusal):
    archive.write()
    with xr.open_dataset(archive.folder / "analyses.nc") as data:
        other = data.isel(latitude=slice(1, None)).load()
    other.to_netcdf(archive.folder / "analyses.nc")
    result = archive.verify(REGION, status=3)
    refusal(result, 3, "the grid of the runs (4 x 5 points", "3 x 5 points", "interpolate")


def test_a_climatology_without_spread(archive, refusal):
    archive.write()
    path = archive.folder / "climatology.nc"
    with xr.open_dataset(path) as data:
        climate = data.load()
    climate.deviation[0, 0] = 0.0
    climate.to_netcdf(path)
    result = archive.verify(REGION)
    assert "no spread at 5.0 % of the points" in result.stderr
    climate.deviation[:] = 0.0
    climate.to_netcdf(path)
    refusal(archive.verify(REGION, status=3), 3, "climatology of t2", "above zero", "long record")


def test_without_climatology_there_is_persistence(archive):
    archive.write()
    archive.verify(REGION, climatology=False, products='maps = "pooled"\nfigures = false')
    found = scores(archive, "North")
    assert "skill_climatology" not in found
    assert "anomaly_correlation" not in found
    wanted = wanted_scores(archive.members, archive.truth, area_mean)
    assert found["skill_persistence"] == pytest.approx(
        wanted["skill_persistence"], rel=1e-4, nan_ok=True
    )
    with xr.open_dataset(archive.folder / "out" / "score_maps.nc") as data:
        assert data.t2_limit_name.values.tolist() == ["skill_persistence"]


def test_one_start_gives_scores_without_intervals(tmp_path):
    archive = Archive(tmp_path, starts=1)
    archive.write()
    result = archive.verify(REGION, products='maps = "pooled"\nfigures = true')
    assert "1 start: scores are given without intervals" in result.stderr
    wanted = wanted_scores(archive.members, archive.truth, area_mean)
    assert scores(archive, "North")["rmse"] == pytest.approx(wanted["rmse"], rel=1e-5)
    assert np.isnan(scores(archive, "North", "low")["rmse"]).all()
    assert "too few starts" in result.stdout


def test_a_start_that_is_there_twice_counts_once(archive):
    archive.write()
    archive.write_start(4, path=archive.folder / "run_again.nc")
    result = archive.verify(REGION)
    assert "is there twice" in result.stderr
    wanted = wanted_scores(archive.members, archive.truth, area_mean)
    assert scores(archive, "North")["rmse"] == pytest.approx(wanted["rmse"], rel=1e-5)
    assert set(scores(archive, "North", "starts")["rmse"]) == {30}


def test_constant_analyses_have_no_correlation(archive):
    archive.truth[:] = MEAN
    archive.write()
    archive.verify(REGION, products='maps = "pooled"\nfigures = true')
    found = scores(archive, "North")
    assert "anomaly_correlation" not in found  # nowhere defined
    assert "skill_persistence" not in found
    rmse = np.sqrt(area_mean((archive.members.mean(axis=1) - MEAN) ** 2).mean(axis=0))
    assert found["rmse"] == pytest.approx(rmse, rel=1e-5)
    with (archive.folder / "out" / "skill_limits.csv").open(newline="") as file:
        limits = [row for row in csv.DictReader(file) if row["score"] == "anomaly_correlation"]
    assert {row["status"] for row in limits} == {"no_data"}


def test_speeds_are_made_of_components(archive):
    archive.write()
    for path in [*archive.folder.glob("run_*.nc"), archive.folder / "analyses.nc"]:
        with xr.open_dataset(path, decode_times=False) as data:
            both = data.load()
        both = both.rename(t2="u").assign(v=0.75 * both.t2)
        both.v.attrs["units"] = "K"
        both.to_netcdf(path)
    variable = 'speed = ["u", "v"]\ncriteria = [{tolerance = 1.5}]'
    archive.verify(REGION, variable=variable, climatology=False)
    wanted = wanted_scores(archive.members, archive.truth, area_mean)
    assert scores(archive, "North")["rmse"] == pytest.approx(1.25 * wanted["rmse"], rel=1e-5)


def test_members_outside_the_plausible_range_are_left_out(archive):
    archive.members[2, 3, 1, 0, 0] = 1e6
    archive.write()
    variable = "plausible = [200, 350]\ncriteria = [{tolerance = 1.5}]"
    result = archive.verify(REGION, variable=variable)
    assert "member 3, t2 at 2031-01-21T00:00: values from" in result.stderr
    assert (scores(archive, "North")["rmse"] < 5).all()


def test_as_many_workers_as_one(archive):
    archive.write()
    archive.verify(REGION)
    alone = rows(archive)
    archive.verify(REGION, workers=2, products='maps = "pooled"\nfigures = false')
    assert rows(archive) == alone


def test_nothing_is_left_behind(archive, monkeypatch):
    archive.write()
    scratch = archive.folder / "scratch"
    scratch.mkdir()
    monkeypatch.setattr("tempfile.tempdir", str(scratch))
    archive.verify(REGION, products='maps = "pooled"\nfigures = false')
    assert list(scratch.iterdir()) == []
    (archive.folder / "run_007.nc").write_bytes((archive.folder / "run_007.nc").read_bytes()[:9000])
    archive.run("verify", archive.settings(REGION, products='maps = "pooled"\nfigures = false',
                                           runs='incomplete = "stop"'), status=3)  # fmt: skip
    assert list(scratch.iterdir()) == []


def test_resamples_give_a_second_opinion_beside_the_intervals(archive):
    archive.write()
    archive.verify(REGION)
    assert "block_low" not in rows(archive)[0]
    plain = scores(archive, "North", "low")
    archive.verify(
        REGION + "[verification]\nresamples = 200\n",
        variable='units = "degF"\ncriteria = [{tolerance = 1.5}]',
    )
    value, low, high, by_noise, length = (
        scores(archive, "North", column)
        for column in ("value", "block_low", "block_high", "low", "block_length")
    )
    for name in ("rmse", "crps", "spread_error_ratio", "skill_climatology"):
        assert ((low[name] < value[name]) & (value[name] < high[name])).all()
        size = 1.8 if name in ("rmse", "crps") else 1.0
        assert by_noise[name] == pytest.approx(size * plain[name], rel=1e-4)
        # Two ways to the same end: of 30 starts their widths agree within a half.
        assert high[name] - low[name] == pytest.approx(2 * (value[name] - by_noise[name]), rel=0.5)
        assert (length[name] >= 1).all()
    with xr.open_dataset(archive.folder / "out" / "scores.nc") as data:
        assert data.t2_rmse_block_low.values[0] == pytest.approx(low["rmse"], rel=1e-5)
        assert data.t2_rmse_block_low.attrs["units"] == "degF"
        assert data.t2_rmse_block_length.attrs["units"] == "1"
    text = (archive.folder / "out" / "README_scores.txt").read_text()
    assert "second opinion" in text


@pytest.mark.slow
def test_products_of_estimate_and_verify_share_a_folder(archive):
    archive.write()
    config = archive.settings(REGION, products='maps = "none"\nfigures = true')
    archive.run("estimate", config)
    archive.run("verify", config)
    archive.run("estimate", config)
    names = {path.name for path in (archive.folder / "out").iterdir()}
    assert {"horizons.csv", "scores.csv", "README.txt", "README_scores.txt"} <= names
    figures = {path.name for path in (archive.folder / "out" / "figures").iterdir()}
    assert {"t2_scores.png", "t2_ranks.png", "t2_curves_all.png"} <= figures


def test_what_is_verified_must_be_named(archive, refusal):
    archive.write()
    refusal(
        archive.verify(REGION, status=2, analyses=False), 2, "[analyses]", "[observations.NAME]"
    )
    wrong = "[observations.wind]\nfile = 'a.csv'\n[analyses.names]\nt3 = 'x'\n"
    result = archive.verify(wrong, status=2)
    refusal(result, 2, "observations.wind: no variable", "analyses.names.t3: no variable")


@pytest.mark.slow
def test_products_keep_the_conventions(archive):
    """Judged by the open CF compliance checker."""
    suite_of = pytest.importorskip("compliance_checker.suite")
    archive.write()
    archive.verify(REGION, products='maps = "pooled"\nfigures = false')
    suite = suite_of.CheckSuite()
    suite.load_all_available_checkers()
    for name in ("scores.nc", "score_maps.nc"):
        dataset = suite.load_dataset(str(archive.folder / "out" / name))
        for found, errors in suite.run_all(dataset, ["cf:1.11"]).values():
            assert not errors, name
            faults = [
                (score.name, score.msgs)
                for score in found
                if score.value not in (True,) and score.value[0] < score.value[1]
            ]
            assert faults == [], name
