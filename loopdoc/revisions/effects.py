"""What a change of the register does to the plant: findings, margins, failure effects, times to act."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Protocol

from loopdoc.engineering.direction import Undecided
from loopdoc.engineering.dynamics import Dynamics
from loopdoc.engineering.failure import FailureAnalysis, FailureEffect
from loopdoc.engineering.failure_gathering import failures_once
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.spreading import ElementMove
from loopdoc.engineering.time_to_act import TimeToAct
from loopdoc.register.quantity import display_number
from loopdoc.revisions.renaming import with_new_tags
from loopdoc.rules.baseline import identities
from loopdoc.rules.finding import CheckResult, Finding
from loopdoc.rules.values import duration

DIGITS = 3
"""Figures that agree to so many digits are told as the same."""


class Worked(Protocol):
    """A register resolved, checked and ready to be calculated with."""

    @property
    def plant(self) -> Plant: ...
    @property
    def result(self) -> CheckResult: ...
    @property
    def dynamics(self) -> Dynamics: ...
    @property
    def times(self) -> TimeToAct: ...


@dataclass(frozen=True, slots=True)
class FindingChange:
    """A finding that only one side has, or that stands otherwise than it did."""

    what: str
    """appears, vanishes, now accepted, no longer accepted, now an error (or another level)."""
    finding: Finding
    """As it is now; as it was where it vanishes."""

    @property
    def appears(self) -> bool:
        return self.what != "vanishes" and not self.finding.accepted_by


@dataclass(frozen=True, slots=True)
class LoopMargins:
    """Margins of a loop in its worst chain."""

    stable: bool
    gain_margin: float
    phase_margin_deg: float
    max_sensitivity: float
    crossover_rad_per_s: float
    speed_ratio: float
    """Crossover of the secondary per crossover of the loop; nan for a single loop."""
    reason: str = ""
    """Why nothing is known; the figures are then nan."""

    @property
    def figures(self) -> tuple[str, ...]:
        """To the digits that are told."""
        numbers = (self.gain_margin, self.phase_margin_deg, self.max_sensitivity, self.crossover_rad_per_s,
                   self.speed_ratio)  # fmt: skip
        return tuple("–" if math.isnan(one) else display_number(one, DIGITS) for one in numbers)


_NO_MARGINS = LoopMargins(False, *(math.nan,) * 5)


@dataclass(frozen=True, slots=True)
class MarginChange:
    """Margins of a loop before and after."""

    tag: str
    before: LoopMargins
    after: LoopMargins


@dataclass(frozen=True, slots=True)
class FailureChange:
    """What differs in the effect of one failure before and after, in words; empty where there is no effect."""

    tag: str
    failure: str
    before: str
    after: str
    worse: bool
    """Whether a measurement now goes to its hazard, or loses what stood against it, which it did not."""


@dataclass(frozen=True, slots=True)
class TimeChange:
    """The shortest time from an alarm to a trip before and after [s]."""

    tag: str
    alarm: str
    interlock: str
    before_s: float
    """Infinite where no upset reaches the trip, nan where it was not calculated."""
    after_s: float

    @property
    def told(self) -> tuple[str, str]:
        """Both in words."""
        return _time(self.before_s), _time(self.after_s)


@dataclass(frozen=True, slots=True)
class Effects:
    """All that a change does to the plant."""

    findings: tuple[FindingChange, ...]
    margins: tuple[MarginChange, ...]
    failures: tuple[FailureChange, ...]
    times: tuple[TimeChange, ...]


def effects_between(old: Worked, new: Worked, new_names: Mapping[str, str]) -> Effects:
    """What the change from one register to another does; ``new_names`` gives the new name of each renamed tag."""
    return Effects(
        tuple(_findings(old.result, new.result, new_names)),
        tuple(_margins(old, new, new_names)),
        tuple(_failures(old.plant, new.plant, new_names)),
        tuple(_times(old.times, new.times, new_names)),
    )


# ---------------------------------------------------------------- findings


def _findings(old: CheckResult, new: CheckResult, names: Mapping[str, str]) -> Iterator[FindingChange]:
    def all_of(result: CheckResult, named: Callable[[Finding], Finding]) -> dict[tuple[str, str, str, int], Finding]:
        original = {named(finding): finding for finding in (*result.findings, *result.accepted)}
        return {identity: original[finding] for finding, identity in identities(original).items()}

    def with_new_name(finding: Finding) -> Finding:
        return replace(
            finding,
            tag=names.get(finding.tag, finding.tag),
            path="/".join(names.get(step, step) for step in finding.path.split("/")),
        )

    before, after = all_of(old, with_new_name), all_of(new, lambda finding: finding)
    for identity, finding in after.items():
        earlier = before.get(identity)
        if earlier is None:
            yield FindingChange("appears", finding)
        elif earlier.level is not finding.level:
            yield FindingChange(f"{earlier.level} becomes {finding.level}", finding)
        elif bool(earlier.accepted_by) is not bool(finding.accepted_by):
            yield FindingChange("now accepted" if finding.accepted_by else "no longer accepted", finding)
    yield from (FindingChange("vanishes", one) for identity, one in before.items() if identity not in after)


# ---------------------------------------------------------------- margins


def _margins(old: Worked, new: Worked, names: Mapping[str, str]) -> Iterator[MarginChange]:
    earlier = {names.get(tag, tag): tag for tag in old.plant.controlled}
    for tag in new.plant.controlled:
        before = _margins_of(old.dynamics, earlier[tag]) if tag in earlier else _NO_MARGINS
        after = _margins_of(new.dynamics, tag)
        if (before.stable, before.figures) != (after.stable, after.figures):
            yield MarginChange(tag, before, after)


def _margins_of(dynamics: Dynamics, tag: str) -> LoopMargins:
    found = dynamics.loop(tag)
    worst = found.worst
    if worst is None:
        return replace(_NO_MARGINS, reason=found.reason)
    margins, ratio = worst.margins[-1], worst.speed_ratio
    return LoopMargins(
        margins.stable, margins.gain_margin, margins.phase_margin_deg, margins.max_sensitivity,
        margins.crossover_rad_per_s, math.nan if ratio is None else ratio,
    )  # fmt: skip


# ---------------------------------------------------------------- failure effects


def _failures(old: Plant, new: Plant, names: Mapping[str, str]) -> Iterator[FailureChange]:
    """Each failure once, at the loop nearest to it; those of loops that are new or gone are told with the loop."""
    before, after = _by_failure(old, names), _by_failure(new, {})
    kept = {names.get(tag, tag) for tag in old.register.loops} & set(new.register.loops)
    for key in dict.fromkeys((*after, *before)):
        tag, failure = key
        was, now = before.get(key, _NO_EFFECT), after.get(key, _NO_EFFECT)
        if tag in kept and set(was.parts) != set(now.parts):
            yield FailureChange(tag, failure, _own(was, now), _own(now, was), bool(now.bare - was.bare))


@dataclass(frozen=True, slots=True)
class _Effect:
    """What one failure does."""

    parts: tuple[str, ...]
    """In words, one for each thing that moves."""
    bare: frozenset[str]
    """The measurements that it drives to their hazard with nothing against it."""


_NO_EFFECT = _Effect((), frozenset())


def _own(one: _Effect, other: _Effect) -> str:
    """What an effect has and the other has not; empty where it is no effect at all."""
    if not one.parts:
        return ""
    return "; ".join(part for part in one.parts if part not in other.parts) or "not so"


def _by_failure(plant: Plant, names: Mapping[str, str]) -> dict[tuple[str, str], _Effect]:
    """The effect of each failure by the loop nearest to it and the failure in words."""
    found: dict[tuple[str, str], _Effect] = {}
    for effect in failures_once(FailureAnalysis(plant), tuple(plant.register.loops.values())):
        moved = () if effect.seen else effect.at or tuple(move.element.tag for move in effect.elements)
        failure = ", ".join((str(effect.failure), *moved))
        bare = {one.loop.tag for one in effect.consequences if one.hazardous and not one.alarms and not one.trips}
        key = names.get(effect.loop.tag, effect.loop.tag), with_new_tags(failure, names)
        found[key] = _Effect(
            tuple(with_new_tags(part, names) for part in _told(effect)),
            frozenset(names.get(tag, tag) for tag in bare),
        )
    return found


def _told(effect: FailureEffect) -> Sequence[str]:
    parts = []
    if effect.mode:
        parts.append(f"controller to {effect.mode}{f', output {effect.forced_output}' if effect.forced_output else ''}")
    parts += [f"sets off {trip.interlock.tag}" for trip in effect.initiated]
    parts += [_moved(move) for move in effect.elements]
    for one in effect.consequences:
        hazard = " to its hazard" if one.hazardous else ""
        against = [f"{found.loop.tag} {found.alarm.kind.replace('_', '-')} alarm" for found in one.alarms]
        against += [trip.interlock.tag for trip in one.trips]
        stands = f" (against it: {', '.join(dict.fromkeys(against))})" if against else " (nothing stands against it)"
        way = f"{one.loop.tag} {_way(one.direction, _VALUE)}{hazard}"
        parts.append(f"{way}{stands}" if one.hazardous or against else way)
    return parts


_VALUE = {1: "rises", -1: "falls", 0: "is left to itself"}
_OPENING = {1: "opens", -1: "closes", 0: "stays"}


def _moved(move: ElementMove) -> str:
    if move.instead:
        return f"{move.element.tag} stays with {' or '.join(move.instead)}"
    return f"{move.element.tag} {move.position or _way(move.direction, _OPENING)}"


def _way(direction: int | Undecided, words: Mapping[int, str]) -> str:
    return "not decided" if isinstance(direction, Undecided) else words[direction]


# ---------------------------------------------------------------- times to act


def _times(old: TimeToAct, new: TimeToAct, names: Mapping[str, str]) -> Iterator[TimeChange]:
    before, after = _shortest(old, names), _shortest(new, {})
    for key in dict.fromkeys((*after, *before)):
        times = before.get(key, math.nan), after.get(key, math.nan)
        change = TimeChange(*key, *times)
        if change.told[0] != change.told[1]:
            yield change


def _shortest(times: TimeToAct, names: Mapping[str, str]) -> dict[tuple[str, str, str], float]:
    found = {}
    for entry in times.all:
        shortest = entry.shortest
        key = tuple(names.get(tag, tag) for tag in (entry.loop.tag, entry.alarm.kind, entry.interlock.tag))
        decided = math.inf if entry.times else math.nan
        found[key[0], key[1], key[2]] = shortest.available_s if shortest else decided
    return found


def _time(time_s: float) -> str:
    if math.isnan(time_s):
        return "none known"
    return "the trip is not reached" if math.isinf(time_s) else duration(time_s)
