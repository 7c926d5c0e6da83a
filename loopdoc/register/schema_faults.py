"""Why the format refuses a value, and what to write instead, told from the schema and the value alone."""

from __future__ import annotations

import json
import re
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from difflib import get_close_matches
from typing import Any

from loopdoc.register.expected import Expected, Format, Path
from loopdoc.register.place import Fault
from loopdoc.register.quantity import (
    QuantityError,
    parse_gain,
    parse_number_range,
    parse_quantity,
    parse_range,
)
from loopdoc.register.text import TextFile

_HOLD = "`{hold: reason}`"
_SHOWN_CHARACTERS = 60
_COMPARED_CHARACTERS = 40
_COMPARED_KEYS = 100
_SHORT_LIST = 4
_NEAR = 0.7  # of difflib's ratio: one or two letters wrong in a word
_BY_TAG = ("loops", "final_elements", "instruments", "functions", "interlocks", "units", "texts")
_SIGN = re.compile(r"[<>≤≥]=? *(.+)", re.DOTALL)
_SUCH_AS = re.compile(r"such as `[^`]*`")
_ANSWER = re.compile(r"(write | or )`")
_UNSAFE_START = re.compile(r"[^A-Za-z0-9(+\-.]|[-.](?![0-9])")
_UNSAFE_INSIDE = re.compile(r"[\[\]{},\"#\n]|: |:$|^\s|\s$")

# What the trade also calls a key of the register.
_OTHER_WORDS = {
    "kp": "gain", "kc": "gain", "proportional_gain": "gain", "pb": "proportional_band",
    "integral": "reset", "integral_time": "reset", "reset_time": "reset", "ti": "reset",
    "derivative": "rate", "derivative_time": "rate", "rate_time": "rate", "td": "rate",
    "scan": "interval", "scan_time": "interval", "cycle_time": "interval", "sample_time": "interval",
    "sp": "setpoint", "pv": "measurement", "op": "output", "time_constant": "lag", "tau": "lag",
    "hysteresis": "deadband", "hh": "high_high", "hihi": "high_high", "ll": "low_low", "lolo": "low_low",
    "hi": "high", "lo": "low", "fail_position": "fails", "failure_position": "fails", "safe_position": "safe",
    "description": "service", "pid": "drawing", "p_and_id": "drawing", "address": "channel",
    "valves": "final_elements", "trip": "trips", "type": "kind", "vote": "voting",
}  # fmt: skip


def _parse_ratio_range(text: str) -> object:
    """Read the span of a ratio setting, which has a unit where the two flows differ in theirs."""
    return parse_number_range(text) if text[-1:].isdigit() else parse_range(text)


_PARSERS: Mapping[str, Callable[[str], object]] = {
    "value": parse_quantity,
    "time": parse_quantity,
    "frequency": parse_quantity,
    "percentage": parse_quantity,
    "range": parse_range,
    "output range": parse_range,
    "gain": parse_gain,
    "ratio range": _parse_ratio_range,
    "output value": parse_quantity,
}


def explained(file: TextFile, path: Path, format_: Format) -> Iterator[Fault]:
    """The faults of the value at a path at which the format refuses the file."""
    expected = [format_.expected()]
    values: list[Any] = [file.data]
    for step in path:
        expected.append(format_.below(expected[-1], step))
        values.append(values[-1][step])
    yield from _Refused(file, path, tuple(expected), tuple(values), format_).faults()


