"""Toy systems whose limits of predictability are known, run as ensembles.

In reading order: `norms` (how large a displacement is), `dynamics` (the record of a system),
`mechanics` (systems of positions and velocities), `systems` (the systems, and `systems.registry`
by name), `schemes` (one step), `integration` (a run), `reference` (a run by an adaptive scheme),
`correlation`, `perturbations`, `exponents`, `ensemble`, `twin`.
"""

from __future__ import annotations

from ensemble_horizon.toys.dynamics import Field, Parameter, PublishedValue, System
from ensemble_horizon.toys.ensemble import run_ensemble
from ensemble_horizon.toys.exponents.pairs import pair_growth
from ensemble_horizon.toys.exponents.record import Estimate, Exponents
from ensemble_horizon.toys.exponents.tangents import lyapunov_exponents
from ensemble_horizon.toys.integration import Trajectory, integrate, march, settled
from ensemble_horizon.toys.mechanics import SplitSystem
from ensemble_horizon.toys.norms import Norm
from ensemble_horizon.toys.perturbations.bred import bred_vectors
from ensemble_horizon.toys.perturbations.lyapunov import lyapunov_vectors
from ensemble_horizon.toys.perturbations.members import displacements, perturb, plus_and_minus
from ensemble_horizon.toys.perturbations.method import Perturbation
from ensemble_horizon.toys.perturbations.registry import PERTURBATIONS, perturbation
from ensemble_horizon.toys.perturbations.singular import singular_vectors
from ensemble_horizon.toys.reference import integrate_adaptively
from ensemble_horizon.toys.schemes import SCHEMES, step, tangent_step
from ensemble_horizon.toys.systems.channel import TwoLayerChannel
from ensemble_horizon.toys.systems.few_bodies import FigureEight, TwoBody
from ensemble_horizon.toys.systems.gravity import GravitatingBodies
from ensemble_horizon.toys.systems.gyre_floats import GyreFloats
from ensemble_horizon.toys.systems.lorenz import Lorenz63, Lorenz96
from ensemble_horizon.toys.systems.lorenz_two_scales import LorenzTwoScales
from ensemble_horizon.toys.systems.planets import CompactPlanets
from ensemble_horizon.toys.systems.registry import SYSTEMS, system
from ensemble_horizon.toys.systems.rossler import Rossler
from ensemble_horizon.toys.systems.spiral import SpiralSink
from ensemble_horizon.toys.systems.van_der_pol import VanDerPol
from ensemble_horizon.toys.twin import (
    Displacement,
    FieldPlan,
    ModelVersion,
    Moment,
    TwinExperiment,
    analysis_at,
    follow_truth,
    initial_members,
    moment_of_start,
    run_forecast,
)

__all__ = [
    "PERTURBATIONS",
    "SCHEMES",
    "SYSTEMS",
    "CompactPlanets",
    "Displacement",
    "Estimate",
    "Exponents",
    "Field",
    "FieldPlan",
    "FigureEight",
    "GravitatingBodies",
    "GyreFloats",
    "Lorenz63",
    "Lorenz96",
    "LorenzTwoScales",
    "ModelVersion",
    "Moment",
    "Norm",
    "Parameter",
    "Perturbation",
    "PublishedValue",
    "Rossler",
    "SpiralSink",
    "SplitSystem",
    "System",
    "Trajectory",
    "TwinExperiment",
    "TwoBody",
    "TwoLayerChannel",
    "VanDerPol",
    "analysis_at",
    "bred_vectors",
    "displacements",
    "follow_truth",
    "initial_members",
    "integrate",
    "integrate_adaptively",
    "lyapunov_exponents",
    "lyapunov_vectors",
    "march",
    "moment_of_start",
    "pair_growth",
    "perturb",
    "perturbation",
    "plus_and_minus",
    "run_ensemble",
    "run_forecast",
    "settled",
    "singular_vectors",
    "step",
    "system",
    "tangent_step",
]
