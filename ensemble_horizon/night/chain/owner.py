"""Whose an archive is: a small sealed record in it, so that two settings files cannot mix.

``owner.json``::

    {"schema": "ensemble-horizon archive 1", "title": "Night",
     "runs": ["/srv/runs/{start:%Y%m%d%H}/m{member:02d}.nc"], "products": "/srv/products",
     "runs_from_here": ["../runs/{start:%Y%m%d%H}/m{member:02d}.nc"],
     "products_from_here": "../products", "variables": {"t2": ["t2m"]}, "digest": "<sha256>"}

Places are told twice, from the root and from the archive: a tree that is moved as a whole stays its
own, and so does an archive that alone is moved.
"""

from __future__ import annotations

import logging
import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from ensemble_horizon.errors import SettingsError
from ensemble_horizon.night.chain.state import read_sealed, write_sealed
from ensemble_horizon.products.nights import start_of_name
from ensemble_horizon.products.sealed import moved_aside
from ensemble_horizon.products.writing import disk_errors, written_whole
from ensemble_horizon.settings import Settings

OWNER_FILE = "owner.json"
SCHEMA = "ensemble-horizon archive 1"
_SHELVES = ("nights", "scores")

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Owner:
    """The runs that an archive is of, and where their nights go.

    Parameters
    ----------
    title : str
        For people; another title is no other owner.
    runs : tuple of str
        ``runs.files``, from the root.
    products : str
        ``products.folder``, from the root.
    runs_from_here, products_from_here
        The same, counted from the archive.
    variables : mapping of name to names in the files
        All that were ever filed.
    """

    title: str
    runs: tuple[str, ...]
    products: str
    runs_from_here: tuple[str, ...]
    products_from_here: str
    variables: Mapping[str, tuple[str, ...]] = field(default_factory=dict)

    @classmethod
    def of(cls, settings: Settings, archive: Path) -> Owner:
        """The owner that settings speak for."""
        files = settings.run_files()
        runs = (files,) if isinstance(files, str) else tuple(files)
        products = str(settings.path(settings.products.folder))
        return cls(
            settings.title,
            runs,
            products,
            tuple(os.path.relpath(path, archive) for path in runs),
            os.path.relpath(products, archive),
            {name: table.sources(name) for name, table in settings.variables.items()},
        )

    @classmethod
    def read(cls, archive: Path) -> Owner | None:
        """The owner that the record in an archive names; None where there is no sound one."""
        held = read_sealed(archive / OWNER_FILE)
        if held is None or held.get("schema") != SCHEMA:
            return None
        try:
            return cls(
                str(held["title"]),
                tuple(held["runs"]),
                str(held["products"]),
                tuple(held["runs_from_here"]),
                str(held["products_from_here"]),
                {name: tuple(parts) for name, parts in held["variables"].items()},
            )
        except (KeyError, TypeError, AttributeError):
            return None

    def as_dict(self) -> dict[str, Any]:
        """The record as plain values."""
        return {
            "schema": SCHEMA,
            "title": self.title,
            "runs": list(self.runs),
            "products": self.products,
            "runs_from_here": list(self.runs_from_here),
            "products_from_here": self.products_from_here,
            "variables": {name: list(parts) for name, parts in self.variables.items()},
        }

    def differences(self, other: Owner, *, products: bool = True) -> Iterator[str]:
        """In what the settings of ``other`` are not those of this owner, in words."""
        if other.runs != self.runs and other.runs_from_here != self.runs_from_here:
            yield f"runs {', '.join(self.runs)}, here {', '.join(other.runs)}"
        moved = other.products_from_here != self.products_from_here
        if products and moved and other.products != self.products:
            yield f"nights in {self.products}, here in {other.products}"
        common = [name for name in self.variables if name in other.variables]
        if self.variables and not common:
            yield f"variables {', '.join(self.variables)}, here {', '.join(other.variables)}"
        for name in common:
            before, now = self.variables[name], other.variables[name]
            if before != now:
                yield f"{name} from {', '.join(before)}, here from {', '.join(now)}"


def require_own(settings: Settings, archive: Path, *, products: bool = True) -> None:
    """Refuse an archive that holds something of other settings.

    Parameters
    ----------
    products : bool
        Whether the settings must send their nights to the same folder as well.

    Raises
    ------
    SettingsError
        naming whose archive it is.
    """
    held = Owner.read(archive)
    if held is None or not _holds_something(archive):
        return
    found = list(held.differences(Owner.of(settings, archive), products=products))
    if found:
        raise SettingsError(
            "night.archive",
            expected="an archive of its own for every settings file",
            found=f"{archive}, which is that of {held.title!r}: {'; '.join(found)}",
            remedy="name another folder under night.archive; if these are the same runs and only "
            "places or names have changed, run `nightly` once with --adopt-archive, and the "
            "archive goes on with these settings",
        )


def claim(settings: Settings, archive: Path) -> list[str]:
    """Write into an archive whose it is, where that is not told there; return sentences.

    Raises
    ------
    ProductError
        if the record cannot be written.
    """
    notes = []
    place = archive / OWNER_FILE
    held, own = Owner.read(archive), Owner.of(settings, archive)
    with disk_errors(place):
        if held is None and os.path.lexists(place):
            notes.append(
                f"{place} was broken and is now {moved_aside(place)}; the archive goes on as that "
                "of these settings."
            )
    if held is not None and _holds_something(archive):
        if any(held.differences(own)):
            notes.append(f"The archive {archive} of {held.title!r} was taken over.")
        kept = {**held.variables, **own.variables}
        own = Owner(**{**vars(own), "variables": kept})
    if own != held:
        with written_whole(place) as neighbour:
            write_sealed(neighbour, own.as_dict())
    for text in notes:
        log.warning("%s", text)
    return notes


def _holds_something(archive: Path) -> bool:
    """Whether anything is filed in an archive; an empty one is nobody's."""
    for shelf in _SHELVES:
        folder = archive / shelf
        if folder.is_dir() and any(
            start_of_name(path.name) is not None for path in folder.iterdir()
        ):
            return True
    return False
