"""A look at what stands there of a start: which members are whole, and which are late.

Names come first: where the template tells the start, only the files of the starts in question are
opened, however long the archive is.
"""

from __future__ import annotations

import logging
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from ensemble_horizon.errors import InputError, SettingsError
from ensemble_horizon.night.chain.fingerprint import Marks, changed_files, marks_of
from ensemble_horizon.night.input import find_runs, survey
from ensemble_horizon.runs import Catalogue, Fault, SurveyReport
from ensemble_horizon.runs.files import FoundFile, find_files
from ensemble_horizon.runs.times import date_ticks, iso_text
from ensemble_horizon.runs.verdict import in_order, name_members
from ensemble_horizon.settings import Settings

_LATE = {"missing-member", "missing-lead", "missing-variable", "unreadable-file", "unusable-file"}
_ALL = ""  # the group of all files, where names do not tell the start

Label = int | str
Groups = Mapping[str, Sequence[FoundFile]]

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Look:
    """What stood there of one start at one moment.

    Parameters
    ----------
    start : str
        Its label.
    files : tuple of FoundFile
        Those that hold something of it, and do not grow.
    late : tuple of labels
        Members that are not there, or not whole.
    lost : tuple of str
        What else is not there or not whole.
    growing : tuple of str
        Files that changed since the look before.
    marks : mapping
        Of all its files.
    report : SurveyReport, optional
        The survey of the headers; None where nothing can be read.
    """

    start: str
    files: tuple[FoundFile, ...]
    late: tuple[Label, ...] = ()
    lost: tuple[str, ...] = ()
    growing: tuple[str, ...] = ()
    marks: Marks = field(default_factory=dict)
    report: SurveyReport | None = None

    @property
    def complete(self) -> bool:
        """Whether everything is there."""
        return self.report is not None and not (self.late or self.lost or self.growing)

    def lacking(self) -> str:
        """What is not there, or not whole, in words."""
        parts = [name_members(self.late)] if self.late else []
        if self.lost:
            more = f" and {len(self.lost) - 1} more" if len(self.lost) > 1 else ""
            parts.append(f"{self.lost[0]}{more}")
        return " and ".join(parts) or "every file"


