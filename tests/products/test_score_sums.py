"""Sums of one start as a file: what is read is what was written, or it is refused."""

import dataclasses

import netCDF4
import numpy as np
import pytest

from ensemble_horizon.errors import InputError, ProductError
from ensemble_horizon.products import score_sums
from ensemble_horizon.products.score_sums import (
    OtherFormatError,
    PlaceSums,
    StartSums,
    VariableSums,
    read_score_sums,
    write_score_sums,
)
from ensemble_horizon.skill.quantities import QUANTITIES
from ensemble_horizon.skill.reduction import ScoreSums

START = np.datetime64("2031-02-14T06:00", "s")
ODD = 'gusts "10 m" / <script>alert(1)</script> Île'


def place_sums(places, seed=0, leads=4, members=5):
    rng = np.random.default_rng(seed)
    shape = (len(QUANTITIES), leads, len(places))
    # Numbers of every size, so that no bit may be lost on the way.
    values = rng.normal(size=shape) * 10.0 ** rng.integers(-300, 300, shape)
    ranks = rng.random((leads, len(places), members + 1))
    return PlaceSums(tuple(places), ScoreSums(values, rng.random(shape), ranks, {}))


def start_sums(name="t2", start=START):
    places = [("North", "region"), ("Quay / 'east'", "site")]
    against = {"analysis": place_sums(places), "observation": place_sums(places[1:], seed=1)}
    variable = VariableSums(
        name, "air temperature", "degC", 1.8, 6.0 * np.arange(4), "hours", "a" * 64, "b" * 64,
        against, (f"{name}: no analysis at 1 of 4: 2031-02-14T12:00", "two\nlines"),
    )  # fmt: skip
    second = dataclasses.replace(variable, name="wind", against={"analysis": place_sums(places, 2)})
    return StartSums(start, (variable, second))


def assert_equal(found, wanted):
    assert found.start == wanted.start
    assert [item.name for item in found.variables] == [item.name for item in wanted.variables]
    for one, other in zip(found.variables, wanted.variables, strict=True):
        for name in ("long_name", "units", "factor", "lead_units", "settings", "ground", "gaps"):
            assert getattr(one, name) == getattr(other, name)
        assert one.lead.tolist() == other.lead.tolist()
        assert list(one.against) == list(other.against)
        for truth, part in other.against.items():
            assert one.against[truth].places == part.places
            for name in ("sums", "weights", "ranks"):
                ours = getattr(one.against[truth].sums, name)
                assert ours.tobytes() == getattr(part.sums, name).tobytes(), name


@pytest.mark.parametrize("name", ["t2", ODD, "a\nb", " ", "t 2/\\"])
def test_what_is_read_is_what_was_written(tmp_path, name):
    wanted = start_sums(name)
    path = write_score_sums(tmp_path / "deep" / "20310214T06.nc", wanted, {"version": "1.0"})
    assert_equal(read_score_sums(path), wanted)
    assert [item.name for item in path.parent.iterdir()] == [path.name]


def test_other_programs_can_read_it(tmp_path):
    path = write_score_sums(tmp_path / "one.nc", start_sums(), {})
    with netCDF4.Dataset(path) as file:
        group = file["t2/analysis"]
        row = list(group["quantity_name"][:]).index("crps")
        wanted = start_sums().variables[0].against["analysis"].sums.sums[row]
        assert group["sums"][row].tobytes() == wanted.tobytes()
        assert list(group["place_name"][:]) == ["North", "Quay / 'east'"]


def test_the_same_sums_give_the_same_bytes(tmp_path):
    paths = [write_score_sums(tmp_path / f"{n}.nc", start_sums(), {}) for n in range(2)]
    assert paths[0].read_bytes() == paths[1].read_bytes()


def test_every_changed_or_missing_byte_is_found(tmp_path):
    path = write_score_sums(tmp_path / "one.nc", start_sums(), {})
    whole = path.read_bytes()
    broken = tmp_path / "broken.nc"
    for position in np.linspace(0, len(whole) - 1, 150).astype(int):
        changed = bytearray(whole)
        changed[position] ^= 1 << (position % 8)
        for content in (bytes(changed), whole[:position]):
            broken.write_bytes(content)
            with pytest.raises(InputError, match="whole and unchanged"):
                read_score_sums(broken)
    broken.write_bytes(whole)
    assert_equal(read_score_sums(broken), start_sums())


def test_strange_files_are_refused(tmp_path):
    path = tmp_path / "other.nc"
    with netCDF4.Dataset(path, "w") as file:
        file.setncattr("title", "something else")
    with pytest.raises(InputError, match=r"no sums of scores.*move the file away"):
        read_score_sums(path)
    with pytest.raises(InputError, match="expected a file that can be read"):
        read_score_sums(tmp_path / "absent.nc")
    with pytest.raises(InputError, match="expected a file that can be read"):
        read_score_sums(tmp_path)


def test_sums_of_another_program_version_are_not_broken(tmp_path, monkeypatch):
    monkeypatch.setattr(score_sums, "FORMAT", 2)
    path = write_score_sums(tmp_path / "one.nc", start_sums(), {})
    monkeypatch.undo()
    with pytest.raises(OtherFormatError, match=r"expected sums of scores of format 1; found "
                                               r"format 2.*verified again"):  # fmt: skip
        read_score_sums(path)


def test_what_cannot_be_kept_is_not_filed(tmp_path):
    # NetCDF texts end at a NUL character.
    with pytest.raises(ProductError, match=r"when read back.*control characters"):
        write_score_sums(tmp_path / "one.nc", start_sums("t\0002"), {})
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_cannot_be_written_is_named(tmp_path):
    (tmp_path / "scores").write_text("a file")
    with pytest.raises(ProductError, match=r"scores.*a file stands in the way"):
        write_score_sums(tmp_path / "scores" / "one.nc", start_sums(), {})
