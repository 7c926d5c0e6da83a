"""What of a rendered document differs from the same document before: paragraphs, rows and figures that get a bar.

Found by comparing what a reader sees in the finished pages, so that no builder has to know of it. Numbers that
only order things (sections, holds) and tables of revisions are left out of the comparison.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Sequence
from dataclasses import dataclass
from difflib import SequenceMatcher
from html.parser import HTMLParser

CHANGED = "changed"
"""Class of a block that is new or says something else."""
REMOVED_BEFORE = "removed-before"
"""Class of a block before which something was taken away."""

_BLOCKS = ("p", "li", "tr", "h1", "h2", "h3", "h4", "figure", "svg")
_HEADINGS = ("h1", "h2", "h3", "h4")
_CELLS = ("td", "th")
_NEXT_CELL = "\u241f"
_VOID = frozenset({"br", "col", "hr", "img", "input", "link", "meta", "wbr"})
_HOLD_NUMBER = re.compile("HOLD[\u00a0 ][0-9]+")
_SECTION_NUMBER = re.compile(r"^[0-9]+(?:\.[0-9]+)*\s+")
_NAMES = re.compile(r"""\s(?:id="[^"]*"|(?:xlink:)?href="\#[^"]*")|url\(\#[^)]*\)""")
"""Names inside a drawing, which only lead from one part of it to another."""


@dataclass(frozen=True, slots=True)
class Block:
    """A paragraph, row, heading or figure of a rendered document."""

    start: int
    """Offset of its start tag."""
    name: str
    """Of its element."""
    tag_length: int
    """Of its start tag."""
    end: int
    """Offset behind its end tag."""
    key: str
    """What a reader sees of it."""


@dataclass(frozen=True, slots=True)
class Difference:
    """How a document differs from what it was, block by block."""

    changed: tuple[Block, ...]
    """Of the new document: those that are new or say something else."""
    gaps: tuple[Block, ...]
    """Of the new document: those before which something was taken away."""
    removed: int
    """How many blocks of the old document are gone."""

    @property
    def differs(self) -> bool:
        return bool(self.changed or self.removed)


def blocks(html: str) -> tuple[Block, ...]:
    """The blocks of a rendered document that are compared, in order."""
    reader = _Reader(html)
    reader.feed(html)
    reader.close()
    return tuple(reader.found)


def difference(old: str, new: str) -> Difference:
    """How one rendered document differs from an older one."""
    before, after = blocks(old), blocks(new)
    changed: list[Block] = []
    gaps: list[Block] = []
    removed = 0
    matcher = SequenceMatcher(None, [one.key for one in before], [one.key for one in after], autojunk=False)
    for what, first, last, start, end in matcher.get_opcodes():
        if what in ("insert", "replace"):
            changed += after[start:end]
        if what == "delete":
            gaps += after[end : end + 1] or after[-1:]
        removed += max(0, (last - first) - (end - start)) if what in ("delete", "replace") else 0
    marked = set(changed)
    return Difference(tuple(changed), tuple(block for block in dict.fromkeys(gaps) if block not in marked), removed)


def with_bars(old: str, new: str) -> str:
    """The new document with a class on each block that differs from the old one."""
    found = difference(old, new)
    marks = [(block, CHANGED) for block in found.changed] + [(block, REMOVED_BEFORE) for block in found.gaps]
    for block, mark in sorted(marks, key=lambda pair: -pair[0].start):
        new = _marked(new, block, mark)
    return new


def _marked(html: str, block: Block, mark: str) -> str:
    if block.name == "svg":  # a drawing that stands by itself has no margin of its own
        inside = html[block.start : block.end]
        return f'{html[: block.start]}<div class="{mark}">{inside}</div>{html[block.end :]}'
    tag = html[block.start : block.start + block.tag_length]
    if ' class="' in tag:
        written = tag.replace(' class="', f' class="{mark} ', 1)
    else:
        written = f'<{block.name} class="{mark}"{tag[1 + len(block.name) :]}'
    return f"{html[: block.start]}{written}{html[block.start + block.tag_length :]}"


class _Reader(HTMLParser):
    """Finds the outermost blocks of a document and what they say."""

    def __init__(self, html: str) -> None:
        super().__init__(convert_charrefs=True)
        self.found: list[Block] = []
        self._html = html
        self._lines = _line_starts(html)
        self._open: list[str] = []
        self._passed_over = 0
        """Depth of the element from which on nothing is compared; 0 outside of one."""
        self._block: tuple[int, str, int, int] | None = None
        """Start, name, length of the tag and depth of the block that is open."""
        self._words: list[str] = []

    def handle_starttag(self, tag: str, attrs: Sequence[tuple[str, str | None]]) -> None:
        if tag in _VOID:
            if self._block and tag == "br":
                self._words.append(" ")
            return
        self._open.append(tag)
        depth = len(self._open)
        if self._passed_over:
            return
        if _is_passed_over(tag, dict(attrs)):
            self._passed_over = depth
        elif self._block is None and tag in _BLOCKS:
            text = self.get_starttag_text() or ""
            self._block = (self._offset(), tag, len(text), depth)
            self._words = []
        elif self._block and tag in _CELLS:
            self._words.append(_NEXT_CELL)

    def handle_startendtag(self, tag: str, attrs: Sequence[tuple[str, str | None]]) -> None:
        """An element of a drawing that closes itself: nothing opens."""

    def handle_endtag(self, tag: str) -> None:
        if tag in _VOID or tag not in self._open:
            return
        while self._open.pop() != tag:
            pass
        depth = len(self._open) + 1
        if self._passed_over and depth <= self._passed_over:
            self._passed_over = 0
        if self._block and depth <= self._block[3]:
            start, name, length, _ = self._block
            end = self._html.index(">", self._offset()) + 1
            self.found.append(Block(start, name, length, end, self._key(name, start, end)))
            self._block = None

    def handle_data(self, data: str) -> None:
        if self._block:
            self._words.append(data)

    def _key(self, name: str, start: int, end: int) -> str:
        if name in ("figure", "svg"):
            drawn = _NAMES.sub("", self._html[start:end])
            return f"{name}\u241e{hashlib.sha256(drawn.encode()).hexdigest()}"
        said = _HOLD_NUMBER.sub("HOLD", " ".join("".join(self._words).split()))
        if name in _HEADINGS:
            said = _SECTION_NUMBER.sub("", said)
        return f"{name}\u241e{said}"

    def _offset(self) -> int:
        line, column = self.getpos()
        return self._lines[line - 1] + column


def _is_passed_over(tag: str, attributes: dict[str, str | None]) -> bool:
    """Title block, contents and revisions tell of the issue, not of the plant."""
    classes = (attributes.get("class") or "").split()
    return (
        tag in ("nav", "head")
        or "title-block" in classes
        or "bars-note" in classes
        or "revisions" in classes
        or "appendix" in classes
    )


def _line_starts(text: str) -> list[int]:
    starts = [0]
    starts += [found.end() for found in re.finditer("\n", text)]
    return starts
