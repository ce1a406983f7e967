"""The folder of an archive: whose it is, what stands where, and what is there already."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

from ensemble_horizon.checks import require_choice
from ensemble_horizon.errors import ProductError
from ensemble_horizon.products.run_archive import FieldFrame, mean_name, member_name
from ensemble_horizon.products.writing import disk_errors, written_whole

MANIFEST = "rehearsal.json"
TRUTH = "truth.nc"
ANALYSES = "analyses.nc"
CLIMATOLOGY = "climatology.nc"

_POSITIONS = ("x_position", "y_position")
_POSITION = "position"


@dataclass(frozen=True)
class ArchiveFolder:
    """An archive on disk.

    Parameters
    ----------
    path : pathlib.Path
    layout : str
        ``"start"``: one file per start holds all members; ``"member"``: one folder per start, one
        file per member.
    members : int
    """

    path: Path
    layout: str
    members: int

    def claim(self, fingerprint: str, settings: str) -> None:
        """Make the folder ours, or find that it was made by the same settings.

        Raises
        ------
        ProductError
            If it holds something else, or cannot be made.
        """
        manifest = self.path / MANIFEST
        with disk_errors(self.path):
            found = sorted(path.name for path in self.path.iterdir()) if self.path.exists() else []
            if MANIFEST in found and not any(self._standing()):
                found = []  # an archive that broke off before anything stood there
            if MANIFEST in found:
                self._require_same(manifest, fingerprint)
                return
            if found:
                raise ProductError(
                    str(self.path),
                    expected="a new folder, or an archive of this program",
                    found=f"a folder with {', '.join(found[:3])}"
                    + (" and more" if len(found) > 3 else ""),
                    remedy="name another folder under archive.folder, or empty this one",
                )
        with written_whole(manifest) as neighbour:
            text = json.dumps({"fingerprint": fingerprint, "settings": settings}, indent=2)
            neighbour.write_text(text + "\n", encoding="utf-8")

    def run(self, version: str, start: datetime) -> Path:
        """Return where a start of a version stands: a file, or a folder of files."""
        name = f"{start:%Y%m%dT%H%M}"
        return self.path / version / (f"{name}.nc" if self.layout == "start" else name)

    def pattern(self, version: str) -> str:
        """Return the glob of all run files of a version, counted from the folder."""
        return f"{version}/*.nc" if self.layout == "start" else f"{version}/*/{member_name('*')}"

    def has(self, version: str, start: datetime) -> bool:
        """Tell whether a start stands there whole."""
        place = self.run(version, start)
        if self.layout == "start":
            return place.is_file()
        return all((place / member_name(member)).is_file() for member in range(self.members))

    def _standing(self) -> Iterator[Path]:
        """Yield the files that stand there whole, the manifest apart."""
        for path in self.path.rglob("*"):
            own = path.relative_to(self.path).parts
            hidden = any(part.startswith(".") for part in own)
            if path.is_file() and path.name != MANIFEST and not hidden:
                yield path

    def _require_same(self, manifest: Path, fingerprint: str) -> None:
        try:
            known = json.loads(manifest.read_text(encoding="utf-8")).get("fingerprint")
        except (ValueError, AttributeError):
            known = None
        if known != fingerprint:
            raise ProductError(
                str(self.path),
                expected="a new folder, or an archive begun with these very settings",
                found="an archive made with other settings, or by another version of the program",
                remedy="name another folder under archive.folder, or remove this one",
            )


def estimate_settings(
    title: str,
    archive: ArchiveFolder,
    version: str,
    fields: Sequence[FieldFrame],
    criteria: Mapping[str, Any],
    control: bool,
) -> str:
    """Return settings with which ``estimate`` reads the runs of a version, as a TOML text.

    ``criteria`` may hold ``climatology_fraction``, ``saturation_fraction`` and ``tolerances``, a
    mapping from variables to amounts in their units.

    Raises
    ------
    ArgumentError
        If there is no such variable as a tolerance is for.
    """
    lines = [
        "# Made by `ensemble-horizon toy run`; paths count from this file.",
        f"title = {json.dumps(f'{title}, version {version}')}",
        "",
        "[runs]",
        f"files = {json.dumps(archive.pattern(version))}",
        f"members = {archive.members}",
        f"minimum_members = {min(archive.members, 5)}",
        *(["control = 0"] if control else []),
        'starts = "all"',
    ]
    variables = _variables(fields)
    for name in criteria.get("tolerances", {}):
        require_choice(name, variables, "criteria.tolerances")
    for name, (source, units) in variables.items():
        chosen = _criteria(criteria, name)
        lines += ["", f"[variables.{name}]", source, f"units = {json.dumps(units)}"]
        lines += [f"criteria = [{', '.join(chosen)}]"]
    means = [f"{name} = {json.dumps(mean_name(name))}" for name in variables if name != _POSITION]
    if means:
        lines += ["", "[climatology]", f"file = {json.dumps(CLIMATOLOGY)}"]
        lines += [f"mean_names = {{ {', '.join(means)} }}"]
    lines += ["", "[analyses]", f"files = {json.dumps(ANALYSES)}"]
    lines += ["", "[products]", f"folder = {json.dumps(f'products_{version}')}"]
    lines += ["coastline = false  # the place is invented"]
    return "\n".join(lines) + "\n"


def _variables(fields: Sequence[FieldFrame]) -> dict[str, tuple[str, str]]:
    """Return variables of the settings by name: where they come from, and their units."""
    by_name = {field.name: field.attributes["units"] for field in fields}
    found = {}
    if set(by_name) >= set(_POSITIONS):
        found[_POSITION] = (f"position = {json.dumps(list(_POSITIONS))}", by_name[_POSITIONS[0]])
        by_name = {name: units for name, units in by_name.items() if name not in _POSITIONS}
    for name, units in by_name.items():
        found[name] = (f"source = {json.dumps(name)}", units)
    return found


def _criteria(criteria: Mapping[str, Any], field: str) -> list[str]:
    given = {name: criteria.get(name) for name in ("climatology_fraction", "saturation_fraction")}
    if field == _POSITION:
        given["climatology_fraction"] = None  # the file holds standard deviations, not distances
    given["tolerance"] = criteria.get("tolerances", {}).get(field)
    chosen = [f"{{ {name} = {value!r} }}" for name, value in given.items() if value is not None]
    # Every variable needs a criterion, and this one suits them all.
    return chosen or ["{ saturation_fraction = 0.5 }"]