class Starts:
    """The starts that the settings name, newest first, to be looked at.

    Parameters
    ----------
    settings : Settings
    wanted : str, optional
        The start that is wanted, or its beginning.
    """

    def __init__(self, settings: Settings, wanted: str | None) -> None:
        runs = settings.runs.model_copy(update={"starts": "all"})
        self.settings = settings.model_copy(update={"runs": runs})
        self.wanted = None if wanted is None else wanted.replace(" ", "T").removesuffix("Z")
        self._read: tuple[Marks, Catalogue] | None = None

    def labels(self) -> list[str]:
        """Labels of the starts in question, newest first; none where no file fits the settings.

        Raises
        ------
        SettingsError
            if several starts begin like the one that is wanted.
        """
        found = self.known()
        if self.wanted is None:
            return found
        chosen = [label for label in found if label.startswith(self.wanted)]
        if len(chosen) > 1:
            raise SettingsError(
                "--start",
                expected="one start",
                found=f"{self.wanted!r}, as {len(chosen)} begin: {', '.join(chosen[:6])}",
                remedy="write it to the hour",
            )
        return chosen

    def known(self) -> list[str]:
        """Labels of all starts, newest first."""
        groups = self._groups()
        if _ALL in groups:
            catalogue = self._catalogue(groups[_ALL])
            return [catalogue.start_label(n) for n in range(catalogue.starts.size)][::-1]
        return sorted(groups, reverse=True)

    def look(self, label: str, before: Look | None = None) -> Look:
        """Look at a start; files that changed since the look before count as growing."""
        groups = self._groups()
        found = groups.get(label, groups.get(_ALL, ()))
        marks = marks_of(file.path for file in found)
        growing: list[str] = []
        if before is not None and before.start == label:
            if before.marks == marks and not before.growing:
                return before
            growing = changed_files({p: m for p, m in before.marks.items() if p in marks}, marks)
        files = tuple(file for file in found if file.path not in growing)
        late, lost = _absent_by_name(label, groups, self.settings.runs.members is None)
        for file in found:
            if file.path in growing and file.parts.member is not None:
                late.add(file.parts.member)
            elif file.path in growing:
                lost.append(file.path)
        look = Look(label, files, tuple(in_order(late)), tuple(lost), tuple(growing), marks)
        return self._with_headers(look, late, lost) if files else look

    def _with_headers(self, look: Look, late: set[Label], lost: list[str]) -> Look:
        try:
            catalogue = self._catalogue(look.files)
        except InputError as error:
            log.debug("%s", error)
            return look
        labels = [catalogue.start_label(number) for number in range(catalogue.starts.size)]
        position = labels.index(look.start) if look.start in labels else len(labels) - 1
        report = survey(self.settings, catalogue.subset(starts=[position]), content=False)
        late |= set(report.missing) | {member for _, member in report.missing_at}
        here = [fault for fault in report.faults if fault.start in (None, labels[position])]
        for fault in here:
            if fault.kind in _LATE and fault.member is not None:
                late.add(fault.member)
            elif fault.kind in _LATE and fault.file is not None:
                lost.append(fault.file)
        return replace(
            look,
            start=labels[position],
            files=self._of_start(look.files, catalogue, position, here),
            late=tuple(in_order(late)),
            lost=tuple(dict.fromkeys(lost)),
            report=report,
        )

    def _of_start(
        self,
        files: tuple[FoundFile, ...],
        catalogue: Catalogue,
        position: int,
        faults: Sequence[Fault],
    ) -> tuple[FoundFile, ...]:
        """Of all files those that hold something of a start, or might if they were whole."""
        if self.settings.runs.lagged:
            return files
        numbers = {int(n) for table in catalogue.tables for n in np.unique(table.source[position])}
        paths = {catalogue.sources[number].path for number in numbers if number >= 0}
        paths |= {fault.file for fault in faults if fault.file is not None}
        return tuple(file for file in files if file.path in paths)

    def _groups(self) -> Groups:
        """Files by the start that their names tell; all in one where they tell none."""
        found = find_files(self.settings.run_files())
        if self.settings.runs.lagged or any(file.parts.start is None for file in found):
            return {_ALL: found}
        groups: dict[str, list[FoundFile]] = {}
        for file in found:
            assert file.parts.start is not None
            label = iso_text(date_ticks(file.parts.start), "standard")
            groups.setdefault(label, []).append(file)
        return groups

    def _catalogue(self, files: Sequence[FoundFile]) -> Catalogue:
        """The headers of some files, read once as long as the files stay as they are."""
        marks = marks_of(file.path for file in files)
        if self._read is None or self._read[0] != marks:
            self._read = marks, find_runs(self.settings, files=files)
        return self._read[1]


def _absent_by_name(label: str, groups: Groups, any_member: bool) -> tuple[set[Label], list[str]]:
    """What the last start of the same hour had, by the names of its files, and this one has not.

    With ``any_member`` a member that was there then is expected now; otherwise only the leads of
    members that are here.
    """
    hour = label.partition("T")[2]
    older = [other for other in groups if other < label and other.partition("T")[2] == hour]
    if not older:
        return set(), []
    here = {(file.parts.member, file.parts.lead) for file in groups[label]}
    members = {member for member, _ in here}
    late: set[Label] = set()
    leads: list[float] = []
    for file in groups[max(older)]:
        member, lead = file.parts.member, file.parts.lead
        if (member, lead) in here:
            continue
        if member is None and lead is not None:
            leads.append(lead)
        elif member is not None and (any_member or member in members):
            late.add(member)
    return late, [f"lead {lead:g} h" for lead in sorted(leads)]
