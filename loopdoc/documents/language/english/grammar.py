"""English: how words are joined, and how values, numbers, times and dates are written."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

from loopdoc.documents import magnitudes, values, wording
from loopdoc.register.model import Hold, known
from loopdoc.register.quantity import Quantity, Range, display_number
from loopdoc.rules.values import duration

NO_BREAK = wording.NO_BREAK


class EnglishGrammar:
    """Lists, articles, values and the words of the register's closed lists."""

    code = "en"
    """ISO 639-1."""
    decimal_comma = False
    """Whether a comma stands in numbers where English has a point."""

    # -- words

    def label(self, text: str) -> str:
        """A heading or label; in English its own name, without what tells two of one name apart behind a bar."""
        return text.partition("|")[0]

    def term(self, kind: str, word: str) -> str:
        """A word of one of the register's closed lists, such as a mode or a fail position."""
        return word

    def reason(self, text: str) -> str:
        """Why something does not follow from the register, as the calculation says it."""
        return text

    def listed(self, items: Iterable[str]) -> str:
        """Items joined as a sentence does, by `and`."""
        return wording.listed(items)

    def either(self, items: Iterable[str]) -> str:
        """Items joined by `or`."""
        return wording.listed(items, "or")

    def counted(self, number: int, noun: str) -> str:
        """A number of things that a document counts, by their English name in the singular."""
        return wording.counted(number, noun)

    # -- values

    def number(self, value: float, digits: int = 6) -> str:
        """A calculated number, rounded."""
        return display_number(value, digits)

    def digits(self, text: str) -> str:
        """A number that stands in figures already, with the language's decimal sign."""
        return text

    def shown(self, written: Any) -> str:
        """A value as text; HOLD where it is held, a dash where it is not given."""
        return values.shown(written)

    def value(self, written: object) -> str:
        """A value with its unit that no line breaks; HOLD where it is held."""
        whole = isinstance(written, Quantity | Range)
        return self.shown(written).replace(" ", NO_BREAK) if whole else self.shown(written)

    def as_written(self, written: str | float) -> str:
        """A value of the register's text as documents print it."""
        return wording.as_written(written)

    def percent(self, number: float) -> str:
        """A percentage that no line breaks."""
        return f"{number:g}{NO_BREAK}%"

    def date(self, written: str) -> str:
        """An ISO date as documents print it; any other text as it is."""
        return written

    def unit(self, display: str) -> str:
        """A unit as documents print it."""
        return display

    def rounded(self, value: float | None) -> str:
        """A calculated number to three digits; a dash where there is none."""
        return magnitudes.number(value)

    def with_unit(self, value: float, unit: str) -> str:
        """A calculated number with its unit, which no line breaks."""
        return magnitudes.with_unit(value, unit)

    def duration(self, seconds: float) -> str:
        """A calculated time to three digits, in the unit an operator would say it in."""
        return magnitudes.duration(seconds)

    def rough_duration(self, seconds: float) -> str:
        """A calculated time to two digits."""
        return duration(seconds).replace(" ", NO_BREAK)

    def change(self, percent: float, own: Range) -> str:
        """A change of a measurement, given in percent of its span, in its unit."""
        return magnitudes.change(percent, own)

    def band(self, low: Quantity | Hold | None, high: Quantity | Hold | None) -> str:
        """Two limits as one band; one alone as `up to` or `from`; empty where neither is known."""
        low, high = known(low), known(high)
        if low and high and low.unit == high.unit:
            return self.value(Range(low.value, high.value, low.unit, low.written, high.written))
        if low and high:
            return self.between(self.value(low), self.value(high))
        if high:
            return self.up_to(self.value(high))
        return self.at_least(self.value(low)) if low else ""

    def between(self, low: str, high: str) -> str:
        """From one value to another."""
        return f"{low} to {high}"

    def up_to(self, high: str) -> str:
        """A band without a lower end."""
        return f"up to {high}"

    def at_least(self, low: str) -> str:
        """A band without an upper end."""
        return f"from {low}"

    def normally(self, usual: str) -> str:
        """The normal value, behind the limits."""
        return f"normally {usual}"

    # -- where it comes from: in a catalogue that traces, these carry the source

    def text(self, written: str) -> str:
        """A text of the register with its numbers."""
        return written

    def entry(self, written: str) -> str:
        """A text of the register that is a value in itself, such as the number of a drawing."""
        return written

    def calculated(self, text: str, tag: str, what: str, by: str) -> str:
        """A calculated value: what it is, of which tag, and by what it is calculated."""
        return text

    def message(self, text: str, tag: str, what: str, by: str) -> str:
        """What the check says at a tag, with its numbers: what these are, and which rule gives them."""
        return text

    def quoted(self, text: str) -> str:
        """Words of somebody else in quotation marks."""
        return f"“{text}”"
