"""The schedule of alarms and trips of each unit, with the time that the operator has to act."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.narrative import protection_story, time_to_act_story
from loopdoc.documents.narrative.time_to_act_story import Told, alarm_name
from loopdoc.documents.schedules.schedule import (
    DASHES,
    NOT_APPLICABLE,
    REVIEW,
    Cell,
    Column,
    Group,
    Row,
    Schedule,
    ScheduleKind,
    Writer,
    extent,
    page,
)
from loopdoc.documents.values import DASH
from loopdoc.documents.whereabouts import anchor, natural, unit_numbers, unit_of
from loopdoc.documents.wording import listed, upper_first
from loopdoc.engineering.pairing import Trip
from loopdoc.register.model import ALARM_ORDER, ALARM_PRIORITIES, Alarm, Hold, Loop, Measurement, known
from loopdoc.register.quantity import Range
from loopdoc.register.units import UnitError

KIND = ScheduleKind(
    "alarm-schedules", "Alarm and trip schedule", "AS",
    signatures=REVIEW,
)
COLUMNS = (
    Column("Tag", 5.2), Column("Service", 8.4), Column("Range", 6.7), Column("Alarm or trip", 7.4),
    Column("Limit", 5.8), Column("Dead band", 4.4), Column("Delay", 3.4), Column("Priority", 4.4),
    Column("Likely cause", 12.2), Column("Consequence", 12.4), Column("Response", 14.0), Column("Time to respond", 4.4),
    Column("Time to act by upset", 11.3),
)  # fmt: skip
READING = (
    "Every alarm and every trip, by tag, from the highest limit to the lowest; a trip stands on grey and acts by "
    "itself. An alarm that warns of another loop's hazard names it. Dead band: how far the measurement has to come "
    "back. Delay: how long it has to stay beyond the limit. Time to act by upset: from the alarm to the trip behind "
    "it, with both delays and filters, against the time to respond.",
    DASHES,
)

_FROM_HIGH = {kind: rank for rank, kind in enumerate((*reversed(ALARM_ORDER), "deviation"))}


@dataclass(frozen=True, slots=True)
class _Sensor:
    """One measurement with its alarms and the trips on it."""

    tag: str
    service: str
    unit: str
    loop: Loop | None
    range: Range | Hold | None
    trips: tuple[Trip, ...]


def alarm_schedules(basis: Basis) -> Iterator[Page]:
    """The schedule of each unit that has an alarm or a trip."""
    sensors = tuple(_sensors(basis))
    for number in unit_numbers(basis.plant):
        own = sorted((one for one in sensors if one.unit == number), key=lambda one: natural(one.tag))
        if own:
            yield _Alarms(basis).page(number, own)


def _sensors(basis: Basis) -> Iterator[_Sensor]:
    """Every loop with an alarm or a trip on it, then what else trips an interlock."""
    plant = basis.plant
    others: dict[str, list[Trip]] = {}
    of_loop: dict[str, list[Trip]] = {}
    for trip in plant.trips:
        if trip.loop is not None:
            of_loop.setdefault(trip.loop.tag, []).append(trip)
        else:
            others.setdefault(trip.initiator.tag, []).append(trip)
    for loop in plant.register.loops.values():
        trips = tuple(of_loop.get(loop.tag, ()))
        if loop.alarms or trips:
            yield _Sensor(loop.tag, known(loop.service) or "", unit_of(loop), loop, _range(loop.measurement), trips)
    for tag, found in others.items():
        instrument = found[0].instrument
        service = known(instrument.service) if instrument else None
        span = _range(instrument.measurement if instrument else None)
        yield _Sensor(tag, service or "", unit_of(instrument or found[0].interlock), None, span, tuple(found))


def _range(measurement: Measurement | Hold | None) -> Range | Hold | None:
    return measurement.range if isinstance(measurement, Measurement) else measurement


class _Alarms:
    """The schedule of one unit while it is written."""

    def __init__(self, basis: Basis) -> None:
        self._basis = basis
        self._plant = basis.plant
        self._writer = Writer(basis)
        self._told: dict[str, str] = {}

    def page(self, number: str, sensors: list[_Sensor]) -> Page:
        groups = tuple(Group(tuple(self._rows(sensor))) for sensor in sensors)
        alarms = [alarm for sensor in sensors if sensor.loop for alarm in sensor.loop.alarms.values()]
        trips = sum(len(sensor.trips) for sensor in sensors)
        return page(
            self._basis, self._writer, KIND, unit=number, extent=extent((len(alarms), "alarm"), (trips, "trip")),
            reading=READING, caution=time_to_act_story.CAUTION,
            lead=_priorities(alarms), schedules=(Schedule("", COLUMNS, groups),),
        )  # fmt: skip

    def _rows(self, sensor: _Sensor) -> Iterator[Row]:
        """From the highest limit to the lowest; the deviation alarm last."""
        above = [trip for trip in sensor.trips if trip.initiator.direction == "above"]
        rest = [trip for trip in sensor.trips if trip.initiator.direction != "above"]
        alarms = [] if sensor.loop is None else list(sensor.loop.alarms.values())
        alarms.sort(key=lambda alarm: _FROM_HIGH.get(alarm.kind, -1))
        ordered: tuple[Alarm | Trip, ...] = (
            *_from_high(above),
            *(alarm for alarm in alarms if alarm.kind != "deviation"),
            *_from_high(rest),
            *(alarm for alarm in alarms if alarm.kind == "deviation"),
        )
        for index, one in enumerate(ordered):
            at = "" if index else anchor(sensor.tag)
            yield self._trip(sensor, one, at) if isinstance(one, Trip) else self._alarm(sensor, one, at)

    def _alarm(self, sensor: _Sensor, alarm: Alarm, at: str) -> Row:
        loop, write = sensor.loop, self._writer
        assert loop is not None
        times = time_to_act_story.times_of(self._plant, self._basis.times, loop, alarm)
        return Row(
            (
                *self._measured(sensor), self._name(alarm),
                write.value(alarm.limit, sensor.tag), write.cell(alarm.deadband), write.cell(alarm.delay),
                write.cell(alarm.priority), write.words(alarm.cause), write.words(alarm.consequence),
                write.words(alarm.response), write.cell(alarm.time_to_respond), self._times(times),
            ),
            at,
        )  # fmt: skip

    def _measured(self, sensor: _Sensor) -> tuple[Cell, ...]:
        write = self._writer
        return write.cell(sensor.tag), write.cell(sensor.service), write.cell(sensor.range)

    def _name(self, alarm: Alarm) -> Cell:
        """Which alarm it is, and of whose hazard it warns where that is another loop's."""
        write = self._writer
        hazards = [f"{tag} {direction}" for tag, direction in alarm.warns_of.items()]
        name = write.plain(upper_first(alarm_name(alarm.kind)), kind="strong")
        warns = write.cell(f"warns of {listed(hazards)}").lines if hazards else ()
        return replace(name, lines=(*name.lines, *warns))

    def _trip(self, sensor: _Sensor, trip: Trip, at: str) -> Row:
        interlock, initiator, write = trip.interlock, trip.initiator, self._writer
        side, limit = write.text(initiator.direction), write.text(initiator.limit)
        voting = f", {write.text(interlock.voting)}" if len(interlock.initiators) > 1 else ""
        held = write.reason_at(interlock.tag, "actions")
        told_by = self._told.setdefault(interlock.tag, sensor.tag)
        if told_by == sensor.tag:
            does = protection_story.acts(interlock)
            cause, consequence = write.words(interlock.cause), write.words(interlock.consequence)
            response = write.cell(f"By itself: {does}." if does else held or DASH)
        else:
            cause = consequence = response = write.cell(f"As at {told_by}")
        return Row(
            (
                *self._measured(sensor),
                write.cell(f"Trip {interlock.tag}{voting}", *self._layer(trip), kind="strong"),
                write.value(f"{side} {limit}" if known(initiator.limit) and known(initiator.direction) else
                            initiator.limit, sensor.tag),
                write.cell(NOT_APPLICABLE), write.cell(initiator.delay), write.cell(NOT_APPLICABLE),
                cause, consequence, response, write.cell(NOT_APPLICABLE),
                self._times((time_to_act_story.response_of(interlock),)),
            ),
            at, "trip",
        )  # fmt: skip

    def _layer(self, trip: Trip) -> Iterator[str]:
        layer = trip.interlock.layer
        yield f"{layer} layer" if isinstance(layer, str) else f"layer: {self._writer.text(layer)}"

    def _times(self, told: tuple[Told, ...]) -> Cell:
        strong = any(one.strong for one in told)
        return self._writer.cell(*(one.text for one in told), kind="strong" if strong else "")


def _priorities(alarms: Sequence[Alarm]) -> Iterator[str]:
    """How many alarms there are of each priority, which an alarm review looks at first."""
    found = Counter(known(alarm.priority) for alarm in alarms)
    told = [f"{found[name]} {name}" for name in reversed(ALARM_PRIORITIES) if found[name]]
    told += [f"{found[None]} without one"] if found[None] else []
    if told:
        yield f"Alarms by priority: {listed(told)}."


def _from_high(trips: list[Trip]) -> list[Trip]:
    """Trips in one unit of measurement from the highest limit to the lowest; as written where that is not known."""
    limits = [known(trip.initiator.limit) for trip in trips]
    if any(limit is None for limit in limits):
        return trips
    symbol = next((limit.unit.symbol for limit in limits if limit), "")
    try:
        return sorted(trips, key=lambda trip: -limit.to(symbol) if (limit := known(trip.initiator.limit)) else 0.0)
    except UnitError:
        return trips
