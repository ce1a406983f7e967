from datetime import datetime

import pytest

from ensemble_horizon.errors import ArgumentError, InputError
from ensemble_horizon.runs.files import find_files
from ensemble_horizon.runs.templates import NameParts, parse_template


@pytest.mark.parametrize(
    ("template", "name", "parts"),
    [
        ("{start:%Y%m%d%H}/member{member:02d}.nc", "2024010506/member07.nc",
         NameParts(datetime(2024, 1, 5, 6), 7, None)),
        ("{start}/m{member}.nc", "2024010506/mctl.nc", NameParts(datetime(2024, 1, 5, 6), "ctl")),
        ("r_{start:%Y-%j}_{lead:03d}.nc", "r_2024-060_120.nc",
         NameParts(datetime(2024, 2, 29), None, 120.0)),
        ("{start:%Y%m}/{start:%d}/x_*_{member:d}.nc", "202402/29/x_any.thing_12.nc",
         NameParts(datetime(2024, 2, 29), 12)),
        ("{start:%Y%m%d}/{member}/{member}.nc", "20240229/3/3.nc",
         NameParts(datetime(2024, 2, 29), 3)),
        ("**/m{member:02d}.nc", "a/b/m03.nc", NameParts(None, 3)),
        ("m{member:02d}.nc", "m123.nc", NameParts(None, 123)),
    ],
)  # fmt: skip
def test_names_are_read(template, name, parts):
    assert parse_template(template).match(name) == parts


@pytest.mark.parametrize(
    ("template", "name"),
    [
        ("m{member:02d}.nc", "m7.nc"),
        ("m{member:02d}.nc", "mx7.nc"),
        ("m{member:02d}.nc", "m07_nc"),
        ("{start:%Y%m%d}.nc", "20241301.nc"),
        ("{member}/{member}.nc", "3/4.nc"),
        ("*/m.nc", "a/b/m.nc"),
    ],
)
def test_other_names_do_not_fit(template, name):
    assert parse_template(template).match(name) is None


@pytest.mark.parametrize(
    "template",
    [
        "{member.__class__}.nc", "{member[0]}.nc", "{member!r}.nc", "{0}.nc", "{}.nc", "{name}.nc",
        "{member:>5}.nc", "{member:x}.nc", "{start:%c}.nc", "{start:%H}.nc", "{member",
        "{start:%Y%m%d}{start:%Y}.nc",
    ],
)  # fmt: skip
def test_anything_else_in_braces_is_refused(template):
    with pytest.raises(ArgumentError, match="expected the fields"):
        parse_template(template)


def test_brackets_in_a_template_are_plain_characters(tmp_path):
    (tmp_path / "a[1]_m05.nc").touch()
    (tmp_path / "a1_m06.nc").touch()
    found = find_files(str(tmp_path / "a[1]_m{member:02d}.nc"))
    assert [file.parts.member for file in found] == [5]


def test_lists_globs_and_paths_mix_without_doubling(tmp_path):
    for name in ("a.nc", "b.nc", "c.txt"):
        (tmp_path / name).touch()
    found = find_files([str(tmp_path / "*.nc"), tmp_path / "a.nc", str(tmp_path / "{member}.txt")])
    assert [file.path[-5:] for file in found] == ["/a.nc", "/b.nc", "c.txt"]


def test_empty_glob(tmp_path):
    (tmp_path / "other.txt").touch()
    with pytest.raises(InputError) as caught:
        find_files(str(tmp_path / "*.nc"))
    assert str(caught.value) == (
        f"glob '{tmp_path}/*.nc': expected at least one file that matches; found no match among "
        f"1 names in '{tmp_path}' (other.txt). Next: correct the glob or the folder."
    )


def test_template_without_a_match_names_the_folder_that_is_not_there(tmp_path):
    with pytest.raises(InputError) as caught:
        find_files(str(tmp_path / "runs/{start:%Y%m%d}/m{member:02d}.nc"))
    assert "expected at least one file whose name fits" in str(caught.value)
    assert f"no folder '{tmp_path}/runs'" in str(caught.value)


def test_directory(tmp_path):
    with pytest.raises(InputError) as caught:
        find_files(tmp_path)
    assert "found a directory" in str(caught.value)
    assert f"name the files in it, for instance {tmp_path}/*.nc" in str(caught.value)


def test_nothing_named():
    with pytest.raises(InputError, match="found an empty list"):
        find_files([])
