"""Horizon maps: colours, hatches, contours and what stands around them."""

from __future__ import annotations

import subprocess
import sys

import numpy as np
import pytest
from matplotlib import image
from synthetic_products import GRIDS, make_maps, regular

from ensemble_horizon.products.hour_scale import hour_scale, ramp, status_colours
from ensemble_horizon.products.isolines import contour_lines, label_places
from ensemble_horizon.products.map_legend import legend_entries, status_shares
from ensemble_horizon.products.maps import draw_horizon_map, map_content
from ensemble_horizon.products.places import Ground, PlaceMark
from ensemble_horizon.products.view import map_view
from ensemble_horizon.vocabulary import Status


def lightness(colour):
    """Lightness L* of CIE 1976 from sRGB bytes (IEC 61966-2-1 and CIE 15, from memory)."""
    part = np.asarray(colour, dtype=float) / 255
    linear = np.where(part <= 0.04045, part / 12.92, ((part + 0.055) / 1.055) ** 2.4)
    y = linear @ np.array([0.2126, 0.7152, 0.0722])
    return np.where(y > 216 / 24389, 116 * np.cbrt(y) - 16, 24389 / 27 * y)


def as_seen_without(colours, cones):
    """Simulate missing cones (Viénot, Brettel and Mollon 1999, matrices from memory)."""
    matrix = {
        "protan": [[0.11238, 0.88762, 0.0], [0.11238, 0.88762, 0.0], [0.00401, -0.00401, 1.0]],
        "deutan": [[0.29275, 0.70725, 0.0], [0.29275, 0.70725, 0.0], [-0.02234, 0.02234, 1.0]],
    }[cones]
    linear = (np.asarray(colours, dtype=float) / 255) ** 2.2
    return 255 * np.clip(linear @ np.array(matrix).T, 0, 1) ** (1 / 2.2)


@pytest.mark.parametrize("count", range(2, 9))
def test_colours_rise_in_lightness_and_can_be_told_apart(count):
    steps = np.diff(lightness(ramp(count)))
    assert (steps > 4).all()


@pytest.mark.parametrize("cones", ["protan", "deutan"])
def test_colours_keep_their_order_without_some_cones(cones):
    assert (np.diff(lightness(as_seen_without(ramp(8), cones))) > 4).all()


@pytest.mark.parametrize(
    ("low", "high", "step"),
    [(3, 9, 1), (5, 40, 6), (24, 90, 12), (30, 200, 24), (0, 360, 48), (10, 700, 120)],
)
def test_steps_are_hours_that_matter(low, high, step):
    scale = hour_scale(np.linspace(low, high, 500), "hours")
    assert set(np.diff(scale.bounds)) == {step}
    assert all(bound % step == 0 for bound in scale.bounds) and len(scale.colours) <= 8
    assert set(scale.contours) <= set(scale.bounds[1:-1])


def test_painting_takes_the_step_a_value_lies_in():
    scale = hour_scale(np.linspace(24, 90, 100), "hours")
    index = list(scale.bounds).index(48.0)
    np.testing.assert_array_equal(scale.paint(np.array([48.0]))[0], scale.colours[index])
    np.testing.assert_array_equal(scale.paint(np.array([47.9]))[0], scale.colours[index - 1])
    np.testing.assert_array_equal(scale.paint(np.array([1e4]))[0], scale.colours[-1])


def test_scales_of_single_values_and_of_nothing():
    for values in (np.array([54.0]), np.full(3, np.nan), np.array([0.0])):
        for units in ("hours", "1"):
            scale = hour_scale(values, units)
            assert len(scale.bounds) >= 3 and np.all(np.diff(scale.bounds) > 0)


def test_statuses_differ_in_tone_and_in_hatch():
    rows, columns = np.mgrid[0:40, 0:40]
    shown = [s for s in Status if s != Status.reached]
    tones = {s: status_colours(s, rows, columns) for s in shown}
    hatches = {s: tuple((t != t[-1, -1]).any(axis=-1).ravel()) for s, t in tones.items()}
    assert len(set(hatches.values())) == len(shown)
    middle = [float(lightness(t.reshape(-1, 3)).mean()) for t in tones.values()]
    assert np.diff(sorted(middle)).min() > 1


def test_shares_are_shares_of_area():
    grid = regular(np.arange(-89, 90, 2.0), np.arange(0, 360, 2.0))
    maps = make_maps(grid, statuses=False).isel(start=0, criterion=0)
    north = maps.latitude > 30
    maps["status"] = maps.status.where(~north, int(Status.beyond_run)).astype(np.int8)
    view = map_view(maps["horizon"])
    content = map_content(maps, None, None)
    shares = status_shares(view, content, 720, 360)
    # The cap north of 30 degrees is a quarter of the sphere: (1 - sin 30) / 2.
    assert shares[Status.beyond_run] == pytest.approx(0.25, abs=0.003)
    assert sum(shares.values()) == pytest.approx(1.0)
    words = [text for _, text in legend_entries(content, shares)]
    assert words == ["limit within the run: 75 %", "beyond the run (> 240 h): 25 %"]


