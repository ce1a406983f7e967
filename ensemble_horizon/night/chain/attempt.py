"""The making of one night, from its first stage to its publishing, over any number of runs."""

from __future__ import annotations

import contextlib
import os
from datetime import UTC, datetime
from pathlib import Path

from ensemble_horizon.night.chain.publishing import work_folder
from ensemble_horizon.night.chain.report import utc_text
from ensemble_horizon.night.chain.state import read_sealed, write_sealed
from ensemble_horizon.products.writing import written_whole

_FILE = "attempt.json"


class Attempt:
    """An attempt at a night, its state on the disk.

    Its time of making is kept, so that a night that was killed and gone on with is the same to the
    byte as one in a single go.

    Attributes
    ----------
    waited : bool
        Whether the waiting for late members was over when it began.
    """

    def __init__(self, products: Path, stamp: str, start: str = "", waited: bool = False) -> None:
        self._file = work_folder(products, stamp) / _FILE
        self._start, self._waited = start, waited
        held = read_sealed(self._file) or {}
        self.waited = bool(held.get("waited"))
        with contextlib.suppress(KeyError, TypeError, ValueError):
            self._made: datetime | None = datetime.fromisoformat(held["made"])
            return
        self._made = None

    @property
    def made(self) -> datetime:
        """The time of making: of the attempt, once it has begun."""
        self.begin()
        assert self._made is not None
        return self._made

    def begin(self) -> None:
        """Note the time, unless the attempt began in an earlier run."""
        if self._made is not None:
            return
        self._made = _now()
        content = {"start": self._start, "made": utc_text(self._made), "waited": self._waited}
        with written_whole(self._file) as neighbour:
            write_sealed(neighbour, content)


def _now() -> datetime:
    """The time, to the second; a fixed one where builds are to be the same."""
    fixed = os.environ.get("SOURCE_DATE_EPOCH", "")
    if fixed.isdigit():
        return datetime.fromtimestamp(int(fixed), UTC)
    return datetime.now(UTC).replace(microsecond=0)
