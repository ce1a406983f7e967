"""Smoothing over leads, and averages over neighbouring places: numpy kernels."""

from __future__ import annotations

import numpy as np

from ensemble_horizon.spread.places import great_circle_km

_LEAST_LEADS = 5


def lead_smoother(lead: np.ndarray, weight: np.ndarray, span: float) -> np.ndarray:
    """Matrix (L, L) of a locally weighted straight line over leads; its rows sum to one.

    Parameters
    ----------
    lead : (L,) increasing
    weight : (L,) what each lead is worth, such as its starts; zero leaves it out
    span : float
        Share of the leads that a line is drawn through, at least five of them; 0 does not smooth.

    Notes
    -----
    Tricube weights (Cleveland 1979, Journal of the American Statistical Association, from memory).
    A lead without weight has a row of NaN: nothing is filled in.

    Examples
    --------
    >>> lead = np.arange(6.0)
    >>> smoother = lead_smoother(lead, np.ones(6), 0.5)
    >>> (smoother @ (2 + 3 * lead)).round(9).tolist()  # straight lines stay as they are
    [2.0, 5.0, 8.0, 11.0, 14.0, 17.0]
    """
    known = np.flatnonzero(weight > 0)
    matrix = np.zeros((lead.size, lead.size))
    matrix[weight <= 0] = np.nan
    number = min(max(int(np.ceil(span * known.size)), _LEAST_LEADS), known.size)
    if span == 0 or number < 3:
        matrix[known, known] = 1.0
        return matrix
    away = lead[known] - lead[known, np.newaxis]
    # The lead just beyond the nearest ones has no weight any more.
    reach = np.sort(np.abs(away), axis=1)[:, min(number, known.size - 1), np.newaxis]
    reach = reach * (1.0 if number < known.size else 1 + 1 / number)
    local = np.clip(1 - np.abs(away / reach) ** 3, 0, 1) ** 3 * weight[known]
    moments = [(local * away**power).sum(axis=1, keepdims=True) for power in range(3)]
    line = local * (moments[2] - moments[1] * away)
    matrix[np.ix_(known, known)] = line / line.sum(axis=1, keepdims=True)
    return matrix


def neighbour_means(
    fields: np.ndarray,
    latitude: np.ndarray,
    longitude: np.ndarray,
    weights: np.ndarray,
    radius_km: float,
) -> np.ndarray:
    """Means (N, K) of N fields over the neighbourhood of each of K points.

    Parameters
    ----------
    fields : (N, K), NaN where there is no value
    latitude, longitude : (K,) degrees
    weights : (K,) area
    radius_km : float
        Points count by ``exp(-(d / radius)^2 / 2)`` and area; beyond three radii not at all.

    Examples
    --------
    >>> place = np.array([0.0, 0.0]), np.array([0.0, 0.001])
    >>> neighbour_means(np.array([[1.0, 3.0]]), *place, np.ones(2), 100.0).round(6).tolist()
    [[2.0, 2.0]]
    """
    known = np.isfinite(fields)
    filled = np.where(known, fields, 0.0)
    found = np.empty(fields.shape)
    step = max(1, 2**22 // latitude.size)
    for first in range(0, latitude.size, step):
        piece = slice(first, first + step)
        distance = great_circle_km(
            latitude[piece, np.newaxis], longitude[piece, np.newaxis], latitude, longitude
        )
        near = np.exp(-0.5 * (distance / radius_km) ** 2) * (distance <= 3 * radius_km) * weights
        with np.errstate(invalid="ignore", divide="ignore"):
            found[:, piece] = (filled @ near.T) / (known.astype(float) @ near.T)
    return np.where(known, found, np.nan)
