"""Rules on what trips an interlock: its limits, its voting, the alarms before it, its time."""

from __future__ import annotations

import math
import re
from collections.abc import Iterator

from loopdoc.engineering.pairing import Plant, Trip, measured_quantity
from loopdoc.register.model import Hold, Interlock, Loop, known
from loopdoc.rules.alarm_design import SIDES, alarms_held
from loopdoc.rules.finding import Level
from loopdoc.rules.policy import Limits
from loopdoc.rules.rule import Draft, draft, need, not_checked, only_if, rule
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


@rule(level=Level.ERROR, source="common practice; the trip limit stands outside what the plant does in normal running")
def trip_inside_operating(trip: Trip, plant: Plant) -> Iterator[Draft]:
    """An interlock trips while the plant runs as it should.

    Why:
        The first swing to the end of the operating band shuts the plant down. Interlocks that trip for nothing
        are bypassed.
    Breaks:
        A trip above 89 degC, or above 90 degC exactly, where normal running reaches to 90 degC.
    Holds:
        A trip above a limit lies above the high end of the operating band of every loop on its transmitter, a trip
        below a limit below its low end.
    What this check cannot see:
        The operating band of a transmitter that belongs to no loop; bands that the plant passes at start-up.
    """
    loops = _loops_on(trip, plant)
    only_if(loops)
    direction = need(trip.initiator.direction, "the direction of the trip")
    limit = need(trip.initiator.limit, "the trip limit")
    side = "high" if direction == "above" else "low"
    banded = [(loop, operating) for loop in loops if (operating := known(loop.operating)) is not None]
    if not banded:
        need(loops[0].operating, f"the operating band of {loops[0].tag}")
    for loop, operating in banded:
        end = need(operating.high if side == "high" else operating.low, f"the {side} end of the operating band")
        scale = scale_in(end.unit, loop)
        value = reading(limit, scale, "the trip limit")
        if above(value, end.value) if side == "high" else below(value, end.value):
            continue
        where = "at the very end of" if equal(value, end.value) else "inside"
        yield draft(
            trip.interlock.tag,
            f"it trips {direction} {scale.told(limit)} on {trip.initiator.tag}, {where} the operating band of "
            f"{loop.tag}, which reaches {'up' if side == 'high' else 'down'} to {end}",
            remedy=f"set the trip {'above' if side == 'high' else 'below'} {end}, or correct the operating band",
            at=trip.initiator.origin.place("trips"),
            related=((operating.origin.place(side), f"the {side} end of the operating band of {loop.tag}, {end}"),),
        )


@rule(level=Level.WARNING, source="common practice: a setpoint limit keeps the operator clear of the trip")
def setpoint_limit_beyond_trip(trip: Trip, plant: Plant) -> Iterator[Draft]:
    """A controller accepts a setpoint at which its own transmitter trips an interlock.

    Why:
        Whoever enters that setpoint, or a primary that asks for it, brings the plant to the trip by normal control.
        The limit of the setpoint is there to refuse it.
    Breaks:
        A trip above 100 degC on the transmitter of a controller with `setpoint: {high: 105 degC}`, or with 100 degC.
    Holds:
        Of a trip above a limit, the high setpoint limit of each controller on that transmitter lies below that limit;
        of a trip below a limit, the low one lies above it. A setpoint limit that is not given is not judged.
    What this check cannot see:
        Trips on another transmitter of the same vessel, and how far the measurement swings past its setpoint.
    """
    direction = need(trip.initiator.direction, "the direction of the trip")
    side = "high" if direction == "above" else "low"
    limited = [
        (loop, setpoint, getattr(setpoint, side))
        for loop in _loops_on(trip, plant)
        if (controller := known(loop.controller)) is not None and (setpoint := known(controller.setpoint)) is not None
    ]
    limited = [entry for entry in limited if entry[2] is not None]
    only_if(limited)
    limit = need(trip.initiator.limit, "the trip limit")
    for loop, setpoint, written in limited:
        end = need(written, f"setpoint {side} of {loop.tag}")
        scale = scale_in(limit.unit, loop)
        value = reading(end, scale, f"setpoint {side} of {loop.tag}")
        if below(value, limit.value) if side == "high" else above(value, limit.value):
            continue
        yield draft(
            loop.tag,
            f"setpoint {side}, {scale.told(end)}, lies {'at' if equal(value, limit.value) else 'beyond'} the trip of "
            f"{trip.interlock.tag} {direction} {limit}",
            remedy=f"write a setpoint limit {'below' if side == 'high' else 'above'} {limit}, with room for a swing",
            at=setpoint.origin.place(side),
            related=((trip.initiator.origin.place("trips"), f"the trip of {trip.interlock.tag}"),),
        )


