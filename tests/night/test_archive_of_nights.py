"""The archive of nights: filed once, compared with like, broken files set aside and named."""

from __future__ import annotations

import contextlib
import os
import shutil
import tempfile
from dataclasses import replace
from datetime import datetime
from pathlib import Path

import numpy as np
import pytest

from ensemble_horizon.errors import ProductError
from ensemble_horizon.horizon.usual import Standing
from ensemble_horizon.night import archive as archive_module
from ensemble_horizon.night.archive import UsualOptions, file_night, usual_of_night
from ensemble_horizon.products import night_file, writing
from ensemble_horizon.products.night_file import read_night_file
from ensemble_horizon.products.nights import Measure, Night, NightLimit, night_name, night_of
from ensemble_horizon.products.stored import read_results
from ensemble_horizon.settings.tables import NightTable
from ensemble_horizon.vocabulary import Status

ABOUT = {"created": datetime(2031, 1, 5, 6), "version": "1"}
MEASURE = Measure("tolerance", "tolerance 2", 2.0, "K", "K", "hours", 0.0, 0.0)
KEY = ("t2", "North / bank <b>", "2 K")
HOURS = 12.0 * np.arange(12)
TONIGHT = "2031-02-14T00"
NOTHING = float("nan")
OPTIONS = UsualOptions(nights=10, season_days=45)
_FILED: dict[str, bytes] = {}  # the same night gives the same bytes, and takes time to write


@pytest.fixture(autouse=True)
def without_waiting_for_the_disk(monkeypatch):
    """Hundreds of nights are filed here, and none has to outlast a failure of the power."""
    monkeypatch.setattr(writing, "flush_to_disk", lambda path: None)


def limit(horizon, key=KEY, measure=MEASURE, status=None, last=1000.0):
    if status is None:
        status = Status.reached if np.isfinite(horizon) else Status.beyond_run
    return NightLimit(*key, horizon, NOTHING, float("inf"), status, last, measure)


def a_night(start, *limits):
    return Night(np.datetime64(start, "s"), limits)


def days_before(count, date=TONIGHT):
    return np.datetime64(date, "s") - np.timedelta64(count, "D")


def file_again(folder, day, horizon=50.0):
    return file_night(folder, a_night(days_before(day), limit(horizon)), ABOUT)


def fill(folder, days, horizon=lambda day: 100.0 + day, date=TONIGHT, **options):
    """Nights so many days before tonight; the horizon tells which night it was."""
    nights = folder / "nights"
    for day in days:
        night = a_night(days_before(day, date), limit(horizon(day), **options))
        if repr(night) not in _FILED:
            _FILED[repr(night)] = file_night(folder, night, ABOUT).path.read_bytes()
        nights.mkdir(exist_ok=True)
        (nights / night.name).write_bytes(_FILED[repr(night)])


def usual(folder, horizon=100.0, options=OPTIONS, **other):
    found = usual_of_night(folder, a_night(TONIGHT, limit(horizon, **other)), options)
    return found.usual[other.get("key", KEY)], found.notes


def names(folder):
    return sorted(path.name for path in folder.iterdir())


def test_a_night_filed_twice_replaces_itself(tmp_path):
    for horizon in (50.0, 60.0, 60.0):
        filed = file_night(tmp_path, a_night(TONIGHT, limit(horizon)), ABOUT)
        assert filed.notes == () and filed.path == tmp_path / "nights" / "20310214T00.nc"
        assert names(tmp_path / "nights") == ["20310214T00.nc"]
        assert read_night_file(filed.path).limits[0].horizon == horizon
    whole = filed.path.read_bytes()
    file_night(tmp_path, a_night(TONIGHT, limit(60.0)), ABOUT)
    assert filed.path.read_bytes() == whole


def test_a_filing_that_fails_leaves_the_night_that_was_there(tmp_path, monkeypatch):
    filed = file_night(tmp_path, a_night(TONIGHT, limit(50.0)), ABOUT)
    whole = filed.path.read_bytes()

    def full(path):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(night_file, "seal", full)
    with pytest.raises(ProductError, match=r"20310214T00\.nc: expected room on the disk"):
        file_night(tmp_path, a_night(TONIGHT, limit(60.0)), ABOUT)
    assert filed.path.read_bytes() == whole and names(filed.path.parent) == ["20310214T00.nc"]


