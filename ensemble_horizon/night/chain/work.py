"""What all stages of a night share: settings, the start that was chosen, folders, what is done."""

from __future__ import annotations

import contextlib
import errno
import os
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from typing import Any

from ensemble_horizon.errors import EnsembleHorizonError, InputError, SettingsError
from ensemble_horizon.night.chain.fingerprint import part_of
from ensemble_horizon.night.chain.members import Tonight
from ensemble_horizon.night.chain.state import StageRecord
from ensemble_horizon.night.estimate import Progress, silent
from ensemble_horizon.settings import Settings
from ensemble_horizon.settings.tables import NightTable

_WRITING = (errno.ENOSPC, errno.EDQUOT, errno.EROFS)  # nothing that is only read meets these


@dataclass
class Work:
    """A night under way.

    Parameters
    ----------
    settings : Settings
        With ``runs.starts`` set to the start of tonight.
    tonight : Tonight
    made : callable
        The time of making of all that is made in this attempt.
    records, places : dict
        Of the stages that are done: what they found, and where their files stand.
    """

    settings: Settings
    tonight: Tonight
    made: Callable[[], datetime]
    progress: Progress = silent
    records: dict[str, StageRecord] = field(default_factory=dict)
    places: dict[str, Path] = field(default_factory=dict)

    @property
    def table(self) -> NightTable:
        """The table ``[night]``."""
        return night_table(self.settings)

    @property
    def archive(self) -> Path:
        """The folder of the archive."""
        return self.settings.path(self.table.archive)

    def found(self, stage: str) -> dict[str, Any]:
        """What a stage found; nothing where it was not reached or skipped."""
        record = self.records.get(stage)
        return {} if record is None else dict(record.found)

    def part(self, *keys: str) -> dict[str, Any]:
        """The part of the settings that some keys name."""
        return part_of(self.settings.model_dump(mode="json"), keys)


@contextlib.contextmanager
def reading_errors(products: Path) -> Iterator[None]:
    """Tell what the disk refuses to read apart from what it refuses to write below ``products``.

    Raises
    ------
    InputError
        naming the file that could not be read.
    EnsembleHorizonError
        where the system refused something that is no file.
    """
    try:
        yield
    except OSError as error:
        file = error.filename if isinstance(error.filename, str | os.PathLike) else None
        inside = file is not None and Path(file).absolute().is_relative_to(products.absolute())
        if error.errno in _WRITING or inside:
            raise
        words = error.strerror or type(error).__name__
        if file is None:
            raise EnsembleHorizonError(
                "the system",
                expected="what a running program needs",
                found=f"that it was refused ({words.lower()})",
                remedy="look at its limits (memory, open files) and run again; it goes on where "
                "it was",
            ) from error
        raise InputError(
            str(file),
            expected="a file that can be read",
            found=words.lower(),
            remedy="look at the file, its permissions and its disk, and run again",
        ) from error


def night_table(settings: Settings) -> NightTable:
    """The table ``[night]`` of the settings.

    Raises
    ------
    SettingsError
        if there is none.
    """
    if settings.night is None:
        raise SettingsError(
            "night.archive",
            expected="a table [night] that names the folder of the archive",
            found="no such table",
            remedy='add [night] with archive = "../archive"',
        )
    return settings.night


def settings_of_night(settings: Settings, start: str) -> Settings:
    """The settings for one start alone, whose maps are its own and stand for no others."""
    products = settings.products
    if products.maps == "pooled":
        products = products.model_copy(update={"maps": "each"})
    runs = settings.runs.model_copy(update={"starts": (start,)})
    return settings.model_copy(update={"runs": runs, "products": products})


def settings_of_all(settings: Settings) -> Settings:
    """The settings for all starts there are."""
    runs = settings.runs.model_copy(update={"starts": "all"})
    return settings.model_copy(update={"runs": runs})
