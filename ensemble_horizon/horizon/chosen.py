"""The chosen laws of many curves, taken law by law."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from ensemble_horizon.growth.law import Law
from ensemble_horizon.growth.laws import LAWS
from ensemble_horizon.growth.selection import Selection
from ensemble_horizon.growth.uncertainty import parameter_sensitivity


def chosen_groups(selection: Selection) -> Iterator[tuple[Law, np.ndarray, np.ndarray]]:
    """Yield each law, the rows (K,) that chose it, and their parameters (K, P)."""
    for number, name in enumerate(selection.laws):
        rows = np.flatnonzero(selection.chosen == number)
        if rows.size:
            yield LAWS[name], rows, selection.fits[number].parameters[rows]


def quantity_sensitivity(
    law: Law,
    quantity: str,
    parameters: np.ndarray,
    lead: np.ndarray,
    usable: np.ndarray,
    scale: str,
) -> np.ndarray:
    """Derivative (N, L) of a quantity of the law by ln(curve) at each lead.

    Parameters
    ----------
    quantity : {"growth_rate", "initial_error", "saturation"}
        Zero where the law has none.
    usable : (N, L) bool
        Leads that took part in the fit.
    """
    answer = parameter_sensitivity(law, parameters, lead, scale, usable)
    if quantity in law.parameters:
        return np.asarray(answer[:, law.parameters.index(quantity)])
    if quantity != "growth_rate":
        return np.zeros((parameters.shape[0], lead.size))
    # Power law: the rate at the initial error, c E0^(-p).
    initial, coefficient, exponent = parameters.T
    with np.errstate(divide="ignore", invalid="ignore"):
        rate = coefficient * initial**-exponent
        gradient = np.stack(
            [-exponent * rate / initial, rate / coefficient, -np.log(initial) * rate]
        )
    return np.einsum("pn,npl->nl", gradient, answer)
