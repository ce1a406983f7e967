"""Cut curves into batches that stay in the processor's cache, lead-major and scaled to one."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ensemble_horizon.errors import ArgumentError

BATCH = 2048


@dataclass
class Batch:
    """Curves made ready for a fit.

    Attributes
    ----------
    curve : array (L, n)
        Sizes over the largest of each curve, 0 where masked.
    target : array (L, n)
        What is fitted: the same array, or its logarithm.
    weight : array (L, n) or None
        Weights of the squared residuals, 0 where masked; None for all ones.
    log : bool
        Whether the logarithm is fitted.
    """

    curve: np.ndarray
    target: np.ndarray
    weight: np.ndarray | None
    log: bool

    def take(self, keep: np.ndarray) -> Batch:
        """The curves of index ``keep``."""
        target = self.target[:, keep]
        curve = self.curve[:, keep] if self.log else target
        weight = None if self.weight is None else self.weight[:, keep]
        return Batch(curve, target, weight, self.log)

    def total(self) -> np.ndarray:
        """Weighted sum of squares of the target about its mean, shape (n,)."""
        if self.weight is None:
            number: np.ndarray | float = float(self.target.shape[0])
            weighted = self.target
        else:
            number = self.weight.sum(axis=0)
            weighted = self.weight * self.target
        mean_part = weighted.sum(axis=0) ** 2 / number
        return np.asarray(np.einsum("ln,ln->n", weighted, self.target) - mean_part)


@dataclass(frozen=True)
class Curves:
    """Curves (N, L) with optional weights (N, L), and what is known of each.

    ``points``, ``low`` and ``high`` (N,) are the number, least and largest of the usable values.
    """

    table: np.ndarray
    weights: np.ndarray | None
    log: bool
    points: np.ndarray
    low: np.ndarray
    high: np.ndarray

    @classmethod
    def survey(cls, table: np.ndarray, weights: np.ndarray | None, log: bool) -> Curves:
        """Count the usable points of each curve, and find their extremes."""
        number = table.shape[0]
        points = np.full(number, table.shape[1])
        low, high = np.empty(number), np.empty(number)
        for first in range(0, number, BATCH):
            part = slice(first, first + BATCH)
            curve, weight = _lead_major(table, weights, part)
            low[part], high[part] = curve.min(axis=0), curve.max(axis=0)
            whole = weight is None and np.isfinite(low[part] + high[part]).all()
            if whole and (not log or low[part].min() > 0):
                continue
            usable = _usable(curve, weight, log)
            points[part] = usable.sum(axis=0)
            low[part] = np.where(usable, curve, np.inf).min(axis=0)
            high[part] = np.where(usable, curve, -np.inf).max(axis=0)
        return cls(table, weights, log, points, low, high)

    @property
    def varied(self) -> np.ndarray:
        """Whether a curve rises above zero and is not constant, bool (N,)."""
        with np.errstate(invalid="ignore"):
            return np.asarray((self.high > 0) & (self.high - self.low > 1e-12 * self.high))

    def batch(self, rows: np.ndarray) -> Batch:
        """The curves of index ``rows``, ready for a fit."""
        curve, weight = _lead_major(self.table, self.weights, rows)
        curve /= self.high[rows]
        if self.points[rows].min() == curve.shape[0]:
            return Batch(curve, np.log(curve) if self.log else curve, weight, self.log)
        usable = _usable(curve, weight, self.log)
        curve[~usable] = 0.0
        weight = usable.astype(float) if weight is None else np.where(usable, weight, 0.0)
        target = np.log(np.where(usable, curve, 1.0)) if self.log else curve
        return Batch(curve, target, weight, self.log)


def checked_weights(weights: np.ndarray | None, shape: tuple[int, ...]) -> np.ndarray | None:
    """Weights broadcast to ``shape`` (N, L); `ArgumentError` unless they fit and are >= 0."""
    if weights is None:
        return None
    array = np.asarray(weights, dtype=float)
    if array.shape not in (shape, shape[1:]) or not np.all(array >= 0):
        raise ArgumentError(
            "weights",
            expected=f"numbers of at least zero, shape {shape[1:]} or {shape}",
            found=f"shape {array.shape}, smallest {array.min(initial=np.inf)}",
            remedy="give one weight per lead, or one per curve and lead",
        )
    return np.broadcast_to(array, shape)


def _lead_major(
    curves: np.ndarray, weights: np.ndarray | None, rows: np.ndarray | slice
) -> tuple[np.ndarray, np.ndarray | None]:
    curve = np.array(curves[rows].T, dtype=float, order="C")
    return curve, None if weights is None else np.array(weights[rows].T, order="C")


def _usable(curve: np.ndarray, weight: np.ndarray | None, log: bool) -> np.ndarray:
    usable = np.isfinite(curve)
    if log:
        with np.errstate(invalid="ignore"):
            usable &= curve > 0
    if weight is not None:
        usable &= weight > 0
    return usable
