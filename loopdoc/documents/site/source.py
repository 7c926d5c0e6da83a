"""The register's own lines under a part of it, numbered as in its file, with the findings that stand in them."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

from loopdoc.register.model import Origin
from loopdoc.register.place import Place
from loopdoc.register.text import Spot

MOST_LINES = 240
"""Lines of one part that a page repeats; the file has them all."""
_LONGEST_LINE = 2000


@dataclass(frozen=True, slots=True)
class Marked:
    """A finding that stands in a line."""

    rule: str
    anchor: str


@dataclass(frozen=True, slots=True)
class Line:
    """One line of the register."""

    number: int
    text: str
    anchor: str
    """Name of the place in the page; empty where the page has shown this line before."""
    marks: tuple[Marked, ...] = ()


@dataclass(frozen=True, slots=True)
class Excerpt:
    """The lines of one part."""

    title: str
    file: str
    lines: tuple[Line, ...]
    more: int = 0
    """Lines left out at the end."""


class Sources:
    """Lines of the register's files, each file split once."""

    def __init__(self, sources: Mapping[str, bytes]) -> None:
        self._lines = {
            name: content.decode("utf-8-sig", "replace").replace("\r\n", "\n").split("\n")
            for name, content in sources.items()
        }
        self._index = {name: index for index, name in enumerate(self._lines)}

    def anchor(self, place: Place) -> str:
        """Name of a line's place in every page that shows it."""
        return f"line-{self._index[place.file]}-{place.line}" if place.file in self._index else ""

    def excerpts(
        self, parts: Iterable[tuple[str, Origin]], marks: Mapping[Place, Sequence[Marked]]
    ) -> tuple[Excerpt, ...]:
        """The lines of several parts on one page, each with its title."""
        by_line: dict[str, list[Marked]] = {}
        for place, found in marks.items():
            by_line.setdefault(self.anchor(place), []).extend(found)
        shown: set[str] = set()
        excerpts = []
        for title, origin in parts:
            place = origin.key()
            if place.file not in self._lines:
                continue
            first, last = place.line, self._last(origin, place)
            lines = []
            for number in range(first, min(last, first + MOST_LINES - 1) + 1):
                anchor = self.anchor(Place(place.file, number, 1))
                text = self._lines[place.file][number - 1]
                if len(text) > _LONGEST_LINE:
                    text = f"{text[:_LONGEST_LINE]} …"
                fresh = anchor not in shown
                shown.add(anchor)
                lines.append(Line(number, text, anchor if fresh else "", tuple(by_line.get(anchor, ()))))
            excerpts.append(Excerpt(title, place.file, tuple(lines), max(0, last - first + 1 - MOST_LINES)))
        return tuple(excerpts)

    def _last(self, origin: Origin, place: Place) -> int:
        """The last line of a part: before the next one that is indented no further than its key."""
        lines = self._lines[place.file]
        depth = _indentation(lines[place.line - 1])
        if place.column - 1 != depth:  # inside braces, where indentation says nothing
            return min(_last_line(_spot(origin)), len(lines))
        last = place.line
        for number in range(place.line + 1, len(lines) + 1):
            text = lines[number - 1]
            if text.strip() and _indentation(text) <= depth:
                break
            if text.strip():
                last = number
        return last


def _indentation(line: str) -> int:
    return len(line) - len(line.lstrip(" "))


def _spot(origin: Origin) -> Spot:
    spot = origin.source.spot
    for step in origin.path:
        inside = spot.inside
        if isinstance(inside, dict):
            spot = inside[str(step)]
        elif isinstance(inside, list) and isinstance(step, int):
            spot = inside[step]
    return spot


def _last_line(spot: Spot) -> int:
    inside = spot.inside.values() if isinstance(spot.inside, dict) else spot.inside or ()
    return max((spot.line, *(_last_line(inner) for inner in inside)))
