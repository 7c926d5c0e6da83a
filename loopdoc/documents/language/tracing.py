"""A catalogue that traces: it prints as its language does, and marks each value with its source."""

from __future__ import annotations

import re
from collections.abc import Callable
from functools import lru_cache
from typing import cast

from loopdoc.documents.language.english import English
from loopdoc.documents.tracing import OPENS, Ledger, Source, Word
from loopdoc.documents.wording import quantity_in_text, with_printed_units
from loopdoc.register.model import Hold, known
from loopdoc.register.quantity import Quantity

# A number of a text, but no part of a tag, a date, a time of day, a pointer or a quoted key.
_NUMBER = r"(?<![\w.,:/+−-])[-+−]?\d+(?:[.,]\d+)*(?![\w/:-]|[.,]\d)"


@lru_cache(maxsize=1)
def _in_text() -> re.Pattern[str]:
    quantity = quantity_in_text().pattern
    return re.compile(rf"\{{[^{{}}]*\}}|`[^`]*`|(?P<quantity>{quantity})|(?P<number>{_NUMBER})")


def tracing(language: English, ledger: Ledger) -> English:
    """The same catalogue, with what it prints of the register marked in a ledger."""
    catalogue = type(language)
    found = cast(_Tracing, type(f"Traced{catalogue.__name__}", (_Tracing, catalogue), {})())
    found.ledger = ledger
    return found


class _Tracing(English):
    """What stands before a language's own catalogue."""

    ledger: Ledger

    def value(self, written: object) -> str:
        if isinstance(written, Word):
            return self.text(written)
        return self.ledger.written(super().value(written), written)

    def number(self, value: float, digits: int = 6) -> str:
        return self.ledger.written(super().number(value, digits), value)

    def percent(self, number: float) -> str:
        return self.ledger.written(super().percent(number), number)

    def term(self, kind: str, word: str) -> str:
        return self.ledger.written(super().term(kind, word), word)

    def as_written(self, written: str | float) -> str:
        return self.ledger.written(super().as_written(written), written)

    def date(self, written: str) -> str:
        return self.ledger.written(super().date(written), written)

    def band(self, low: Quantity | Hold | None, high: Quantity | Hold | None) -> str:
        told = super().band(low, high)
        first, last = known(low), known(high)
        if OPENS in told or first is None or last is None or first.origin is None or last.origin is None:
            return told
        # Two ends in one unit are printed as one range, which has no place of its own.
        upper = self.ledger.source(self.shown(last), last.origin)
        lower = self.ledger.source(self.shown(first), first.origin)
        return self.ledger.mark(told, lower.with_band(told, upper))

    def text(self, written: str) -> str:
        if not isinstance(written, Word):
            return written
        return _each_number(written, lambda printed: self.ledger.written(printed, written))

    def entry(self, written: str) -> str:
        return self.ledger.written(written, written)

    def calculated(self, text: str, tag: str, what: str, by: str) -> str:
        return self.ledger.mark(text, Source(text, tag, what=what, calculated=by)) if text else text

    def message(self, text: str, tag: str, what: str, by: str) -> str:
        source = Source("", tag, what=what, calculated=by)
        return _each_number(text, lambda printed: self.ledger.mark(printed, source.printed(printed)))


def _each_number(text: str, marked: Callable[[str], str]) -> str:
    """A text with each of its numbers, and their units, marked."""

    def number(found: re.Match[str]) -> str:
        return marked(with_printed_units(found[0])) if found["quantity"] or found["number"] else found[0]

    return _in_text().sub(number, text)
