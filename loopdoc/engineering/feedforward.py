"""What functions bring from measurements to the way of a controller's output, besides that output.

A sum adds its inputs to the output of the controller, and a ratio multiplies by them. Each input is followed back
through lead-lags and characterisers to the measurement that it comes from. Where no upset moves that, it stays as it
is. Source: ANSI/ISA-5.1 (function symbols, from memory).
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from loopdoc.engineering.direction import Undecided, element_sign
from loopdoc.engineering.functions import SELECTORS, Curve, curve_of, fed_by, lead_lag_of, steady_band
from loopdoc.engineering.lead_lag import LeadLag
from loopdoc.engineering.pairing import ControlledLoop, Plant, Route, normal_value
from loopdoc.engineering.structure import Feedforward
from loopdoc.register.model import FinalElement, Function, Hold, known, seconds
from loopdoc.register.quantity import Quantity, Range
from loopdoc.register.units import UNITS, Unit, UnitError


@dataclass(frozen=True, slots=True)
class FunctionInput:
    """What a function on the way of a controller's output takes in besides that output."""

    tag: str
    """As the function takes it in: a measurement, or a function that brings one."""
    function: str
    """Tag of the function that takes it in."""
    names: tuple[str, ...]
    """By which the register may name the measurement that it comes from."""
    range: Range | None
    """Of that measurement."""
    path: Feedforward | Undecided
    """What becomes of it, or why that does not follow."""


def inputs_on(plant: Plant, loop: ControlledLoop, route: Route) -> tuple[FunctionInput, ...]:
    """What functions on a route take in besides the output of the loop, in the order in which it joins that."""
    return tuple(_inputs(plant, loop, route))


def normal_input(plant: Plant, tag: str) -> Range | Undecided:
    """What a measurement, or a function that brings one, normally brings into a function; both ends are the same."""

    def of_measurement(name: str) -> Range | Undecided:
        loop = plant.register.loops.get(name) or plant.loop_of_transmitter.get(name)
        operating = known(loop.operating) if loop else None
        normal = operating.normal if operating else None
        if isinstance(normal, Hold):
            return Undecided(f"the normal value of {name} {'is on hold' if normal.readable else 'could not be read'}")
        if normal is None:
            return Undecided(f"the normal value of {name} is not given")
        return Range(normal.value, normal.value, normal.unit)

    return steady_band(plant, tag, of_measurement)


def _inputs(plant: Plant, loop: ControlledLoop, route: Route) -> Iterator[FunctionInput]:
    commander, lead_lags = loop.tag, 0
    for place, function in enumerate(route.via):
        for tag in fed_by(plant, function, commander):
            yield _input(plant, route, place, tag, lead_lags)
        lead_lags += known(function.kind) == "lead-lag"
        commander = function.tag


def _input(plant: Plant, route: Route, place: int, tag: str, joins: int) -> FunctionInput:
    function = route.via[place]
    way = _way_to(plant, tag)
    if isinstance(way, Undecided):
        return FunctionInput(tag, function.tag, (), None, way)
    root, through = way
    part = plant.measures(root)
    measurement = known(part.measurement) if part else None
    own = known(measurement.range) if measurement else None
    transmitter = known(measurement.transmitter) if measurement else None
    on_it = plant.loops_on.get(transmitter, ()) if transmitter else ()
    names = dict.fromkeys((root, *((transmitter,) if transmitter else ()), *(loop.tag for loop in on_it)))
    path: Feedforward | Undecided
    if own is None or own.span <= 0.0:
        path = Undecided(f"the range of {root} is not known")
    else:
        filter_s = seconds(measurement.filter) if measurement else 0.0
        path = _path(plant, route, place, tag, through, own, transmitter or root, joins, filter_s)
    return FunctionInput(tag, function.tag, tuple(names), own, path)


def _way_to(plant: Plant, tag: str) -> tuple[str, tuple[Function, ...]] | Undecided:
    """The measurement that something comes from, and the functions on its way from there."""
    through: list[Function] = []
    while (function := plant.register.functions.get(tag)) is not None:
        sources = fed_by(plant, function, "")
        if len(sources) != 1 or known(function.kind) not in ("lead-lag", "characteriser") or function in through:
            said = " and ".join(sources) or "nothing"
            return Undecided(f"what {function.tag} makes of {said} does not follow from the register")
        through.append(function)
        tag = sources[0]
    return tag, tuple(reversed(through))


