"""Suspect values: masks, ranges, constants and copies, each with the member they are found in."""

import netCDF4
import numpy as np
import pytest
from survey_cases import only, set_values

from ensemble_horizon.runs import survey_runs


def test_missing_cells_of_one_member(runs):
    report = survey_runs(runs({3: set_values((slice(1, 3), 0, slice(0, 4)), np.nan)}))
    fault = only(report)
    assert (fault.kind, fault.member, fault.lead) == ("missing-cells", 3, 12.0)
    assert "up to 4 missing of 30 cells at leads 12, 18 h" in fault.message
    assert report.drop == (3,)


def test_a_mask_common_to_all_members_is_a_note(runs):
    land = set_values((slice(None), 2, slice(0, 3)), np.nan)
    report = survey_runs(runs(dict.fromkeys(range(5), land)))
    assert (report.verdict, report.faults) == ("usable", ())
    (note,) = report.notes
    assert note.kind == "common-mask"
    assert "up to 3 missing of 30 cells common to the members" in note.message


def test_a_member_missing_more_than_the_common_mask(runs):
    changes = dict.fromkeys(range(5), set_values((slice(None), 2, slice(0, 3)), np.nan))
    changes[1] = set_values((slice(None), 2, slice(0, 4)), np.nan)
    assert only(survey_runs(runs(changes))).member == 1


def test_masks_that_change_from_member_to_member_are_a_note(runs):
    report = survey_runs(
        runs({m: set_values((slice(None), 2, slice(0, m + 1)), np.nan) for m in range(5)})
    )
    assert report.verdict == "usable"
    assert [note.kind for note in report.notes] == ["varying-mask"]


def test_fill_cells_count_as_missing(runs):
    def unwritten(data):
        data.t2m.values[3, 4] = netCDF4.default_fillvals["f4"]
        data.t2m.encoding["_FillValue"] = None
        return data

    fault = only(survey_runs(runs({2: unwritten})))
    assert (fault.kind, fault.member, fault.lead) == ("missing-cells", 2, 24.0)


@pytest.mark.parametrize("incomplete", ["drop", "use"])
def test_implausible_values(runs, incomplete):
    template = runs({1: set_values((3, 2, 2), 1000.0)})
    report = survey_runs(template, plausible={"t2m": (200.0, 330.0)}, incomplete=incomplete)
    fault = only(report)
    assert (fault.kind, fault.member, fault.lead) == ("implausible-values", 1, 24.0)
    assert "to 1000 at lead 24 h, outside the plausible 200 to 330 (1 cells)" in fault.message
    assert report.drop == (1,)


def test_infinite_values(runs):
    fault = only(survey_runs(runs({1: set_values((3, 2, 2), np.inf)})))
    assert (fault.kind, fault.member) == ("infinite-values", 1)


def test_constant_member(runs):
    fault = only(survey_runs(runs({1: set_values(..., 0.0)})))
    assert (fault.kind, fault.member) == ("constant-fields", 1)
    assert fault.message == "'t2m' is 0 everywhere and at every lead"


def test_members_identical_to_the_bit(runs):
    report = survey_runs(runs({4: set_values(..., runs.values[1])}))
    fault = only(report)
    assert (fault.kind, fault.member, fault.file) == ("identical-members", 4, runs.path(4))
    assert fault.message == "members 1 and 4 are identical to the bit in 't2m'"
    assert report.drop == (4,)


def test_members_identical_at_the_start_only_are_a_note(runs):
    report = survey_runs(runs({4: set_values(0, runs.values[1][0])}))
    assert (report.verdict, report.faults) == ("usable", ())
    assert [note.kind for note in report.notes] == ["identical-leads"]


def test_fields_of_zero_do_not_make_members_identical(runs):
    zero = set_values(slice(0, 2), 0.0)
    report = survey_runs(runs({1: zero, 4: zero}))
    assert (report.verdict, report.faults, report.notes) == ("usable", (), ())


def test_all_members_identical_is_not_usable(runs):
    report = survey_runs(runs(dict.fromkeys(range(5), set_values(..., runs.values[0]))))
    assert report.verdict == "not_usable"
    assert report.reasons[0] == "1 usable member, where at least 2 are needed"
