"""How a calculated number is printed: to three digits, in the unit that an operator would say it in."""

from __future__ import annotations

import math

from loopdoc.documents.values import DASH
from loopdoc.register import units
from loopdoc.register.quantity import Range, display_number

TIME_UNITS = ((7200.0, 3600.0, "h"), (600.0, 60.0, "min"), (0.0, 1.0, "s"))
"""From this duration on [s], divide by this and write that."""


def number(value: float | None) -> str:
    """A calculated number to three digits; a dash where there is none."""
    return DASH if value is None or math.isnan(value) else display_number(value, 3)


def with_unit(value: float, unit: str) -> str:
    """A number with its unit, which no line breaks."""
    return DASH if math.isnan(value) else f"{number(value)}\u00a0{unit}"


def duration(seconds: float) -> str:
    """A time in the unit an operator would say it in."""
    if math.isnan(seconds):
        return DASH
    if math.isinf(seconds):
        return "not within the time shown"
    _, divisor, unit = next(unit for unit in TIME_UNITS if seconds >= unit[0])
    return with_unit(seconds / divisor, unit)


def difference_unit(own: Range) -> str:
    """The unit in which a change of a measurement is printed: kelvin for degrees Celsius, bar for bar gauge."""
    return units.difference_unit(own.unit).display


def change(percent: float, own: Range) -> str:
    """A change of a measurement, given in percent of its span, in its unit."""
    return with_unit(percent * own.span / 100.0, difference_unit(own))
