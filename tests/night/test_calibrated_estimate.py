"""Factors from past starts, written by `verify --calibration` and applied by `estimate`."""

import csv

import numpy as np
import pytest
import xarray as xr
from verification_archive import HOURS, Archive

from ensemble_horizon.products.calibration_file import read_calibration_file
from ensemble_horizon.skill.factor import calibrated_noise
from ensemble_horizon.spread.sampling import LeadNoise

REGION = "[regions.North]\nsouth = 0\n[regions.South]\nnorth = 0\n"
APPLIED = REGION + '[calibration]\nfile = "factors.nc"\n'
MAPS = 'maps = "each"\nfigures = false'


@pytest.fixture(scope="module")
def calibrated(tmp_path_factory):
    """Runs whose members lie half as far apart as they should, and the factors they show."""
    archive = Archive(tmp_path_factory.mktemp("narrow"), starts=40, scale=0.5)
    archive.write()
    path = archive.folder / "factors.nc"
    archive.verify(REGION, "--calibration", path, products='maps = "pooled"\nfigures = false')
    return archive


def horizons(archive, more, products='maps = "none"\nfigures = false', runs='starts = "latest"'):
    config = archive.settings(more, products=products, runs=runs)
    result = archive.run("estimate", config)
    with (archive.folder / "out" / "horizons.csv").open(newline="") as file:
        rows = {row["place"]: row for row in csv.DictReader(file)}
    with xr.open_dataset(archive.folder / "out" / "horizons.nc", decode_times=False) as data:
        return rows, data.load(), result


def test_factors_are_those_of_the_errors(calibrated):
    factors = read_calibration_file(calibrated.folder / "factors.nc")["t2"]
    places = factors.places
    assert places.place.values.tolist() == ["North", "South"]
    # Of the mean of 8 members: e^2 / ((1 + 1/8) s^2), the truth as one more of the full size.
    wanted = np.sqrt((1 + 0.5**2 / 8) / (0.5**2 * (1 + 1 / 8)))
    assert places.factor.values == pytest.approx(wanted, rel=0.08)
    assert ((places.low < wanted) & (places.high > wanted)).mean() > 0.7
    assert (places.starts == 40).all()
    assert factors.cells.factor.values == pytest.approx(wanted, rel=0.12)


def test_the_spread_of_tonight_is_multiplied(calibrated):
    plain, before, _ = horizons(calibrated, REGION)
    rows, after, _ = horizons(calibrated, APPLIED)
    factors = read_calibration_file(calibrated.folder / "factors.nc")["t2"].places
    ratio = (after.t2_spread / before.t2_spread).squeeze("start")
    np.testing.assert_allclose(ratio.transpose("lead", "place"), factors.factor, rtol=1e-9)
    for place in ("North", "South"):
        assert float(rows[place]["horizon"]) < float(plain[place]["horizon"] or np.inf)
    # The band is wider by the noise of the factor: on the logarithm, variances add.
    noise = calibrated_noise(LeadNoise(np.full(6, 70.0), np.eye(6)), np.full(6, 0.01), np.eye(6))
    assert noise.dof == pytest.approx(1 / (1 / 70 + 0.005))
    width = [np.log(d.t2_spread_high / d.t2_spread_low).values for d in (before, after)]
    assert (width[1] > width[0]).all()
    assert "factors from spread to error" in after.attrs["provenance_calibration"]
    assert "provenance_calibration" not in before.attrs


def test_calibrated_horizons_are_those_of_the_true_error(calibrated):
    """The RMSE of the mean passes the tolerance where the calibrated spread of all starts does."""
    rows, data, _ = horizons(calibrated, APPLIED, runs='starts = "all"')
    pooled = data.t2_pooled_spread.isel(place=0).values
    from_truth = calibrated.members.mean(axis=1) - calibrated.truth
    weights = np.cos(np.radians([50.0, 20.0]))[:, None] * np.ones(5)
    squared = (from_truth[:, :, :2] ** 2 * weights).sum((-2, -1)) / weights.sum()
    # The error of the mean of M members is sqrt(1 + 1/M) times the spread of a consistent one; the
    # factors are smoothed over leads, which leaves some percent.
    rmse = np.sqrt(squared.mean(axis=0)) / np.sqrt(1 + 1 / 8)
    assert pooled == pytest.approx(rmse, rel=0.05)
    assert rows["North"]["start"] == "all"


