"""The rule on units: every value of a loop in a unit of the quantity that it is a value of."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import TypeAlias

from loopdoc.engineering.direction import process_on
from loopdoc.engineering.pairing import ControlledLoop, Plant, Route, Trip
from loopdoc.register.model import (
    Disturbance,
    Function,
    Hold,
    Instrument,
    Interlock,
    Loop,
    Measurement,
    Origin,
    Part,
    Process,
    known,
)
from loopdoc.register.quantity import Gain, Quantity, Range
from loopdoc.register.units import UNITS, Unit, UnitError, convert, convert_difference
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, not_checked, rule
from loopdoc.rules.values import amount, measured_range, range_place

_PERCENT = UNITS["%"]
_Visited: TypeAlias = Loop | Instrument | Function | Interlock | Trip

_FLOWS = ("mass flow", "volume flow", "normal volume flow", "standard volume flow", "molar flow")
_KINDS_OF_VARIABLE: dict[str, tuple[str, ...]] = {
    "temperature": ("temperature",),
    "temperature difference": ("temperature",),
    "pressure": ("gauge pressure", "absolute pressure"),
    "differential pressure": ("pressure difference",),
    "flow": (*_FLOWS, "fraction"),
    "level": ("fraction", "length", "volume", "mass", "pressure difference"),
    "speed": ("rotational speed", "frequency", "velocity", "fraction"),
    "position": ("fraction", "length", "angle"),
    "power": ("power", "fraction"),
    "current": ("electric current", "fraction"),
    "weight": ("mass", "force", "fraction"),
    "density": ("density",),
    "conductivity": ("conductivity",),
    "vibration": ("velocity", "length", "acceleration"),
}
"""Kinds of unit in which each variable is measured; an analysis may have any."""


@dataclass(frozen=True, slots=True)
class _Value:
    """A value with the unit that it must agree with."""

    what: str
    written: Quantity | Range | Hold | None
    origin: Origin
    steps: tuple[str, ...]
    wanted: Unit | None
    """None where what it must agree with is not known."""
    against: str
    """Whose unit is wanted, in words."""
    is_difference: bool = False
    range: Range | None = None
    """The measurement range, of which a percentage may have been meant."""
    owner: Loop | Instrument | None = None
    """Whose range has the unit that is wanted."""
    group: str = ""
    """What it is one of several values of, which were written in one unit and are told together."""


@rule(level=Level.ERROR, source="BIPM SI Brochure, 9th edition (2019): only quantities of one kind can be compared")
def unit_incompatible(part: Loop | Instrument | Function | Interlock | Trip, plant: Plant) -> Iterator[Draft]:
    """A value has a unit that cannot be compared with what it belongs to.

    Why:
        A limit in gauge pressure on a range in absolute pressure is off by one atmosphere; a dead band in
        percent on a range in degrees can be read in two ways. Whoever types it into the control system
        decides by guessing.
    Breaks:
        A high alarm at `1.6 bara` on a range in barg. A pressure range in `bar`, which does not say gauge or
        absolute. `deadband: 1 %` on a range in degC. A primary's output span in degC over a secondary in t/h.
        A process gain in `degC per %` for a primary whose secondary measures t/h.
    Holds:
        Operating values, setpoints, alarm and trip limits are of the kind of the measurement range; dead
        bands and deviation limits are differences of that kind; outputs are in percent on a final element
        and of the secondary's kind on a secondary; gains are per unit of what is moved. A disturbance is a
        difference of the measurement's kind, or at the process input of what the gain is per unit of; what it
        moves besides, a difference of that measurement's kind. Units of one kind may be mixed: 12 t/h and
        12000 kg/h.
    What this check cannot see:
        A number that was converted wrongly. Units of time, frequency and percent have fixed places in the
        format, and the rule `schema` tells of them.
    """
    tag = part.interlock.tag if isinstance(part, Trip) else part.tag
    in_another_kind = _measured_in_another_kind(part)
    if in_another_kind:
        yield in_another_kind
        return  # which of the two is wrong decides what all the others must agree with
    lacking = ""
    told: dict[str, Unit] = {}
    for value in _values(part, plant):
        if value.written is None:
            continue
        if isinstance(value.written, Hold):
            lacking = lacking or f"{value.what} {'is on hold' if value.written.readable else 'could not be read'}"
        elif value.wanted is None:
            lacking = lacking or f"{value.against} is not known"
        else:
            fault = _fault(value.written.unit, value.wanted, value.is_difference)
            if fault and told.get(value.group) != value.written.unit:
                yield _draft(tag, value, fault)
            if fault and value.group:
                told[value.group] = value.written.unit
    if isinstance(part, Loop):
        yield from _gains(part, plant, told.get("output"))
        process = known(part.process)
        lacking = lacking or ("the process gain is on hold" if process and isinstance(process.gain, Hold) else "")
    if lacking:
        not_checked(lacking)


def _fault(unit: Unit, wanted: Unit, is_difference: bool) -> str:
    """Why one unit does not serve for another, as ``message; remedy``; empty where it does."""
    if (unit.difference_kind == wanted.difference_kind) if is_difference else (unit.kind == wanted.kind):
        return ""
    try:
        if is_difference:
            convert_difference(1.0, unit, wanted)
        else:
            convert(1.0, unit, wanted)
    except UnitError as error:
        return str(error)
    return ""


def _draft(tag: str, value: _Value, fault: str) -> Draft:
    assert isinstance(value.written, Quantity | Range)
    assert value.wanted is not None
    message, _, remedy = fault.partition("; ")
    return draft(
        tag,
        f"{value.what} is {value.written}, but {value.against} is in {value.wanted}: {message}",
        remedy=_percent_of_range(value) or (remedy if remedy.startswith("write") else f"write it in {value.wanted}"),
        at=value.origin.place(*value.steps),
        related=((range_place(value.owner), f"{value.against}, in {value.wanted}"),) if value.owner else (),
    )


def _percent_of_range(value: _Value) -> str:
    """What a percentage of the measurement range would be, where one was written."""
    written, band = value.written, value.range
    if band is None or not isinstance(written, Quantity) or written.unit.symbol != "%":
        return ""
    part = band.span * written.value / 100
    if value.is_difference:
        return f"write it in {band.unit}: {written} of the span is {amount(part, band.unit)}"
    return f"write it in {band.unit}: {written} of the range is {amount(band.low + part, band.unit)}"


# ---------------------------------------------------------------- what must agree with what


def _measured_in_another_kind(part: _Visited) -> Draft | None:
    """A finding where the range is not in a unit of the variable that is measured."""
    if not isinstance(part, Loop | Instrument):
        return None
    measurement = known(part.measurement)
    band = known(measurement.range) if measurement else None
    variable = known(measurement.variable) if measurement else None
    kinds = _kinds_measured(measurement)
    if measurement is None or band is None or kinds is None or band.unit.kind in kinds:
        return None
    if band.unit.kind == "pressure difference":
        fault = f"`{band.unit}` does not say gauge or absolute"
        remedy = f"write `{band.unit}g` or `{band.unit}a`, or `variable: differential pressure`"
    else:
        fault = f"`{band.unit}` is a unit of {band.unit.kind}"
        remedy = f"write a unit of {' or '.join(kinds)}, or another variable"
    return draft(
        part.tag,
        f"the measurement of {variable} has the range {band}: {fault}",
        remedy=remedy,
        at=measurement.origin.place("range"),
        related=((measurement.origin.place("variable"), f"the variable, {variable}"),),
    )


def _values(part: _Visited, plant: Plant) -> Iterator[_Value]:
    """Every value of a part that has to agree with another."""
    match part:
        case Loop():
            yield from _of_loop(part, plant)
        case Function():
            for element, opening in part.outputs.items():
                what, steps = f"the output for {element}", ("outputs", element)
                yield _Value(what, opening, part.origin, steps, _PERCENT, "a controller's output")
        case Interlock():
            yield from _of_actions(part, plant)
        case Trip():
            yield from _of_trip(part)


def _of_loop(loop: Loop, plant: Plant) -> Iterator[_Value]:
    controller = known(loop.controller)
    setpoint = known(controller.setpoint) if controller else None
    for name, group in (("operating", known(loop.operating)), ("setpoint", setpoint)):
        for key in ("low", "normal", "high") if group else ():
            assert group is not None
            yield from _against_range(f"{name} {key}", group, key, loop, group=name)
    for alarm in loop.alarms.values():
        name = f"the {alarm.kind.replace('_', '-')} alarm"
        yield from _against_range(f"the limit of {name}", alarm, "limit", loop, alarm.kind == "deviation")
        yield from _against_range(f"the dead band of {name}", alarm, "deadband", loop, True)
    measurement = known(loop.measurement)
    tolerance = known(measurement.tolerance) if measurement else None
    if measurement and tolerance and tolerance.unit != _PERCENT:
        yield from _against_range("the tolerance", measurement, "tolerance", loop, True)
    for disturbance in loop.disturbances.values():
        yield from _of_disturbance(loop, disturbance)
        yield from _of_moves(disturbance, plant)
    if loop.tag in plant.controlled:
        yield from _of_output(plant.controlled[loop.tag])


def _of_disturbance(loop: Loop, disturbance: Disturbance) -> Iterator[_Value]:
    """Its size must agree with the measurement, or with what the process gain is per unit of."""
    what = f"the disturbance `{disturbance.name}`"
    if known(disturbance.at) != "process input":
        yield from _against_range(what, disturbance, "size", loop, is_difference=True)
        return
    process = known(loop.process)
    gains = [known(one.gain) for one in (process, *process.branches.values())] if process else []
    wanted = next((gain.denominator for gain in gains if gain), None)
    against = "the process input" if wanted else "the unit of the process input"
    yield _Value(what, disturbance.size, disturbance.origin, ("size",), wanted, against, is_difference=True)


def _of_moves(disturbance: Disturbance, plant: Plant) -> Iterator[_Value]:
    """What moves with it must agree with what measures it."""
    for move in disturbance.moves.values():
        moved = plant.measures(move.tag)
        if moved is not None:  # `reference-unknown` tells of the others
            what = f"{move.tag} in the disturbance `{disturbance.name}`"
            for value in _against_range(what, move, "size", moved, is_difference=True):
                yield replace(value, against=f"{value.against} of {move.tag}")


def _against_range(
    what: str, part: Part, key: str, owner: Loop | Instrument, is_difference: bool = False, group: str = ""
) -> Iterator[_Value]:
    """A value that stands under a key, where it is given, and must agree with a measurement range."""
    written = getattr(part, key)
    if written is None:
        return
    unit = _unit(owner)
    measurement = known(owner.measurement)
    band = known(measurement.range) if measurement else None
    against = "the measurement range" if unit else "the unit of the measurement"
    yield _Value(what, written, part.origin, (key,), unit, against, is_difference, band, owner, group)


def _unit(part: Loop | Instrument) -> Unit | None:
    """The unit of a measurement; None where its range is not known, or is not one of what is measured."""
    measurement = known(part.measurement)
    band = known(measurement.range) if measurement else None
    kinds = _kinds_measured(measurement)
    return band.unit if band and (kinds is None or band.unit.kind in kinds) else None


def _kinds_measured(measurement: Measurement | None) -> tuple[str, ...] | None:
    """The kinds of unit in which a measured variable can be given; None where it says nothing of that."""
    return _KINDS_OF_VARIABLE.get(known(measurement.variable) or "") if measurement else None


def _of_output(controlled: ControlledLoop) -> Iterator[_Value]:
    output = known(controlled.controller.output)
    if output is None or not controlled.routes:
        return
    route = controlled.routes[0]
    if isinstance(route.end, Loop) and route.end.controller is None:
        return  # an indicator takes no setpoint, of which `pairing-without-controller` tells
    unit, against = _commanded(route)
    is_difference = any(known(function.kind) == "sum" for function in route.via)
    owner = route.end if isinstance(route.end, Loop) else None
    for key in ("span", "low", "high"):
        what = "the output span" if key == "span" else f"the {key} output limit"
        value = _Value(what, getattr(output, key), output.origin, (key,), unit, against, is_difference, owner=owner)
        yield replace(value, group="output")


def _commanded(route: Route) -> tuple[Unit | None, str]:
    """The unit of what a controller's output sets, and whose it is in words."""
    kinds = [known(function.kind) for function in route.via]
    if not isinstance(route.end, Loop):
        return _PERCENT, f"the output on {route.end.tag}"
    if "ratio" in kinds:
        return UNITS["fraction"], f"the ratio set in {route.via[kinds.index('ratio')].tag}"
    unit = None if "characteriser" in kinds else _unit(route.end)
    return unit, f"the measurement of {route.end.tag}" if unit else f"the unit in which {route.end.tag} is asked"


