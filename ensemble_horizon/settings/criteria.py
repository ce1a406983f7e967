"""Criteria as the settings file spells them, and amounts with units of their own."""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field, model_validator

from ensemble_horizon.errors import SettingsError
from ensemble_horizon.horizon.criteria import (
    Chance,
    ClimatologyFraction,
    Criterion,
    SaturationFraction,
    Tolerance,
)
from ensemble_horizon.runs.units import difference_scale

Fraction = Annotated[float, Field(gt=0, lt=1)]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]


class Table(BaseModel):
    """A table of the settings: no unknown keys, and nothing changes once it is read."""

    model_config = ConfigDict(extra="forbid", frozen=True, populate_by_name=True)


class ChanceTable(Table):
    """``chance = {beyond, probability}`` of a criterion."""

    beyond: float | str
    probability: Fraction


class CriterionTable(Table):
    """One of ``[[variables.NAME.criteria]]``: exactly one kind, and a name if wished."""

    name: str | None = None
    tolerance: float | str | None = None
    saturation_fraction: Fraction | None = None
    climatology_fraction: Positive | None = None
    chance: ChanceTable | None = None

    @model_validator(mode="after")
    def _one_kind(self) -> CriterionTable:
        kinds = ("tolerance", "saturation_fraction", "climatology_fraction", "chance")
        given = [kind for kind in kinds if getattr(self, kind) is not None]
        if len(given) != 1:
            raise ValueError(
                f"exactly one of {', '.join(kinds)}; found {', '.join(given) or 'none'}"
            )
        return self


def has_text(item: CriterionTable) -> bool:
    """Whether an amount of the criterion brings units of its own."""
    return isinstance(item.tolerance, str) or (
        item.chance is not None and isinstance(item.chance.beyond, str)
    )


def criterion_of(table: CriterionTable, units: str, key: str) -> Criterion:
    """The criterion that a table names, in the units of its variable."""
    if table.tolerance is not None:
        return Tolerance(_amount(table.tolerance, units, f"{key}.tolerance"))
    if table.saturation_fraction is not None:
        return SaturationFraction(table.saturation_fraction)
    if table.climatology_fraction is not None:
        return ClimatologyFraction(table.climatology_fraction)
    assert table.chance is not None
    beyond = _amount(table.chance.beyond, units, f"{key}.chance.beyond")
    return Chance(beyond, table.chance.probability)


def _amount(value: float | str, units: str, key: str) -> float:
    """A difference such as ``2.5`` or ``"5 knot"`` in the units of the variable."""
    if isinstance(value, str):
        number, _, unit = value.strip().partition(" ")
        try:
            amount = float(number)
        except ValueError:
            amount = float("nan")
        if amount != amount or not unit:
            raise SettingsError(
                key,
                expected=f"a number, or a text such as '2.5 {units}'",
                found=repr(value),
                remedy="write number, space, unit",
            )
        # This way round, because what the settings ask for is what a message calls found.
        return _above_zero(amount / difference_scale(units, unit.strip(), key), key)
    return _above_zero(float(value), key)


def _above_zero(value: float, key: str) -> float:
    if not 0 < value < float("inf"):
        raise SettingsError(
            key, expected="a finite amount above zero", found=f"{value:g}", remedy="correct it"
        )
    return value
