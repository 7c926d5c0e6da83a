"""The tables of a loop sheet: what the register says of a loop, as text ready to print."""

from __future__ import annotations

import math
from collections.abc import Collection, Iterable, Iterator
from dataclasses import dataclass
from typing import Any

from markupsafe import Markup

from loopdoc.documents.expected_signals import STEPS, expected_commands, expected_readings
from loopdoc.documents.loop_rows import action_words, acts_on
from loopdoc.documents.open_points import held_name
from loopdoc.documents.titleblock import RevisionRow
from loopdoc.documents.values import DASH, HOLD, shown
from loopdoc.engineering.direction import Undecided, path_sign
from loopdoc.engineering.dynamics import LoopDynamics
from loopdoc.engineering.pairing import ControlledLoop, Plant, Trip
from loopdoc.register.model import (
    Alarm,
    Controller,
    FinalElement,
    Hold,
    Initiator,
    Interlock,
    Loop,
    Measurement,
    Operating,
    Process,
    Setpoint,
    known,
)
from loopdoc.register.quantity import Quantity, QuantityError, Range, display_number, parse_quantity

Pair = tuple[str, str]
"""A label and its value."""
Rows = tuple[tuple[Pair, ...], ...]
"""Rows of labels and values: one pair over the whole width, or two."""

_HIGH_FIRST = ("high_high", "high", "low", "low_low", "deviation")


@dataclass(frozen=True, slots=True)
class Panel:
    """Labels and values under a heading."""

    title: str
    rows: Rows


@dataclass(frozen=True, slots=True)
class Column:
    """A column of a table."""

    heading: str
    share: float
    """Of the table's width [%]."""
    number: bool = False
    """True where its cells are figures, which stand to the right."""

    @property
    def width(self) -> str:
        return f"{self.share:g}%"


@dataclass(frozen=True, slots=True)
class Table:
    """A table with a row of headings; the first cell of each row heads it."""

    title: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[str, ...], ...]


def cell(value: Any) -> str:
    """A value as text for a table, a hold marked."""
    return Markup('<span class="hold">{}</span>').format(HOLD) if isinstance(value, Hold) else shown(value)


def joined(parts: Iterable[str], separator: str = ", ") -> str:
    """Texts in one line, marks of holds kept; a dash where there are none."""
    found = list(parts)
    return Markup(separator).join(found) if found else DASH


# ---------------------------------------------------------------- measurement


def measurement_panel(loop: Loop) -> Panel:
    """What a loop measures."""
    measurement = known(loop.measurement)
    if measurement is None:
        return Panel("Measurement", ((("Measurement", cell(loop.measurement)),),))
    rows: list[tuple[Pair, ...]] = [
        (("Transmitter", cell(measurement.transmitter)), ("Variable", cell(measurement.variable))),
        (("Element" if measurement.element is not None else "Sensor", _sensor(measurement)),),
        (("Range", _range(measurement)),),
        (("Signal", cell(measurement.signal)), ("Channel", cell(measurement.channel))),
        (("On fault", cell(measurement.on_fault)), ("Filter", cell(measurement.filter))),
        (("Operating", _band(loop.operating)),),
    ]
    return Panel("Measurement", tuple(rows))


def _sensor(measurement: Measurement) -> str:
    found = [cell(part) for part in (measurement.element, measurement.sensor) if part is not None]
    return joined(found)


def _range(measurement: Measurement) -> str:
    extra = [] if measurement.characteristic is None else [cell(measurement.characteristic)]
    return joined([cell(measurement.range), *extra])


def _band(band: Operating | Setpoint | Hold | None) -> str:
    """Low and high end with the normal value."""
    if band is None or isinstance(band, Hold):
        return cell(band)
    parts = [_ends(band.low, band.high)] if band.low is not None or band.high is not None else []
    if band.normal is not None:
        parts.append(Markup("normally {}").format(cell(band.normal)))
    return joined(parts)


def _ends(low: Quantity | Hold | None, high: Quantity | Hold | None) -> str:
    if isinstance(low, Quantity) and isinstance(high, Quantity) and low.unit == high.unit:
        return shown(Range(low.value, high.value, low.unit, low.written, high.written))
    if low is None:
        return Markup("up to {}").format(cell(high))
    if high is None:
        return Markup("from {}").format(cell(low))
    return Markup("{} to {}").format(cell(low), cell(high))


# ---------------------------------------------------------------- controller


