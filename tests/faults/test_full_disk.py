"""A small disk for the products, and for the archive, that is full at each stage in turn."""

from __future__ import annotations

import contextlib
import json
import os
import shutil
import subprocess
from pathlib import Path

import pytest
from small_night import STAGES, SmallNight, faults_of, hidden_in

PAGE = 4096
SIZE = 4 * 2**20


@contextlib.contextmanager
def disk(folder: Path):
    """A disk of its own at ``folder``; the test is skipped where none may be mounted."""
    folder.mkdir(parents=True)
    if os.geteuid() != 0:
        pytest.skip("only root may mount a small disk")
    mount = ["mount", "-t", "tmpfs", "-o", f"size={SIZE}", "tmpfs", str(folder)]
    done = subprocess.run(mount, capture_output=True, check=False, text=True)
    if done.returncode:
        pytest.skip(f"a small disk may not be mounted here: {done.stderr.strip()}")
    try:
        yield
    finally:
        # Lazily, because HDF5 keeps a file open that it could not finish.
        subprocess.run(["umount", "-l", str(folder)], check=True)


def leave_room(folder: Path, free: int) -> Path:
    """Fill the disk of a folder but for so many bytes."""
    filler = folder / "filler"
    there = os.statvfs(folder)
    filler.write_bytes(bytes(there.f_bavail * there.f_frsize - free))
    return filler


def pages(path: Path) -> int:
    """Bytes that a file takes on the disk."""
    return -(-path.stat().st_size // PAGE) * PAGE


def sizes(night: SmallNight) -> dict[str, int]:
    """What each stage took on the disk of the products."""
    folder = night.night()
    state = json.loads((folder / "night.json").read_text(encoding="utf-8"))
    found = {
        name: PAGE + sum(pages(folder / file) for file in stage["files"])
        for name, stage in state["stages"].items()
    }
    copies = sum(pages(folder / name) for name in ("briefing.html", "briefing.pdf"))
    return {**found, "published": pages(folder / "night.json") + copies}


@pytest.fixture
def small(tmp_path: Path):
    """Products and archive on disks of their own, which can hold them."""
    night = SmallNight(tmp_path)
    night.products, night.archive = tmp_path / "disk" / "out", tmp_path / "shelf" / "archive"
    night.write().settings(
        products='folder = "disk/out"\nmaps = "each"\nfigures = true',
        night='archive = "shelf/archive"',
    )
    with disk(tmp_path / "disk"), disk(tmp_path / "shelf"):
        yield night


def require_told(night: SmallNight, log: str, folder: Path) -> None:
    """One message that names the full disk and what helps; nothing half-written."""
    messages = [line for line in log.splitlines() if line.startswith("ensemble-horizon: ")]
    assert len(messages) == 1, log
    assert messages[0].startswith(f"ensemble-horizon: {folder}"), log
    assert f"the disk of {folder.parent}" in messages[0]
    assert "is full" in messages[0]
    assert "Next: free some space there" in messages[0]
    assert ".work" not in messages[0]
    assert ".part" not in messages[0]
    assert night.report()["error"]["kind"] == "ProductError"
    assert night.report()["exit_status"] == 2
    assert faults_of(night.night()) == []
    left = hidden_in(night.products, night.archive)
    assert [name for name in left if ".part" in name or ".old" in name] == []


@pytest.mark.slow
def test_the_disk_of_the_products_is_full_at_each_stage(small, forking):
    forking.done(small, "-q")
    wanted, needed = small.made(), sizes(small)
    failed = []
    before = PAGE  # the lock
    for name, size in needed.items():
        for folder in (small.products, small.archive):
            shutil.rmtree(folder)
        filler = leave_room(small.products.parent, before + size // 2 // PAGE * PAGE)
        log = forking.done(small, "-q", status=2)
        require_told(small, log, small.products)
        states = small.states()
        failed += [stage for stage in states if states[stage] == "failed"] or [name]
        filler.unlink()
        forking.done(small, "-q")
        assert small.made() == wanted
        assert hidden_in(small.products, small.archive) == []
        before += size
    assert failed == [*STAGES, "published"]


@pytest.mark.slow
def test_no_room_at_all_and_a_night_stands_there(small, forking):
    """The night of before stays as it is."""
    forking.done(small, "-q")
    before = small.made()
    text = small.config.read_text(encoding="utf-8")
    small.config.write_text(text.replace('"Night"', '"Another"'), encoding="utf-8")
    filler = leave_room(small.products.parent, 0)
    require_told(small, forking.done(small, "-q", status=2), small.products)
    assert small.report()["published"] is (small.report()["start"] is not None)
    filler.unlink()
    assert {k: v for k, v in small.made().items() if ".work" not in k} == before
    forking.done(small, "-q")
    assert b"Another" in (small.night() / "briefing.html").read_bytes()
    assert hidden_in(small.products, small.archive) == []


@pytest.mark.slow
@pytest.mark.parametrize("stage", ["lock", "verify", "archive"])
def test_the_disk_of_the_archive_is_full(small, forking, stage):
    forking.done(small, "-q")
    wanted = small.made()
    scores = sum(pages(path) for path in (small.archive / "scores").iterdir())
    for folder in (small.products, small.archive):
        shutil.rmtree(folder)
    free = {"lock": 0, "verify": 2 * PAGE, "archive": PAGE + scores + PAGE}
    filler = leave_room(small.archive.parent, free[stage])
    log = forking.done(small, "-q", status=2)
    require_told(small, log, small.archive)
    states = small.states()
    failed = [name for name in states if states[name] == "failed"]
    assert failed == ([] if stage == "lock" else [stage])
    assert small.report()["published"] is (stage == "archive")
    filler.unlink()
    forking.done(small, "-q")
    assert small.made() == wanted
    assert hidden_in(small.products, small.archive) == []


@pytest.mark.slow
def test_no_room_for_the_report(small, forking):
    """The night is done, but a program that waits for the report must not take it for done."""
    small.report_file = small.folder / "shelf" / "report.json"
    forking.done(small, "-q")
    small.report_file.unlink()
    leave_room(small.archive.parent, 0)
    text = small.config.read_text(encoding="utf-8")
    small.config.write_text(text.replace("shelf/archive", "archive"), encoding="utf-8")
    log = forking.done(small, "-q", status=2)
    assert f"ensemble-horizon: {small.report_file}: " in log
    assert "is full" in log
    assert list(small.report_file.parent.glob(".report*")) == []
    assert faults_of(small.night()) == []
