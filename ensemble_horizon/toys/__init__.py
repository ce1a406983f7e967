"""Toy systems whose limits of predictability are known, run as ensembles.

In reading order: `dynamics` (the record of a system), `spiral`, `lorenz`, `channel_basis`,
`channel` (the systems), `registry` (by name), `integration`, `perturbation`, `ensemble`.
"""

from __future__ import annotations

from ensemble_horizon.toys.channel import TwoLayerChannel
from ensemble_horizon.toys.dynamics import Field, Parameter, PublishedValue, System
from ensemble_horizon.toys.ensemble import run_ensemble
from ensemble_horizon.toys.integration import Trajectory, integrate, rk4_step, tangent_step
from ensemble_horizon.toys.lorenz import Lorenz63, Lorenz96
from ensemble_horizon.toys.perturbation import PERTURBATIONS, perturb
from ensemble_horizon.toys.registry import SYSTEMS, system
from ensemble_horizon.toys.spiral import SpiralSink

__all__ = [
    "PERTURBATIONS",
    "SYSTEMS",
    "Field",
    "Lorenz63",
    "Lorenz96",
    "Parameter",
    "PublishedValue",
    "SpiralSink",
    "System",
    "Trajectory",
    "TwoLayerChannel",
    "integrate",
    "perturb",
    "rk4_step",
    "run_ensemble",
    "system",
    "tangent_step",
]