def _of_actions(interlock: Interlock, plant: Plant) -> Iterator[_Value]:
    for action in interlock.actions.values():
        controlled = plant.controlled.get(action.tag)
        output = action.output
        if controlled is None or (isinstance(output, Quantity) and output.unit == _PERCENT):
            continue  # every output may be given in percent
        unit, against = _commanded(controlled.routes[0]) if controlled.routes else (None, "the destination")
        yield _Value(f"the output forced on {action.tag}", output, action.origin, ("output",), unit, against)


def _of_trip(trip: Trip) -> Iterator[_Value]:
    owner, initiator = trip.instrument or trip.loop, trip.initiator
    if owner is not None:
        what = f"the trip limit of {initiator.tag}"
        for value in _against_range(what, initiator, "limit", owner):
            yield replace(value, steps=("trips",))


# ---------------------------------------------------------------- process gains


def _gains(loop: Loop, plant: Plant, mistaken: Unit | None) -> Iterator[Draft]:
    """Findings on process gains; ``mistaken`` is the unit of an output of which it was told already."""
    controlled = plant.controlled.get(loop.tag)
    for route in controlled.routes if controlled else ():
        assert controlled is not None
        process = process_on(controlled, route)
        gain = known(process.gain) if process else None
        if process is not None and gain is not None:
            yield from _gain(controlled, route, process, gain, mistaken)


