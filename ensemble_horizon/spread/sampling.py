"""Sampling noise of a spread that rests on few members.

A spread variance from M members scatters like a chi-square. How many degrees of freedom it has
depends on how many independent patterns a region holds and on the tails of the members'
distribution; how the noise of one lead goes with that of another depends on how long the members
keep their order. Both are estimated here from second moments between members, which scatter far
less than the fourth moments that a resampling of 20 members rests on.

For Gaussian members with covariance S(s,t) between leads s and t (cells as vector components),

    Cov(V_s, V_t) = 2 tr(S(s,t) S(t,s)) / (M - 1),

and tr(S S) is estimated without bias from the members' inner products (Wishart moments; Bai and
Saranadasa 1996, Statistica Sinica, from memory). Heavier tails enter as an excess kurtosis pooled
over places: Var(V) = V^2 (2/(M-1) + kurtosis/M), the textbook variance of a sample variance.

A position has two components, east and north, which enter like the cells of a region of two points:
its variance has up to 2 (M - 1) degrees of freedom, and no more than M - 1 where the members lie
along a line.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr
from scipy import special

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.spread.curves import spatial_dimensions
from ensemble_horizon.spread.kurtosis import pooled_kurtosis
from ensemble_horizon.spread.moments import component_deviations, member_deviations
from ensemble_horizon.spread.places import Region, grid_points, region_weights
from ensemble_horizon.vocabulary import LATITUDE, LEAD, LONGITUDE, MEMBER, START

LEAST_STARTS = 5


@dataclass(frozen=True)
class LeadNoise:
    """Sampling noise of one spread curve.

    Parameters
    ----------
    dof : (L,) chi-square degrees of freedom of the variance at each lead
    correlation : (L, L) correlation of the noise of ln(variance) between leads
    inflation : float
        By how much quantiles are widened because the noise itself is known from few starts.
    """

    dof: np.ndarray
    correlation: np.ndarray
    inflation: float = 1.0

    def log_spread_covariance(self) -> np.ndarray:
        """Covariance (L, L) of ln(spread): trigamma(dof / 2) / 4 on the diagonal."""
        scale = np.sqrt(special.polygamma(1, self.dof / 2) / 4)
        return np.asarray(self.correlation * scale[:, np.newaxis] * scale)

    def band(self, confidence: float) -> tuple[np.ndarray, np.ndarray]:
        """Factors (L,) that turn a spread into the ends of its interval.

        ``sqrt(dof / chi2)`` at the two quantiles; for one point and M Gaussian members this is the
        exact chi-square interval with M - 1 degrees of freedom.

        Examples
        --------
        >>> low, high = LeadNoise(np.array([19.0]), np.eye(1)).band(0.9)
        >>> float(low[0].round(4)), float(high[0].round(4))
        (0.7939, 1.3704)
        """
        tail = (1 - confidence) / 2
        low = np.sqrt(self.dof / chi_square_quantile(1 - tail, self.dof))
        high = np.sqrt(self.dof / chi_square_quantile(tail, self.dof))
        return low, high


def chi_square_quantile(probability: np.ndarray | float, dof: np.ndarray | float) -> np.ndarray:
    """Quantile of the chi-square distribution; scipy.stats is slow to load and to call."""
    return np.asarray(2 * special.gammaincinv(np.asarray(dof) / 2, probability))


def noise_from_gram(gram: np.ndarray, kurtosis: float = 0.0, one_place: bool = False) -> LeadNoise:
    """Sampling noise from the members' inner products at each lead.

    Parameters
    ----------
    gram : (L, M, M) weighted inner products of the members' deviations from their mean
    kurtosis : float
        Excess kurtosis of the members, pooled over places; below zero counts as zero.
    one_place : bool
        Whether these are displacements at one place, whose two components share their tails; the
        places of a region are far or near together.

    Examples
    --------
    >>> deviation = np.random.default_rng(0).normal(size=(3, 20, 1))
    >>> deviation -= deviation.mean(axis=1, keepdims=True)
    >>> noise_from_gram(deviation @ deviation.transpose(0, 2, 1)).dof.round(6).tolist()
    [19.0, 19.0, 19.0]
    """
    present = np.einsum("lmm->lm", gram) > 0
    n = np.maximum(present.sum(axis=1) - 1.0, 1.0)
    trace = np.einsum("lmm->l", gram) / n
    flat = gram.reshape(gram.shape[0], -1)
    square = flat @ flat.T / (n[:, np.newaxis] * n)
    return _noise_of_traces(square, trace[:, np.newaxis] * trace, n, kurtosis, one_place)


def _noise_of_traces(
    square: np.ndarray, product: np.ndarray, n: np.ndarray, kurtosis: float, one_place: bool
) -> LeadNoise:
    """Noise from tr(S_s S_t) and tr(S_s) tr(S_t), both (L, L), of sample covariances S."""
    pair = np.minimum(n[:, np.newaxis], n)
    with np.errstate(invalid="ignore", divide="ignore"):
        cross = (square - product / pair) * pair**2 / np.maximum((pair - 1) * (pair + 2), 1.0)
        own = np.maximum(np.diag(cross), np.diag(product) * 1e-6)
        dof = n * np.maximum(np.diag(product) - 2 * own / n, own) / own
        # No value or no spread at a lead: nothing to tell patterns by, but still a number.
        dof = np.where(own > 0, dof, n)
        correlation = cross / np.sqrt(own[:, np.newaxis] * own)
    widened = _widen_together(dof, n, kurtosis) if one_place else _widen(dof, n, kurtosis)
    return LeadNoise(widened, _as_correlation(correlation))


def noise_from_points(values: np.ndarray, kurtosis: float = 0.0) -> LeadNoise:
    """Sampling noise at a point, with the lead correlation pooled over a sample of points.

    Parameters
    ----------
    values : (L, M, K) members at K points of the neighbourhood, or (L, M, K, C) of C components:
        with two, displacements, the degrees of freedom are pooled over the points as well
    kurtosis : float
        As in `noise_from_gram`.
    """
    leads, members, points = values.shape[:3]
    flat = values.reshape(leads, members, points, -1).transpose(3, 1, 0, 2)
    parts, count = component_deviations([part.reshape(members, -1) for part in flat])
    deviation = np.stack([part.reshape(members, leads, points) for part in parts])
    deviation = deviation.transpose(3, 2, 0, 1)  # (K, L, C, M)
    with np.errstate(invalid="ignore", divide="ignore"):
        unit = deviation / np.sqrt((deviation**2).sum(axis=(2, 3), keepdims=True))
    n = np.maximum(count.reshape(leads, points).max(axis=1) - 1.0, 1.0)
    unit = unit.reshape(points, -1, members)
    square = (unit @ unit.transpose(0, 2, 1)) ** 2
    if len(parts) > 1:
        square = square.reshape(points, leads, len(parts), leads, len(parts)).sum(axis=(2, 4))
        known = np.isfinite(square)
        with np.errstate(invalid="ignore", divide="ignore"):
            mean = np.where(known, square, 0.0).sum(axis=0) / known.sum(axis=0)
        return _noise_of_traces(mean, np.ones((leads, leads)), n, kurtosis, True)
    correlation = _unbiased_mean_square(square, np.minimum(n[:, np.newaxis], n) + 1)
    return LeadNoise(_widen(n, n, kurtosis), _as_correlation(correlation))


def _unbiased_mean_square(square: np.ndarray, members: np.ndarray) -> np.ndarray:
    """Mean (L, L) over K points of squared correlations (K, L, L), freed of small-sample bias.

    1 - (M-3)/(M-2) (1-r^2) 2F1(1, 1; M/2; 1-r^2) (Olkin and Pratt 1958, Annals of Mathematical
    Statistics, from memory), with the first terms of the series.
    """
    known = np.isfinite(square)
    rest = np.where(known, 1 - square, 0)
    number = np.maximum(known.sum(axis=0), 1)
    power, total, factor = rest, rest.sum(axis=0), np.ones(members.shape)
    for order in range(1, 7):
        power = power * rest
        factor = factor * order / (members / 2 + order - 1)
        total = total + factor * power.sum(axis=0)
    mean = 1 - np.maximum(members - 3, 0) / np.maximum(members - 2, 1) * total / number
    return np.where(known.any(axis=0), mean, 0.0)


def pooled_noise(
    variances: np.ndarray, noises: Sequence[LeadNoise], confidence: float
) -> LeadNoise:
    """Sampling noise of a variance averaged over starts.

    Parameters
    ----------
    variances : (S, L, K) spread variance of each start at K places, NaN where there is none
    noises : S LeadNoise
        Noise of each start from its members.
    confidence : float
        Of the intervals that will rest on it.

    Notes
    -----
    From five starts on, the scatter between starts is what counts, members included; starts close
    in time repeat one another, which a Bartlett-weighted long-run covariance takes in (Newey and
    West 1987, Econometrica; bandwidth 4 (S/100)^(2/9) as is common practice), and Student's t with
    S - 1 degrees of freedom stands for the normal quantile. With fewer starts the interval speaks
    of the members of those very starts. Over several places the relative covariance is averaged.
    """
    starts = variances.shape[0]
    mean = mean_over_starts(variances)
    known = np.isfinite(variances)
    with np.errstate(invalid="ignore", divide="ignore"):
        relative_size = np.nan_to_num(variances / mean, nan=0.0, posinf=0.0)
    # A start counts for more in the mean of a lead that other starts lack.
    share = starts / np.maximum(known.sum(axis=0), 1)
    inflation = 1.0
    if starts >= LEAST_STARTS:
        departure = np.where(known & (mean > 0), relative_size - 1, 0.0) * share
        relative = _long_run_covariance(departure) / starts
        tail = 1 - (1 - confidence) / 2
        inflation = float(special.stdtrit(starts - 1, tail) / special.ndtri(tail))
    else:
        relative = np.zeros((mean.shape[0], mean.shape[0]))
        for size, noise in zip((relative_size * share).mean(axis=2), noises, strict=True):
            part = size * np.sqrt(2 / noise.dof)
            relative += part[:, np.newaxis] * part * noise.correlation
        relative /= starts**2
    own = np.maximum(np.diag(relative), 1e-9)
    correlation = relative / np.sqrt(own[:, np.newaxis] * own)
    return LeadNoise(np.maximum(2 / own, 1.0), _as_correlation(correlation), inflation)


def mean_over_starts(variances: np.ndarray) -> np.ndarray:
    """Mean over the first axis of what is finite; NaN where nothing is."""
    known = np.isfinite(variances)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.where(known, variances, 0.0).sum(axis=0) / known.sum(axis=0))


def _long_run_covariance(departure: np.ndarray) -> np.ndarray:
    """Covariance (L, L) of the sum over S starts, per start, averaged over K places."""
    starts, _, places = departure.shape
    bandwidth = int(4 * (starts / 100) ** (2 / 9))
    total = np.einsum("slk,smk->lm", departure, departure)
    for lag in range(1, min(bandwidth, starts - 1) + 1):
        cross = np.einsum("slk,smk->lm", departure[lag:], departure[:-lag])
        total = total + (1 - lag / (bandwidth + 1)) * (cross + cross.T)
    return np.asarray(total / (starts - 1) / places)


def sampling(
    ensemble: xr.DataArray, *, region: Region | None = None, area: xr.DataArray | None = None
) -> xr.Dataset:
    """Sampling noise of the spread curve of one start, for `horizon` and `growth_interval`.

    Parameters
    ----------
    ensemble : DataArray (lead, member, *space) of one start, or without space
    region : Region, optional
        The region whose curve is meant; the whole field where none is given.
    area : DataArray (*space), optional
        Cell areas.

    Returns
    -------
    Dataset with ``dof`` (lead) and ``noise_correlation`` (lead, lead_other).

    Raises
    ------
    ArgumentError
        if lead or member is missing, there are several starts, space lacks latitude and longitude,
        or the region holds no point.

    Examples
    --------
    >>> values = np.random.default_rng(1).normal(size=(4, 20))
    >>> members = xr.DataArray(values, dims=("lead", "member"))
    >>> sampling(members).dof.values.round(6).tolist()
    [19.0, 19.0, 19.0, 19.0]
    """
    require_dimension(ensemble, LEAD, "ensemble")
    require_dimension(ensemble, MEMBER, "ensemble")
    data = _one_start(ensemble)
    space: tuple[str, ...] = ()
    if set(data.dims) > {LEAD, MEMBER}:
        space = spatial_dimensions(data)
    values = data.transpose(LEAD, MEMBER, *space).values.astype(float)
    values = values.reshape(*values.shape[:2], -1)
    weights = np.ones(1)
    if space:
        latitude, longitude = grid_points({name: data[name] for name in (LATITUDE, LONGITUDE)})
        cells = None if area is None else area.transpose(*space).values
        weights = region_weights(region or Region("domain"), latitude, longitude, cells)
    kurtosis = pooled_kurtosis(values[:, :, weights > 0])
    gram = np.stack([_gram(field, weights) for field in values])
    noise = noise_from_gram(gram, kurtosis)
    lead = data[LEAD] if LEAD in data.coords else np.arange(values.shape[0])
    return xr.Dataset(
        {
            "dof": (LEAD, noise.dof, {"long_name": "chi-square degrees of freedom", "units": "1"}),
            "noise_correlation": ((LEAD, "lead_other"), noise.correlation, {"units": "1"}),
        },
        coords={LEAD: lead},
    )


def _one_start(ensemble: xr.DataArray) -> xr.DataArray:
    if START not in ensemble.dims:
        return ensemble
    if ensemble.sizes[START] != 1:
        raise ArgumentError(
            "ensemble",
            expected="one start",
            found=f"{ensemble.sizes[START]} starts",
            remedy=f"choose one, for instance with .isel({START}=0)",
        )
    return ensemble.isel({START: 0}, drop=True)


def _gram(field: np.ndarray, weights: np.ndarray) -> np.ndarray:
    deviation, _ = member_deviations(field)
    deviation = np.where(np.isfinite(deviation), deviation, 0.0) * np.sqrt(weights)
    return np.asarray(deviation @ deviation.T)


def _widen(dof: np.ndarray, n: np.ndarray, kurtosis: float) -> np.ndarray:
    # Elliptical tails scale Cov(V_s, V_t) as a whole: 2/n becomes 2/n + kurtosis/M.
    factor = 1 + max(kurtosis, 0.0) / 2 * n / (n + 1)
    return np.maximum(dof / factor, 1.0)


def _widen_together(dof: np.ndarray, n: np.ndarray, kurtosis: float) -> np.ndarray:
    """The same for components of an elliptical distribution, which are far out together.

    Its fourth cumulants are kurtosis / 3 (S_ii S_jj + 2 S_ij^2) (Muirhead 1982, Aspects of
    Multivariate Statistical Theory, from memory), and tr(S S) / tr(S)^2 is n / dof.
    """
    extra = max(kurtosis, 0.0) / 3 * (1 + 2 * n / dof) / (n + 1)
    return np.maximum(2 / (2 / dof + extra), 1.0)


def _as_correlation(matrix: np.ndarray) -> np.ndarray:
    """The nearest-by-eigenvalue correlation matrix; leads without data stand alone."""
    clean = np.clip(np.nan_to_num(matrix, nan=0.0), 0.0, 1.0)
    np.fill_diagonal(clean, 1.0)
    values, vectors = np.linalg.eigh((clean + clean.T) / 2)
    fixed = (vectors * np.maximum(values, 1e-8)) @ vectors.T
    scale = np.sqrt(np.diag(fixed))
    return np.asarray(fixed / scale[:, np.newaxis] / scale)
