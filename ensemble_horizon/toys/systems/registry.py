"""The toy systems by name."""

from __future__ import annotations

from dataclasses import fields

from ensemble_horizon.checks import require_choice
from ensemble_horizon.toys.dynamics import System
from ensemble_horizon.toys.systems.channel import TwoLayerChannel
from ensemble_horizon.toys.systems.few_bodies import FigureEight, TwoBody
from ensemble_horizon.toys.systems.gyre_floats import GyreFloats
from ensemble_horizon.toys.systems.lorenz import Lorenz63, Lorenz96
from ensemble_horizon.toys.systems.lorenz_two_scales import LorenzTwoScales
from ensemble_horizon.toys.systems.planets import CompactPlanets
from ensemble_horizon.toys.systems.rossler import Rossler
from ensemble_horizon.toys.systems.spiral import SpiralSink
from ensemble_horizon.toys.systems.van_der_pol import VanDerPol

SYSTEMS: dict[str, type[System]] = {
    kind.name: kind
    for kind in (
        SpiralSink,
        VanDerPol,
        Rossler,
        Lorenz63,
        Lorenz96,
        LorenzTwoScales,
        TwoLayerChannel,
        GyreFloats,
        TwoBody,
        FigureEight,
        CompactPlanets,
    )
}


def system(name: str, **parameters: float) -> System:
    """Return the toy system called ``name``, with some of its parameters set.

    Parameters
    ----------
    name : str
        A key of `SYSTEMS`.
    **parameters : float
        Parameters to set; the others keep their default.

    Raises
    ------
    ArgumentError
        If there is no such system or parameter, or a value that the system does not accept.

    Examples
    --------
    >>> system("lorenz-63", rho=35.0).parameters["rho"].value
    35.0
    >>> from ensemble_horizon.errors import ArgumentError
    >>> try:
    ...     system("lorentz-63")
    ... except ArgumentError as error:
    ...     print(error.remedy)
    did you mean 'lorenz-63'?
    """
    kind = SYSTEMS[require_choice(name, SYSTEMS, "name")]
    known = [entry.name for entry in fields(kind)]
    for key in parameters:
        require_choice(key, known, f"parameter of {name}")
    return kind(**parameters)
