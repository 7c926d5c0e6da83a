"""The tables of a loop sheet: what the register says of a loop, as text ready to print."""

from __future__ import annotations

import math
from collections.abc import Collection, Iterable, Iterator
from dataclasses import dataclass
from typing import Any

from markupsafe import Markup

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.loop_sheet.expected_signals import STEPS, expected_commands, expected_readings
from loopdoc.documents.loop_sheet.loop_rows import action_words, acts_on
from loopdoc.documents.titleblock import RevisionRow
from loopdoc.documents.values import DASH, HOLD
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
from loopdoc.register.quantity import Quantity, QuantityError, Range, parse_quantity

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


def cell(value: Any, language: Language = ENGLISH) -> str:
    """A value as text for a table, a hold marked."""
    return Markup('<span class="hold">{}</span>').format(HOLD) if isinstance(value, Hold) else language.shown(value)


def term(kind: str, written: str | Hold | None, language: Language) -> str:
    """A word of one of the register's closed lists as text for a table, a hold marked."""
    return language.term(kind, written) if isinstance(written, str) else cell(written, language)


def joined(parts: Iterable[str], separator: str = ", ") -> str:
    """Texts in one line, marks of holds kept; a dash where there are none."""
    found = list(parts)
    return Markup(separator).join(found) if found else DASH


# ---------------------------------------------------------------- measurement


def measurement_panel(loop: Loop, language: Language) -> Panel:
    """What a loop measures."""
    measurement, label = known(loop.measurement), language.label
    title = label("Measurement")
    if measurement is None:
        return Panel(title, (((title, cell(loop.measurement, language)),),))
    rows: list[tuple[Pair, ...]] = [
        (
            (label("Transmitter"), cell(measurement.transmitter, language)),
            (label("Variable"), term("variable", measurement.variable, language)),
        ),
        ((label("Element" if measurement.element is not None else "Sensor"), _sensor(measurement, language)),),
        ((label("Range"), _range(measurement, language)),),
        (
            (label("Signal"), term("signal", measurement.signal, language)),
            (label("Channel"), cell(measurement.channel, language)),
        ),
        (
            (label("On fault"), term("on fault", measurement.on_fault, language)),
            (label("Filter"), cell(measurement.filter, language)),
        ),
        ((label("Operating"), _band(loop.operating, language)),),
    ]
    return Panel(title, tuple(rows))


def _sensor(measurement: Measurement, language: Language) -> str:
    return joined(cell(part, language) for part in (measurement.element, measurement.sensor) if part is not None)


def _range(measurement: Measurement, language: Language) -> str:
    root = measurement.characteristic
    extra = [] if root is None else [term("characteristic", root, language)]
    return joined([cell(measurement.range, language), *extra])


def _band(band: Operating | Setpoint | Hold | None, language: Language) -> str:
    """Low and high end with the normal value."""
    if band is None or isinstance(band, Hold):
        return cell(band, language)
    parts = [_ends(band.low, band.high, language)] if band.low is not None or band.high is not None else []
    if band.normal is not None:
        parts.append(Markup(language.normally("{}")).format(cell(band.normal, language)))
    return joined(parts)


def _ends(low: Quantity | Hold | None, high: Quantity | Hold | None, language: Language) -> str:
    if isinstance(low, Quantity) and isinstance(high, Quantity) and low.unit == high.unit:
        return language.shown(Range(low.value, high.value, low.unit, low.written, high.written))
    if low is None:
        return Markup(language.up_to("{}")).format(cell(high, language))
    if high is None:
        return Markup(language.at_least("{}")).format(cell(low, language))
    return Markup(language.between("{}", "{}")).format(cell(low, language), cell(high, language))


# ---------------------------------------------------------------- controller


def controller_panel(plant: Plant, loop: Loop, controller: Controller, language: Language) -> Panel:
    """How the controller is configured."""
    label = language.label
    gain: Pair = (label("Gain"), _gain(controller.gain, language))
    if controller.gain is None and controller.proportional_band is not None:
        gain = (label("Prop. band"), cell(controller.proportional_band, language))
    reset: Pair = (label("Reset"), cell(controller.reset, language))
    if controller.reset is None and controller.repeats is not None:
        reset = (label("Repeats"), cell(controller.repeats, language))
    rows: list[tuple[Pair, ...]] = [
        (
            (label("Action"), term("action", controller.action, language)),
            (label("Form"), term("form", controller.form or "standard", language)),
        ),
        (gain, reset),
        ((label("Rate"), cell(controller.rate, language)), (label("Interval"), cell(controller.interval, language))),
        ((label("Setpoint"), _band(controller.setpoint, language)),),
        ((label("Output"), _output(controller, language)),),
        ((label("Modes"), _modes(controller, language)),),
        (
            (label("Bad meas."), _bad_measurement(controller, language)),
            (label("Not followed"), term("not followed", controller.when_not_followed, language)),
        ),
    ]
    extra = [
        (label(name), cell(value, language))
        for name, value in (
            ("SP weight", controller.setpoint_weight),
            ("Rate filter", controller.derivative_filter),
        )
        if value is not None
    ]
    if extra:
        rows.insert(3, tuple(extra))
    rows.append(((label("Sign path"), _sign(plant.controlled[loop.tag], language)),))
    return Panel(label("Controller"), tuple(rows))


