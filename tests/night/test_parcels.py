"""Results on their way between processes: as through a pipe, and nothing is left behind."""

import pickle

import numpy as np
import pytest

from ensemble_horizon.night.engine import Engine
from ensemble_horizon.night.engine.parcels import pack, unpack


def fields(number):
    rng = np.random.default_rng(number)
    large = rng.normal(size=(7, 20_001)).astype(np.float32)
    return {
        "large": large,
        "turned": np.asfortranarray(large),
        "strided": large[:, ::200],
        "small": np.arange(3),
        "text": f"number {number}",
        "objects": np.array([None, "a"], dtype=object),
    }


def assert_same(found, wanted):
    for name, value in wanted.items():
        np.testing.assert_array_equal(found[name], value)
    assert found["large"].flags.writeable
    assert found["large"].dtype == np.float32


def test_large_arrays_go_by_file_and_the_file_goes_with_them(tmp_path):
    parcel = pack(fields(1), tmp_path)
    assert parcel.path is not None
    assert len(parcel.body) < 10_000
    assert_same(unpack(parcel), fields(1))
    assert list(tmp_path.iterdir()) == []


def test_small_results_need_no_file(tmp_path):
    parcel = pack({"few": np.arange(10)}, tmp_path)
    assert parcel.path is None
    assert list(tmp_path.iterdir()) == []
    np.testing.assert_array_equal(unpack(parcel)["few"], np.arange(10))


@pytest.mark.parametrize("folder", [None, "gone"])
def test_without_room_for_a_file_they_take_the_pipe(tmp_path, folder):
    parcel = pack(fields(2), folder and tmp_path / folder)
    assert parcel.path is None
    assert_same(unpack(pickle.loads(pickle.dumps(parcel))), fields(2))


def test_a_file_cut_short_is_no_result(tmp_path):
    parcel = pack(fields(3), tmp_path)
    parcel.path.write_bytes(parcel.path.read_bytes()[:-8])
    with pytest.raises(OSError, match="cut short"):
        unpack(parcel)


def test_an_engine_leaves_nothing_behind_even_where_results_are_not_taken(tmp_path, monkeypatch):
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path))
    with Engine(2) as engine:
        found = dict(engine.run(fields, [4, 5, 6]))
        for position, number in enumerate([4, 5, 6]):
            assert_same(found[position], fields(number))
        running = engine.run(fields, list(range(8)))
        next(running)
        running.close()
    assert list(tmp_path.iterdir()) == []


def test_results_come_in_the_order_of_the_tasks():
    with Engine(2) as engine:
        found = [(place, part["text"]) for place, part in engine.run(fields, list(range(9)))]
    assert found == [(number, f"number {number}") for number in range(9)]
