"""Axes of figures: what they span, where their numbers stand and how these are written."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from loopdoc.engineering.process import FloatArray

MOST_STEPS = 4
"""Steps of an axis; more numbers would touch one another in a panel of a third of the width."""
_STEPS = (1.0, 2.0, 2.5, 5.0)
_SAME = 1e-9
"""Share of a step within which a number counts as standing on it."""


@dataclass(frozen=True, slots=True)
class Scale:
    """One axis of a panel: from ``low`` at ``start`` to ``high`` at ``end`` [pt]."""

    low: float
    high: float
    start: float
    end: float
    is_log: bool = False

    def at(self, values: FloatArray | float) -> FloatArray:
        """Places of values [pt], of the same shape; NaN or infinite where a logarithmic axis has no such place."""
        shown, low, high = np.asarray(values, dtype=float), self.low, self.high
        if self.is_log:
            with np.errstate(divide="ignore", invalid="ignore"):
                shown, low, high = np.log(shown), math.log(low), math.log(high)
        return self.start + (self.end - self.start) * (shown - low) / (high - low)

    def ticks(self, step: float | None = None) -> list[tuple[float, str]]:
        """Places [pt] and numbers along the axis, each ``step`` where one is given."""
        if self.is_log:
            room_pt = 3.0 if self.start < self.end else 2.0  # numbers are wider than high
            most = max(2, int(abs(self.end - self.start) / (7.0 * room_pt)))
            values = log_ticks(self.low, self.high, most)
            return [(float(self.at(value)), f"{value:g}") for value in values]
        step = step or _step(self.low, self.high)
        values = linear_ticks(self.low, self.high, step)
        return [(float(self.at(value)), name) for value, name in zip(values, _names(values, step), strict=True)]


def view(values: FloatArray, margin: float, *, is_log: bool = False) -> tuple[float, float]:
    """Ends of an axis that shows all values, with ``margin`` of its length free on both sides."""
    kept = values[np.isfinite(values) & (values > 0.0 if is_log else True)]
    if is_log:
        kept = np.log10(kept)
    low, high = (float(kept.min()), float(kept.max())) if len(kept) else (0.0, 1.0)
    if high - low <= _SAME * max(abs(low), abs(high)):  # a level line, in the middle
        room = 0.05 * abs(low) or 0.05
        low, high = low - room, high + room
    room = margin * (high - low)
    low, high = low - room, high + room
    return (10.0**low, 10.0**high) if is_log else (low, high)


def linear_ticks(low: float, high: float, step: float) -> list[float]:
    """Multiples of the step from one end of the axis to the other."""
    return [step * index for index in range(math.ceil(low / step - _SAME), math.floor(high / step + _SAME) + 1)]


def _step(low: float, high: float) -> float:
    """1, 2, 2.5 or 5 times a power of ten: the least that keeps to the most steps, or less if one number were left."""
    least = (high - low) / MOST_STEPS
    power = 10.0 ** math.floor(math.log10(least))
    steps = [factor * tens for tens in (power / 10.0, power, power * 10.0) for factor in _STEPS]
    wide = next(index for index, step in enumerate(steps) if step >= least * (1.0 - _SAME))
    return next(step for step in reversed(steps[: wide + 1]) if len(linear_ticks(low, high, step)) >= 2)


def log_ticks(low: float, high: float, most: int) -> list[float]:
    """Decades, not more than ``most`` or so; where there are fewer than two, 1, 2 and 5 times each."""
    first, last = math.floor(math.log10(low)), math.ceil(math.log10(high))
    stride = (math.floor(math.log10(high)) - math.ceil(math.log10(low))) // most + 1
    inside = [10.0**power for power in range(first, last + 1, stride) if low <= 10.0**power <= high]
    if len(inside) >= 2:
        return inside
    finer = (factor * 10.0**power for power in range(first, last + 1) for factor in (1.0, 2.0, 5.0))
    return [value for value in finer if low <= value <= high]


def _names(values: Sequence[float], step: float) -> list[str]:
    """The numbers of an axis, all with as many decimals as the one that needs most."""
    decimals = next(
        (some for some in range(12) if all(abs(value - round(value, some)) < 1e-3 * step for value in values)), 12
    )
    names = (f"{value:.{decimals}f}" for value in values)
    return [name.replace("-", "−") if float(name) else name.removeprefix("-") for name in names]
