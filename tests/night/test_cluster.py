"""The engine on a cluster: a real scheduler and two workers as processes of their own."""

import shutil
import subprocess
import sys

import cluster_tasks as tasks
import netCDF4
import numpy as np
import pytest
from loopback import Loopback
from nightly_archive import MADE, Nightly, contents, light_briefing
from test_compare_command import GAINS, LIMITS, Pair, write_version
from test_rehearsal_command import Desk
from verification_archive import Archive

from ensemble_horizon.errors import InputError
from ensemble_horizon.night.engine import Cluster, Engine

pytestmark = pytest.mark.slow


@pytest.fixture(scope="module")
def cluster(tmp_path_factory):
    with Loopback(tmp_path_factory.mktemp("cluster"), threads=3) as found:
        yield found


@pytest.fixture
def on(cluster):
    """An engine on the cluster with a common object."""

    def engine(common=None, **options):
        return Engine(1, common, Cluster(str(cluster.file), cluster.folder, **options))

    return engine


def test_results_come_in_the_order_of_the_tasks(on):
    with on(100) as engine:
        assert list(engine.run(tasks.add_common, range(9))) == [(n, n + 100) for n in range(9)]
        assert list(engine.run(tasks.first_is_last, range(24))) == [(n, n) for n in range(24)]


def test_the_common_object_arrives_whole_and_once_in_each_process(on):
    with on(tasks.Pair(7, "seven")) as engine:
        assert next(engine.run(tasks.common, range(2)))[1] == (7, "seven")
    with on(tasks.Counted()) as engine:
        found = [count for _, count in engine.run(tasks.unpacked, range(20))]
    assert len(dict(found)) == 2
    assert {count for _, count in found} == {1}


def test_a_worker_of_three_threads_does_one_task_at_a_time(on):
    with on() as engine:
        assert {found for _, found in engine.run(tasks.together, range(30))} == {1}


def test_errors_of_tasks_arrive_as_they_are(on):
    with on() as engine:
        with pytest.raises(InputError, match=r"^m03.nc: expected NetCDF; found text. Next: remove"):
            list(engine.run(tasks.refuse, range(8)))
        with pytest.raises(TimeoutError, match="a task of its own"):
            list(engine.run(tasks.late, range(2)))
        assert list(engine.run(tasks.first_is_last, range(2))) == [(0, 0), (1, 1)]


def test_tasks_are_handed_out_as_results_are_taken(on):
    drawn = []
    with on() as engine:
        running = engine.run(tasks.first_is_last, (drawn.append(n) or n for n in range(100)))
        for taken in range(1, 6):
            next(running)
            assert len(drawn) <= taken + 4
        running.close()


def test_files_are_closed_at_the_end(on, tmp_path):
    path = str(tmp_path / "any.nc")
    netCDF4.Dataset(path, "w").close()
    with on(files=(path,), folder=tmp_path) as engine:
        assert len({pid for _, pid in engine.run(tasks.open_file, [path] * 12)}) == 2
        assert {count for _, count in engine.run(tasks.open_files, range(8))} == {1}
    with on() as engine:
        assert {count for _, count in engine.run(tasks.open_files, range(8))} == {0}
    assert [item.name for item in tmp_path.iterdir()] == ["any.nc"]


def test_the_libraries_of_a_cluster_load_when_one_is_named():
    code = "import sys, ensemble_horizon.cli.estimate, ensemble_horizon.night.writing; "
    code += "print('distributed' in sys.modules, 'dask' in sys.modules)"
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert found.stdout.split() == ["False", "False"]


