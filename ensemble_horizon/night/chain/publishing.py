"""The folder of a night: put together aside, moved in with one rename, mended after a kill.

Beside the folders of the nights, in the product folder, stand while a run is at work, or after it
was killed::

    .20310214T00.work/   attempt.json, and a folder for each stage that is done
    .20310214T00.old/    the folder of a night that is being replaced

Both are ours alone; nothing else that is hidden is touched.
"""

from __future__ import annotations

import contextlib
import logging
import re
import shutil
from collections.abc import Iterable, Mapping
from pathlib import Path

from ensemble_horizon.errors import ProductError, SettingsError
from ensemble_horizon.night.chain.state import (
    STAGE_FILE,
    STATE_FILE,
    NightState,
    read_state,
    write_sealed,
)
from ensemble_horizon.products.folder import written_files
from ensemble_horizon.products.writing import (
    discard,
    disk_errors,
    flush_to_disk,
    folder_written_whole,
    written_whole,
)

STAMP = r"\d{8}T\d{2}(?:\d{2}){0,2}"
_OURS = re.compile(rf"\.({STAMP})\.(work|old)")
_PART_OF_NIGHT = re.compile(rf"\.{STAMP}\.[0-9a-f]{{8}}\.part\.nc")
_PART_OF_COPY = re.compile(r"\.briefing\.[0-9a-f]{8}\.part\.(html|pdf)")
_WHOLE = "night"  # below the folder of work: all products together

log = logging.getLogger(__name__)


def work_folder(products: Path, stamp: str) -> Path:
    """Where the night of a stamp is worked on."""
    return products / f".{stamp}.work"


def mend(products: Path) -> list[str]:
    """Undo what a killed run left half done; return what was done, in sentences.

    A night that was being replaced and has no successor comes back; one that has a successor goes.
    The folders of finished stages stay, for the run that goes on with them.
    """
    told = []
    with disk_errors(products):
        for path in sorted(products.iterdir()):
            found = _OURS.fullmatch(path.name)
            if _PART_OF_COPY.fullmatch(path.name):
                discard(path)
            elif found is None or not path.is_dir() or path.is_symlink():
                continue
            elif found[2] == "work":
                _clear_parts(path)
            elif (products / found[1]).exists():
                shutil.rmtree(path)
            else:
                path.rename(products / found[1])
                told.append(f"The night {found[1]}, half replaced by a killed run, was put back.")
    for text in told:
        log.warning("%s", text)
    return told


def mend_archive(archive: Path) -> None:
    """Remove what a killed run was writing into the archive."""
    with disk_errors(archive):
        for path in archive.glob("*/.*.part.nc"):
            if _PART_OF_NIGHT.fullmatch(path.name):
                discard(path)


def publish(products: Path, stamp: str, state: NightState, places: Mapping[str, Path]) -> None:
    """Put the files of all stages together and move them in as the folder of the night.

    Parameters
    ----------
    places : mapping of stage to folder
        Where the files of each stage stand now.

    Raises
    ------
    ProductError
        if the folder cannot be written, or a folder that is no night stands in its place.
    """
    target, work = products / stamp, work_folder(products, stamp)
    refuse_strange(target)
    whole = work / _WHOLE
    with disk_errors(target):
        if whole.exists():
            shutil.rmtree(whole)
        with folder_written_whole(whole) as folder:
            for name, record in state.stages.items():
                for file in record.files:
                    _link(places[name] / file, folder / file)
            _keep_strange(target, folder)
            write_sealed(folder / STATE_FILE, state.as_dict())
            for path in written_files(folder):
                flush_to_disk(path)
        aside = products / f".{stamp}.old"
        if target.exists():
            target.rename(aside)
        try:
            whole.rename(target)
        except OSError:
            with contextlib.suppress(OSError):
                aside.rename(target)
            raise
        flush_to_disk(products)
        shutil.rmtree(aside, ignore_errors=True)


def refuse_file(key: str, folder: Path) -> None:
    """Refuse a folder of the settings where a file stands in its place, or in that of a parent.

    Raises
    ------
    SettingsError
        naming the key.
    """
    for place in (folder, *folder.absolute().parents):
        if place.exists():
            if place.is_dir():
                return
            raise SettingsError(
                key,
                expected=f"a folder, or a place for one, at {folder}",
                found=f"the file {place}",
                remedy="move that file away, or name another folder",
            )


def refuse_strange(target: Path) -> None:
    """Refuse to put a night where something stands that is none.

    Raises
    ------
    ProductError
    """
    if not target.exists() and not target.is_symlink():
        return
    ours = target.is_dir() and not target.is_symlink()
    if ours and ((target / STATE_FILE).is_file() or not any(target.iterdir())):
        return
    raise ProductError(
        str(target),
        expected="the folder of a night, or nothing",
        found=f"a folder without {STATE_FILE}" if target.is_dir() else "a file",
        remedy="move it away, or name another folder under products.folder",
    )


def copy_newest(products: Path, stamp: str, names: Iterable[str]) -> None:
    """Copies of the page and the sheet of the newest night, beside the folders of the nights."""
    nights = [
        path.name for path in products.iterdir() if re.fullmatch(STAMP, path.name) and path.is_dir()
    ]
    if not nights or stamp != max(nights):
        return
    for name in names:
        source, copy = products / stamp / name, products / name
        if not source.is_file() or (copy.is_file() and copy.read_bytes() == source.read_bytes()):
            continue
        with written_whole(copy) as neighbour:
            shutil.copyfile(source, neighbour)


def remove_work(products: Path, stamp: str) -> None:
    """Remove the folder of work of a night that is published, and those of nights before it."""
    with disk_errors(products):
        for path in list(products.iterdir()):
            found = _OURS.fullmatch(path.name)
            if found is not None and found[2] == "work" and found[1] <= stamp:
                shutil.rmtree(path, ignore_errors=True)


def remove_idle_work(products: Path, stamp: str) -> None:
    """Remove the folder of work of a night of which no stage is done: nothing is begun."""
    work = work_folder(products, stamp)
    with contextlib.suppress(OSError):
        if not any((path / STAGE_FILE).is_file() for path in work.iterdir()):
            shutil.rmtree(work)


def _clear_parts(work: Path) -> None:
    """Remove what a stage was writing when it was killed."""
    for path in work.iterdir():
        if path.name.startswith(".") and ".part" in path.name:
            # Workers of a killed run may still be writing their last figure there.
            shutil.rmtree(path, ignore_errors=True) if path.is_dir() else path.unlink()


def _keep_strange(target: Path, folder: Path) -> None:
    """Take over what somebody else has put into the folder of the night."""
    if not target.is_dir():
        return
    before = read_state(target)
    ours = {STATE_FILE, STAGE_FILE}
    for record in before.stages.values() if before is not None else ():
        ours |= set(record.files)
    for path in target.rglob("*"):
        name = path.relative_to(target)
        if name.as_posix() not in ours and path.is_file() and not (folder / name).exists():
            _link(path, folder / name)


def _link(source: Path, place: Path) -> None:
    """The same file under a second name, or a copy where the file system knows no such thing."""
    place.parent.mkdir(parents=True, exist_ok=True)
    try:
        place.hardlink_to(source)
    except OSError:
        shutil.copy2(source, place)