@dataclass(frozen=True, slots=True)
class _Refused:
    """A refused value with all that encloses it, outermost first."""

    file: TextFile
    path: Path
    expected: tuple[Expected, ...]
    values: tuple[Any, ...]
    format: Format

    def faults(self) -> Iterator[Fault]:
        expected, value = self.expected[-1], self.values[-1]
        partner = self._partner()
        if partner:
            yield self._fault(
                f"{self._name(-1)} has both `{partner}` and `{self.path[-1]}`", "keep one of them", key=True
            )
        elif not isinstance(value, dict) or not expected.is_mapping:
            yield self._of_value(expected, value)
        elif "hold" in value and expected.may_be_held:
            yield self._of_hold(value)
        elif not value and not expected.required:
            yield self._fault(f"{self._subject()} is empty", _wanted(expected))
        else:
            yield from self._of_keys(expected, value)

    def _fault(self, message: str, remedy: str, *, key: bool = False) -> Fault:
        return Fault(self.file.place(self.path, key=key), message, remedy, _pointer(self.path))

    # -- names

    def _name(self, end: int | None = None) -> str:
        """What the value, or (by a negative end) one that encloses it, is called in a sentence after its tag."""
        path = self.path[:end]
        expected = self.expected[len(path)]
        if not path:
            return "the register" if expected.title == "register" else "the file"
        last = path[-1]
        if len(path) == 1:
            return f"`{last}`" if expected.entry or not expected.is_mapping else f"the {expected.title}"
        if isinstance(last, int):
            return f"{expected.title} {last + 1}" if len(path) == 2 else f"entry {last + 1} of `{path[-2]}`"
        if len(path) > 2 and self.expected[len(path) - 1].entry:
            return f"the {expected.title} {_shown(last)}"
        if path[-2] == "alarms":
            return f"the {str(last).replace('_', ' ')} alarm"
        return f"the {expected.title}"

    def _subject(self) -> str:
        """The value's key and where it belongs, or its name where it is an entry."""
        if not self.path or isinstance(self.path[-1], int) or self.expected[-2].entry:
            return self._name()
        return f"`{_shown(self.path[-1])}`" + (f" of {self._name(-1)}" if len(self.path) > 1 else "")

    # -- keys

    def _partner(self) -> str:
        """The key that excludes this one in the mapping where both stand; empty where there is none."""
        if not self.path:
            return ""
        outer = self.values[-2]
        return next(
            (key for key, out in self.expected[-2].excludes.items() if key in outer and self.path[-1] in out), ""
        )

    def _of_hold(self, value: Mapping[str, Any]) -> Fault:
        beside = next(key for key in value if key != "hold")
        return self._fault(
            f"{self._subject()} is held and has `{_shown(beside)}` as well",
            f"keep {_HOLD} alone, or remove `hold`",
            key=True,
        )

    def _of_keys(self, expected: Expected, value: Mapping[str, Any]) -> Iterator[Fault]:
        missing = [key for key in expected.required if key not in value and not self._stands_near(key)]
        unknown = [key for key in value if key not in expected.keys] if expected.entry is None else []
        owner = (
            f"{_article(expected.title)} {expected.title}"
            if len(self.path) == 2 and self.path[0] in _BY_TAG
            else self._name()
        )
        free = [key for key in expected.keys if key not in value]
        below = {key: self.format.expected(schema) for key, schema in expected.keys.items()}
        for count, key in enumerate(unknown):
            # A mapping with very many unknown keys has no typing errors: it is something else altogether.
            meant = self._meant(key, free, below) if count < _COMPARED_KEYS else ""
            if meant in missing:
                missing.remove(meant)  # one mistake, one fault
            stray = bool(meant) and _shown(key) == meant
            yield Fault(
                self.file.place((*self.path, key), key=True),
                f"the key `{meant}` has a stray space" if stray else f"`{_shown(key)}` is not a key of {owner}",
                f"write `{meant}`" if meant else self._split_text(key, value) or self._remedy(key, below),
                _pointer((*self.path, key)),
            )
        for key in missing:
            example = f"{key}: {_flow(below[key].examples[0])}"
            yield self._fault(f"{self._name()} has no `{key}`", f"add it, as in `{example}`", key=True)

    def _split_text(self, key: str, value: Mapping[str, Any]) -> str:
        """What to write where a comma inside `{...}` has cut a sentence in two, and its rest looks like a key."""
        if value[key] is None and " " in key:
            return "put the text before it in quotes: inside `{...}` a comma ends a value"
        return ""

    def _stands_near(self, key: str) -> bool:
        """Whether a missing key stands where it is unknown, one level down or up, and a fault there says so."""
        near = [(self.expected[-2], self.values[-2])] if self.path else []
        near += [
            (self.format.expected(schema), self.values[-1].get(name)) for name, schema in self.expected[-1].keys.items()
        ]
        return any(
            isinstance(value, dict) and key in value and key not in expected.keys and expected.entry is None
            for expected, value in near
        )

    def _meant(self, key: str, free: list[str], below: Mapping[str, Expected]) -> str:
        """The key of the same mapping that an unknown one stands for; empty where none is near."""
        plain = _plain(key)
        if plain in free:
            return plain
        if _OTHER_WORDS.get(plain) in free:
            return _OTHER_WORDS[plain]
        if self._elsewhere(key, below):
            return ""
        return next(iter(get_close_matches(plain, free, n=1, cutoff=_NEAR)), "")

    def _remedy(self, key: str, below: Mapping[str, Expected]) -> str:
        """What to do with an unknown key that stands for no other key of its mapping."""
        same = _OTHER_WORDS.get(_plain(key))
        if same in below:
            return f"remove it; `{same}` says the same"
        if key == "hold":
            return f"hold its values one by one, as in `{next(iter(below))}: {{hold: reason}}`"
        return self._elsewhere(key, below) or f"write one of {_either(list(below))}, or remove it"

    def _elsewhere(self, key: str, below: Mapping[str, Expected]) -> str:
        """Where to move a key that belongs a level down or further up; empty where there is no such place."""
        value = self.values[-1][key]
        homes = []
        for name, expected in below.items():
            if expected.is_mapping and key in expected.keys:
                inner = self.format.expected(expected.keys[key])
                homes += [name] if inner.is_mapping == isinstance(value, dict) else []
            elif expected.entry is not None and isinstance(value, dict) and value:
                known = self.format.expected(expected.entry).keys
                homes += [name] if set(value) <= set(known) else []
        if homes:
            return f"move it into {_either(homes)}"
        for depth in range(len(self.path) - 1, 1, -1):
            if key in self.expected[depth].keys:
                return f"move it up, to {self._name(depth)}"
        if not self.path and key in self.format.definition("root")["properties"]:
            return "move it to the root file, register.yaml"
        return ""

    # -- values

    def _of_value(self, expected: Expected, value: Any) -> Fault:
        subject, wanted = self._subject(), _wanted(expected)
        or_hold = f", or {_HOLD}" if expected.may_be_held and _HOLD not in wanted else ""
        if value is None:
            last = self.path[-1] if self.path else 0
            needed = isinstance(last, int) or last in ("hold", *self.expected[-2].required)
            return self._fault(f"{subject} is empty", wanted if needed else f"{wanted}, or leave the key out")
        if isinstance(value, dict):
            if "hold" in value and expected.may_be_held:
                return self._of_hold(value)
            return self._fault(f"{subject} is a mapping", f"{wanted}{or_hold}")
        if isinstance(value, list):
            return self._fault(f"{subject} is a list", wanted)
        if isinstance(value, str):
            return self._of_text(expected, value)
        if isinstance(value, bool):
            return self._fault(f"{subject} is `{str(value).lower()}`", wanted)
        message = f"{subject} is the number {value}"
        if self.path == ("format",):
            return self._fault(message, f"write {_either(list(map(str, expected.options)))}, or use a later loopdoc")
        if expected.title in _PARSERS:
            return self._fault(f"{message}, without a unit", wanted)
        if expected.is_free_text:
            return self._fault(message, f'write `"{value}"` in quotes')
        if expected.title == "number" and value < 0:
            return self._fault(f"{message}, which is below 0", wanted)
        return self._fault(message, wanted)

    def _of_text(self, expected: Expected, value: str) -> Fault:
        subject, wanted = self._subject(), _wanted(expected, value)
        if not value.strip():
            return self._fault(f"{subject} has no text", wanted)
        holds_text = expected.item is not None and not self.format.expected(expected.item).is_mapping
        if holds_text and len(value) <= _SHOWN_CHARACTERS:
            return self._fault(f"{subject} is not a list", f"write `{_flow([value])}`")
        unquoted = "boolean" in expected.types and value in ("true", "false")
        unquoted |= _is_number(value) and ("number" in expected.types or value in map(str, expected.options))
        if unquoted:
            return self._fault(f"{subject} is in quotes", f"write `{value}` without quotes")
        if expected.title == "trip" and (sign := _SIGN.fullmatch(value)):
            direction = "above" if value[0] in ">≥" else "below"
            return self._fault(f"{subject} is `{_shown(value)}`", f"write `{direction} {_shown(sign[1])}`")
        trip = re.match(r"(above|below) +", value) if expected.title == "trip" else None
        word = trip[0] if trip else ""
        parse = parse_quantity if trip else _PARSERS.get(expected.title)
        try:
            if parse:
                parse(value[len(word) :])
        except QuantityError as error:
            return self._of_quantity(expected, word, error)
        return self._fault(f"{subject} is `{_shown(value)}`", wanted)

    def _of_quantity(self, expected: Expected, word: str, error: QuantityError) -> Fault:
        """The fault of a number with its unit, after a word such as `above`."""
        reason, remedy = (" ".join(part.split()) for part in (error.fault, error.remedy))
        if _SUCH_AS.search(remedy):
            remedy = _SUCH_AS.sub(lambda _: _such_as(expected), remedy)
            remedy += f", or {_HOLD}" if expected.may_be_held else ""
        else:
            remedy = _ANSWER.sub(rf"\1`{word}", remedy)
        return self._fault(f"{self._subject()}: {reason}", remedy or _wanted(expected))


