"""The product folder: unwritable, on a full disk, or with products of an earlier night."""

import contextlib
import os
import subprocess
import sys
from pathlib import Path

import pytest

CHILD = """
import resource, sys
from ensemble_horizon.cli import main
import ensemble_horizon.cli.estimate
resource.setrlimit(resource.RLIMIT_FSIZE, (int(sys.argv[1]), int(sys.argv[1])))
main(sys.argv[2:])
"""


def contents(folder: Path) -> dict[str, bytes]:
    return {
        str(path.relative_to(folder)): path.read_bytes()
        for path in folder.rglob("*")
        if path.is_file()
    }


def test_the_product_folder_is_a_file(night, refusal):
    night.write()
    night.products.write_text("kept")
    night.settings()
    refusal(night.estimate(), 2, str(night.products))
    assert night.products.read_text() == "kept"
    assert night.written() == ["out"]


def test_the_product_folder_lies_below_a_file(night, refusal):
    night.write()
    (night.folder / "out").write_text("kept")
    night.settings(folder="out/tonight")
    refusal(night.estimate(), 2, "out/tonight")
    assert night.written() == ["out"]


@pytest.mark.skipif(not Path("/proc/self").exists(), reason="no /proc here")
def test_the_product_folder_lies_under_proc(night, refusal):
    night.write()
    night.settings(folder="/proc/ensemble-out")
    refusal(night.estimate(), 2, "/proc/ensemble-out")


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write anywhere")
def test_the_product_folder_may_not_be_written(night, refusal):
    night.write()
    night.products.mkdir()
    night.products.chmod(0o500)
    night.settings()
    refusal(night.estimate(), 2, str(night.products))
    night.products.chmod(0o700)
    assert night.written() == ["out"]


@pytest.mark.skipif(os.geteuid() == 0, reason="root may read anything")
def test_a_run_file_that_may_not_be_read(night, refusal):
    night.write()
    for number in range(6):
        night.member(number).chmod(0)
    night.settings()
    refusal(night.estimate(), 3, "m00.nc")


@contextlib.contextmanager
def small_disk(folder: Path, size: int):
    """A disk of ``size`` KiB at ``folder``; the test is skipped where it may not be mounted."""
    folder.mkdir()
    options = ["mount", "-t", "tmpfs", "-o", f"size={size}k", "tmpfs", str(folder)]
    try:
        done = subprocess.run(options, capture_output=True, check=False)
    except OSError:
        pytest.skip("no mount command")
    if done.returncode:
        pytest.skip("a small disk may not be mounted here")
    try:
        yield
    finally:
        # Lazily, because HDF5 keeps a file open that it could not finish.
        subprocess.run(["umount", "-l", str(folder)], check=True)


@pytest.mark.parametrize("size", [4, 32, 64])
def test_a_full_disk(night, refusal, size):
    night.write()
    night.settings(folder="disk/out", products='maps = "each"\nfigures = false')
    disk = night.folder / "disk"
    with small_disk(disk, size):
        refusal(night.estimate(), 2, "disk/out", "space")
        assert contents(disk) == {}


def test_a_full_disk_keeps_the_products_of_the_night_before(night, refusal):
    night.write()
    night.settings(folder="disk/out")
    disk = night.folder / "disk"
    with small_disk(disk, 512):
        assert night.estimate().exit_code == 0
        before = contents(disk)
        free = os.statvfs(disk)
        (disk / "filler").write_bytes(bytes(free.f_bavail * free.f_frsize - 8192))
        night.settings("[variables.t2]\ncriteria = [{tolerance = 2.5}]", folder="disk/out")
        refusal(night.estimate(), 2, "disk/out", "space")
        (disk / "filler").unlink()
        assert contents(disk) == before


@pytest.mark.parametrize("limit", [100, 20_000])
def test_files_that_may_not_grow(night, limit):
    """The same without a disk of one's own: the system refuses files beyond a size."""
    night.write()
    night.settings()
    done = subprocess.run(
        [sys.executable, "-c", CHILD, str(limit), "estimate", str(night.config)],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode == 2, done.stderr
    assert "Traceback" not in done.stderr
    assert done.stderr.startswith("ensemble-horizon: ")
    assert str(night.products) in done.stderr
    assert "permission" not in done.stderr  # there is permission, but no room
    assert [name for name in night.written() if not (night.folder / name).is_dir()] == []


def test_products_of_an_earlier_night_are_replaced_and_foreign_files_kept(night):
    night.write()
    night.settings(products='maps = "each"\nfigures = true')
    night.products.mkdir()
    (night.products / "notes.txt").write_text("mine")
    night.estimated()
    first = contents(night.products)
    night.settings("[variables.t2]\ncriteria = [{tolerance = 2.5}]", products="figures = false")
    night.estimated()
    second = contents(night.products)
    assert second["notes.txt"] == b"mine"
    assert second["horizons.csv"] != first["horizons.csv"]
    assert second["horizons.nc"] != first["horizons.nc"]


def test_figures_of_an_earlier_estimate_do_not_pass_for_those_of_this_one(night):
    night.write()
    night.settings(products='maps = "each"\nfigures = true')
    night.estimated()
    old = {name for name in contents(night.products) if name.startswith("figures/")}
    night.settings("[variables.t2]\ncriteria = [{tolerance = 2.5}]")
    night.estimated()
    left = old & set(contents(night.products))
    listed = (night.products / "README.txt").read_text(encoding="utf-8")
    assert not [name for name in left if name in listed]
    assert not left, f"figures of another criterion still stand there: {sorted(left)}"


def test_a_refused_night_keeps_the_products_of_the_night_before(night, refusal):
    night.write()
    night.settings()
    night.estimated()
    before = contents(night.products)
    for number in range(6):
        night.member(number).write_bytes(b"CDF")
    refusal(night.estimate(), 3)
    assert contents(night.products) == before


def test_nothing_but_products_is_left(night):
    night.write()
    night.settings(products='maps = "each"\nfigures = true')
    night.estimated()
    names = {Path(name).name for name in contents(night.products)}
    assert {"horizons.csv", "horizons.nc", "horizon_maps.nc", "README.txt"} <= names
    assert not [name for name in names if name.startswith(".") or name.endswith((".tmp", ".part"))]
    assert all(name.endswith((".csv", ".nc", ".txt", ".png")) for name in names)
    assert night.written()[0] == "out"


def test_a_missing_folder_above_the_products_is_made(night):
    night.write()
    night.settings(folder="a/b/c")
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert (night.folder / "a/b/c/horizons.csv").is_file()


def test_products_over_the_input_are_not_lost(night):
    """The products may stand beside the runs; the runs stay as they are."""
    values = night.write()
    night.settings(folder=".")
    before = {number: night.member(number).read_bytes() for number in range(len(values))}
    night.estimate()
    assert {n: night.member(n).read_bytes() for n in before} == before
    assert night.config.is_file()
