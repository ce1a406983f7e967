"""Scores and skill limits at every grid point."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from ensemble_horizon.horizon.skill_limits import Falls, falls_of_curves
from ensemble_horizon.night.engine import Engine, shared
from ensemble_horizon.night.verification.scores import SCORES, SKILLS
from ensemble_horizon.skill.interval import STATISTICS, statistic_interval
from ensemble_horizon.skill.quantities import QUANTITIES
from ensemble_horizon.skill.reduction import ScoreSums

# Points handled at once: two inputs x starts x points x 8 bytes, several times over.
_POINTS = 4096
MAPPED = (
    "bias", "rmse", "spread_error_ratio", "crps", "skill_climatology", "skill_persistence",
    "anomaly_correlation",
)  # fmt: skip


def mapped_quantities(absent: set[str]) -> tuple[str, ...]:
    """Quantities that the maps need, but for those that will be absent, in their own order."""
    wanted = {name for score in SCORES if score.name in MAPPED for name in score.inputs}
    return tuple(name for name in QUANTITIES if name in wanted - absent)


def kept_quantities(fields: tuple[str, ...]) -> tuple[str, ...]:
    """What the interval of the skill needs of every start: two quantities, or none."""
    name = skill_of(fields)
    return () if name is None else _inputs(name)


def skill_of(fields: tuple[str, ...]) -> str | None:
    """The first skill that some quantities give."""
    return next((name for name in SKILLS if set(_inputs(name)) <= set(fields)), None)


@dataclass
class MapSums:
    """Running sums over starts of fields (L, P), and the starts they come from."""

    leads: int
    size: int
    total: dict[str, np.ndarray] = field(default_factory=dict)
    count: dict[str, np.ndarray] = field(default_factory=dict)

    def add(self, part: ScoreSums, leads: slice, points: np.ndarray | None) -> None:
        """Take in one block of one start."""
        where = slice(None) if points is None else points
        for name, values in part.fields.items():
            if name not in self.total:
                self.total[name] = np.zeros((self.leads, self.size))
                self.count[name] = np.zeros((self.leads, self.size), dtype=np.uint16)
            known = np.isfinite(values)
            whole = bool(known.all())
            self.total[name][leads, where] += values if whole else np.where(known, values, 0)
            self.count[name][leads, where] += np.uint16(1) if whole else known

    def take_back(
        self, fields: dict[str, np.ndarray], leads: slice, points: np.ndarray | None
    ) -> None:
        """Undo `add` of a block that gave these fields."""
        where = slice(None) if points is None else points
        for name, values in fields.items():
            known = np.isfinite(values)
            self.total[name][leads, where] -= np.where(known, values, 0)
            self.count[name][leads, where] -= known

    def scores(self, factor: float) -> dict[str, np.ndarray]:
        """Values (L, P) float32 of the mapped scores."""
        found = {}
        for score in SCORES:
            if score.name not in MAPPED or not set(score.inputs) <= set(self.total):
                continue
            statistic = STATISTICS[score.statistic]
            values = np.empty((self.leads, self.size), dtype=np.float32)
            for lead in range(self.leads):
                with np.errstate(invalid="ignore", divide="ignore"):
                    means = np.stack(
                        [self.total[name][lead] / self.count[name][lead] for name in score.inputs]
                    )
                    values[lead] = statistic.back(statistic.scale(means))
            values[~np.isfinite(values)] = np.nan
            found[score.name] = values * np.float32(factor) if score.sized else values
        return found


@dataclass(frozen=True)
class SkillTask:
    """The interval of the skill at one lead, at every point."""

    lead: int
    confidence: float


def skill_interval(engine: Engine, leads: int, size: int, confidence: float) -> np.ndarray:
    """Mean score, and value, low and high of its skill, (4, L, P) float32, from the scratch file.

    The skill is that of the starts that have both inputs, the mean that of all with the first.
    """
    found = np.empty((4, leads, size), dtype=np.float32)
    tasks = [SkillTask(lead, confidence) for lead in range(leads)]
    for number, part in engine.run(_skill_at_lead, tasks):
        found[:, number] = part
    return found


def _skill_at_lead(task: SkillTask) -> np.ndarray:
    scratch = shared().scratch
    found = np.empty((4, scratch.size), dtype=np.float32)
    for first in range(0, scratch.size, _POINTS):
        points = slice(first, min(first + _POINTS, scratch.size))
        inputs = np.stack([scratch.read(number, task.lead, points) for number in range(2)])
        inputs = inputs.astype(float)
        known = np.isfinite(inputs[0])
        with np.errstate(invalid="ignore"):
            found[0, points] = np.where(known, inputs[0], 0.0).sum(axis=0) / known.sum(axis=0)
        found[1:, points] = statistic_interval(STATISTICS["skill"], inputs, task.confidence)[:3]
    return found


def map_falls(
    lead: np.ndarray,
    scores: dict[str, np.ndarray],
    levels: dict[str, float],
    interval: dict[str, tuple[np.ndarray, np.ndarray]],
) -> dict[str, Falls]:
    """Where the scores of every point fall to their levels, with an interval where there is one."""
    found = {}
    for name, level in levels.items():
        if name not in scores:
            continue
        nothing = np.full((1, 1), np.nan)
        low, high = interval.get(name, (nothing, nothing))
        value = scores[name]
        ends = (np.broadcast_to(low, value.shape), np.broadcast_to(high, value.shape))
        found[name] = falls_of_curves(lead, value, *ends, level=level)
    return found


def _inputs(name: str) -> tuple[str, ...]:
    return next(score.inputs for score in SCORES if score.name == name)
