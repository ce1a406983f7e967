"""The folder of products as a whole."""

from __future__ import annotations

import pytest
from synthetic_products import GRIDS, Result, make_curves, make_maps

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.products import Ground, PlaceMark, write_products
from ensemble_horizon.vocabulary import CAUTION


def everything(folder):
    return sorted(path.relative_to(folder).as_posix() for path in folder.rglob("*"))


def test_all_products_and_nothing_else(tmp_path, result, provenance):
    folder = tmp_path / "night" / "products"
    ground = Ground((PlaceMark.box("North bank", 3, 6, 51, 53),))
    paths = write_products(
        folder, [result, Result(make_curves(variable="t"))], provenance, ground=ground
    )
    expected = [
        "README.txt",
        "figures",
        "figures/t_curves_20310105T00.png",
        "figures/wind_speed_curves_20310105T00.png",
        "figures/wind_speed_map_gale_spread_20310105T00.png",
        "figures/wind_speed_map_sat_0_7_20310105T00.png",
        "horizon_maps.nc",
        "horizons.csv",
        "horizons.nc",
    ]
    assert everything(folder) == expected
    assert sorted(path.relative_to(folder).as_posix() for path in paths) == [
        name for name in expected if name != "figures"
    ]
    readme = (folder / "README.txt").read_text(encoding="utf-8")
    assert CAUTION in readme and "threshold_units: units of the threshold" in readme


def test_without_figures_or_maps(tmp_path, provenance):
    write_products(tmp_path, [Result(make_curves())], provenance, figures=False)
    assert everything(tmp_path) == ["README.txt", "horizons.csv", "horizons.nc"]


def test_other_files_are_left_alone_and_old_products_replaced(tmp_path, result, provenance):
    (tmp_path / "mine.txt").write_text("keep me")
    (tmp_path / "horizons.csv").write_text("old")
    write_products(tmp_path, [result], provenance, figures=False)
    assert (tmp_path / "mine.txt").read_text() == "keep me"
    assert (tmp_path / "horizons.csv").read_text().startswith("start,variable")


def test_a_fault_half_way_leaves_the_old_set(tmp_path, result, provenance):
    write_products(tmp_path, [result], provenance, figures=False)
    before = {path: path.read_bytes() for path in tmp_path.iterdir()}
    broken = Result(make_curves(), make_maps(GRIDS["tiny"]()).isel(criterion=0))
    with pytest.raises(ArgumentError, match="'criterion'"):
        write_products(tmp_path, [broken], provenance, figures=False)
    assert {path: path.read_bytes() for path in tmp_path.iterdir()} == before


def test_no_result_is_refused(tmp_path, provenance):
    with pytest.raises(ArgumentError, match="at least one variable"):
        write_products(tmp_path / "p", [], provenance)
    assert not (tmp_path / "p").exists()
