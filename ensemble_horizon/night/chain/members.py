"""Which start tonight's is, and waiting for its members."""

from __future__ import annotations

import logging
import re
import time
from collections.abc import Callable
from dataclasses import dataclass

from ensemble_horizon.errors import InputError, SettingsError
from ensemble_horizon.night.chain.looks import Look, Starts
from ensemble_horizon.settings import Settings

LOOK_BACK = 4  # starts looked at in search of a complete one
_PAUSES = (2.0, 5.0, 15.0, 30.0)  # seconds between two looks; the last one stays
_START = re.compile(r"\d{4}-\d\d-\d\d([T ]\d\d(:\d\d(:\d\d)?)?)?Z?")

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Clock:
    """A clock that only ever goes forward, whatever is done to the date, and how to wait by it."""

    now: Callable[[], float] = time.monotonic
    sleep: Callable[[float], None] = time.sleep


@dataclass(frozen=True)
class Tonight:
    """The start that was chosen, and what a reader should know of the choice, in sentences."""

    look: Look
    troubles: tuple[str, ...] = ()

    @property
    def start(self) -> str:
        """Its label in ISO 8601."""
        return self.look.start

    @property
    def stamp(self) -> str:
        """The start as the name of a folder."""
        return stamp_of(self.start)


def stamp_of(start: str) -> str:
    """The label of a start as the name of a folder.

    Examples
    --------
    >>> stamp_of("2031-02-14T00:00"), stamp_of("2031-02-14T06:30")
    ('20310214T00', '20310214T0630')
    """
    date, _, hour = start.partition("T")
    digits = hour.replace(":", "")
    return f"{date.replace('-', '')}T{digits[:2] if digits[2:] in ('', '00') else digits}"


def asked_for(start: str | None) -> str | None:
    """A start that was asked for, as labels are written; None where it is no date.

    Examples
    --------
    >>> asked_for("2031-02-14 06Z"), asked_for("2031-02-14"), asked_for("tonight")
    ('2031-02-14T06:00', '2031-02-14', None)
    """
    if start is None or not _START.fullmatch(start):
        return None
    text = start.replace(" ", "T").removesuffix("Z").removesuffix("T")
    return f"{text}:00" if len(text) == len("2031-02-14T06") else text


def choose_start(
    settings: Settings,
    wanted: str | None = None,
    minutes: float = 0.0,
    clock: Clock | None = None,
    waited: Callable[[str], bool] = lambda stamp: False,
) -> Tonight:
    """The newest complete start, or the one named; waits for late members if asked.

    A start is complete when no member, lead or file of it is missing, unreadable or still growing.
    Without waiting, an incomplete newest start is passed over for the newest complete one of the
    last few. Where there is none, and where a start is named or was waited for, the night goes on
    with what is there.

    Parameters
    ----------
    settings : Settings
    wanted : str, optional
        A start in ISO 8601, or its beginning.
    minutes : float
        How long to wait.
    clock : Clock, optional
    waited : callable
        Whether the waiting for the start of a stamp is over, as in a night that is resumed.

    Raises
    ------
    InputError
        if there is no file of the start, or none that can be read.
    SettingsError
        if ``wanted`` is no start, or stands for several.
    """
    if wanted is not None and not _START.fullmatch(wanted):
        raise SettingsError(
            "--start",
            expected="a start in ISO 8601, for instance 2031-02-14T00",
            found=repr(wanted),
            remedy="correct it, or leave it out for the newest complete start",
        )
    starts = Starts(settings, wanted)
    if minutes > 0:
        return _wait(starts, minutes, clock or Clock(), waited)
    return _now(starts)


def _now(starts: Starts) -> Tonight:
    labels = starts.labels()
    if not labels:
        raise _no_files(starts)
    looks: list[Look] = []
    for label in labels[:LOOK_BACK]:
        look = starts.look(label)
        if look.complete:
            return _passing_over(looks, look)
        log.warning("start %s: %s not there, or not whole", look.start, look.lacking())
        looks.append(look)
    return _with_what_is_there(looks[0])


def _wait(starts: Starts, minutes: float, clock: Clock, waited: Callable[[str], bool]) -> Tonight:
    deadline = clock.now() + 60 * minutes
    pauses, pause = iter(_PAUSES), 0.0
    before: Look | None = None
    while True:
        look = _newest(starts, before)
        if look is not None and look.complete and before is not None:
            settled = look.marks == before.marks
            if settled:
                return Tonight(look)
        left = deadline - clock.now()
        if look is not None and (left <= 0 or waited(stamp_of(look.start))):
            if left <= 0 and not look.complete:
                log.warning("start %s: waited for %g min", look.start, minutes)
            return _with_what_is_there(look)
        if left <= 0:
            raise _no_files(starts)
        _tell(starts, before, look)
        before = look
        pause = next(pauses, pause)
        clock.sleep(min(pause, max(left, 0.01)))


def _newest(starts: Starts, before: Look | None) -> Look | None:
    """A look at the newest start; None where there is no file yet."""
    try:
        labels = starts.labels()
    except InputError as error:
        log.debug("%s", error)
        return None
    return starts.look(labels[0], before) if labels else None


def _tell(starts: Starts, before: Look | None, look: Look | None) -> None:
    if look is None:
        log.info("waiting for the first file of %s", starts.wanted or "the runs")
    elif before is None or look.lacking() != before.lacking():
        what = "files that may still grow" if look.complete else look.lacking()
        log.info("waiting at start %s for %s", look.start, what)


def _passing_over(passed: list[Look], look: Look) -> Tonight:
    if not passed:
        return Tonight(look)
    log.warning(
        "start %s passed over for %s; to go on with what is there, give --start or --wait",
        ", ".join(other.start for other in passed), look.start,
    )  # fmt: skip
    texts = [
        f"The start {other.start} was passed over, as {other.lacking()} had not come whole."
        for other in passed
    ]
    texts[-1] = f"{texts[-1].removesuffix('.')}; this is the newest complete start."
    return Tonight(look, tuple(texts))


def _with_what_is_there(look: Look) -> Tonight:
    if look.report is None:
        raise InputError(
            f"start {look.start}",
            expected="files that can be read",
            found=f"{len(look.marks)}, none of them whole",
            remedy="wait for the files with --wait, or name another start with --start",
        )
    if look.complete:
        return Tonight(look)
    text = f"{look.lacking()} had not come whole; the night was made with what was there."
    text = text[0].upper() + text[1:]
    log.warning("start %s: %s", look.start, text)
    return Tonight(look, (text,))


def _no_files(starts: Starts) -> InputError:
    try:
        known = starts.known()
    except InputError as error:
        return error
    return InputError(
        f"start {starts.wanted}",
        expected="files of it",
        found=f"none; the newest starts are {', '.join(known[:3])}",
        remedy="check the date, or wait for the files with --wait",
    )
