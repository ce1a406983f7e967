"""Notes of a comparison on members, faults and gaps: each told once, the first few by name."""

from types import SimpleNamespace

from ensemble_horizon.night.comparison.gaps import note_faults, note_gaps
from ensemble_horizon.night.comparison.members import note_members, note_sizes
from ensemble_horizon.night.comparison.named import Notes
from ensemble_horizon.night.verification.gaps import Gap
from ensemble_horizon.runs import Fault

LABELS = ("old", "new")


def found(members, drop=()):
    return SimpleNamespace(
        catalogue=SimpleNamespace(members=members), report=SimpleNamespace(drop=drop)
    )


def test_a_member_left_out_throughout_is_told_once():
    notes = Notes()
    note_sizes((found((0, 1, 2, 3)), found((0, 2), drop=(1, 3, 7))), LABELS, notes)
    assert notes.cautions[1:] == [
        "members 1 and 3: left out of new at every start, used in the other"
    ]
    assert notes.cautions[0].startswith("old has 4 members and new 2: ")
    used = ({"s": {0, 1, 2, 3}, "t": {0, 1, 2, 3}}, {"s": {0, 2}, "t": {0, 2}})
    note_members("t2", used, LABELS, notes)
    assert len(notes.cautions) == 2


def test_many_starts_with_other_members_are_counted():
    notes = Notes()
    here = {f"s{number}": {0, 1} for number in range(8)}
    there = {name: {0} if number < 6 else {0, 1} for number, name in enumerate(here)}
    note_members("t2", (here, there), LABELS, notes)
    assert notes.cautions == [
        "t2: at 6 of 8 starts not the same members count in both (s0: member 1 only in old; "
        "s1: member 1 only in old; s2: member 1 only in old; s3: member 1 only in old; and 2 more)"
    ]


def test_faults_are_told_once_and_only_of_common_starts():
    faults = [
        Fault("missing-lead", member=number, start="s0", message="lacks 6 h", variable="t2")
        for number in (1, 1, 2, 3, 4, 5)
    ]
    faults += [
        Fault("missing-lead", member=9, start="elsewhere", message="lacks 6 h"),
        Fault("identical-leads", message="worth knowing, no more"),
    ]
    notes = Notes()
    note_faults("old", faults, ["s0"], notes)
    note_faults("new", faults[-2:], ["s0"], notes)
    assert notes.left_out == [
        "5 faults in old: t2, member 1, start s0: lacks 6 h; t2, member 2, start s0: lacks 6 h; "
        "t2, member 3, start s0: lacks 6 h; and 2 more"
    ]


def test_gaps_that_both_have_are_told_once():
    both, one = Gap("t2", "analysis", 2, 9, "a, b"), Gap("t2", "observation at tower", 1, 9, "c")
    notes = Notes()
    note_gaps(([both], [both, one]), LABELS, notes)
    assert notes.left_out == [
        "scores: t2: no analysis at 2 of 9: a, b",
        "scores of new: t2: no observation at tower at 1 of 9: c",
    ]
