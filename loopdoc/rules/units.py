"""The rule on units: every value of a loop in a unit of the quantity that it is a value of."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from loopdoc.engineering.direction import process_on
from loopdoc.engineering.pairing import ControlledLoop, Plant, Route, Trip
from loopdoc.register.model import Alarm, Function, Hold, Instrument, Loop, Measurement, Part, Process, known
from loopdoc.register.place import Place
from loopdoc.register.quantity import Gain, Quantity, Range
from loopdoc.register.units import UNITS, Unit, UnitError, convert, convert_difference
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, not_checked, rule
from loopdoc.rules.values import amount, measured_range, range_place

_PERCENT = UNITS["%"]

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
    place: Place
    wanted: Unit | None
    """None where what it must agree with is not known."""
    against: str
    """Whose unit is wanted, in words."""
    is_difference: bool = False
    range: Range | None = None
    """The measurement range, of which a percentage may have been meant."""
    elsewhere: Place | None = None
    """Where the unit that is wanted stands."""


@rule(level=Level.ERROR, source="BIPM SI Brochure, 9th edition (2019): only quantities of one kind can be compared")
def unit_incompatible(part: Loop | Instrument | Function | Trip, plant: Plant) -> Iterator[Draft]:
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
        and of the secondary's kind on a secondary; gains are per unit of what is moved. Units of one kind
        may be mixed: 12 t/h and 12000 kg/h.
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
    for value in _values(part, plant):
        if value.written is None:
            continue
        if isinstance(value.written, Hold):
            lacking = lacking or f"{value.what} {'is on hold' if value.written.readable else 'could not be read'}"
        elif value.wanted is None:
            lacking = lacking or f"{value.against} is not known"
        else:
            fault = _fault(value.written.unit, value.wanted, value.is_difference)
            if fault:
                yield _draft(tag, value, fault)
    if isinstance(part, Loop):
        yield from _gains(part, plant)
        process = known(part.process)
        lacking = lacking or ("the process gain is on hold" if process and isinstance(process.gain, Hold) else "")
    if lacking:
        not_checked(lacking)


def _fault(unit: Unit, wanted: Unit, is_difference: bool) -> str:
    """Why one unit does not serve for another, as ``message; remedy``; empty where it does."""
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
        at=value.place,
        related=((value.elsewhere, f"{value.against}, in {value.wanted}"),) if value.elsewhere else (),
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


def _measured_in_another_kind(part: Loop | Instrument | Function | Trip) -> Draft | None:
    """A finding where the range is not in a unit of the variable that is measured."""
    if isinstance(part, Function | Trip):
        return None
    measurement = known(part.measurement)
    band = known(measurement.range) if measurement else None
    variable = known(measurement.variable) if measurement else None
    kinds = _KINDS_OF_VARIABLE.get(variable or "")
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


def _values(part: Loop | Instrument | Function | Trip, plant: Plant) -> Iterator[_Value]:
    """Every value of a part that has to agree with another."""
    match part:
        case Loop():
            yield from _of_loop(part, plant)
        case Function():
            for element, opening in part.outputs.items():
                place = part.origin.place("outputs", element)
                yield _Value(f"the output for {element}", opening, place, _PERCENT, "a controller's output")
        case Trip():
            yield from _of_trip(part)


def _of_loop(loop: Loop, plant: Plant) -> Iterator[_Value]:
    measurement, controller = known(loop.measurement), known(loop.controller)
    operating = known(loop.operating)
    groups: list[tuple[str, Part | None]] = [("operating", operating)]
    groups.append(("setpoint", known(controller.setpoint) if controller else None))
    for name, group in groups:
        for key in ("low", "normal", "high") if group else ():
            assert group is not None
            place = group.origin.place(key)
            yield _against_range(f"{name} {key}", getattr(group, key), place, loop, measurement)
    for alarm in loop.alarms.values():
        yield from _of_alarm(alarm, loop, measurement)
    if loop.tag in plant.controlled:
        yield from _of_output(plant.controlled[loop.tag])


def _against_range(
    what: str,
    written: Quantity | Hold | None,
    place: Place,
    part: Loop | Instrument,
    measurement: Measurement | None,
    is_difference: bool = False,
) -> _Value:
    band = known(measurement.range) if measurement else None
    unit = _unit(part)
    against = "the measurement range" if unit else "the unit of the measurement"
    return _Value(what, written, place, unit, against, is_difference, band, range_place(part))


def _unit(part: Loop | Instrument) -> Unit | None:
    """The unit of a measurement; None where its range is not known, or is not one of what is measured."""
    measurement = known(part.measurement)
    band = known(measurement.range) if measurement else None
    return band.unit if band and _measured_in_another_kind(part) is None else None


def _of_alarm(alarm: Alarm, loop: Loop, measurement: Measurement | None) -> Iterator[_Value]:
    name = alarm.kind.replace("_", "-")
    limit, deadband = alarm.origin.place("limit"), alarm.origin.place("deadband")
    is_difference = alarm.kind == "deviation"
    yield _against_range(f"the limit of the {name} alarm", alarm.limit, limit, loop, measurement, is_difference)
    yield _against_range(f"the dead band of the {name} alarm", alarm.deadband, deadband, loop, measurement, True)


def _of_output(controlled: ControlledLoop) -> Iterator[_Value]:
    output = known(controlled.controller.output)
    if output is None or not controlled.routes:
        return
    unit, against, is_difference, elsewhere = _commanded(controlled.routes[0])
    for key in ("span", "low", "high"):
        what = "the output span" if key == "span" else f"the {key} output limit"
        place = output.origin.place(key)
        yield _Value(what, getattr(output, key), place, unit, against, is_difference, None, elsewhere)


def _commanded(route: Route) -> tuple[Unit | None, str, bool, Place | None]:
    """The unit of what a controller's output sets: the unit, whose it is, whether differences count, its place."""
    kinds = [known(function.kind) for function in route.via]
    if not isinstance(route.end, Loop):
        return _PERCENT, f"the output on {route.end.tag}", False, None
    if "ratio" in kinds:
        return UNITS["fraction"], f"the ratio set in {route.via[kinds.index('ratio')].tag}", False, None
    unit = None if "characteriser" in kinds else _unit(route.end)
    if unit is None:
        return None, f"the unit in which {route.end.tag} is asked", False, None
    return unit, f"the measurement of {route.end.tag}", "sum" in kinds, range_place(route.end)


def _of_trip(trip: Trip) -> Iterator[_Value]:
    owner = trip.instrument or trip.loop
    if owner is not None:
        what = f"the trip limit of {trip.initiator.tag}"
        yield _against_range(what, trip.initiator.limit, trip.initiator.origin.place("trips"), owner, trip.measurement)


# ---------------------------------------------------------------- process gains


def _gains(loop: Loop, plant: Plant) -> Iterator[Draft]:
    controlled = plant.controlled.get(loop.tag)
    for route in controlled.routes if controlled else ():
        assert controlled is not None
        process = process_on(controlled, route)
        gain = known(process.gain) if process else None
        if process is not None and gain is not None:
            yield from _gain(controlled, route, process, gain)


def _gain(controlled: ControlledLoop, route: Route, process: Process, gain: Gain) -> Iterator[Draft]:
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
    return _unit(route.end), f"the measurement of {route.end.tag}"
