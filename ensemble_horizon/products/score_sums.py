"""Sums of the scores of one start: one NetCDF file, sealed with a digest of what it holds."""

from __future__ import annotations

import json
import os
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import netCDF4
import numpy as np

from ensemble_horizon.errors import InputError, ProductError
from ensemble_horizon.products.netcdf import open_new, put, valid_name, version_of
from ensemble_horizon.products.sealed import seal, sealed_bytes, unsealed
from ensemble_horizon.products.writing import written_whole
from ensemble_horizon.serial.starts import start_names
from ensemble_horizon.skill.quantities import QUANTITIES
from ensemble_horizon.skill.reduction import ScoreSums
from ensemble_horizon.vocabulary import CAUTION, CONVENTIONS, LEAD, PLACE

# Raised whenever sums that were written before must not be used any more.
FORMAT = 1
KIND = "ensemble_horizon_score_sums"
TITLE = "Sums of the scores of one start"
_QUANTITY, _RANK = "quantity", "rank"
_TEXTS = ("name", "long_name", "units", "lead_units", "settings", "ground")
_ARRAYS = ("sums", "weights", "ranks")


class OtherFormatError(InputError):
    """Sums that another version of the program wrote: not broken, but of no use here."""


@dataclass(frozen=True)
class PlaceSums:
    """What one start brings at places, held against one truth.

    Parameters
    ----------
    places : tuple of (name, kind)
    sums : ScoreSums of T leads, R places, M members, without fields
    """

    places: tuple[tuple[str, str], ...]
    sums: ScoreSums


@dataclass(frozen=True)
class VariableSums:
    """What one start brings of one variable.

    Parameters
    ----------
    name, long_name, units : str
        ``units`` are those of the results.
    factor : float
        From the units of the sums to those of the results, for differences.
    lead : (T,) float
    lead_units : str
    settings, ground : str
        Fingerprints of the settings, and of the grid and units of the runs, that the sums depend
        on: only sums that agree in both may be used together.
    against : by truth, ``analysis`` or ``observation``
    gaps : tuple of str
        Valid times that nothing could be held against, in words.
    """

    name: str
    long_name: str
    units: str
    factor: float
    lead: np.ndarray
    lead_units: str
    settings: str
    ground: str
    against: Mapping[str, PlaceSums]
    gaps: tuple[str, ...] = ()


@dataclass(frozen=True)
class StartSums:
    """What one start brings.

    Parameters
    ----------
    start : numpy.datetime64, to the second, UTC
    variables : tuple of VariableSums
    """

    start: np.datetime64
    variables: tuple[VariableSums, ...]

    @property
    def label(self) -> str:
        """The start in ISO 8601."""
        return start_names(np.array([self.start]))[0]

    def variable(self, name: str) -> VariableSums | None:
        """What it brings of a variable; None where it brings nothing."""
        return next((item for item in self.variables if item.name == name), None)


def write_score_sums(
    path: str | os.PathLike[str], found: StartSums, provenance: Mapping[str, Any]
) -> Path:
    """Write the sums of one start, one group of the file for each variable and truth.

    Behind the NetCDF content stands a line with its SHA-256 digest. The file holds no time of
    making: the same sums give the same bytes.

    Parameters
    ----------
    path : path
    found : StartSums
    provenance : mapping
        Its ``version`` is kept; that of the program by default.

    Raises
    ------
    ProductError
        If the file cannot be written, or does not hold the sums when read back; nothing
        half-written stays behind.
    """
    target = Path(path)
    version = version_of(provenance)
    with written_whole(target) as neighbour:
        with open_new(neighbour) as file:
            file.setncatts(
                {
                    "Conventions": CONVENTIONS,
                    "title": TITLE,
                    "source": f"Ensemble Horizon {version}",
                    "software_version": version,
                    "comment": CAUTION,
                    "kind": KIND,
                    "format": np.int32(FORMAT),
                    "start": str(found.start),
                }
            )
            taken: set[str] = set()
            for variable in found.variables:
                _put_variable(file.createGroup(valid_name(variable.name, taken)), variable)
        seal(neighbour)
        again = sums_from(neighbour.read_bytes(), str(target))
        if not _same(again, found):
            raise ProductError(
                str(target),
                expected="the sums that were written, when read back",
                found="others",
                remedy="look at the disk, and name variables and places without control characters",
            )
    return target


def read_score_sums(path: str | os.PathLike[str]) -> StartSums:
    """Read the sums of one start and check them against the digest in the file.

    Raises
    ------
    InputError
        If the file cannot be read, is of another kind, or does not hold what was written.
    OtherFormatError
        If another version of the program wrote it.
    """
    return sums_from(sealed_bytes(path), str(path))