def test_usual_is_of_the_last_nights_before_tonight(tmp_path):
    fill(tmp_path, range(1, 21))
    fill(tmp_path, (-1, 0), lambda day: 1.0)  # tonight, filed already, and the night after it
    found, notes = usual(tmp_path, 90.0)
    nights = np.arange(101.0, 111.0)
    expected = np.quantile(nights, [0.1, 0.5, 0.9], method="averaged_inverted_cdf")
    assert [found.low, found.median, found.high] == pytest.approx(expected)
    assert (found.nights, found.season, found.standing) == (10, False, Standing.shorter)
    assert found.percentile == 0.0 and notes == ()
    assert usual(tmp_path, 110.5)[0].standing is Standing.longer
    assert usual(tmp_path, 105.5)[0].percentile == 50.0


def test_an_archive_that_is_not_there_or_young(tmp_path):
    found, notes = usual(tmp_path / "none")
    assert (found.nights, found.standing, notes) == (0, Standing.unknown, ())
    assert np.isnan(found.median)
    fill(tmp_path, range(1, 10))
    found, _ = usual(tmp_path)
    assert (found.nights, found.standing) == (9, Standing.unknown)
    (tmp_path / "file").mkdir()
    (tmp_path / "file" / "nights").write_text("in the way")
    found, notes = usual(tmp_path / "file")
    assert found.nights == 0 and "cannot be listed (not a directory)" in notes[0]


@pytest.mark.parametrize(
    "change",
    [{"kind": "climatology_fraction"}, {"threshold": 2.5}, {"threshold_units": "degF"},
     {"units": "degF"}, {"lead_units": "days"}, {"hold": 6.0}, {"first_lead": 6.0}],
)  # fmt: skip
def test_nights_by_another_measure_are_not_compared_and_that_is_said(tmp_path, change):
    fill(tmp_path, range(2, 22, 2))
    fill(tmp_path, range(1, 22, 2), lambda day: 7.0, measure=replace(MEASURE, **change))
    found, notes = usual(tmp_path)
    assert found.nights == 10 and found.low > 100
    assert notes == (
        "t2, 2 K: 10 past nights are not compared, because the criterion, its hold time or the "
        "units were others or are not known.",
    )
    one, notes = usual(tmp_path, measure=replace(MEASURE, **change))
    assert one.nights == 10 and one.high == 7.0 and "9 past nights are" in notes[0]


def test_other_variables_places_and_criteria_are_kept_apart(tmp_path):
    keys = [KEY, ("t2", "North / bank <b>", "3 K"), ("t2", "B", "2 K"), ("u", KEY[1], "2 K")]
    for day in range(1, 13):
        rows = [limit(10.0 * (n + 1), key) for n, key in enumerate(keys)]
        file_night(tmp_path, a_night(days_before(day), *rows), ABOUT)
    tonight = a_night(TONIGHT, *(limit(5.0, key) for key in [*keys, ("new", "B", "x")]))
    found = usual_of_night(tmp_path, tonight, OPTIONS).usual
    assert [found[key].median for key in keys] == [10.0, 20.0, 30.0, 40.0]
    assert found["new", "B", "x"].nights == 0 and len(found) == 5


def test_nights_that_lack_a_place_are_passed_over(tmp_path):
    other = ("t2", "B", "2 K")
    fill(tmp_path, [day for day in range(1, 31) if day % 3])
    fill(tmp_path, range(3, 31, 3), key=other)
    found, _ = usual(tmp_path)
    # Day 1, 2, 4, 5, 7, 8, 10, 11, 13 and 14: the high end is the mean of the last two.
    assert found.nights == 10 and found.high == pytest.approx(113.5)


def test_censored_and_missing_nights_are_counted_honestly(tmp_path):
    fill(tmp_path, range(1, 9), lambda day: 10.0 * day)
    fill(tmp_path, range(9, 13), lambda day: NOTHING)
    fill(tmp_path, range(13, 16), lambda day: NOTHING, status=Status.no_data)
    found, _ = usual(tmp_path, NOTHING, UsualOptions(15, 45))
    assert (found.nights, found.without_data) == (12, 3)
    assert (found.low, found.median, found.high) == (20.0, 65.0, float("inf"))
    assert found.standing is Standing.usual and np.isnan(found.percentile)