def _path(
    plant: Plant,
    route: Route,
    place: int,
    tag: str,
    through: Sequence[Function],
    own: Range,
    measurement: str,
    joins: int,
    filter_s: float,
) -> Feedforward | Undecided:
    """What becomes of a measurement of a range from its transmitter to what the route commands."""
    function = route.via[place]
    kind = known(function.kind)
    if kind in SELECTORS:
        return Undecided(f"{function.tag} selects")
    unit = _unit_commanded(route)
    behind = _behind(plant, route, place)
    lead_lags = [LeadLag(0.0, filter_s)] if filter_s > 0.0 else []
    curves: list[Curve] = []
    given = own.unit
    for one in through:
        if known(one.kind) == "lead-lag":
            found = lead_lag_of(one)
            if isinstance(found, Undecided):
                return found
            lead_lags.append(found)
            continue
        shaped = _from_normal(plant, one, own, given, first=not curves)
        if isinstance(shaped, Undecided):
            return shaped
        curve, given = shaped
        curves.append(curve)
    if isinstance(behind, Undecided):
        return behind
    per_step = 1.0 if curves else own.span / 100.0  # in the unit of what enters, per percent or per unit
    if kind == "sum":
        try:
            entering = Quantity(per_step, given).difference_in(unit.symbol)
        except UnitError:
            return Undecided(f"{tag} is not in the unit of what {function.tag} adds it to")
        gain = function.weights.get(tag, 1.0) * entering * behind
        return Feedforward(measurement, gain, tuple(lead_lags), tuple(curves), joins)
    if kind != "ratio":
        return Undecided(f"what {function.tag} makes of {tag} does not follow from the register")
    normal, made = normal_input(plant, tag), _made_by_ratio(plant, route, place, unit)
    if isinstance(normal, Undecided):
        return normal
    if isinstance(made, Undecided):
        return made
    if normal.low == 0.0:
        return Undecided(f"{tag} is normally nothing")
    gain = per_step / normal.to(given.symbol).low
    return Feedforward(measurement, gain, tuple(lead_lags), tuple(curves), joins, made * behind)


def _from_normal(
    plant: Plant, function: Function, own: Range, given: Unit, *, first: bool
) -> tuple[Curve, Unit] | Undecided:
    """A characteriser from its normal input, and the unit of what it gives; the first takes percent of a range."""
    curve = curve_of(function, given=given)
    if isinstance(curve, Undecided):
        return curve
    gives = None if isinstance(function.curve, Hold) else known(function.curve[0].gives)
    assert gives is not None
    normal = normal_input(plant, fed_by(plant, function, "")[0])
    if isinstance(normal, Undecided):
        return normal
    at = normal.to(given.symbol).low
    per_input = 100.0 / own.span if first else 1.0
    return Curve(
        tuple(per_input * (one - at) for one in curve.inputs), tuple(one - curve.at(at) for one in curve.outputs)
    ), gives.unit


def _unit_commanded(route: Route) -> Unit:
    own = _range_commanded(route)
    return own.unit if own is not None else UNITS["%"]


def _range_commanded(route: Route) -> Range | None:
    """The range of the secondary at the end of a route; None for a final element."""
    if isinstance(route.end, FinalElement):
        return None
    measurement = known(route.end.measurement)
    return known(measurement.range) if measurement else None


def _behind(plant: Plant, route: Route, place: int) -> float | Undecided:
    """Percent of what is commanded per unit of what leaves a function on the route."""
    factor, commander = 1.0, route.via[place].tag
    unit = _unit_commanded(route)
    for function in route.via[place + 1 :]:
        kind = known(function.kind)
        if kind == "sum":
            factor *= function.weights.get(commander, 1.0)
        elif kind == "ratio":
            inputs = _normals(plant, function, commander, unit)
            if isinstance(inputs, Undecided):
                return inputs
            factor *= math.prod(inputs)
        elif kind == "split range" and route.branch is not None:
            factor *= 100.0 / route.branch.to("%").span
        elif kind == "characteriser":
            return Undecided(f"{function.tag}, a characteriser, stands behind it")
        commander = function.tag
    if isinstance(route.end, FinalElement):
        element = element_sign(route.end)
        return element if isinstance(element, Undecided) else factor * element.sign
    own = _range_commanded(route)
    if own is None or own.span <= 0.0:
        return Undecided(f"the range of {route.end.tag} is not known")
    return factor * 100.0 / own.span


def _made_by_ratio(plant: Plant, route: Route, place: int, unit: Unit) -> float | Undecided:
    """What a ratio on the route normally makes of its input, in the unit of what is commanded.

    The normal ratio times the normal input where the register gives that ratio, else what normally comes of it.
    """
    function = route.via[place]
    commander = route.via[place - 1].tag if place else ""
    ratio = known(function.normal)
    if ratio is not None:
        inputs = _normals(plant, function, commander, unit)
        return inputs if isinstance(inputs, Undecided) else ratio * math.prod(inputs)
    normal = None if isinstance(route.end, FinalElement) else normal_value(route.end)
    if normal is None:
        return Undecided(f"neither the normal ratio of {function.tag} nor the normal value of {route.end.tag} is given")
    made = normal.to(unit.symbol)
    for index in range(len(route.via) - 1, place, -1):
        later, below = route.via[index], route.via[index - 1].tag
        if known(later.kind) not in ("sum", "ratio"):
            continue
        inputs = _normals(plant, later, below, unit)
        if isinstance(inputs, Undecided):
            return inputs
        if known(later.kind) == "ratio":
            made /= math.prod(inputs)
        else:
            weights = [later.weights.get(tag, 1.0) for tag in fed_by(plant, later, below)]
            added = math.fsum(weight * value for weight, value in zip(weights, inputs, strict=True))
            made = (made - added) / later.weights.get(below, 1.0)
    return made


def _normals(plant: Plant, function: Function, commander: str, unit: Unit) -> list[float] | Undecided:
    """What normally enters a function besides its commander, in a unit."""
    found = []
    for tag in fed_by(plant, function, commander):
        normal = normal_input(plant, tag)
        if isinstance(normal, Undecided):
            return normal
        try:
            found.append(normal.to(unit.symbol).low)
        except UnitError:
            return Undecided(f"{tag} is not in the unit of what {function.tag} commands")
    return found
