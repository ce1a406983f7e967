"""The last of a night: its briefing, and its place in the archive."""

from __future__ import annotations

import contextlib
import json
import math
from collections.abc import Iterable, Mapping
from dataclasses import asdict, replace
from datetime import datetime
from pathlib import Path
from typing import Any

from ensemble_horizon.errors import InputError
from ensemble_horizon.horizon.usual import Usual
from ensemble_horizon.night.archive import NIGHTS, UsualOptions, file_night, usual_of_night
from ensemble_horizon.night.brief import PAGE, SHEET, assemble_briefing, write_briefing
from ensemble_horizon.night.chain.fingerprint import lasting, marks_of
from ensemble_horizon.night.chain.report import number
from ensemble_horizon.night.chain.stages import (
    EstimateStage,
    Stage,
    Survey,
    Verify,
    about_stage,
)
from ensemble_horizon.night.chain.work import Work
from ensemble_horizon.night.writing import calibration_note
from ensemble_horizon.products.night_file import read_night_file
from ensemble_horizon.products.nights import Night, night_of, start_of_name
from ensemble_horizon.products.page import VersionsTable, read_versions
from ensemble_horizon.products.page.versions_table import SCORES
from ensemble_horizon.products.score_sentences import PastSkill
from ensemble_horizon.products.stored import read_results

PAGES = (PAGE, SHEET)


class Brief(Stage):
    """Page and sheet of tonight, with what is usual by the nights before."""

    name = "brief"
    after = (Survey.name, EstimateStage.name, Verify.name)
    keys = (
        "title", "runs.members", "regions", "sites", "calibration", "products.coastline",
        "night.usual_nights", "night.season_days", "night.versions",
    )  # fmt: skip

    def inputs(self, work: Work) -> list[str]:
        """The comparison of versions, where one is named."""
        if work.table.versions is None:
            return []
        folder = work.settings.path(work.table.versions)
        scores = [folder / SCORES] if (folder / SCORES).exists() else []
        return [str(path) for path in (folder / "versions.csv", folder / "versions.nc", *scores)]

    def rests_on(self, work: Work) -> Any:
        """The nights before, and how tonight was chosen."""
        folder = work.archive / NIGHTS
        paths = sorted(folder.iterdir()) if folder.is_dir() else []
        nights = [path for path in paths if start_of_name(path.name) is not None]
        before = lasting(marks_of(path for path in nights if path.stem < work.tonight.stamp))
        return [before, list(work.tonight.troubles)]

    def run(self, work: Work, folder: Path) -> dict[str, Any]:
        """Gather what is told of tonight, and write page and sheet."""
        settings = work.settings
        results = read_results(work.places[EstimateStage.name])
        usual = usual_of_night(work.archive, night_of(results), UsualOptions.of(work.table))
        versions, missing = _versions(work)
        notes = [*usual.notes, *missing]
        survey, estimate, verify = (work.found(name) for name in self.after)
        briefing = assemble_briefing(
            settings,
            results,
            made=work.made(),
            usual=usual.usual,
            troubles=[
                *work.tonight.troubles,
                *survey["troubles"],
                *estimate["troubles"],
                *verify.get("troubles", []),
            ],
            skill=[PastSkill(**item) for item in verify.get("past_skill", [])],
            no_skill=verify.get("no_skill", "") or _not_verified(work),
            notes=[*_calibrated(work), *verify.get("notes", []), *notes],
            versions=versions,
        )
        briefing = replace(briefing, members=_members_words(estimate["used"], survey["expected"]))
        write_briefing(folder, briefing)
        return {"usual": [_plain(*item) for item in usual.usual.items()], "notes": notes}


def archived(work: Work, folder: Path) -> tuple[Path, tuple[str, ...], bool]:
    """Put tonight into the archive, unless it is there as it would be filed now.

    Parameters
    ----------
    folder : Path
        The folder of the night.

    Returns
    -------
    path : Path
    notes : tuple of str
        What stood in its place.
    new : bool
        Whether it was filed now.

    Raises
    ------
    ProductError
        if it cannot be written.
    """
    night = night_of(read_results(folder))
    place = work.archive / NIGHTS / night.name
    # What cannot be read, `file_night` deals with.
    with contextlib.suppress(InputError):
        if _plain_night(read_night_file(place)) == _plain_night(night):
            return place, (), False
    about = about_stage(work, EstimateStage(), [file.path for file in work.tonight.look.files])
    about["created"] = datetime.fromisoformat(work.records[EstimateStage.name].made)
    filed = file_night(work.archive, night, about)
    return filed.path, filed.notes, True


def with_usual(
    limits: Iterable[Mapping[str, Any]], usual: Iterable[Mapping[str, Any]]
) -> list[Mapping[str, Any]]:
    """Limits for the report, each with what is usual of it, or None."""
    known = {tuple(item[key] for key in _KEY): item for item in usual}
    found: list[Mapping[str, Any]] = []
    for limit in limits:
        item = known.get(tuple(limit[key] for key in _KEY))
        rest = None if item is None else {k: v for k, v in item.items() if k not in _KEY}
        found.append({**limit, "usual": rest})
    return found


_KEY = ("variable", "place", "criterion")


def _plain(key: tuple[str, str, str], usual: Usual) -> dict[str, Any]:
    return {
        **dict(zip(_KEY, key, strict=True)),
        "nights": usual.nights,
        "median": number(usual.median),
        "low": number(usual.low),
        "high": number(usual.high),
        "percentile": None if math.isnan(usual.percentile) else float(usual.percentile),
        "standing": str(usual.standing),
        "season": usual.season,
    }


def _plain_night(night: Night) -> str:
    """A night as text: equal for equal ones, although what is not known equals nothing."""
    return json.dumps(asdict(night), default=str)


def _versions(work: Work) -> tuple[VersionsTable | None, list[str]]:
    """The comparison of versions; a note where it cannot be read, which must not cost the night."""
    if work.table.versions is None:
        return None, []
    try:
        return read_versions(work.settings.path(work.table.versions)), []
    except InputError as error:
        return None, [
            f"The comparison of versions cannot be shown: {error.culprit}, found {error.found}."
        ]


def _not_verified(work: Work) -> str:
    """Why the past was not looked at, where that stage had nothing to do."""
    reason = Verify().skipped(work)
    return f"No past start is verified: {reason}." if reason else ""


def _calibrated(work: Work) -> list[str]:
    words = calibration_note(work.settings)
    return [f"Calibration in force: {words}."] if words else []


def _members_words(used: list[int], expected: list[Any]) -> str:
    """Members that count, in words.

    Examples
    --------
    >>> _members_words([19, 19], list(range(20))), _members_words([18, 20], list(range(20)))
    ('19 of 20 members', '18 to 20 of 20 members')
    """
    least, most = used
    count = str(least) if least == most else f"{least} to {most}"
    return f"{count} of {len(expected)} members"