def _gain(
    controlled: ControlledLoop, route: Route, process: Process, gain: Gain, mistaken: Unit | None
) -> Iterator[Draft]:
    loop = controlled.loop
    place = process.origin.place("gain")
    unit = measured_range(loop).unit
    integrates = gain.integrates(unit.symbol)
    if process.integrating and not integrates:
        yield draft(
            loop.tag,
            f"the process gain is {gain}, but the process integrates: a rate of change of the measurement is wanted",
            remedy=f"write it in {unit}/min (or per s, per h), or leave out `integrating`",
            at=place,
            related=((range_place(loop), f"the measurement range, in {unit}"),),
        )
    elif integrates and not process.integrating:
        yield draft(
            loop.tag,
            f"the process gain is {gain}, a rate of change, but the process is not said to integrate",
            remedy=f"write `integrating: true`, or the gain in {unit}",
            at=place,
        )
    elif not integrates and (gain.per_time is not None or _fault(gain.numerator, unit, is_difference=True)):
        yield draft(
            loop.tag,
            f"the process gain is {gain}, but the measurement range is in {unit}",
            remedy=f"write it in {unit} per unit of what is moved",
            at=place,
            related=((range_place(loop), f"the measurement range, in {unit}"),),
        )
    wanted, against = _moved(route)
    if mistaken is not None and not _fault(gain.denominator, mistaken, is_difference=True):
        return
    if wanted is not None and (fault := _fault(gain.denominator, wanted, is_difference=True)):
        yield draft(
            loop.tag,
            f"the process gain is {gain}, but {against} is in {wanted}: {fault.partition('; ')[0]}",
            remedy=f"write it per {wanted}",
            at=place,
            related=((route.end.origin.key(), f"{route.end.tag}, which {loop.tag} moves"),),
        )


def _moved(route: Route) -> tuple[Unit | None, str]:
    if not isinstance(route.end, Loop):
        return _PERCENT, f"the opening of {route.end.tag}"
    if route.end.controller is None:
        return None, ""
    return _unit(route.end), f"the measurement of {route.end.tag}"