# ---------------------------------------------------------------- words


def _wanted(expected: Expected, value: str = "") -> str:
    """What to write at a place, near to the text that stands there."""
    options = [str(option) for option in expected.options]
    or_hold = f", or {_HOLD}" if expected.may_be_held else ""
    if options and expected.is_mapping:
        return f"write {_either(options)}, or a mapping such as `{_flow(expected.examples[-1])}`"
    if options:
        written = value[:_COMPARED_CHARACTERS].lower()
        near = get_close_matches(written, options, n=1) if len(options) > _SHORT_LIST else []
        return f"write {_either(near or options)}"
    if "boolean" in expected.types:
        return "write `true` or `false`"
    if "array" in expected.types:
        return f"write a list, {_such_as(expected)}{or_hold}"
    if expected.is_mapping:
        return f"write a mapping, {_such_as(expected)}{or_hold}"
    if "number" in expected.types:
        return f"write a number without a unit, {_such_as(expected)}{or_hold}"
    title = expected.title
    what = title if title == "text" else f"{_article(title)} {title}"
    return f"write {what} {_such_as(expected)}{or_hold}"


def _article(noun: str) -> str:
    return "an" if noun[0] in "aeiou" else "a"


def _such_as(expected: Expected) -> str:
    """The examples of the schema, as a register writes them after a key."""
    shown = [
        _flow(example)[1:-1] if isinstance(example, dict) and len(example) == 1 else _flow(example)
        for example in expected.examples
    ]
    return f"such as {_either(shown)}"


