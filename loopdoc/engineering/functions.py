"""What characterisers and lead-lags make of a signal, and the steady signals that functions bring from measurements.

A function lies in a loop's path where a controller's output goes through it; one that brings a measurement to a sum,
a ratio or a selector feeds it forward. Source: ANSI/ISA-5.1 (function symbols f(x) and f(t), from memory).
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise

from loopdoc.engineering.direction import Undecided
from loopdoc.engineering.lead_lag import LeadLag
from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import Function, Hold, known
from loopdoc.register.quantity import Range
from loopdoc.register.units import Unit, UnitError

SELECTORS = ("high select", "low select")
PASSING = (*SELECTORS, "lead-lag")
"""Functions that leave a steady signal within the span it has; a lead-lag has a steady gain of one."""


@dataclass(frozen=True, slots=True)
class Curve:
    """A characteriser: straight lines between points, held at its ends."""

    inputs: tuple[float, ...]
    """Strictly rising."""
    outputs: tuple[float, ...]

    def at(self, value: float) -> float:
        """The output at an input."""
        if value <= self.inputs[0]:
            return self.outputs[0]
        if value >= self.inputs[-1]:
            return self.outputs[-1]
        left = bisect_right(self.inputs, value) - 1
        return self.outputs[left] + self._slopes[left] * (value - self.inputs[left])

    def band(self, low: float, high: float) -> tuple[float, float]:
        """The lowest and the highest output over a band of inputs."""
        ends = [self.at(low), self.at(high)]
        inside = [y for x, y in zip(self.inputs, self.outputs, strict=True) if low < x < high]
        return min(ends + inside), max(ends + inside)

    def slope(self, value: float) -> float:
        """Change of the output per change of the input; at a corner that of the steeper side."""
        beside = [
            slope
            for (left, right), slope in zip(pairwise(self.inputs), self._slopes, strict=True)
            if left <= value <= right
        ]
        return max(beside, key=abs, default=0.0)

    @property
    def steepest(self) -> float:
        """The largest slope, with its sign."""
        return max(self._slopes, key=abs)

    def input_for(self, output: float) -> float | None:
        """The input that gives an output; None where none or more than one stretch does."""
        found: set[float] = set()
        for (left, right), (low, high) in zip(pairwise(self.inputs), pairwise(self.outputs), strict=True):
            if min(low, high) <= output <= max(low, high):
                if low == high:
                    return None
                found.add(left + (output - low) * (right - left) / (high - low))
        return found.pop() if len(found) == 1 else None

    @property
    def _slopes(self) -> tuple[float, ...]:
        return tuple(
            (high - low) / (right - left)
            for (left, right), (low, high) in zip(pairwise(self.inputs), pairwise(self.outputs), strict=True)
        )


def curve_of(function: Function, *, given: Unit | None = None, gives: Unit | None = None) -> Curve | Undecided:
    """The curve of a characteriser, in the given units of input and output; each as written where none is given."""
    points = function.curve
    if isinstance(points, Hold):
        return Undecided(f"the curve of {function.tag} is on hold" if points.readable else _unread(function))
    if not points:
        return Undecided(f"the curve of {function.tag} is not given")
    pairs = [(known(point.at), known(point.gives)) for point in points]
    read = [(at, out) for at, out in pairs if at is not None and out is not None]
    if len(read) < len(pairs):
        return Undecided(_unread(function))
    first_in, first_out = given or read[0][0].unit, gives or read[0][1].unit
    try:
        inputs = tuple(at.to(first_in.symbol) for at, _ in read)
        outputs = tuple(out.to(first_out.symbol) for _, out in read)
    except UnitError:
        return Undecided(f"the curve of {function.tag} is not in the units of what enters it and of what it commands")
    if len(inputs) < 2 or any(right <= left for left, right in pairwise(inputs)):
        return Undecided(f"the curve of {function.tag} does not rise from point to point in `at`")
    return Curve(inputs, outputs)


def _unread(function: Function) -> str:
    return f"a point of the curve of {function.tag} is on hold or could not be read"


def lead_lag_of(function: Function) -> LeadLag | Undecided:
    """The times of a lead-lag; a lead-lag without lead is a lag alone."""
    times = []
    for name, written in (("lead", function.lead), ("lag", function.lag)):
        if isinstance(written, Hold):
            return Undecided(f"the {name} of {function.tag} is on hold or could not be read")
        try:
            times.append(written.to("s") if written is not None else 0.0)
        except UnitError:
            return Undecided(f"the {name} of {function.tag} is no time")
    lead_s, lag_s = times
    if function.lag is None:
        return Undecided(f"the lag of {function.tag} is not given")
    try:
        return LeadLag(lead_s, lag_s)
    except ValueError as error:
        return Undecided(f"{function.tag} is no lead-lag: {error}")


def feeds_forward(plant: Plant, function: Function) -> bool:
    """Whether a function brings measurements onward and no controller's output goes through it."""
    return bool(_sources(plant, function)) and not any(
        function in route.via for loop in plant.controlled.values() for route in loop.routes
    )


def fed_by(plant: Plant, function: Function, commander: str) -> tuple[str, ...]:
    """What enters a function besides one commander: measurements by tag, and functions that feed forward."""
    return tuple(tag for tag in _sources(plant, function) if tag != commander)


def _sources(plant: Plant, function: Function) -> tuple[str, ...]:
    commanding = tuple(tag for tag in plant.commanders.get(function.tag, ()) if tag in plant.register.functions)
    return (*function.inputs, *commanding)


def steady_band(plant: Plant, tag: str, band_of: Callable[[str], Range | Undecided]) -> Range | Undecided:
    """The band of what a measurement, or a function that feeds one forward, brings in at a steady state.

    ``band_of`` gives the band of a measurement by its tag: that of operation, or its normal value alone.
    """
    function = plant.register.functions.get(tag)
    if function is None:
        return band_of(tag)
    sources = _sources(plant, function)
    kind = known(function.kind)
    if len(sources) != 1 or kind not in ("lead-lag", "characteriser"):
        return Undecided(f"what {tag} makes of {' and '.join(sources) or 'nothing'} does not follow from the register")
    entering = steady_band(plant, sources[0], band_of)
    if isinstance(entering, Undecided) or kind == "lead-lag":
        return entering
    curve = curve_of(function, given=entering.unit)
    if isinstance(curve, Undecided):
        return curve
    gives = None if isinstance(function.curve, Hold) else known(function.curve[0].gives)
    assert gives is not None
    return Range(*curve.band(entering.low, entering.high), gives.unit)
