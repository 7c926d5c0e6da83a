"""Alarms and interlocks in words: what an alarm asks of the operator, what trips an interlock and what it does."""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator, Sequence

from loopdoc.documents import time_to_act_story
from loopdoc.documents.wording import NO_BREAK, clause, grouped, listed, number_word, sentences, value
from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import ALARM_ORDER, Alarm, Bypass, FinalElement, Initiator, Interlock, Loop, known
from loopdoc.register.quantity import Quantity

ALARM_HEAD = ("Alarm", "Limit", "Priority", "Likely cause", "Consequence", "Operator's response")

_HIGH_FIRST = (*reversed(ALARM_ORDER), "deviation")
_DOES = {"closed": "closes", "open": "opens", "stopped": "stops", "started": "starts"}


def alarm_rows(loops: Iterable[Loop]) -> Iterator[tuple[str, ...]]:
    """One row for each alarm, as `ALARM_HEAD` names the columns; the highest limit of a loop first."""
    for loop in loops:
        for kind in sorted(loop.alarms, key=lambda kind: _HIGH_FIRST.index(kind) if kind in _HIGH_FIRST else -1):
            alarm = loop.alarms[kind]
            yield (
                f"{loop.tag} {kind.replace('_', '-')}",
                _limit(alarm),
                _text(alarm.priority),
                _text(alarm.cause),
                _text(alarm.consequence),
                _response(alarm),
            )


def _limit(alarm: Alarm) -> str:
    parts = [_text(alarm.limit)]
    if alarm.deadband is not None:
        parts.append(f"deadband {_text(alarm.deadband)}")
    if alarm.delay is not None:
        parts.append(f"after {_text(alarm.delay)}")
    return ", ".join(part for part in parts if part)


def _response(alarm: Alarm) -> str:
    time = known(alarm.time_to_respond)
    return sentences(_text(alarm.response), f"within {value(time)}" if time else "")


def _text(written: object) -> str:
    return "" if written is None else value(written)


# ---------------------------------------------------------------- interlocks


def interlock_effects(plant: Plant, tags: Iterable[str]) -> str:
    """Which interlocks act on these final elements and controllers, in one paragraph; empty where none does."""
    own = set(tags)
    found = ((acts(interlock, own), interlock.tag) for interlock in plant.register.interlocks.values())
    told = []
    for what, (first, *others) in grouped(pair for pair in found if pair[0]).items():
        also = f"; so {'does' if len(others) == 1 else 'do'} {listed(others)}" if others else ""
        told.append(f"{first} {what}{also}")
    return sentences(*told)


def initiated_by(plant: Plant, loops: Iterable[Loop]) -> str:
    """Which interlocks these loops' transmitters trip, alone or together with others, in one paragraph."""
    own = {loop.tag for loop in loops}
    trips = [trip for trip in plant.trips if trip.loop is not None and trip.loop.tag in own]
    alone = grouped((trip.interlock.tag, _condition(trip.initiator)) for trip in trips if _alone(trip.interlock))
    voted = grouped(
        (f"{trip.interlock.tag} ({known(trip.interlock.voting) or 'voting not given'})",
         _condition(trip.initiator, verb=""))
        for trip in trips if not _alone(trip.interlock)
    )  # fmt: skip
    return sentences(
        *(f"{tag} trips when {listed(conditions, 'or')}" for tag, conditions in alone.items()),
        *(f"{tag} counts {listed(conditions)} among its conditions" for tag, conditions in voted.items()),
    )


def _alone(interlock: Interlock) -> bool:
    """Whether one initiator is enough."""
    voting = known(interlock.voting)
    return voting.startswith("1oo") if voting else len(interlock.initiators) == 1


def acts(interlock: Interlock, only: set[str] | None = None) -> str:
    """What an interlock does: `closes FV-2011, stops PM-2001 and puts FIC-2011 in manual at 0 % output`."""
    positions: list[tuple[str, str]] = []
    forced: list[tuple[str, str]] = []
    for tag, action in interlock.actions.items():
        if only is not None and tag not in only:
            continue
        position, mode, output = known(action.position), known(action.mode), known(action.output)
        if position:
            positions.append((_DOES.get(position, f"brings to {position}"), tag))
        elif mode or output:
            at = f" at {value(output)} output" if output else ""
            forced.append((f"in {mode}{at}" if mode else f"to {value(output)} output", tag))
    told = [f"{verb} {listed(tags)}" for verb, tags in grouped(positions).items()]
    told.extend(f"puts {listed(tags)} {how}" for how, tags in grouped(forced).items())
    return listed(told)


def _condition(initiator: Initiator, *, verb: str = "stands ") -> str:
    side, limit, delay = known(initiator.direction), known(initiator.limit), known(initiator.delay)
    if not side or not limit:
        return f"{initiator.tag} passes its limit, which is on hold"
    lasting = f" for {value(delay)}" if delay and delay.value else ""
    return f"{initiator.tag} {verb}{side} {value(limit)}{lasting}"