def test_the_same_time_of_year_where_other_years_have_enough_nights(tmp_path):
    fill(tmp_path, range(1, 16))
    for year, horizon in ((365, 200.0), (730, 300.0)):  # no leap day since 2029
        fill(tmp_path, range(year - 2, year + 3), lambda day, value=horizon: value)
    found, _ = usual(tmp_path)
    assert found.season and found.nights == 10
    assert (found.low, found.median, found.high) == (200.0, 250.0, 300.0)
    # One night fewer, and the last nights are used.
    (tmp_path / "nights" / night_name(days_before(730))).unlink()
    found, _ = usual(tmp_path)
    assert not found.season and found.high < 120
    # Nights of other seasons of other years do not help.
    fill(tmp_path, [365 + 46, 730 - 46], lambda day: 300.0)
    assert not usual(tmp_path)[0].season
    fill(tmp_path, [730 - 45], lambda day: 300.0)
    assert usual(tmp_path)[0].season


def test_the_season_is_the_nights_nearest_the_date(tmp_path):
    fill(tmp_path, range(345, 386), lambda day: float(abs(day - 365)))
    found, _ = usual(tmp_path, 5.0)
    assert found.season and found.nights == 10
    # The 10 nearest: the date itself, 4 on either side, and the newer of the two after them.
    expected = np.quantile([0, *range(1, 5), *range(1, 5), 5], [0.1, 0.5, 0.9],
                           method="averaged_inverted_cdf")  # fmt: skip
    assert [found.low, found.median, found.high] == pytest.approx(expected)


@pytest.mark.parametrize("date", ["2032-01-03T00", "2031-12-30T12", "2032-02-29T00"])
def test_the_season_across_the_turn_of_the_year_and_the_leap_day(tmp_path, date):
    # The nights just before are of the same season, but not of another year.
    fill(tmp_path, range(1, 16), lambda day: 150.0, date)
    fill(tmp_path, range(361, 371), lambda day: 50.0, date)
    tonight = a_night(date, limit(50.0))
    found = usual_of_night(tmp_path, tonight, OPTIONS).usual[KEY]
    assert found.season and found.nights == 10 and found.high == 50.0
    found = usual_of_night(tmp_path, tonight, UsualOptions(11, 45)).usual[KEY]
    assert not found.season and found.nights == 11 and found.low == 150.0


def test_a_season_measured_otherwise_gives_way_to_the_last_nights(tmp_path):
    fill(tmp_path, range(1, 13))
    fill(tmp_path, range(358, 372), measure=replace(MEASURE, threshold=3.0))
    found, notes = usual(tmp_path)
    assert not found.season and found.nights == 10 and notes == ()


