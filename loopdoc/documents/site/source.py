"""The register's own lines, numbered as in their files, with the findings that stand in them and ways to documents."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

from loopdoc.documents.site.places import address
from loopdoc.documents.whereabouts import REGISTER_TEXT, line_anchor, register_pages
from loopdoc.register.model import Origin
from loopdoc.register.place import Place
from loopdoc.register.text import Spot

MOST_LINES = 240
"""Lines of one part that a page about it repeats; the page of the file has them all."""
_LONGEST_LINE = 2000


@dataclass(frozen=True, slots=True)
class Marked:
    """A way out of a line: to a finding that stands in it, or to the document of the part that begins there."""

    label: str
    address: str


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
    address: str = ""
    """Where the page of the file shows the first of these lines; empty on that page itself."""


class Sources:
    """Lines of the register's files, each file split once."""

    def __init__(self, sources: Mapping[str, bytes]) -> None:
        self._lines = {
            name: content.decode("utf-8-sig", "replace").replace("\r\n", "\n").split("\n")
            for name, content in sources.items()
        }
        self._index = {name: index for index, name in enumerate(self._lines)}
        self.pages: Mapping[str, str] = register_pages(self._lines)
        """Name of each file's page."""

    def address(self, place: Place, root: str) -> str:
        """Address of a line on the page of its file; empty where the register has no such file."""
        if place.file not in self._index:
            return ""
        return address(f"{REGISTER_TEXT}/{self.pages[place.file]}", root=root, at=line_anchor(place.line))

    def whole(self, file: str, marks: Mapping[Place, Sequence[Marked]]) -> Excerpt:
        """All lines of a file."""
        by_line = self._by_line(marks)
        lines = tuple(
            self._line(Place(file, number, 1), by_line, line_anchor(number))
            for number in range(1, len(self._lines[file]) + 1)
        )
        return Excerpt(file, file, lines[:-1] if len(lines) > 1 and not lines[-1].text else lines)

    def _by_line(self, marks: Mapping[Place, Sequence[Marked]]) -> Mapping[str, Sequence[Marked]]:
        by_line: dict[str, list[Marked]] = {}
        for place, found in marks.items():
            by_line.setdefault(self.anchor(place), []).extend(found)
        return by_line

    def _line(self, place: Place, by_line: Mapping[str, Sequence[Marked]], anchor: str) -> Line:
        text = self._lines[place.file][place.line - 1]
        if len(text) > _LONGEST_LINE:
            text = f"{text[:_LONGEST_LINE]} …"
        return Line(place.line, text, anchor, tuple(by_line.get(self.anchor(place), ())))

    def anchor(self, place: Place) -> str:
        """Name of a line's place in the pages that repeat it beside what they tell of a part."""
        return f"line-{self._index[place.file]}-{place.line}" if place.file in self._index else ""

    def excerpts(
        self, parts: Iterable[tuple[str, Origin]], marks: Mapping[Place, Sequence[Marked]], root: str
    ) -> tuple[Excerpt, ...]:
        """The lines of several parts on one page, each with its title; ``root`` leads to the folder of the issue."""
        by_line = self._by_line(marks)
        shown: set[str] = set()
        excerpts = []
        for title, origin in parts:
            place = origin.key()
            if place.file not in self._lines:
                continue
            first, last = place.line, self._last(origin, place)
            lines = []
            for number in range(first, min(last, first + MOST_LINES - 1) + 1):
                line = Place(place.file, number, 1)
                anchor = self.anchor(line)
                lines.append(self._line(line, by_line, "" if anchor in shown else anchor))
                shown.add(anchor)
            excerpts.append(Excerpt(
                title, place.file, tuple(lines), max(0, last - first + 1 - MOST_LINES), self.address(place, root)
            ))  # fmt: skip
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