def _gain(gain: float | Hold | None, language: Language) -> str:
    return cell(gain, language) if gain is None or isinstance(gain, Hold) else f"{language.shown(gain)}\u00a0%/%"


def _output(controller: Controller, language: Language) -> str:
    output = known(controller.output)
    if output is None:
        return cell(controller.output, language)
    parts = [] if output.low is None and output.high is None else [_ends(output.low, output.high, language)]
    if output.span is not None:
        parts.append(Markup(language.percent_is("{}")).format(cell(output.span, language)))
    if output.to is not None:
        parts.append(Markup(language.output_to("{}")).format(cell(output.to, language)))
    return joined(parts)


def _modes(controller: Controller, language: Language) -> str:
    modes = known(controller.modes)
    if modes is None:
        return cell(controller.modes, language)
    parts: list[str] = []
    if modes.normal is not None:
        parts.append(Markup(language.normally("{}")).format(term("mode", modes.normal, language)))
    if modes.permitted:
        parts.append(language.permitted([language.term("mode", mode) for mode in modes.permitted]))
    return joined(parts, "; ")


def _bad_measurement(controller: Controller, language: Language) -> str:
    bad = known(controller.on_bad_measurement)
    if bad is None:
        return cell(controller.on_bad_measurement, language)
    parts = [] if bad.mode is None else [term("mode", bad.mode, language)]
    if bad.output is not None:
        parts.append(_forced_output(bad.output, language))
    return joined(parts)


def _forced_output(output: str | Hold, language: Language) -> str:
    """`hold`, or a quantity, which the register keeps as it is written."""
    if output == "hold":
        return language.hold_output()
    try:
        return cell(output, language) if isinstance(output, Hold) else language.shown(parse_quantity(output))
    except QuantityError:
        return cell(output, language)


def _sign(controlled: ControlledLoop, language: Language) -> str:
    """Why the loop needs its action, one statement for each way of its output."""
    found: list[str] = []
    for route in controlled.routes:
        sign = path_sign(controlled, route)
        if isinstance(sign, Undecided):
            reason = sign.reason.replace("`", "").removeprefix(f"{controlled.tag}: ")
            words = language.sign_undecided(language.reason(reason))
        else:
            steps = ", ".join(f"{language.sign_step(step.what)} ({'+' if step.sign > 0 else '−'})"
                              for step in sign.steps)  # fmt: skip
            words = language.sign_path(steps, "+" if sign.sign > 0 else "−", sign.action)
        if words not in found:
            found.append(words)
    return "; ".join(found) or DASH


# ---------------------------------------------------------------- tuning


def tuning_panel(loop: Loop, dynamics: LoopDynamics, language: Language) -> Panel:
    """Process model and margins."""
    process, label = known(loop.process), language.label
    title = label("Process and tuning")
    rows: list[tuple[Pair, ...]] = []
    if process is None:
        rows.append(((label("Process"), cell(loop.process, language)),))
    elif process.branches:
        rows.extend(((tag, _model(branch, language)),) for tag, branch in process.branches.items())
    else:
        rows.append(((label("Process"), _model(process, language)),))
    if process is not None:
        rows.append(((label("Source"), cell(process.source, language)),))
    worst = dynamics.worst
    if worst is None:
        rows.append(((label("Margins"), language.margins_not_calculated(language.reason(dynamics.reason))),))
        return Panel(title, tuple(rows))
    margins = worst.margins[-1]
    if not margins.stable:
        rows.append(((label("Margins"), language.unstable()),))
        return Panel(title, tuple(rows))
    gain, phase = _figure(margins.gain_margin, language), _figure(margins.phase_margin_deg, language, "°")
    crossover = _figure(margins.crossover_rad_per_s, language, "\u00a0rad/s")
    rows.append(((label("Gain margin"), gain), (label("Phase margin"), phase)))
    rows.append(((label("Ms"), _figure(margins.max_sensitivity, language)), (label("Crossover"), crossover)))
    if margins.sampled:
        rows.append(((label("Margins"), language.as_sampled()),))
    if worst.speed_ratio is not None and math.isfinite(worst.speed_ratio):
        inner = worst.chain.levels[-2].loop.tag
        faster = language.times_as_fast(inner, language.number(worst.speed_ratio, 2))
        rows.append(((label("Speed ratio"), faster),))
    return Panel(title, tuple(rows))