def breakages(path):
    whole = path.read_bytes()
    flipped = bytearray(whole)
    flipped[len(whole) // 2] ^= 4
    return {
        "truncated": whole[:1000],
        "flipped": bytes(flipped),
        "foreign": b"not a night\n" * 10,
        "empty": b"",
    }


@pytest.mark.parametrize("fault", ["truncated", "flipped", "foreign", "empty", "renamed"])
def test_a_broken_file_is_set_aside_and_named(tmp_path, fault):
    fill(tmp_path, range(1, 13))
    nights = tmp_path / "nights"
    path = nights / night_name(days_before(3))
    if fault == "renamed":
        shutil.copy(nights / night_name(days_before(4)), path)
        broken = path.read_bytes()
    else:
        broken = breakages(path)[fault]
        path.write_bytes(broken)
    found, notes = usual(tmp_path)
    kept = nights / "set_aside" / path.name
    assert kept.read_bytes() == broken and not path.exists()
    assert len(notes) == 1 and str(path) in notes[0] and str(kept) in notes[0]
    assert "is broken (" in notes[0]
    # The night before the last one takes its place.
    assert found.nights == 10 and found.high == 110.5
    again, notes = usual(tmp_path)
    assert repr(again) == repr(found) and notes == ()


def test_nothing_in_set_aside_is_overwritten(tmp_path):
    place = tmp_path / "nights" / night_name(days_before(2))
    for number in range(3):
        fill(tmp_path, [2])
        place.write_text(f"broken {number}")
        usual(tmp_path)
    aside = tmp_path / "nights" / "set_aside"
    assert names(aside) == ["20310212T00-2.nc", "20310212T00-3.nc", "20310212T00.nc"]
    assert (aside / "20310212T00.nc").read_text() == "broken 0"
    assert (aside / "20310212T00-2.nc").read_text() == "broken 1"


def test_a_night_filed_over_a_broken_file_sets_that_aside(tmp_path):
    fill(tmp_path, [0])
    path = tmp_path / "nights" / "20310214T00.nc"
    path.write_text("broken")
    filed = file_again(tmp_path, 0)
    assert (tmp_path / "nights" / "set_aside" / path.name).read_text() == "broken"
    assert len(filed.notes) == 1 and "is broken" in filed.notes[0]
    assert read_night_file(path).limits[0].horizon == 50.0


def test_a_night_replaced_while_it_was_read_is_not_set_aside(tmp_path, monkeypatch):
    fill(tmp_path, range(1, 13))
    path = tmp_path / "nights" / night_name(days_before(1))
    whole = path.read_bytes()
    path.write_text("broken")
    parse = archive_module.night_from

    def slow(content, name):
        if content == b"broken":
            path.with_name("new").write_bytes(whole)
            path.with_name("new").replace(path)
        return parse(content, name)

    monkeypatch.setattr(archive_module, "night_from", slow)
    _, notes = usual(tmp_path)
    assert "it was being replaced" in notes[0] and path.read_bytes() == whole
    assert not (tmp_path / "nights" / "set_aside").exists()


def test_files_that_are_no_nights_are_not_touched(tmp_path):
    fill(tmp_path, range(1, 13))
    for name in ("README.txt", "20310213T00.nc.bak", ".20310213T00.ab.part.nc", "20310299T00.nc"):
        (tmp_path / "nights" / name).write_text("x")
    before = names(tmp_path / "nights")
    assert usual(tmp_path)[1] == ()
    assert names(tmp_path / "nights") == before


def test_a_folder_or_a_dead_link_in_the_place_of_a_night_is_left_and_named(tmp_path):
    fill(tmp_path, range(3, 12))
    folder, link = (tmp_path / "nights" / night_name(days_before(day)) for day in (1, 2))
    folder.mkdir()
    link.symlink_to(tmp_path / "nowhere")
    found, notes = usual(tmp_path)
    assert found.nights == 9 and folder.is_dir() and link.is_symlink()
    assert len(notes) == 2 and all("cannot be read" in note for note in notes)
    for day in (1, 2):
        with pytest.raises(ProductError, match="expected no file, or the file of that night"):
            file_again(tmp_path, day)


def test_a_night_of_a_newer_program_is_left_and_named(tmp_path, monkeypatch):
    fill(tmp_path, range(2, 11))
    monkeypatch.setattr(night_file, "LAYOUT", 2)
    file_again(tmp_path, 1)
    monkeypatch.undo()
    path = tmp_path / "nights" / night_name(days_before(1))
    found, notes = usual(tmp_path)
    assert found.nights == 9 and path.exists() and "layout 2, of a newer program" in notes[0]
    with pytest.raises(ProductError, match="newer program"):
        file_again(tmp_path, 1)


@contextlib.contextmanager
def as_nobody():
    """Do without the rights of root, which may read and move anything."""
    if os.geteuid() != 0:
        yield
        return
    os.seteuid(65534)
    try:
        yield
    finally:
        os.seteuid(0)


@pytest.fixture
def open_folder():
    """A folder that everybody may enter and write to, unlike those of pytest."""
    folder = Path(tempfile.mkdtemp(prefix="archive-"))
    folder.chmod(0o777)
    yield folder
    shutil.rmtree(folder)


def test_no_permission_to_read_is_not_broken(open_folder):
    with as_nobody():
        fill(open_folder, range(1, 11))
        path = open_folder / "nights" / night_name(days_before(2))
        path.chmod(0)
        found, notes = usual(open_folder)
        assert found.nights == 9 and path.exists()
        assert len(notes) == 1 and str(path) in notes[0]
        assert "permission denied" in notes[0] and "broken" not in notes[0]
        with pytest.raises(ProductError, match=r"permission denied.*give permission"):
            file_again(open_folder, 2)
        assert not (open_folder / "nights" / "set_aside").exists()


def test_a_broken_file_in_a_read_only_archive_is_named_and_left(open_folder):
    with as_nobody():
        fill(open_folder, range(1, 11))
        path = open_folder / "nights" / night_name(days_before(2))
        path.write_text("broken")
        path.parent.chmod(0o555)
        found, notes = usual(open_folder)
        assert found.nights == 9 and path.read_text() == "broken"
        assert "it cannot be moved aside, permission denied" in notes[0]
        with pytest.raises(ProductError, match="expected no file, or the file of that night"):
            file_again(open_folder, 2)
        path.parent.chmod(0)
        found, notes = usual(open_folder)
        assert found.nights == 0 and "cannot be listed (permission denied)" in notes[0]
        path.parent.chmod(0o755)


def names_of_files_read(monkeypatch):
    read = []
    parse = archive_module.night_from

    def noted(content, name):
        read.append(name)
        return parse(content, name)

    monkeypatch.setattr(archive_module, "night_from", noted)
    return read


@pytest.mark.parametrize(("extra", "opened"), [([], 10), ([("new", "B", "x")], 20)])
def test_of_500_nights_only_those_needed_are_opened(tmp_path, monkeypatch, extra, opened):
    # Any other file would be found broken, and set aside, if it were opened.
    nights = tmp_path / "nights"
    fill(tmp_path, range(1, opened + 1))
    for day in range(opened + 1, 501):
        (nights / night_name(days_before(day))).write_text("not to be opened")
    assert len(names(nights)) == 500
    read = names_of_files_read(monkeypatch)
    tonight = a_night(TONIGHT, *(limit(105.5, key) for key in [KEY, *extra]))
    found = usual_of_night(tmp_path, tonight, UsualOptions(10, 4))
    assert found.notes == () and found.usual[KEY].percentile == 50.0
    assert len(read) == len(set(read)) == opened
    assert not (nights / "set_aside").exists()


def test_a_season_and_last_nights_open_each_file_once(tmp_path, monkeypatch):
    fill(tmp_path, [*range(1, 25), *range(350, 380)])
    read = names_of_files_read(monkeypatch)
    tonight = a_night(TONIGHT, limit(110.5), limit(1.0, ("new", "B", "x")))
    found = usual_of_night(tmp_path, tonight, OPTIONS)
    assert found.usual[KEY].season and not found.usual["new", "B", "x"].season
    assert len(read) == len(set(read)) == 40  # twice 10 nights, looked for among twice as many


def test_options_come_from_the_settings():
    table = NightTable(archive="a", usual_nights=12, season_days=20)
    assert UsualOptions.of(table) == UsualOptions(12, 20)


def test_an_estimate_is_filed_and_found_again(night, growing, logistic):
    variables = """[variables.t2]
    hold = 6.0
    criteria = [{tolerance = 1.5}, {saturation_fraction = 0.5, name = "half / <b>"},
                {chance = {beyond = 2.0, probability = 0.3}}]"""
    starts = [f"2031-02-{day:02d}" for day in range(1, 12)]
    for number, start in enumerate(starts):
        one = type(night)(night.folder / start.replace("-", ""))
        rate = 0.05 + 0.002 * number
        one.write(growing(logistic(HOURS, rate=rate)), start=f"{start} 00:00")
    night.settings(variables, files="{start:%Y%m%d}/m{member:02d}.nc")
    rows = [float(row["horizon"] or "nan") for row in night.estimated() if row["start"] != "all"]
    archive = night.folder / "archive"
    for number, start in enumerate(starts):
        tonight = night_of(read_results(night.products, start))
        told = rows[3 * number : 3 * number + 3]
        assert [limit.horizon for limit in tonight.limits] == pytest.approx(told, rel=1e-3)
        found = usual_of_night(archive, tonight, OPTIONS)
        file_night(archive, tonight, {"settings": night.config.read_text()})
    assert {limit.measure.hold for limit in tonight.limits} == {6.0}
    for one in found.usual.values():
        # Errors grow faster from night to night, so tonight's limits are the shortest.
        assert (one.nights, one.standing, one.percentile) == (10, Standing.shorter, 0.0)
    assert found.notes == () and len(found.usual) == 3