def sums_from(content: bytes, name: str) -> StartSums:
    """Read sums from the bytes of their file, which messages call ``name``.

    Raises
    ------
    InputError
        If they are not those of a file of sums, or not whole and unchanged.
    OtherFormatError
        If another version of the program wrote them.
    """
    body = unsealed(content)
    if body is None:
        raise _broken(name, "a file that is cut off or changed, or no sums of scores")
    with netCDF4.Dataset(name, memory=body) as file:
        file.set_auto_mask(False)
        kind = file.getncattr("kind") if "kind" in file.ncattrs() else "another kind of file"
        if kind != KIND:
            raise _broken(name, str(kind))
        own = int(file.getncattr("format"))
        if own != FORMAT:
            raise OtherFormatError(
                name,
                expected=f"sums of scores of format {FORMAT}",
                found=f"format {own}",
                remedy="move it away; the start is verified again if its runs are still there",
            )
        start = np.datetime64(file.getncattr("start"), "s")
        return StartSums(start, tuple(_read_variable(group) for group in file.groups.values()))


def _broken(name: str, found: str) -> InputError:
    return InputError(
        name,
        expected="sums of scores, whole and unchanged",
        found=found,
        remedy="move the file away; the start is verified again if its runs are still there",
    )


def _same(one: StartSums, other: StartSums) -> bool:
    if one.start != other.start or len(one.variables) != len(other.variables):
        return False
    pairs = zip(one.variables, other.variables, strict=True)
    return all(_same_variable(ours, theirs) for ours, theirs in pairs)


def _same_variable(one: VariableSums, other: VariableSums) -> bool:
    plain = (*_TEXTS, "factor", "gaps")
    if any(getattr(one, name) != getattr(other, name) for name in plain):
        return False
    if not np.array_equal(one.lead, other.lead) or list(one.against) != list(other.against):
        return False
    return all(
        part.places == other.against[truth].places
        and all(
            np.array_equal(getattr(part.sums, name), getattr(other.against[truth].sums, name))
            for name in _ARRAYS
        )
        for truth, part in one.against.items()
    )


def _put_variable(group: netCDF4.Group, found: VariableSums) -> None:
    texts = {name: getattr(found, name) for name in _TEXTS}
    group.setncatts({**texts, "factor": found.factor, "not_verified": json.dumps(found.gaps)})
    group.createDimension(LEAD, found.lead.size)
    about = {"long_name": "lead time", "units": found.lead_units}
    put(group, LEAD, (LEAD,), found.lead.astype(float), about)
    for truth, part in found.against.items():
        own = group.createGroup(truth)
        own.createDimension(PLACE, len(part.places))
        own.createDimension(_QUANTITY, len(QUANTITIES))
        own.createDimension(_RANK, part.sums.ranks.shape[2])
        for column, (name, text) in enumerate(
            (("place_name", "region or site"), ("place_kind", "what kind of place it is"))
        ):
            labels = np.array([place[column] for place in part.places], dtype=object)
            put(own, name, (PLACE,), labels, {"long_name": text})
        put(own, "quantity_name", (_QUANTITY,), np.array(QUANTITIES, dtype=object),
            {"long_name": "what is summed up"})  # fmt: skip
        dims = (_QUANTITY, LEAD, PLACE)
        put(own, "sums", dims, part.sums.sums, {"long_name": "sums of weight times quantity"})
        put(own, "weights", dims, part.sums.weights, {"long_name": "sums of the weights"})
        put(own, "ranks", (LEAD, PLACE, _RANK), part.sums.ranks,
            {"long_name": "sums of the weights by the rank of the truth"})  # fmt: skip


def _read_variable(group: netCDF4.Group) -> VariableSums:
    return VariableSums(
        **{name: str(group.getncattr(name)) for name in _TEXTS},
        factor=float(group.getncattr("factor")),
        lead=np.asarray(group[LEAD][:], dtype=float),
        against={truth: _read_truth(own) for truth, own in group.groups.items()},
        gaps=tuple(json.loads(group.getncattr("not_verified"))),
    )


def _read_truth(group: netCDF4.Group) -> PlaceSums:
    names, kinds = ([str(text) for text in group[key][:]] for key in ("place_name", "place_kind"))
    sums, weights, ranks = (np.asarray(group[key][:], dtype=float) for key in _ARRAYS)
    return PlaceSums(
        tuple(zip(names, kinds, strict=True)), ScoreSums(sums, weights, ranks, fields={})
    )
