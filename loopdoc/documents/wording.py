"""English for documents: lists, articles, numbers of things, sentences, and text that keeps tags and values whole."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache

from loopdoc.documents.tracing import CLOSES, OPENS, PARTS, Ledger, Source, unmarked
from loopdoc.documents.values import HOLD, shown
from loopdoc.register.model import Hold, Register, known
from loopdoc.register.pointer import POINTER, Unresolved, origin_of, pointed
from loopdoc.register.quantity import Quantity, QuantityError, Range, parse_gain, parse_quantity, parse_range
from loopdoc.register.units import UNITS

NO_BREAK = "\u00a0"
"""A space at which no line is broken."""

# ---------------------------------------------------------------- words

_NUMBERS = ("no", "one", "two", "three", "four", "five", "six", "seven", "eight", "nine", "ten", "eleven", "twelve")
# A letter or a tag is spoken by the names of its letters: an F content, an LI, but a U, a PT.
_SPOKEN_WITH_A_VOWEL = "AEFHILMNORSX"
_SPELT_LETTERS = 3
"""Capitals up to this many are spelt out when spoken; more are taken for a word, as HOLD is."""
_SOUNDED_AS_CONSONANT = re.compile(r"(?i)(uni(?!n)|use|usu|util|eu|one\b|once\b|u[bkr]i)")
_A_SYMBOL = re.compile(r"A (and|as|at|by|from|in|is|of|or|to) ")
_NO_VERB = re.compile(r"(Gas|This|Its|Always|Sometimes|Series|Minus|Plus)\b")
_SILENT_H = re.compile(r"(?i)(hour|honest|heir)")


def listed(items: Iterable[str], word: str = "and") -> str:
    """Join items as a sentence does: `a`, `a and b`, `a, b and c`."""
    found = list(items)
    if len(found) < 2:
        return "".join(found)
    return f"{', '.join(found[:-1])} {word} {found[-1]}"


def number_word(number: int) -> str:
    """A small number in words, a larger one in digits."""
    return _NUMBERS[number] if 0 <= number < len(_NUMBERS) else str(number)


def plural(noun: str) -> str:
    """The plural of a noun, or of a phrase that ends in its noun."""
    if re.search(r"(s|x|z|ch|sh)$", noun):
        return f"{noun}es"
    if re.search(r"[^aeiou]y$", noun):
        return f"{noun[:-1]}ies"
    return f"{noun}s"


def counted(number: int, noun: str) -> str:
    """A number of things: `no loop`, `one loop`, `three loops`."""
    return f"{number_word(number)} {noun if number in (0, 1) else plural(noun)}"


def article(phrase: str) -> str:
    """`a` or `an`, by how the phrase is spoken."""
    word = re.match(r"[^\W\d_]+", phrase)
    if word is None:
        return "an" if re.match(r"(8|11|18)(?!\d)|8\d", phrase) else "a"
    letters = word.group()
    if letters.isupper() and len(letters) <= _SPELT_LETTERS:
        return "an" if letters[0] in _SPOKEN_WITH_A_VOWEL else "a"
    if _SILENT_H.match(letters):
        return "an"
    return "an" if letters[0] in "aeiouAEIOU" and not _SOUNDED_AS_CONSONANT.match(letters) else "a"


def with_article(phrase: str) -> str:
    """A phrase with its indefinite article."""
    return f"{article(phrase)} {phrase}"


def lower_first(text: str) -> str:
    """A name to stand inside a sentence: an ordinary first word loses its capital, a symbol or a tag keeps it."""
    word = re.match(r"[^\W\d_]+", text)
    if word is None or len(word.group()) < 2 or not word.group()[1:].islower():
        return text
    if re.match(r"[-_/.]?\d", text[word.end() :]):  # Pt100
        return text
    return text[0].lower() + text[1:]


def clause(text: str) -> str:
    """A sentence of the register to stand inside another one: without its first capital and its last stop."""
    inner = text.strip().rstrip(".")
    if re.match(r"(A|An|The|It|If|In|On|At|No) ", inner) and not _A_SYMBOL.match(inner):
        return inner[0].lower() + inner[1:]
    return lower_first(inner)


def upper_first(text: str) -> str:
    """A text to begin a sentence."""
    return text[:1].upper() + text[1:]


def sentence(text: str) -> str:
    """A text as a sentence: a capital first, a stop last, no space twice."""
    tidy = re.sub(r"[ \t\n]+", " ", text).strip(" ")
    if not tidy:
        return ""
    return upper_first(tidy if tidy[-1] in ".!?" or tidy.endswith((".”", ".“", '."')) else f"{tidy.rstrip(',;:')}.")


def sentences(*texts: str) -> str:
    """Sentences in one paragraph; empty ones are left out."""
    return " ".join(found for found in map(sentence, texts) if found)


def told_of(subject: str, purpose: str) -> str:
    """A purpose such as `Keeps the drum full.` told of its subject: `LIC-2022 keeps the drum full.`"""
    verb = re.match(r"[A-Z][a-z]*[^su\W]s\b", purpose) and not _NO_VERB.match(purpose)
    return sentence(f"{subject}{' ' if verb else ': '}{lower_first(purpose)}")


# ---------------------------------------------------------------- values


def value(written: object) -> str:
    """A value with its unit that no line breaks; HOLD where it is held."""
    return shown(written).replace(" ", NO_BREAK) if isinstance(written, Quantity | Range) else shown(written)


def band(low: Quantity | Hold | None, high: Quantity | Hold | None) -> str:
    """Two limits as one band; one alone as `up to` or `from`; empty where neither is known."""
    low, high = known(low), known(high)
    if low and high and low.unit == high.unit:
        return value(Range(low.value, high.value, low.unit, low.written, high.written))
    if low and high:
        return f"{value(low)} to {value(high)}"
    if high:
        return f"up to {value(high)}"
    return f"from {value(low)}" if low else ""


def as_written(written: str | float) -> str:
    """A value of the register's text as documents print it: `98 degC` as 98 °C, `above 1 barg` as above 1 bar(g)."""
    if not isinstance(written, str):
        return shown(written)
    side, _, limit = written.partition(" ")
    if side in ("above", "below"):
        return f"{side}{NO_BREAK}{as_written(limit)}"
    for parse in (parse_quantity, parse_range, parse_gain):
        try:
            return shown(parse(written)).replace(" ", NO_BREAK)
        except QuantityError:
            continue
    return written