@rule(
    level=Level.WARNING,
    source="common practice; ANSI/ISA-18.2-2016: the operator is told before the plant is tripped (from memory)",
)
def trip_without_alarm(interlock: Interlock, plant: Plant) -> Iterator[Draft]:
    """An interlock trips on a measurement that no alarm watches on the way there.

    Why:
        The operator could often have kept the plant running with a word in time. Without an alarm the trip is the
        first he hears of it.
    Breaks:
        A trip above 100 degC on a transmitter, or on a quantity, without a high or high-high alarm.
    Holds:
        For each quantity and direction that trips, a loop that measures it, with the same transmitter or another,
        has an alarm on that side. Whether it comes in time is the business of other rules.
    What this check cannot see:
        An alarm on another quantity that warns of the same trip: say so in a deviation.
    """
    trips = [trip for trip in plant.trips_of[interlock.tag] if trip.instrument or trip.loop]
    only_if(trips)
    told: set[tuple[object, str]] = set()
    lacking = ""
    for trip in trips:
        owner = trip.instrument or trip.loop
        direction = known(trip.initiator.direction)
        if owner is None or direction not in ("above", "below"):
            lacking = lacking or "the direction of a trip is not given"
            continue
        side = "high" if direction == "above" else "low"
        key = (measured_quantity(owner) or trip.initiator.tag, side)
        watching = plant.loops_watching(owner)
        if key in told or any(kind in loop.alarms for loop in watching for kind in SIDES[side]):
            continue
        if any(alarms_held(loop, plant) for loop in watching):
            lacking = lacking or "the alarms are on hold"
            continue
        told.add(key)
        limit = known(trip.initiator.limit)
        yield draft(
            interlock.tag,
            f"it trips {direction} {limit or 'a limit'} on {trip.initiator.tag}, but no {side} alarm comes before: "
            f"{_none_there(watching)}",
            remedy=f"write a `{side}` alarm {'below' if side == 'high' else 'above'} {limit or 'the limit'} on a loop "
            "that measures this, or say in a deviation what warns of it",
            at=trip.initiator.origin.place("trips"),
            related=tuple((loop.origin.key(), f"{loop.tag} measures it") for loop in watching),
        )
    if lacking:
        not_checked(lacking)


def _none_there(watching: tuple[Loop, ...]) -> str:
    if not watching:
        return "no loop measures it"
    tags = [loop.tag for loop in watching]
    return f"{' and '.join(tags)} {'measures' if len(tags) == 1 else 'measure'} it, without one"


@rule(
    level=Level.ERROR,
    source="IEC 61511-1:2016, MooN architecture (from memory); arithmetic",
)
def interlock_voting(interlock: Interlock, plant: Plant) -> Iterator[Draft]:
    """The voting of an interlock does not agree with its initiators.

    Why:
        Two of three with two transmitters is either one of two or two of two: the one trips on every fault, the
        other on none. The cause and effect chart, the logic and the test all start from this line.
    Breaks:
        `voting: 2oo3` with two initiators; `3oo2`; two of the votes from one transmitter, under the tag of its loop
        and under its own. Two initiators without `voting` (a warning).
    Holds:
        As many initiators as the voting counts, each on a transmitter of its own, and no more votes asked for than
        there are. A single initiator needs no voting.
    What this check cannot see:
        Votes of votes, such as two of three pressures or a low flow: write them as two interlocks.
    """
    trips = plant.trips_of[interlock.tag]
    paths = plant.register.held.get(interlock.tag, frozenset())
    if ("initiators",) in paths:
        not_checked("the initiators are on hold")
    count = len(interlock.initiators) + sum(1 for path in paths if path[:1] == ("initiators",) and len(path) == 2)
    only_if(interlock.voting is not None or count > 1)
    if interlock.voting is None:
        yield draft(
            interlock.tag,
            f"it has {count} initiators, but how they vote is not given",
            remedy=f"write `voting:`, as in `voting: 1oo{count}` where each trips by itself",
            at=interlock.origin.key("initiators"),
            level=Level.WARNING,
        )
        return
    written = need(interlock.voting, "the voting")
    votes = _VOTING.fullmatch(written)
    if votes is None:
        not_checked("the voting could not be read")
    needed, of = int(votes[1]), int(votes[2])
    at = interlock.origin.place("voting")
    if needed > of:
        yield draft(
            interlock.tag,
            f"its voting is {written}: {needed} votes of {of} never come",
            remedy=f"write `{min(needed, of)}oo{max(needed, of)}`, as the logic is built",
            at=at,
        )
    elif of != count:
        yield draft(
            interlock.tag,
            f"its voting is {written}, but it has {count} initiator{'' if count == 1 else 's'}",
            remedy=f"write `voting: {min(needed, count)}oo{count}`, or add or strike out initiators",
            at=at,
            related=((interlock.origin.key("initiators"), f"{count} initiator{'' if count == 1 else 's'}"),),
        )
    first: dict[tuple[str, str | Hold | None], Trip] = {}
    for trip in trips:
        transmitter = known(trip.measurement.transmitter) if trip.measurement else None
        if transmitter is None:
            continue
        same = first.setdefault((transmitter, trip.initiator.direction), trip)
        if same is not trip:
            yield draft(
                interlock.tag,
                f"{same.initiator.tag} and {trip.initiator.tag} both vote, but are one transmitter, {transmitter}",
                remedy="strike out one of them and correct the voting, or name the transmitter that is meant",
                at=trip.initiator.origin.key(),
                related=((same.initiator.origin.key(), "the other vote"),),
            )


