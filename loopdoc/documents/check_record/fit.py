"""How high a check record will be, so that its rows are as high as one page allows.

The heights follow templates/style.css; a test holds them against the pages as they are set.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from loopdoc.documents.page_fit import MM, PAGE_WIDTH, line_count

_LINE = 1.16
_SMALL_LINE = 1.2
_PADDING = 0.35 * MM
_SIDE = 0.8 * MM
_BORDER = 0.4
_LABEL = 6.6
_HEADING = 8.6 * 1.36 + 2.5 * MM


@dataclass(frozen=True, slots=True)
class Rows:
    """A type size with the least height of a row that is filled in, and its class in the style sheet."""

    name: str
    size: float
    """[pt]"""
    height: float
    """[pt]"""


SIZES = (Rows("roomy", 7.8, 6.6 * MM), Rows("normal", 7.4, 5.4 * MM), Rows("dense", 7.0, 4.5 * MM))
"""From the largest to the smallest."""
LONGER = SIZES[1]
"""Where neither one page takes it, nor two with the functions on the second."""


def filled_height(
    title: str, head: Sequence[str], rows: Sequence[Sequence[str]], shares: Sequence[float], note: str, sizes: Rows
) -> float:
    """Height of a table with its heading and its note [pt]; ``shares`` are those of its columns."""
    whole = sum(shares)
    widths = [PAGE_WIDTH * share / whole for share in shares]

    def row_height(cells: Sequence[str], *, bold: bool) -> float:
        lines = max(
            line_count(cell, width - 2 * _SIDE - _BORDER, sizes.size, bold=bold or index == 0)
            for index, (cell, width) in enumerate(zip(cells, widths, strict=True))
        )
        return lines * _LINE * sizes.size + 2 * _PADDING + _BORDER

    height = _HEADING * line_count(title, PAGE_WIDTH, 8.6, bold=True, narrow=False) + _BORDER
    height += row_height(head, bold=True)
    height += sum(max(sizes.height, row_height(cells, bold=False)) for cells in rows)
    return height + (words_height(note, sizes) if note else 0.0)


def words_height(text: str, sizes: Rows) -> float:
    """Height of a paragraph or a line of a list [pt]."""
    return line_count(text, PAGE_WIDTH, sizes.size) * _SMALL_LINE * sizes.size + 1.0 * MM


def labelled_height(cells: Sequence[str], sizes: Rows) -> float:
    """Height of a row of values under their labels [pt]."""
    width = PAGE_WIDTH / len(cells) - 2 * _SIDE - _BORDER
    lines = max(line_count(cell, width, sizes.size) for cell in cells)
    return _LABEL + lines * _LINE * sizes.size + 2 * _PADDING + _BORDER


def frame_height(title: str) -> float:
    """Height of what every record has: its name, the row about the test, the row of signatures [pt]."""
    name = line_count(title, PAGE_WIDTH, 12.2, bold=True, narrow=False) * 13.5 * 1.15 + 1.0 * MM
    return name + (1.2 + 8.5 + 2.0 + 11.0) * MM + 4 * _BORDER
