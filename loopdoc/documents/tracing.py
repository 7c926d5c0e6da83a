"""Where what a document states comes from: each value knows the line of the register, or what calculates it.

A register is read as plain values. For documents it is `traced`: each value then carries its origin. A catalogue that
traces (``language.tracing``) puts marks around what it prints of such a value, and the setter of prose turns the
marks into runs that know their source. So no sentence has to name its sources, and no second list can drift.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any, TypeVar

from loopdoc.register.model import Alarm, Initiator, InterlockAction, Origin, Part, Process, Register
from loopdoc.register.place import Place
from loopdoc.register.quantity import Gain, Quantity, Range

OPENS, PARTS, CLOSES = "\x02", "\x05", "\x03"
"""Marks around a printed value: no text of a register holds a control character, its reader refuses them."""
_MARK = re.compile(f"{OPENS}\\d+{PARTS}([^{CLOSES}]*){CLOSES}")
_MOST_LINES = 200
"""Lines of one text of the register in which a number of it is looked for."""

_P = TypeVar("_P", bound=Part)
_KEYS = {"origin", "tag", "number", "name"}
"""Fields that are keys of the register, not values in it."""
_SECTIONS = ("units", "loops", "final_elements", "instruments", "functions", "interlocks", "texts")


class Word(str):
    """A text of the register that knows where it is written."""

    __slots__ = ("origin",)
    origin: Origin

    def __new__(cls, text: str, origin: Origin) -> Word:
        found = super().__new__(cls, text)
        found.origin = origin
        return found


class Number(float):
    """A number of the register that knows where it is written."""

    __slots__ = ("origin",)
    origin: Origin

    def __new__(cls, value: float, origin: Origin) -> Number:
        found = super().__new__(cls, value)
        found.origin = origin
        return found


def end_of(written: Range, value: float) -> float:
    """One end of a range as a number that knows where the range is written."""
    return Number(value, written.origin) if written.origin else value


# ---------------------------------------------------------------- a register whose values know their origin


def traced(register: Register) -> Register:
    """The same register, each of whose values carries its origin."""
    sections: dict[str, Any] = {
        name: {key: _part(part) for key, part in getattr(register, name).items()} for name in _SECTIONS
    }
    return replace(register, **sections, deviations=tuple(_part(one) for one in register.deviations))


def _part(part: _P) -> _P:
    values = {name: getattr(part, name) for name in part.__dataclass_fields__}
    keys = _KEYS | {"kind"} if isinstance(part, Alarm) else _KEYS
    for name, value in values.items():
        if value is not None and name not in keys:
            values[name] = _value(value, part.origin, _steps(part, name))
    return type(part)(**values)


def _steps(part: Part, name: str) -> tuple[str | int, ...]:
    """Under which key a field of a part is written."""
    if isinstance(part, Initiator) and name in ("direction", "limit"):
        return ("trips",)
    if isinstance(part, InterlockAction) and name == "position":
        return ()
    if name == "lags" and isinstance(part, Process) and isinstance(part.lags, tuple) and len(part.lags) == 1:
        # `lag:` and `lags:` are one field.
        single = part.origin.place("lag") != part.origin.key()
        return ("lag",) if single else ("lags",)
    return (name,)


def _value(value: Any, origin: Origin, steps: tuple[str | int, ...]) -> Any:
    kind = type(value)
    if kind is str:
        return Word(value, _below(origin, steps))
    if kind is Quantity:
        return Quantity(value.value, value.unit, value.written, _below(origin, steps))
    if kind is float:
        return Number(value, _below(origin, steps))
    if kind is dict:
        return {key: _value(inner, origin, (*steps, key)) for key, inner in value.items()}
    if kind is tuple:
        if steps == ("lag",):
            return tuple(_value(inner, origin, steps) for inner in value)
        return tuple(_value(inner, origin, (*steps, at)) for at, inner in enumerate(value))
    if kind is Range or kind is Gain:
        return replace(value, origin=_below(origin, steps))
    return _part(value) if isinstance(value, Part) else value


def _below(origin: Origin, steps: tuple[str | int, ...]) -> Origin:
    return Origin(origin.source, (*origin.path, *steps))


# ---------------------------------------------------------------- marks, and the sources behind them


@dataclass(frozen=True, slots=True)
class Source:
    """Where one printed value comes from."""

    text: str
    """The value as printed."""
    tag: str
    path: tuple[str | int, ...] = ()
    """Where the value stands under the tag; empty for a calculated one."""
    place: Place | None = None
    """The line of the register that holds it; None for a calculated one."""
    what: str = ""
    """What a calculated value is."""
    calculated: str = ""
    """From what it is calculated."""
    ends: tuple[Source, ...] = ()
    """Of a band whose two ends are written apart: the source of each."""

    def printed(self, text: str) -> Source:
        """The same source of a value that is printed in another way."""
        return replace(self, text=text)

    def with_band(self, text: str, upper: Source) -> Source:
        """The source of a band from this value to another."""
        return replace(self, text=text, ends=(self, upper))


class Ledger:
    """The sources of one document's values, in the order in which they were printed."""

    def __init__(self, files: Mapping[str, bytes]) -> None:
        self._files = files
        self._lines: dict[str, list[str]] = {}
        self._sources: list[Source] = []

    def __getitem__(self, index: int) -> Source:
        return self._sources[index]

    def written(self, text: str, written: Any) -> str:
        """A printed value with a mark, where the value knows its origin."""
        origin = getattr(written, "origin", None)
        if not isinstance(origin, Origin) or not text:
            return text
        return self.mark(text, self.source(text, origin, inside=isinstance(written, Word)))

    def source(self, text: str, origin: Origin, *, inside: bool = False) -> Source:
        """The source of a printed value, or of a number ``inside`` a text of the register."""
        section, *below = origin.path or ("",)
        if section == "deviations":  # a list, each entry of which names its tag
            path = (section, *below[1:])
            written = origin.source.data
            entry = written["deviations"][below[0]] if isinstance(written, dict) and below else {}
            tag = str(entry.get("at", ""))
        else:
            tag, path = str(below[0]) if below else "", tuple(below[1:])
        place = origin.place()
        return Source(text, tag, path, self._line(text, place) if inside else place)

    def mark(self, text: str, source: Source) -> str:
        """A printed value with its source."""
        self._sources.append(source)
        return f"{OPENS}{len(self._sources) - 1}{PARTS}{unmarked(text)}{CLOSES}"

    def _line(self, text: str, place: Place) -> Place:
        """The line that holds a number of a text: one of several lines has its numbers further down."""
        if place.file not in self._lines:
            written = self._files.get(place.file, b"").decode("utf-8-sig", "replace")
            self._lines[place.file] = written.replace("\r\n", "\n").split("\n")
        number = re.search(r"\d+(?:[.,]\d+)?", text)
        if number is None:
            return place
        whole = re.compile(rf"(?<![\d.]){re.escape(number[0].replace(',', '.'))}(?![\d]|\.\d)")
        lines = self._lines[place.file]
        for line in range(place.line, min(place.line + _MOST_LINES, len(lines) + 1)):
            if whole.search(lines[line - 1]):
                return place if line == place.line else Place(place.file, line, 1)
        return place


def unmarked(text: str) -> str:
    """A text without marks, as it is read."""
    return _MARK.sub(r"\1", text) if OPENS in text else text
