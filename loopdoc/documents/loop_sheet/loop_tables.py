"""The tables of a loop sheet: final elements, alarms, trips, interlocks, expected signals, revisions and holds."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Iterator

from markupsafe import Markup

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.loop_sheet.expected_signals import STEPS, expected_commands, expected_readings
from loopdoc.documents.loop_sheet.loop_rows import action_words, acts_on
from loopdoc.documents.loop_sheet.panels import Column, Table, cell, columns_with, joined, term
from loopdoc.documents.titleblock import RevisionRow
from loopdoc.documents.values import DASH
from loopdoc.engineering.pairing import Plant, Trip
from loopdoc.register.model import (
    Alarm,
    FinalElement,
    Hold,
    Initiator,
    Interlock,
    Loop,
)

_HIGH_FIRST = ("high_high", "high", "low", "low_low", "deviation")


# ---------------------------------------------------------------- final elements


def element_table(plant: Plant, loop: Loop, elements: Iterable[FinalElement], language: Language) -> Table | None:
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
    columns = columns_with(
        language, ("Final element", 9), ("Service", 15), ("Kind", 10), ("Opens on", 9), ("Output block", 9),
        ("Fails", 7), ("Safe position", 7), ("Signal", 7), ("Channel", 8), ("Characteristic", 12), ("Stroke time", 7),
    )  # fmt: skip
    return Table(language.label("Final elements"), columns, rows) if rows else None


# ---------------------------------------------------------------- alarms, trips, interlocks


def alarm_table(plant: Plant, loop: Loop, language: Language) -> Table | None:
    """Alarms and trips on the loop's measurement, from the highest limit to the lowest."""
    trips = [trip for trip in plant.trips if trip.loop is loop]
    above = [_trip_row(plant, trip, language) for trip in trips if trip.initiator.direction == "above"]
    rest = [_trip_row(plant, trip, language) for trip in trips if trip.initiator.direction != "above"]
    alarms = {kind: _alarm_row(loop.alarms[kind], language) for kind in _HIGH_FIRST if kind in loop.alarms}
    deviation = [alarms.pop("deviation")] if "deviation" in alarms else []
    rows = (*above, *alarms.values(), *rest, *deviation)
    columns = columns_with(
        language, ("Alarm or trip", 11), ("Limit", 12), ("Dead band", 10), ("Delay", 7), ("Priority", 7),
        ("Respond in", 9), ("Operator response", 44),
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
    columns = columns_with(
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
    columns = columns_with(
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
