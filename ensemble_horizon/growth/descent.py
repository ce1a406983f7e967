"""Damped Gauss-Newton (Levenberg 1944, Marquardt 1963) for many small problems at once.

All curves of a batch step together; those that are done leave it. Arrays are lead-major: (L, n)
over leads, (P, n) over parameters; every operation below runs over n.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ensemble_horizon.growth.batches import Batch
from ensemble_horizon.growth.clock import Clock
from ensemble_horizon.growth.law import Form

# A rounding error of the residual sum of squares must not count as a failed step.
ROUNDING = 1e-13
ROUNDING_FLOOR = 1e-30
LEAST_PIVOT = 1e-14
LEAST_DAMPING = 1e-12
MOST_DAMPING = 1e12
# Batches are repacked only when enough curves have left to pay for the copy.
COMPACT = 0.75


@dataclass
class Descent:
    """Where a descent ended: parameters (P, n), RSS (n,), J'J (P, P, n), finished (n,)."""

    theta: np.ndarray
    rss: np.ndarray
    normal: np.ndarray
    finished: np.ndarray

    def record(
        self,
        where: np.ndarray,
        theta: np.ndarray,
        state: State,
        done: np.ndarray,
        leave: np.ndarray,
    ) -> None:
        """Note the curves that leave, and whether they are done."""
        target = where[leave]
        self.theta[:, target] = theta[:, leave]
        self.rss[target] = state.rss[leave]
        self.normal[:, :, target] = state.normal[:, :, leave]
        self.finished[target] = done[leave]


@dataclass
class State:
    """Residual sum of squares (n,), J'r (P, n), J'J (P, P, n), extra curvature (n,) or None."""

    rss: np.ndarray
    gradient: np.ndarray
    normal: np.ndarray
    extra: np.ndarray | None

    def take(self, keep: np.ndarray) -> State:
        """The curves of index ``keep``."""
        extra = None if self.extra is None else self.extra[keep]
        return State(self.rss[keep], self.gradient[:, keep], self.normal[:, :, keep], extra)

    def advance(self, new: State, better: np.ndarray) -> State:
        """The new state where it is ``better``."""
        if better.all():
            return new
        extra = None
        if self.extra is not None and new.extra is not None:
            extra = np.where(better, new.extra, self.extra)
        return State(
            np.where(better, new.rss, self.rss),
            np.where(better, new.gradient, self.gradient),
            np.where(better, new.normal, self.normal),
            extra,
        )


def normal_equations(form: Form, clock: Clock, batch: Batch, theta: np.ndarray) -> State:
    """Residuals and derivatives at ``theta`` (P, n), summed over leads."""
    with np.errstate(all="ignore"):
        value, slopes = form.evaluate(theta, clock)
        residual = clock.room("residual", theta.shape[1])
        if batch.log:
            np.log(value, out=residual)
            np.subtract(batch.target, residual, out=residual)
        else:
            np.subtract(batch.target, value, out=residual)
        weighted = residual
        if batch.weight is not None:
            weighted = np.multiply(
                residual, batch.weight, out=clock.room("weighted", theta.shape[1])
            )
        rss = np.einsum("ln,ln->n", residual, weighted)
        extra = None
        bend = form.bend(theta, value, slopes, batch.log)
        if bend is not None:
            extra = -np.einsum("ln,ln->n", bend, weighted)
            extra = np.where(extra > 0, extra, 0.0)
        if not batch.log:
            slopes = _products(clock, "by_value", slopes, value)
        pulled = slopes
        if batch.weight is not None:
            pulled = _products(clock, "by_weight", slopes, batch.weight)
        count = len(slopes)
        gradient = np.empty((count, rss.size))
        normal = np.empty((count, count, rss.size))
        for i in range(count):
            np.einsum("ln,ln->n", slopes[i], weighted, out=gradient[i])
            for j in range(i + 1):
                np.einsum("ln,ln->n", pulled[i], slopes[j], out=normal[i, j])
                if i != j:
                    normal[j, i] = normal[i, j]
        check = rss + gradient[0] + gradient[-1] + normal[0, 0] + normal[-1, -1]
        rss[~np.isfinite(check)] = np.inf
    return State(rss, gradient, normal, extra)


def _products(
    clock: Clock, name: str, arrays: list[np.ndarray], factor: np.ndarray
) -> list[np.ndarray]:
    number = factor.shape[1]
    return [
        np.multiply(array, factor, out=clock.room(f"{name} {index}", number))
        for index, array in enumerate(arrays)
    ]


