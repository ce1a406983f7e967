"""Where the values of some variables lie in one file, and what of it has to be read together."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from ensemble_horizon.runs.decoding import StoredVariable


@dataclass(frozen=True)
class Storage:
    """How a variable lies in a file: the shape of what has to be read together, by raw axis.

    ``chunked`` is False where the values lie one after the other; ``shape`` is then a row along
    the first dimension of the grid, with all that varies faster.
    """

    shape: tuple[int, ...]
    chunked: bool


@dataclass(frozen=True)
class Source:
    """Where the values of some variables lie in one file.

    ``run_axes`` are the raw axes of start, lead and member (in file order, of sizes
    ``run_shape``); ``space_axes`` those of the grid's dimensions; ``fixed`` pairs of raw axis and
    index for everything else, such as the chosen level; ``storage`` is told by variable.
    """

    path: str
    run_axes: tuple[int, ...]
    run_shape: tuple[int, ...]
    space_axes: tuple[int, ...]
    fixed: tuple[tuple[int, int], ...]
    storage: Mapping[str, Storage]

    def run_chunks(self, variable: str) -> tuple[int, ...]:
        """Chunk sizes along ``run_axes``."""
        return tuple(self.storage[variable].shape[axis] for axis in self.run_axes)

    def grid_chunks(self, variable: str) -> tuple[int, ...]:
        """Chunk sizes along ``space_axes``."""
        return tuple(self.storage[variable].shape[axis] for axis in self.space_axes)


def storage_of(variable: StoredVariable, space_axes: Sequence[int]) -> Storage:
    """How a variable of an open file is stored."""
    chunking = variable.chunking()
    if chunking not in (None, "contiguous"):
        return Storage(tuple(int(size) for size in chunking), chunked=True)
    first = min(space_axes, default=variable.ndim)
    rows = (1 if axis <= first else int(size) for axis, size in enumerate(variable.shape))
    return Storage(tuple(rows), chunked=False)
