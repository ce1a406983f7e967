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

# A rounding error of the residual sum of squares must not count as a failed step; residuals are
# differences of sizes, so that the error goes with the root of RSS times the sum of squares.
ROUNDING = 1e-15
# Per lead, of curves scaled to one: residuals below it are rounding.
ROUNDING_FLOOR = 1e-26
# What an undamped step may still promise, relative to the RSS, where rounding ends a descent.
SETTLED = 1e-8
LEAST_PIVOT = 1e-14
LEAST_DAMPING = 1e-12
MOST_DAMPING = 1e12
# Largest part of the unit diagonal that learnt curvature may take.
MOST_SECANT = 0.5
# Steps that promise a larger part of the RSS are too long to learn curvature from.
NEAR = 1e-3
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
    """Where all curves of a batch stand.

    Attributes
    ----------
    rss : array (n,)
    gradient : array (P, n)
        J'r.
    normal : array (P, P, n)
        J'J.
    extra : array (n,) or None
        Second derivative by the first parameter that J'J leaves out.
    secant : array (P, P, n) or None
        Second derivatives that J'J leaves out, learnt from the steps.
    """

    rss: np.ndarray
    gradient: np.ndarray
    normal: np.ndarray
    extra: np.ndarray | None
    secant: np.ndarray | None = None

    def take(self, keep: np.ndarray) -> State:
        """The curves of index ``keep``."""
        extra = None if self.extra is None else self.extra[keep]
        secant = None if self.secant is None else self.secant[:, :, keep]
        return State(self.rss[keep], self.gradient[:, keep], self.normal[:, :, keep], extra, secant)

    def advance(self, new: State, better: np.ndarray, near: np.ndarray, step: np.ndarray) -> State:
        """The new state where it is ``better``, with what the step taught where ``near``."""
        secant = self._learn(new, near, step)
        extra = new.extra
        if better.all():
            return State(new.rss, new.gradient, new.normal, extra, secant)
        if self.extra is not None and extra is not None:
            extra = np.where(better, extra, self.extra)
        return State(
            np.where(better, new.rss, self.rss),
            np.where(better, new.gradient, self.gradient),
            np.where(better, new.normal, self.normal),
            extra,
            secant,
        )

    def _learn(self, new: State, near: np.ndarray, step: np.ndarray) -> np.ndarray | None:
        """Symmetric rank-one update; forgotten far from a minimum or where it would be large."""
        if not near.any():
            return None
        with np.errstate(all="ignore"):
            change = self.gradient - new.gradient
            change -= np.einsum("ijn,jn->in", new.normal, step)
            if new.extra is not None:
                change[0] -= new.extra * step[0]
            if self.secant is not None:
                change -= np.einsum("ijn,jn->in", self.secant, step)
            along = np.einsum("in,in->n", change, step)
            size = np.einsum("in,in->n", change, change / np.einsum("iin->in", new.normal))
            learnt = near & (size <= MOST_SECANT * np.abs(along))
            share = np.where(learnt, change / along, 0.0)
            secant = share[:, None] * np.where(learnt, change, 0.0)
            if self.secant is not None:
                secant += np.where(learnt, self.secant, 0.0)
        return secant


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
    if state.secant is not None:
        matrix += state.secant * scale[:, None] * scale
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
    last: bool = False,
) -> Descent:
    """Minimise the residual sum of squares of every curve from ``theta`` (P, n).

    A curve is finished when the next step promises less than ``tolerance`` of its RSS; that step
    is still taken. Bounds hold by projection. After the ``last`` iteration a curve is also
    finished where rounding alone keeps it from being so.
    """
    lower, upper = np.array(form.lower)[:, None], np.array(form.upper)[:, None]
    theta = np.clip(theta, lower, upper)
    state = normal_equations(form, clock, batch, theta)
    end = Descent(
        theta.copy(), state.rss.copy(), state.normal.copy(), np.zeros(state.rss.size, dtype=bool)
    )
    floor = np.full(state.rss.size, ROUNDING_FLOOR * batch.curve.shape[0])
    total = np.einsum("ln,ln->n", batch.target, batch.target) + batch.curve.shape[0]
    damping = np.full(state.rss.size, 1e-4)
    where = np.arange(state.rss.size)
    alive = np.ones(state.rss.size, dtype=bool)
    for _ in range(iterations):
        free = ~((theta <= lower) & (state.gradient < 0) | (theta >= upper) & (state.gradient > 0))
        with np.errstate(all="ignore"):
            step, promise = proposed_step(state, damping, free)
            trial = np.clip(theta + step, lower, upper)
            done = (promise <= tolerance * state.rss) & (damping <= 1e-2) | (state.rss <= floor)
        stuck = damping >= MOST_DAMPING
        if stuck.any():
            done |= stuck & _settled(state, free, floor)
        leave = alive & (done | stuck | ~np.isfinite(state.rss))
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
                damping, promise, total = damping[stay], promise[stay], total[stay]
        new = normal_equations(form, clock, batch, trial)
        noise = np.sqrt(state.rss * total) + state.rss
        better = new.rss <= state.rss + ROUNDING * noise
        with np.errstate(all="ignore"):
            gain = (state.rss - new.rss) / promise
        damping = next_damping(damping, better, gain)
        start = theta
        theta = trial if better.all() else np.where(better, trial, theta)
        state = state.advance(new, better, better & (promise <= NEAR * state.rss), trial - start)
    free = ~((theta <= lower) & (state.gradient < 0) | (theta >= upper) & (state.gradient > 0))
    end.record(where, theta, state, _settled(state, free, floor) & last, alive)
    return end


def _settled(state: State, free: np.ndarray, floor: np.ndarray) -> np.ndarray:
    """Whether a descent that finds no better point stands in a minimum, bool (n,)."""
    with np.errstate(all="ignore"):
        _, promise = proposed_step(state, np.zeros_like(floor), free)
        return np.asarray(promise <= SETTLED * state.rss + floor)
