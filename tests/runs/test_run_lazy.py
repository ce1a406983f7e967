"""Laziness, processes, and the bounded cache of open files."""

import multiprocessing
import os
import pickle

import dask
import numpy as np
import pytest

from ensemble_horizon.runs import close_files, open_runs, read_catalogue, reading
from ensemble_horizon.runs.handles import HANDLES, LOCK, Handles


@pytest.fixture
def template(member_files, tmp_path):
    return str(tmp_path / "m{member:02d}.nc")


@pytest.fixture
def reads(monkeypatch):
    found = []
    original = reading._read_slab
    monkeypatch.setattr(
        reading, "_read_slab", lambda *args: (found.append(args), original(*args))[1]
    )
    return found


def test_nothing_is_read_until_asked(template, truth, reads):
    data = open_runs(template)
    spread = data.t2m.std("member", ddof=1).isel(latitude=2)
    assert reads == []
    assert dask.is_dask_collection(data.t2m.data)
    np.testing.assert_allclose(
        spread.compute(scheduler="synchronous").values[0],
        truth.std(axis=0, ddof=1)[:, 2], rtol=1e-4)  # fmt: skip
    assert len(reads) == 3


def test_one_chunk_holds_all_members(template):
    chunks = open_runs(template).t2m.chunksizes
    assert chunks["member"] == (3,)
    assert chunks["start"] == (1,)


def test_threads_read_safely(template, truth):
    values = open_runs(template).t2m.chunk(lead=1)
    for _ in range(5):
        with dask.config.set(scheduler="threads", num_workers=8):
            np.testing.assert_array_equal(values.values[0], truth.swapaxes(0, 1))


def test_processes(template, truth):
    with dask.config.set(scheduler="processes", num_workers=2):
        mean = open_runs(template).t2m.mean("member").values
    np.testing.assert_allclose(mean[0], truth.mean(axis=0), rtol=1e-5)


def _child(catalogue, queue):
    queue.put((HANDLES.opened, catalogue.read("t2m", 0), os.getpid()))


def test_a_forked_child_opens_its_own_handles(template, truth):
    catalogue = read_catalogue(template)
    catalogue.read("t2m", 0)
    context = multiprocessing.get_context("fork")
    queue = context.Queue()
    import warnings

    with warnings.catch_warnings():
        # Other tests leave worker threads behind; forking beside them is what is tested here.
        warnings.simplefilter("ignore", DeprecationWarning)
        child = context.Process(target=_child, args=(catalogue, queue))
        child.start()
    _, values, pid = queue.get(timeout=30)
    child.join(timeout=30)
    assert pid != os.getpid()
    assert child.exitcode == 0
    np.testing.assert_array_equal(values, truth)
    np.testing.assert_array_equal(catalogue.read("t2m", 0), truth)


def test_the_catalogue_is_small_and_survives_pickling(template, truth):
    catalogue = read_catalogue(template)
    catalogue.read("t2m", 0)
    catalogue.token  # noqa: B018 (fills the cached property)
    message = pickle.dumps(catalogue)
    assert len(message) < 8000
    copy = pickle.loads(message)
    np.testing.assert_array_equal(copy.read("t2m", 0), truth)
    assert copy.token == catalogue.token


def test_handles_are_kept_and_bounded(member_files):
    handles = Handles(capacity=2)
    with LOCK:
        first = handles.get(str(member_files[0]))
        assert handles.get(str(member_files[0])) is first
        handles.get(str(member_files[1]))
        handles.get(str(member_files[0]))
        handles.get(str(member_files[2]))
        assert handles.opened == 3
        assert handles.get(str(member_files[0])) is first
        handles.get(str(member_files[1]))
        assert handles.opened == 4
        assert first.dataset.isopen()
        handles.clear()
        assert not first.dataset.isopen()


def test_a_replaced_file_is_opened_again(template, member_files, truth, run_dataset, tmp_path):
    catalogue = read_catalogue(template)
    np.testing.assert_array_equal(catalogue.read("t2m", 0)[1], truth[1])
    run_dataset(truth[1] + 1).to_netcdf(tmp_path / "new.nc")
    os.replace(tmp_path / "new.nc", member_files[1])  # noqa: PTH105
    np.testing.assert_array_equal(catalogue.read("t2m", 0)[1], truth[1] + 1)


def test_reading_headers_leaves_no_file_open(template, member_files, truth, run_dataset):
    open_runs(template)
    # Writing over a file that is still open in this process would be refused.
    run_dataset(truth[0]).to_netcdf(member_files[0])
    open_runs(template).t2m.values  # noqa: B018
    close_files()
    run_dataset(truth[0]).to_netcdf(member_files[0])


def test_a_hundred_files_open_without_reading(tmp_path, run_dataset, reads):
    values = np.zeros((2, 5, 6), "f4")
    first = tmp_path / "m000.nc"
    run_dataset(values).to_netcdf(first)
    for m in range(1, 100):
        (tmp_path / f"m{m:03d}.nc").write_bytes(first.read_bytes())
    data = open_runs(str(tmp_path / "m{member:03d}.nc"))
    assert data.sizes["member"] == 100
    assert reads == []


def test_attributes_are_kept(member_files, tmp_path, truth, run_dataset):
    data = run_dataset(truth[0])
    data.attrs["title"] = "invented"
    data.t2m.attrs |= {"long_name": "2 m temperature", "standard_name": "air_temperature"}
    data.to_netcdf(tmp_path / "x.nc")
    opened = open_runs(tmp_path / "x.nc")
    assert opened.attrs["title"] == "invented"
    assert opened.t2m.attrs == {
        "units": "K", "long_name": "2 m temperature", "standard_name": "air_temperature"
    }  # fmt: skip
    assert opened.member.attrs["standard_name"] == "realization"


def test_members_left_out(template, truth):
    data = open_runs(template, drop=[1, 77])
    assert data.member.values.tolist() == [0, 2]
    np.testing.assert_array_equal(data.t2m.values[0], truth[[0, 2]].swapaxes(0, 1))
