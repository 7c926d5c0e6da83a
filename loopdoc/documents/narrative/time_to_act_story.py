"""Time to act in words: from an alarm to the trip behind it, against the time that the operator is given."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import TypeVar

from loopdoc.documents.language import Language
from loopdoc.documents.wording import NO_BREAK, listed, sentences, upper_first, value
from loopdoc.engineering.pairing import Plant, Trip, measured_quantity
from loopdoc.engineering.spreading import transmitter_of
from loopdoc.engineering.time_to_act import AlarmToTrip, TimeBetween, TimeToAct
from loopdoc.register.model import Alarm, Hold, Interlock, Loop, known, seconds
from loopdoc.register.quantity import Quantity, display_number
from loopdoc.rules.values import below, duration

CAUTION = (
    "Times to act are calculated from the process models of the register, from normal operation and with the loops in "
    "manual, where nothing is fed forward either; a real upset may be quicker. They do not show that an alarm or an "
    "interlock is enough: safety functions are judged in their own lifecycle (IEC 61511)."
)
"""Stands beside every time to act."""

_K = TypeVar("_K")

_SIDES = {"high": "above", "high_high": "above", "low": "below", "low_low": "below"}


@dataclass(frozen=True, slots=True)
class Told:
    """One statement, and whether a reader must not pass it over."""

    text: str
    strong: bool = False


def shown_time(time_s: float) -> str:
    """A calculated time with its unit, which no line breaks."""
    return duration(time_s).replace(" ", NO_BREAK)


def alarm_name(kind: str) -> str:
    """`high-high` of `high_high`."""
    return kind.replace("_", "-")


# ---------------------------------------------------------------- the alarm schedule


def times_of(plant: Plant, times: TimeToAct, loop: Loop, alarm: Alarm) -> tuple[Told, ...]:
    """What an alarm leaves before each trip behind it, one statement for each upset."""
    behind = times.of(loop, alarm)
    if behind:
        return tuple(told for entry in behind for told in _entry(entry))
    return (Told(_without_a_trip(plant, loop, alarm)),)


def _entry(entry: AlarmToTrip) -> Iterator[Told]:
    given = _time(entry.alarm.time_to_respond)
    given_s = seconds(given) if given else None
    for time in entry.times:
        yield _upset(entry, time, given_s)
    if given_s is None and any(math.isfinite(time.trip_s) for time in entry.times):
        yield Told("Not checked against the response: the time to respond is not known")
    for upset in entry.not_decided:
        yield Told(f"{upper_first(upset.upset)}: not checked, {upset.reason}")
    if not entry.times and not entry.not_decided:
        yield Told(f"No upset in the register brings it to the trip of {entry.interlock.tag}")


def _upset(entry: AlarmToTrip, time: TimeBetween, given_s: float | None) -> Told:
    name, interlock = upper_first(time.upset), entry.interlock.tag
    if not math.isfinite(time.trip_s):
        return Told(f"{name}: {interlock} is not reached")
    if time.available_s <= 0.0:
        return Told(f"{name}: {interlock} trips {shown_time(-time.available_s)} before the alarm", strong=True)
    left = f"{name}: {'at least ' if time.at_least else ''}{shown_time(time.available_s)} to {interlock}"
    if given_s is None or not below(time.available_s, given_s):
        return Told(left)
    if time.at_least:
        return Told(f"{left}; not checked further, the opening in normal operation does not follow from the register")
    return Told(f"{left}, less than the time to respond", strong=True)


def _without_a_trip(plant: Plant, loop: Loop, alarm: Alarm) -> str:
    side = _SIDES.get(alarm.kind)
    trips = [trip for trip in _same_quantity(plant, loop) if known(trip.initiator.direction) == side]
    if not trips:
        return "No trip behind it"
    tags = listed(dict.fromkeys(trip.interlock.tag for trip in trips))
    if known(alarm.limit) is None:
        return f"Not checked, the limit of the alarm is not known ({tags} trips on the same side)"
    return f"Does not precede the trip of {tags}"


def _same_quantity(plant: Plant, loop: Loop) -> Iterator[Trip]:
    own, transmitter = measured_quantity(loop), transmitter_of(loop)
    for trip in plant.trips:
        part = trip.instrument or trip.loop
        sensor = known(trip.measurement.transmitter) if trip.measurement else None
        same = transmitter is not None and sensor == transmitter
        if part is not None and (same or (own is not None and measured_quantity(part) == own)):
            yield trip


def response_of(interlock: Interlock) -> Told:
    """Process safety time against response time of an interlock."""
    given, response = _time(interlock.process_safety_time), _time(interlock.response_time)
    if given and response and seconds(given) > 0.0:
        share = seconds(response) / seconds(given)
        of = f"{_percent(share)} of the process safety time of {value(given)}"
        return Told(f"Response {value(response)}, {of}", strong=share >= 1.0)
    told = [f"response {value(response)}"] if response else []
    told += [f"process safety time {value(given)}"] if given else []
    if known(interlock.layer) == "process" and interlock.process_safety_time is None:
        return Told(upper_first(", ".join(told)) or "No time is given")
    return Told(upper_first("; ".join([*told, f"not checked, {_lacking(given, response)}"])))


def _lacking(given: Quantity | None, response: Quantity | None) -> str:
    """Which of the two times of an interlock is not known."""
    names = [name for name, time in (("process safety time", given), ("response time", response)) if time is None]
    return f"the {listed(names)} {'is' if len(names) == 1 else 'are'} not known"


def _time(written: Quantity | Hold | None) -> Quantity | None:
    """A time; None where it is held, not given or no time, of which the check tells."""
    time = known(written)
    return time if time is not None and time.unit.kind == "time" else None


def _percent(share: float) -> str:
    return f"{display_number(100 * share, 2)}{NO_BREAK}%"


# ---------------------------------------------------------------- the narrative


def told(plant: Plant, times: TimeToAct, loops: Iterable[Loop], language: Language) -> str:
    """How long the operator has after the alarms of these loops, in sentences; empty where no trip follows."""
    found = [entry for loop in loops for alarm in loop.alarms.values() for entry in times.of(loop, alarm)]
    reached = [(entry, entry.shortest) for entry in found]
    sayings = [_between(plant, entry, time, language) for entry, time in reached if time is not None]
    idle = [(entry.interlock.tag, entry) for entry, time in reached if time is None and not entry.not_decided]
    sayings += [language.not_carried_on(alarms, trip) for trip, alarms in _alarms_by(idle).items()]
    lacking = [
        ((entry.interlock.tag, upset.reason), entry)
        for entry in found for upset in entry.not_decided
    ]  # fmt: skip
    sayings += [
        language.time_not_checked(alarms, trip, language.reason(reason))
        for (trip, reason), alarms in _alarms_by(lacking).items()
    ]
    measured = {
        name
        for loop in plant.register.loops.values()
        for upset in loop.disturbances.values()
        if upset.moves
        for name in (upset.name, f"{upset.name} ({loop.tag})")
    }
    fed = any(time is not None and time.upset in measured for _, time in reached)
    return sentences(*sayings, language.times_caution(measured=fed)) if sayings else ""


def _alarms_by(found: Iterable[tuple[_K, AlarmToTrip]]) -> dict[_K, list[tuple[str, str]]]:
    """Tag and kind of the alarms under each key, none twice."""
    by_key: dict[_K, list[tuple[str, str]]] = {}
    for key, entry in found:
        alarms = by_key.setdefault(key, [])
        if _alarm(entry) not in alarms:
            alarms.append(_alarm(entry))
    return by_key


def response_told(interlock: Interlock, language: Language) -> tuple[str, ...]:
    """Process safety time against response time as sentences of a narrative; none where neither is given."""
    given, response = _time(interlock.process_safety_time), _time(interlock.response_time)
    if given and response and seconds(given) > 0.0:
        share = seconds(response) / seconds(given)
        of = f"{language.number(100 * share, 2)}{NO_BREAK}%"
        what, by = language.label("Share of the process safety time"), language.by_the_two_times()
        of = language.calculated(of, interlock.tag, what, by)
        times = language.value(response), of, language.value(given)
        return language.acts_within(interlock.tag, *times, late=share >= 1.0)
    told = [*language.acts_within(interlock.tag, language.value(response), "", "", late=False)] if response else []
    told += [language.safety_time(language.value(given))] if given else []
    if known(interlock.layer) == "safety":
        told.append(language.not_checked_in_time(safety_time=given is None, response=response is None))
    return tuple(told)


def _between(plant: Plant, entry: AlarmToTrip, time: TimeBetween, language: Language) -> str:
    given = _time(entry.alarm.time_to_respond)
    # An upset is told as `FV-1002 shuts`, or by the name that the register gives it.
    moved = time.upset.partition(" ")[0] in plant.register.final_elements
    when, alarm, trip = language.upset_if(time.upset, moved=moved), _alarm(entry), entry.interlock.tag
    left = language.calculated(
        language.rough_duration(abs(time.available_s)), alarm[0], language.label("Time from alarm to trip"),
        language.by_time_to_act(),
    )  # fmt: skip
    if time.available_s <= 0.0:
        return language.trips_before(when, trip, left, alarm)
    return language.operator_has(
        when, left, alarm, trip, language.value(given) if given else "",
        least=time.at_least, short=given is not None and below(time.available_s, seconds(given)),
    )  # fmt: skip


def _alarm(entry: AlarmToTrip) -> tuple[str, str]:
    return entry.loop.tag, entry.alarm.kind


# ---------------------------------------------------------------- the loop sheet


def sheet_line(times: TimeToAct, loop: Loop, language: Language) -> str:
    """The shortest time after each alarm of a loop in one line; empty where no trip follows."""
    return "; ".join(
        language.alarm_to_trip(alarm.kind, entry.interlock.tag, _in_short(entry, language))
        for alarm in loop.alarms.values()
        for entry in times.of(loop, alarm)
    )


def _in_short(entry: AlarmToTrip, language: Language) -> str:
    time, given = entry.shortest, _time(entry.alarm.time_to_respond)
    if time is None:
        return language.not_reached(checked=not entry.not_decided)
    if time.available_s <= 0.0:
        return language.before_the_alarm(language.rough_duration(-time.available_s), time.upset)
    left = language.rough_duration(time.available_s)
    return language.time_left(left, time.upset, language.value(given) if given else "", least=time.at_least)
