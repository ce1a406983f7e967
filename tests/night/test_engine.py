"""The engine: results one by one, errors and lost workers told."""

import os
import signal
import threading
import time

import pytest
import xarray as xr

from ensemble_horizon.errors import EnsembleHorizonError, InputError
from ensemble_horizon.night.engine import Engine, shared


def add_common(number):
    return number + shared()


def refuse(number):
    if number == 3:
        raise InputError("m03.nc", expected="NetCDF", found="text", remedy="remove it")
    return number


def die(number):
    if number == 2:
        os.kill(os.getpid(), signal.SIGKILL)
    return number


def first_is_last(number):
    """Of every four tasks the first takes longest."""
    time.sleep(0.05 if number % 4 == 0 else 0)
    return number


@pytest.mark.parametrize("workers", [1, 2, 7])
def test_results_come_in_the_order_of_the_tasks(workers):
    with Engine(workers, common=100) as engine:
        found = list(engine.run(add_common, list(range(9))))
        assert found == [(n, n + 100) for n in range(9)]
        assert list(engine.run(first_is_last, range(24))) == [(n, n) for n in range(24)]


def test_workers_start_from_a_process_with_threads():
    stop = threading.Event()
    thread = threading.Thread(target=stop.wait)
    thread.start()
    try:
        with Engine(2, common=1) as engine:
            assert dict(engine.run(add_common, [1, 2])) == {0: 2, 1: 3}
    finally:
        stop.set()
        thread.join()


@pytest.mark.parametrize("workers", [1, 2])
def test_an_error_in_a_task_arrives_as_it_is(workers):
    with Engine(workers) as engine, pytest.raises(InputError, match=r"m03.nc: expected NetCDF"):
        list(engine.run(refuse, list(range(8))))


def test_a_killed_worker_is_told():
    with Engine(2) as engine, pytest.raises(EnsembleHorizonError, match="block_memory_mib"):
        list(engine.run(die, list(range(8))))


def test_tasks_are_handed_out_as_results_are_taken():
    """Memory stays flat: no more than a few results wait, however many tasks there are."""
    with Engine(2) as engine:
        drawn = []
        running = engine.run(refuse, (drawn.append(n) or 0 for n in range(500)))
        for taken in range(1, 6):
            next(running)
            assert len(drawn) <= taken + 4
        running.close()


def test_workers_change_no_number(night):
    night.write()
    variables = """[variables.t2]
criteria = [{tolerance = 1.5}, {saturation_fraction = 0.5},
            {chance = {beyond = 2.0, probability = 0.2}}]"""
    pictures = 'maps = "each"\nfigures = true'
    found = {}
    for workers in (1, 2, 7):
        config = night.settings(variables, products=pictures)
        config.write_text(config.read_text().replace("workers = 1", f"workers = {workers}"))
        assert night.estimate("--quiet").exit_code == 0
        table = (night.products / "horizons.csv").read_bytes()
        with xr.open_dataset(night.products / "horizon_maps.nc", decode_times=False) as maps:
            found[workers] = (table, maps.load())
        assert len(list((night.products / "figures").glob("*.png"))) == 4
    for workers in (2, 7):
        assert found[1][0] == found[workers][0]
        xr.testing.assert_equal(found[1][1], found[workers][1])