@lru_cache(maxsize=1)
def quantity_in_text() -> re.Pattern[str]:
    """A value with its unit as the register's prose writes it."""
    symbols = "|".join(re.escape(symbol) for symbol in sorted(UNITS, key=len, reverse=True) if symbol != "fraction")
    return re.compile(rf"(?<![\w./-])([-+]?\d+(?:\.\d+)?) ({symbols})(?![\w/(])")


def with_printed_units(text: str) -> str:
    """Prose in which values are written as in the register, with the units as documents print them."""

    def printed(found: re.Match[str]) -> str:
        return f"{found[1].replace('-', '−')}{NO_BREAK}{UNITS[found[2]].display}"

    return quantity_in_text().sub(printed, text)


# ---------------------------------------------------------------- runs


@dataclass(frozen=True, slots=True)
class Run:
    """A piece of text that is set in one way."""

    text: str
    kind: str = "text"
    """text, tag, value, code, strong, hold or unresolved."""
    sheet: str = ""
    """Address of another document of the issue, for the screen only; empty where there is none."""
    anchor: str = ""
    """Name of a place in this document; empty where it is not one."""
    before: str = ""
    """What stands against it in front, such as a bracket: no line is broken there."""
    after: str = ""
    """What stands against it behind, such as a comma."""
    source: Source | None = None
    """Where a value comes from; None for what is no value, or where the document does not trace it."""
    note: str = ""
    """What a pointer resting on it tells, for the screen only."""


Prose = tuple[Run, ...]
"""Text ready to be set, in order."""


@dataclass(frozen=True, slots=True)
class Target:
    """Where a tag leads: another document, or a place in this one."""

    sheet: str = ""
    anchor: str = ""


_PIECE = re.compile(
    rf"{OPENS}(?P<source>\d+){PARTS}(?P<printed>[^{CLOSES}]*){CLOSES}|`(?P<code>[^`]+)`"
    rf"|(?P<value>[^\s(\[{NO_BREAK}{OPENS}]*(?:{NO_BREAK}[^\s{NO_BREAK}{OPENS}]+)+)"
    rf"|(?P<word>[^\W_](?:[\w./-]*\w)?)|(?P<other>\s+|[^\w\s`.+−{OPENS}-]+|.)",
    re.DOTALL,
)


