"""One pass over the values: digest, missing cells, extremes, each byte read once."""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs.catalogue import Catalogue
from ensemble_horizon.runs.reading import RawBlock, raw_blocks


@dataclass(frozen=True)
class Content:
    """What the values of one variable at one start are like; all arrays are (lead, member).

    Equal numbers in ``digest`` mean fields equal to the bit, in ``mask`` the same missing cells;
    -1 where the field is absent or could not be read. ``outside`` counts implausible cells.
    """

    variable: str
    start: int
    size: int
    digest: npt.NDArray[np.int64]
    mask: npt.NDArray[np.int64]
    missing: npt.NDArray[np.int64]
    outside: npt.NDArray[np.int64]
    low: npt.NDArray[np.float64]
    high: npt.NDArray[np.float64]
    unreadable: npt.NDArray[np.bool_]
    errors: dict[str, str] = field(default_factory=dict)

    @property
    def constant(self) -> npt.NDArray[np.bool_]:
        """Fields without any variation: of several cells that are all the same, or all missing."""
        return np.asarray((self.low == self.high) | (self.missing == self.size))


def read_content(
    catalogue: Catalogue,
    variable: str,
    start: int,
    plausible: tuple[float, float] | None = None,
    progress: Callable[[int], None] | None = None,
) -> Content:
    """Read every field of one variable and start once.

    Parameters
    ----------
    plausible : pair of float, optional
        Lowest and highest plausible value, in the units of the file.
    progress : callable, optional
        Called with the number of fields just done.
    """
    table = catalogue.tables[catalogue.table_of[variable]]
    source, position = table.source[start].T, table.position[start].T
    size = int(np.prod(catalogue.grid.shape, dtype=np.int64))
    content = _empty(variable, start, size, (source.shape[1], source.shape[0]))
    numbers: dict[bytes, int] = {}
    spans = catalogue.blocks((variable,), start).leads
    bounds = tuple((0, length) for length in catalogue.grid.shape)
    for number in np.unique(source[source >= 0]):
        held = source == number
        for first, stop in spans:
            where = np.zeros_like(held)
            where[:, first:stop] = held[:, first:stop]
            if not where.any():
                continue
            _read_part(catalogue, content, int(number), where, position, bounds, plausible, numbers)
            if progress is not None:
                progress(int(where.sum()))
    return content


def _empty(variable: str, start: int, size: int, shape: tuple[int, int]) -> Content:
    return Content(
        variable,
        start,
        size,
        digest=np.full(shape, -1, dtype=np.int64),
        mask=np.full(shape, -1, dtype=np.int64),
        missing=np.zeros(shape, dtype=np.int64),
        outside=np.zeros(shape, dtype=np.int64),
        low=np.full(shape, np.nan),
        high=np.full(shape, np.nan),
        unreadable=np.zeros(shape, dtype=bool),
    )


def _read_part(
    catalogue: Catalogue,
    content: Content,
    number: int,
    where: npt.NDArray[np.bool_],
    position: npt.NDArray[np.int32],
    bounds: tuple[tuple[int, int], ...],
    plausible: tuple[float, float] | None,
    numbers: dict[bytes, int],
) -> None:
    source = catalogue.sources[number]
    try:
        for block in raw_blocks(source, content.variable, where, position, bounds):
            _take(content, block, len(bounds), plausible, numbers)
    except InputError as error:
        if where.sum() == 1:
            content.unreadable[where.T] = True
            content.errors[source.path] = error.found
            return
        # Find out which fields are broken: the others may still be whole.
        for member, lead in zip(*np.nonzero(where), strict=True):
            single = np.zeros_like(where)
            single[member, lead] = True
            _read_part(catalogue, content, number, single, position, bounds, plausible, numbers)


def _take(
    content: Content,
    block: RawBlock,
    space: int,
    plausible: tuple[float, float] | None,
    numbers: dict[bytes, int],
) -> None:
    fields = block.raw.reshape(-1, *block.raw.shape[block.raw.ndim - space :])
    packing = repr(block.decoder).encode()
    values = np.empty(fields.shape[1:], dtype=block.decoder.dtype)
    places = zip(block.lead.ravel(), block.member.ravel(), strict=True)
    for raw, place in zip(fields, places, strict=True):
        block.decoder.decode(raw, values)
        digest = hashlib.sha256(packing)
        digest.update(np.ascontiguousarray(raw).data.cast("B") if raw.ndim else raw.tobytes())
        content.digest[place] = numbers.setdefault(digest.digest(), len(numbers))
        gone = np.isnan(values)
        count = int(np.count_nonzero(gone))
        content.missing[place] = count
        pattern = np.packbits(gone).tobytes() if count else b""
        content.mask[place] = numbers.setdefault(b"mask" + pattern, len(numbers))
        if count < values.size:
            low = np.fmin.reduce(values, axis=None) if count else values.min()
            high = np.fmax.reduce(values, axis=None) if count else values.max()
            content.low[place], content.high[place] = low, high
            if plausible is not None and (low < plausible[0] or high > plausible[1]):
                outside = (values < plausible[0]) | (values > plausible[1])
                content.outside[place] = int(np.count_nonzero(outside))
