"""Values of the register as the rules compare them: in one unit, and told as written and as compared."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

from loopdoc.register.model import Hold, Instrument, Loop, Part, known
from loopdoc.register.place import Place
from loopdoc.register.quantity import Quantity, Range
from loopdoc.register.units import Unit, same_kind
from loopdoc.rules.rule import NotChecked, need, not_checked

# A conversion is exact but for the last binary digits: 12000 kg/h must not lie above 12 t/h. Far below any
# digit that a register gives.
_RELATIVE = 1e-9
_ABSOLUTE = 1e-12


def equal(value: float, other: float) -> bool:
    """Whether two values in one unit are the same but for the rounding of a conversion."""
    return math.isclose(value, other, rel_tol=_RELATIVE, abs_tol=_ABSOLUTE)


def above(value: float, limit: float) -> bool:
    """Whether a value lies above a limit by more than the rounding of a conversion."""
    return value > limit and not equal(value, limit)


def below(value: float, limit: float) -> bool:
    """Whether a value lies below a limit by more than the rounding of a conversion."""
    return value < limit and not equal(value, limit)


def amount(value: float, unit: Unit) -> str:
    """A calculated value as the register would write it, with six significant digits."""
    return str(Quantity(float(f"{value:.6g}"), unit))


def in_both(written: Quantity | Range, unit: Unit) -> str:
    """A value or range as written, and in the unit in which it is compared where that is another."""
    if written.unit.symbol == unit.symbol:
        return str(written)
    if isinstance(written, Quantity):
        return f"{written} ({amount(written.to(unit.symbol), unit)})"
    band = written.to(unit.symbol)
    rounded = Range(float(f"{band.low:.6g}"), float(f"{band.high:.6g}"), unit)
    return f"{written} ({rounded})"


@dataclass(frozen=True, slots=True)
class Reading:
    """A value of the register in the unit in which it is compared."""

    name: str
    """The key under which it stands, in words."""
    value: float
    """In `unit`."""
    written: Quantity
    unit: Unit
    part: Part
    key: str

    @property
    def told(self) -> str:
        """As written, and as compared where that is another unit."""
        return in_both(self.written, self.unit)

    @property
    def place(self) -> Place:
        return self.part.origin.place(self.key)


def readings(part: Part, keys: tuple[str, ...], unit: Unit, whose: str) -> Iterator[Reading]:
    """The values that a part gives under the keys, each in the given unit.

    Keys that are not given are left out. After the last value the rule counts as not checked where one of
    them is on hold or has a unit of another kind (which the rule `unit-incompatible` tells).
    """
    lacking = ""
    for key in keys:
        name = key.replace("_", " ")
        written: Quantity | Hold | None = getattr(part, key)
        if isinstance(written, Hold):
            lacking = lacking or f"{whose} {name} {'is on hold' if written.readable else 'could not be read'}"
        elif written is not None and not same_kind(written.unit, unit):
            lacking = lacking or f"{whose} {name} has a unit of another kind"
        elif written is not None:
            yield Reading(name, written.to(unit.symbol), written, unit, part, key)
    if lacking:
        raise NotChecked(lacking)


def reading(written: Quantity, unit: Unit, what: str) -> float:
    """A value in the given unit; not checked where it has a unit of another kind."""
    if not same_kind(written.unit, unit):
        not_checked(f"{what} has a unit of another kind")
    return written.to(unit.symbol)


def measured_range(part: Loop | Instrument) -> Range:
    """The measurement range of a loop or instrument; not checked where it is lacking or not a range at all."""
    measurement = need(part.measurement, "the measurement")
    return forward(need(measurement.range, "the measurement range"), "the measurement range")


def range_place(part: Loop | Instrument) -> Place:
    """Where the measurement range stands, or the nearest key that encloses it."""
    measurement = known(part.measurement)
    return measurement.origin.place("range") if measurement else part.origin.key()


def forward(written: Range, what: str) -> Range:
    """A range whose low end is below its high end; the rule `range-reversed` tells of the others."""
    if written.span <= 0:
        not_checked(f"{what} is reversed")
    return written
