"""Rules on the design of an alarm: dead band, delay, priority, rationalisation, one alarm for one cause."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.engineering.pairing import LoopAlarm, Plant, normal_value
from loopdoc.engineering.spreading import transmitter_of
from loopdoc.register.model import ALARM_PRIORITIES, Hold, Loop, PlantUnit, known
from loopdoc.register.quantity import Quantity, Range
from loopdoc.register.units import UNITS, same_difference
from loopdoc.rules.finding import Level
from loopdoc.rules.policy import Limits
from loopdoc.rules.rule import Draft, draft, need, not_checked, only_if, rule
from loopdoc.rules.values import above, amount, below, duration, equal, measured_range, range_place, scale_in, time_s

NAMES = {"low_low": "low-low", "low": "low", "high": "high", "high_high": "high-high", "deviation": "deviation"}
SIDES = {"high": ("high", "high_high"), "low": ("low", "low_low")}
"""The alarms that tell of each direction."""
_TYPES = {"differential pressure": "pressure", "temperature difference": "temperature"}
_STATED = ("priority", "cause", "consequence", "response", "time_to_respond")
_NOTHING = (
    "none", "nothing", "no action", "no action required", "no response", "no response required", "information only",
    "for information", "for information only", "n/a", "not applicable", "-",
)  # fmt: skip


# ---------------------------------------------------------------- dead band and delay


@rule(
    level=Level.WARNING,
    source="ANSI/ISA-18.2-2009 (R2016), clause 10, dead bands by type of signal (from memory); the band around them: "
    "common practice",
)
def alarm_deadband(subject: LoopAlarm, limits: Limits) -> Iterator[Draft]:
    """The dead band of an alarm lets it chatter, or lets it stand when the plant is back to normal.

    Why:
        With too small a dead band the noise of the signal raises and clears the alarm many times a minute, and
        the operator learns to ignore it. With too large a one it still stands when its cause is gone, and hides
        the next.
    Breaks:
        On a temperature of 60 to 120 degC a dead band of 0.2 degC, 0.33 % of span where 1 % is usual, with a
        delay of 10 s; one of 3 degC, 5 % of span. A high alarm at 94 degC with 10 degC, which clears at 84 degC
        where 84.5 degC is normal.
    Holds:
        The dead band is at least the share of the policy of what is usual for the variable, or the delay is at
        least the usual one and does its work; it is at most the multiple of the policy; the alarm clears before
        the measurement is back at its normal value. Only the last is asked of variables for which no usual value
        is published, such as an analysis.
    What this check cannot see:
        The noise of the signal, which alone decides. On a range that is much wider than what the plant uses, the
        dead band can do with less of it.
    """
    loop, alarm = subject.loop, subject.alarm
    written = need(alarm.deadband, "the dead band")
    band = measured_range(loop)
    if not same_difference(written.unit, band.unit):
        not_checked("the dead band has a unit of another kind")
    size = abs(written.difference_in(band.unit.symbol))
    late = _clears_too_late(subject, written, size, band)
    if late is not None:
        yield late
        return
    usual = _usual_deadband(loop, limits)
    if usual is None:
        return
    share = 100 * size / band.span
    told = f"its {NAMES[alarm.kind]} alarm has a dead band of {written}, {share:.2g} % of span"
    of_range = (range_place(loop), f"the range, {band}")
    if above(share, limits.alarm_deadband_high * usual):
        yield draft(
            loop.tag,
            f"{told}; for a {_type(loop)} {usual:g} % is usual, and more than {limits.alarm_deadband_high * usual:g} % "
            "keeps the alarm standing long after its cause is gone",
            remedy=f"write about {_rounded(usual * band.span / 100, band)}, or what the noise of the signal asks",
            at=alarm.origin.place("deadband"),
            related=(of_range,),
        )
    if below(share, limits.alarm_deadband_low * usual):
        delay = 0.0 if alarm.delay is None else time_s(need(alarm.delay, "the delay"), "the delay")
        usual_delay = _usual_delay(loop, limits) or 0.0
        if below(delay, usual_delay):
            without = f"a delay of {known(alarm.delay)}" if delay else "no delay"
            yield draft(
                loop.tag,
                f"{told} with {without}; for a {_type(loop)} {usual:g} % and {duration(usual_delay)} are usual, "
                f"and with less than {limits.alarm_deadband_low * usual:g} % the noise alone makes it chatter",
                remedy=f"write about {_rounded(usual * band.span / 100, band)}, or a delay of {duration(usual_delay)} "
                "where the time to respond allows it",
                at=alarm.origin.place("deadband"),
                related=(of_range,),
            )


def _clears_too_late(subject: LoopAlarm, written: Quantity, size: float, band: Range) -> Draft | None:
    """A finding where an alarm beyond the normal value clears only when the measurement is back past that value."""
    loop, alarm = subject.loop, subject.alarm
    limit, normal = known(alarm.limit), normal_value(loop)
    scale = scale_in(band.unit, loop)
    if alarm.kind == "deviation" or limit is None or normal is None:
        return None
    if not scale.takes(limit.unit) or not scale.takes(normal.unit):
        return None
    is_high = alarm.kind in SIDES["high"]
    comes, usual = scale.value(limit), scale.value(normal)
    clears = comes + (-size if is_high else size)
    beyond = above if is_high else below
    if beyond(clears, usual) or not beyond(comes, usual):  # a limit that is not beyond is the fault, not its dead band
        return None
    return draft(
        loop.tag,
        f"its {NAMES[alarm.kind]} alarm at {scale.told(limit)} with a dead band of {written} clears at "
        f"{amount(clears, band.unit)}, but {scale.told(normal)} is normal: it stands while the plant runs as it should",
        remedy=f"write a dead band that clears {'above' if is_high else 'below'} {normal}",
        at=alarm.origin.place("deadband"),
        related=((alarm.origin.place("limit"), f"the limit, {limit}"),),
    )


@rule(
    level=Level.WARNING,
    source="ANSI/ISA-18.2-2009 (R2016), clause 10, delays by type of signal (from memory); the multiple: common "
    "practice",
)
def alarm_delay_long(subject: LoopAlarm, limits: Limits) -> Iterator[Draft]:
    """An alarm waits much longer than alarms on such a signal do.

    Why:
        A delay is there to pass over noise and short swings. One of many times the usual length is taken out of
        the operator's time, and often hides a dead band that is too small or a limit that is too near.
    Breaks:
        A delay of 90 s on a flow, where 15 s are usual and four times that is allowed.
    Holds:
        The delay is at most the multiple of the policy of what is usual for flow, level, pressure or temperature.
        An alarm without a delay holds.
    What this check cannot see:
        A measurement that swings slowly for a known reason, such as a level in waves: say so in a deviation.
    """
    loop, alarm = subject.loop, subject.alarm
    only_if(alarm.delay is not None)
    written = need(alarm.delay, "the delay")
    delay = time_s(written, "the delay")
    usual = _usual_delay(loop, limits)
    only_if(usual is not None)
    assert usual is not None
    allowed = limits.alarm_delay_high * usual
    if above(delay, allowed):
        yield draft(
            loop.tag,
            f"its {NAMES[alarm.kind]} alarm waits {written}; for a {_type(loop)} {duration(usual)} are usual, and "
            f"more than {duration(allowed)} comes late",
            remedy=f"write about {duration(usual)}, and widen the dead band where the alarm then chatters",
            at=alarm.origin.place("delay"),
        )


def _type(loop: Loop) -> str:
    """The variable of a loop; a difference counts as what it is a difference of."""
    measurement = known(loop.measurement)
    variable = (known(measurement.variable) if measurement else None) or ""
    return _TYPES.get(variable, variable)


def _usual_deadband(loop: Loop, limits: Limits) -> float | None:
    """The usual dead band in percent of span; None for a variable without a published one."""
    return {
        "flow": limits.alarm_deadband_flow,
        "level": limits.alarm_deadband_level,
        "pressure": limits.alarm_deadband_pressure,
        "temperature": limits.alarm_deadband_temperature,
    }.get(_type(loop))


def _usual_delay(loop: Loop, limits: Limits) -> float | None:
    """The usual delay in seconds; None for a variable without a published one."""
    return {
        "flow": limits.alarm_delay_flow,
        "level": limits.alarm_delay_level,
        "pressure": limits.alarm_delay_pressure,
        "temperature": limits.alarm_delay_temperature,
    }.get(_type(loop))


def _rounded(size: float, band: Range) -> str:
    """A dead band to write, with two significant digits; that of a pressure is neither gauge nor absolute."""
    unit = band.unit
    if unit.difference_kind == "pressure difference":
        unit = UNITS.get(unit.symbol[:-1], unit)
    return amount(float(f"{size:.2g}"), unit)


# ---------------------------------------------------------------- rationalisation and priority


@rule(
    level=Level.WARNING,
    source="ANSI/ISA-18.2-2016 and IEC 62682:2014, clause 9, rationalization (from memory); HSE Chemicals Sheet No 6 "
    "(CHIS6): every alarm needs a defined response",
)
def alarm_unrationalised(subject: LoopAlarm) -> Iterator[Draft]:
    """An alarm does not say what it is for: priority, cause, consequence, response or time to respond is lacking.

    Why:
        An alarm calls for a response in time. One whose response nobody has written down is met by whoever is on
        shift as he sees fit, and its priority is a guess.
    Breaks:
        No `response`, or `response: none`; no `time_to_respond`.
    Holds:
        All five are given.
    What this check cannot see:
        Whether the response helps, and whether the priority follows from consequence and time by the site's rule.
    """
    loop, alarm = subject.loop, subject.alarm
    lacking = [name for name in _STATED if getattr(alarm, name) is None]
    name = NAMES[alarm.kind]
    if lacking:
        told = [f"no {key.replace('_', ' ')}" for key in lacking]
        yield draft(
            loop.tag,
            f"its {name} alarm states {_listed(told, 'and')}",
            remedy=f"write {_listed([f'`{key}`' for key in lacking], 'and')} as the alarm review decided, or "
            "`{hold: reason}`; what needs no response is no alarm",
            at=alarm.origin,
        )
    response = known(alarm.response)
    if response is not None and response.strip(" .").casefold() in _NOTHING:
        yield draft(
            loop.tag,
            f"its {name} alarm calls the operator, but the response is `{response}`",
            remedy="write what the operator does, or leave the alarm out and show the value",
            at=alarm.origin.place("response"),
        )
    for key in _STATED:
        if key not in lacking:
            need(getattr(alarm, key), f"the {key.replace('_', ' ')}")


def _listed(words: list[str], last: str) -> str:
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} {last} {words[-1]}"


@rule(
    level=Level.WARNING,
    source="ANSI/ISA-18.2-2016, clause 9, priority by consequence and time to respond (from memory)",
)
def alarm_priority_order(loop: Loop) -> Iterator[Draft]:
    """The worse of two alarms on one measurement has the lower priority.

    Why:
        The second alarm leaves less time before a consequence that is no smaller. In a flood the operator works
        from the top of the list, and finds the first alarm there and the second below it.
    Breaks:
        `high: {priority: high}` with `high_high: {priority: medium}`.
    Holds:
        The priority of the high-high (low-low) alarm is that of the high (low) alarm, or above it.
    What this check cannot see:
        Whether either priority is right.
    """
    pairs = [
        (loop.alarms[inner], loop.alarms[outer])
        for inner, outer in SIDES.values()
        if inner in loop.alarms and outer in loop.alarms
    ]
    only_if(pairs)
    for inner, outer in pairs:
        first, second = known(inner.priority), known(outer.priority)
        if first not in ALARM_PRIORITIES or second not in ALARM_PRIORITIES:
            continue
        if ALARM_PRIORITIES.index(second) < ALARM_PRIORITIES.index(first):
            yield draft(
                loop.tag,
                f"its {NAMES[outer.kind]} alarm has {second} priority, its {NAMES[inner.kind]} alarm {first}",
                remedy=f"write `priority: {first}` or above for the {NAMES[outer.kind]} alarm, or lower the "
                f"priority of the {NAMES[inner.kind]} alarm",
                at=outer.origin.place("priority"),
                related=((inner.origin.place("priority"), f"the {NAMES[inner.kind]} alarm, {first} priority"),),
            )
    for alarm in (alarm for pair in pairs for alarm in pair):
        need(alarm.priority, f"the priority of the {NAMES[alarm.kind]} alarm")


@rule(
    level=Level.WARNING,
    source="ANSI/ISA-18.2-2016, clause 16, Table 6: about 80 % low, 15 % medium, 5 % high; EEMUA 191 gives the same as "
    "configured (from memory)",
)
def alarm_priority_mix(unit: PlantUnit, plant: Plant, limits: Limits) -> Iterator[Draft]:
    """Too many alarms of one unit have a raised priority for the priority to tell them apart.

    Why:
        Priority is the operator's only guide when many alarms come at once. Where a third of them are urgent, none
        is.
    Breaks:
        Of 20 alarms 3 of high or critical priority (15 %), or 9 above low (45 %).
    Holds:
        The share of high and critical alarms, and that of all above low, are at most those of the policy: twice
        what the standard calls about right. Units with fewer alarms than the policy's number are left out.
    What this check cannot see:
        How often each alarm comes. The standard counts annunciated alarms; this counts configured ones.
    """
    alarms = plant.alarms_of_unit.get(unit.number, ())
    only_if(alarms and not below(len(alarms), limits.alarm_mix_count))
    given = [entry for entry in alarms if known(entry.alarm.priority) in ALARM_PRIORITIES]
    if below(len(given), limits.alarm_mix_count):
        not_checked("the priorities of its alarms are not given")
    for which, ranks, allowed in (
        ("high or critical", ALARM_PRIORITIES[2:], limits.alarm_share_high),
        ("medium, high or critical", ALARM_PRIORITIES[1:], limits.alarm_share_raised),
    ):
        raised = [entry for entry in given if known(entry.alarm.priority) in ranks]
        share = 100 * len(raised) / len(given)
        if above(share, allowed):
            yield draft(
                unit.number,
                f"{len(raised)} of the {len(given)} alarms of this unit ({share:.0f} %) have {which} priority; "
                f"more than {allowed:g} % is too many",
                remedy="let the alarm review lower those with the smaller consequence or the longer time to respond",
                at=unit.origin,
                related=tuple(
                    (
                        entry.alarm.origin.place("priority"),
                        f"{entry.loop.tag}, {NAMES[entry.alarm.kind]} alarm, {known(entry.alarm.priority)} priority",
                    )
                    for entry in raised
                ),
            )
            return  # one finding a unit: what lowers the first share lowers the second


# ---------------------------------------------------------------- one alarm for one cause, and none missing


@rule(
    level=Level.WARNING,
    source="common practice; ANSI/ISA-18.2-2016, clause 8, identification from the hazard study (from memory)",
)
def alarm_missing_for_hazard(loop: Loop, plant: Plant) -> Iterator[Draft]:
    """A direction of a measurement is declared a hazard, and no alarm tells of it.

    Why:
        The hazard study found that this direction hurts. Without an alarm the operator learns of it from the trip,
        or from the hazard itself.
    Breaks:
        `hazard: high` with a low alarm only; `hazard: both` with one of the two.
    Holds:
        A high or high-high alarm for a hazard of high, a low or low-low alarm for one of low, on this loop or on
        another that measures the same quantity; or an alarm on another quantity that says so (`warns_of: {AIC-2015:
        high}`). A deviation alarm moves with the setpoint and does not count.
    What this check cannot see:
        Whether an alarm on another quantity that is said to warn of the hazard comes in time.
    """
    hazard = need(loop.hazard, "the hazard")
    only_if(hazard != "none")
    watching = plant.loops_watching(loop) or (loop,)
    lacking = [
        side
        for side in (SIDES if hazard == "both" else (hazard,))
        if not any(kind in one.alarms for one in watching for kind in SIDES.get(side, ()))
        and (loop.tag, side) not in plant.warning_of
    ]
    if lacking and any(alarms_held(one, plant) for one in watching):
        not_checked("the alarms are on hold")
    for side in lacking:
        yield draft(
            loop.tag,
            f"a {side} value is a hazard, but no {side} alarm tells of it",
            remedy=f"write a `{side}` alarm with its response, or `warns_of: {{{loop.tag}: {side}}}` at the alarm that "
            "tells of it",
            at=loop.origin.place("hazard"),
        )


def alarms_held(loop: Loop, plant: Plant) -> bool:
    """Whether alarms of a loop are on hold as a whole, so that it is not known which there will be."""
    return any(path[:1] == ("alarms",) and len(path) <= 2 for path in plant.register.held.get(loop.tag, ()))


@rule(
    level=Level.WARNING,
    source="ANSI/ISA-18.2-2016, clause 9: redundant alarms are left out in rationalization (from memory)",
)
def alarm_duplicate(subject: LoopAlarm, plant: Plant) -> Iterator[Draft]:
    """Two alarms tell of one cause.

    Why:
        Each needs the same response, so the second tells nothing new, must be acknowledged as well, and in an
        upset takes the place of an alarm that would tell something.
    Breaks:
        High alarms of two loops that measure with one transmitter. High alarms at 75 % of two transmitters of one
        level.
    Holds:
        Alarms of one kind stand once on each transmitter. A second transmitter of the same quantity alarms at
        another limit, so that its alarm tells that the first transmitter, or the first response, has failed.
    What this check cannot see:
        Alarms on two quantities that always come together, such as a tripped pump and its low flow.
    """
    loop, alarm = subject.loop, subject.alarm
    only_if(alarm.kind != "deviation")
    others = [one for one in plant.loops_watching(loop) if one is not loop and alarm.kind in one.alarms]
    only_if(others)
    limit = known(alarm.limit)
    for other in others:
        if _comes_later(other, loop, plant):
            continue
        twin = other.alarms[alarm.kind]
        its_limit = known(twin.limit)
        shares = transmitter_of(other) is not None and transmitter_of(other) == transmitter_of(loop)
        at_its = f" at {its_limit}" if its_limit else ""
        if shares:
            fault = f"and that of {other.tag}{at_its} stand on one transmitter, {transmitter_of(loop)}"
        elif limit is not None and its_limit is not None and _same(limit, its_limit, loop):
            fault = f"has the limit of that of {other.tag}, which measures the same with another transmitter"
        else:
            continue
        yield draft(
            loop.tag,
            f"its {NAMES[alarm.kind]} alarm{f' at {limit}' if limit else ''} {fault}: one cause sounds twice",
            remedy="leave one of the two out, or set the second to a limit that asks for another response",
            at=alarm.origin.place("limit"),
            related=((twin.origin.place("limit"), f"the {NAMES[alarm.kind]} alarm of {other.tag}{at_its}"),),
        )
    if isinstance(alarm.limit, Hold):
        need(alarm.limit, "the alarm limit")


def _comes_later(other: Loop, loop: Loop, plant: Plant) -> bool:
    """Whether another loop stands behind a loop in the register, so that the pair is told there."""
    return plant.position[other.tag] > plant.position[loop.tag]


def _same(limit: Quantity, other: Quantity, loop: Loop) -> bool:
    scale = scale_in(limit.unit, loop)
    return scale.takes(other.unit) and equal(scale.value(other), limit.value)
