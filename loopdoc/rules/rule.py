"""The rule machinery: a rule is one small function; its docstring and decorator are its documentation."""

from __future__ import annotations

import inspect
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any, NoReturn, TypeVar, get_type_hints

from loopdoc.engineering.pairing import CascadeLink, ControlledLoop, LoopAlarm, Plant, Trip
from loopdoc.register.model import FinalElement, Function, Hold, Interlock, Loop, Origin
from loopdoc.register.place import Place
from loopdoc.rules.finding import Level, Related
from loopdoc.rules.policy import Limits

T = TypeVar("T")

HEADINGS = ("Why", "Breaks", "Holds", "What this check cannot see")


@dataclass(frozen=True, slots=True)
class Draft:
    """What a rule function yields: a finding before its rule's name and level are set on it."""

    tag: str
    message: str
    remedy: str
    place: Place
    related: tuple[Related, ...]


class NotChecked(Exception):
    """A rule lacks a value that it needs; the check counts it and says why."""


class NotApplicable(Exception):
    """A rule has nothing to say about this subject; it is neither checked nor not checked."""


def draft(
    tag: str, message: str, *, remedy: str, at: Place | Origin, related: tuple[tuple[Place | Origin, str], ...] = ()
) -> Draft:
    """A finding about ``tag``; ``related`` are further places, each with what stands there."""
    return Draft(tag, message, remedy, _place(at), tuple(Related(_place(where), what) for where, what in related))


def _place(where: Place | Origin) -> Place:
    return where.key() if isinstance(where, Origin) else where


def need(value: T | Hold | None, what: str) -> T:
    """The value; where it is held or not given, the rule counts as not checked for this subject."""
    if value is None:
        raise NotChecked(f"{what} is not given")
    if isinstance(value, Hold):
        raise NotChecked(f"{what} is on hold" if value.readable else f"{what} could not be read")
    return value


def not_checked(reason: str) -> NoReturn:
    """The rule cannot be checked for this subject, for a reason other than one missing value."""
    raise NotChecked(reason)


def only_if(condition: object) -> None:
    """The rule applies only where the condition holds."""
    if not condition:
        raise NotApplicable


@dataclass(frozen=True, slots=True)
class Rule:
    """A rule with all that is said about it anywhere."""

    id: str
    level: Level
    statement: str
    """One sentence that states the fault."""
    sections: dict[str, str]
    """The text under each of `HEADINGS`."""
    source: str
    since: str
    subject: type
    """What the rule visits, from the type of its first parameter."""
    function: Callable[[Any, Limits], Iterator[Draft]]


def rule(*, level: Level, source: str, since: str = "0.1") -> Callable[[Callable[..., Iterator[Draft]]], Rule]:
    """Make a rule of a function ``(subject, limits) -> Iterator[Draft]``.

    The id is the function's name in kebab case; the subject is the type of the first parameter; the
    docstring's first paragraph states the fault and its sections explain it.
    """

    def make(function: Callable[..., Iterator[Draft]]) -> Rule:
        name = function.__name__
        lines = inspect.cleandoc(function.__doc__ or "").split("\n")
        statement, sections = _docstring(lines, name)
        first = next(iter(inspect.signature(function).parameters))
        subject = get_type_hints(function)[first]
        if subject not in SUBJECTS:
            raise TypeError(f"{name}: no rule can visit a {subject}")
        return Rule(name.replace("_", "-"), level, statement, sections, source, since, subject, function)

    return make


def _docstring(lines: list[str], name: str) -> tuple[str, dict[str, str]]:
    statement: list[str] = []
    sections: dict[str, list[str]] = {}
    current = statement
    for line in lines:
        heading = line.removesuffix(":")
        if line.endswith(":") and heading in HEADINGS:
            current = sections.setdefault(heading, [])
        else:
            current.append(line.strip())
    if tuple(sections) != HEADINGS:
        raise TypeError(f"{name}: the docstring needs the headings {', '.join(HEADINGS)}, in this order")
    joined = {heading: " ".join(part for part in text if part) for heading, text in sections.items()}
    return " ".join(part for part in statement if part), joined


SUBJECTS: dict[type, Callable[[Plant], tuple[Any, ...]]] = {
    Plant: lambda plant: (plant,),
    Loop: lambda plant: tuple(plant.register.loops.values()),
    ControlledLoop: lambda plant: tuple(plant.controlled.values()),
    CascadeLink: lambda plant: plant.links,
    LoopAlarm: lambda plant: plant.alarms,
    FinalElement: lambda plant: tuple(plant.register.final_elements.values()),
    Function: lambda plant: tuple(plant.register.functions.values()),
    Interlock: lambda plant: tuple(plant.register.interlocks.values()),
    Trip: lambda plant: plant.trips,
}
"""What a rule may visit, and how it is found in a plant."""


def tag_of(subject: Any) -> str:
    """The tag under which a check that was not made is listed."""
    match subject:
        case Plant():
            return "register"
        case CascadeLink():
            return f"{subject.primary.tag} to {subject.secondary.tag}"
        case LoopAlarm():
            return f"{subject.loop.tag} {subject.alarm.kind.replace('_', '-')} alarm"
        case Trip():
            return f"{subject.interlock.tag} {subject.initiator.tag}"
        case _:
            return str(subject.tag)