def test_contours_lie_where_the_field_has_their_level():
    grid = regular(np.linspace(40, 60, 41), np.linspace(-20, 20, 61))
    field = 10 + 2.0 * (grid[3] + 20)
    maps = make_maps(grid, statuses=False)
    view = map_view(maps["horizon"].isel(start=0, criterion=0))
    painted = field.ravel()[view.grid_points(300, 200)]
    lines = contour_lines(view, field, painted, (50.0,))
    assert len(lines[50.0]) == 1
    np.testing.assert_allclose(lines[50.0][0][:, 0], 0.0, atol=0.05)
    (level, x, y), *more = label_places(lines, view, most=1)
    assert level == 50.0 and abs(x) < 0.05 and 40 < y < 60 and not more


def test_labels_keep_clear_of_names():
    grid = regular(np.linspace(40, 60, 41), np.linspace(-20, 20, 61))
    field = 10 + 2.0 * (grid[3] + 20)
    view = map_view(make_maps(grid)["horizon"].isel(start=0, criterion=0))
    lines = contour_lines(view, field, field.ravel()[view.grid_points(300, 200)], (50.0,))
    places = label_places(lines, view, clear_of=[(0.0, 50.0)])
    assert places and all(abs(y - 50.0) > 1.5 for _, _, y in places)


def test_a_picture_for_every_grid(tmp_path, grid):
    marks = [
        PlaceMark.box("A bank", -30, -10, 40, 60),
        PlaceMark.box("Across", 170, -170, -20, -5),
        PlaceMark.site("Cost $5$ _light_", 178.0, 60.0),
    ]
    path = draw_horizon_map(make_maps(grid), tmp_path / "map.png", ground=Ground(tuple(marks)))
    picture = image.imread(path)
    height, width = picture.shape[:2]
    assert 500 < width < 1300 and 300 < height < 1000
    # Several colours of the scale are there, exactly as painted.
    weights = np.array([65536, 256, 1])
    painted = np.unique((picture[..., :3] * 255).round().astype(int) @ weights)
    maps = make_maps(grid).isel(start=0, criterion=0)
    reached = maps["horizon"].where(maps["status"] == Status.reached).values
    scale = hour_scale(reached, "hours")
    assert np.isin(scale.colours.astype(int) @ weights, painted).sum() >= 2
    # Nothing is cut off: the rim of the sheet is white.
    rim = np.concatenate([picture[0], picture[-1], picture[:, 0], picture[:, -1]])
    assert (rim[:, :3] == 1).all()


@pytest.mark.parametrize("status", list(Status))
def test_maps_of_a_single_status(tmp_path, status):
    maps = make_maps(GRIDS["tiny"](), statuses=False)
    maps["status"][:] = np.int8(status)
    if status != Status.reached:
        maps["horizon"][:] = np.nan
    path = draw_horizon_map(maps, tmp_path / "map.png", criterion=1)
    assert path.stat().st_size > 5000


def test_half_a_degree_is_drawn(tmp_path):
    maps = make_maps(regular(np.linspace(90, -90, 361), np.arange(0, 360, 0.5)))
    path = draw_horizon_map(maps, tmp_path / "map.png")
    assert path.stat().st_size > 20000


def test_the_plotting_library_is_not_loaded_with_the_package():
    code = "import sys, ensemble_horizon.products as p; sys.exit('matplotlib' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_the_line_below_the_title_names_criterion_start_and_members():
    maps = make_maps(GRIDS["tiny"](), criteria=("tolerance 2.5", "gale"))
    one = maps.isel(start=0, criterion=0)
    expected = "Criterion: tolerance 2.5 m s-1   ·   start 2031-01-05 00:00 UTC   ·   20 members"
    assert map_content(one, None, None).subtitle == expected
    bare = one.drop_vars(["threshold", "lead"]).assign_coords(criterion_kind="tolerance")
    bare = bare.assign_attrs(lead_units="hours", last_lead=120.0)
    assert map_content(bare, None, None).subtitle == expected
    assert map_content(bare, None, None).last_lead == 120.0
    pooled = one.assign_coords(start=np.datetime64("NaT", "ns"), start_label="all")
    assert "·   all starts pooled   ·" in map_content(pooled, None, None).subtitle


def test_outlines_are_repeated_on_the_turn_of_the_window():
    box = PlaceMark.box("x", 170, -170, -20, -10)
    west = [x.min() for x, _ in box.shifted(-180, 180)]
    assert west == [-190.0, 170.0]
    assert [x.tolist() for x, _ in PlaceMark.site("s", -170.0, 0.0).shifted(160, 200)] == [[190.0]]


def test_no_coast_under_an_invented_place(tmp_path):
    from matplotlib.image import imread

    maps = make_maps(GRIDS["regional"]())
    drawn = {
        coast: imread(
            draw_horizon_map(maps, tmp_path / f"{coast}.png", ground=Ground(coastline=coast))
        )
        for coast in (True, False)
    }
    assert drawn[True].shape == drawn[False].shape
    assert not np.array_equal(drawn[True], drawn[False])
