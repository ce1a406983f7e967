"""kill -9 of a night, at moments and between any two changes on the disk, and the next run."""

from __future__ import annotations

import os
import random
import shutil
import signal
import time

import pytest
from small_night import MADE, STAGES, SmallNight, faults_of, hidden_in

KILLED = -signal.SIGKILL
PARTS = 6  # of the moments, so that test workers can share them


def cleared(night: SmallNight) -> None:
    for folder in (night.products, night.archive):
        shutil.rmtree(folder, ignore_errors=True)


def require_sound(night: SmallNight) -> None:
    """What a reader may see at any moment: whole nights, and copies of their pages."""
    assert faults_of(night.night()) == []
    for name in ("briefing.html", "briefing.pdf"):
        copy = night.products / name
        if copy.exists():
            assert copy.read_bytes().endswith((b"</html>\n", b"%%EOF\n"))


def require_whole(night: SmallNight, wanted: dict[str, bytes]) -> None:
    found = night.made()
    assert found.keys() == wanted.keys()
    assert [name for name in wanted if found[name] != wanted[name]] == []
    assert hidden_in(night.products, night.archive) == []
    require_sound(night)


@pytest.mark.slow
@pytest.mark.parametrize("part", range(PARTS))
def test_thirty_moments(small, forking, part):
    """The real command, killed with its whole group; moments spread over all that it does."""
    begun = time.monotonic()
    small.run("-q")
    duration = time.monotonic() - begun
    wanted = small.made()
    chance = random.Random(part)
    each = 30 // PARTS
    killed = 0
    for number in range(each):
        cleared(small)
        share = (part * each + number + chance.random()) / 30
        process = small.start("-q")
        time.sleep(share * duration)
        os.killpg(process.pid, signal.SIGKILL)
        killed += process.wait() == KILLED
        require_sound(small)
        forking.done(small)
        require_whole(small, wanted)
    assert killed, "the kills came too late"


@pytest.mark.slow
@pytest.mark.parametrize("again", [False, True], ids=["new", "replaced"])
def test_between_any_two_changes_on_the_disk(small, forking, again):
    """Before a drawn few of the changes, and more of those of the last third: the publishing.

    The next run comes at another time; all is as of one run, then or now. With ``again`` a night
    of other settings stands there, and is replaced.
    """
    now = MADE + 3600
    forking.done(small, "-q", made=now)
    late = small.made()
    cleared(small)
    _, changes = forking.run(small, "-q")
    early = small.made()
    assert early.keys() == late.keys()
    assert early != late
    before = _earlier(small, forking) if again else None
    if before is not None:
        _put_back(small, before)
        _, changes = forking.run(small, "-q")
        early = small.made()
        _put_back(small, before)
        forking.done(small, "-q", made=now)
        late = small.made()
    assert changes > 50
    chance = random.Random(again)
    last = changes - changes // 3
    moments = [*sorted(chance.sample(range(1, last), 6)), *range(last, changes + 1, 3)]
    outcomes = set()
    for moment in moments:
        cleared(small)
        if before is not None:
            _put_back(small, before)
        status, _ = forking.run(small, "-q", kill_at=moment)
        assert status == KILLED, moment
        require_sound(small)
        forking.done(small, "-q", made=now)
        found = small.made()
        wanted = early if found == early else late
        require_whole(small, wanted)
        outcomes.add(wanted is early)
        states = small.states()
        assert states.keys() == {*STAGES, "archive"}
        assert set(states.values()) <= {"done", "kept"}
    assert True in outcomes, "nothing was ever gone on with"


def _earlier(night: SmallNight, forking):
    """A copy of products and archive of the same night by other settings."""
    cleared(night)
    text = night.config.read_text(encoding="utf-8")
    night.config.write_text(text.replace("tolerance = 1.5", "tolerance = 1.2"), encoding="utf-8")
    forking.done(night, "-q")
    night.config.write_text(text, encoding="utf-8")
    copy = night.folder / "earlier"
    for folder in (night.products, night.archive):
        shutil.copytree(folder, copy / folder.name)
    return copy


def _put_back(night: SmallNight, copy) -> None:
    cleared(night)
    for folder in (night.products, night.archive):
        shutil.copytree(copy / folder.name, folder)
