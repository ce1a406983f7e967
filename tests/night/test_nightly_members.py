"""Which start the nightly chain takes, and how it waits for late members, by a clock of its own."""

from __future__ import annotations

import itertools
import logging
import time
from collections.abc import Callable

import pytest
from conftest import growing, write_member
from nightly_archive import Nightly

from ensemble_horizon.errors import InputError, SettingsError
from ensemble_horizon.night.chain.members import Clock, choose_start
from ensemble_horizon.settings import read_settings


class FakeClock:
    """A clock that only sleeping moves; things happen at their times."""

    def __init__(self, happenings: dict[float, Callable[[], object]] | None = None) -> None:
        self.time = 1000.0
        self.waiting = sorted((happenings or {}).items())

    def now(self) -> float:
        return self.time

    def sleep(self, seconds: float) -> None:
        assert seconds > 0
        self.time += seconds
        while self.waiting and self.waiting[0][0] <= self.time - 1000.0:
            self.waiting.pop(0)[1]()

    @property
    def passed(self) -> float:
        return self.time - 1000.0


@pytest.fixture
def nightly(tmp_path) -> Nightly:
    made = Nightly(tmp_path)
    made.write(12, 13)
    made.settings()
    return made


@pytest.fixture
def told(monkeypatch, caplog):
    """The log in full, also where a command has begun or silenced it before."""
    monkeypatch.setattr(logging.getLogger("ensemble_horizon"), "propagate", True)
    with caplog.at_level(logging.WARNING, "ensemble_horizon"):
        yield caplog


def chosen(nightly, wanted=None, minutes=0.0, clock=None, waited=lambda stamp: False):
    clock = clock or FakeClock()
    return choose_start(
        read_settings(nightly.config), wanted, minutes, Clock(clock.now, clock.sleep), waited
    )


def test_the_newest_complete_start(nightly):
    found = chosen(nightly)
    assert (found.start, found.stamp, found.troubles) == ("2031-02-13T00:00", "20310213T00", ())


def test_an_incomplete_start_is_passed_over_and_named(nightly):
    nightly.write_one(14, 0)
    nightly.write_one(14, 1)
    found = chosen(nightly)
    assert found.start == "2031-02-13T00:00"
    (text,) = found.troubles
    assert "2031-02-14T00:00 was passed over, as members 2 and 3 had not come whole" in text


def test_all_starts_that_are_passed_over_are_named(nightly, told):
    nightly.settings(runs="members = 4\nminimum_members = 2")
    for day, members in ((14, (0,)), (15, (0, 1, 2)), (16, (2, 3))):
        for number in members:
            nightly.write_one(day, number)
    found = chosen(nightly)
    assert found.start == "2031-02-13T00:00"
    assert found.troubles == (
        "The start 2031-02-16T00:00 was passed over, as members 0 and 1 had not come whole.",
        "The start 2031-02-15T00:00 was passed over, as member 3 had not come whole.",
        "The start 2031-02-14T00:00 was passed over, as members 1, 2 and 3 had not come whole; "
        "this is the newest complete start.",
    )
    names = ", ".join(f"2031-02-{day}T00:00" for day in (16, 15, 14))
    assert f"start {names} passed over for 2031-02-13T00:00" in told.text


def test_a_named_start_is_taken_with_what_is_there(nightly):
    nightly.write_one(14, 0)
    nightly.write_one(14, 1)
    found = chosen(nightly, "2031-02-14")
    assert found.start == "2031-02-14T00:00"
    assert [file.parts.member for file in found.look.files] == [0, 1]
    assert found.troubles == (
        "Members 2 and 3 had not come whole; the night was made with what was there.",
    )


def test_without_any_complete_start_the_newest_is_taken(tmp_path):
    nightly = Nightly(tmp_path)
    nightly.write(12, 13, members=3)
    nightly.settings(runs="members = 4\nminimum_members = 2")
    found = chosen(nightly)
    assert found.start == "2031-02-13T00:00"
    assert found.look.late == (3,)


def test_members_are_expected_as_at_the_last_start_of_the_same_hour(nightly):
    """A noon run of fewer members is complete if the noon run before had no more."""
    nightly.write(13, 14, members=3, hour=12)
    assert chosen(nightly).start == "2031-02-14T12:00"
    nightly.member(14, 2, 12).unlink()
    assert chosen(nightly).start == "2031-02-13T00:00"[:11] + "12:00"


def test_a_late_member_is_waited_for(nightly):
    for number in range(3):
        nightly.write_one(14, number)
    clock = FakeClock({600.0: lambda: nightly.write_one(14, 3)})
    found = chosen(nightly, minutes=30, clock=clock)
    assert found.start == "2031-02-14T00:00"
    assert found.troubles == ()
    assert len(found.look.files) == 4
    assert 600 < clock.passed < 700


