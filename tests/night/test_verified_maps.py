"""What the maps of scores rest on: fields kept start by start, and analyses kept at hand."""

import numpy as np

from ensemble_horizon.night.engine import Engine
from ensemble_horizon.night.verification.maps import kept_quantities, skill_interval, skill_of
from ensemble_horizon.night.verification.reading import Recent, VerifyingContext
from ensemble_horizon.night.verification.scratch import scratch_file


def test_the_arrays_used_last_are_at_hand():
    made = []

    def get(key):
        def make():
            made.append(key)
            return np.full(10, key)

        np.testing.assert_array_equal(recent.get(key, make), key)

    recent = Recent(room=2 * 80)
    for key in (1, 2, 1, 3, 1, 2):
        get(key)
    assert made == [1, 2, 3, 2]  # the third put the second out, not the first, used since


def test_an_array_without_room_is_given_all_the_same():
    recent = Recent(room=79)
    for _ in range(2):
        np.testing.assert_array_equal(recent.get(0, lambda: np.arange(10)), np.arange(10))
    assert recent.room == 79


def test_means_are_of_all_starts_and_skill_of_those_with_both():
    fields = np.random.default_rng(4).gamma(4, 1, (2, 12, 2, 5)).astype("f4")
    fields[1, 3:6] = np.nan  # no reference
    fields[:, 7, 1, 2] = np.nan
    fields[:, :, 0, 4] = np.nan
    with scratch_file(2, 2, 12, 5) as scratch:
        for number in range(2):
            for start in range(12):
                scratch.write(number, start, 0, fields[number, start], None)
        with Engine(1, VerifyingContext(None, (), scratch)) as engine:
            mean, value, low, high = skill_interval(engine, 2, 5, 0.9)
    seen = np.isfinite(fields[0]).any(axis=0)
    wanted = np.full((2, 5), np.nan)
    wanted[seen] = np.nanmean(fields[0][:, seen].astype(float), axis=0)
    np.testing.assert_allclose(mean, wanted, rtol=1e-6)
    both = np.where(np.isfinite(fields).all(axis=0), fields, np.nan)[:, :, seen].astype(float)
    wanted[seen] = 1 - np.nanmean(both[0], axis=0) / np.nanmean(both[1], axis=0)
    np.testing.assert_allclose(value, wanted, rtol=1e-5)
    # Nine starts have both but for one point, which has eight: an interval takes ten.
    assert np.isnan(low).all() and np.isnan(high).all()


def test_what_is_kept_gives_the_skill_it_is_kept_for():
    for fields, name in (
        (("error", "crps", "climatology_crps", "persistence_crps"), "skill_climatology"),
        (("error", "crps", "persistence_crps"), "skill_persistence"),
        (("error", "crps"), None),
    ):
        assert skill_of(fields) == skill_of(kept_quantities(fields)) == name