def controller_panel(plant: Plant, loop: Loop, controller: Controller) -> Panel:
    """How the controller is configured."""
    gain: Pair = ("Gain", _gain(controller.gain))
    if controller.gain is None and controller.proportional_band is not None:
        gain = ("Prop. band", cell(controller.proportional_band))
    reset: Pair = ("Reset", cell(controller.reset))
    if controller.reset is None and controller.repeats is not None:
        reset = ("Repeats", cell(controller.repeats))
    rows: list[tuple[Pair, ...]] = [
        (("Action", cell(controller.action)), ("Form", cell(controller.form or "standard"))),
        (gain, reset),
        (("Rate", cell(controller.rate)), ("Interval", cell(controller.interval))),
        (("Setpoint", _band(controller.setpoint)),),
        (("Output", _output(controller)),),
        (("Modes", _modes(controller)),),
        (("Bad meas.", _bad_measurement(controller)), ("Not followed", cell(controller.when_not_followed))),
    ]
    extra = [
        (label, cell(value))
        for label, value in (
            ("SP weight", controller.setpoint_weight),
            ("Rate filter", controller.derivative_filter),
        )
        if value is not None
    ]
    if extra:
        rows.insert(3, tuple(extra))
    rows.append((("Sign path", _sign(plant.controlled[loop.tag])),))
    return Panel("Controller", tuple(rows))


def _gain(gain: float | Hold | None) -> str:
    return cell(gain) if gain is None or isinstance(gain, Hold) else f"{shown(gain)}\u00a0%/%"


def _output(controller: Controller) -> str:
    output = known(controller.output)
    if output is None:
        return cell(controller.output)
    parts = [] if output.low is None and output.high is None else [_ends(output.low, output.high)]
    if output.span is not None:
        parts.append(Markup("0 to 100\u00a0% = {}").format(cell(output.span)))
    if output.to is not None:
        parts.append(Markup("to {}").format(cell(output.to)))
    return joined(parts)


def _modes(controller: Controller) -> str:
    modes = known(controller.modes)
    if modes is None:
        return cell(controller.modes)
    parts: list[str] = [] if modes.normal is None else [Markup("normally {}").format(cell(modes.normal))]
    if modes.permitted:
        parts.append(f"permitted: {', '.join(modes.permitted)}")
    return joined(parts, "; ")


def _bad_measurement(controller: Controller) -> str:
    bad = known(controller.on_bad_measurement)
    if bad is None:
        return cell(controller.on_bad_measurement)
    parts = [] if bad.mode is None else [cell(bad.mode)]
    if bad.output is not None:
        parts.append(_forced_output(bad.output))
    return joined(parts)


def _forced_output(output: str | Hold) -> str:
    """`hold`, or a quantity, which the register keeps as it is written."""
    if output == "hold":
        return "hold output"
    try:
        return cell(output) if isinstance(output, Hold) else shown(parse_quantity(output))
    except QuantityError:
        return cell(output)


def _sign(controlled: ControlledLoop) -> str:
    """Why the loop needs its action, one statement for each way of its output."""
    found: list[str] = []
    for route in controlled.routes:
        sign = path_sign(controlled, route)
        if isinstance(sign, Undecided):
            reason = sign.reason.replace("`", "").removeprefix(f"{controlled.tag}: ")
            words = f"not decided: {reason}"
        else:
            steps = ", ".join(f"{step.what} ({'+' if step.sign > 0 else '−'})" for step in sign.steps)
            words = f"{steps}: {'+' if sign.sign > 0 else '−'} in all, needs {sign.action} action"
        if words not in found:
            found.append(words)
    return "; ".join(found) or DASH


# ---------------------------------------------------------------- tuning


def tuning_panel(loop: Loop, dynamics: LoopDynamics) -> Panel:
    """Process model and margins."""
    process = known(loop.process)
    rows: list[tuple[Pair, ...]] = []
    if process is None:
        rows.append((("Process", cell(loop.process)),))
    elif process.branches:
        rows.extend(((tag, _model(branch)),) for tag, branch in process.branches.items())
    else:
        rows.append((("Process", _model(process)),))
    if process is not None:
        rows.append((("Source", cell(process.source)),))
    worst = dynamics.worst
    if worst is None:
        rows.append((("Margins", f"not calculated: {dynamics.reason}"),))
        return Panel("Process and tuning", tuple(rows))
    margins = worst.margins[-1]
    if not margins.stable:
        rows.append((("Margins", "the loop is unstable as written"),))
        return Panel("Process and tuning", tuple(rows))
    gain, phase = _figure(margins.gain_margin), _figure(margins.phase_margin_deg, "°")
    sensitivity, crossover = _figure(margins.max_sensitivity), _figure(margins.crossover_rad_per_s, "\u00a0rad/s")
    rows.append((("Gain margin", gain), ("Phase margin", phase)))
    rows.append((("Ms", sensitivity), ("Crossover", crossover)))
    if margins.sampled:
        rows.append((("Margins", "of the loop as it is sampled"),))
    if worst.speed_ratio is not None and math.isfinite(worst.speed_ratio):
        inner = worst.chain.levels[-2].loop.tag
        rows.append((("Speed ratio", f"{inner} is {display_number(worst.speed_ratio, 2)} times as fast"),))
    return Panel("Process and tuning", tuple(rows))


