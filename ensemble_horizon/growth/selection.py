"""Choice between the laws by the corrected Akaike criterion."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ensemble_horizon.growth.fitting import TOLERANCE, Fit, fit_curves
from ensemble_horizon.growth.law import Law
from ensemble_horizon.growth.laws import LAWS, find_law

NO_LAW = -1


@dataclass(frozen=True)
class Selection:
    """The law chosen for each of N curves, beside all that were tried.

    Attributes
    ----------
    laws : tuple of str
        Names of the laws tried.
    chosen : int array (N,)
        Index into ``laws``; -1 where none could be fitted.
    fits : tuple of Fit
        One for each law.
    """

    laws: tuple[str, ...]
    chosen: np.ndarray
    fits: tuple[Fit, ...]

    @property
    def reason(self) -> np.ndarray:
        """A `Reason` (N,): of the chosen law, or of the simplest one where none is chosen."""
        stack = np.stack([fit.reason for fit in self.fits])
        return np.asarray(np.take_along_axis(stack, np.maximum(self.chosen, 0)[None], axis=0)[0])


def select_law(
    lead: np.ndarray,
    curves: np.ndarray,
    laws: Sequence[Law | str] | None = None,
    scale: str = "linear",
    weights: np.ndarray | None = None,
    tolerance: float = TOLERANCE,
) -> Selection:
    """Fit several laws on the same scale and choose the one of least AICc for each curve.

    Parameters
    ----------
    lead, curves, scale, weights, tolerance
        As in `fit_curves`.
    laws : sequence of Law or str, optional
        The laws to try, the simplest first: ties go to the earlier one. All of them by default.

    Returns
    -------
    Selection
        A curve that does not grow can be fitted by the exponential law only, whose rate is then
        zero or negative: the choice falls on it, with the reason ``no_growth``.

    Raises
    ------
    ArgumentError
        As `fit_curves`.

    Examples
    --------
    >>> lead = np.arange(0.0, 120.0, 6.0)
    >>> curve = LAWS["logistic"].value(np.array([[0.1, 0.08, 1.0]]), lead)
    >>> selection = select_law(lead, curve)
    >>> selection.laws[selection.chosen[0]]
    'logistic'
    """
    records = [find_law(law) for law in (LAWS.values() if laws is None else laws)]
    fits = tuple(fit_curves(lead, curves, law, scale, weights, tolerance) for law in records)
    criterion = np.stack([fit.aicc for fit in fits])
    fitted = np.stack([fit.converged for fit in fits])
    criterion = np.where(fitted, criterion, np.nan)
    ranked = np.where(np.isnan(criterion), np.inf, criterion)
    chosen = ranked.argmin(axis=0)
    # With hardly more points than parameters AICc is infinite for all: take the first that fits.
    endless = np.isinf(np.take_along_axis(ranked, chosen[None], axis=0)[0])
    chosen = np.where(endless, fitted.argmax(axis=0), chosen)
    return Selection(
        laws=tuple(law.name for law in records),
        chosen=np.where(fitted.any(axis=0), chosen, NO_LAW),
        fits=fits,
    )
