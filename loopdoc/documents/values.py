"""How a value of the register is printed: with its unit, HOLD where it is held, a dash where it is not given."""

from __future__ import annotations

from typing import Any

from loopdoc.register.model import Hold
from loopdoc.register.quantity import (
    Gain,
    Quantity,
    Range,
    display_gain,
    display_number,
    display_quantity,
    display_range,
)

DASH = "–"
HOLD = "HOLD"


def shown(value: Any) -> str:
    """A value as text for a document."""
    match value:
        case None | "" | ():
            return DASH
        case Hold():
            return HOLD
        case Quantity():
            return display_quantity(value)
        case Range():
            return display_range(value)
        case Gain():
            return display_gain(value)
        case bool():
            return "yes" if value else "no"
        case int() | float():
            return display_number(float(value))
        case tuple():
            return ", ".join(shown(item) for item in value)
        case _:
            return str(value)
