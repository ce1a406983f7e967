"""Files appear whole or not at all, and what the disk refuses is said in plain words."""

from __future__ import annotations

import errno
import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

from ensemble_horizon.errors import ProductError
from ensemble_horizon.products.folder import moved_together, write_products
from ensemble_horizon.products.writing import written_whole


def everything(folder):
    return sorted(path.relative_to(folder).as_posix() for path in folder.rglob("*"))


@pytest.fixture
def small_disk(tmp_path):
    """A real disk of 160 kB, where the machine lets us have one."""
    place = tmp_path / "disk"
    place.mkdir()
    mount = shutil.which("mount")
    if mount is None or os.geteuid() != 0:
        pytest.skip("only root can mount a small disk")
    done = subprocess.run(
        [mount, "-t", "tmpfs", "-o", "size=160k", "tmpfs", str(place)],
        capture_output=True,
        check=False,
    )
    if done.returncode:
        pytest.skip("mounting is not permitted here")
    yield place
    # Lazily: the HDF5 library keeps a file that it failed to write open until the program ends.
    subprocess.run(["umount", "-l", str(place)], check=True)


def test_the_target_is_replaced_at_one_stroke(tmp_path):
    target = tmp_path / "deep" / "note.txt"
    with written_whole(target) as neighbour:
        assert neighbour.parent == target.parent
        assert neighbour.suffix == ".txt" and neighbour.name.startswith(".")
        neighbour.write_text("first")
        assert not target.exists()
    with written_whole(target) as neighbour:
        neighbour.write_text("second")
        assert target.read_text() == "first"
    assert target.read_text() == "second"
    assert everything(target.parent) == ["note.txt"]


def test_a_failure_leaves_the_old_file_and_no_neighbour(tmp_path):
    target = tmp_path / "note.txt"
    target.write_text("old")
    with pytest.raises(KeyError), written_whole(target) as neighbour:
        neighbour.write_text("half")
        raise KeyError("a fault of the writer")
    assert target.read_text() == "old"
    assert everything(tmp_path) == ["note.txt"]


def test_interruption_leaves_no_neighbour(tmp_path):
    with pytest.raises(KeyboardInterrupt), written_whole(tmp_path / "a.nc") as neighbour:
        neighbour.write_text("half")
        raise KeyboardInterrupt
    assert everything(tmp_path) == []


def test_a_file_in_place_of_the_folder_is_named(tmp_path):
    (tmp_path / "products").write_text("I am a file")
    target = tmp_path / "products" / "horizons.csv"
    with pytest.raises(ProductError) as caught, written_whole(target) as neighbour:
        neighbour.write_text("never")
    words = str(caught.value)
    assert str(target) in words and "a file stands in the way" in words
    assert "move that file away" in words and caught.value.exit_status == 2
    assert (tmp_path / "products").read_text() == "I am a file"


def test_a_folder_in_place_of_the_file_is_named(tmp_path):
    target = tmp_path / "horizons.csv"
    target.mkdir()
    with pytest.raises(ProductError, match="found a folder of that name"), written_whole(target):
        pytest.fail("the block must not run")


@pytest.mark.skipif(not Path("/proc/self").exists(), reason="no /proc on this system")
def test_a_folder_that_nobody_can_write_not_even_root():
    target = Path("/proc/ensemble-horizon/horizons.csv")
    with (
        pytest.raises(ProductError, match=r"/proc/ensemble-horizon/horizons\.csv"),
        written_whole(target) as neighbour,
    ):
        neighbour.write_text("never")


@pytest.mark.parametrize(
    ("code", "found", "remedy"),
    [
        (errno.ENOSPC, "is full", "free some space"),
        (errno.EDQUOT, "is full", "free some space"),
        (errno.EROFS, "read-only file system", "a disk that can be written"),
        (errno.EACCES, "no permission to write", "ask for write permission"),
        (errno.EIO, "Input/output error", "look at the disk"),
    ],
)
def test_refusals_of_the_disk_have_words(tmp_path, code, found, remedy):
    target = tmp_path / "horizons.nc"
    with pytest.raises(ProductError) as caught, written_whole(target) as neighbour:
        neighbour.write_text("half")
        raise OSError(code, os.strerror(code))
    assert found in caught.value.found and remedy in caught.value.remedy
    assert caught.value.culprit == str(target)
    assert isinstance(caught.value.__cause__, OSError)
    assert everything(tmp_path) == []


def test_a_full_disk_for_real(small_disk):
    target = small_disk / "big.bin"
    target.write_text("old")
    with pytest.raises(ProductError, match="is full"), written_whole(target) as neighbour:
        neighbour.write_bytes(os.urandom(400_000))
    assert target.read_text() == "old"
    assert everything(small_disk) == ["big.bin"]


def test_products_on_a_full_disk_leave_nothing(small_disk, result, provenance):
    (small_disk / "filler").write_bytes(bytes(60_000))
    with pytest.raises(ProductError, match="is full"):
        write_products(small_disk / "night", [result], provenance, figures=True)
    assert everything(small_disk) == ["filler"]
    assert shutil.disk_usage(small_disk).free > 60_000


def test_a_netcdf_file_on_a_full_disk_is_a_product_error(small_disk, result, provenance):
    from ensemble_horizon.products.curve_file import write_horizon_file

    (small_disk / "filler").write_bytes(bytes(140_000))
    with pytest.raises(ProductError) as caught:
        write_horizon_file(small_disk / "horizons.nc", [result], provenance)
    assert "horizons.nc" in caught.value.culprit and "is full" in caught.value.found
    assert everything(small_disk) == ["filler"]
    # The room that was left is free again.
    assert shutil.disk_usage(small_disk).free > 12_000


def test_the_program_ends_in_order_after_a_full_disk(small_disk):
    code = f"""
import sys
sys.path.insert(0, {str(Path(__file__).parent)!r})
from synthetic_products import GRIDS, make_maps
from ensemble_horizon.errors import ProductError
from ensemble_horizon.products import write_map_file
try:
    write_map_file({str(small_disk / "maps.nc")!r}, [make_maps(GRIDS["global"]())], {{}})
except ProductError as error:
    sys.exit(error.exit_status)
"""
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, check=False, text=True)
    assert (done.returncode, done.stderr) == (2, "")
    assert everything(small_disk) == []


def test_moves_are_undone_when_one_fails(tmp_path):
    (tmp_path / "a.txt").write_text("old a")
    (tmp_path / "b.txt").mkdir()
    with (
        pytest.raises(ProductError, match="a folder of that name"),
        moved_together(tmp_path) as aside,
    ):
        (aside / "figures").mkdir()
        for name in ("a.txt", "aa.txt", "b.txt", "figures/c.txt"):
            (aside / name).write_text("new")
    assert (tmp_path / "a.txt").read_text() == "old a"
    assert everything(tmp_path) == ["a.txt", "b.txt"]


def test_a_failed_block_removes_the_folders_it_made(tmp_path):
    with pytest.raises(ValueError, match="fault"), moved_together(tmp_path / "x" / "y") as aside:
        (aside / "a.txt").write_text("half")
        raise ValueError("fault")
    assert everything(tmp_path) == []
