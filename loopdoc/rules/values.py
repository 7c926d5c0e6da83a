"""Values of the register as the rules compare them: in one unit, and told as written and as compared."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

from loopdoc.register.model import Hold, Instrument, Loop, Part, known
from loopdoc.register.place import Place
from loopdoc.register.quantity import Quantity, Range
from loopdoc.register.units import Unit, same_difference, same_kind
from loopdoc.rules.rule import need, not_checked

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


def time_s(written: Quantity, what: str) -> float:
    """A time in seconds; not checked where the value is no time (the rule `schema` tells of it)."""
    if written.unit.kind != "time":
        not_checked(f"{what} is no time")
    return written.to("s")


def duration(seconds: float) -> str:
    """A calculated time as the register would write it, with two significant digits."""
    if abs(seconds) < 100:
        return f"{seconds:.2g} s"
    return f"{seconds / 60:.2g} min" if abs(seconds) < 6000 else f"{seconds / 3600:.2g} h"


def duration_beside(seconds: float, written: Quantity) -> str:
    """A calculated time in the unit of a written one, with as many digits as it takes to tell the two apart."""
    value = seconds / Quantity(1.0, written.unit).to("s")
    for digits in range(3 if value >= 100 else 2, 18):
        shown = float(f"{value:.{digits}g}")
        if shown != written.value and (shown < written.value) == (value < written.value):
            break
    return str(Quantity(shown, written.unit))


@dataclass(frozen=True, slots=True)
class Scale:
    """The unit in which values are compared, and whether they are differences of readings."""

    unit: Unit
    is_difference: bool = False
    """True for a temperature difference, where 9 degF are 5 degC and not -12.8."""

    def takes(self, unit: Unit) -> bool:
        """Whether a value in a unit can be compared here."""
        return same_difference(unit, self.unit) if self.is_difference else same_kind(unit, self.unit)

    def value(self, written: Quantity) -> float:
        """A value in the unit of the scale."""
        symbol = self.unit.symbol
        return written.difference_in(symbol) if self.is_difference else written.to(symbol)

    def told(self, written: Quantity) -> str:
        """A value as written, and in the unit of the scale where that is another."""
        if written.unit.symbol == self.unit.symbol:
            return str(written)
        return f"{written} ({amount(self.value(written), self.unit)})"


def scale_in(unit: Unit, owner: Loop | Instrument | None) -> Scale:
    """The scale of a unit for values of one measurement."""
    measurement = known(owner.measurement) if owner else None
    return Scale(unit, measurement is not None and known(measurement.variable) == "temperature difference")


@dataclass(frozen=True, slots=True)
class Reading:
    """A value of the register in the unit in which it is compared."""

    name: str
    """The key under which it stands, in words."""
    value: float
    """In the unit of `scale`."""
    written: Quantity
    scale: Scale
    part: Part
    key: str

    @property
    def told(self) -> str:
        """As written, and as compared where that is another unit."""
        return self.scale.told(self.written)

    @property
    def place(self) -> Place:
        return self.part.origin.place(self.key)


def readings(part: Part, keys: tuple[str, ...], scale: Scale, whose: str) -> Iterator[Reading]:
    """The values that a part gives under the keys, each on the given scale.

    Keys that are not given are left out. After the last value the rule counts as not checked where one of
    them is on hold or has a unit of another kind (which the rule `unit-incompatible` tells).
    """
    lacking = ""
    for key in keys:
        name = key.replace("_", " ")
        written: Quantity | Hold | None = getattr(part, key)
        if isinstance(written, Hold):
            lacking = lacking or f"{whose} {name} {'is on hold' if written.readable else 'could not be read'}"
        elif written is not None and not scale.takes(written.unit):
            lacking = lacking or f"{whose} {name} has a unit of another kind"
        elif written is not None:
            yield Reading(name, scale.value(written), written, scale, part, key)
    if lacking:
        not_checked(lacking)


def reading(written: Quantity, scale: Scale, what: str) -> float:
    """A value on the given scale; not checked where it has a unit of another kind."""
    if not scale.takes(written.unit):
        not_checked(f"{what} has a unit of another kind")
    return scale.value(written)


def range_in_both(written: Range, unit: Unit) -> str:
    """A range as written, and in the unit in which it is compared where that is another."""
    if written.unit.symbol == unit.symbol:
        return str(written)
    return f"{written} ({rounded(written.to(unit.symbol))})"


def rounded(band: Range) -> Range:
    """A calculated range with six significant digits, as it is shown."""
    return Range(float(f"{band.low:.6g}"), float(f"{band.high:.6g}"), band.unit)


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
