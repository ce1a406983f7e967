"""Toy systems whose limits of predictability are known, run as ensembles.

In reading order: `norms` (how large a displacement is), `dynamics` (the record of a system),
`systems` (the systems, and `systems.registry` by name), `schemes` (one step), `integration`
(a run), `perturbation`, `ensemble`.
"""

from __future__ import annotations

from ensemble_horizon.toys.dynamics import Field, Parameter, PublishedValue, System
from ensemble_horizon.toys.ensemble import run_ensemble
from ensemble_horizon.toys.integration import Trajectory, integrate, march, settled
from ensemble_horizon.toys.norms import Norm
from ensemble_horizon.toys.perturbation import PERTURBATIONS, perturb
from ensemble_horizon.toys.schemes import SCHEMES, step, tangent_step
from ensemble_horizon.toys.systems.channel import TwoLayerChannel
from ensemble_horizon.toys.systems.lorenz import Lorenz63, Lorenz96
from ensemble_horizon.toys.systems.registry import SYSTEMS, system
from ensemble_horizon.toys.systems.spiral import SpiralSink

__all__ = [
    "PERTURBATIONS",
    "SCHEMES",
    "SYSTEMS",
    "Field",
    "Lorenz63",
    "Lorenz96",
    "Norm",
    "Parameter",
    "PublishedValue",
    "SpiralSink",
    "System",
    "Trajectory",
    "TwoLayerChannel",
    "integrate",
    "march",
    "perturb",
    "run_ensemble",
    "settled",
    "step",
    "system",
    "tangent_step",
]
