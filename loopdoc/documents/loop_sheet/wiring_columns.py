"""The way of the wires on a drawn loop: which boxes and cabinets there are, and in which column each stands.

Those of one name stand in one column, the last before the control system furthest to the right.
"""

from __future__ import annotations

from collections.abc import Collection, Iterable, Sequence
from dataclasses import dataclass
from itertools import pairwise

from loopdoc.documents.drawing import LEADING, TERMINAL
from loopdoc.documents.language import Language
from loopdoc.documents.values import HOLD
from loopdoc.register.model import Connection, Hold

Wiring = tuple[Connection, ...] | Hold

MOST_STOPS = 3
"""Boxes drawn on one way; those between the first and the last are counted where there are more."""
MOST_TERMINALS = 4
"""Terminals drawn in one box; those beyond are counted."""


@dataclass(frozen=True, slots=True)
class Stop:
    """A box or cabinet on the way of one signal, with the cable that arrives from the field."""

    name: str
    terminals: tuple[str, ...]
    cable: str
    pair: str
    column: int = 0

    @property
    def height(self) -> float:
        """Of its terminals [pt]."""
        return TERMINAL * max(1, len(self.terminals))


def stops_of(wiring: Wiring, language: Language) -> tuple[Stop, ...]:
    """The stops of one signal from the field to the control system; none where the wiring is on hold."""
    if isinstance(wiring, Hold):
        return ()
    found = [_stop(connection, language) for connection in wiring]
    between = found[1:-1]
    if len(found) <= MOST_STOPS:
        return tuple(found)
    return (found[0], Stop(language.more(len(between)), (), between[0].cable, between[0].pair), found[-1])


def _stop(connection: Connection, language: Language) -> Stop:
    terminals = (HOLD,) if isinstance(connection.terminals, Hold) else connection.terminals
    if len(terminals) > MOST_TERMINALS:
        terminals = (*terminals[: MOST_TERMINALS - 1], f"+\u00a0{len(terminals) - MOST_TERMINALS + 1}")
    cable, pair = (HOLD if isinstance(part, Hold) else part or "" for part in (connection.cable, connection.pair))
    name = HOLD if isinstance(connection.at, Hold) else connection.at or ""
    return Stop(name, terminals, cable, language.pair(pair) if pair else "")


@dataclass(frozen=True, slots=True)
class Columns:
    """Columns of boxes on one drawing."""

    count: int
    _from_the_end: dict[str, int]

    def placed(self, stops: Sequence[Stop]) -> tuple[int, ...]:
        """The column of each stop of a way, from 0 at the left."""
        own = tuple(range(len(stops) - 1, -1, -1))
        named = tuple(self._from_the_end.get(stop.name, place) for stop, place in zip(stops, own, strict=True))
        # Two ways that meet the same boxes in another order have no columns in common.
        in_order = all(left > right for left, right in pairwise(named))
        return tuple(self.count - 1 - place for place in (named if in_order else own))


def columns_of(ways: Collection[Sequence[Stop]]) -> Columns:
    """Columns in which all the ways of a drawing find room."""
    from_the_end: dict[str, int] = {}
    for stops in ways:
        for place, stop in enumerate(reversed(stops)):
            from_the_end[stop.name] = max(place, from_the_end.get(stop.name, 0))
    return Columns(max((len(stops) for stops in ways), default=0), from_the_end)


def wiring_extent(stops: Iterable[Stop]) -> tuple[float, float]:
    """Height that the stops of a way need above and below its line [pt]."""
    half = max((stop.height / 2 for stop in stops), default=0.0)
    return (half + LEADING + 2, max(half, LEADING + 2) + 2) if half else (0.0, 0.0)
