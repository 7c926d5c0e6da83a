"""What a primary may ask of its secondary, carried through the functions between them.

A ratio or a sum adds facts of other measurements: they enter with the band in which the plant runs, not with
the whole range of their transmitters, since a register is judged for the plant in operation.
"""

from __future__ import annotations

from dataclasses import dataclass

from loopdoc.engineering.direction import Undecided
from loopdoc.engineering.functions import PASSING, curve_of, fed_by, steady_band
from loopdoc.engineering.pairing import CascadeLink, Plant
from loopdoc.register.model import Function, Loop, known
from loopdoc.register.quantity import Range
from loopdoc.register.units import Unit, UnitError, convert_difference, same_kind


@dataclass(frozen=True, slots=True)
class Demand:
    """The setpoints that a primary may ask of a secondary, in the secondary's unit."""

    asked: Range
    steps: tuple[str, ...]
    """What the functions on the way made of the primary's output, in words."""


def demand(link: CascadeLink, output: Range, plant: Plant) -> Demand | Undecided:
    """What a band of the primary's output asks of the secondary, or why that does not follow."""
    measurement = known(link.secondary.loop.measurement)
    own = known(measurement.range) if measurement else None
    if own is None:
        return Undecided("the secondary's measurement range is not known")
    unit = own.unit
    try:
        return _asked(link, output, unit, plant)
    except UnitError:
        return Undecided("the primary's output and the secondary's measurement have units of different kinds")


def _asked(link: CascadeLink, output: Range, unit: Unit, plant: Plant) -> Demand | Undecided:
    steps: list[str] = []
    # The band as numbers: a ratio setting until it has met its input, setpoints of the secondary otherwise.
    setting = any(known(function.kind) == "ratio" for function in link.via)
    sums = any(known(function.kind) == "sum" for function in link.via)
    shaped = sum(known(function.kind) == "characteriser" for function in link.via)
    if setting + sums + shaped > 1:
        return Undecided("a sum, a ratio or a characteriser stand one behind the other")
    if setting:
        band = output.to("fraction")
        low, high = band.low, band.high
    elif sums:
        low = convert_difference(output.low, output.unit, unit)
        high = convert_difference(output.high, output.unit, unit)
    elif shaped:
        low, high = output.low, output.high
    else:
        band = output.to(unit.symbol)
        low, high = band.low, band.high
    commander = link.primary.tag
    for function in link.via:
        kind = known(function.kind)
        if kind == "sum":
            added = _sum(function, commander, (low, high), unit, plant)
            if isinstance(added, Undecided):
                return added
            low, high, step = added
            steps.append(step)
        elif kind == "characteriser":
            curve = curve_of(function, given=output.unit, gives=unit)
            if isinstance(curve, Undecided):
                return curve
            low, high = curve.band(low, high)
            steps.append(f"{function.tag} by its curve")
        elif kind == "ratio":
            factor = _bands(function, commander, unit, plant)
            if isinstance(factor, Undecided):
                return factor
            if len(factor) != 1:
                return Undecided(f"{function.tag} does not have one input to multiply")
            corners = [setting_end * end for setting_end in (low, high) for end in (factor[0].low, factor[0].high)]
            low, high = min(corners), max(corners)
            wild = fed_by(plant, function, commander)[0]
            steps.append(f"{function.tag} multiplies by {wild} ({factor[0]} in operation)")
        elif kind not in PASSING:
            return Undecided(f"the register does not say what {function.tag} makes of a signal")
        commander = function.tag
    return Demand(Range(low, high, unit), tuple(steps))


def _sum(
    function: Function, commander: str, band: tuple[float, float], unit: Unit, plant: Plant
) -> tuple[float, float, str] | Undecided:
    feeding = fed_by(plant, function, commander)
    others = [tag for tag in plant.commanders.get(function.tag, ()) if tag != commander and tag not in feeding]
    if others:
        return Undecided(f"{function.tag} adds the output of {others[0]} as well")
    bands = _bands(function, commander, unit, plant)
    if isinstance(bands, Undecided):
        return bands
    if not bands:
        return Undecided(f"nothing is added in {function.tag}")
    weight = function.weights.get(commander, 1.0)
    low, high = sorted((weight * band[0], weight * band[1]))
    words = []
    for tag, added in zip(feeding, bands, strict=True):
        weight = function.weights.get(tag, 1.0)
        ends = sorted((weight * added.low, weight * added.high))
        low, high = low + ends[0], high + ends[1]
        times = "" if weight == 1 else f"{weight:g} times "
        words.append(f"{times}{tag} ({added} in operation)")
    return low, high, f"{function.tag} adds {' and '.join(words)}"


def _bands(function: Function, commander: str, unit: Unit, plant: Plant) -> tuple[Range, ...] | Undecided:
    """The operating band of each measurement that enters a function, as it arrives there, in the given unit."""

    def of_measurement(tag: str) -> Range | Undecided:
        loop = plant.register.loops.get(tag) or plant.loop_of_transmitter.get(tag)
        band = operating_band(loop) if loop else None
        return band if band is not None else Undecided(f"the operating band of {tag} is not given")

    if function.inputs_held:
        return Undecided(f"the inputs of {function.tag} are on hold")
    found = []
    for tag in fed_by(plant, function, commander):
        band = steady_band(plant, tag, of_measurement)
        if isinstance(band, Undecided):
            return band
        if not same_kind(band.unit, unit):
            return Undecided(f"{tag} and the secondary have units of different kinds")
        found.append(band.to(unit.symbol))
    return tuple(found)


def operating_band(loop: Loop) -> Range | None:
    """The band in which a loop's measurement runs; its normal value alone where no band is given."""
    operating = known(loop.operating)
    if operating is None:
        return None
    low, normal, high = known(operating.low), known(operating.normal), known(operating.high)
    if low and high and same_kind(low.unit, high.unit):
        return Range(low.value, high.to(low.unit.symbol), low.unit, low.written, high.written)
    return Range(normal.value, normal.value, normal.unit, normal.written, normal.written) if normal else None
