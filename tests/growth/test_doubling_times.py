"""Doubling times against error size."""

from __future__ import annotations

import dask.array
import numpy as np
import pytest
import xarray as xr

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.growth import (
    LAWS,
    crossing_times,
    doubling_table,
    finite_size_rates,
    fit_growth,
)


def labelled(values: np.ndarray, lead: np.ndarray) -> xr.DataArray:
    axis = xr.DataArray(lead, dims="lead", attrs={"units": "hours"})
    dims = ("site", "lead")[-values.ndim :]
    return xr.DataArray(values, coords={"lead": axis}, dims=dims, attrs={"units": "m"})


def test_exponential_has_one_rate_at_every_size(lead: np.ndarray) -> None:
    curve = 0.1 * np.exp(0.013 * lead)
    sizes = 0.12 * 1.2 ** np.arange(8)
    for ratio in (1.2, 2.0, 3.0):
        np.testing.assert_allclose(
            finite_size_rates(lead, curve[None], sizes, ratio), 0.013, rtol=1e-10
        )


def test_logistic_slows_down_as_its_law_says() -> None:
    lead = np.linspace(0.0, 300.0, 3001)
    p = np.array([[0.01, 0.05, 1.0]])
    law = LAWS["logistic"]
    sizes = np.array([0.02, 0.1, 0.3, 0.45])
    rates = finite_size_rates(lead, law.value(p, lead), sizes)
    expected = [np.log(2.0) / law.doubling_time(p, size)[0] for size in sizes]
    np.testing.assert_allclose(rates[0], expected, rtol=1e-4)
    assert (np.diff(rates[0]) < 0).all()


def test_crossings_outside_the_curve_are_nan(lead: np.ndarray) -> None:
    curve = np.exp(0.01 * lead)
    times = crossing_times(lead, curve[None], np.array([0.5, 1.0, 2.0, 100.0]))
    assert np.isnan(times[0, [0, 1, 3]]).all()
    assert times[0, 2] == pytest.approx(np.log(2.0) / 0.01)


def test_crossings_step_over_gaps(lead: np.ndarray) -> None:
    curve = np.exp(0.01 * lead)
    holed = curve.copy()
    holed[[0, 11, 12]] = np.nan
    for size in (1.1, 2.0):
        # ln E is linear here, so that the gap changes nothing.
        np.testing.assert_allclose(
            crossing_times(lead, holed[None], np.array([size])),
            crossing_times(lead, curve[None], np.array([size])),
        )
    assert np.isnan(crossing_times(lead, np.full((1, lead.size), np.nan), np.array([1.0]))).all()


def test_first_crossing_counts(lead: np.ndarray) -> None:
    curve = np.array([[1.0, 4.0, 1.0, 8.0]])
    times = crossing_times(np.arange(4.0), curve, np.array([2.0, 6.0]))
    np.testing.assert_allclose(times[0], [0.5, 2.0 + np.log(6.0) / np.log(8.0)])


def test_rise_from_zero_ends_at_the_later_lead() -> None:
    times = crossing_times(np.arange(3.0), np.array([[0.0, 1.0, 4.0]]), np.array([0.5, 2.0]))
    np.testing.assert_allclose(times[0], [1.0, 1.5])


def test_table_of_law_and_curve(lead: np.ndarray) -> None:
    p = np.array([[0.05, 0.04, 1.0], [0.1, 0.03, 2.0]])
    curve = labelled(LAWS["logistic"].value(p, lead), lead)
    table = doubling_table(curve, sizes=[0.12, 0.3, 0.7], law="logistic")
    assert table.doubling_time.dims == ("site", "size")
    expected = [LAWS["logistic"].doubling_time(p, size) for size in (0.12, 0.3, 0.7)]
    np.testing.assert_allclose(table.doubling_time, np.array(expected).T, rtol=1e-5)
    assert np.isinf(table.doubling_time[0, 2])
    np.testing.assert_allclose(
        table.doubling_time_finite_size[:, 0], table.doubling_time[:, 0], rtol=0.02
    )
    assert table["size"].attrs["units"] == "m"
    assert table.doubling_time.attrs["units"] == "hours"
    assert table.growth_rate_finite_size.attrs["units"] == "hour-1"


def test_default_sizes_span_the_curve(lead: np.ndarray) -> None:
    curve = labelled(0.1 * np.exp(0.02 * lead), lead)
    table = doubling_table(curve, law="exponential")
    assert table.sizes["size"] == 12
    np.testing.assert_allclose(table.doubling_time, np.log(2.0) / 0.02, rtol=1e-6)
    empty = doubling_table(labelled(np.full((2, lead.size), np.nan), lead))
    assert np.isnan(empty.doubling_time).all()


def test_given_sizes_stay_lazy(lead: np.ndarray) -> None:
    curve = labelled(np.outer([0.1, 0.2], np.exp(0.02 * lead)), lead)
    calls: list[int] = []

    def note(block: np.ndarray) -> np.ndarray:
        calls.append(1)
        return block

    lazy = curve.copy(
        data=dask.array.from_array(curve.values, chunks=(1, 20)).map_blocks(
            note, dtype=float, meta=np.empty((0, 0))
        )
    )
    table = doubling_table(lazy, sizes=[0.3, 0.4], law="exponential")
    assert not calls
    eager = doubling_table(curve, sizes=[0.3, 0.4], fit=fit_growth(curve, law="exponential"))
    xr.testing.assert_allclose(table.compute(scheduler="synchronous"), eager)


def test_wrong_sizes_are_refused(lead: np.ndarray) -> None:
    curve = labelled(0.1 * np.exp(0.02 * lead), lead)
    with pytest.raises(ArgumentError, match="sizes: expected error sizes above zero"):
        doubling_table(curve, sizes=[0.0, 1.0])
    with pytest.raises(ArgumentError, match="ratio: expected a number above 1"):
        doubling_table(curve, sizes=[0.2], ratio=1.0)
