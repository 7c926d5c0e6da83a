"""What a page of prose is made of: sections with paragraphs, tables, steps and figures, all ready to be placed."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass

from loopdoc.documents.tracing import Source
from loopdoc.documents.values import HOLD
from loopdoc.documents.wording import Prose


@dataclass(frozen=True, slots=True)
class Paragraph:
    """A paragraph, with a few words in front that say what it is about."""

    prose: Prose
    label: str = ""
    keep: bool = False
    """Whether it introduces what follows and stays on its page."""
    kind: str = "paragraph"


@dataclass(frozen=True, slots=True)
class Table:
    """A table; the first cell of each row heads it."""

    name: str
    """By which the style sheet knows it."""
    head: tuple[tuple[str, str], ...]
    """Class and heading of each column."""
    rows: tuple[tuple[Prose, ...], ...]
    title: str = ""
    kind: str = "table"


@dataclass(frozen=True, slots=True)
class Steps:
    """Numbered steps."""

    items: tuple[Prose, ...]
    kind: str = "steps"


@dataclass(frozen=True, slots=True)
class Figure:
    """A drawing as SVG text, with its caption."""

    svg: str
    caption: str
    kind: str = "figure"


Block = Paragraph | Table | Steps | Figure


@dataclass(frozen=True, slots=True)
class Section:
    """A numbered section; one without blocks and sections is never made."""

    number: str
    title: str
    anchor: str
    blocks: tuple[Block, ...]
    sections: tuple[Section, ...] = ()
    tags: Prose = ()
    """The tags that it is about, under its heading."""


def sources_in(sections: Iterable[Section]) -> Iterator[Source]:
    """The sources of the values that sections state, in order."""
    for section in sections:
        for prose in (section.tags, *(prose for block in section.blocks for prose in _proses(block))):
            yield from (run.source for run in prose if run.source is not None)
        yield from sources_in(section.sections)


def _proses(block: Block) -> Iterator[Prose]:
    match block:
        case Paragraph():
            yield block.prose
        case Steps():
            yield from block.items
        case Table():
            yield from (cell for row in block.rows for cell in row)


def table(
    name: str,
    head: Sequence[str],
    rows: Iterable[Sequence[str]],
    prose: Callable[[str], Prose],
    *,
    label: Callable[[str], str],
    title: str = "",
) -> tuple[Table, ...]:
    """A table without the columns of which no row says anything; nothing at all where no row is left.

    Headings and title come by their English names; ``label`` gives them in the language of the document.
    A column in which everything said is on hold says nothing: the holds are listed by themselves.
    """
    found = [tuple(row) for row in rows]
    kept = [
        column
        for column in range(len(head))
        if column == 0 or any(row[column] not in ("", HOLD) for row in found)
    ]
    if not found:
        return ()
    cells = tuple(tuple(prose(row[column]) for column in kept) for row in found)
    heads = tuple((_class(head[column]), label(head[column])) for column in kept)
    return (Table(name, heads, cells, label(title) if title else ""),)


def _class(heading: str) -> str:
    return "c-" + re.sub(r"[^a-z]+", "-", heading.lower()).strip("-")