def trips_when(interlock: Interlock) -> str:
    """What trips an interlock, as a clause; empty where no initiator is given."""
    initiators = list(interlock.initiators.values())
    if not initiators:
        return ""
    votes = re.fullmatch(r"([1-9])oo([1-9])", known(interlock.voting) or "")
    needed, of = votes.groups() if votes else ("", "")
    alike = {(one.direction, one.limit, one.delay) for one in initiators}
    several = len(initiators) > 1
    if several and len(alike) == 1 and isinstance(initiators[0].limit, Quantity):
        names = listed(one.tag for one in initiators)
        rest = _condition(initiators[0]).partition(" stands ")[2]
        if not needed:
            return f"{names} stand {rest}; the voting is not given"
        if needed == of:
            return f"all of {names} stand {rest}"
        if needed == "1":
            return f"any of {names} stands {rest}"
        return f"{number_word(int(needed))} of {names} stand {rest}"
    conditions = [_condition(one) for one in initiators]
    if not several or needed == "1":
        return listed(conditions, "or")
    if needed and needed == of:
        return listed(conditions, "and")
    if needed:
        return f"{number_word(int(needed))} of these hold: {listed(conditions)}"
    return f"{listed(conditions, 'or')}; the voting is not given"


def told(interlock: Interlock) -> str:
    """One interlock in sentences: its layer, what trips it, what it does, and why."""
    layer, when, does = known(interlock.layer), trips_when(interlock), acts(interlock)
    who = "it" if layer else interlock.tag
    trips = f"{who} trips when {when}" if when else ""
    if trips and does:
        trips = f"{trips}. It then {does}" if ";" in trips or ":" in trips else f"{trips}, and then {does}"
    elif does:
        trips = f"{who} {does}"
    belongs = f"{interlock.tag} belongs to the {layer} layer" if layer else ""
    cause, consequence = known(interlock.cause), known(interlock.consequence)
    without = f"{'Without it, ' if does else 'Consequence: '}{clause(consequence)}" if consequence else ""
    return sentences(belongs, *trips.split(". "), f"Likely cause: {clause(cause)}" if cause else "", without)


def reset(interlock: Interlock) -> str:
    """Reset, response time against the time that the process gives, proof test, bypass."""
    written = known(interlock.reset)
    found = []
    if written:
        plain = written.split()[0].strip(",") in ("manual", "automatic")
        found.append(f"reset is {written}" if plain else f"reset: {written}")
    found += time_to_act_story.response_told(interlock)
    test = known(interlock.proof_test)
    found.append(f"it is proof-tested every {value(test)}" if test else "")
    found.append(bypass(known(interlock.bypass)))
    return sentences(*found)


def bypass(written: Bypass | None) -> str:
    """Whether an interlock may be bypassed, by whose leave and for how long; empty where the register says nothing."""
    permitted = known(written.permitted) if written else None
    if written is None or permitted is None:
        return ""
    if written.never:
        return "no bypass is permitted"
    who, limit = known(written.approved_by), known(written.limit)
    told = f"a bypass is permitted {clause(permitted)}"
    told += f", for {value(limit)} at most" if limit else ", without a limit in time"
    return f"{told} (permitted by: {who})" if who else told


def bare(interlock: Interlock) -> bool:
    """Whether the register gives no more of an interlock than what trips it."""
    return not interlock.actions and interlock.cause is None and known(interlock.reset) is None


BARE_HEAD = ("Interlock", "Service", "Trips when", "Consequence")


def bare_rows(interlocks: Sequence[Interlock]) -> Iterator[tuple[str, ...]]:
    """One row for each interlock of which only the limits are known."""
    for interlock in interlocks:
        yield interlock.tag, known(interlock.service) or "", trips_when(interlock), _text(interlock.consequence)


# ---------------------------------------------------------------- final elements

ELEMENT_HEAD = (
    "Tag", "Service", "Kind", "Opens on", "Output block", "Signal", "On failure", "Safe position", "Stroke time",
    "Backlash", "Resolution", "Moved by",
)  # fmt: skip


def element_rows(plant: Plant, elements: Iterable[FinalElement]) -> Iterator[tuple[str, ...]]:
    """One row for each final element, as `ELEMENT_HEAD` names the columns."""
    for element in elements:
        kind, characteristic = _text(element.kind), known(element.characteristic)
        movers = [*plant.commanders.get(element.tag, ())]
        movers += [one.tag for one in plant.register.interlocks.values() if element.tag in one.actions]
        yield (
            element.tag,
            _text(element.service),
            f"{kind}, {characteristic}" if characteristic else kind,
            _text(element.opens_on),
            _text(element.output_block),
            _text(element.signal).replace(" ", NO_BREAK),
            _text(element.fails),
            _text(element.safe),
            _text(element.stroke_time),
            _text(element.backlash),
            _text(element.resolution),
            listed(dict.fromkeys(movers)),
        )
