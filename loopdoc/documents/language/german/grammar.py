"""German: how words are joined and declined, and how values, numbers, times and dates are written.

Decimal comma, digits grouped in threes from five on by a thin space (DIN 1333, DIN 5008), dates as 20.11.2026.
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from datetime import date
from typing import Any

from loopdoc.documents import magnitudes, values
from loopdoc.documents.language.english.grammar import NO_BREAK, EnglishGrammar
from loopdoc.documents.language.german.labels import LABELS
from loopdoc.documents.language.german.reasons import translated
from loopdoc.documents.language.german.terms import TERMS
from loopdoc.documents.language.noun import Noun
from loopdoc.documents.wording import as_written
from loopdoc.register.quantity import (
    Gain,
    Quantity,
    QuantityError,
    Range,
    display_gain,
    display_number,
    display_quantity,
    display_range,
    parse_gain,
    parse_quantity,
    parse_range,
)
from loopdoc.rules.values import duration

THIN_SPACE = "\u202f"
"""A narrow space at which no line is broken."""
_NUMBER = re.compile(r"(?<![\w.,])(\d+)(?:\.(\d+))?")
_NUMBERS = ("kein", "ein", "zwei", "drei", "vier", "fünf", "sechs", "sieben", "acht", "neun", "zehn", "elf", "zwölf")
_UNITS = {
    "week": "Woche", "weeks": "Wochen", "month": "Monat", "months": "Monate", "year": "Jahr", "years": "Jahre",
    "rpm": "1/min", "wt%": "Gew.-%", "vol%": "Vol.-%", "mol%": "Mol-%",
}  # fmt: skip
_COUNTED = {
    # noun: gender, singular, plural
    "control scheme": ("f", "Regelung", "Regelungen"),
    "indicator": ("f", "Anzeige", "Anzeigen"),
    "interlock": ("f", "Verriegelung", "Verriegelungen"),
    "loop": ("m", "Regelkreis", "Regelkreise"),
}
ARTICLES = {
    # gender: nominative, dative, accusative
    "m": ("der", "dem", "den"),
    "f": ("die", "der", "die"),
    "n": ("das", "dem", "das"),
}


def with_article(name: Noun, case: int) -> str:
    """A noun with its definite article: nominative 0, dative 1, accusative 2."""
    return f"{ARTICLES[name.gender][case]} {name}"


class GermanGrammar(EnglishGrammar):
    """Lists, articles, values and the words of the register's closed lists."""

    code = "de"
    decimal_comma = True

    # -- words

    def label(self, text: str) -> str:
        return LABELS[text]

    def term(self, kind: str, word: str) -> str:
        return TERMS[kind][word]

    def reason(self, text: str) -> str:
        return translated(text)

    def listed(self, items: Iterable[str]) -> str:
        return _joined(items, "und")

    def either(self, items: Iterable[str]) -> str:
        return _joined(items, "oder")

    def counted(self, number: int, noun: str) -> str:
        gender, one, many = _COUNTED[noun]
        if number in (0, 1):
            return f"{_NUMBERS[number]}{'e' if gender == 'f' else ''} {one}"
        return f"{number_word(number)} {many}"

    # -- values

    def number(self, value: float, digits: int = 6) -> str:
        return self.digits(display_number(value, digits))

    def digits(self, text: str) -> str:
        return _NUMBER.sub(_grouped, text)

    def shown(self, written: Any) -> str:
        match written:
            case Quantity():
                return self._with_unit(display_quantity(written))
            case Range():
                low, high = display_range(written).split(" to ")
                return f"{self.digits(low)} bis {self._with_unit(high)}"
            case Gain():
                changed, _, moved = self._with_unit(display_gain(written)).partition(" per ")
                number, space, unit = changed.partition(NO_BREAK)
                return f"{number}{space}{self.unit(unit)} je {self.unit(moved)}"
            case bool():
                return "ja" if written else "nein"
            case int() | float():
                return self.number(float(written))
            case tuple():
                return ", ".join(self.shown(item) for item in written)
            case _:
                return values.shown(written)

    def _with_unit(self, text: str) -> str:
        number, space, unit = text.partition(NO_BREAK)
        return f"{self.digits(number)}{space}{self.unit(unit)}"

    def as_written(self, written: str | float) -> str:
        if not isinstance(written, str):
            return self.shown(written)
        side, _, limit = written.partition(" ")
        if side in ("above", "below"):
            return self.side(side, self.as_written(limit)).replace(" ", NO_BREAK)
        for parse in (parse_quantity, parse_range, parse_gain):
            try:
                return self.shown(parse(written)).replace(" ", NO_BREAK)
            except QuantityError:
                continue
        return as_written(written)

    def side(self, side: str, limit: str) -> str:
        """`über 98 °C`."""
        return f"{ {'above': 'über', 'below': 'unter'}.get(side, side) } {limit}".replace("  ", " ")

    def percent(self, number: float) -> str:
        return f"{self.digits(f'{number:g}')}{NO_BREAK}%"

    def date(self, written: str) -> str:
        try:
            return date.fromisoformat(written).strftime("%d.%m.%Y")
        except ValueError:
            return written

    def unit(self, display: str) -> str:
        return _UNITS.get(display, display)

    def rounded(self, value: float | None) -> str:
        return self.digits(magnitudes.number(value))

    def with_unit(self, value: float, unit: str) -> str:
        return self._with_unit(magnitudes.with_unit(value, unit))

    def duration(self, seconds: float) -> str:
        if seconds == float("inf"):
            return "nicht innerhalb der gezeigten Zeit"
        return self._with_unit(magnitudes.duration(seconds))

    def rough_duration(self, seconds: float) -> str:
        return self._with_unit(duration(seconds).replace(" ", NO_BREAK))

    def change(self, percent: float, own: Range) -> str:
        return self._with_unit(magnitudes.change(percent, own))

    def between(self, low: str, high: str) -> str:
        return f"{low} bis {high}"

    def up_to(self, high: str) -> str:
        return f"bis {high}"

    def at_least(self, low: str) -> str:
        return f"ab {low}"

    def normally(self, usual: str) -> str:
        return f"normal {usual}"

    def quoted(self, text: str) -> str:
        return f"„{text}“"


def number_word(number: int) -> str:
    """A small number in words, a larger one in digits."""
    return _NUMBERS[number] if 2 <= number < len(_NUMBERS) else str(number)


def _joined(items: Iterable[str], word: str) -> str:
    found = list(items)
    if len(found) < 2:
        return "".join(found)
    return f"{', '.join(found[:-1])} {word} {found[-1]}"


def _grouped(found: re.Match[str]) -> str:
    whole, part = found[1], found[2]
    if len(whole) > 4:
        whole = re.sub(r"(?<=\d)(?=(\d{3})+$)", THIN_SPACE, whole)
    return f"{whole},{part}" if part else whole
