"""What is known of a toy system, and what its measured exponents say beside it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import NamedTuple

from ensemble_horizon.checks import require_choice
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys import (
    Exponents,
    PublishedValue,
    System,
    lyapunov_exponents,
    pair_growth,
    system,
)
from ensemble_horizon.toys.exponents.record import Estimate

METHODS = ("qr", "pairs")


class Row(NamedTuple):
    """One measured quantity; ``refusal`` says why there is no estimate."""

    quantity: str
    estimate: Estimate | None
    published: tuple[PublishedValue, ...]
    refusal: str = ""


@dataclass(frozen=True)
class MeasuredExponents:
    """Exponents of a system, what follows from them, and what the literature says."""

    system: System
    found: Exponents
    exponents: tuple[Row, ...]
    derived: tuple[Row, ...]


def measure_exponents(
    name: str,
    parameters: dict[str, float],
    *,
    count: int | None = None,
    length: float | None = None,
    method: str = "qr",
    seed: int = 0,
    progress: Callable[[int, int], None] | None = None,
) -> MeasuredExponents:
    """Measure the exponents of the toy system called ``name`` and set published values beside.

    Raises
    ------
    ArgumentError
        If the system, a parameter or the method is unknown, or more exponents are asked for than
        the system has variables.
    """
    model = system(name, **parameters)
    require_choice(method, METHODS, "method")
    if method == "pairs":
        if count not in (None, 1):
            raise ArgumentError(
                "count",
                expected="1, as two runs side by side show the leading exponent only",
                found=str(count),
                remedy="leave it out, or take the method 'qr'",
            )
        found = pair_growth(model, length=length, seed=seed, progress=progress)
    else:
        found = lyapunov_exponents(model, count, length=length, seed=seed, progress=progress)
    known = published_for(model)
    units = "1" if found.time_units == "1" else f"{found.time_units}-1"
    exponents = tuple(
        Row(
            f"exponent {number + 1}",
            Estimate(float(value), float(low), float(high), units),
            _of_exponent(known, number),
        )
        for number, (value, low, high) in enumerate(
            zip(found.exponents, found.low, found.high, strict=True)
        )
    )
    derived = [_row("doubling time", lambda: found.doubling_time)]
    if found.hours_per_time_unit is not None:
        derived.append(_row("doubling time", lambda: found.doubling_hours))
    if found.exponents.size > 1:
        derived += [
            _row("dimension", lambda: found.dimension, _of(known, "dimension")),
            Row(f"sum of {found.exponents.size} exponents", found.sum,
                _of(known, "sum_of_exponents") if found.exponents.size == model.size else ()),
        ]  # fmt: skip
    if found.positive < found.exponents.size or found.exponents.size == model.size:
        positive = Estimate(found.positive, found.positive, found.not_negative, "1")
        derived.append(Row("exponents above zero", positive, _of(known, "positive_exponents")))
    return MeasuredExponents(model, found, exponents, tuple(derived))


def published_for(model: System) -> tuple[PublishedValue, ...]:
    """Return the published values that hold for the parameters of ``model``."""
    default = type(model)()
    own = {name: item.value for name, item in model.parameters.items()}

    def holds(value: PublishedValue) -> bool:
        told = {name: item.value for name, item in default.parameters.items()}
        return own == {**told, **dict(value.parameters)}

    return tuple(value for value in model.published if holds(value))


def _of(known: tuple[PublishedValue, ...], quantity: str) -> tuple[PublishedValue, ...]:
    return tuple(value for value in known if value.quantity == quantity)


def _of_exponent(known: tuple[PublishedValue, ...], number: int) -> tuple[PublishedValue, ...]:
    """Return what is published of the exponent ``number``, each as a value of its own."""
    found = []
    for value in _of(known, "exponents"):
        values = value.value if isinstance(value.value, tuple) else (value.value,)
        if number < len(values):
            single = PublishedValue(
                "exponent", values[number], value.tolerance, value.source, value.parameters
            )
            found.append(single)
    if number == 0:
        told = {(value.value, value.source) for value in found}
        leading = _of(known, "leading_exponent")
        found += [value for value in leading if (value.value, value.source) not in told]
    return tuple(found)


def _row(
    quantity: str, estimate: Callable[[], Estimate], known: tuple[PublishedValue, ...] = ()
) -> Row:
    try:
        return Row(quantity, estimate(), known)
    except ArgumentError as error:
        return Row(quantity, None, known, f"{error.found}; {error.remedy}")
