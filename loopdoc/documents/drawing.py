"""Marks of a loop drawing as SVG text: ISA-5.1 symbols, signal lines and lettering, measured by the real font.

One unit of the drawing is one point on paper. Symbols: ISA-5.1-1984, clauses 6.2 (lines), 6.3 (instruments),
6.4 and 6.5 (valve bodies and actuators), 6.6 (fail positions), 6.9 (function blocks).
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from functools import lru_cache
from html import escape
from io import BytesIO
from itertools import pairwise

from loopdoc.documents.rendering import font
from loopdoc.register.tag_grammar import TagGrammar

SIZE = 6.4
"""Type size of a note [pt]."""
LEADING = 7.2
"""Distance of two lines of a note [pt]."""
BUBBLE = 14.5
"""Radius of an instrument bubble [pt]."""
BLOCK = 11.5
"""Half side of a function block [pt]."""
DIAMOND = 8.0
"""Half diagonal of an interlock diamond [pt]."""
TERMINAL = 8.0
"""Height of one terminal in a box [pt]."""
SMALLEST = 4.6
"""Lettering is not made smaller than this [pt]; what is still too long is cut."""
CAP = 0.698
"""Height of a capital letter, in type sizes."""

_INK = "#111"
_FONTS = {
    (True, False): "IBMPlexSansCondensed-Regular.ttf",
    (True, True): "IBMPlexSansCondensed-Bold.ttf",
    (False, False): "IBMPlexSans-Regular.ttf",
    (False, True): "IBMPlexSans-Bold.ttf",
}
"""Font file by narrow and bold."""


# ---------------------------------------------------------------- lettering


@lru_cache(maxsize=4)
def _advances(narrow: bool, bold: bool) -> tuple[dict[int, float], float]:
    """Advance of each character in type sizes, and of a character that the font lacks."""
    from fontTools.ttLib import TTFont

    face = TTFont(BytesIO(font(_FONTS[narrow, bold])), lazy=True)
    per_em, metrics = face["head"].unitsPerEm, face["hmtx"].metrics
    advances = {code: metrics[name][0] / per_em for code, name in face.getBestCmap().items()}
    return advances, metrics[".notdef"][0] / per_em


def text_width(content: str, size: float = SIZE, *, bold: bool = False, narrow: bool = True) -> float:
    """Width [pt] of a line of lettering."""
    advances, missing = _advances(narrow, bold)
    return size * sum(advances.get(ord(letter), missing) for letter in content)


def fitted(content: str, width: float, size: float = SIZE, *, bold: bool = False) -> tuple[str, float]:
    """A line and its type size so that it fits a width: made smaller first, cut with an ellipsis then."""
    needed = text_width(content, 1.0, bold=bold)
    if needed * size <= width:
        return content, size
    smaller = max(SMALLEST, width / needed)
    while content and text_width(f"{content}…", smaller, bold=bold) > width and needed * smaller > width:
        content = content[:-1]
    return (content if needed * smaller <= width else f"{content.rstrip()}…"), smaller


def wrapped(content: str, width: float, lines: int, size: float = SIZE) -> tuple[str, ...]:
    """A text broken at its spaces into at most this many lines; the last one is cut where more is left."""
    found: list[str] = []
    words = content.split(" ")
    while words:
        taken = 1
        while taken < len(words) and text_width(" ".join(words[: taken + 1]), size) <= width:
            taken += 1
        last = len(found) == lines - 1
        found.append(" ".join(words if last else words[:taken]))
        words = [] if last else words[taken:]
    return tuple(_cut(line, width, size) for line in found)


def _cut(line: str, width: float, size: float) -> str:
    if text_width(line, size) <= width:
        return line
    while line and text_width(f"{line}…", size) > width:
        line = line[:-1]
    return f"{line.rstrip()}…"


def tag_lines(tag: str, pattern: TagGrammar | None) -> tuple[str, str]:
    """The function letters of a tag, and the rest of it, as a bubble shows them."""
    found = pattern.fullmatch(tag) if pattern else None
    letters = found.groupdict().get("letters") if found else None
    if letters and tag.startswith(letters):
        return letters, tag[len(letters) :].lstrip("-_. ")
    head, _, rest = tag.partition("-")
    return head, rest


# ---------------------------------------------------------------- the sheet


def pt(value: float) -> str:
    """A length in points as text, without binary noise."""
    shortest = f"{value:.2f}".rstrip("0").rstrip(".")
    return "0" if shortest in ("-0", "") else shortest


def _path(points: Sequence[tuple[float, float]], *, closed: bool = False) -> str:
    steps = " ".join(f"{'M' if index == 0 else 'L'}{pt(x)} {pt(y)}" for index, (x, y) in enumerate(points))
    return f"{steps}Z" if closed else steps


def _box(left: float, top: float, right: float, bottom: float) -> str:
    return _path(((left, top), (right, top), (right, bottom), (left, bottom)), closed=True)


def _attributes(role: str, *, width: float, fill: str = "", dash: str = "") -> str:
    found = f' class="{role}"'
    found += f' stroke-width="{pt(width)}"' if width != 0.7 else ""
    found += f' fill="{fill}"' if fill else ""
    return found + (f' stroke-dasharray="{dash}"' if dash else "")


def _circle(x: float, y: float, radius: float) -> str:
    r, across = pt(radius), pt(2 * radius)
    return f"M{pt(x - radius)} {pt(y)}a{r} {r} 0 1 0 {across} 0a{r} {r} 0 1 0 -{across} 0Z"


@dataclass(slots=True)
class Sheet:
    """The marks put on a drawing so far; `svg` gives the finished drawing.

    Lines of one kind become one path each, since a page costs by the element and not by its length.
    """

    width: float
    _lines: dict[str, list[str]] = field(default_factory=dict)
    """Below the symbols: paths by their attributes."""
    _symbols: list[str] = field(default_factory=list)
    _details: dict[str, list[str]] = field(default_factory=dict)
    """Above the symbols: paths by their attributes."""
    _letters: list[str] = field(default_factory=list)

    # -- lettering

    def text(
        self, x: float, y: float, content: str, *, size: float = SIZE, bold: bool = False, anchor: str = "start"
    ) -> None:
        """One line; ``y`` is its baseline."""
        where = "" if anchor == "start" else f' text-anchor="{anchor}"'
        weight = ' font-weight="700"' if bold else ""
        kept = "" if size == SIZE else f' font-size="{pt(size)}"'
        self._letters.append(f'<text x="{pt(x)}" y="{pt(y)}"{where}{weight}{kept}>{escape(content)}</text>')

    def note(
        self, x: float, y: float, lines: Iterable[str], *, width: float, anchor: str = "start", bold_first: bool = False
    ) -> None:
        """Lines below each other, the first with its baseline at ``y``, each made to fit the width."""
        for index, line in enumerate(lines):
            bold = bold_first and index == 0
            content, size = fitted(line, width, bold=bold)
            self.text(x, y + index * LEADING, content, size=size, bold=bold, anchor=anchor)

    def centred(self, x: float, y: float, content: str, *, width: float, size: float, bold: bool = False) -> None:
        """One line with its capitals centred on a point."""
        content, size = fitted(content, width, size, bold=bold)
        self.text(x, y + CAP * size / 2, content, size=size, bold=bold, anchor="middle")

    # -- shapes and lines

    def line(self, path: str, *, width: float = 0.7, dash: str = "") -> None:
        """A path that runs below the symbols."""
        self._lines.setdefault(_attributes("line", width=width, dash=dash), []).append(path)

    def symbol(self, path: str, *, width: float = 0.7) -> None:
        """A path that stands on its own and hides the lines behind it."""
        self._symbols.append(f'<path{_attributes("symbol", width=width, fill="#fff")} d="{path}"/>')

    def detail(self, path: str, *, width: float = 0.7, fill: str = "", dash: str = "") -> None:
        """A path on top of the symbols."""
        self._details.setdefault(_attributes("detail", width=width, fill=fill, dash=dash), []).append(path)

    def polyline(self, points: Sequence[tuple[float, float]], *, width: float, dash: str = "") -> None:
        """A line through points."""
        self.line(_path(points), width=width, dash=dash)

    def process(self, *points: tuple[float, float]) -> None:
        """Process piping or a process connection: a solid line."""
        self.line(_path(points), width=1.0)

    def electric(self, *points: tuple[float, float], arrow: bool = False) -> None:
        """An electric signal: a dashed line."""
        self.line(_path(points), dash="3.2 2")
        if arrow:
            self._arrow(points[-2], points[-1])

    def software(self, *points: tuple[float, float], arrow: bool = True) -> None:
        """A link inside the control system: a line with small circles."""
        circles = []
        for (x0, y0), (x1, y1) in pairwise(points):
            length = abs(x1 - x0) + abs(y1 - y0)  # links run along the axes
            count = max(int((length - 8) // 14), int(length > 12))
            for index in range(count):
                share = (index + 1) / (count + 1)
                circles.append(_circle(x0 + share * (x1 - x0), y0 + share * (y1 - y0), 1.2))
        self.line(_path(points))
        if circles:
            self.detail("".join(circles), width=0.6, fill="#fff")
        if arrow:
            self._arrow(points[-2], points[-1])

    def _arrow(self, before: tuple[float, float], tip: tuple[float, float]) -> None:
        (x0, y0), (x, y) = before, tip
        length = max(abs(x - x0) + abs(y - y0), 1e-9)
        dx, dy = 4.2 * (x - x0) / length, 4.2 * (y - y0) / length
        wings = ((x, y), (x - dx + dy * 0.36, y - dy - dx * 0.36), (x - dx - dy * 0.36, y - dy + dx * 0.36))
        self.detail(_path(wings, closed=True), width=0.1, fill=_INK)

    # -- instruments and functions

    def _bubble(self, x: float, y: float, lines: tuple[str, str], *, path: str, strong: bool) -> None:
        self.symbol(path, width=1.5 if strong else 0.7)
        letters, rest = lines
        size = 7.2
        width = 1.72 * BUBBLE
        if not rest:
            self.centred(x, y, letters, width=width, size=size, bold=True)
            return
        self.centred(x, y - 4.3, letters, width=width * 0.9, size=size, bold=True)
        self.centred(x, y + 4.5, rest, width=width * 0.9, size=size, bold=True)

    def field_instrument(self, x: float, y: float, lines: tuple[str, str], *, strong: bool = False) -> None:
        """A circle: an instrument in the field."""
        self._bubble(x, y, lines, path=_circle(x, y, BUBBLE), strong=strong)

    def shared_display(self, x: float, y: float, lines: tuple[str, str], *, strong: bool = False) -> None:
        """A circle in a square, with the line of what the operator has before him: shared display and control."""
        square = _box(x - BUBBLE, y - BUBBLE, x + BUBBLE, y + BUBBLE)
        self._bubble(x, y, lines, path=square + _circle(x, y, BUBBLE), strong=strong)
        if lines[1]:
            self.detail(_path(((x - BUBBLE, y), (x + BUBBLE, y))))

    def function_block(self, x: float, y: float, symbol: str) -> None:
        """A square with the sign of what it computes."""
        self.symbol(_box(x - BLOCK, y - BLOCK, x + BLOCK, y + BLOCK))
        self.centred(x, y, symbol, width=1.8 * BLOCK, size=12 if len(symbol) == 1 else 9, bold=True)

    def square_root(self, x: float, y: float) -> None:
        """Square root extraction on a signal."""
        self.symbol(_box(x - 5.5, y - 5.5, x + 5.5, y + 5.5))
        self.centred(x, y, "√", width=9, size=7)

    def interlock(self, x: float, y: float) -> None:
        """A diamond: interlock logic."""
        points = ((x, y - DIAMOND), (x + DIAMOND, y), (x, y + DIAMOND), (x - DIAMOND, y))
        self.symbol(_path(points, closed=True))
        self.centred(x, y, "I", width=8, size=8, bold=True)

    def junction(self, x: float, y: float) -> None:
        """A dot where lines are joined."""
        self.detail(_circle(x, y, 1.3), width=0.1, fill=_INK)

    def terminals(self, x: float, y: float, marks: Sequence[str], *, width: float) -> None:
        """Terminals of a box below each other with their marks; a pair of circles where they are not known."""
        half = TERMINAL * max(1, len(marks)) / 2
        edges = [_path(((x - width / 2, y - half + TERMINAL * place), (x + width / 2, y - half + TERMINAL * place)))
                 for place in range(1, len(marks))]  # fmt: skip
        if not marks:
            edges = [_circle(x - 3.2, y, 1.9), _circle(x + 3.2, y, 1.9)]
        self.symbol(_box(x - width / 2, y - half, x + width / 2, y + half) + "".join(edges))
        for place, mark in enumerate(marks):
            self.centred(x, y - half + TERMINAL * (place + 0.5), mark, width=width - 2, size=SIZE)

    def channel(self, x: float, y: float, content: str) -> None:
        """An input or output of the control system with its channel."""
        self.symbol(_box(x - 21, y - 6.5, x + 21, y + 6.5))
        self.centred(x, y, content, width=39, size=SIZE)

    def connector(self, x: float, y: float, content: str, *, to_the_left: bool = False) -> None:
        """A pentagon that names what continues on another sheet."""
        turn = -1 if to_the_left else 1
        points = ((-25, -6.5), (18, -6.5), (25, 0), (18, 6.5), (-25, 6.5))
        outline = _path(tuple((x + turn * dx, y + dy) for dx, dy in points), closed=True)
        self.symbol(outline)
        self.centred(x - turn * 3, y, content, width=40, size=SIZE)

    # -- measuring points

    def measuring_point(self, x: float, y: float, variable: str, element: str) -> None:
        """What the transmitter at (x, y) is connected to: a pipe with its element, a vessel, a machine."""
        top, pipe = y + BUBBLE, y + 24.0
        if variable == "level":
            vessel = _box(x - 19, y + 19, x + 19, y + 31)
            self.symbol(vessel, width=1.0)
            self.detail(_path(((x - 19, y + 25), (x + 19, y + 25))), width=0.5, dash="1.6 1.2")
            self.process((x, top), (x, y + 19))
        elif variable in ("speed", "position", "power", "current", "weight", "vibration"):
            self.symbol(_box(x - 14, y + 20, x + 14, y + 29), width=1.0)
            self.process((x, top), (x, y + 20))
        else:
            self.process((x - 20, pipe), (x + 20, pipe))
            if variable == "flow" and "orifice" in element:
                plates = ((x - 1.5, pipe - 5), (x - 1.5, pipe + 5)), ((x + 1.5, pipe - 5), (x + 1.5, pipe + 5))
                self.detail("".join(_path(plate) for plate in plates), width=1.0)
                self._two_taps(x, top, pipe)
            elif variable == "flow":
                self.symbol(_box(x - 7, pipe - 4.5, x + 7, pipe + 4.5), width=1.0)
                self.process((x, top), (x, pipe - 4.5))
            elif variable == "differential pressure":
                self._two_taps(x, top, pipe)
            elif variable == "temperature":
                self.process((x, top), (x, pipe))
                self.detail(_path(((x, pipe), (x, pipe + 4.5))), width=2.2)
            else:
                self.process((x, top), (x, pipe))

    def _two_taps(self, x: float, top: float, pipe: float) -> None:
        for side in (x - 6.5, x + 6.5):
            self.process((side, top - 1.5), (side, pipe))

    # -- final elements

    def final_element(self, x: float, y: float, kind: str, fails: str) -> None:
        """A final element whose signal arrives at (x + 9, y); its body stands below."""
        if kind in ("variable-speed drive", "motor"):
            if kind == "variable-speed drive":
                self.symbol(_box(x - 9, y - 5, x + 9, y + 5))
                self.centred(x, y, "VSD", width=16, size=SIZE, bold=True)
            else:
                self.symbol(_box(x - 9, y - 5, x + 9, y + 5) + _path(((x - 4, y + 1.5), (x + 4, y - 2))))
            self.line(_path(((x, y + 5), (x, y + 10))))
            self.symbol(_circle(x, y + 19, 9), width=1.0)
            self.centred(x, y + 19, "M", width=14, size=9, bold=True)
            return
        if kind == "heater bank":
            self.symbol(_box(x - 9, y - 5, x + 9, y + 5) + _path(((x - 9, y + 5), (x + 9, y - 5))))
            self.line(_path(((x, y + 5), (x, y + 13))))
            zigzag = tuple((x - 12 + 4 * step, y + 19 + (3.5 if step % 2 else -3.5)) for step in range(7))
            self.symbol(_box(x - 16, y + 13, x + 16, y + 25) + _path(zigzag), width=1.0)
            return
        if kind == "on-off valve":
            self.symbol(_box(x - 9, y - 5, x + 9, y + 5) + _path(((x - 9, y), (x + 9, y))))
        else:
            self.symbol(f"M{pt(x - 9)} {pt(y + 5)}a9 9 0 0 1 18 0Z")
        self._stem(x, y, fails)
        self.process((x - 20, y + 20), (x - 9, y + 20))
        self.process((x + 9, y + 20), (x + 20, y + 20))
        if kind == "damper":
            frame = _path(((x - 9, y + 14), (x + 9, y + 14))) + _path(((x - 9, y + 26), (x + 9, y + 26)))
            blade = _path(((x - 6, y + 25), (x + 6, y + 15)))
            self.symbol(frame + blade + _circle(x, y + 20, 1.2), width=1.0)
        else:
            body = ((x - 9, y + 14.5), (x + 9, y + 25.5), (x + 9, y + 14.5), (x - 9, y + 25.5))
            self.symbol(_path(body, closed=True), width=1.0)

    def _stem(self, x: float, y: float, fails: str) -> None:
        self.detail(_path(((x, y + 5), (x, y + 20))))
        if fails == "closed":
            self._arrow((x, y + 8), (x, y + 13.2))
        elif fails == "open":
            self._arrow((x, y + 13), (x, y + 7.2))
        elif fails == "last":
            bars = _path(((x - 3, y + 9), (x + 3, y + 9))) + _path(((x - 3, y + 11.4), (x + 3, y + 11.4)))
            self.detail(bars)

    def solenoid(self, x: float, y: float, below: float) -> None:
        """A solenoid valve in the air line to the actuator whose top is at ``below``."""
        self.line(_path(((x, y + 5), (x, below))))
        middle = (y + 5 + below) / 2
        # Two strokes across: a pneumatic signal.
        for place in (middle - 1.4, middle + 1.4):
            self.detail(_path(((x - 2.6, place + 1.6), (x + 2.6, place - 1.6))), width=0.6)
        self.symbol(_box(x - 6, y - 5, x + 6, y + 5))
        self.centred(x, y, "S", width=9, size=7, bold=True)

    # -- frame

    def frame(self, height: float, lanes: Sequence[tuple[str, float, float]]) -> None:
        """The frame with a headed lane for each part of the plant."""
        self.line(_box(0.5, 0.5, self.width - 0.5, height - 0.5), width=0.8)
        self.line(_path(((0.5, 12), (self.width - 0.5, 12))), width=0.5)
        for index, (name, left, right) in enumerate(lanes):
            self.centred((left + right) / 2, 6.2, name, width=right - left - 4, size=SIZE, bold=True)
            if index:
                self.line(_path(((left, 0.5), (left, height - 0.5))), width=0.5, dash="6 2 1 2")

    def svg(self, height: float, title: str) -> str:
        """The finished drawing; one unit is one point."""
        paths = [f'<path{key} d="{"".join(found)}"/>' for key, found in self._lines.items()]
        paths += self._symbols
        paths += [f'<path{key} d="{"".join(found)}"/>' for key, found in self._details.items()]
        return (
            f'<svg xmlns="http://www.w3.org/2000/svg" role="img" width="{pt(self.width)}pt" height="{pt(height)}pt"'
            f' viewBox="0 0 {pt(self.width)} {pt(height)}" fill="none" stroke="{_INK}" stroke-width="0.7">'
            f"<title>{escape(title)}</title>{''.join(paths)}"
            f'<g fill="{_INK}" stroke="none" font-family="loopdoc narrow" font-size="{pt(SIZE)}">'
            f"{''.join(self._letters)}</g></svg>"
        )
