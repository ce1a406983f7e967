"""The catalogue: which field lies where, and the fast reader.

One read takes one start, a block of leads and all members, which is how the job is cut: every
field is read once, reduced where it was read, and nothing the size of the ensemble is held.
"""

from __future__ import annotations

import contextlib
import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path

import numpy as np
import numpy.typing as npt

from ensemble_horizon.checks import require_choice
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.runs.chunks import Blocks, chunk_numbers, cut, grid_steps, straddled
from ensemble_horizon.runs.faults import Fault
from ensemble_horizon.runs.grids import Grid
from ensemble_horizon.runs.headers import VariableHeader
from ensemble_horizon.runs.reading import read_source, value_type
from ensemble_horizon.runs.sources import Source
from ensemble_horizon.runs.times import Ticks, iso_text, to_dates, to_hours

Index = slice | int | Sequence[int] | npt.NDArray[np.int64]

BLOCK_BYTES = 32 * 2**20


@dataclass(frozen=True)
class Table:
    """For each (start, lead, member): the source (-1 where absent) and the flat run index in it."""

    source: npt.NDArray[np.int32]
    position: npt.NDArray[np.int32]

    def take(self, starts: np.ndarray, members: np.ndarray) -> Table:
        """The part for these starts and members."""
        return Table(
            np.ascontiguousarray(self.source[starts][:, :, members]),
            np.ascontiguousarray(self.position[starts][:, :, members]),
        )


