"""The archive of sums of scores: one file a start, read, filed and set aside."""

from __future__ import annotations

import logging
from pathlib import Path

import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.products.nights import night_name, start_of_name
from ensemble_horizon.products.score_sums import (
    OtherFormatError,
    StartSums,
    sums_from,
    write_score_sums,
)
from ensemble_horizon.products.sealed import moved_aside

log = logging.getLogger(__name__)


class Shelf:
    """A folder of sums, one file a start.

    Attributes
    ----------
    notes : list of str
        What was set aside or cannot be read, in sentences.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.notes: list[str] = []

    def starts(self) -> list[np.datetime64]:
        """Starts that the names of the files tell; nothing is opened."""
        try:
            names = [path.name for path in self.folder.iterdir()]
        except FileNotFoundError:
            return []
        except OSError as error:
            self._note(f"The archive {self.folder} cannot be listed ({_words(error)}).")
            return []
        found = [start_of_name(name) for name in names]
        return sorted(start for start in found if start is not None)

    def path(self, start: np.datetime64) -> Path:
        """Where the sums of a start are filed."""
        return self.folder / night_name(start)

    def read(self, start: np.datetime64) -> StartSums | None:
        """The sums of a start; None, with a note, where they are broken or cannot be read."""
        path = self.path(start)
        try:
            content = path.read_bytes()
        except OSError as error:
            self._note(f"{path} of the archive cannot be read ({_words(error)}).")
            return None
        try:
            found = sums_from(content, str(path))
        except OtherFormatError as error:
            self._note(f"{path} of the archive is of another program version ({error.found}).")
            return None
        except InputError as error:
            self._set_aside(path, error.found)
            return None
        if found.start != start:
            self._set_aside(path, f"the start {found.label} under another name")
            return None
        return found

    def file(self, found: StartSums) -> Path:
        """Put the sums of a start into the archive, in place of older ones of the same start.

        Raises
        ------
        ProductError
            if they cannot be written.
        """
        place = self.path(found.start)
        for part in self.folder.glob(f".{place.stem}.*.part{place.suffix}"):
            part.unlink(missing_ok=True)  # of a run that was killed while it wrote
        return write_score_sums(place, found, {})

    def _set_aside(self, path: Path, reason: str) -> None:
        try:
            moved = moved_aside(path)
        except OSError as error:
            self._note(f"{path} of the archive is broken ({reason}), and cannot be moved aside "
                       f"({_words(error)}).")  # fmt: skip
            return
        self._note(f"{path} of the archive is broken ({reason}) and is now {moved}.")

    def _note(self, text: str) -> None:
        log.warning("%s", text)
        self.notes.append(text)


def _words(error: OSError) -> str:
    return (error.strerror or type(error).__name__).lower()
