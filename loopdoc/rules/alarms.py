"""Rules on alarms."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise

from loopdoc.engineering.pairing import LoopAlarm
from loopdoc.engineering.time_to_act import AlarmToTrip, TimeBetween, TimeToAct
from loopdoc.register.model import ALARM_ORDER, Hold, Loop, known
from loopdoc.register.quantity import Quantity
from loopdoc.rules.alarm_design import NAMES, SIDES
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, need, not_checked, only_if, rule
from loopdoc.rules.values import (
    above,
    amount,
    below,
    duration_beside,
    equal,
    measured_range,
    range_place,
    reading,
    scale_in,
    time_s,
)


@rule(level=Level.ERROR, source="common practice; alarm types as in ANSI/ISA-18.2-2016 (from memory)")
def alarm_order(loop: Loop) -> Iterator[Draft]:
    """Two alarms on one measurement do not come in the order of their names.

    Why:
        The operator reads the high-high alarm as the worse one. If it comes first, or together with the high
        alarm, the time for the first response is gone before it is asked for.
    Breaks:
        `high: {limit: 94 degC}` with `high_high: {limit: 92 degC}`, or both at 94 degC.
    Holds:
        low-low is below low, low below high, high below high-high, whichever of them there are.
    What this check cannot see:
        Whether the distance between two alarms leaves time to act.
    """
    alarms = [loop.alarms[kind] for kind in ALARM_ORDER if kind in loop.alarms]
    only_if(len(alarms) > 1)
    limits = [(alarm, limit) for alarm in alarms if (limit := known(alarm.limit)) is not None]
    for (lower, low), (upper, high) in pairwise(limits):
        scale = scale_in(high.unit, loop)
        value = reading(low, scale, f"the limit of the {NAMES[lower.kind]} alarm")
        if below(value, high.value):
            continue
        relation = "equals" if equal(value, high.value) else "is below"
        yield draft(
            loop.tag,
            f"the {NAMES[upper.kind]} alarm at {high} {relation} the {NAMES[lower.kind]} alarm at {scale.told(low)}",
            remedy=f"set the {NAMES[upper.kind]} alarm above the {NAMES[lower.kind]} alarm, or leave one of them out",
            at=upper.origin.place("limit"),
            related=((lower.origin.place("limit"), f"the {NAMES[lower.kind]} alarm, {low}"),),
        )
    for alarm in alarms:
        need(alarm.limit, f"the limit of the {NAMES[alarm.kind]} alarm")


@rule(level=Level.ERROR, source="common practice; a signal that saturates cannot pass a limit at its end")
def alarm_outside_range(subject: LoopAlarm) -> Iterator[Draft]:
    """An alarm limit lies outside the measurement range or at its very end.

    Why:
        The signal cannot be relied upon beyond the ends of its range: a limit there is never passed, or is
        passed for ever. The alarm stands in the schedule and does not sound in the plant.
    Breaks:
        A high alarm at 125 degC, or at 120 degC exactly, on a range of 60 to 120 degC. A low alarm at
        0 t/h on 0 to 15 t/h. A deviation alarm of the whole span or more.
    Holds:
        The limit lies inside the range and at neither end; the limit of a deviation alarm, a difference,
        is above nothing and below the span.
    What this check cannot see:
        A transmitter that reads on beyond its range: between 20 and 20.5 mA (NAMUR NE 43) an alarm at the
        very end may sound, but nobody should depend on it.
    """
    loop, alarm = subject.loop, subject.alarm
    limit = need(alarm.limit, "the alarm limit")
    band = measured_range(loop)
    name = NAMES[alarm.kind]
    related = ((range_place(loop), f"the range, {band}"),)
    if alarm.kind == "deviation":
        if limit.unit.difference_kind != band.unit.difference_kind:
            not_checked("the alarm limit has a unit of another kind")
        size = abs(limit.difference_in(band.unit.symbol))
        if size == 0 or not below(size, band.span):
            fault = "always sounds" if size == 0 else f"can never sound: the span is {amount(band.span, band.unit)}"
            yield draft(
                loop.tag,
                f"the deviation alarm at {limit} {fault}",
                remedy="set the limit to a part of the span",
                at=alarm.origin.place("limit"),
                related=related,
            )
        return
    scale = scale_in(band.unit, loop)
    value = reading(limit, scale, "the alarm limit")
    if above(value, band.low) and below(value, band.high):
        return
    where = "outside" if below(value, band.low) or above(value, band.high) else "at the very end of"
    yield draft(
        loop.tag,
        f"the {name} alarm at {scale.told(limit)} lies {where} the measurement range, {band}",
        remedy="set the limit inside the range, or give the transmitter a range that reaches beyond it",
        at=alarm.origin.place("limit"),
        related=related,
    )


@rule(
    level=Level.WARNING,
    source="ANSI/ISA-18.2-2016, definition of alarm: an abnormal condition that asks for a response (from memory)",
)
def alarm_inside_operating(subject: LoopAlarm) -> Iterator[Draft]:
    """An alarm sounds while the plant runs as it should.

    Why:
        An alarm inside the operating band calls the operator to a state that is normal. It stands for hours, is
        ignored, and takes the others with it.
    Breaks:
        A high alarm at 89 degC, or at 90 degC exactly, where normal running reaches to 90 degC.
    Holds:
        The high and high-high alarms lie above the high end of the operating band, the low and low-low alarms
        below its low end. A deviation alarm is not judged.
    What this check cannot see:
        Whether the operating band is the one in which the plant really runs; other bands, such as those of start-up.
    """
    loop, alarm = subject.loop, subject.alarm
    only_if(alarm.kind != "deviation")
    side = "high" if alarm.kind in SIDES["high"] else "low"
    operating = need(loop.operating, "the operating band")
    end = need(operating.high if side == "high" else operating.low, f"the {side} end of the operating band")
    limit = need(alarm.limit, "the alarm limit")
    scale = scale_in(end.unit, loop)
    value = reading(limit, scale, "the alarm limit")
    if above(value, end.value) if side == "high" else below(value, end.value):
        return
    where = "lies at the very end of" if equal(value, end.value) else "lies inside"
    yield draft(
        loop.tag,
        f"the {NAMES[alarm.kind]} alarm at {scale.told(limit)} {where} the operating band, "
        f"which reaches {'up' if side == 'high' else 'down'} to {end}",
        remedy=f"set the alarm {'above' if side == 'high' else 'below'} {end} with room for the noise, "
        "or correct the operating band",
        at=alarm.origin.place("limit"),
        related=((operating.origin.place(side), f"the {side} end of the operating band, {end}"),),
    )


@rule(
    level=Level.WARNING,
    source="ANSI/ISA-18.2-2016, rationalisation: an alarm leaves the operator time to respond (from memory)",
)
def alarm_time_short(subject: LoopAlarm, times: TimeToAct) -> Iterator[Draft]:
    """Between an alarm and the trip behind it an upset leaves less time than the operator is given.

    Why:
        The alarm schedule promises a time to respond. If the interlock trips before it is over, the response
        is not an answer to that upset, and whoever counts on the operator counts on nothing.
    Breaks:
        A low alarm at 33 % with 5 min to respond before a trip below 20 %, where the level falls by 3 % a
        minute once the feed is lost: 4.3 min.
    Holds:
        Under each upset, the final element at either end of its travel or a declared disturbance, with the
        loops in manual and from normal operation, the time from the alarm to the trip is the time to respond
        or more. The delays of both and the filters of their measurements count.
    What this check cannot see:
        How long the response itself takes to show. Upsets that the register does not declare, and alarms on
        another quantity that warn of the same trip.
    """
    loop, alarm = subject.loop, subject.alarm
    behind = times.of(loop, alarm)
    only_if(behind)
    given = need(alarm.time_to_respond, "the time to respond")
    given_s = time_s(given, "the time to respond")
    lacking = ""
    for entry in behind:
        reached = sorted(entry.times, key=lambda time: time.available_s)
        short = [time for time in reached if below(time.available_s, given_s)]
        certain = next((time for time in short if not time.at_least), None)
        if certain is not None:
            yield _too_short(entry, certain, given)
        elif short:
            lacking = lacking or f"how far the final element stands open before {short[0].upset} is not known"
        for upset in entry.not_decided:
            lacking = lacking or f"{upset.upset}: {upset.reason}"
    if lacking:
        not_checked(lacking)


def _too_short(entry: AlarmToTrip, time: TimeBetween, given: Quantity) -> Draft:
    alarm, trip = entry.alarm, entry.trips[0]
    name = f"the {NAMES[alarm.kind]} alarm at {known(alarm.limit)}{_delayed(alarm.delay)}"
    limit = f"{known(trip.initiator.direction)} {known(trip.initiator.limit)}{_delayed(trip.initiator.delay)}"
    order = "before" if time.available_s > 0 else "after"
    return draft(
        entry.loop.tag,
        f"under the upset `{time.upset}`, {name} comes {duration_beside(abs(time.available_s), given)} {order} "
        f"the trip of {entry.interlock.tag} {limit}; the operator is given {given}",
        remedy=f"move the alarm away from the trip, or write what time there is; where {entry.interlock.tag} alone is "
        "to meet this upset, say so in a deviation",
        at=alarm.origin.place("time_to_respond"),
        related=(
            (alarm.origin.place("limit"), name),
            (trip.initiator.origin.place("trips"), f"{entry.interlock.tag} trips {limit}"),
        ),
    )


def _delayed(delay: Quantity | Hold | None) -> str:
    return f" (delay {delay})" if isinstance(delay, Quantity) and delay.value else ""