_VOTING = re.compile(r"([1-9])oo([1-9])")


@rule(level=Level.WARNING, source="common practice; IEC 61511-1:2016, redundant sensors of one function (from memory)")
def interlock_limits_differ(interlock: Interlock, plant: Plant) -> Iterator[Draft]:
    """Redundant initiators of an interlock trip at different limits.

    Why:
        Transmitters of one quantity vote on one fact. With different limits one of them votes late or early, and two
        of three is no longer what was calculated; mostly it is a typing error.
    Breaks:
        Three pressures of one vessel, two of them above 1.2 barg and one above 12 barg.
    Holds:
        The initiators of one interlock that measure one quantity and trip in one direction have one limit, in
        whatever unit.
    What this check cannot see:
        Transmitters at different heights, whose limits differ by the head between them: write so in their service,
        which then is no longer the same up to its first comma.
    """
    groups: dict[tuple[tuple[str, str, str], str | None], list[Trip]] = {}
    for trip in plant.trips_of[interlock.tag]:
        owner, direction = trip.instrument or trip.loop, known(trip.initiator.direction)
        quantity = measured_quantity(owner) if owner else None
        if quantity is not None:
            groups.setdefault((quantity, direction), []).append(trip)
    held = [trips for (_, direction), trips in groups.items() if direction is None]
    alike = [trips for (_, direction), trips in groups.items() if direction is not None and len(trips) > 1]
    only_if(alike or held)
    for first, *others in alike:
        limit = need(first.initiator.limit, "the trip limit")
        scale = scale_in(limit.unit, first.instrument or first.loop)
        for other in others:
            its = need(other.initiator.limit, "the trip limit")
            if equal(reading(its, scale, "the trip limit"), limit.value):
                continue
            direction = known(first.initiator.direction)
            yield draft(
                interlock.tag,
                f"{other.initiator.tag} trips {direction} {scale.told(its)}, {first.initiator.tag}, which measures the "
                f"same, {direction} {limit}",
                remedy="write one limit for both",
                at=other.initiator.origin.place("trips"),
                related=((first.initiator.origin.place("trips"), f"{first.initiator.tag}, {direction} {limit}"),),
            )
    if held:
        need(held[0][0].initiator.limit, "the trip limit")


@rule(
    level=Level.WARNING,
    source="IEC 61511-1:2016, clause 11.3, behaviour on detection of a fault (from memory); common practice: fail to "
    "the trip side",
)
def trip_fault_blind(trip: Trip) -> Iterator[Draft]:
    """The transmitter of a trip fails to the side on which it does not trip.

    Why:
        A trip that its own transmitter's fault disarms is missing from then on, and the plant runs on as if it were
        there.
    Breaks:
        `trips: above 1.6 barg` on a transmitter with `on_fault: reads low`; one that `holds`.
    Holds:
        What trips above a limit reads high on a fault, what trips below a limit reads low.
    What this check cannot see:
        A logic that counts a bad signal as a vote to trip, or that alarms it and allows a limited time for the
        repair: where that is so, say it in a deviation.
    """
    only_if(trip.measurement is not None)
    assert trip.measurement is not None
    direction = need(trip.initiator.direction, "the direction of the trip")
    on_fault = need(trip.measurement.on_fault, "what the transmitter does on a fault")
    if on_fault == "unknown":
        not_checked("what the transmitter does on a fault is unknown")
    towards = "reads high" if direction == "above" else "reads low"
    if on_fault != towards:
        yield draft(
            trip.interlock.tag,
            f"it trips {direction} {known(trip.initiator.limit) or 'a limit'}, but on a fault {trip.initiator.tag} "
            f"{on_fault}: the trip is then blind",
            remedy=f"set the transmitter so that it {towards} on a fault, and write `on_fault: {towards}`",
            at=trip.measurement.origin.place("on_fault"),
            related=((trip.initiator.origin.place("trips"), f"{trip.interlock.tag} trips {direction} its limit"),),
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
