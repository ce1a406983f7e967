"""Files that appear whole or not at all.

A product is written to a neighbour of its target, in the same folder and therefore on the same file
system, flushed to the disk and then renamed: readers see the old file or the new one, never a part.
"""

from __future__ import annotations

import contextlib
import errno
import os
import secrets
import shutil
from collections.abc import Iterator
from pathlib import Path

from ensemble_horizon.errors import ProductError

_ROOM_NEEDED = 65_536


@contextlib.contextmanager
def written_whole(target: str | os.PathLike[str]) -> Iterator[Path]:
    """Give a temporary path beside ``target``; move it into place if the block succeeds.

    Parameters
    ----------
    target : path
        Where the file shall stand. Its folder is made if need be.

    Yields
    ------
    pathlib.Path
        The neighbour to write to; it ends in the same suffix and its name begins with a dot.

    Raises
    ------
    ProductError
        If the folder cannot be made or written, the disk is full, or the file system is read-only.
        Any other exception passes through; the neighbour is removed in every case.

    Examples
    --------
    >>> import tempfile
    >>> folder = Path(tempfile.mkdtemp())
    >>> with written_whole(folder / "note.txt") as neighbour:
    ...     _ = neighbour.write_text("whole")
    >>> [path.name for path in folder.iterdir()]
    ['note.txt']
    """
    place = Path(target)
    neighbour = place.with_name(f".{place.stem}.{secrets.token_hex(4)}.part{place.suffix}")
    try:
        with disk_errors(place):
            place.parent.mkdir(parents=True, exist_ok=True)
            refuse_folder(place)
            yield neighbour
            flush_to_disk(neighbour)
            neighbour.replace(place)
            flush_to_disk(place.parent)
    finally:
        discard(neighbour)


@contextlib.contextmanager
def folder_written_whole(target: str | os.PathLike[str]) -> Iterator[Path]:
    """Give a hidden folder beside ``target``; move it into place if the block succeeds.

    Parameters
    ----------
    target : path
        Where the folder shall stand; nothing may stand there yet.

    Raises
    ------
    ProductError
        If it cannot be made or written. The hidden folder is removed in every case.

    Examples
    --------
    >>> import tempfile
    >>> folder = Path(tempfile.mkdtemp())
    >>> with folder_written_whole(folder / "night") as neighbour:
    ...     _ = (neighbour / "note.txt").write_text("whole")
    >>> [path.name for path in (folder / "night").iterdir()]
    ['note.txt']
    """
    place = Path(target)
    neighbour = place.with_name(f".{place.name}.{secrets.token_hex(4)}.part")
    try:
        with disk_errors(place):
            neighbour.mkdir(parents=True)
            yield neighbour
            for path in neighbour.iterdir():
                flush_to_disk(path)
            neighbour.rename(place)
            flush_to_disk(place.parent)
    finally:
        shutil.rmtree(neighbour, ignore_errors=True)


@contextlib.contextmanager
def disk_errors(target: Path) -> Iterator[None]:
    """Turn what the disk refuses inside the block into a `ProductError` that names ``target``."""
    try:
        yield
    except ProductError:
        raise
    except OSError as error:
        raise product_error(target, error) from error
    except RuntimeError as error:
        # The HDF5 library reports a failed write as a bare RuntimeError.
        if "HDF error" not in str(error) and "NetCDF" not in str(error):
            raise
        raise product_error(target, error) from error


def product_error(target: Path, error: Exception) -> ProductError:
    """Say in plain words why ``target`` could not be written, and what helps."""
    code = error.errno if isinstance(error, OSError) else None
    folder = nearest_folder(target)
    # The HDF5 library reports a file that it has no room to create as one it has no permission for.
    doubtful = code is None or (code == errno.EACCES and os.access(folder, os.W_OK | os.X_OK))
    if code in (errno.ENOSPC, errno.EDQUOT) or (doubtful and not _has_room(folder)):
        expected, found = "room on the disk for the file", f"the disk of {folder} is full"
        remedy = "free some space there, or name a folder on another disk"
    elif code == errno.EROFS:
        expected, found = "a folder that can be written", f"{folder} is on a read-only file system"
        remedy = "name a folder on a disk that can be written"
    elif code in (errno.EACCES, errno.EPERM):
        expected, found = "a folder that can be written", f"no permission to write in {folder}"
        remedy = "ask for write permission there, or name another folder"
    elif code in (errno.ENOTDIR, errno.EEXIST):
        expected, found = "a folder", f"a file stands in the way ({_obstacle(target)})"
        remedy = "move that file away, or name another folder"
    elif code == errno.EISDIR:
        expected, found = "a file name", "a folder of that name"
        remedy = "move that folder away, or name another file"
    elif code == errno.ENOENT:
        expected, found = "a place that can be written", f"{folder}, where nothing can be made"
        remedy = "name another folder"
    else:
        expected, found = "a place that can be written", _words(error)
        remedy = "look at the disk and the folder, or name another folder"
    return ProductError(str(target), expected=expected, found=found, remedy=remedy)


def refuse_folder(place: Path) -> None:
    """Raise if a folder stands where a file shall go: a rename would fail only at the very end."""
    if place.is_dir():
        raise IsADirectoryError(errno.EISDIR, os.strerror(errno.EISDIR), str(place))


def flush_to_disk(path: Path) -> None:
    """Ask the system to put ``path`` (file or folder) on the disk now."""
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    except OSError as error:
        # Some network file systems know no fsync of folders; the rename itself has succeeded.
        if not (path.is_dir() and error.errno in (errno.EINVAL, errno.ENOTSUP)):
            raise
    finally:
        os.close(descriptor)


def discard(path: Path) -> None:
    """Remove a file and give its room back at once.

    A library that failed to write a file may hold it open until the program ends, and a full disk
    would stay full of a file that nobody can see; so it is emptied before it is unlinked.
    """
    with contextlib.suppress(OSError):
        os.truncate(path, 0)
    with contextlib.suppress(OSError):
        path.unlink(missing_ok=True)


def nearest_folder(target: Path) -> Path:
    """Return the closest folder above ``target`` that exists."""
    for parent in target.absolute().parents:
        if parent.is_dir():
            return parent
    return Path.cwd()


def _has_room(folder: Path) -> bool:
    try:
        usage = shutil.disk_usage(folder)
    except OSError:
        return True
    return usage.free >= _ROOM_NEEDED or usage.total == 0  # no disk at all, such as /proc


def _obstacle(target: Path) -> Path:
    """The file that stands where a folder is wanted, nearest to the root."""
    found = [path for path in (target, *target.absolute().parents) if path.is_file()]
    return found[-1] if found else target


def _words(error: Exception) -> str:
    """What went wrong, without error numbers and names of temporary files."""
    text = error.strerror if isinstance(error, OSError) else str(error)
    return text or type(error).__name__
