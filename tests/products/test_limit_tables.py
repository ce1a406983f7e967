"""The table of limits: for programs and for the terminal."""

from __future__ import annotations

import csv
import io

import cftime
import numpy as np
import pandas as pd
import pytest
from rich.console import Console
from synthetic_products import Result, make_curves

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.products.limits import limits
from ensemble_horizon.products.tables import (
    COLUMN_NOTES,
    COLUMNS,
    limits_table,
    write_horizon_table,
)
from ensemble_horizon.vocabulary import CAUTION, Status

HEADER = (
    "start,variable,place,criterion,threshold,threshold_units,horizon,low,high,horizon_units,"
    "status,projected,doubling_time,law,members"
)


def read(path):
    with path.open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))


def printed(table, width=150):
    console = Console(width=width, file=io.StringIO(), color_system=None)
    console.print(table)
    return console.file.getvalue()


def test_the_first_line_is_the_header_and_every_column_is_described(tmp_path, result):
    path = write_horizon_table(tmp_path / "horizons.csv", [result])
    assert path.read_text(encoding="utf-8").splitlines()[0] == HEADER
    assert tuple(COLUMN_NOTES) == COLUMNS == tuple(HEADER.split(","))


def test_rows_carry_the_numbers_of_the_curves(tmp_path):
    starts = ("2031-01-05T00", "2031-01-06T12")
    curves = make_curves(starts=starts, chance=True)
    rows = read(write_horizon_table(tmp_path / "t.csv", [Result(curves)]))
    assert len(rows) == 2 * 5 * 3
    assert [row["start"] for row in rows[:: 5 * 3]] == [
        "2031-01-05T00:00:00",
        "2031-01-06T12:00:00",
    ]
    row = rows[0]
    cell = {"start": 0, "place": 0, "criterion": 0}
    assert float(row["horizon"]) == pytest.approx(float(curves.horizon[cell]), rel=1e-5)
    assert float(row["low"]) == pytest.approx(float(curves.low[cell]), rel=1e-5)
    assert row["law"] == "logistic" and row["members"] == "20" and row["horizon_units"] == "hours"
    assert row["threshold"] == "2.5" and row["threshold_units"] == "m s-1"
    assert rows[2]["criterion"] == 'chance "over 17"' and rows[2]["threshold_units"] == "1"


def test_cells_are_empty_where_there_is_no_number(tmp_path):
    curves = make_curves()
    # A number that must not leak into the table beside a status that has none.
    curves["horizon"][0, 4, 0] = 999.0
    rows = read(write_horizon_table(tmp_path / "t.csv", [Result(curves)]))
    by_status = {row["status"]: row for row in rows}
    assert set(by_status) == {status.name for status in Status}
    for status in ("beyond_run", "no_growth", "no_data"):
        assert by_status[status]["horizon"] == ""
    assert by_status["at_start"]["horizon"] == "0"
    assert by_status["beyond_run"]["high"] == "" and by_status["beyond_run"]["projected"] != ""
    open_ended = [row for row in rows if row["status"] == "reached" and row["high"] == ""]
    assert open_ended and all(row["low"] for row in open_ended)
    assert not any(word in row.values() for row in rows for word in ("nan", "inf"))


def test_pandas_reads_the_table_as_numbers_and_times(tmp_path, result):
    path = write_horizon_table(tmp_path / "t.csv", [result])
    frame = pd.read_csv(path, parse_dates=["start"])
    assert frame["horizon"].dtype == float and frame["start"].dtype.kind == "M"
    assert frame["start"][0] == pd.Timestamp("2031-01-05")


def test_hostile_names_survive(tmp_path):
    names = ('Öst, "inner"', "line\nbreak", "[bold]x[/bold]")
    curves = make_curves(places=names, criteria=("a;b", "c"))
    rows = read(write_horizon_table(tmp_path / "t.csv", [Result(curves)]))
    assert {row["place"] for row in rows} == set(names)
    assert "[bold]x[/bold]" in printed(limits_table([Result(curves)]))


def test_starts_pooled_and_of_other_calendars(tmp_path):
    pooled = read(write_horizon_table(tmp_path / "p.csv", [Result(make_curves(pooled=True))]))
    assert [row["start"] for row in pooled[::10]] == ["2031-01-05T00:00:00", "all"]
    curves = make_curves().drop_vars("start_label")
    curves = curves.assign_coords(
        start=np.array([cftime.datetime(2031, 2, 30, 6, calendar="360_day")], dtype=object)
    )
    rows = read(write_horizon_table(tmp_path / "c.csv", [Result(curves)]))
    assert rows[0]["start"] == "2031-02-30T06:00:00"


def test_the_terminal_shows_the_shortest_first_and_the_caution_last():
    text = printed(limits_table([Result(make_curves())]), width=170)
    order = [
        "reached at the first lead",
        "85 h (74 to 99)",
        "(192 to beyond the run)",
        "beyond the run (> 240 h; law projects",
        "no growth, so no limit",
        "too little known",
    ]
    places = [text.index(words) for words in order]
    assert places == sorted(places)
    assert " ".join(text.split()).endswith(CAUTION)
    assert "Lead-time limits, shortest first, start 2031-01-05 00:00 UTC" in text


def test_rows_left_out_are_counted():
    text = printed(limits_table([Result(make_curves())], most=3))
    assert "7 longer limits not shown" in text


def test_model_time_units():
    text = printed(limits_table([Result(make_curves(lead_units="1"))]))
    assert "85.3 time units (74.2 to 98.9)" in text


def test_limits_know_where_they_came_from():
    curves = make_curves()
    for limit in limits([Result(curves)]):
        assert str(curves.criterion.values[limit.index[2]]) == limit.criterion
        assert int(curves.status.values[limit.index]) == limit.status


def test_curves_without_places_dimension_are_refused():
    with pytest.raises(ArgumentError, match="a dimension named 'place'"):
        limits([Result(make_curves().isel(place=0))])
