"""Values with units as the register writes them: quantities, ranges and process gains, parsed and printed."""

import math
import re
from dataclasses import dataclass, field
from decimal import ROUND_HALF_UP, Context, Decimal
from functools import lru_cache
from typing import TYPE_CHECKING

from loopdoc.register.units import UNITS, Unit, convert, convert_difference, rate_parts, unit

if TYPE_CHECKING:
    from loopdoc.register.model import Origin


class QuantityError(ValueError):
    """A text that does not read as a value with its unit: what is wrong, and what to write instead."""

    def __init__(self, fault: str, remedy: str) -> None:
        super().__init__(fault, remedy)
        self.fault = fault
        self.remedy = remedy

    def __str__(self) -> str:
        return f"{self.fault}; {self.remedy}"


@dataclass(frozen=True, slots=True)
class Quantity:
    """A value with its unit, such as `84.5 degC`."""

    value: float
    """The number, in `unit`."""
    unit: Unit
    """The unit as written."""
    written: str = field(default="", compare=False)
    """The digits as the engineer wrote them; empty for a calculated value."""
    origin: "Origin | None" = field(default=None, compare=False, repr=False)
    """Where it is written, where a document traces its values; None elsewhere and for a calculated value."""

    def to(self, symbol: str) -> float:
        """The reading (a point on the scale) in another unit of the same kind."""
        return convert(self.value, self.unit, symbol)

    def difference_in(self, symbol: str) -> float:
        """The value as a difference of readings (a dead band, a step) in another unit."""
        return convert_difference(self.value, self.unit, symbol)

    def __str__(self) -> str:
        return f"{_register_number(self.value, self.written)} {self.unit.symbol}"


@dataclass(frozen=True, slots=True)
class Range:
    """Two ends with one unit, such as `60 to 120 degC`; the low end may be written above the high one."""

    low: float
    """The end written first, in `unit`."""
    high: float
    """The end written last, in `unit`."""
    unit: Unit
    """The unit as written."""
    written_low: str = field(default="", compare=False)
    """The digits of the low end as written; empty when calculated."""
    written_high: str = field(default="", compare=False)
    """The digits of the high end as written; empty when calculated."""
    origin: "Origin | None" = field(default=None, compare=False, repr=False)
    """Where it is written, as for a quantity."""

    @property
    def span(self) -> float:
        """The high end less the low end, in the range's own unit; negative when the range is reversed."""
        return self.high - self.low

    def to(self, symbol: str) -> "Range":
        """The same range in another unit of the same kind."""
        if symbol == self.unit.symbol:
            return self
        target = unit(symbol)
        return Range(convert(self.low, self.unit, target), convert(self.high, self.unit, target), target)

    def contains(self, value: float) -> bool:
        """Whether a value in the range's own unit lies between the ends or on one of them."""
        return self.low <= value <= self.high or self.high <= value <= self.low

    def __str__(self) -> str:
        low = _register_number(self.low, self.written_low)
        high = _register_number(self.high, self.written_high)
        return f"{low} to {high} {self.unit.symbol}"


@dataclass(frozen=True, slots=True)
class Gain:
    """A process gain, such as `5.5 degC per t/h`, or `-2.0 %/min per %` for an integrating process."""

    value: float
    """The number, in `numerator` (per `per_time`) per `denominator`."""
    numerator: Unit
    """The unit of the change of the measurement."""
    per_time: Unit | None
    """The unit of time of an integrating gain; None where the numerator is a unit in itself, as `t/h` is."""
    denominator: Unit
    """The unit of the change of what is moved."""
    written: str = field(default="", compare=False)
    """The digits as the engineer wrote them; empty for a calculated value."""
    origin: "Origin | None" = field(default=None, compare=False, repr=False)
    """Where it is written, as for a quantity."""

    def integrates(self, measurement: str) -> bool:
        """Whether this is a rate of change of a measurement in the given unit: `t/h per %` of one in `kg`."""
        return self._rate_of(unit(measurement)) is not None

    def in_units(self, numerator: str, denominator: str) -> float:
        """The gain in the given units of difference; an integrating gain in those units per second."""
        measured = unit(numerator)
        changed, per_time = self._rate_of(measured) or (self.numerator, None)
        value = convert_difference(self.value, changed, measured)
        if per_time is not None:
            value /= per_time.factor
        # One wanted unit of what moves is so many written ones: 2 per t/h are 0.002 per kg/h.
        return value * convert_difference(1.0, unit(denominator), self.denominator)

    def _rate_of(self, measured: Unit) -> tuple[Unit, Unit] | None:
        if self.per_time is not None:
            return self.numerator, self.per_time
        parts = rate_parts(self.numerator.symbol)
        if parts is not None and parts[0].difference_kind == measured.difference_kind:
            return parts
        return None

    def __str__(self) -> str:
        per_time = "" if self.per_time is None else f"/{self.per_time.symbol}"
        number = _register_number(self.value, self.written)
        return f"{number} {self.numerator.symbol}{per_time} per {self.denominator.symbol}"


# The register's grammar. A number has one form: no leading zeros, digits on both sides of a point.
_NUMBER = r"[+-]?(?:0|[1-9][0-9]*)(?:\.[0-9]+)?(?:[eE][+-]?[0-9]+)?"
_QUANTITY = re.compile(rf"({_NUMBER}) +([^ ]+)")
_RANGE = re.compile(rf"({_NUMBER}) +to +({_NUMBER}) +([^ ]+)")
_NUMBER_RANGE = re.compile(rf"({_NUMBER}) +to +({_NUMBER})")
_GAIN = re.compile(rf"({_NUMBER}) +([^ ]+) +per +([^ ]+)")
LONGEST_TEXT = 80
"""Characters; no value with its units needs more, and a longer text is not searched for a remedy."""
_REMEMBERED = 1 << 17  # distinct texts; ten thousand loops hold about 98,000


