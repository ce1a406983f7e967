"""Files of an archive: sealed with a digest of their bytes, and set aside where they are broken."""

from __future__ import annotations

import hashlib
import os
from pathlib import Path

from ensemble_horizon.errors import InputError

SET_ASIDE = "set_aside"
_SEAL = b"\nsha256 "
_LENGTH = len(_SEAL) + 64 + 1


def seal(path: Path) -> None:
    """Put a line with the SHA-256 digest of a file behind it; NetCDF libraries pass over it."""
    line = _line(path.read_bytes())
    with path.open("ab") as tail:
        tail.write(line)


def sealed_bytes(path: str | os.PathLike[str]) -> bytes:
    """All bytes of a file, its seal included.

    Raises
    ------
    InputError
        If it cannot be read.
    """
    try:
        return Path(path).read_bytes()
    except OSError as error:
        raise InputError(
            str(path),
            expected="a file that can be read",
            found=error.strerror or type(error).__name__,
            remedy="give permission to read it, or name another file",
        ) from error


def unsealed(content: bytes) -> bytes | None:
    """The bytes before the seal; None where there is no seal, or it is that of other bytes.

    To be asked before a library opens the bytes: HDF5 may crash on some that have changed.

    Examples
    --------
    >>> import tempfile
    >>> path = Path(tempfile.mkdtemp()) / "sums.nc"
    >>> _ = path.write_bytes(b"sums")
    >>> seal(path)
    >>> unsealed(path.read_bytes()), unsealed(path.read_bytes().replace(b"sums", b"sins"))
    (b'sums', None)
    """
    body, line = content[:-_LENGTH], content[-_LENGTH:]
    return body if line == _line(body) else None


def moved_aside(path: Path) -> Path:
    """Move a file to ``set_aside`` beside it, under a name that is free there.

    Raises
    ------
    OSError
        If it cannot be moved.
    """
    folder = path.parent / SET_ASIDE
    folder.mkdir(exist_ok=True)
    number = 1
    while True:
        target = folder / (path.name if number == 1 else f"{path.stem}-{number}{path.suffix}")
        try:
            # Takes the name only if it is free, which a rename does not.
            target.touch(exist_ok=False)
            break
        except FileExistsError:
            number += 1
    try:
        path.replace(target)
    except OSError:
        target.unlink()
        raise
    return target


def _line(body: bytes) -> bytes:
    return _SEAL + hashlib.sha256(body).hexdigest().encode() + b"\n"
