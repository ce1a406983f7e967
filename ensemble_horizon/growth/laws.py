"""The registry of the laws of error growth."""

from __future__ import annotations

from ensemble_horizon.checks import require_choice
from ensemble_horizon.growth.exponential import EXPONENTIAL
from ensemble_horizon.growth.law import Law
from ensemble_horizon.growth.logistic import LOGISTIC
from ensemble_horizon.growth.power import POWER
from ensemble_horizon.growth.source import LOGISTIC_SOURCE

LAWS: dict[str, Law] = {law.name: law for law in (EXPONENTIAL, LOGISTIC, LOGISTIC_SOURCE, POWER)}


def find_law(law: Law | str) -> Law:
    """The law of that name.

    Raises
    ------
    ArgumentError
        If no law has the name.

    Examples
    --------
    >>> find_law("logistic").parameters
    ('initial_error', 'growth_rate', 'saturation')
    """
    return law if isinstance(law, Law) else LAWS[require_choice(law, LAWS, "law")]
