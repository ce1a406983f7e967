"""Names with spaces, slashes, quotes and brackets, in settings and in files."""

import numpy as np
import pytest
import xarray as xr

AWKWARD = [
    "wind speed",
    "t/2",
    "../../t2",
    'it\'s \\"warm\\"',
    "[bold]t2[/bold]",
    "2t",
    "température",
    "t2_spread",
    ".",
    "place",
]


def plain(name: str) -> str:
    return name.replace('\\"', '"')


@pytest.mark.parametrize("name", AWKWARD)
def test_a_variable_of_an_awkward_name(night, name):
    values = night.write()
    night.settings(f'[variables."{name}"]\nsource = "t2"\ncriteria = [{{tolerance = 1.5}}]')
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    (row,) = night.rows()
    assert row["variable"] == plain(name)
    assert plain(name) in result.stdout
    assert all(path.startswith("out") for path in night.written())
    data = night.curves()
    names = [
        str(key) for key in data.data_vars
        if str(key).endswith("_spread") and data[key].dims != ()
    ]  # fmt: skip
    assert names
    spread = data[names[0]].values.ravel()
    np.testing.assert_allclose(spread, values.std(axis=0, ddof=1)[:, 0, 0], rtol=1e-6)


def test_figures_and_maps_of_awkward_names_stay_in_the_folder(night):
    night.write()
    night.settings(
        '[variables."../wind speed/10 m"]\nsource = "t2"\n'
        'criteria = [{name = "../crane [work] / $1 \\\\lift", tolerance = 1.5}]',
        more='[regions."North [sea] / $2"]\nsouth = 45',
        products='maps = "each"\nfigures = true',
    )
    (row,) = night.estimated()
    assert row["criterion"] == "../crane [work] / $1 \\lift"
    assert row["place"] == "North [sea] / $2"
    figures = [path for path in night.written() if path.endswith(".png")]
    assert len(figures) == 2
    assert all(path.count("/") == 2 for path in figures), figures
    outside = {p.name for p in night.folder.iterdir()} - {"out", "settings.toml"}
    assert all(name.startswith("m0") for name in outside), outside
    with xr.open_dataset(night.products / "horizon_maps.nc", decode_times=False) as data:
        assert any(str(name).endswith("_horizon") for name in data.data_vars)


def test_two_names_that_become_one_in_a_file(night):
    night.write()
    night.settings(
        '[variables."t 2"]\nsource = "t2"\ncriteria = [{tolerance = 1.5}]\n'
        '[variables."t/2"]\nsource = "t2"\ncriteria = [{tolerance = 2.5}]',
        products='maps = "each"\nfigures = true',
    )
    result = night.estimate()
    if result.exit_code == 0:
        assert [row["variable"] for row in night.rows()] == ["t 2", "t/2"]
        data = night.curves()
        spreads = [
            name for name in data.data_vars
            if "ensemble spread" in data[name].attrs.get("long_name", "")
            and not str(name).endswith(("_low", "_high"))
        ]  # fmt: skip
        assert len(spreads) == 2
        assert len([path for path in night.written() if "curves" in path]) == 2
    else:
        assert result.exit_code == 2
        assert "t 2" in result.stderr
        assert "t/2" in result.stderr


@pytest.mark.parametrize("name", ["North [sea]", "[red]", "a/b", "it's", "Ærø", "x,y;z", " "])
def test_places_of_awkward_names(night, name):
    night.write()
    night.settings(
        more=f'[regions."{name}"]\nsouth = 45\n[sites."{name}2"]\nlatitude = 50\nlongitude = 0'
    )
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert [row["place"] for row in night.rows()] == [name, f"{name}2"]
    assert f"{name}2" in result.stdout
    found = [str(place) for place in night.curves()["place_name"].values]
    assert found == [name, f"{name}2"]


def test_awkward_names_in_the_reach_tables(night):
    night.write()
    night.settings(
        '[variables."[t2]"]\nsource = "t2"\ncriteria = [{tolerance = 1.5}]',
        more='[regions."[north]"]\nsouth = 45',
    )
    night.estimated()
    result = night.run("reach", night.config, "--variable", "[t2]", "--tolerance", "1.0")
    assert result.exit_code == 0, result.stderr
    assert "[north]" in result.stdout
    assert "[t2]" in result.stdout


@pytest.mark.parametrize("source", ["air temperature", "t2 (2 m)", "t2.mean", "t'2"])
def test_a_source_of_an_awkward_name(night, source):
    values = night.write(name=source)
    night.settings(f'[variables.t2]\nsource = "{source}"\ncriteria = [{{tolerance = 1.5}}]')
    (row,) = night.estimated()
    assert row["variable"] == "t2"
    np.testing.assert_allclose(night.spread()[0], values.std(axis=0, ddof=1)[:, 0, 0], rtol=1e-6)


def test_a_title_and_folder_of_awkward_names(night):
    night.write()
    night.settings(folder="out [1] of 'tonight' é")
    night.config.write_text(
        "title = '[b]Night[/b] \"one\"'\n" + night.config.read_text("utf-8"), encoding="utf-8"
    )
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    assert "out [1] of 'tonight' é" in result.stdout
    assert (night.folder / "out [1] of 'tonight' é" / "horizons.csv").is_file()


def test_run_files_in_a_folder_of_an_awkward_name(night, growing, write_member):
    for number, field in enumerate(growing()):
        write_member(night.folder / "run [1] é" / f"m{number:02d}.nc", {"t2": field})
    night.settings(files="run [1] é/m{member:02d}.nc")
    (row,) = night.estimated()
    assert row["members"] == "6"