class Setter:
    """Sets prose: finds its pointers, tags and values, so that none is broken or misspelt."""

    def __init__(
        self,
        register: Register,
        tags: Iterable[str],
        target: Callable[[str], Target],
        written: Callable[[str | float], str] | None = None,
        *,
        ledger: Ledger | None = None,
        sourced: Callable[[Source], tuple[str, str]] = lambda source: ("", ""),
    ) -> None:
        self._register = register
        self._tags = frozenset(tags)
        self._target = target
        self._written = written or as_written
        """How values that the register's prose points at are printed: in the language of that prose."""
        self._ledger = ledger
        """The sources behind the marks of a catalogue that traces."""
        self._sourced = sourced
        """Address and note of a source."""

    def prose(self, text: str) -> Prose:
        """Set one text; a pointer that leads nowhere, or that is quoted as code, shows as it was written."""
        runs: list[Run] = []
        at = 0
        for found in POINTER.finditer(text):
            if text.count("`", 0, found.start()) % 2:
                continue
            self._plain(text[at : found.start()], runs)
            self._pointed(found[1], runs)
            at = found.end()
        self._plain(text[at:], runs)
        return _merged(runs)

    def _pointed(self, pointer: str, runs: list[Run]) -> None:
        found = pointed(self._register, pointer)
        if isinstance(found, Unresolved):
            runs.append(Run(f"{{{pointer}}}", "unresolved"))
        elif isinstance(found, Hold):
            runs.append(Run(HOLD, "hold"))
        elif isinstance(found, str) and " " in self._written(found):
            self._plain(found, runs)  # a text, not a value: it may be broken like any other
        elif self._ledger and (origin := origin_of(self._register, pointer)):
            runs.append(self._from(self._ledger.source(self._written(found), origin)))
        else:
            runs.append(Run(self._written(found), "value"))

    def _from(self, source: Source) -> Run:
        """A value that knows its source; only one of several words may be broken, if it has plain spaces."""
        sheet, note = self._sourced(source)
        kind = "value" if NO_BREAK in source.text else "word"
        return Run(source.text, kind, sheet, source=source, note=note)

    def _plain(self, text: str, runs: list[Run]) -> None:
        for piece in _PIECE.finditer(with_printed_units(text)):
            written = piece.group()
            if piece["source"] and self._ledger:
                runs.append(self._from(self._ledger[int(piece["source"])].printed(piece["printed"])))
            elif piece["code"]:
                runs.append(Run(piece["code"], "code"))
            elif piece["value"]:
                whole = _without_punctuation(written)
                runs.extend((Run(whole, "value"), Run(written[len(whole) :])))
            elif written in self._tags:
                target = self._target(written)
                runs.append(Run(written, "tag", target.sheet, target.anchor))
            else:
                runs.append(Run(written, "hold" if written == HOLD else "text"))


def _without_punctuation(written: str) -> str:
    whole = written.rstrip(".,;:!?")
    if whole.endswith(")") and whole.count("(") < whole.count(")"):
        return _without_punctuation(whole[:-1])
    return whole


def _merged(runs: Sequence[Run]) -> Prose:
    """Neighbouring pieces of plain text as one; what stands against a tag or a value is given to it."""
    merged: list[Run] = []
    for run in runs:
        if not run.text:
            continue
        if merged and run.kind == merged[-1].kind == "text":
            merged[-1] = Run(merged[-1].text + run.text)
        else:
            merged.append(run)
    for index, run in enumerate(merged):
        if run.kind == "text":
            continue
        before = after = ""
        if index and merged[index - 1].kind == "text":
            text = merged[index - 1].text
            at = len(text)
            while at and (text[at - 1] == NO_BREAK or not text[at - 1].isspace()):
                at -= 1
            merged[index - 1], before = Run(text[:at]), text[at:]
        if index + 1 < len(merged) and merged[index + 1].kind == "text":
            text = merged[index + 1].text
            at = 0
            while at < len(text) and (text[at] == NO_BREAK or not text[at].isspace()):
                at += 1
            after, merged[index + 1] = text[:at], Run(text[at:])
        merged[index] = replace(run, before=before, after=after)
    return tuple(run for run in merged if run.text)


def plain(prose: Prose) -> str:
    """The text of runs, without how it is set."""
    return "".join(f"{run.before}{run.text}{run.after}" for run in prose)


def grouped(pairs: Iterable[tuple[str, str]]) -> dict[str, tuple[str, ...]]:
    """What stands against each key, in order of first appearance, nothing twice; as it reads, without marks."""
    found: dict[str, tuple[str, dict[str, str]]] = {}
    for key, item in pairs:
        _, items = found.setdefault(unmarked(key), (key, {}))
        items.setdefault(unmarked(item), item)
    return {key: tuple(items.values()) for key, items in found.values()}
