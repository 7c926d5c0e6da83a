"""How high the tables of a page will be, so that its type size is chosen before it is set.

The heights follow templates/style.css; a test holds them against the pages as they are set.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from markupsafe import Markup

from loopdoc.documents.drawing import text_width
from loopdoc.documents.titleblock import Document

MM = 72 / 25.4
PAGE_WIDTH = 180 * MM
"""Between the margins [pt]."""
PAGE_HEIGHT = 242 * MM
"""Between the margins, the title block in the lower one [pt]."""
PAPER_HEIGHT = (297 - 12) * MM
"""Of the paper below its upper margin [pt]."""
ABOVE_TITLE_BLOCK = 277 * MM
"""From the upper margin to the lower edge of the title block [pt]."""

_SOFT_HYPHEN = "\u00ad"
_LINE = 1.18
"""Line height of a table in type sizes."""
_PADDING = 0.3 * MM
_SIDE = 0.8 * MM
_BORDER = 0.5
"""Two half lines [pt]."""


@dataclass(frozen=True, slots=True)
class Density:
    """A type size of the tables, with its class in the style sheet."""

    name: str
    size: float
    """[pt]"""


DENSITIES = (Density("roomy", 8.0), Density("normal", 7.2), Density("dense", 6.6), Density("densest", 6.0))
"""From the largest to the smallest type."""


def line_count(content: str, width: float, size: float, *, bold: bool = False, narrow: bool = True) -> int:
    """Lines that a text takes when it breaks at its spaces and soft hyphens."""
    lines, used = 1, 0.0
    space, hyphen = (text_width(letter, size, bold=bold, narrow=narrow) for letter in " -")
    for word in _plain(content).split(" "):
        syllables = [text_width(part, size, bold=bold, narrow=narrow) for part in word.split(_SOFT_HYPHEN)]
        gap = space if used else 0.0
        if used + gap + sum(syllables) <= width:
            used += gap + sum(syllables)
            continue
        for number, needed in enumerate(syllables, 1):
            if used and used + gap + needed + (hyphen if number < len(syllables) else 0.0) > width:
                lines, used, gap = lines + 1, 0.0, 0.0
            used, gap = used + gap + needed, 0.0
            while used > width:  # what is longer than the line is broken anywhere
                lines, used = lines + 1, used - width
    return lines


def table_height(rows: Iterable[Sequence[tuple[str, float, bool]]], size: float, *, label: bool = False) -> float:
    """Height of a table [pt]; each row gives its cells as text, width [pt] and whether it is bold."""
    height = _BORDER
    for row in rows:
        lines = max(line_count(content, width - 2 * _SIDE - _BORDER, size, bold=bold) for content, width, bold in row)
        height += lines * _LINE * size + 2 * _PADDING + _BORDER + (6.6 if label else 0.0)
    return height


def paragraph_height(content: str, width: float, size: float, line: float, *, narrow: bool = True) -> float:
    """Height of a paragraph without its margins [pt]; ``line`` is its line height in type sizes."""
    return line_count(content, width, size, narrow=narrow) * line * size


def room(document: Document) -> float:
    """Height that a document leaves on its page for the text [pt]: less where its title block is high."""
    return min(PAGE_HEIGHT, ABOVE_TITLE_BLOCK - title_block_height(document) - 1.0 * MM)


LOGO_WIDTH = 33 * MM
"""Of the title's cell, kept free for a logo [pt]."""


def title_block_height(document: Document) -> float:
    """Height of the title block of templates/base.html [pt]."""
    cautions = paragraph_height(document.cautions, PAGE_WIDTH - 2 * MM, 6.2, 1.15) + 1.0 * MM + 0.4
    return title_table_height(document) + cautions


def title_table_height(document: Document) -> float:
    """Height of the title block without the cautions, which stand beside it on a landscape page [pt]."""
    revision = document.revision
    draft = f" (DRAFT: {document.draft})" if document.draft else ""
    # Each cell as text, columns of six, and whether it is bold.
    rows = (
        ((document.title, 3, False), (f"{document.kind}, {document.language}", 2, False), (document.number, 1, True)),
        (
            (document.supplementary_title, 3, False),
            (revision.code, 1, True),
            (revision.date, 1, False),
            (revision.status + draft, 1, bool(draft)),
        ),
        (
            (revision.prepared_by, 1, False),
            (revision.checked_by, 1, False),
            (revision.approved_by, 1, False),
            (f"{document.site}, {document.owner}", 2, False),
        ),
        ((document.check_state, 4, False), (f"{document.fingerprint}, {document.generator}", 2, False)),
        *(tuple((content, span, False) for _, content, span in row) for row in document.further),
    )
    height = 2.0
    for number, row in enumerate(rows):
        taken = LOGO_WIDTH if document.house.logo and number == 0 else 0.0
        lines = max(
            line_count(content, span * PAGE_WIDTH / 6 - 2 * MM - 0.8 - (taken if place == 0 else 0.0), 7.6, bold=bold)
            for place, (content, span, bold) in enumerate(row)
        )
        height += 6.6 + lines * 1.15 * 7.6 + 1.0 * MM + 0.4
    return height


def _plain(content: str) -> str:
    return str(Markup(content).striptags()) if isinstance(content, Markup) else content


def foot(document: Document) -> str:
    """The lower margin that a document's title block needs, as CSS writes it."""
    return f"{(PAPER_HEIGHT - room(document)) / MM:.1f}mm"