@lru_cache(maxsize=_REMEMBERED)
def parse_quantity(text: str) -> Quantity:
    """Read a value with its unit, such as `84.5 degC`."""
    found = _QUANTITY.fullmatch(text) if len(text) <= LONGEST_TEXT else None
    if found is None or found[2] not in UNITS:
        raise _refusal(text, "quantity")
    number, symbol = found.groups()
    return Quantity(_finite(number), UNITS[symbol], number)


@lru_cache(maxsize=_REMEMBERED)
def parse_range(text: str) -> Range:
    """Read a range with its unit, such as `60 to 120 degC`."""
    found = _RANGE.fullmatch(text) if len(text) <= LONGEST_TEXT else None
    if found is None or found[3] not in UNITS:
        raise _refusal(text, "range")
    low, high, symbol = found.groups()
    return Range(_finite(low), _finite(high), UNITS[symbol], low, high)


@lru_cache(maxsize=_REMEMBERED)
def parse_number_range(text: str) -> tuple[float, float]:
    """Read a range of plain numbers, such as the `0.2 to 0.8` of a ratio."""
    found = _NUMBER_RANGE.fullmatch(text) if len(text) <= LONGEST_TEXT else None
    if found is None:
        raise _refusal(text, "number range")
    low, high = found.groups()
    return _finite(low), _finite(high)


@lru_cache(maxsize=_REMEMBERED)
def parse_gain(text: str) -> Gain:
    """Read a process gain, such as `5.5 degC per t/h` or `-2.0 %/min per %`."""
    found = _GAIN.fullmatch(text) if len(text) <= LONGEST_TEXT else None
    if found is None:
        raise _refusal(text, "gain")
    number, changed, moved = found.groups()
    # A numerator that is a unit in itself (`t/h`) stays whole: the measurement tells whether it integrates.
    numerator, per_time = (UNITS[changed], None) if changed in UNITS else rate_parts(changed) or (None, None)
    if numerator is None or moved not in UNITS:
        raise _refusal(text, "gain")
    return Gain(_finite(number), numerator, per_time, UNITS[moved], number)


def _refusal(text: str, wanted: str) -> QuantityError:
    # Loaded for a faulty text only: a register without faults starts without it.
    from loopdoc.register import quantity_faults

    explanations = {
        "quantity": quantity_faults.quantity_fault,
        "range": quantity_faults.range_fault,
        "number range": quantity_faults.number_range_fault,
        "gain": quantity_faults.gain_fault,
    }
    return QuantityError(*explanations[wanted](text))


def _finite(number: str) -> float:
    value = float(number)
    if math.isinf(value):
        raise QuantityError(f"`{number}` is too large to be a value of the process", "check its exponent")
    return value


def _register_number(value: float, written: str) -> str:
    if written and float(written) == value:
        return written
    shortest = repr(float(value)).removesuffix(".0")
    if "e" in shortest and 1e-9 <= abs(value) < 1e18:
        return format(Decimal(shortest), "f")
    return "0" if shortest == "-0" else shortest


_NO_BREAK_SPACE = "\u00a0"
_MINUS = "\u2212"
_SUPERSCRIPTS = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def display_number(value: float, significant: int = 6) -> str:
    """Print a calculated number for a document, rounded, without binary noise and without exponents."""
    if math.isnan(value):
        raise ValueError("a result that is not a number cannot be printed")
    if math.isinf(value):
        return "∞" if value > 0 else f"{_MINUS}∞"
    exact = Decimal(repr(float(value)))
    magnitude = exact.adjusted() if exact else 0
    # Digits before the point are kept even beyond the significant ones: 12346, not 12300.
    kept = max(significant, magnitude + 1 if magnitude < 12 else 0)
    rounded = Context(prec=kept, rounding=ROUND_HALF_UP).create_decimal(exact)
    return _printed(rounded.normalize())


def display_quantity(quantity: Quantity) -> str:
    """Print a quantity for a document, with the digits as written and a no-break space: `84.5 °C`."""
    return _with_unit(_display_written(quantity.value, quantity.written), quantity.unit)


def display_range(shown: Range) -> str:
    """Print a range for a document, with the digits as written: `60 to 120 °C`."""
    low = _display_written(shown.low, shown.written_low)
    return f"{low} to {_with_unit(_display_written(shown.high, shown.written_high), shown.unit)}"


def display_gain(gain: Gain) -> str:
    """Print a process gain for a document, with the digits as written: `5.5 °C per t/h`."""
    per_time = "" if gain.per_time is None else f"/{gain.per_time.display}"
    changed = _with_unit(_display_written(gain.value, gain.written), gain.numerator)
    return f"{changed}{per_time} per {gain.denominator.display or gain.denominator.symbol}"


def _display_written(value: float, written: str) -> str:
    if written and float(written) == value:
        return _printed(Decimal(written))
    return display_number(value)


def _printed(exact: Decimal) -> str:
    if exact and not -7 < exact.adjusted() < 12:
        digits, _, power = f"{exact:e}".partition("e")
        raised = str(int(power)).translate(_SUPERSCRIPTS)
        return f"{digits}{_NO_BREAK_SPACE}×{_NO_BREAK_SPACE}10{raised}".replace("-", _MINUS)
    plain = f"{exact:f}"
    return plain.lstrip("-") if not exact else plain.replace("-", _MINUS)


def _with_unit(number: str, printed: Unit) -> str:
    # The degree of arc stands against its number. Source: BIPM SI Brochure, 9th edition (2019), 5.4.3.
    space = "" if printed.symbol in ("deg", "fraction") else _NO_BREAK_SPACE
    return f"{number}{space}{printed.display}"
