"""Products of a comparison, from synthetic gains: words, order, table, pages of figures."""

from __future__ import annotations

import csv
from dataclasses import dataclass

import numpy as np
import pytest
import xarray as xr
from PIL import Image
from synthetic_products import GRIDS

from ensemble_horizon.errors import ProductError
from ensemble_horizon.horizon import time_to_limit
from ensemble_horizon.products import gains, summary_words, write_products, write_versions
from ensemble_horizon.products.gain_maps import draw_gain_map, faint, gain_scale
from ensemble_horizon.products.gains import telling_first
from ensemble_horizon.products.gains_figure import MOST_ROWS, draw_gains
from ensemble_horizon.products.gains_table import COLUMNS
from ensemble_horizon.serial import REASON_ATTRIBUTES

NAN = float("nan")
ABOUT = {
    "variable": "wind_speed", "long_name": "10 m wind speed [B]", "units": "m s-1",
    "lead_units": "hours", "confidence": 0.9, "restricted_to": 240.0, "version_a": "old $x$",
    "version_b": "new", "start_count": 24, "first_start": "2031-01-05T00:00:00",
    "last_start": "2031-01-28T00:00:00",
}  # fmt: skip
# gained, low, high, p, survives, reason, starts
ROWS = [
    (7.2, 5.1, 9.3, 0.001, True, 0, 24),
    (-12.4, -20.0, -4.8, 0.004, True, 0, 24),
    (30.0, -5.0, 65.0, 0.2, False, 0, 24),
    (3.0, NAN, NAN, NAN, False, 1, 5),
    (0.0, NAN, NAN, NAN, False, 2, 24),
    (6.0, NAN, NAN, NAN, False, 2, 24),
    (NAN, NAN, NAN, NAN, False, 1, 0),
]


@dataclass
class Result:
    places: xr.Dataset
    maps: xr.Dataset | None
    shares: tuple[xr.Dataset, xr.Dataset]


