"""What the stories find out, before a language says it: who moves what, which way, and why."""

from __future__ import annotations

from dataclasses import dataclass

from loopdoc.documents.language.noun import Noun
from loopdoc.register.model import FinalElement

Moves = tuple[tuple[FinalElement, int], ...]
"""Final elements, each with the direction in which it is moved: +1 opens or speeds up, -1 the other way."""


@dataclass(frozen=True, slots=True)
class Asked:
    """A controller or a function moves the setpoint of a loop."""

    by: str
    of: str
    """Tag of the loop that is commanded."""
    name: Noun
    """What that loop measures."""
    up: bool


@dataclass(frozen=True, slots=True)
class Moved:
    """A controller moves final elements."""

    by: str
    moves: Moves


@dataclass(frozen=True, slots=True)
class Rise:
    """What happens when a measurement rises."""

    tag: str
    what: Noun
    steps: tuple[Asked | Moved, ...]
    same: bool
    """True where the loop before does just the same."""


@dataclass(frozen=True, slots=True)
class Reason:
    """Why a controller acts as it does: what it measures rises or falls with the thing that it moves."""

    what: Noun
    rises: bool
    beside: Noun | None = None
    """What the loop below measures, where that is moved."""
    same_way: bool = True
    """Whether it moves with that."""
    element: FinalElement | None = None
    """The final element, where that is moved."""
    opened: bool = True
    """Whether a rising output opens it (speeds it up)."""


@dataclass(frozen=True, slots=True)
class Action:
    """Controllers of one action, and why."""

    tags: tuple[str, ...]
    every: bool
    """True where they are all of the story, and more than one."""
    action: str
    reasons: tuple[Reason, ...]


@dataclass(frozen=True, slots=True)
class Share:
    """One branch of a split range."""

    tag: str
    element: FinalElement | None
    low: float
    """Percent of the output at which it is shut."""
    high: float
    """Percent of the output at which it is fully open."""


@dataclass(frozen=True, slots=True)
class Way:
    """What a measurement does after a failure."""

    name: Noun
    rises: bool