def _model(process: Process) -> str:
    parts = [] if process.effect is None else [cell(process.effect)]
    if process.gain is not None:
        parts.append(Markup("gain {}").format(cell(process.gain)))
    if process.integrating:
        parts.append("integrating")
    lags = process.lags
    if isinstance(lags, Hold):
        parts.append(Markup("lag {}").format(cell(lags)))
    elif lags:
        parts.append(f"{'lag' if len(lags) == 1 else 'lags'} {' and '.join(shown(lag) for lag in lags)}")
    if process.lead is not None:
        parts.append(Markup("lead {}").format(cell(process.lead)))
    if process.dead_time is not None:
        parts.append(Markup("dead time {}").format(cell(process.dead_time)))
    return joined(parts)


def _figure(value: float, unit: str = "") -> str:
    """A calculated figure to three digits; a dash where there is none, such as a crossover never reached."""
    if math.isnan(value):
        return DASH
    return display_number(value, 3) if math.isinf(value) else f"{display_number(value, 3)}{unit}"


# ---------------------------------------------------------------- final elements


def element_table(plant: Plant, loop: Loop, elements: Iterable[FinalElement]) -> Table | None:
    """Final elements on the loop's drawing; None where there are none."""
    controlled = plant.controlled.get(loop.tag)
    ends = dict.fromkeys(route.end.tag for route in controlled.routes) if controlled else {}
    movers = ", ".join(tag for tag in ends if tag in plant.register.loops)
    rows = tuple(
        (
            element.tag,
            cell(element.service) if element.tag in ends else joined([cell(element.service), f"moved by {movers}"]),
            cell(element.kind),
            cell(element.opens_on),
            cell(element.output_block or "direct"),
            cell(element.fails),
            cell(element.safe),
            cell(element.signal),
            cell(element.channel),
            cell(element.characteristic),
            cell(element.stroke_time),
        )
        for element in elements
    )
    columns = (
        Column("Final element", 9),
        Column("Service", 15),
        Column("Kind", 10),
        Column("Opens on", 10),
        Column("Output block", 8),
        Column("Fails", 7),
        Column("Safe position", 7),
        Column("Signal", 7),
        Column("Channel", 8),
        Column("Characteristic", 12),
        Column("Stroke time", 7),
    )
    return Table("Final elements", columns, rows) if rows else None


# ---------------------------------------------------------------- alarms, trips, interlocks


def alarm_table(plant: Plant, loop: Loop) -> Table | None:
    """Alarms and trips on the loop's measurement, from the highest limit to the lowest."""
    trips = [trip for trip in plant.trips if trip.loop is loop]
    above = [_trip_row(plant, trip) for trip in trips if trip.initiator.direction == "above"]
    rest = [_trip_row(plant, trip) for trip in trips if trip.initiator.direction != "above"]
    alarms = {kind: _alarm_row(loop.alarms[kind]) for kind in _HIGH_FIRST if kind in loop.alarms}
    deviation = [alarms.pop("deviation")] if "deviation" in alarms else []
    rows = (*above, *alarms.values(), *rest, *deviation)
    columns = (
        Column("Alarm or trip", 11),
        Column("Limit", 12),
        Column("Dead band", 9),
        Column("Delay", 7),
        Column("Priority", 7),
        Column("Respond in", 9),
        Column("Operator response", 45),
    )
    return Table("Alarms and trips", columns, rows) if rows else None


def _alarm_row(alarm: Alarm) -> tuple[str, ...]:
    return (
        alarm.kind.replace("_", " ").capitalize(),
        cell(alarm.limit),
        cell(alarm.deadband),
        cell(alarm.delay),
        cell(alarm.priority),
        cell(alarm.time_to_respond),
        cell(alarm.response),
    )


def _trip_row(plant: Plant, trip: Trip) -> tuple[str, ...]:
    initiator = trip.initiator
    return (
        f"Trip {trip.interlock.tag}",
        _limit(initiator),
        DASH,
        cell(initiator.delay),
        DASH,
        DASH,
        _trip_words(plant, trip.interlock),
    )


