"""Tables and figures of scores: what they say, and that they can be drawn in every state."""

from __future__ import annotations

import io

import numpy as np
import pytest
import xarray as xr
from PIL import Image
from rich.console import Console

from ensemble_horizon.products.score_figures import MOST_PANELS, draw_ranks, draw_scores
from ensemble_horizon.products.score_panel import ScorePanel, limit_note
from ensemble_horizon.products.score_table import ratio_table, skill_table
from ensemble_horizon.products.scores import score_records, skill_limits
from ensemble_horizon.vocabulary import Status

LEAD = 24.0 * np.arange(6)
SCORES = {
    "rmse": ("RMSE", "K", np.array([0.5, 1, 1.6, 2.2, 2.6, 2.8])),
    "spread": ("spread", "K", np.array([0.4, 0.9, 1.5, 2.1, 2.5, 2.8])),
    "spread_error_ratio": ("ratio", "1", np.array([0.85, 0.92, 0.96, 0.97, 0.98, 1.0])),
    "crps": ("CRPS", "K", np.array([0.3, 0.6, 0.9, 1.2, 1.5, 1.6])),
    "skill_climatology": ("skill", "1", np.array([0.85, 0.7, 0.5, 0.3, 0.1, -0.1])),
    "anomaly_correlation": ("correlation", "1", np.array([0.99, 0.95, 0.8, 0.65, 0.5, 0.4])),
}


class Scored:
    """One variable with scores at some places, and no maps."""

    maps = None

    def __init__(self, places=("North", "[Quay]"), known=True, status=Status.reached):
        names, number = list(SCORES), len(places)
        value = np.stack([np.tile(SCORES[name][2], (number, 1)) for name in names])
        nothing = np.full_like(value, np.nan)
        limits = ["skill_climatology", "anomaly_correlation"]
        times = np.tile([[107.0], [76.0]], (1, number)) if status == Status.reached else np.nan
        times = np.broadcast_to(times, (2, number))
        flags = np.full((2, number), status, dtype=np.int8)
        dims = ("score", "place", "lead")
        data = {
            "value": (dims, value if known else nothing),
            "low": (dims, value - 0.05 if known else nothing),
            "high": (dims, value + 0.05 if known else nothing),
            "starts": (dims, np.full(value.shape, 30, np.int32)),
            "rank_share": (("place", "lead", "rank"), np.full((number, 6, 9), 1 / 9)),
            "rank_p_value": (("place", "lead"), np.full((number, 6), 0.4)),
            "horizon": (("limit", "place"), times),
            "horizon_low": (("limit", "place"), times - 8),
            "horizon_high": (("limit", "place"), times + 9),
            "significant_until": (("limit", "place"), times - 8),
            "gap": (("limit", "place"), np.full_like(times, np.nan)),
            "status": (("limit", "place"), flags),
            "significant_status": (("limit", "place"), flags),
        }
        coords = {
            "score": names, "score_text": ("score", [SCORES[name][0] for name in names]),
            "score_units": ("score", [SCORES[name][1] for name in names]),
            "lead": ("lead", LEAD, {"units": "hours"}), "place": list(places),
            "against": ("place", ["analysis"] * number), "limit": limits,
            "limit_text": ("limit", ["skill over climatology", "anomaly correlation"]),
            "level": ("limit", [0.0, 0.6]),
        }  # fmt: skip
        about = {"variable": "t2", "long_name": "Temperature", "units": "K", "lead_units": "hours",
                 "last_lead": 120.0, "confidence": 0.9, "starts": 30, "members": 8}  # fmt: skip
        self.places = xr.Dataset(data, coords=coords, attrs=about)


def printed(table):
    out = io.StringIO()
    Console(file=out, width=150).print(table)
    return out.getvalue()


def size_of(path):
    with Image.open(path) as picture:
        return np.asarray(picture.convert("RGB"))


def test_the_table_tells_where_skill_ends():
    text = printed(skill_table([Scored()]))
    assert "107 h (99 to 116)" in text
    assert "anomaly correlation > 0.6" in text
    assert "[Quay]" in text  # no mark-up is read in names
    assert "not a warning" in text
    assert "30 starts" in text
    text = printed(ratio_table([Scored()]))
    assert "0.96 (0.91 to 1.01)" in text


@pytest.mark.parametrize(
    ("status", "words"),
    [
        (Status.beyond_run, "beyond the run (> 120 h)"),
        (Status.at_start, "not even at the first lead"),
        (Status.no_data, "too little known"),
    ],
)
def test_a_limit_is_a_number_only_where_it_was_reached(status, words):
    limits = skill_limits([Scored(status=status)])
    assert {limit.words for limit in limits} == {words}


def test_scores_without_any_value_have_no_rows():
    assert list(score_records([Scored(known=False)])) == []
    rows = list(score_records([Scored()]))
    assert len(rows) == 2 * 6 * 6
    assert {row.units for row in rows if row.score == "crps"} == {"K"}


def test_the_note_above_a_panel_is_short():
    data = Scored()
    panel = ScorePanel(data.places.isel(place=0), skill_limits([data])[:2], 372)
    assert limit_note(panel) == "skill 0: 107 h (99 to 116) · correlation 0.6: 76 h (68 to 85)"


@pytest.mark.parametrize("known", [True, False])
@pytest.mark.parametrize("status", list(Status))
def test_figures_are_drawn_in_every_state(tmp_path, known, status):
    result = Scored(known=known, status=status)
    (path,) = draw_scores(result, tmp_path / "scores.png")
    picture = size_of(path)
    assert picture.std() > 5
    assert picture.shape[1] < 2000


def test_many_places_go_on_a_next_sheet(tmp_path):
    result = Scored([f"Region {number}" for number in range(MOST_PANELS + 1)])
    written = draw_scores(result, tmp_path / "scores.png")
    assert [path.name for path in written] == ["scores.png", "scores_2.png"]


def test_uneven_ranks_look_uneven(tmp_path):
    flat, bent = Scored(["North"]), Scored(["North"])
    share = np.array([4, 2, 1, 1, 1, 1, 1, 2, 4]) / 17
    bent.places["rank_share"].values[:] = share
    first, second = (size_of(draw_ranks(item, tmp_path / f"{n}.png"))
                     for n, item in enumerate((flat, bent)))  # fmt: skip
    assert first.shape == second.shape
    bar = np.array([0x5F, 0x7F, 0x95])
    covered = [(np.abs(item.astype(int) - bar).max(axis=-1) < 3).sum() for item in (first, second)]
    # Both fill the same share of all bars, on an axis that reaches 1.06 times the highest.
    assert covered[1] / covered[0] == pytest.approx(1.6 / (1.06 * 9 * 4 / 17), rel=0.1)


def test_ranks_without_data_are_drawn_empty(tmp_path):
    result = Scored(["North"])
    result.places["rank_share"].values[:] = np.nan
    result.places["rank_p_value"].values[:] = np.nan
    assert size_of(draw_ranks(result, tmp_path / "ranks.png")).std() > 1
