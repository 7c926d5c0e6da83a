"""Rules on interlocks and their trip limits."""

from __future__ import annotations

import math
from collections.abc import Iterator

from loopdoc.engineering.pairing import Plant, Trip
from loopdoc.register.model import Interlock, Loop, known
from loopdoc.rules.finding import Level
from loopdoc.rules.policy import Limits
from loopdoc.rules.rule import Draft, draft, need, only_if, rule
from loopdoc.rules.values import Scale, above, below, equal, measured_range, range_place, reading, scale_in, time_s


@rule(
    level=Level.ERROR, source="common practice; ANSI/ISA-18.2-2016: an alarm asks for a response in time (from memory)"
)
def trip_before_alarm(trip: Trip, plant: Plant) -> Iterator[Draft]:
    """The interlock trips before the alarm that should have warned of it.

    Why:
        The operator is called when there is nothing left to do: the response that the alarm schedule
        promises cannot be given.
    Breaks:
        A trip above 1.6 barg with the high alarm on the same transmitter at 1.7 barg.
    Holds:
        Of a trip above a limit, the high and high-high alarms on the same transmitter lie below that limit;
        of a trip below a limit, the low and low-low alarms lie above it. Where a first alarm comes before
        the trip, a high-high (low-low) alarm may stand exactly at its limit, to tell that the trip has come,
        or beyond it, to warn of another trip further out.
    What this check cannot see:
        Alarms on another transmitter of the same vessel, and how long the process takes from alarm to trip.
    """
    direction = need(trip.initiator.direction, "the direction of the trip")
    kinds = ("high", "high_high") if direction == "above" else ("low", "low_low")
    alarms = [(loop, loop.alarms[kind]) for loop in _loops_on(trip, plant) for kind in kinds if kind in loop.alarms]
    only_if(alarms)
    limit = need(trip.initiator.limit, "the trip limit")
    scale = scale_in(limit.unit, trip.instrument or trip.loop)
    comes_before = above if direction == "below" else below
    values = [
        (loop, alarm, written, scale.value(written))
        for loop, alarm in alarms
        if (written := known(alarm.limit)) is not None and scale.takes(written.unit)
    ]
    warned = any(comes_before(value, limit.value) for *_, value in values)
    for loop, alarm, written, value in values:
        at_the_trip = equal(value, limit.value)
        outer = alarm.kind in ("high_high", "low_low")
        if comes_before(value, limit.value) or (
            warned and outer and (at_the_trip or _warns_of_another(trip, value, scale, plant))
        ):
            continue
        name = alarm.kind.replace("_", "-")
        when = "together with" if at_the_trip else "after"
        yield draft(
            loop.tag,
            f"the {name} alarm at {scale.told(written)} comes {when} "
            f"the trip of {trip.interlock.tag} {direction} {limit}",
            remedy=f"set the alarm {'below' if direction == 'above' else 'above'} {limit}, with time to act in between",
            at=alarm.origin.place("limit"),
            related=((trip.initiator.origin.place("trips"), f"{trip.interlock.tag} trips {direction} {limit}"),),
        )
    for _, alarm in alarms:
        reading(need(alarm.limit, "the alarm limit"), scale, "the alarm limit")


def _warns_of_another(trip: Trip, alarm: float, scale: Scale, plant: Plant) -> bool:
    """Whether an alarm comes before another trip of the same measurement."""
    comes_before = above if trip.initiator.direction == "below" else below
    return any(
        other.measurement == trip.measurement
        and other.initiator.direction == trip.initiator.direction
        and (limit := known(other.initiator.limit)) is not None
        and scale.takes(limit.unit)
        and comes_before(alarm, scale.value(limit))
        for other in plant.trips
    )


def _loops_on(trip: Trip, plant: Plant) -> tuple[Loop, ...]:
    """Every loop that measures with the transmitter of the trip."""
    transmitter = known(trip.measurement.transmitter) if trip.measurement else None
    sharing = plant.loops_on.get(transmitter, ()) if transmitter else ()
    return sharing or ((trip.loop,) if trip.loop else ())


@rule(level=Level.ERROR, source="common practice; a signal that saturates cannot pass a limit at its end")
def trip_outside_range(trip: Trip) -> Iterator[Draft]:
    """A trip limit lies outside the measurement range or at its very end.

    Why:
        The signal stands still at the end of its range, so the limit is never passed: the interlock is
        drawn, tested on paper and blind.
    Breaks:
        A trip above 2.5 barg, or above 3 barg, on a range of 0 to 2.5 barg.
    Holds:
        The limit lies inside the range and at neither end.
    What this check cannot see:
        Whether the transmitter is accurate enough near the end of its range.
    """
    only_if(trip.measurement is not None)
    owner = trip.instrument or trip.loop
    assert owner is not None
    limit = need(trip.initiator.limit, "the trip limit")
    band = measured_range(owner)
    scale = scale_in(band.unit, owner)
    value = reading(limit, scale, "the trip limit")
    if above(value, band.low) and below(value, band.high):
        return
    where = "outside" if below(value, band.low) or above(value, band.high) else "at the very end of"
    yield draft(
        trip.interlock.tag,
        f"it trips {known(trip.initiator.direction)} {scale.told(limit)}, "
        f"{where} the range of {trip.initiator.tag}, {band}",
        remedy="set the limit inside the range, or give the transmitter a range that reaches beyond it",
        at=trip.initiator.origin.place("trips"),
        related=((range_place(owner), f"the range of {trip.initiator.tag}, {band}"),),
    )


@rule(
    level=Level.WARNING,
    source="IEC 61511-1:2016, process safety time (from memory); half of it for the response: common practice",
)
def interlock_too_slow(interlock: Interlock, limits: Limits) -> Iterator[Draft]:
    """The response of an interlock takes too much of the time that the process gives.

    Why:
        When the final element stands at last, the hazardous event may have come. Sensor, logic and stroke are
        never quicker than on paper, and a valve that has stood still for a year is slower.
    Breaks:
        A response time of 50 s with a process safety time of 90 s: more than half of it. An error where the
        response takes the whole of it or more.
    Holds:
        The response time is at most the share of the policy of the process safety time. An interlock of the
        safety layer gives both; one of the process layer is judged where it gives a process safety time.
    What this check cannot see:
        Whether either time is right: how the process runs away, and how the valve was tested.
    """
    only_if(interlock.process_safety_time is not None or known(interlock.layer) != "process")
    if interlock.process_safety_time is None:
        need(interlock.layer, "the layer")
    given = need(interlock.process_safety_time, "the process safety time")
    response = need(interlock.response_time, "the response time")
    response_s, given_s = time_s(response, "the response time"), time_s(given, "the process safety time")
    share = response_s / given_s if given_s > 0 else math.inf
    if not above(share, limits.interlock_time_share):
        return
    whole = not below(share, 1.0)
    told = "no less than" if whole else f"more than {100 * limits.interlock_time_share:g} % of"
    yield draft(
        interlock.tag,
        f"its response time, {response}, is {told} the process safety time, {given}",
        remedy="quicken the sensor, the logic or the final element, or act on an earlier sign of the event",
        at=interlock.origin.place("response_time"),
        related=((interlock.origin.place("process_safety_time"), f"the process safety time, {given}"),),
        level=Level.ERROR if whole else None,
    )
