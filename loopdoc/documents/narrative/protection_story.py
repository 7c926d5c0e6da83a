"""Alarms and interlocks in words: what an alarm asks of the operator, what trips an interlock and what it does."""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator, Sequence

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.language.noun import Noun
from loopdoc.documents.narrative import time_to_act_story
from loopdoc.documents.wording import NO_BREAK, grouped, sentences
from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import ALARM_ORDER, Alarm, Bypass, FinalElement, Hold, Initiator, Interlock, Loop, known
from loopdoc.register.quantity import Quantity

ALARM_HEAD = ("Alarm", "Limit", "Priority", "Likely cause", "Consequence", "Operator's response")

_HIGH_FIRST = (*reversed(ALARM_ORDER), "deviation")


def alarm_rows(plant: Plant, loops: Iterable[Loop], language: Language) -> Iterator[tuple[str, ...]]:
    """One row for each alarm, as `ALARM_HEAD` names the columns; the highest limit of a loop first."""
    for loop in loops:
        for kind in sorted(loop.alarms, key=lambda kind: _HIGH_FIRST.index(kind) if kind in _HIGH_FIRST else -1):
            alarm = loop.alarms[kind]
            time = known(alarm.time_to_respond)
            yield (
                language.alarm_heading(loop.tag, kind),
                language.alarm_limit(
                    _value(alarm.limit, language), _value(alarm.deadband, language), _value(alarm.delay, language)
                ),
                _term("priority", alarm.priority, language),
                _value(alarm.cause, language),
                language.alarm_consequence(_value(alarm.consequence, language), _warned(plant, alarm, language)),
                language.alarm_response(_value(alarm.response, language), language.value(time) if time else ""),
            )


def _warned(plant: Plant, alarm: Alarm, language: Language) -> list[tuple[str, Noun, str]]:
    """Hazards of other loops that an alarm tells of."""
    loops = plant.register.loops
    return [
        (tag, language.short_quantity(loops[tag]), side)
        for tag, side in alarm.warns_of.items()
        if tag in loops and side in ("high", "low")
    ]


def _value(written: object, language: Language) -> str:
    return "" if written is None else language.value(written)


def _term(kind: str, written: str | Hold | None, language: Language) -> str:
    return language.term(kind, written) if isinstance(written, str) else _value(written, language)


# ---------------------------------------------------------------- interlocks


def interlock_effects(plant: Plant, tags: Iterable[str], language: Language) -> str:
    """Which interlocks act on these final elements and controllers, in one paragraph; empty where none does."""
    own = set(tags)
    found = ((acts(interlock, own, language), interlock.tag) for interlock in plant.register.interlocks.values())
    told = []
    for what, (first, *others) in grouped(pair for pair in found if pair[0]).items():
        told.append(language.effects(first, what, others))
    return sentences(*told)


def initiated_by(plant: Plant, loops: Iterable[Loop], language: Language) -> str:
    """Which interlocks these loops' transmitters trip, alone or together with others, in one paragraph."""
    own = {loop.tag for loop in loops}
    trips = [trip for trip in plant.trips if trip.loop is not None and trip.loop.tag in own]
    alone = grouped(
        (trip.interlock.tag, _condition(trip.initiator, language)) for trip in trips if _alone(trip.interlock)
    )
    voted = grouped(
        (trip.interlock.tag, _condition(trip.initiator, language, counted=True))
        for trip in trips if not _alone(trip.interlock)
    )  # fmt: skip
    voting = {trip.interlock.tag: language.entry(known(trip.interlock.voting) or "") for trip in trips}
    return sentences(
        *(language.trips_alone(tag, conditions) for tag, conditions in alone.items()),
        *(language.counts(tag, voting[tag], conditions) for tag, conditions in voted.items()),
    )


def _alone(interlock: Interlock) -> bool:
    """Whether one initiator is enough."""
    voting = known(interlock.voting)
    return voting.startswith("1oo") if voting else len(interlock.initiators) == 1


def acts(interlock: Interlock, only: set[str] | None = None, language: Language = ENGLISH) -> str:
    """What an interlock does: `closes FV-2011, stops PM-2001 and puts FIC-2011 in manual at 0 % output`."""
    positions: list[tuple[str, str]] = []
    forced: dict[tuple[str, Quantity | None], list[str]] = {}
    for tag, action in interlock.actions.items():
        if only is not None and tag not in only:
            continue
        position, mode, output = known(action.position), known(action.mode), known(action.output)
        if position:
            positions.append((position, tag))
        elif mode or output:
            forced.setdefault((mode or "", output), []).append(tag)
    return language.acts(
        list(grouped(positions).items()),
        [(mode, language.value(output) if output else "", tags) for (mode, output), tags in forced.items()],
    )


