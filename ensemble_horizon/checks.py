"""Argument checks at the doors of the public functions."""

from __future__ import annotations

import difflib
from collections.abc import Iterable

import numpy as np
import xarray as xr

from ensemble_horizon.errors import ArgumentError


def require_dimension(data: xr.DataArray | xr.Dataset, dimension: str, argument: str) -> None:
    """Raise `ArgumentError` unless ``data`` has ``dimension``."""
    if dimension not in data.dims:
        raise ArgumentError(
            argument,
            expected=f"a dimension named {dimension!r}",
            found=f"dimensions {tuple(str(name) for name in data.dims)}",
            remedy=f"rename the dimension, for instance with .rename(old={dimension!r})",
        )


def require_choice(value: str, choices: Iterable[str], argument: str) -> str:
    """Return ``value`` if it is one of ``choices``; otherwise name the nearest of them.

    Examples
    --------
    >>> require_choice("logistic", ["exponential", "logistic"], "law")
    'logistic'
    """
    known = list(choices)
    if value in known:
        return value
    near = difflib.get_close_matches(str(value), known, n=1)
    hint = f"did you mean {near[0]!r}?" if near else "take one of those named"
    raise ArgumentError(
        argument, expected=f"one of {', '.join(known)}", found=repr(value), remedy=hint
    )


def require_positive(value: float, argument: str, *, zero: bool = False) -> float:
    """Return ``value`` if it is a finite number above zero (or zero, where ``zero`` allows it)."""
    number = float(value)
    if not np.isfinite(number) or number < 0 or (number == 0 and not zero):
        raise ArgumentError(
            argument,
            expected="a finite number of at least zero" if zero else "a finite number above zero",
            found=repr(value),
            remedy="correct the value",
        )
    return number


def require_fraction(value: float, argument: str) -> float:
    """Return ``value`` if it lies strictly between 0 and 1."""
    number = float(value)
    if not 0 < number < 1:
        raise ArgumentError(
            argument,
            expected="a number between 0 and 1, both excluded",
            found=repr(value),
            remedy="give a fraction such as 0.9, not a percentage",
        )
    return number


def require_increasing(values: np.ndarray, argument: str) -> np.ndarray:
    """Return ``values`` as floats if they are finite and strictly increasing."""
    array = np.asarray(values, dtype=float)
    if array.ndim != 1 or not np.all(np.isfinite(array)) or not np.all(np.diff(array) > 0):
        raise ArgumentError(
            argument,
            expected="finite, strictly increasing values along one dimension",
            found=f"{np.array2string(array.ravel()[:8], precision=4)}",
            remedy="sort the leads and drop doubled ones",
        )
    return array