def _model(process: Process, language: Language) -> str:
    parts = [] if process.effect is None else [term("effect", process.effect, language)]
    if process.gain is not None:
        parts.append(Markup(language.model_gain("{}")).format(cell(process.gain, language)))
    if process.integrating:
        parts.append(language.integrating())
    lags = process.lags
    if isinstance(lags, Hold):
        parts.append(Markup(language.model_lags(["{}"])).format(cell(lags, language)))
    elif lags:
        parts.append(language.model_lags([language.shown(lag) for lag in lags]))
    if process.lead is not None:
        parts.append(Markup(language.model_lead("{}")).format(cell(process.lead, language)))
    if process.dead_time is not None:
        parts.append(Markup(language.model_dead_time("{}")).format(cell(process.dead_time, language)))
    return joined(parts)


def _figure(value: float, language: Language, unit: str = "") -> str:
    """A calculated figure to three digits; a dash where there is none, such as a crossover never reached."""
    if math.isnan(value):
        return DASH
    return language.number(value, 3) if math.isinf(value) else f"{language.number(value, 3)}{unit}"


# ---------------------------------------------------------------- final elements


def element_table(
    plant: Plant, loop: Loop, elements: Iterable[FinalElement], language: Language
) -> Table | None:
    """Final elements on the loop's drawing; None where there are none."""
    controlled = plant.controlled.get(loop.tag)
    ends = dict.fromkeys(route.end.tag for route in controlled.routes) if controlled else {}
    movers = ", ".join(tag for tag in ends if tag in plant.register.loops)
    rows = tuple(
        (
            element.tag,
            cell(element.service, language)
            if element.tag in ends
            else joined([cell(element.service, language), language.moved_by(movers)]),
            term("element", element.kind, language),
            term("opens on", element.opens_on, language),
            term("output block", element.output_block or "direct", language),
            term("position", element.fails, language),
            term("position", element.safe, language),
            term("signal", element.signal, language),
            cell(element.channel, language),
            term("characteristic", element.characteristic, language),
            cell(element.stroke_time, language),
        )
        for element in elements
    )
    columns = _columns(
        language, ("Final element", 9), ("Service", 15), ("Kind", 10), ("Opens on", 10), ("Output block", 8),
        ("Fails", 7), ("Safe position", 7), ("Signal", 7), ("Channel", 8), ("Characteristic", 12), ("Stroke time", 7),
    )  # fmt: skip
    return Table(language.label("Final elements"), columns, rows) if rows else None


def _columns(language: Language, *found: tuple[str, float]) -> tuple[Column, ...]:
    return tuple(Column(language.label(heading), share) for heading, share in found)


# ---------------------------------------------------------------- alarms, trips, interlocks


def alarm_table(plant: Plant, loop: Loop, language: Language) -> Table | None:
    """Alarms and trips on the loop's measurement, from the highest limit to the lowest."""
    trips = [trip for trip in plant.trips if trip.loop is loop]
    above = [_trip_row(plant, trip, language) for trip in trips if trip.initiator.direction == "above"]
    rest = [_trip_row(plant, trip, language) for trip in trips if trip.initiator.direction != "above"]
    alarms = {kind: _alarm_row(loop.alarms[kind], language) for kind in _HIGH_FIRST if kind in loop.alarms}
    deviation = [alarms.pop("deviation")] if "deviation" in alarms else []
    rows = (*above, *alarms.values(), *rest, *deviation)
    columns = _columns(
        language, ("Alarm or trip", 11), ("Limit", 12), ("Dead band", 9), ("Delay", 7), ("Priority", 7),
        ("Respond in", 9), ("Operator response", 45),
    )  # fmt: skip
    return Table(language.label("Alarms and trips"), columns, rows) if rows else None


def _alarm_row(alarm: Alarm, language: Language) -> tuple[str, ...]:
    return (
        language.alarm_name(alarm.kind),
        cell(alarm.limit, language),
        cell(alarm.deadband, language),
        cell(alarm.delay, language),
        term("priority", alarm.priority, language),
        cell(alarm.time_to_respond, language),
        cell(alarm.response, language),
    )


def _trip_row(plant: Plant, trip: Trip, language: Language) -> tuple[str, ...]:
    initiator = trip.initiator
    return (
        language.trip_name(trip.interlock.tag),
        _limit(initiator, language),
        DASH,
        cell(initiator.delay, language),
        DASH,
        DASH,
        _trip_words(plant, trip.interlock, language),
    )