def _plain(written: str) -> str:
    return "_".join(written[:_COMPARED_CHARACTERS].lower().replace("-", " ").split())


def _either(words: list[str]) -> str:
    quoted = [f"`{word}`" for word in words]
    return quoted[0] if len(quoted) == 1 else f"{', '.join(quoted[:-1])} or {quoted[-1]}"


def _flow(value: Any) -> str:
    """A value as a register writes it on one line."""
    if isinstance(value, dict):
        return "{" + ", ".join(f"{_flow(key)}: {_flow(inner)}" for key, inner in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(map(_flow, value)) + "]"
    if isinstance(value, str):
        plain = not (_is_number(value) or _UNSAFE_START.match(value) or _UNSAFE_INSIDE.search(value))
        return value if plain and value not in ("true", "false", "null") else json.dumps(value, ensure_ascii=False)
    return json.dumps(value)


def _shown(value: object) -> str:
    """Text of the register as a message shows it: on one line, short, without backticks."""
    plain = " ".join(str(value).split()).replace("`", "'")
    return plain if len(plain) <= _SHOWN_CHARACTERS else plain[: _SHOWN_CHARACTERS - 1] + "…"


def _is_number(text: str) -> bool:
    return re.fullmatch(r"\s*[-+]?[0-9]+(\.[0-9]*)?([eE][-+]?[0-9]{1,3})?\s*", text) is not None


def _pointer(path: Path) -> str:
    return "".join("/" + str(step).replace("~", "~0").replace("/", "~1") for step in path)
