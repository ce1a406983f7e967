"""Faults as the reader of a briefing is told them."""

from __future__ import annotations

import pytest

from ensemble_horizon.night.chain.stages import sentences
from ensemble_horizon.runs.faults import Fault
from ensemble_horizon.settings.reading import settings_from


def settings(incomplete="drop"):
    return settings_from(
        {
            "runs": {"files": "m*.nc", "incomplete": incomplete},
            "variables": {
                "u10": {"label": "Eastward wind", "units": "m s-1", "criteria": [{"tolerance": 3}]}
            },
            "products": {"folder": "out"},
        }
    )


DAMAGED = (
    "expected a complete NetCDF file; found a damaged file ([Errno -101] NetCDF: HDF error: "
    "'/data/runs/2031 02/m02.nc')"
)


@pytest.mark.parametrize(
    ("fault", "told"),
    [
        (
            Fault("unreadable-file", file="/data/runs/2031 02/m02.nc", member=2, message=DAMAGED),
            "Member 2: expected a complete NetCDF file; found a damaged file (NetCDF: HDF error: "
            "'m02.nc'); left out.",
        ),
        (
            Fault("unusable-file", file="/data/runs/odd.nc", message="lies in /data/runs/odd.nc"),
            "File odd.nc: lies in odd.nc; left out.",
        ),
        (
            Fault("missing-cells", member=1, variable="u10", message="no value at lead 60 h"),
            "Member 1, Eastward wind: no value at lead 60 h; left out.",
        ),
        (
            Fault("constant-fields", member=1, variable="v10", message="units m/s and 3 h/6 h"),
            "Member 1, v10: units m/s and 3 h/6 h; left out.",
        ),
        (
            Fault("missing-member", member=3, message="no file holds it"),
            "Member 3: no file holds it.",
        ),
    ],
)
def test_a_fault_is_told_without_paths_and_numbers_and_with_what_followed(fault, told):
    assert sentences([fault, fault], settings()) == [told]


def test_what_is_used_as_it_is_and_what_is_only_worth_knowing():
    faults = [
        Fault("missing-lead", member=1, message="lacks lead 6 h"),
        Fault("identical-leads", member=1, message="is a note"),
    ]
    assert sentences(faults, settings("use")) == [
        "Member 1: lacks lead 6 h; what there is of it is used."
    ]
