"""Which of many p-values count, such as those of a map: control of false discoveries."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_dimension, require_fraction
from ensemble_horizon.errors import ArgumentError


def false_discovery(
    p_value: xr.DataArray, level: float = 0.1, *, dim: str | Sequence[str] | None = None
) -> xr.Dataset:
    """Points at which something is found, of which at most a share ``level`` is expected false.

    Parameters
    ----------
    p_value : DataArray, between 0 and 1; NaN where there is no test, which does not count as one
    level : float
        Expected share of false finds among all finds. Where nothing differs anywhere, it is the
        chance of finding anything; with p-values as correlated in space as those of weather maps
        that chance is about half the level, which is why 0.1 stands here (Wilks 2016).
    dim : str or sequence of str, optional
        Dimensions whose p-values are judged together, such as latitude and longitude; all where
        none are named.

    Returns
    -------
    Dataset on the dimensions of the input: ``adjusted`` p-values, to be held against any level,
    and ``significant``, bool: adjusted p-value at or below ``level``.

    Raises
    ------
    ArgumentError
        if p-values lie outside 0 to 1, a dimension is missing, or the level is no fraction.

    Notes
    -----
    Benjamini and Hochberg 1995 (Journal of the Royal Statistical Society B); Wilks 2016 (Bulletin
    of the American Meteorological Society).

    Examples
    --------
    >>> p_value = xr.DataArray([0.01, 0.04, 0.03, 0.9], dims="latitude")
    >>> false_discovery(p_value, 0.05).adjusted.values.round(4).tolist()
    [0.04, 0.0533, 0.0533, 0.9]
    """
    require_fraction(level, "level")
    together = list(p_value.dims) if dim is None else [dim] if isinstance(dim, str) else list(dim)
    for name in together:
        require_dimension(p_value, str(name), "p_value")
    lowest, highest = float(p_value.min()), float(p_value.max())
    if lowest < 0 or highest > 1:
        raise ArgumentError(
            "p_value",
            expected="p-values between 0 and 1",
            found=f"values from {lowest:g} to {highest:g}",
            remedy="pass the p_value of compare_horizons or compare_scores",
        )
    rest = [name for name in p_value.dims if name not in together]
    values = p_value.transpose(*together, *rest)
    flat = values.values.reshape(int(np.prod([values.sizes[name] for name in together])), -1)
    adjusted = values.copy(data=_adjusted(flat.astype(float)).reshape(values.shape))
    adjusted = adjusted.transpose(*p_value.dims)
    adjusted.attrs = {"long_name": "p-value adjusted for the false discovery rate", "units": "1"}
    significant = (adjusted <= level).assign_attrs(
        long_name=f"significant at a false discovery rate of {level:g}"
    )
    return xr.Dataset({"adjusted": adjusted, "significant": significant})


def _adjusted(p_value: np.ndarray) -> np.ndarray:
    """Adjusted p-values of K families (N, K)."""
    order = np.argsort(p_value, axis=0)  # NaN last
    ranked = np.take_along_axis(p_value, order, axis=0)
    number = np.isfinite(p_value).sum(axis=0)
    ranked *= number / np.arange(1.0, p_value.shape[0] + 1)[:, np.newaxis]
    ranked = np.fmin.accumulate(ranked[::-1], axis=0)[::-1]
    ranked[np.arange(p_value.shape[0])[:, np.newaxis] >= number] = np.nan
    adjusted = np.empty_like(ranked)
    np.put_along_axis(adjusted, order, np.minimum(ranked, 1.0), axis=0)
    return adjusted