def _limit(initiator: Initiator) -> str:
    if isinstance(initiator.limit, Hold) or isinstance(initiator.direction, Hold):
        return cell(initiator.limit)
    return " ".join(shown(part) for part in (initiator.direction, initiator.limit) if part is not None) or DASH


def _trip_words(plant: Plant, interlock: Interlock) -> str:
    """What a trip does by itself."""
    held = any(hold.tag == interlock.tag and hold.path == ("actions",) for hold in plant.register.holds)
    if held:
        return Markup("By itself: {}").format(cell(Hold("")))
    actions = "; ".join(f"{tag} {action_words(action)}" for tag, action in interlock.actions.items())
    return f"By itself: {actions}" if actions else DASH


def related_interlocks(plant: Plant, loop: Loop, elements: Iterable[FinalElement]) -> tuple[Interlock, ...]:
    """Interlocks that the loop initiates, or that act on it or on a final element of its drawing."""
    tags = {loop.tag, *(element.tag for element in elements)}
    initiated = {trip.interlock.tag for trip in plant.trips if trip.loop is loop}
    return tuple(
        interlock
        for interlock in plant.register.interlocks.values()
        if interlock.tag in initiated or acts_on(interlock, tags)
    )


def interlock_table(interlocks: Iterable[Interlock], loop: Loop, elements: Iterable[FinalElement]) -> Table | None:
    """What each related interlock is and what it does to this loop."""
    tags = [*(element.tag for element in elements), loop.tag]
    rows = []
    for interlock in interlocks:
        here = "; ".join(f"{action.tag} {action_words(action)}" for action in acts_on(interlock, tags))
        rows.append(
            (
                interlock.tag,
                cell(interlock.service),
                cell(interlock.layer),
                _initiators(interlock),
                here or "initiated by this loop",
                cell(interlock.reset),
            )
        )
    columns = (
        Column("Interlock", 9),
        Column("Service", 19),
        Column("Layer", 7),
        Column("Initiated by", 24),
        Column("Acts here", 18),
        Column("Reset", 23),
    )
    return Table("Interlocks", columns, tuple(rows)) if rows else None


def _initiators(interlock: Interlock) -> str:
    """Initiators with the same limit named together, after the voting."""
    groups: dict[str, list[str]] = {}
    for initiator in interlock.initiators.values():
        groups.setdefault(_limit(initiator), []).append(initiator.tag)
    words = [Markup("{} {}").format(", ".join(tags), limit) for limit, tags in groups.items()]
    voting = [] if interlock.voting is None else [cell(interlock.voting)]
    return joined([*voting, joined(words, "; ")], ": ") if words else joined(voting)


# ---------------------------------------------------------------- expected signals, revisions


def expected_table(plant: Plant, loop: Loop) -> Table | None:
    """What a loop check should find at each step; None where the register does not say enough."""
    found = (*expected_readings(loop), *expected_commands(plant, loop))
    rows = tuple((f"{row.what}, {row.unit}", *row.values) for row in found)
    columns = (Column("Signal or output", 42), *(Column(step, 11.6, number=True) for step in STEPS))
    return Table("Expected at the loop check", columns, rows) if rows else None


def revision_table(revisions: Iterable[RevisionRow]) -> Table | None:
    """Revisions, the latest first; None where the register has none."""
    rows = tuple(
        (
            revision.code,
            revision.date,
            revision.status,
            revision.summary,
            revision.prepared_by,
            revision.checked_by,
            revision.approved_by,
        )
        for revision in revisions
    )
    columns = (
        Column("Revision", 8),
        Column("Date", 10),
        Column("Status", 14),
        Column("Summary", 32),
        Column("Prepared by", 12),
        Column("Checked by", 12),
        Column("Approved by", 12),
    )
    return Table("Revisions", columns, rows) if rows else None


# ---------------------------------------------------------------- holds


def hold_lines(
    plant: Plant, tags: Iterable[str], own: str, *, without: Collection[tuple[str, ...]] = ()
) -> Iterator[str]:
    """The holds of these tags, those with one reason together; ``without`` are beginnings of paths to leave out."""
    wanted = set(tags)
    by_reason: dict[str, list[str]] = {}
    for hold in plant.register.holds:
        if hold.tag in wanted and not any(hold.path[: len(path)] == path for path in without):
            what = held_name(hold.path)
            by_reason.setdefault(hold.reason, []).append(what if hold.tag == own else f"{hold.tag} {what}")
    for reason, values in by_reason.items():
        yield f"{', '.join(values)}: {reason}"