def _condition(initiator: Initiator, language: Language, *, counted: bool = False) -> str:
    side, limit, delay = known(initiator.direction), known(initiator.limit), known(initiator.delay)
    return language.condition(
        initiator.tag, side or "", language.value(limit) if limit else "",
        language.value(delay) if delay and delay.value else "", counted=counted,
    )  # fmt: skip


def trips_when(interlock: Interlock, language: Language) -> str:
    """What trips an interlock, as a clause; empty where no initiator is given."""
    initiators = list(interlock.initiators.values())
    if not initiators:
        return ""
    votes = re.fullmatch(r"([1-9])oo([1-9])", known(interlock.voting) or "")
    needed, of = (int(vote) for vote in votes.groups()) if votes else (0, 0)
    alike = {(one.direction, one.limit, one.delay) for one in initiators}
    first = initiators[0]
    side, limit, delay = known(first.direction), first.limit, known(first.delay)
    if len(initiators) > 1 and len(alike) == 1 and isinstance(limit, Quantity) and side and of in (0, len(initiators)):
        return language.trips_when_alike(
            [one.tag for one in initiators], needed, side, language.value(limit),
            language.value(delay) if delay and delay.value else "",
        )  # fmt: skip
    return language.trips_when([_condition(one, language) for one in initiators], needed, of)


def told(interlock: Interlock, language: Language) -> str:
    """One interlock in sentences: its layer, what trips it, what it does, and why."""
    return language.interlock_told(
        interlock.tag,
        known(interlock.layer) or "",
        trips_when(interlock, language),
        acts(interlock, None, language),
        language.text(known(interlock.cause) or ""),
        language.text(known(interlock.consequence) or ""),
    )


def reset(interlock: Interlock, language: Language = ENGLISH) -> str:
    """Reset, response time against the time that the process gives, proof test, bypass."""
    written = known(interlock.reset)
    found = []
    if written:
        plain = written.split()[0].strip(",") in ("manual", "automatic")
        found.append(language.reset_is(language.text(written), plain=plain))
    found += time_to_act_story.response_told(interlock, language)
    test = known(interlock.proof_test)
    found.append(language.proof_tested(language.value(test)) if test else "")
    found.append(bypass(known(interlock.bypass), language))
    return sentences(*found)


def bypass(written: Bypass | None, language: Language = ENGLISH) -> str:
    """Whether an interlock may be bypassed, by whose leave and for how long; empty where the register says nothing."""
    permitted = known(written.permitted) if written else None
    if written is None or permitted is None:
        return ""
    if written.never:
        return language.no_bypass()
    who, limit = known(written.approved_by), known(written.limit)
    return language.bypass(language.text(permitted), who or "", language.value(limit) if limit else "")


def bare(interlock: Interlock) -> bool:
    """Whether the register gives no more of an interlock than what trips it."""
    return not interlock.actions and interlock.cause is None and known(interlock.reset) is None


BARE_HEAD = ("Interlock", "Service", "Trips when", "Consequence")


def bare_rows(interlocks: Sequence[Interlock], language: Language) -> Iterator[tuple[str, ...]]:
    """One row for each interlock of which only the limits are known."""
    for one in interlocks:
        yield one.tag, known(one.service) or "", trips_when(one, language), _value(one.consequence, language)


# ---------------------------------------------------------------- final elements

ELEMENT_HEAD = (
    "Tag", "Service", "Kind", "Opens on", "Output block", "Signal", "On failure", "Safe position", "Stroke time",
    "Backlash", "Resolution", "Moved by",
)  # fmt: skip


def element_rows(plant: Plant, elements: Iterable[FinalElement], language: Language) -> Iterator[tuple[str, ...]]:
    """One row for each final element, as `ELEMENT_HEAD` names the columns."""
    for element in elements:
        characteristic = known(element.characteristic)
        kind = [_term("element", element.kind, language)]
        if characteristic:
            kind.append(language.term("characteristic", characteristic))
        movers = [*plant.commanders.get(element.tag, ())]
        movers += [one.tag for one in plant.register.interlocks.values() if element.tag in one.actions]
        yield (
            element.tag,
            _value(element.service, language),
            ", ".join(kind),
            _term("opens on", element.opens_on, language),
            _term("output block", element.output_block, language),
            _term("signal", element.signal, language).replace(" ", NO_BREAK),
            _term("position", element.fails, language),
            _term("position", element.safe, language),
            _value(element.stroke_time, language),
            _value(element.backlash, language),
            _value(element.resolution, language),
            language.listed(dict.fromkeys(movers)),
        )
