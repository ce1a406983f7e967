"""What can be wrong with a cluster, told by name and with what to do next."""

import importlib.metadata
import logging
import os
import platform
import re
import shutil
import signal
import socket
import subprocess
import sys
import sysconfig
from pathlib import Path

import cluster_tasks as tasks
import dask
import pytest
from loopback import Loopback
from nightly_archive import MADE, Nightly, contents, light_briefing

from ensemble_horizon.errors import EnsembleHorizonError, SettingsError
from ensemble_horizon.night.engine import Cluster, Engine
from ensemble_horizon.night.engine.cluster import ClusterWorkers, patience, scheduler_address
from ensemble_horizon.night.engine.probe import require_fit

TIMEOUT = "distributed.comm.timeouts.connect"


def on(cluster, common=None, **options):
    return Engine(1, common, Cluster(str(cluster.file), cluster.folder, **options))


@pytest.fixture
def told(caplog, monkeypatch):
    """The log, which commands keep to themselves."""
    monkeypatch.setattr(logging.getLogger("ensemble_horizon"), "propagate", True)
    caplog.set_level(logging.WARNING, "ensemble_horizon")
    return caplog


@pytest.fixture
def impatient():
    with dask.config.set({TIMEOUT: "1s"}):
        yield


@pytest.mark.parametrize(
    "lines, words",
    [
        ('scheduler = "tcp://here:1"\nworkers = 2', ("engine.workers", "engine.scheduler")),
        ('scheduler = "here:8786"', ("engine.scheduler", "tcp://here:8786", "tls://here:8786")),
        ('scheduler = "udp://here:1"', ("engine.scheduler", "tcp://here:1", '"configured"')),
        ('scheduler = "tcp://here"', ("engine.scheduler", "tcp://host:8786")),
        ('scheduler = ""', ("engine.scheduler",)),
        ('schedular = "tcp://here:1"', ("engine.schedular", "'scheduler'")),
    ],
)
def test_mistakes_in_the_settings(night, refusal, lines, words):
    night.write()
    config = night.settings()
    config.write_text(config.read_text().replace("workers = 1", lines))
    refusal(night.estimate(), 2, *words)


def test_where_the_address_comes_from(tmp_path, monkeypatch):
    assert scheduler_address("tls://far:1", tmp_path) == "tls://far:1"
    (tmp_path / "s.json").write_text('{"address": "tcp://far:2"}')
    assert scheduler_address("s.json", tmp_path) == "tcp://far:2"
    with dask.config.set({"scheduler-address": "tcp://far:3"}):
        assert scheduler_address("configured", tmp_path) == "tcp://far:3"
    no_scheduler = dask.config.set({"scheduler-address": None})
    with no_scheduler, pytest.raises(SettingsError, match="DASK_SCHEDULER_ADDRESS"):
        scheduler_address("configured", tmp_path)
    with pytest.raises(SettingsError, match=r"s2.json: No such file .* --scheduler-file"):
        scheduler_address("s2.json", tmp_path)
    for text in ("{}", "[]", "no json"):
        (tmp_path / "s.json").write_text(text)
        with pytest.raises(SettingsError, match="holds no address"):
            scheduler_address("s.json", tmp_path)


def test_how_long_to_wait():
    assert patience() == 10.0
    with dask.config.set({TIMEOUT: "1500ms"}):
        assert patience() == 1.5


def test_no_scheduler_at_the_address(night, refusal, impatient):
    night.write()
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        address = f"tcp://127.0.0.1:{free.getsockname()[1]}"
    config = night.settings()
    config.write_text(config.read_text().replace("workers = 1", f'scheduler = "{address}"'))
    result = night.estimate("--quiet")
    refusal(result, 1, f"the scheduler at {address}", "within 1 s", "engine.scheduler", TIMEOUT)
    assert "distributed" not in result.stderr.replace(TIMEOUT, "").replace("distributed.comm", "")
    assert night.written() == []


@pytest.mark.slow
def test_no_workers(tmp_path, impatient):
    with (
        Loopback(tmp_path, workers=0) as cluster,
        pytest.raises(EnsembleHorizonError, match=r"a worker; found none within 1 s. Next: start"),
        on(cluster),
    ):
        pass


@pytest.mark.slow
def test_a_killed_worker_changes_nothing(tmp_path, told):
    """Killed with a task under way: what it had is done again, and the log names it."""
    with Loopback(tmp_path) as cluster, on(cluster, 100) as engine:
        found = []
        for _, (number, pid) in engine.run(tasks.slow, range(16)):
            found.append(number)
            if number == 5:
                os.kill(pid, signal.SIGKILL)
        assert found == list(range(16))
    assert re.search(r"worker tcp://127.0.0.1:\d+ is gone; what it had", told.text)