class Places:
    """Products of the same command on the same files: alone, with 2 and 7 workers, on a cluster."""

    def __init__(self, cluster, monkeypatch):
        monkeypatch.setenv("SOURCE_DATE_EPOCH", MADE)
        self.lines = ["workers = 1", "workers = 2", "workers = 7", f'scheduler = "{cluster.file}"']

    def same(self, configs, products, command):
        """Run the command in each place; its products must be the same files."""
        found = []
        texts = {path: path.read_text() for path in configs}
        for line in self.lines:
            for path, text in texts.items():
                assert "workers = 1" in text or "[engine]" not in text
                text = text if "[engine]" in text else f"{text}[engine]\nworkers = 1\n"
                path.write_text(text.replace("workers = 1", line))
            command()
            found.append({name: plain(products / name) for name in contents(products)})
            shutil.rmtree(products)
        assert len(found[0]) > 2
        for other in found[1:]:
            assert other.keys() == found[0].keys()
            for name, item in found[0].items():
                assert other[name] == item, name


def plain(path):
    """Bytes of a file; of NetCDF all but the text of the settings, where workers are named."""
    if path.suffix != ".nc":
        # These two hold durations, and the text of the settings.
        return b"" if path.name in ("night.json", "rehearsal.json") else path.read_bytes()
    with netCDF4.Dataset(path) as data:
        data.set_auto_maskandscale(False)
        about = {name: data.getncattr(name) for name in data.ncattrs()}
        for name in ("settings", "history", "date_created"):
            about.pop(name, None)
        told = {
            name: {key: str(item.getncattr(key)) for key in item.ncattrs()}
            for name, item in data.variables.items()
        }
        values = {
            name: np.asarray(item[...]).tobytes()
            if item.dtype is not str
            else tuple(np.atleast_1d(item[...]))
            for name, item in data.variables.items()
        }
    return about, told, values


@pytest.fixture
def places(cluster, monkeypatch):
    return Places(cluster, monkeypatch)


def test_estimate(night, places, growing):
    shape = (80, 130)
    grid = {"latitudes": np.linspace(65, 40, 80), "longitudes": np.linspace(-10, 25, 130)}
    night.write(growing(shape=shape), **grid)
    variables = """[variables.t2]
criteria = [{tolerance = 1.5}, {saturation_fraction = 0.5},
            {chance = {beyond = 2.0, probability = 0.2}}]"""
    config = night.settings(variables, products='maps = "each"\nfigures = true')

    def command():
        assert night.estimate("--quiet").exit_code == 0

    places.same([config], night.products, command)


def test_verify(tmp_path, places):
    archive = Archive(tmp_path, starts=12)
    archive.members[2, 3, 1, 0, 0] = 1e6
    archive.members[5, 1, 3] = np.nan
    archive.write()
    region = "[regions.North]\nsouth = 0\nnorth = 90\nwest = -30\neast = 60\n"
    region += "[verification]\nfactor_uncertainty = 0.5\n"
    variable = "plausible = [200, 350]\ncriteria = [{tolerance = 1.5}]"
    maps = 'maps = "pooled"\nfigures = true'
    config = archive.settings(region, variable=variable, products=maps)
    (tmp_path / "factors").mkdir()
    calibration = tmp_path / "factors" / "calibration.nc"
    before = sorted(tmp_path.iterdir())
    places.same(
        [config],
        tmp_path / "out",
        lambda: archive.run("verify", config, "--quiet", "--calibration", calibration),
    )
    assert sorted(tmp_path.iterdir()) == before


def test_compare(tmp_path, places):
    pair = Pair(tmp_path)
    write_version(tmp_path / "old", LIMITS)
    write_version(tmp_path / "new", LIMITS + GAINS)
    configs = [pair.settings(name, products="figures = true") for name in ("old", "new")]

    def command():
        assert pair.compare("--quiet").exit_code == 0

    places.same(configs, pair.products, command)


def test_nightly(tmp_path, places, monkeypatch):
    monkeypatch.setattr("ensemble_horizon.night.chain.closing.write_briefing", light_briefing)
    nightly = Nightly(tmp_path)
    nightly.write(12, 13, 14)
    config = nightly.settings(products='maps = "each"\nfigures = false')

    def command():
        shutil.rmtree(nightly.archive, ignore_errors=True)
        nightly.run("--quiet")

    places.same([config], nightly.products, command)


def test_a_rehearsal(tmp_path, places):
    desk = Desk(tmp_path)

    def command():
        desk.made()

    places.same([desk.config], desk.archive, command)
