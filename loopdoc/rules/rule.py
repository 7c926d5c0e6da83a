"""The rule machinery: a rule is one small function; its docstring and decorator are its documentation."""

from __future__ import annotations

import inspect
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from types import UnionType
from typing import Any, NoReturn, TypeVar, get_args, get_origin, get_type_hints

from loopdoc.register.model import Hold, Origin
from loopdoc.register.place import Place
from loopdoc.rules.finding import Alike, Level, Related
from loopdoc.rules.subjects import BESIDES, SUBJECTS, Scope

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
    level: Level | None = None
    """Where this one is worse, or less, than the rule as a whole."""
    alike: Alike | None = None
    """Where many of the rule's findings may be told together."""


class NotChecked(Exception):
    """A rule lacks a value that it needs; the check counts it and says why.

    What the rule has found before stands: a rule over several values judges the known ones first.
    """


class NotApplicable(Exception):
    """A rule has nothing to say about this subject; it is neither checked nor not checked."""


def draft(
    tag: str,
    message: str,
    *,
    remedy: str,
    at: Place | Origin,
    related: tuple[tuple[Place | Origin, str], ...] = (),
    level: Level | None = None,
    alike: Alike | None = None,
) -> Draft:
    """A finding about ``tag``; ``related`` are further places, each with what stands there."""
    others = tuple(Related(_place(where), what) for where, what in related)
    return Draft(tag, message, remedy, _place(at), others, level, alike)


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
    subjects: tuple[type, ...]
    """What the rule visits, from the type of its first parameter."""
    besides: tuple[type, ...]
    """What else the rule asks for, from the types of its further parameters."""
    function: Callable[..., Iterator[Draft]]

    def visits(self, scope: Scope) -> Iterator[Any]:
        """Every subject of one check that the rule looks at."""
        for subject in self.subjects:
            yield from SUBJECTS[subject](scope)

    def asks(self, scope: Scope) -> tuple[Any, ...]:
        """What the rule asks for besides its subject."""
        return tuple(BESIDES[kind](scope) for kind in self.besides)


def rule(*, level: Level, source: str, since: str = "0.1") -> Callable[[Callable[..., Iterator[Draft]]], Rule]:
    """Make a rule of a function ``(subject, ...) -> Iterator[Draft]``.

    The id is the function's name in kebab case; the subject is the type of the first parameter (of each
    member of a union), and further parameters get what their type names; the docstring's first paragraph
    states the fault and its sections explain it.
    """

    def make(function: Callable[..., Iterator[Draft]]) -> Rule:
        name = function.__name__
        lines = inspect.cleandoc(function.__doc__ or "").split("\n")
        statement, sections = _docstring(lines, name)
        hints = get_type_hints(function)
        first, *further = (hints[parameter] for parameter in inspect.signature(function).parameters)
        subjects = get_args(first) if get_origin(first) is UnionType else (first,)
        for kind, known in (*((kind, SUBJECTS) for kind in subjects), *((kind, BESIDES) for kind in further)):
            if kind not in known:
                raise TypeError(f"{name}: no rule can ask for a {kind}")
        return Rule(
            name.replace("_", "-"), level, statement, sections, source, since, subjects, tuple(further), function
        )

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