def factorise(matrix: np.ndarray) -> np.ndarray:
    """L and D of L D L' = matrix, arrays (P, P, n), D on the diagonal; tiny pivots are lifted."""
    size = matrix.shape[0]
    factor = np.empty_like(matrix)
    for j in range(size):
        pivot = matrix[j, j]
        scaled = [factor[j, k] * factor[k, k] for k in range(j)]
        for k in range(j):
            pivot = pivot - factor[j, k] * scaled[k]
        np.maximum(pivot, LEAST_PIVOT, out=factor[j, j])
        for i in range(j + 1, size):
            inner = matrix[i, j]
            for k in range(j):
                inner = inner - factor[i, k] * scaled[k]
            np.divide(inner, factor[j, j], out=factor[i, j])
    return factor


def solve(factor: np.ndarray, right: np.ndarray) -> np.ndarray:
    """Solve A x = right (P, n) given `factorise` of A."""
    size = factor.shape[0]
    result = right.copy()
    for i in range(1, size):
        for k in range(i):
            result[i] -= factor[i, k] * result[k]
    for i in reversed(range(size)):
        result[i] /= factor[i, i]
        for k in range(i + 1, size):
            result[i] -= factor[k, i] * result[k]
    return result


def unit_scale(normal: np.ndarray, free: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """J'J scaled to a diagonal of one, and the scale (P, n): zero for what is not free."""
    diagonal = np.einsum("iin->in", normal)
    with np.errstate(divide="ignore", invalid="ignore"):
        scale = np.where(free & (diagonal > 0), 1.0 / np.sqrt(diagonal), 0.0)
    matrix = normal * scale[:, None]
    matrix *= scale
    return matrix, scale


def proposed_step(
    state: State, damping: np.ndarray, free: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Step (P, n) of the free parameters, and the fall of the RSS that it promises (n,)."""
    matrix, scale = unit_scale(state.normal, free)
    for i in range(scale.shape[0]):
        matrix[i, i] = 1.0 + damping
    if state.extra is not None:
        matrix[0, 0] += state.extra * scale[0] ** 2
    force = state.gradient * scale
    step = solve(factorise(matrix), force)
    promise: np.ndarray = np.einsum("pn,pn->n", step, force)
    step *= scale
    return step, promise


def next_damping(damping: np.ndarray, better: np.ndarray, gain: np.ndarray) -> np.ndarray:
    """Less after a step that kept its promise, more after one that did not."""
    kept = np.where(gain > 0.5, 0.03, np.where(gain > 0.1, 0.5, 4.0))
    raised = np.maximum(damping, 1e-4) * 10.0
    return np.clip(np.where(better, damping * kept, raised), LEAST_DAMPING, MOST_DAMPING)


def descend(
    form: Form,
    clock: Clock,
    batch: Batch,
    theta: np.ndarray,
    tolerance: float,
    iterations: int,
) -> Descent:
    """Minimise the residual sum of squares of every curve from ``theta`` (P, n).

    A curve is finished when the next step promises less than ``tolerance`` of its RSS; that step
    is still taken. Bounds hold by projection.
    """
    lower, upper = np.array(form.lower)[:, None], np.array(form.upper)[:, None]
    theta = np.clip(theta, lower, upper)
    state = normal_equations(form, clock, batch, theta)
    end = Descent(
        theta.copy(), state.rss.copy(), state.normal.copy(), np.zeros(state.rss.size, dtype=bool)
    )
    floor = ROUNDING_FLOOR * np.einsum("ln,ln->n", batch.curve, batch.curve)
    damping = np.full(state.rss.size, 1e-4)
    where = np.arange(state.rss.size)
    alive = np.ones(state.rss.size, dtype=bool)
    for _ in range(iterations):
        free = ~((theta <= lower) & (state.gradient < 0) | (theta >= upper) & (state.gradient > 0))
        with np.errstate(all="ignore"):
            step, promise = proposed_step(state, damping, free)
            trial = np.clip(theta + step, lower, upper)
            done = (promise <= tolerance * state.rss) & (damping <= 1e-2) | (state.rss <= floor)
        leave = alive & (done | (damping >= MOST_DAMPING) | ~np.isfinite(state.rss))
        if leave.any():
            polish = done & (state.rss > floor)
            end.record(where, np.where(polish, trial, theta), state, done, leave)
            alive &= ~leave
            stay = np.flatnonzero(alive)
            if stay.size == 0:
                return end
            if stay.size < COMPACT * alive.size:
                where, alive, batch, state = (
                    where[stay],
                    alive[stay],
                    batch.take(stay),
                    state.take(stay),
                )
                theta, trial, floor = theta[:, stay], trial[:, stay], floor[stay]
                damping, promise = damping[stay], promise[stay]
        new = normal_equations(form, clock, batch, trial)
        better = new.rss <= state.rss * (1.0 + ROUNDING)
        with np.errstate(all="ignore"):
            gain = (state.rss - new.rss) / promise
        damping = next_damping(damping, better, gain)
        theta = trial if better.all() else np.where(better, trial, theta)
        state = state.advance(new, better)
    end.record(where, theta, state, np.zeros_like(alive), alive)
    return end
