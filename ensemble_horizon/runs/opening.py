"""Opening runs and analyses as lazy datasets in the canonical layout."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import xarray as xr

from ensemble_horizon.runs.assembly import Start, read_catalogue
from ensemble_horizon.runs.catalogue import BLOCK_BYTES, Catalogue
from ensemble_horizon.runs.chunks import Span
from ensemble_horizon.runs.decoding import PACKING
from ensemble_horizon.runs.files import Files
from ensemble_horizon.runs.levels import Level
from ensemble_horizon.vocabulary import COORDINATE_ATTRIBUTES, HOURS, LEAD, MEMBER, START, VALID

_NOT_KEPT = (*PACKING, "coordinates", "grid_mapping", "cell_measures", "ancillary_variables")


def open_runs(
    files: Files,
    *,
    variables: str | Sequence[str] | None = None,
    level: Level = None,
    lagged: bool = False,
    start: Start | None = None,
    drop: Sequence[int | str] = (),
    strict: bool = False,
) -> xr.Dataset:
    """Open ensemble runs lazily.

    Parameters
    ----------
    files, variables, level, lagged, start, strict
        As for `ensemble_horizon.runs.read_catalogue`.
    drop : sequence of labels
        Members to leave out; labels that do not occur are ignored.

    Returns
    -------
    Dataset, dimensions (start, lead, member, *space)
        dask arrays of float32 or float64 with NaN where missing or absent; one chunk holds one
        start, a block of leads and all members. Coordinates ``start``, ``lead`` (hours),
        ``member``, ``valid`` (start, lead) and those of the grid, in the order of the source.

    Raises
    ------
    InputError
        As for `ensemble_horizon.runs.read_catalogue`; a file that breaks later raises it when
        values are computed.
    """
    catalogue = read_catalogue(
        files, variables=variables, level=level, lagged=lagged, start=start, strict=strict
    )
    return to_dataset(catalogue.without(drop) if drop else catalogue)


def open_analyses(
    files: Files,
    *,
    variables: str | Sequence[str] | None = None,
    level: Level = None,
    strict: bool = False,
) -> xr.Dataset:
    """Open verifying analyses lazily.

    Every valid time of the files is one analysis; a reference time is not needed, and is not
    looked at.

    Returns
    -------
    Dataset, dimensions (valid, *space)

    Raises
    ------
    InputError
        As for `ensemble_horizon.runs.read_catalogue`.
    """
    catalogue = read_catalogue(
        files, variables=variables, level=level, strict=strict, analysis=True
    )
    data = to_dataset(catalogue).drop_vars(VALID, errors="ignore")
    data = data.isel({LEAD: 0, MEMBER: 0}, drop=True).rename({START: VALID})
    data[VALID].attrs = dict(COORDINATE_ATTRIBUTES[VALID])
    return data


def to_dataset(catalogue: Catalogue, budget: int = BLOCK_BYTES) -> xr.Dataset:
    """The lazy dataset of a catalogue; ``budget`` is the size of a chunk in bytes."""
    dims = (START, LEAD, MEMBER, *catalogue.grid.dims)
    data = {
        name: (dims, _lazy(catalogue, name, budget), _kept(header.attrs))
        for name, header in catalogue.variables.items()
    }
    lead_attributes = COORDINATE_ATTRIBUTES[LEAD] | {"units": catalogue.lead_units}
    coords: dict[str, object] = {
        START: (START, catalogue.starts, dict(COORDINATE_ATTRIBUTES[START])),
        LEAD: (LEAD, catalogue.leads, lead_attributes),
        MEMBER: (MEMBER, np.asarray(catalogue.members), dict(COORDINATE_ATTRIBUTES[MEMBER])),
        **catalogue.grid.coords,
    }
    if catalogue.lead_units == HOURS:
        valid = ((START, LEAD), catalogue.valid, dict(COORDINATE_ATTRIBUTES[VALID]))
        coords[VALID] = valid
    return xr.Dataset(data, coords=coords, attrs=dict(catalogue.attrs))


def _lazy(catalogue: Catalogue, name: str, budget: int) -> Any:
    blocks = catalogue.blocks((name,), budget=budget)
    dtype = catalogue.dtype(name)
    chunks = (
        (1,) * len(catalogue.starts),
        _sizes(blocks.leads),
        (len(catalogue.members),),
        *(_sizes(spans) for spans in blocks.axes),
    )
    # Half a second to load, and the main job reads through the catalogue instead.
    import dask.array as da  # noqa: PLC0415

    return da.map_blocks(  # type: ignore[no-untyped-call]
        _Loader(catalogue, name, chunks),
        chunks=chunks,
        dtype=dtype,
        meta=np.empty((0,) * len(chunks), dtype=dtype),
        name=f"runs-{name}-{catalogue.token}",
    )


class _Loader:
    """Reads one chunk: one start, a block of leads, all members, a window of the grid.

    A plain class and not a function with keywords: dask would search a catalogue among the
    keywords for arrays, field by field.
    """

    def __init__(
        self, catalogue: Catalogue, variable: str, spans: tuple[tuple[int, ...], ...]
    ) -> None:
        self.catalogue = catalogue
        self.variable = variable
        self.spans = spans

    def __call__(self, block_id: tuple[int, ...]) -> np.ndarray:
        parts = [
            slice(sum(sizes[:index]), sum(sizes[: index + 1]))
            for sizes, index in zip(self.spans, block_id, strict=True)
        ]
        values = self.catalogue.read(
            self.variable, block_id[0], parts[1], parts[2], tuple(parts[3:])
        )
        return values.swapaxes(0, 1)[np.newaxis]


def _sizes(spans: Sequence[Span]) -> tuple[int, ...]:
    return tuple(stop - first for first, stop in spans)


def _kept(attributes: Mapping[str, object]) -> dict[str, object]:
    return {key: value for key, value in attributes.items() if key not in _NOT_KEPT}