def _limit(initiator: Initiator, language: Language) -> str:
    if isinstance(initiator.limit, Hold) or isinstance(initiator.direction, Hold):
        return cell(initiator.limit, language)
    limit = "" if initiator.limit is None else language.shown(initiator.limit)
    if initiator.direction is None:
        return limit or DASH
    return language.side(initiator.direction, limit).rstrip()


def _trip_words(plant: Plant, interlock: Interlock, language: Language) -> str:
    """What a trip does by itself."""
    held = any(hold.tag == interlock.tag and hold.path == ("actions",) for hold in plant.register.holds)
    if held:
        return Markup(language.by_itself("{}")).format(cell(Hold("")))
    actions = "; ".join(f"{tag} {action_words(action, language)}" for tag, action in interlock.actions.items())
    return language.by_itself(actions) if actions else DASH


def related_interlocks(plant: Plant, loop: Loop, elements: Iterable[FinalElement]) -> tuple[Interlock, ...]:
    """Interlocks that the loop initiates, or that act on it or on a final element of its drawing."""
    tags = {loop.tag, *(element.tag for element in elements)}
    initiated = {trip.interlock.tag for trip in plant.trips if trip.loop is loop}
    return tuple(
        interlock
        for interlock in plant.register.interlocks.values()
        if interlock.tag in initiated or acts_on(interlock, tags)
    )


def interlock_table(
    interlocks: Iterable[Interlock], loop: Loop, elements: Iterable[FinalElement], language: Language
) -> Table | None:
    """What each related interlock is and what it does to this loop."""
    tags = [*(element.tag for element in elements), loop.tag]
    rows = []
    for interlock in interlocks:
        here = "; ".join(f"{action.tag} {action_words(action, language)}" for action in acts_on(interlock, tags))
        rows.append(
            (
                interlock.tag,
                cell(interlock.service, language),
                term("layer", interlock.layer, language),
                _initiators(interlock, language),
                here or language.initiated_here(),
                cell(interlock.reset, language),
            )
        )
    columns = _columns(
        language, ("Interlock", 9), ("Service", 19), ("Layer", 7), ("Initiated by", 24), ("Acts here", 18),
        ("Reset|of an interlock", 23),
    )  # fmt: skip
    return Table(language.label("Interlocks"), columns, tuple(rows)) if rows else None


def _initiators(interlock: Interlock, language: Language) -> str:
    """Initiators with the same limit named together, after the voting."""
    groups: dict[str, list[str]] = {}
    for initiator in interlock.initiators.values():
        groups.setdefault(_limit(initiator, language), []).append(initiator.tag)
    words = [Markup("{} {}").format(", ".join(tags), limit) for limit, tags in groups.items()]
    voting = [] if interlock.voting is None else [cell(interlock.voting, language)]
    return joined([*voting, joined(words, "; ")], ": ") if words else joined(voting)


# ---------------------------------------------------------------- expected signals, revisions


def expected_table(plant: Plant, loop: Loop, language: Language) -> Table | None:
    """What a loop check should find at each step; None where the register does not say enough."""
    found = (*expected_readings(loop, language), *expected_commands(plant, loop, language))
    rows = tuple((f"{row.what}, {row.unit}", *row.values) for row in found)
    label = language.label
    columns = (Column(label("Signal or output"), 42), *(Column(step, 11.6, number=True) for step in STEPS))
    return Table(label("Expected at the loop check"), columns, rows) if rows else None


def revision_table(revisions: Iterable[RevisionRow], language: Language) -> Table | None:
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
    columns = _columns(
        language, ("Revision", 8), ("Date", 10), ("Status", 14), ("Summary", 32), ("Prepared by", 12),
        ("Checked by", 12), ("Approved by", 12),
    )  # fmt: skip
    return Table(language.label("Revisions"), columns, rows) if rows else None


# ---------------------------------------------------------------- holds


def hold_lines(
    plant: Plant,
    tags: Iterable[str],
    own: str,
    *,
    without: Collection[tuple[str, ...]] = (),
    language: Language = ENGLISH,
) -> Iterator[str]:
    """The holds of these tags, those with one reason together; ``without`` are beginnings of paths to leave out."""
    wanted = set(tags)
    by_reason: dict[str, list[str]] = {}
    for hold in plant.register.holds:
        if hold.tag in wanted and not any(hold.path[: len(path)] == path for path in without):
            what = language.held_name(hold.path)
            by_reason.setdefault(hold.reason, []).append(what if hold.tag == own else f"{hold.tag} {what}")
    for reason, values in by_reason.items():
        yield f"{', '.join(values)}: {reason}"