@pytest.mark.slow
def test_work_goes_on_with_new_workers_where_all_are_killed(tmp_path):
    """The common object went with them and is sent anew."""
    with Loopback(tmp_path, workers=1) as cluster, on(cluster, 100) as engine:
        found = []
        for number, result in engine.run(tasks.add_common, range(12)):
            found.append(result)
            if number == 3:
                cluster.workers[0].kill()
                cluster.workers[0].wait()
                cluster.add_worker()
        assert found == [n + 100 for n in range(12)]


@pytest.mark.slow
def test_nobody_is_waited_for_where_all_workers_are_gone(tmp_path, impatient):
    with Loopback(tmp_path, workers=1) as cluster, on(cluster) as engine:
        running = engine.run(tasks.slow, range(12))
        next(running)
        cluster.workers[0].kill()
        with pytest.raises(EnsembleHorizonError, match="found none within 1 s"):
            list(running)


@pytest.mark.slow
def test_a_lost_scheduler_is_told(tmp_path, impatient, capfd):
    with Loopback(tmp_path) as cluster:
        with on(cluster) as engine:
            running = engine.run(tasks.slow, range(30))
            next(running)
            cluster.scheduler.kill()
            with pytest.raises(EnsembleHorizonError, match=r"connection was lost.*nightly") as told:
                list(running)
        assert told.value.exit_status == 1
        assert (
            told.value.culprit == f"the scheduler at {scheduler_address(str(cluster.file), Path())}"
        )
    assert "distributed" not in capfd.readouterr().err


@pytest.mark.slow
def test_a_night_goes_on_after_a_lost_scheduler(tmp_path, monkeypatch, impatient):
    monkeypatch.setenv("SOURCE_DATE_EPOCH", MADE)
    monkeypatch.setattr("ensemble_horizon.night.chain.closing.write_briefing", light_briefing)
    nightly = Nightly(tmp_path)
    nightly.write(14)
    config = nightly.settings(products='maps = "each"\nfigures = false')
    nightly.run("--quiet")
    alone = contents(nightly.night())
    for folder in (nightly.products, nightly.archive):
        shutil.rmtree(folder)
    (tmp_path / "cluster").mkdir()
    config.write_text(
        config.read_text().replace("workers = 1", 'scheduler = "cluster/scheduler.json"')
    )
    with Loopback(tmp_path / "cluster") as cluster, monkeypatch.context() as only_now:
        plain = ClusterWorkers.result

        def result_of_a_lost_one(self, pending):
            cluster.scheduler.kill()
            cluster.scheduler.wait()
            return plain(self, pending)

        only_now.setattr(ClusterWorkers, "result", result_of_a_lost_one)
        said = nightly.run("--quiet", status=1).stderr
        assert "the scheduler at tcp://127.0.0.1" in said
        assert nightly.states()["survey"] == "done"
        assert not nightly.night().exists()
    cluster.file.unlink()
    with Loopback(tmp_path / "cluster"):
        nightly.run("--quiet")
    assert nightly.states()["survey"] == "kept"
    assert contents(nightly.night()) == alone


def without_package(folder: Path, version: str | None = None) -> Path:
    """The libraries of this Python but for the package; with a version, it pretends to have it."""
    folder.mkdir()
    for item in Path(sysconfig.get_paths()["purelib"]).iterdir():
        if "ensemble_horizon" not in item.name:
            (folder / item.name).symlink_to(item)
    if version is not None:
        (folder / "ensemble_horizon").mkdir()
        (folder / "ensemble_horizon" / "__init__.py").touch()
        about = folder / f"ensemble_horizon-{version}.dist-info"
        about.mkdir()
        (about / "METADATA").write_text(f"Name: ensemble-horizon\nVersion: {version}\n")
    return folder


@pytest.mark.slow
@pytest.mark.parametrize(
    "version, words",
    [
        (
            None,
            r"the package ensemble-horizon; found that it is not installed there. Next: install",
        ),
        (
            "9.9",
            r"ensemble-horizon \S+, as here; found version 9.9. Next: install ensemble-horizon",
        ),
    ],
)
def test_a_worker_with_another_package_is_named(tmp_path, version, words):
    libraries = without_package(tmp_path / "libraries", version)
    with Loopback(tmp_path, workers=1) as cluster:
        bare = str(
            Path(sys.base_prefix) / "bin" / f"python{sys.version_info[0]}.{sys.version_info[1]}"
        )
        cluster.add_worker(bare, environment={"PYTHONPATH": str(libraries)})
        cluster.wait()
        with pytest.raises(EnsembleHorizonError, match=words) as told, on(cluster):
            pass
        assert re.fullmatch(r"worker tcp://127.0.0.1:\d+", told.value.culprit)