@dataclass(frozen=True, eq=False)
class Catalogue:
    """Where every field of the runs lies; small, and safe to send between processes.

    Made by `ensemble_horizon.runs.read_catalogue`. Indices of starts, leads and members are
    positions in ``starts``, ``leads`` and ``members``.

    Parameters
    ----------
    variables : mapping of str to VariableHeader
        The data variables by their source name.
    members : tuple
        Labels of the members, sorted; numbers, or text where they are not numbers.
    grid : Grid
        The horizontal grid, in the order of the source.
    faults : tuple of Fault
        What was found wrong while reading the headers.
    calendar : str
        CF name of the calendar.
    attrs : mapping
        Global attributes of the first file.
    """

    variables: Mapping[str, VariableHeader]
    start_ticks: Ticks
    lead_ticks: Ticks
    members: tuple[int | str, ...]
    grid: Grid
    faults: tuple[Fault, ...]
    calendar: str
    sources: tuple[Source, ...]
    tables: tuple[Table, ...]
    table_of: Mapping[str, int]
    attrs: Mapping[str, object] = field(default_factory=dict)
    lead_units: str = "hours"

    @cached_property
    def starts(self) -> np.ndarray:
        """Starts (S,): datetime64[ns], or cftime objects in other calendars."""
        return to_dates(self.start_ticks, self.calendar)

    @cached_property
    def leads(self) -> npt.NDArray[np.float64]:
        """Leads (L,) in hours, increasing."""
        return to_hours(self.lead_ticks)

    @cached_property
    def valid(self) -> np.ndarray:
        """Valid times (S, L)."""
        ticks = self.start_ticks[:, None] + self.lead_ticks[None, :]
        return to_dates(ticks, self.calendar)

    @cached_property
    def token(self) -> str:
        """A name for exactly these data: it changes when a file, a start or a member does."""
        digest = hashlib.sha256()
        for source in self.sources:
            digest.update(repr(source).encode())
        for path in self.paths:
            with contextlib.suppress(OSError):
                digest.update(str(Path(path).stat().st_mtime_ns).encode())
        for table in self.tables:
            digest.update(table.source.tobytes() + table.position.tobytes())
        digest.update(repr((self.members, self.start_ticks.tolist())).encode())
        return digest.hexdigest()[:16]

    def __dask_tokenize__(self) -> str:
        return self.token

    def __getstate__(self) -> dict[str, object]:
        # Cached properties are cheap to make again and would only weigh on the message.
        drop = ("starts", "leads", "valid", "token")
        return {key: value for key, value in self.__dict__.items() if key not in drop}

    @property
    def paths(self) -> tuple[str, ...]:
        """The files, each once."""
        return tuple(dict.fromkeys(source.path for source in self.sources))

    def start_label(self, start: int) -> str:
        """The start at position ``start`` as ISO 8601 text."""
        return iso_text(int(self.start_ticks[start]), self.calendar)

    def present(self, variable: str) -> npt.NDArray[np.bool_]:
        """Which fields exist: boolean (S, L, M)."""
        return self._table(variable).source >= 0

    def dtype(self, variable: str) -> np.dtype:
        """Type of the values that `read` returns: float32 or float64."""
        header = self.variables[require_choice(variable, self.variables, "variable")]
        return value_type(header)

    def file_of_member(self, variable: str, start: int, member: int) -> str | None:
        """Path of the first file that holds the member, None where it is absent."""
        numbers = self._table(variable).source[start, :, member]
        held = numbers[numbers >= 0]
        return self.sources[int(held[0])].path if held.size else None

    def read(
        self,
        variable: str,
        start: int,
        leads: Index = slice(None),
        members: Index = slice(None),
        window: tuple[slice, ...] = (),
    ) -> np.ndarray:
        """Read one start, some leads and some members.

        Parameters
        ----------
        variable : str
            Source name of the variable.
        start : int
            Position of the start.
        leads, members : slice or positions
            What to read.
        window : tuple of slice
            Part of the grid, one slice per spatial dimension; everything if empty.

        Returns
        -------
        ndarray, shape (member, lead, *window)
            Decoded values, NaN where missing or absent.

        Raises
        ------
        InputError
            If a file cannot be read.
        ArgumentError
            If the variable is not in the catalogue, or the window does not fit the grid.
        """
        table = self._table(variable)
        lead_index = _positions(leads, self.lead_ticks.size)
        member_index = _positions(members, len(self.members))
        bounds = self._window(window)
        shape = (member_index.size, lead_index.size, *(stop - first for first, stop in bounds))
        out = np.empty(shape, dtype=self.dtype(variable))
        block = np.ix_(lead_index, member_index)
        source = table.source[start][block].T
        position = table.position[start][block].T
        if (source < 0).any():
            out[source < 0] = np.nan
        for number in np.unique(source):
            if number >= 0:
                where = source == number
                read_source(self.sources[number], variable, where, position, bounds, out)
        return out

    def blocks(
        self, variables: Sequence[str], start: int | None = None, budget: int = BLOCK_BYTES
    ) -> Blocks:
        """Cut one start, or any of them, into blocks such that no chunk of a file is read twice.

        Blocks are made of whole chunks, and as large as ``budget`` bytes of values (all members
        of all the variables) allow. Where even one column of chunks exceeds the budget, that
        column is the block: reading less would decompress its chunks again.

        Parameters
        ----------
        variables : sequence of str
            Those that are read together.
        start : int, optional
            Position of the start; blocks that suit all starts without.
        """
        point, borders = 0, np.zeros(self.lead_ticks.size + 1, dtype=bool)
        steps: set[tuple[int, ...]] = set()
        for name in variables:
            _, lead, chunk = self.chunks(name, start)
            borders |= straddled(chunk, lead, self.lead_ticks.size)
            steps |= {self.sources[number].grid_chunks(name) for number in self._used(name, start)}
            point += len(self.members) * self.dtype(name).itemsize
        return cut(borders, grid_steps(steps, self.grid.shape), self.grid.shape, point, budget)

    def chunks(
        self, variable: str, start: int | None = None
    ) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64], npt.NDArray[np.int64]]:
        """Start, lead and chunk of every field, of one start or of all: (N,) positions, numbers.

        A chunk is here what lies together along the run dimensions of one file, whatever its part
        of the grid.
        """
        first = 0 if start is None else start
        chosen = slice(None) if start is None else slice(start, start + 1)
        table = self._table(variable)
        source, position = table.source[chosen], table.position[chosen]
        present = source >= 0
        starts, leads, _ = np.nonzero(present)
        chunk = chunk_numbers(self.sources, variable, source[present], position[present])
        return starts + first, leads, chunk

    def _used(self, variable: str, start: int | None) -> list[int]:
        """Sources that hold a variable at a start, or at any."""
        source = self._table(variable).source
        numbers = np.unique(source if start is None else source[start])
        return [int(number) for number in numbers if number >= 0]

    def subset(self, starts: Index = slice(None), members: Index = slice(None)) -> Catalogue:
        """The catalogue of some starts and members, given by position."""
        start_index = _positions(starts, self.start_ticks.size)
        member_index = _positions(members, len(self.members))
        return replace(
            self,
            start_ticks=self.start_ticks[start_index],
            members=tuple(self.members[index] for index in member_index),
            tables=tuple(table.take(start_index, member_index) for table in self.tables),
        )

    def without(
        self,
        members: Sequence[int | str] = (),
        at: Sequence[tuple[str, int | str]] = (),
    ) -> Catalogue:
        """The catalogue without some members.

        Parameters
        ----------
        members : sequence of labels
            Left out everywhere; labels that do not occur are ignored.
        at : sequence of (start text, label)
            Made absent (NaN) at one start only, as `SurveyReport.drop_at` lists them.
        """
        tables = [Table(table.source.copy(), table.position) for table in self.tables]
        labels = {self.start_label(index): index for index in range(self.start_ticks.size)}
        for start, member in at:
            if start in labels and member in self.members:
                for table in tables:
                    table.source[labels[start], :, self.members.index(member)] = -1
        kept = [index for index, label in enumerate(self.members) if label not in set(members)]
        return replace(self, tables=tuple(tables)).subset(members=kept)

    def _table(self, variable: str) -> Table:
        require_choice(variable, self.variables, "variable")
        return self.tables[self.table_of[variable]]

    def _window(self, window: tuple[slice, ...]) -> tuple[tuple[int, int], ...]:
        shape = self.grid.shape
        if not window:
            return tuple((0, length) for length in shape)
        if len(window) != len(shape):
            raise ArgumentError(
                "window",
                expected=f"{len(shape)} slices, for {self.grid.dims}",
                found=f"{len(window)} slices",
                remedy="give one slice per spatial dimension, or none",
            )
        bounds = []
        for part, length in zip(window, shape, strict=True):
            first, stop, step = part.indices(length)
            if step != 1:
                raise ArgumentError(
                    "window",
                    expected="slices without a step",
                    found=repr(part),
                    remedy="thin the values after reading",
                )
            bounds.append((first, max(first, stop)))
        return tuple(bounds)


def _positions(index: Index, size: int) -> npt.NDArray[np.int64]:
    if isinstance(index, int | np.integer):
        index = [int(index)]
    chosen = np.arange(size)[index]
    return np.asarray(chosen, dtype=np.int64)
