"""Factors from past starts, written by `verify --calibration` and applied by `estimate`."""

import csv

import netCDF4
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


def settled(calibrated, more, status=0):
    config = calibrated.settings(more, runs='starts = "latest"')
    return calibrated.run("estimate", config, status=status)


@pytest.mark.parametrize(
    ("place", "words"),
    [
        ("[regions.North]\nsouth = 0\nnorth = 60\n",
         ["North in 0 to 60 N, -180 to 180 E", "North in 0 to 90 N, -180 to 180 E"]),
        ("[regions.North]\nsouth = 0\nwest = 5\n",
         ["in 0 to 90 N, 5 to 180 E", "in 0 to 90 N, -180 to 180 E"]),
    ],
)  # fmt: skip
def test_a_region_of_the_same_name_elsewhere_is_refused(calibrated, refusal, place, words):
    more = place + '[calibration]\nfile = "factors.nc"\n'
    refusal(settled(calibrated, more, 2), 2, "calibration.file", *words, "verify --calibration")


def test_a_site_of_the_same_name_elsewhere_is_refused(tmp_path, refusal):
    archive = Archive(tmp_path, starts=20)
    archive.write()
    site = "[sites.Quay]\nlatitude = 20\nlongitude = {}\n[verification]\nfactor_uncertainty = 0.5\n"
    archive.verify(site.format(20), "--calibration", tmp_path / "factors.nc")
    applied = site + '[calibration]\nfile = "factors.nc"\n'
    settled(archive, applied.format(20))
    settled(archive, applied.format(380 - 360))
    settled(archive, applied.format(-340))  # the same meridian
    result = settled(archive, applied.format(10), 2)
    refusal(result, 2, "for Quay at 20 N, 10 E", "Quay at 20 N, 20 E")


def test_the_domain_of_another_grid_is_refused(tmp_path, refusal, monkeypatch):
    """The whole domain is called so on every grid."""
    archive = Archive(tmp_path, starts=20)
    archive.write()
    archive.verify("", "--calibration", tmp_path / "factors.nc")
    applied = f'[calibration]\nfile = "{tmp_path}/factors.nc"\n'
    settled(archive, applied)
    monkeypatch.setattr("verification_archive.LONGITUDES", np.arange(120.0, 170.0, 10.0))
    (tmp_path / "east").mkdir()
    other = Archive(tmp_path / "east", starts=2)
    other.write()
    result = settled(other, applied, 2)
    refusal(result, 2, "for domain in -90 to 90 N", "on a grid that covers another part of it")


def without(path, names):
    """A calibration file as earlier versions wrote it."""
    with netCDF4.Dataset(path) as old, netCDF4.Dataset(path.with_name("old.nc"), "w") as new:
        new.setncatts(old.__dict__)
        for name, group in old.groups.items():
            copy = new.createGroup(name)
            copy.setncatts(group.__dict__)
            for key, dimension in group.dimensions.items():
                copy.createDimension(key, dimension.size)
            for key, variable in group.variables.items():
                if key not in names:
                    made = copy.createVariable(key, variable.dtype, variable.dimensions)
                    made.setncatts({k: v for k, v in variable.__dict__.items() if k[0] != "_"})
                    made[:] = variable[:]


def test_a_file_of_an_earlier_version_is_used_with_a_warning(calibrated):
    without(calibrated.folder / "factors.nc", ["box", "mean_position", "start_name"])
    result = settled(calibrated, APPLIED.replace("factors.nc", "old.nc"))
    assert "old.nc is of an earlier version and does not say where its places lie" in result.stderr
    assert "are among those" not in result.stderr
    plain = read_calibration_file(calibrated.folder / "factors.nc")["t2"]
    old = read_calibration_file(calibrated.folder / "old.nc")["t2"]
    assert old.starts == ()
    np.testing.assert_array_equal(old.places.factor, plain.places.factor)


def test_factors_found_from_the_starts_they_are_applied_to_are_told(calibrated, tmp_path):
    result = settled(calibrated, APPLIED)
    last = "2032-01-26T00:00"  # start 39, 390 days on
    assert f"1 of 1 starts ({last}) are among those" in result.stderr
    factors = read_calibration_file(calibrated.folder / "factors.nc")["t2"]
    assert len(factors.starts) == 40
    assert factors.starts[0] == "2031-01-01T00:00"
    assert factors.starts[-1] == last
    # Found from the starts before, they may be applied to the last one.
    earlier = ", ".join(f'"{name}"' for name in factors.starts[:-1])
    archive = Archive(tmp_path, starts=40, scale=0.5)
    archive.write()
    archive.verify(REGION, "--calibration", tmp_path / "factors.nc", runs=f"starts = [{earlier}]")
    assert "are among those" not in settled(archive, APPLIED).stderr


def test_a_start_without_analyses_is_not_among_those_of_the_factors(tmp_path):
    archive = Archive(tmp_path, starts=20)
    archive.write(skip={(7, lead) for lead in range(HOURS.size)})
    archive.verify(REGION, "--calibration", tmp_path / "factors.nc")
    starts = read_calibration_file(tmp_path / "factors.nc")["t2"].starts
    assert len(starts) == 19
    assert "2031-03-12T00:00" not in starts  # start 7, 70 days on
