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
from ensemble_horizon.products.difference_figure import draw_differences, outcome_words
from ensemble_horizon.products.gain_maps import draw_gain_map, faint, gain_scale
from ensemble_horizon.products.gains import telling_first
from ensemble_horizon.products.gains_figure import FURTHER_A, FURTHER_B, MOST_ROWS, draw_gains
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


# difference and half its interval by lead; told apart where the interval is free of zero
DIFFERENCES = [(-0.1, 0.3), (-0.5, 0.2), (-0.6, 0.2), (0.1, 0.4), (0.7, 0.3)]


def make_differences(places=2, rows=DIFFERENCES, given=True, **about):
    value, half = (np.array(column) for column in zip(*rows, strict=True))
    half = half if given else np.full(half.shape, NAN)
    survives = np.abs(value) > half

    def everywhere(values):
        table = np.broadcast_to(values[:, np.newaxis], (2, values.size, places))
        return (("score", "lead", "place"), table.copy())

    return xr.Dataset(
        {
            "difference": everywhere(value), "difference_low": everywhere(value - half),
            "difference_high": everywhere(value + half), "mean_a": everywhere(2 + 0 * value),
            "mean_b": everywhere(2 + value), "starts": everywhere(np.full(value.shape, 24)),
            "p_value": everywhere(np.where(np.isnan(half), NAN, np.where(survives, 0.01, 0.4))),
            "adjusted_p_value": everywhere(
                np.where(np.isnan(half), NAN, np.where(survives, 0.02, 0.5))
            ),
            "survives": everywhere(survives & given),
            "reason": everywhere(np.full(value.shape, 0 if given else 1)),
        },
        coords={
            "score": ["crps", "squared_error"],
            "score_text": ("score", ["fair CRPS", "squared error of the ensemble mean"]),
            "score_units": ("score", ["m s-1", "(m s-1)2"]),
            "lead": ("lead", 24.0 * np.arange(value.size), {"units": "hours"}),
            "place": [f"place {number} $x$" for number in range(places)],
            "against": ("place", ["analysis"] * places),
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


def test_differences_are_told_in_words():
    one = make_differences().isel(place=0, score=0)
    assert outcome_words(one) == "new errs less at 24–48\u00a0h, old $x$ at 96\u00a0h"
    signs = [1, 0, 1, 0, 1, 0, -1, 0, -1]
    many = make_differences(rows=[(sign, 0.5) for sign in signs]).isel(place=0, score=0)
    assert outcome_words(many) == (
        "old $x$ errs less at 0\u00a0h and at 48\u00a0h and at 96\u00a0h, and 2 more stretches"
    )
    few = make_differences(given=False).isel(place=0, score=0)
    assert outcome_words(few) == "not judged, few starts"
    assert outcome_words(few.assign(difference=0 * few.difference)) == "no difference"
    assert outcome_words(few.assign(difference=NAN * few.difference)) == "nothing to compare"
    close = make_differences(rows=[(0.1, 0.3), (-0.1, 0.3)]).isel(place=0, score=0)
    assert outcome_words(close) == "not told apart"


def test_a_figure_of_differences_has_the_colours_of_who_errs_less(tmp_path):
    def seen(part):
        path = draw_differences(part, tmp_path / "differences.png")[0]
        picture = np.asarray(Image.open(path).convert("RGB")).reshape(-1, 3)
        found, counts = np.unique(picture, axis=0, return_counts=True)
        count = dict(zip(map(tuple, found.tolist()), counts.tolist(), strict=True))
        return [count.get(tuple(int(c, 16) for c in (k[1:3], k[3:5], k[5:])), 0)
                for k in (FURTHER_A, FURTHER_B)]  # fmt: skip

    words = seen(make_differences(given=False))  # of the sides only
    both = seen(make_differences())
    assert both[0] > words[0] + 30 and both[1] > words[1] + 60
    better = seen(make_differences(rows=[(-1.0, 0.2)] * 5))
    assert better[1] > words[1] + 60 and better[0] <= words[0]


def _size(path):
    with Image.open(path) as picture:
        return picture.size


def test_many_places_go_to_a_second_page_of_differences(tmp_path):
    paths = draw_differences(make_differences(places=7), tmp_path / "d.png")
    assert [path.name for path in paths] == ["d.png", "d_2.png"]
    first, second = (_size(path) for path in paths)
    assert first[0] > second[0] and first[1] > second[1]


@pytest.mark.parametrize("leads", [1, 2, 90])
def test_differences_of_any_number_of_leads_are_drawn(tmp_path, leads):
    part = make_differences(places=1, rows=(DIFFERENCES * 18)[:leads])
    assert draw_differences(part, tmp_path / "d.png")[0].is_file()


def test_scores_stand_in_every_product(tmp_path, provenance):
    """Also where another variable has the name that a score would have in the file."""
    maps = make_gain_maps(GRIDS["tiny"]())
    results, scores = [], []
    for name in ("t_crps", "t_map", "t"):
        about = ABOUT | {"variable": name}
        one = make_result(maps.assign_attrs(about))
        results.append(Result(one.places.assign_attrs(about), one.maps, one.shares))
        scores.append(make_differences(variable=name))
    paths = write_versions(tmp_path, results, provenance, scores=scores, notes={})
    figures = {path.name for path in paths if path.suffix == ".png"}
    assert {f"{name}_score_differences.png" for name in ("t_crps", "t_map", "t")} <= figures
    with xr.open_dataset(tmp_path / "versions.nc") as data:
        for name in ("t_crps_p_value", "t_map_p_value", "t_map_2_gained", "t_crps_2_p_value"):
            assert name in data
        difference = data["t_crps_2_difference"]
        assert difference.dims == ("t_scored_place", "lead")
        np.testing.assert_allclose(difference[1], [row[0] for row in DIFFERENCES])
        assert difference.attrs["long_name"] == (
            "new less old $x$, start by start: fair CRPS: 10 m wind speed [B]"
        )
        assert data["t_squared_error_difference"].attrs["units"] == "(m s-1)2"
        assert data["t_squared_error_survives"].values[0].tolist() == [0, 1, 1, 0, 1]
    with (tmp_path / "score_differences.csv").open(newline="", encoding="utf-8") as file:
        rows = [row for row in csv.DictReader(file) if row["variable"] == "t"]
    assert len(rows) == 2 * 2 * 5
    assert [row["survives"] for row in rows[:5]] == ["no", "yes", "yes", "no", "yes"]
    assert {row["adjusted_p_value"] for row in rows} == {"0.02", "0.5"}