def test_maps_are_calibrated_by_cells(calibrated):
    def spread_limit(more):
        horizons(calibrated, more, MAPS)
        path = calibrated.folder / "out" / "horizon_maps.nc"
        with xr.open_dataset(path, decode_times=False) as data:
            return data.t2_horizon.load()

    plain, after = spread_limit(REGION), spread_limit(APPLIED)
    both = np.isfinite(plain) & np.isfinite(after)
    assert np.isfinite(after).sum() >= np.isfinite(plain).sum()
    assert (after.where(both) <= plain.where(both)).sum() == both.sum()
    assert np.isfinite(after).sum() > 10


def test_leads_between_are_interpolated_and_longer_ones_refused(calibrated, refusal):
    _, before, _ = horizons(calibrated, REGION)
    path = calibrated.folder / "factors.nc"
    kept = path.read_bytes()
    short = Archive(calibrated.folder / "short", starts=2)
    short.folder.mkdir(exist_ok=True)
    short.write()
    (short.folder / "factors.nc").write_bytes(kept)
    for file in short.folder.glob("run_*.nc"):
        with xr.open_dataset(file, decode_times=False) as data:
            data = data.load()
        data.assign_coords(time=data.time * 1.2).to_netcdf(file)
    result = short.run("estimate", short.settings(APPLIED, runs='starts = "latest"'), status=2)
    refusal(result, 2, "leads within those of the calibration, 0 to 60", "0 to 72")
    for file in short.folder.glob("run_*.nc"):
        with xr.open_dataset(file, decode_times=False) as data:
            data = data.load()
        data.assign_coords(time=data.time / 1.2 / 2).to_netcdf(file)  # leads 0, 6, ..., 30
    _, plain, _ = horizons(short, REGION)
    _, after, _ = horizons(short, APPLIED)
    ratio = (after.t2_spread / plain.t2_spread).squeeze("start").isel(place=0).values
    factor = read_calibration_file(path)["t2"].places.factor.isel(place=0).values
    wanted = np.exp(np.interp(HOURS / 2, HOURS, np.log(factor)))
    assert ratio == pytest.approx(wanted, rel=1e-9)
    assert before.lead.size == HOURS.size


def test_too_few_starts_are_refused_with_how_many_are_needed(tmp_path, refusal):
    archive = Archive(tmp_path, starts=6)
    archive.write()
    result = archive.verify(REGION, "--calibration", tmp_path / "factors.nc", status=3)
    text = refusal(result, 3, "calibration of t2", "at least 10 starts", "6 starts")
    assert "about 10 are needed" in text
    assert not (tmp_path / "factors.nc").exists()
    assert not (tmp_path / "out").exists()


def test_a_place_without_a_certain_factor_has_no_limit(tmp_path):
    """A site rests on one error a start: 30 leave 13 percent, 7 smoothed, a region less."""
    archive = Archive(tmp_path)
    archive.write()
    more = REGION + "[sites.Quay]\nlatitude = 20\nlongitude = 20\n"
    more += "[verification]\nfactor_uncertainty = 0.05\n"
    result = archive.verify(more, "--calibration", tmp_path / "factors.nc")
    assert "none for Quay, whose 30 starts do not make the factor certain to 0.05" in result.stderr
    applied = more + '[calibration]\nfile = "factors.nc"\n'
    rows, _, result = horizons(archive, applied)
    assert "no factor for Quay" in result.stderr
    assert rows["Quay"]["status"] == "no_data"
    assert rows["North"]["status"] == "reached"


@pytest.mark.parametrize(
    ("more", "words"),
    [
        ('[regions.East]\nwest = 15\n[calibration]\nfile = "factors.nc"\n',
         ["factors of t2 for East", "North, South"]),
        (REGION + '[calibration]\nfile = "analyses.nc"\n', ["a calibration file"]),
        (REGION + '[calibration]\nfile = "none.nc"\n', ["that can be read", "calibration.file"]),
    ],
)  # fmt: skip
def test_files_that_do_not_fit_are_refused(calibrated, refusal, more, words):
    status = 2 if "East" in more else 3
    config = calibrated.settings(more, runs='starts = "latest"')
    refusal(calibrated.run("estimate", config, status=status), status, *words)