@pytest.mark.slow
@pytest.mark.skipif(not Path("/proc/self/cwd").exists(), reason="needs /proc")
def test_a_worker_that_sees_other_files_is_named(tmp_path, monkeypatch):
    """One path that leads each process to files of its own, as without a shared file system."""
    here, empty, other = (tmp_path / name for name in ("here", "empty", "other"))
    for folder, text in ((here, "run"), (empty, None), (other, "another run")):
        folder.mkdir()
        if text is not None:
            (folder / "m00.nc").write_text(text)
    monkeypatch.chdir(here)
    file = "/proc/self/cwd/m00.nc"
    with Loopback(tmp_path, workers=0) as cluster:
        cluster.add_worker(folder=here)
        cluster.wait()
        with on(cluster, files=(file,), folder=Path("/proc/self/cwd")):
            pass
        elsewhere = cluster.add_worker(folder=empty)
        cluster.wait()
        with pytest.raises(EnsembleHorizonError, match=r"does not see it \(No such file") as told:
            on(cluster, files=(file,)).__enter__()
        assert file in told.value.expected
        assert "mount under the same path" in told.value.remedy
        with pytest.raises(EnsembleHorizonError, match="does not see what is written there"):
            on(cluster, folder=Path("/proc/self/cwd")).__enter__()
        elsewhere.terminate()
        elsewhere.wait()
        cluster.add_worker(folder=other)
        cluster.wait()
        with pytest.raises(EnsembleHorizonError, match="another file there, of other size or time"):
            on(cluster, files=(file,)).__enter__()
    assert [item.name for item in here.iterdir()] == ["m00.nc"]


class Answers:
    """Workers that answer as they are told."""

    def __init__(self, **answers):
        self.answers = answers

    def run(self, function, *args, workers, on_error):
        assert on_error == "return"
        given = self.answers.get(function.__name__, {})
        return {address: given.get(address, function(*args)) for address in workers}


def test_a_worker_of_another_python_is_named():
    answers = Answers(python_version={"tcp://b:1": "3.10.4"})
    with pytest.raises(EnsembleHorizonError, match=r"^worker tcp://b:1: expected Python 3") as told:
        require_fit(answers, ["tcp://a:1", "tcp://b:1"], (), None)
    assert told.value.found == "Python 3.10.4"
    assert platform.python_version().rpartition(".")[0] in told.value.expected


def test_all_unfit_workers_are_named(tmp_path):
    answers = Answers(
        find_spec={"tcp://b:1": None}, access={"tcp://c:1": False},
        stat={"tcp://d:1": FileNotFoundError(2, "No such file or directory")},
    )  # fmt: skip
    workers = [f"tcp://{name}:1" for name in "abcd"]
    with pytest.raises(EnsembleHorizonError) as told:
        require_fit(answers, workers, (__file__,), tmp_path)
    for address in workers[1:]:
        assert address in str(told.value)
    assert workers[0] not in str(told.value)


def test_other_libraries_are_told_but_are_no_fault(told):
    class Older(Answers):
        def run(self, function, *args, workers, on_error):
            found = super().run(function, *args, workers=workers, on_error=on_error)
            if function is importlib.metadata.version and args == ("numpy",):
                found["tcp://b:1"] = "0.1"
            return found

    require_fit(Older(), ["tcp://a:1", "tcp://b:1"], (), None)
    assert re.search(r"numpy \S+ here, other versions at tcp://b:1 \(0.1\)", told.text)


@pytest.fixture
def certificate(tmp_path):
    """A certificate made here that vouches for itself, and its key."""
    if shutil.which("openssl") is None:
        pytest.skip("needs openssl")
    paths = [str(tmp_path / name) for name in ("key.pem", "certificate.pem")]
    command = [
        "openssl",
        "req",
        "-x509",
        "-newkey",
        "rsa:2048",
        "-nodes",
        "-days",
        "2",
        "-subj",
        "/CN=loopback",
    ]
    subprocess.run(
        [*command, "-keyout", paths[0], "-out", paths[1]], check=True, capture_output=True
    )
    return paths


@pytest.mark.slow
def test_an_encrypted_cluster_by_the_configuration_of_dask(tmp_path, certificate, impatient):
    key, mine = certificate
    tls = {"ca-file": mine, **{f"{who}.{what}": path for who in ("scheduler", "worker", "client")
                               for what, path in (("key", key), ("cert", mine))}}  # fmt: skip
    names = {f"distributed.comm.tls.{name}": path for name, path in tls.items()}
    environment = {
        "DASK_" + name.upper().replace(".", "__").replace("-", "_"): path
        for name, path in names.items()
    }
    encrypted = dask.config.set(names)
    with encrypted, Loopback(tmp_path, 2, protocol="tls", environment=environment) as cluster:
        address = scheduler_address(str(cluster.file), tmp_path)
        assert address.startswith("tls://")
        for name in (address, "configured", str(cluster.file)):
            there = dask.config.set({"scheduler-address": address})
            with there, Engine(1, 100, Cluster(name, tmp_path)) as engine:
                assert list(engine.run(tasks.add_common, range(3))) == [
                    (0, 100),
                    (1, 101),
                    (2, 102),
                ]
        for name in names:
            dask.config.set({name: None})
        with pytest.raises(EnsembleHorizonError, match=r"distributed\.comm\.tls in dask's"):
            on(cluster).__enter__()