def test_the_deadline_ends_the_waiting(nightly, told):
    for number in range(3):
        nightly.write_one(14, number)
    clock = FakeClock({3600.0: lambda: nightly.write_one(14, 3)})
    found = chosen(nightly, minutes=30, clock=clock)
    assert clock.passed == pytest.approx(1800, abs=1)
    assert len(found.look.files) == 3
    # The page may be made again without waiting, and so does not tell how long it was waited.
    assert found.troubles == (
        "Member 3 had not come whole; the night was made with what was there.",
    )
    assert "start 2031-02-14T00:00: waited for 30 min" in told.text


def test_the_date_may_be_set_back_while_it_waits(nightly, monkeypatch):
    """The date falls by an hour every time it is looked at; the deadline does not move."""
    assert Clock().now is time.monotonic
    dates = itertools.count(2e9, -3600.0)
    monkeypatch.setattr("time.time", lambda: next(dates))
    nightly.write_one(14, 0)
    clock = FakeClock()
    chosen(nightly, minutes=10, clock=clock)
    assert clock.passed == pytest.approx(600, abs=1)


def test_a_file_that_grows_is_not_yet_there(nightly):
    """The fourth member has a whole header from the first; only that it changes gives it away."""
    nightly.write(14)
    path = nightly.member(14, 3)
    whole = path.read_bytes()

    def growing(*seconds):
        return FakeClock({float(at): lambda at=at: path.write_bytes(whole + b"\0" * at)
                          for at in seconds})  # fmt: skip

    clock = growing(1, 3, 8)
    found = chosen(nightly, minutes=60, clock=clock)
    assert found.troubles == ()
    assert clock.passed > 8

    found = chosen(nightly, minutes=2, clock=growing(*range(1, 200)))
    assert [file.parts.member for file in found.look.files] == [0, 1, 2]
    assert "Member 3 had not come whole" in found.troubles[0]


def test_a_file_that_cannot_be_read_yet_is_not_yet_there(nightly):
    nightly.write(14)
    path = nightly.member(14, 3)
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) // 3])
    assert chosen(nightly, "2031-02-14").look.late == (3,)
    clock = FakeClock({300.0: lambda: path.write_bytes(whole)})
    found = chosen(nightly, minutes=60, clock=clock)
    assert found.look.complete
    assert 300 < clock.passed < 400


def test_the_first_file_of_a_named_start_is_waited_for(nightly):
    clock = FakeClock({900.0: lambda: nightly.write(14)})
    found = chosen(nightly, "2031-02-14", minutes=60, clock=clock)
    assert found.start == "2031-02-14T00:00"
    with pytest.raises(InputError, match=r"2031-02-15.*newest starts are 2031-02-14T00:00"):
        chosen(nightly, "2031-02-15", minutes=60)


def test_an_empty_archive_is_waited_for(tmp_path):
    nightly = Nightly(tmp_path)
    nightly.settings()
    with pytest.raises(InputError, match="at least one file whose name fits"):
        chosen(nightly)
    clock = FakeClock({900.0: lambda: nightly.write(14)})
    assert chosen(nightly, minutes=60, clock=clock).start == "2031-02-14T00:00"


def test_a_night_that_is_resumed_does_not_wait_again(nightly):
    nightly.write_one(14, 0)
    clock = FakeClock()
    found = chosen(nightly, minutes=60, clock=clock, waited=lambda stamp: stamp == "20310214T00")
    assert found.start == "2031-02-14T00:00"
    assert clock.passed == 0


def test_starts_that_no_name_tells_are_found_in_the_headers(tmp_path):
    nightly = Nightly(tmp_path)
    text = nightly.settings().read_text(encoding="utf-8")
    nightly.config.write_text(text.replace("{start:%Y%m%d%H}/m{member:02d}.nc", "*.nc"))
    for day, members in ((12, 4), (13, 4), (14, 3)):
        for number in range(members):
            fields = {"t2": growing(members=4, seed=day)[number]}
            path, start = tmp_path / f"{day}_{number}.nc", f"2031-02-{day} 00:00"
            write_member(path, fields, start=start, realization=number)
    found = chosen(nightly)
    assert found.start == "2031-02-13T00:00"
    assert [file.path[-7:] for file in found.look.files] == [f"13_{n}.nc" for n in range(4)]
    assert chosen(nightly, "2031-02-14").look.late == (3,)
    assert chosen(nightly, minutes=5).look.late == (3,)


@pytest.mark.parametrize("text", ["yesterday", "2031-02", "14.02.2031", "2031-02-14T00:00:00.5"])
def test_a_start_that_is_no_date_is_refused(nightly, text):
    with pytest.raises(SettingsError, match="--start"):
        chosen(nightly, text)


def test_a_start_that_stands_for_several_is_refused(nightly):
    nightly.write(13, hour=12)
    with pytest.raises(SettingsError, match="as 2 begin"):
        chosen(nightly, "2031-02-13")
