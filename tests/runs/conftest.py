"""Fixtures of the tests of runs."""

import numpy as np
import pytest


@pytest.fixture
def runs(tmp_path, run_dataset):
    """Five members m00.nc to m04.nc; a function that changes some of them before writing."""
    values = np.random.default_rng(5).normal(280, 5, (5, 4, 5, 6)).astype("f4")

    def write(changes=None):
        for m in range(5):
            data = run_dataset(values[m].copy())
            data = (changes or {}).get(m, lambda data: data)(data)
            if data is not None:
                data.to_netcdf(tmp_path / f"m{m:02d}.nc")
        return str(tmp_path / "m{member:02d}.nc")

    write.values = values
    write.path = lambda m: str(tmp_path / f"m{m:02d}.nc")
    return write
