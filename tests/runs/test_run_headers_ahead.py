"""Headers read ahead by others: the same catalogue, faults, errors and progress as one by one."""

import netCDF4
import numpy as np
import pytest

import ensemble_horizon.runs.handles as handles
import ensemble_horizon.runs.headers as headers
from ensemble_horizon.errors import InputError
from ensemble_horizon.runs import ahead, read_catalogue

STARTS, MEMBERS = 6, 20


def write(path, start, member, *, rows=3, name="t2"):
    with netCDF4.Dataset(path, "w") as file:
        for dim, values, units in (
            ("time", 24.0 * start + 6 * np.arange(4), "hours since 2031-02-14"),
            ("lat", np.linspace(10, 20, rows), "degrees_north"),
            ("lon", np.arange(5.0), "degrees_east"),
        ):
            file.createDimension(dim, values.size)
            axis = file.createVariable(dim, "f8", (dim,))
            axis.units = units
            axis[:] = values
        for scalar, value, units in (
            ("forecast_reference_time", 24.0 * start, "hours since 2031-02-14"),
            ("realization", member, "1"),
        ):
            made = file.createVariable(scalar, "f8")
            made.standard_name, made.units = scalar, units
            made[...] = value
        file.createVariable(name, "f4", ("time", "lat", "lon")).units = "K"


@pytest.fixture
def folder(tmp_path):
    for start in range(STARTS):
        for member in range(MEMBERS):
            write(tmp_path / f"s{start:02d}m{member:02d}.nc", start, member)
    return tmp_path


class Elsewhere:
    """A mapper that works in this process, and counts what it was given."""

    def __init__(self):
        self.files = 0

    def __call__(self, function, tasks):
        for task in tasks:
            self.files += len(task.files)
            yield function(task)


def read(folder, mapper, **options):
    steps = []
    found = read_catalogue(
        str(folder / "*.nc"),
        mapper=mapper,
        progress=lambda done, total: steps.append((done, total)),
        **options,
    )
    return found, steps


def same(one, other):
    assert one.token == other.token
    assert one.faults == other.faults
    assert one.members == other.members
    assert list(one.variables) == list(other.variables)
    assert one.grid.difference(other.grid) is None
    np.testing.assert_array_equal(one.lead_ticks, other.lead_ticks)


@pytest.fixture
def opens(monkeypatch):
    """Paths of the files that were opened."""
    paths = []
    plain = handles.open_raw

    def counted(path):
        paths.append(path)
        return plain(path)

    monkeypatch.setattr(headers, "open_raw", counted)
    return paths


def test_sound_files_are_opened_once_and_all_but_one_elsewhere(folder, opens):
    alone, steps = read(folder, None)
    assert len(opens) == len(set(opens)) == STARTS * MEMBERS
    opens.clear()
    mapper = Elsewhere()
    together, other_steps = read(folder, mapper)
    assert len(opens) == len(set(opens)) == STARTS * MEMBERS
    assert mapper.files == STARTS * MEMBERS - 1
    assert steps == other_steps == [(n + 1, STARTS * MEMBERS) for n in range(STARTS * MEMBERS)]
    same(alone, together)


def test_each_coordinate_of_a_header_is_read_once(folder, monkeypatch):
    """Two coordinates of the grid, one of valid time, a start and a member: five reads a file."""
    reads = []
    stored = headers.HeaderReading.__init__

    class Counted:
        def __init__(self, variable):
            self._variable = variable

        def __getattr__(self, name):
            return getattr(self._variable, name)

        def __getitem__(self, key):
            reads.append(self._variable.name)
            return self._variable[key]

    def wrapped(self, *arguments):
        stored(self, *arguments)
        self.variables = {name: Counted(item) for name, item in self.variables.items()}

    monkeypatch.setattr(headers.HeaderReading, "__init__", wrapped)
    read(folder, None)
    files = STARTS * MEMBERS
    # The grid of the first file is kept; those of the others are compared with it.
    assert len(reads) == 5 * files
    assert reads.count("t2") == 0


def test_broken_and_odd_files_are_told_alike(folder):
    (folder / "s01m03.nc").write_bytes(b"not NetCDF")
    (folder / "s02m04.nc").write_bytes((folder / "s02m05.nc").read_bytes()[:700])
    write(folder / "s03m06.nc", 3, 6, rows=4)
    write(folder / "s04m07.nc", 4, 7, name="other")
    (folder / "s00m00.nc").write_bytes(b"")  # the first, before a grid is known
    alone, steps = read(folder, None, variables="t2")
    together, other_steps = read(folder, Elsewhere(), variables="t2")
    assert len(alone.faults) >= 5
    assert steps == other_steps
    same(alone, together)


def test_strict_reading_refuses_the_same_file(folder):
    (folder / "s01m03.nc").write_bytes(b"not NetCDF")
    (folder / "s01m01.nc").write_bytes(b"CDF\x01 but no more")
    told = []
    for mapper in (None, Elsewhere()):
        with pytest.raises(InputError) as error:
            read(folder, mapper, strict=True)
        told.append((str(error.value), repr(error.value.__cause__)))
    assert told[0] == told[1]
    assert "s01m01.nc" in told[0][0]


def test_few_files_stay_in_this_process(folder):
    for path in sorted(folder.glob("s0[1-5]*.nc")):
        path.unlink()
    mapper = Elsewhere()
    read(folder, mapper)
    assert mapper.files == 0


def test_other_layouts_of_a_file_keep_their_grids(folder):
    """A file with variables on two grids comes back with both, each known one by identity."""
    alone, _ = read(folder, None)
    found = ahead._plain_header(
        headers.FoundFile(str(folder / "s00m01.nc")),
        ahead.Portion((), headers.Wanted(), (alone.grid,)),
    )
    assert found is not None
    assert found.grids == (0,)
    assert found.whole((alone.grid,)).layouts[0].grid is alone.grid
