"""Sums of starts that were verified one by one, brought to common leads, places and ranks."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence

import numpy as np

from ensemble_horizon.night.verification.results import Frame, VerifiedResult, result_of_places
from ensemble_horizon.night.verification.scores import limit_levels
from ensemble_horizon.products.score_sums import PlaceSums, VariableSums
from ensemble_horizon.settings import Settings
from ensemble_horizon.skill.quantities import QUANTITIES
from ensemble_horizon.skill.ranks import spread_over
from ensemble_horizon.skill.reduction import ScoreSums

_TRUTHS = ("analysis", "observation")
_LEAD_DECIMALS = 6


def common_leads(filed: Iterable[VariableSums]) -> np.ndarray:
    """All leads (L,) that sums of starts have."""
    return np.unique(np.round(np.concatenate([item.lead for item in filed]), _LEAD_DECIMALS))


def pooled(settings: Settings, filed: Sequence[VariableSums], lead: np.ndarray) -> VerifiedResult:
    """Score a variable from the sums of several starts.

    Parameters
    ----------
    settings : Settings
    filed : one a start, in order of time, at least one, with equal fingerprints
    lead : (L,) all their leads, from `common_leads`

    Notes
    -----
    What one start has and another has not is missing there, as where all are verified at once: a
    lead of a longer run, a site that has been observed since. Ranks among fewer members are spread
    over the ranks of the most.
    """
    newest = filed[-1]
    parts = [part for item in filed for part in item.against.values()]
    members = max(part.sums.ranks.shape[2] for part in parts) - 1
    series: dict[str, list[ScoreSums]] = {}
    kinds: dict[str, list[tuple[str, str]]] = {}
    for truth in _TRUTHS:
        held = [item.against[truth] for item in filed if truth in item.against]
        if not held:
            continue
        kinds[truth] = _places(settings, held)
        series[truth] = [_on(item, truth, lead, kinds[truth], members) for item in filed]
    table = settings.verification
    frame = Frame(
        newest.name, newest.long_name, newest.units, lead, newest.lead_units,
        settings.growth.confidence, len(filed), members,
        limit_levels(table.skill, table.correlation), table.resamples,
    )  # fmt: skip
    return result_of_places(frame, kinds, series, newest.factor)


def _places(settings: Settings, held: Sequence[PlaceSums]) -> list[tuple[str, str]]:
    """Places that any of the starts has, in the order of the settings."""
    known: Mapping[tuple[str, str], None] = dict.fromkeys(
        place for part in held for place in part.places
    )
    regions, sites = settings.places()
    names = [item.name for item in regions] + [item.name for item in sites]
    order = {name: number for number, name in enumerate(names)}
    return sorted(known, key=lambda place: order.get(place[0], 0))


def _on(
    item: VariableSums,
    truth: str,
    lead: np.ndarray,
    places: Sequence[tuple[str, str]],
    members: int,
) -> ScoreSums:
    """The sums of one start on common leads, places and ranks; nothing where it has nothing."""
    part = item.against.get(truth)
    if part is None:
        return _nothing(lead.size, len(places), members)
    own = np.round(item.lead, _LEAD_DECIMALS)
    ranks = spread_over(part.sums.ranks, members)
    if list(part.places) == list(places) and np.array_equal(own, lead):
        return ScoreSums(part.sums.sums, part.sums.weights, ranks, {})
    found = _nothing(lead.size, len(places), members)
    rows = np.searchsorted(lead, own)[:, np.newaxis]
    columns = np.array([places.index(place) for place in part.places])
    found.sums[:, rows, columns] = part.sums.sums
    found.weights[:, rows, columns] = part.sums.weights
    found.ranks[rows, columns] = ranks
    return found


def _nothing(leads: int, places: int, members: int) -> ScoreSums:
    shape = (len(QUANTITIES), leads, places)
    return ScoreSums(np.zeros(shape), np.zeros(shape), np.zeros((leads, places, members + 1)), {})
