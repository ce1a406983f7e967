"""Headers read in other processes, ahead of the one that puts them in order.

Another process reads whatever is plain: a header in order, on a grid that is known. All else,
broken files above all, is left to the process that asks, so that errors, and which of several
grids is kept, are the same however many processes there are.
"""

from __future__ import annotations

from collections.abc import Callable, Generator, Iterable, Sequence
from dataclasses import dataclass, replace
from itertools import repeat
from typing import Any, TypeAlias

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs.files import FoundFile
from ensemble_horizon.runs.grids import NONE, Grid
from ensemble_horizon.runs.headers import FileHeader, read_header
from ensemble_horizon.runs.moments import Wanted

# Runs a function over tasks, elsewhere, and gives back the results in the order of the tasks.
Mapper: TypeAlias = Callable[[Callable[[Any], Any], Sequence[Any]], Iterable[Any]]

_MANY = 100  # files below which other processes take longer to start than they save
_PORTION = 16  # files of one task

_NOWHERE = Grid(NONE, (), (), {})


@dataclass(frozen=True)
class Portion:
    """One task: some files, and the grids they are expected on."""

    files: tuple[FoundFile, ...]
    wanted: Wanted
    known: tuple[Grid, ...]


@dataclass(frozen=True)
class Ahead:
    """A header without its grids, and which of those known each layout has."""

    header: FileHeader
    grids: tuple[int, ...]

    def whole(self, known: Sequence[Grid]) -> FileHeader:
        """The header with its grids."""
        layouts = zip(self.header.layouts, self.grids, strict=True)
        whole = tuple(replace(layout, grid=known[number]) for layout, number in layouts)
        return replace(self.header, layouts=whole)


def read_ahead(
    found: Sequence[FoundFile], wanted: Wanted, grids: Sequence[Grid], mapper: Mapper | None
) -> Generator[FileHeader | None, None, None]:
    """The header of each file in turn, None where it is left to whoever asks.

    Parameters
    ----------
    grids : sequence of Grid
        Grids found so far, which the caller adds to as it goes; nothing is read elsewhere before
        there is one.
    mapper : callable or None
    """
    if mapper is None or len(found) < _MANY:
        yield from repeat(None, len(found))
        return
    done = 0
    while not grids and done < len(found):
        yield None
        done += 1
    known = tuple(grids)
    portions = [
        Portion(tuple(found[first : first + _PORTION]), wanted, known)
        for first in range(done, len(found), _PORTION)
    ]
    for part in mapper(read_portion, portions):
        yield from (None if item is None else item.whole(known) for item in part)


def read_portion(portion: Portion) -> list[Ahead | None]:
    """Read the headers of one task: runs in a worker."""
    return [_plain_header(file, portion) for file in portion.files]


def _plain_header(file: FoundFile, portion: Portion) -> Ahead | None:
    try:
        header = read_header(file, portion.wanted, portion.known)
    except InputError:
        return None
    number = {id(grid): place for place, grid in enumerate(portion.known)}
    if any(id(layout.grid) not in number for layout in header.layouts):
        return None
    places = tuple(number[id(layout.grid)] for layout in header.layouts)
    bare = tuple(replace(layout, grid=_NOWHERE) for layout in header.layouts)
    return Ahead(replace(header, layouts=bare), places)
