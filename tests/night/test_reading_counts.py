"""Every chunk of every layout is decompressed once, and a plan counts what an estimate does.

A slide is caught by counting bytes, calls and tasks; no clock is looked at.
"""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import netCDF4
import numpy as np
import pytest
from counted_reads import Watch, describe, fill, write_runs

from ensemble_horizon.night import pace, reading
from ensemble_horizon.night.plan import plan_estimate
from ensemble_horizon.night.reading import plan_blocks
from ensemble_horizon.runs import close_files, handles, read_catalogue
from ensemble_horizon.runs.volume import volume_of
from ensemble_horizon.settings import read_settings

MEMBERS, LEADS, ROWS, COLUMNS = 5, 7, 37, 50
ZSTD = pytest.mark.skipif(
    not netCDF4.__has_zstandard_support__, reason="this netCDF4 was built without zstandard"
)
LAYOUTS = {
    "fields": ("members", (1, 37, 50), {}),
    "columns": ("members", (7, 16, 16), {}),
    "three leads of seven": ("members", (3, 37, 50), {}),
    "nothing divides": ("members", (3, 10, 13), {}),
    "a member a chunk": ("members", (7, 37, 50), {}),
    "contiguous": ("members", "contiguous", {}),
    "a file a field": ("fields", (1, 37, 50), {}),
    "a file a field, tiles": ("fields", (1, 16, 16), {}),
    "leads in two files": ("halves", (3, 16, 50), {}),
    "one file": ("one", (1, 1, 37, 50), {}),
    "one file, columns": ("one", (1, 7, 16, 16), {}),
    "one file, two members a chunk": ("one", (2, 3, 16, 50), {}),
    "one file, one chunk": ("one", (5, 7, 37, 50), {}),
    "one file, contiguous": ("one", "contiguous", {}),
    "deflate 1": ("members", (1, 16, 16), {"complevel": 1}),
    "deflate 9": ("members", (1, 16, 16), {"complevel": 9, "shuffle": False}),
}
BUDGETS = (1, 4 * MEMBERS * ROWS * COLUMNS // 3, 4 * MEMBERS * 3 * ROWS * COLUMNS, 10**9)


@pytest.fixture
def watch(monkeypatch):
    """A watch on all files that are opened for their values from now on."""
    close_files()
    found = Watch()
    monkeypatch.setattr(handles, "open_raw", found.open)
    return found


@pytest.fixture
def values():
    """Values (member, lead, latitude, longitude), no two alike."""
    count = MEMBERS * LEADS * ROWS * COLUMNS
    return np.arange(count, dtype="f4").reshape(MEMBERS, LEADS, ROWS, COLUMNS)


def read_by_blocks(catalogue, names, budget):
    """All values, one block after the other, as tasks read them."""
    shape = (len(catalogue.members), catalogue.leads.size, *catalogue.grid.shape)
    whole = {name: np.full(shape, np.nan, "f4") for name in names}
    blocks = list(plan_blocks(catalogue, names, 0, 0, budget))
    for block in blocks:
        place = (slice(None), slice(*block.leads), *(slice(*span) for span in block.window))
        for name in names:
            damage = {}
            whole[name][place] = reading.read_part(catalogue, name, block, damage)
            assert not damage
    return whole, blocks


def require_once(watch, *names):
    """Every chunk of the variables was touched by one call, every value read once."""
    touched = watch.touched()
    assert set(touched.values()) <= {1}
    assert len(touched) == sum(watch.chunks(name) for name in names)
    assert {count for *_, count in watch.fields()} == {1}


@pytest.mark.parametrize("budget", BUDGETS)
@pytest.mark.parametrize(
    "layout",
    [
        *LAYOUTS.values(),
        pytest.param(("members", (1, 16, 16), {"compression": "zstd"}), marks=ZSTD),
    ],
    ids=[*LAYOUTS, "zstd"],
)
def test_every_chunk_is_decompressed_once(tmp_path, watch, values, layout, budget):
    kind, chunks, storage = layout
    if "compression" in storage:
        storage = {"zlib": False, **storage}
    catalogue = read_catalogue(write_runs(tmp_path, kind, values, chunks, **storage))
    whole, blocks = read_by_blocks(catalogue, ("v",), budget)
    np.testing.assert_array_equal(whole["v"], values)
    require_once(watch, "v")
    volume = volume_of(catalogue, "v")
    assert (volume.reads, volume.chunks) == (watch.chunks("v"),) * 2
    assert volume.values == watch.bytes == values.nbytes
    assert volume.files == len(watch.paths)
    largest = max(
        (block.leads[1] - block.leads[0]) * np.prod([stop - first for first, stop in block.window])
        for block in blocks
    )
    planned = catalogue.blocks(("v",), 0, budget).size
    assert planned == 4 * MEMBERS * largest
    if budget == max(BUDGETS):
        assert len(blocks) == 1


def test_blocks_keep_to_the_memory_where_chunks_allow(tmp_path, values):
    catalogue = read_catalogue(write_runs(tmp_path, "members", values, (1, 10, 10)))
    for budget in (4 * MEMBERS * 100, *BUDGETS[1:]):
        assert catalogue.blocks(("v",), 0, budget).size <= budget
    # A chunk is the least that can be read, however small the memory.
    assert catalogue.blocks(("v",), 0, 1).size == 4 * MEMBERS * 100


def test_members_stored_in_different_ways(tmp_path, watch, values):
    for number, chunks in enumerate(
        [(1, 37, 50), (7, 16, 16), (3, 12, 50), "contiguous", (2, 8, 9)]
    ):
        folder = tmp_path / str(number)
        write_runs(folder, "members", values[number : number + 1], chunks)
        (folder / "part0000.nc").rename(tmp_path / f"m{number}.nc")
    template = str(tmp_path / "m{member:d}.nc")
    for number in range(5):
        with netCDF4.Dataset(tmp_path / f"m{number}.nc", "a") as file:
            file["member"][...] = number
    for budget in BUDGETS:
        watch.calls.clear()
        whole, _ = read_by_blocks(read_catalogue(template), ("v",), budget)
        np.testing.assert_array_equal(whole["v"], values)
        require_once(watch, "v")


def test_two_components_in_chunks_of_their_own(tmp_path, watch, values):
    with netCDF4.Dataset(tmp_path / "a.nc", "w") as file:
        describe(file, start=0.0, member=np.arange(5.0), lead=6.0 * np.arange(7),
                 lat=np.linspace(80, -80, 37), lon=np.arange(50) * 7.2)  # fmt: skip
        dims = ("member", "lead", "lat", "lon")
        fill(file, "u", dims, values, zlib=True, chunksizes=(1, 2, 37, 50))
        fill(file, "v", dims, -values, zlib=True, chunksizes=(1, 3, 16, 16))
    for budget in BUDGETS:
        watch.calls.clear()
        whole, _ = read_by_blocks(read_catalogue(tmp_path / "a.nc"), ("u", "v"), budget)
        np.testing.assert_array_equal(whole["v"], -whole["u"])
        require_once(watch, "u", "v")


def test_fields_left_out_do_not_make_a_chunk_be_read_twice(tmp_path, watch, values):
    files = write_runs(tmp_path, "one", values, (5, 7, 16, 16))
    catalogue = read_catalogue(files, variables="v")
    table = catalogue.tables[0]
    source = table.source.copy()
    source[0, [1, 3, 5], :2] = source[0, 2:, 4] = source[0, :5, 3] = -1
    holes = replace(catalogue, tables=(replace(table, source=source),))
    values[:2, [1, 3, 5]] = values[4, 2:] = values[3, :5] = np.nan
    for budget in BUDGETS:
        watch.calls.clear()
        whole, _ = read_by_blocks(holes, ("v",), budget)
        np.testing.assert_array_equal(whole["v"], values)
        assert set(watch.touched().values()) == {1}


def test_latitude_and_longitude_before_the_leads(tmp_path, watch, values):
    with netCDF4.Dataset(tmp_path / "a.nc", "w") as file:
        describe(file, start=0.0, member=0.0, lead=6.0 * np.arange(7),
                 lat=np.linspace(80, -80, 37), lon=np.arange(50) * 7.2)  # fmt: skip
        fill(file, "v", ("lat", "lon", "lead"), values[0].transpose(1, 2, 0), contiguous=True)
    whole, blocks = read_by_blocks(read_catalogue(tmp_path / "a.nc"), ("v",), 1)
    np.testing.assert_array_equal(whole["v"], values[:1])
    # Leads lie side by side: rows of the grid with all leads, and no lead by itself.
    assert {block.leads for block in blocks} == {(0, 7)}
    assert len(blocks) == len(watch.calls) == 37


def test_no_chunk_is_kept_of_what_is_read_once(tmp_path, values):
    for name, columns, kept in (("small", 50, True), ("large", 1500, False)):
        wide = np.tile(values, (1, 1, 2, columns // 50))[:1]
        files = write_runs(tmp_path / name, "members", wide, (7, 16, 16))
        read_catalogue(files).read("v", 0, 0)
        stored = handles.HANDLES.get(str(tmp_path / name / "part0000.nc")).dataset["v"]
        assert (stored.get_var_chunk_cache()[0] > 0) is kept


def settings_of(tmp_path, files, more="", workers=1):
    path = tmp_path / "settings.toml"
    path.write_text(
        f'[runs]\nfiles = "{files}"\n[variables.v]\ncriteria = [{{tolerance = 1.0}}]\n'
        f'[engine]\nworkers = {workers}\nblock_memory_mib = 8\n'
        f'[products]\nfolder = "{tmp_path / "out"}"\nmap_intervals = false\n{more}',
        encoding="utf-8",
    )  # fmt: skip
    return path


def growing(members, leads, rows, columns, seed=1):
    """Members that part as the logistic law says."""
    lead = np.arange(leads)[:, np.newaxis, np.newaxis]
    noise = np.random.default_rng(seed).normal(size=(members, 1, rows, columns))
    return (280 + noise * 3 / (1 + 20 * np.exp(-0.8 * lead))).astype("f4")


def write_starts(folder, starts, members, leads, rows, columns, chunks):
    """A file for each start and member."""
    for start in range(starts):
        values = growing(members, leads, rows, columns, start)
        write_runs(folder / f"s{start}", "members", values, chunks)
        for path in (folder / f"s{start}").glob("*.nc"):
            with netCDF4.Dataset(path, "a") as file:
                file["start"][...] = 24.0 * start
    return f"{folder}/s*/part*.nc"


@pytest.mark.parametrize("chunks", [(1, 37, 50), (7, 16, 16), "contiguous"])
def test_a_plan_counts_what_an_estimate_then_does(night, tmp_path, monkeypatch, watch, chunks):
    files = write_starts(tmp_path, 2, 6, 7, 37, 50, chunks)
    drawn = chunks == "contiguous"  # once is enough
    config = settings_of(tmp_path, files, f"figures = {str(drawn).lower()}\n")
    plan = plan_estimate(read_settings(config))
    assert not (tmp_path / "out").exists()
    close_files()
    watch.calls.clear()
    watch.bytes = 0
    tasks = []
    original = reading.read_block

    def counted(block):
        tasks.append(block)
        return original(block)

    monkeypatch.setattr(reading, "read_block", counted)
    result = night.run("estimate", config, "--quiet")
    assert result.exit_code == 0, result.stderr
    (variable,) = plan.variables
    (volume,) = variable.volumes
    assert plan.files == volume.files == len(watch.paths) == 12
    assert volume.fields == 2 * 6 * 7
    assert volume.values == watch.bytes == 2 * 6 * 7 * 37 * 50 * 4
    assert volume.reads == volume.chunks == watch.touched().total()
    assert plan.tasks == variable.tasks == len(tasks)
    shapes = [
        (6, block.leads[1] - block.leads[0], *(stop - first for first, stop in block.window))
        for block in tasks
    ]
    assert variable.block in shapes
    assert variable.block_bytes == 4 * max(int(np.prod(shape)) for shape in shapes)
    written = {path.name for path in (tmp_path / "out").iterdir() if path.is_file()}
    assert written == set(plan.products)
    assert len(list((tmp_path / "out").glob("figures/*.png"))) == plan.figures
    assert (plan.figures > 0) is drawn
    on_disk = sum(path.stat().st_size for path in tmp_path.glob("s*/*.nc"))
    # The values of a variable, and not the coordinates and the headers beside it.
    assert 0.9 * on_disk < volume.stored <= on_disk


@pytest.mark.parametrize("grown", ["starts", "members", "leads", "rows"])
def test_work_grows_in_proportion(tmp_path, monkeypatch, grown):
    counted = []
    for factor in (1, 2, 4):
        sizes = {"starts": 1, "members": 3, "leads": 6, "rows": 20}
        sizes[grown] *= factor
        chunks = (1, 10, 30)
        files = write_starts(tmp_path / str(factor), **sizes, columns=30, chunks=chunks)
        close_files()
        watch = Watch()
        with monkeypatch.context() as patched:
            patched.setattr(handles, "open_raw", watch.open)
            catalogue = read_catalogue(files)
            budget = 4 * 3 * 10 * 30  # one lead of the first rows, of the fewest members
            tasks = 0
            for start in range(sizes["starts"]):
                for block in plan_blocks(catalogue, ("v",), 0, start, budget):
                    tasks += 1
                    reading.read_part(catalogue, "v", block, {})
        counted.append((watch.bytes, watch.touched().total(), tasks))
        assert set(watch.touched().values()) == {1}
    for before, after in pairwise(counted):
        assert after[:2] == tuple(2 * count for count in before[:2])
        # More members make larger tasks here, and no more of them: a chunk is the least.
        assert after[2] == (before[2] if grown == "members" else 2 * before[2])


def test_the_sample_of_a_plan_is_bounded(tmp_path, monkeypatch, watch):
    files = write_starts(tmp_path, 2, 12, 7, 37, 50, (7, 37, 50))
    config = settings_of(tmp_path, files)
    member = 7 * 37 * 50 * 4
    for allowed, expected in ((2 * 12 * member, 24), (6 * member, 6), (member, 1)):
        monkeypatch.setattr(pace, "SAMPLE_BYTES", allowed)
        watch.bytes = 0
        plan = plan_estimate(read_settings(config))
        assert watch.bytes == plan.pace.values == expected * member
        assert 0 < plan.seconds[0] < plan.seconds[1]
    monkeypatch.setattr(pace, "SAMPLE_BYTES", member - 1)
    watch.bytes = 0
    plan = plan_estimate(read_settings(config))
    assert plan.pace is plan.seconds is None
    assert watch.bytes == 0


def test_a_plan_is_told_and_nothing_written(night, tmp_path):
    config = settings_of(tmp_path, write_starts(tmp_path, 1, 5, 7, 37, 50, (7, 37, 50)))
    result = night.run("estimate", config, "--plan")
    assert result.exit_code == 0, result.stderr
    for words in ("1 start x 5 members x 7 leads x 37 x 50, 5 files", "5 x 7 x 37 x 50 = 253 KiB",
                  "Memory: about", "with 1 worker", "Time: ", "horizon_maps.nc",
                  "Nothing was computed or written"):  # fmt: skip
        assert words in result.stdout
    assert not (tmp_path / "out").exists()
    assert night.run("estimate", config, "--plan", "--quiet").stdout == ""
    refused = night.run("estimate", tmp_path / "absent.toml", "--plan")
    assert refused.exit_code not in (0, 1)


def test_starts_that_share_a_chunk_are_told(tmp_path):
    values = np.stack([growing(5, 7, 9, 10, seed) for seed in range(3)])
    with netCDF4.Dataset(tmp_path / "a.nc", "w") as file:
        describe(file, start=24.0 * np.arange(3), member=np.arange(5.0), lead=6.0 * np.arange(7),
                 lat=np.linspace(80, -80, 9), lon=np.arange(10) * 36.0)  # fmt: skip
        dims = ("start", "member", "lead", "lat", "lon")
        fill(file, "v", dims, values, zlib=True, chunksizes=(3, 1, 7, 9, 10))
    plan = plan_estimate(read_settings(settings_of(tmp_path, tmp_path / "a.nc")))
    (volume,) = plan.variables[0].volumes
    assert (volume.chunks, volume.reads, volume.unpacked) == (5, 15, 3 * values.nbytes)
    (warning,) = plan.warnings
    assert "5 chunks are decompressed 15 times" in warning
    assert "runs.starts" in warning


def test_a_chunk_larger_than_the_memory_is_told(night, tmp_path):
    chunk = (7, 300, 200)
    files = write_starts(tmp_path, 1, 12, *chunk, chunk)
    config = settings_of(tmp_path, files, 'maps = "none"\nfigures = false\n')
    (warning,) = plan_estimate(read_settings(config)).warnings
    size = 12 * np.prod(chunk) * 4 / 2**20
    assert f"one task takes {size:.0f} MiB (12 members x 7 leads x 300 x 200)" in warning
    for words in ("engine.block_memory_mib = 8", "engine.workers", "smaller chunks"):
        assert words in warning
    assert warning in night.run("estimate", config, "--plan").stdout.replace("\n", "")
    assert warning in night.run("estimate", config).stderr
