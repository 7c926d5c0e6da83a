"""The line of the register under a finding, with a caret beneath the place."""

from __future__ import annotations

import unicodedata
from collections.abc import Mapping

from loopdoc.exchange.escaping import for_line
from loopdoc.register.place import Place

SHOWN_COLUMNS = 88
"""A longer line is shown in part, around the place: with line number and marks of omission 100 columns at most."""
_BEFORE_COLUMNS = 52
_TAB = "    "


class SourceLines:
    """Lines of the register's files, each file split once."""

    def __init__(self, sources: Mapping[str, bytes]) -> None:
        self._sources = sources
        self._lines: dict[str, list[str]] = {}

    def excerpt(self, place: Place) -> tuple[str, str] | None:
        """The line at a place, and blanks as wide as what stands before it; None where there is no such line."""
        if place.file not in self._lines:
            text = self._sources.get(place.file, b"").decode("utf-8-sig", "replace")
            self._lines[place.file] = text.replace("\r\n", "\n").split("\n")
        lines = self._lines[place.file]
        if place.line > len(lines) or place.file not in self._sources:
            return None
        shown = [_TAB if character == "\t" else for_line(character) for character in lines[place.line - 1].rstrip()]
        widths = [columns(part) for part in shown]
        at = min(place.column - 1, len(shown))
        first = at
        before = 0
        while first and before + widths[first - 1] <= _BEFORE_COLUMNS:
            first -= 1
            before += widths[first]
        if sum(widths) <= SHOWN_COLUMNS:
            first, before = 0, sum(widths[:at])
        last, width = first, 0
        while last < len(shown) and width + widths[last] <= SHOWN_COLUMNS:
            width += widths[last]
            last += 1
        start, end = "…" if first else "", "…" if last < len(shown) else ""
        return for_line(start + "".join(shown[first:last]) + end), " " * (before + len(start))


def columns(text: str) -> int:
    """How many columns of a terminal a text fills."""
    return sum(map(_columns, text))


def _columns(character: str) -> int:
    if unicodedata.combining(character) or unicodedata.category(character) in ("Mn", "Me"):
        return 0
    return 2 if unicodedata.east_asian_width(character) in "WF" else 1
