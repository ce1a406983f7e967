"""Growth curves: one panel a place, every status in words, no label cut off."""

from __future__ import annotations

import numpy as np
import pytest
from matplotlib import image
from synthetic_products import Result, make_curves

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.products.curve_figures import draw_growth_curves
from ensemble_horizon.products.curve_panel import Panel, draw_panel, fit_note, level_on_curve
from ensemble_horizon.products.limits import limits
from ensemble_horizon.products.sheet import Sheet
from ensemble_horizon.products.wording import horizon_text
from ensemble_horizon.vocabulary import Status


def panel_of(curves, place=0, *, chance=False):
    ordered = curves.transpose("start", "place", "criterion", "lead", ...)
    return Panel(
        curves=ordered.isel(start=0, place=place),
        limits=[limit for limit in limits([Result(curves)]) if limit.index[1] == place],
        width=392,
        with_chance=chance,
    )


def drawn(panel):
    sheet = Sheet(520, panel.height + 20)
    draw_panel(sheet, panel, 70, 10)
    return sheet.figure


def words_of(figure):
    return [text.get_text() for axes in figure.axes for text in axes.texts]


def test_every_status_is_in_words():
    curves = make_curves(chance=True)
    words = [text for place in range(5) for text in words_of(drawn(panel_of(curves, place)))]
    for expected in (
        "85 h (74 to 99)",
        "reached at the first lead",
        "no growth, so no limit",
        "too little known",
    ):
        assert expected in words
    assert any(text.startswith("beyond the run (> 240 h; law projects") for text in words)


def test_the_curve_and_its_law_are_the_ones_given():
    panel = panel_of(make_curves())
    lines = drawn(panel).axes[0].lines
    drawn_values = [line.get_ydata() for line in lines]
    for name in ("spread", "fitted"):
        assert any(
            len(values) == 41 and np.array_equal(values, panel.values(name))
            for values in drawn_values
        )


def test_the_axis_is_logarithmic_where_the_spread_grows_thirtyfold():
    curves = make_curves(criteria=("a",))
    assert drawn(panel_of(curves)).axes[0].get_yscale() == "linear"
    grown = 0.01 * np.exp(0.03 * curves.lead.values)
    curves["spread"][:] = grown
    curves["spread"][..., 0] = 0.0
    assert drawn(panel_of(curves)).axes[0].get_yscale() == "log"


def test_thresholds_stand_at_their_level():
    first, second, third = panel_of(make_curves(chance=True)).limits
    assert level_on_curve(first, "m s-1", 4.8) == 2.5
    assert level_on_curve(second, "m s-1", 4.8) == pytest.approx(3.36)
    assert np.isnan(level_on_curve(third, "m s-1", 4.8))
    curves = make_curves()
    curves["threshold"][..., 1] = 0.7
    curves = curves.assign_coords(threshold_units=("criterion", ["m s-1", "1"]))
    fraction = panel_of(curves).limits[1]
    assert level_on_curve(fraction, "m s-1", 4.8) == pytest.approx(3.36)


def test_a_chance_has_an_axis_of_its_own():
    panel = panel_of(make_curves(chance=True), chance=True)
    figure = drawn(panel)
    assert len(figure.axes) == 3 and figure.axes[1].get_ylim() == (0.0, 1.0)
    assert len(drawn(panel_of(make_curves())).axes) == 2


def test_the_note_gives_doubling_time_law_and_members():
    assert (
        fit_note(panel_of(make_curves()))
        == "doubles in 20 h (18 to 22) · logistic law · 20 members"
    )


def test_words_stay_on_the_sheet_and_off_each_other():
    for place in range(5):
        figure = drawn(panel_of(make_curves(chance=True), place, chance=True))
        figure.canvas.draw()
        boxes = [text.get_window_extent() for axes in figure.axes for text in axes.texts]
        for index, box in enumerate(boxes):
            assert box.x0 >= 0 and box.x1 <= figure.bbox.x1
            assert not any(box.overlaps(other) for other in boxes[:index])


@pytest.mark.parametrize("horizon", [60.0, 130.0, 200.0])
def test_words_beside_wide_intervals_stay_inside_and_off_the_mark(horizon):
    curves = make_curves(criteria=("a",))
    curves["horizon"][:] = horizon
    curves["low"][:], curves["high"][:] = 20.0, np.inf
    strip = drawn(panel_of(curves)).axes[-1]
    strip.figure.canvas.draw()
    box = strip.texts[0].get_window_extent()
    rim = strip.get_window_extent()
    assert rim.x0 <= box.x0 and box.x1 <= rim.x1
    mark = strip.transData.transform((horizon, 0))[0]
    assert not box.x0 - 4 < mark < box.x1 + 4


def test_more_than_twelve_places_go_on_further_sheets(tmp_path):
    curves = make_curves(places=tuple(f"Site {number}" for number in range(14)), pooled=True)
    curves["spread"][:, 2] = np.nan
    paths = draw_growth_curves(curves, tmp_path / "c.png", start=1)
    assert [path.name for path in paths] == ["c.png", "c_2.png"]
    for path in paths:
        picture = image.imread(path)[..., :3]
        rim = np.concatenate([picture[0], picture[-1], picture[:, 0], picture[:, -1]])
        assert (rim == 1).all()


def test_names_are_not_read_as_mark_up(tmp_path):
    curves = make_curves(places=("$x_{1$ \\frac", "b"), criteria=("$\\bad{", "c"))
    assert draw_growth_curves(curves, tmp_path / "c.png")[0].exists()


def test_curves_without_criteria_are_refused(tmp_path):
    with pytest.raises(ArgumentError, match="at least one place and one criterion"):
        draw_growth_curves(make_curves().isel(criterion=[]), tmp_path / "c.png")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("status", "expected"),
    [
        (Status.reached, "54 h (47 to 63)"),
        (Status.at_start, "reached at the first lead (54 h)"),
        (Status.no_growth, "no growth, so no limit"),
        (Status.no_data, "too little known"),
    ],
)
def test_wording(status, expected):
    assert horizon_text(status, 54.0, 47.0, 63.0, np.nan, 240.0, "hours") == expected