def make_places(rows=ROWS, **about):
    gained, low, high, p_value, survives, reason, starts = (
        np.array(column)[:, np.newaxis] for column in zip(*rows, strict=True)
    )
    dims = ("place", "criterion")
    names = [
        f"place {number}, with $\\alpha$ & a name that goes on and on"
        for number in range(len(rows))
    ]
    return xr.Dataset(
        {
            "gained": (dims, gained), "gained_low": (dims, low), "gained_high": (dims, high),
            "p_value": (dims, p_value), "adjusted_p_value": (dims, p_value),
            "survives": (dims, survives), "reason": (dims, reason, REASON_ATTRIBUTES),
            "starts": (dims, starts), "mean_a": (dims, 60 + 0 * gained),
            "mean_b": (dims, 60 + gained), "log_rank_p": (dims, p_value),
            "beyond_a": (dims, 0 * starts), "beyond_b": (dims, starts // 2),
        },
        coords={
            "place": names, "place_kind": ("place", ["site"] * len(rows)),
            "criterion": ["tolerance 5"], "criterion_kind": ("criterion", ["tolerance"]),
            "threshold_units": ("criterion", ["m s-1"]),
        },
        attrs=ABOUT | about,
    )  # fmt: skip


def make_gain_maps(grid):
    dims, coords, latitude, _ = grid
    gained = np.where(latitude > np.median(latitude), 7.0, -3.0)[np.newaxis]
    gained.flat[0] = NAN
    return xr.Dataset(
        {
            "gained": (("criterion", *dims), gained.astype("f4")),
            "survives": (("criterion", *dims), gained == 7.0),
            "reason": (("criterion", *dims), np.zeros(gained.shape, int), REASON_ATTRIBUTES),
        },
        coords={
            **coords, "criterion": ["tolerance 5"], "criterion_kind": ("criterion", ["tolerance"]),
            "threshold_units": ("criterion", ["m s-1"]),
        },
        attrs=ABOUT,
    )  # fmt: skip


def make_shares(places):
    rng = np.random.default_rng(4)
    shape = (12, places.sizes["place"], 1)
    dims = ("start", "place", "criterion")
    horizons = xr.Dataset(
        {
            "horizon": (dims, rng.uniform(20, 200, shape), {"units": "hours"}),
            "status": (dims, np.zeros(shape, np.int8)),
        },
        coords={**places.coords, "start": np.arange(12)},
    )
    return time_to_limit(horizons, last_lead=240.0).assign_attrs(ABOUT)


def make_result(maps=None):
    places = make_places()
    return Result(places, maps, (make_shares(places), make_shares(places)))


def test_words_of_a_gain():
    rows = gains([make_places()])
    assert [row.text for row in rows] == [
        "+7.2 h (+5.1 to +9.3)", "−12 h (−20 to −4.8)", "+30 h (−5 to +65)", "+3 h", "0 h", "+6 h",
        "no data",
    ]  # fmt: skip
    assert [row.verdict for row in rows] == [
        "new holds longer", "old $x$ holds longer", "not told apart", "not judged, few starts",
        "no difference", "not judged, the same at every start", "no data",
    ]  # fmt: skip
    assert summary_words(rows) == (
        "new holds longer in 1 of 7 rows, old $x$ in 1; 5 not told apart or not judged."
    )
    assert summary_words(rows[2:]) == "old $x$ and new are not told apart in any of 5 rows."
    assert summary_words(rows[3:4]) == "None of 1 row can be judged."


def test_what_is_told_apart_comes_first_then_the_largest_change():
    order = [row.gained for row in telling_first(gains([make_places()]))]
    assert order[:6] == [-12.4, 7.2, 30.0, 6.0, 3.0, 0.0]
    assert np.isnan(order[6])


def test_table_has_a_row_for_each_and_no_number_where_there_is_none(tmp_path, provenance):
    write_versions(tmp_path, [make_result()], provenance, notes={"Cautions": []}, figures=False)
    with (tmp_path / "versions.csv").open(newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert tuple(rows[0]) == COLUMNS
    assert [row["hours_gained"] for row in rows] == ["7.2", "-12.4", "30", "3", "0", "6", ""]
    assert [row["survives"] for row in rows] == ["yes", "yes", "no", "", "", "", ""]
    assert {row["reason"] for row in rows} == {"given", "few_starts", "no_scatter"}
    assert rows[3]["low"] == rows[3]["p_value"] == ""


def test_all_products_and_a_readme_that_names_the_versions(tmp_path, provenance):
    notes = {"Not compared": ["variable t: only in new"], "Cautions": ["look twice"]}
    result = make_result(make_gain_maps(GRIDS["tiny"]()))
    paths = write_versions(tmp_path / "out", [result], provenance, notes=notes)
    assert sorted(path.relative_to(tmp_path / "out").as_posix() for path in paths) == [
        "README.txt", "figures/hours_gained.png", "figures/wind_speed_gained_tolerance_5.png",
        "figures/wind_speed_time_to_limit.png", "versions.csv", "versions.nc",
    ]  # fmt: skip
    text = (tmp_path / "out" / "README.txt").read_text(encoding="utf-8")
    for words in ("  a: old $x$", "variable t: only in new", "look twice", "  hours_gained: "):
        assert words in text
    with xr.open_dataset(tmp_path / "out" / "versions.nc") as data:
        assert data.attrs["not_compared"] == "variable t: only in new"
        assert data.wind_speed_gained.dims == ("place", "wind_speed_criterion")
        assert data.wind_speed_survives.values.ravel().tolist() == [1, 1, 0, 0, 0, 0, 0]


def test_an_estimate_of_several_starts_has_its_time_to_limit(tmp_path, result, provenance):
    shares = make_shares(make_places())
    write_products(tmp_path, [result], provenance, shares=[shares])
    assert (tmp_path / "figures" / "wind_speed_time_to_limit.png").is_file()
    with (tmp_path / "time_to_limit.csv").open(newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert [row["starts"] for row in rows] == ["12"] * 7
    assert float(rows[2]["half"]) == pytest.approx(
        float(shares["limit"].sel(quantile=0.5).isel(place=2).squeeze()), rel=1e-5
    )
    assert "three_quarters: " in (tmp_path / "README.txt").read_text(encoding="utf-8")


def test_a_folder_of_an_estimate_is_not_taken_over(tmp_path, result, provenance):
    write_products(tmp_path, [result], provenance, figures=False)
    before = sorted(path.name for path in tmp_path.iterdir())
    with pytest.raises(ProductError, match=r"Products of Ensemble Horizon.*name another folder"):
        write_versions(tmp_path, [make_result()], provenance, notes={}, figures=False)
    assert sorted(path.name for path in tmp_path.iterdir()) == before


@pytest.mark.parametrize("grid", list(GRIDS))
def test_maps_paint_survivors_full_and_the_others_faint(tmp_path, grid):
    maps = make_gain_maps(GRIDS[grid]())
    scale = gain_scale(maps["gained"].values, "hours")
    path = draw_gain_map(maps, tmp_path / "map.png")
    picture = np.asarray(Image.open(path).convert("RGB")).reshape(-1, 3)
    seen = {tuple(int(part) for part in colour) for colour in np.unique(picture, axis=0)}
    full, lost = (scale.paint(np.array(value)) for value in (7.0, -3.0))
    assert tuple(full.astype(np.uint8).tolist()) in seen
    washed = faint(np.broadcast_to(lost, (4, 4, 3))).reshape(-1, 3)
    assert {tuple(colour) for colour in washed.tolist()} <= seen


def test_the_scale_is_the_same_to_both_sides():
    scale = gain_scale(np.array([NAN, -2.0, 40.0]), "hours")
    assert scale.bounds.tolist() == (-scale.bounds[::-1]).tolist()
    assert len(scale.colours) == scale.bounds.size - 1
    assert gain_scale(np.full(3, NAN), "hours").bounds.size >= 5


def test_many_rows_go_to_a_second_page(tmp_path):
    places = make_places([ROWS[0]] * (MOST_ROWS + 1))
    paths = draw_gains([places], tmp_path / "gains.png")
    assert [path.name for path in paths] == ["gains.png", "gains_2.png"]
    assert all(path.is_file() for path in paths)
