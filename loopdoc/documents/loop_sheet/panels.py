"""The shapes of a loop sheet's tables, and its values as text ready to print."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

from markupsafe import Markup

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.values import DASH, HOLD
from loopdoc.register.model import Hold

Pair = tuple[str, str]
"""A label and its value."""
Rows = tuple[tuple[Pair, ...], ...]
"""Rows of labels and values: one pair over the whole width, or two."""


@dataclass(frozen=True, slots=True)
class Panel:
    """Labels and values under a heading."""

    title: str
    rows: Rows


@dataclass(frozen=True, slots=True)
class Column:
    """A column of a table."""

    heading: str
    share: float
    """Of the table's width [%]."""
    number: bool = False
    """True where its cells are figures, which stand to the right."""

    @property
    def width(self) -> str:
        """As the style sheet takes it."""
        return f"{self.share:g}%"


@dataclass(frozen=True, slots=True)
class Table:
    """A table with a row of headings; the first cell of each row heads it."""

    title: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[str, ...], ...]


def cell(value: Any, language: Language = ENGLISH) -> str:
    """A value as text for a table, a hold marked."""
    return Markup('<span class="hold">{}</span>').format(HOLD) if isinstance(value, Hold) else language.shown(value)


def term(kind: str, written: str | Hold | None, language: Language) -> str:
    """A word of one of the register's closed lists as text for a table, a hold marked."""
    return language.term(kind, written) if isinstance(written, str) else cell(written, language)


def joined(parts: Iterable[str], separator: str = ", ") -> str:
    """Texts in one line, marks of holds kept; a dash where there are none."""
    found = list(parts)
    return Markup(separator).join(found) if found else DASH


def columns_with(language: Language, *found: tuple[str, float]) -> tuple[Column, ...]:
    """Columns by their English headings and shares of the table's width [%]."""
    return tuple(Column(language.label(heading), share) for heading, share in found)
