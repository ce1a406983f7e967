"""A thin sample of grid points from which the sampling noise of a whole field is judged.

The field is cut into blocks of neighbouring points. How the noise of one lead goes with that of
another is pooled over the sample points of a block: neighbours keep their order among the members
for about as long, and a pooled correlation scatters far less than that of one point.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

MOST_POINTS = 2048
MOST_BLOCKS = 8  # along each dimension
_POINTS_PER_BLOCK = 48
_MOST_BYTES = 128 * 2**20


@dataclass(frozen=True)
class SampleLayout:
    """Which points are sampled, and which block each point of the grid belongs to.

    Parameters
    ----------
    index : (K,) int, increasing, into the flattened grid
    block_of_sample : (K,) int
    block_of_point : (P,) int
    """

    index: np.ndarray
    block_of_sample: np.ndarray
    block_of_point: np.ndarray

    @property
    def blocks(self) -> int:
        """Number of blocks."""
        return int(self.block_of_point.max()) + 1


def sample_layout(shape: tuple[int, ...], members: int, leads: int) -> SampleLayout:
    """Lay a sample over a grid.

    Parameters
    ----------
    shape : shape of the grid; two dimensions, one (cells), or none (a single series)
    members, leads : int
        The sample is thinned so that its values stay below 128 MiB.

    Examples
    --------
    >>> layout = sample_layout((361, 720), members=20, leads=41)
    >>> layout.index.size <= 2048, layout.blocks
    (True, 64)
    """
    size = int(np.prod(shape, dtype=int))
    most = min(MOST_POINTS, max(64, _MOST_BYTES // (4 * members * leads)))
    along = int(np.clip(np.sqrt(size / _POINTS_PER_BLOCK), 1, MOST_BLOCKS))
    if len(shape) == 2:
        down, across = _steps(shape, most, along)
        chosen = np.zeros(shape, dtype=bool)
        chosen[down // 2 :: down, across // 2 :: across] = True
        rows = np.arange(shape[0]) * min(along, shape[0]) // shape[0]
        columns = np.arange(shape[1]) * min(along, shape[1]) // shape[1]
        block = rows[:, np.newaxis] * min(along, shape[1]) + columns
        point_block, index = block.ravel(), np.flatnonzero(chosen.ravel())
    else:
        step = max(1, min(int(np.ceil(size / most)), size // along**2))
        index = np.arange(step // 2, size, step)
        point_block = np.arange(size) * along**2 // size
    _, dense = np.unique(point_block, return_inverse=True)
    return SampleLayout(index, dense[index], dense)


def _steps(shape: tuple[int, ...], most: int, along: int) -> tuple[int, int]:
    """Steps down and across a grid for about ``most`` points, some of them in every block.

    A step no longer than a block is wide meets every block; on a narrow grid the step along the
    other dimension makes up for it.
    """
    equal = int(np.ceil(np.sqrt(shape[0] * shape[1] / most)))
    widths = [size // min(along, size) for size in shape]
    first, second = (0, 1) if widths[0] <= widths[1] else (1, 0)
    step = [equal, equal]
    step[first] = min(equal, widths[first])
    lines = len(range(step[first] // 2, shape[first], step[first]))
    needed = int(np.ceil(lines * shape[second] / most))
    step[second] = min(max(equal, needed), widths[second])
    return step[0], step[1]
