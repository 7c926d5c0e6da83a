"""Why the format refuses a value, and what to write instead, told from the schema and the value alone."""

from __future__ import annotations

import json
import re
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from difflib import get_close_matches
from typing import Any

from loopdoc.register.place import Fault
from loopdoc.register.quantity import (
    QuantityError,
    parse_gain,
    parse_number_range,
    parse_quantity,
    parse_range,
)
from loopdoc.register.text import TextFile

Path = tuple[str | int, ...]

_HOLD = "`{hold: reason}`"
_SHOWN_CHARACTERS = 60
_COMPARED_CHARACTERS = 40
_SHORT_LIST = 4
_NEAR = 0.7  # of difflib's ratio: one or two letters wrong in a word
_BY_TAG = ("loops", "final_elements", "instruments", "functions", "interlocks")
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

_PARSERS: Mapping[str, Callable[[str], object]] = {
    "value": parse_quantity,
    "time": parse_quantity,
    "frequency": parse_quantity,
    "percentage": parse_quantity,
    "range": parse_range,
    "output range": parse_range,
    "gain": parse_gain,
    "ratio range": parse_number_range,
}


@dataclass(frozen=True, slots=True)
class _Expected:
    """What may stand at one place: its schema with the references followed and the hold left aside."""

    schema: Mapping[str, Any]
    may_be_held: bool

    @property
    def title(self) -> str:
        return str(self.schema.get("title", "value"))

    @property
    def example(self) -> Any:
        return self.schema.get("examples", [None])[0]

    @property
    def types(self) -> tuple[str, ...]:
        written = self.schema.get("type", "string")
        return (written,) if isinstance(written, str) else tuple(written)

    @property
    def keys(self) -> Mapping[str, Mapping[str, Any]]:
        return self.schema.get("properties", {})  # type: ignore[no-any-return]

    @property
    def entry(self) -> Mapping[str, Any] | None:
        """Schema of the entries by tag or number; None where the keys are fixed."""
        entry = self.schema.get("additionalProperties")
        return entry if isinstance(entry, Mapping) else None

    @property
    def is_mapping(self) -> bool:
        """A mapping in its own right; a value or a list that may be held has only the key `hold`."""
        return self.entry is not None or bool(set(self.keys) - {"hold"})

    @property
    def required(self) -> tuple[str, ...]:
        return tuple(self.schema.get("required", ()))

    @property
    def options(self) -> tuple[Any, ...]:
        return tuple(self.schema.get("enum", ()))


def _expected(schema: Mapping[str, Any], definitions: Mapping[str, Any]) -> _Expected:
    may_be_held = False
    while "$ref" in schema or "if" in schema:
        if "$ref" in schema:
            inner = definitions[schema["$ref"].removeprefix("#/$defs/")]
        elif "$ref" in schema["then"]:  # held, or what is wanted
            inner = schema["else"]
            may_be_held = True
        else:  # a mapping or a word
            inner = {**schema["then"], **schema["else"]}
        own = {
            key: value for key, value in schema.items() if key not in ("$ref", "if", "then", "else", "$defs")
        }
        schema = {**inner, **own}
    return _Expected(schema, may_be_held or "hold" in schema.get("properties", {}))


def explained(file: TextFile, path: Path, schema: Mapping[str, Any]) -> Iterator[Fault]:
    """The faults of the value at a path at which the schema refuses the file."""
    definitions = schema["$defs"]
    expected = [_expected(schema, definitions)]
    values: list[Any] = [file.data]
    for step in path:
        outer = expected[-1]
        if isinstance(step, int):
            below = outer.schema["items"]
        else:
            below = definitions["reason"] if step == "hold" else outer.keys.get(step) or outer.entry or {}
        expected.append(_expected(below, definitions))
        values.append(values[-1][step])
    yield from _Refused(file, path, tuple(expected), tuple(values), definitions).faults()


@dataclass(frozen=True, slots=True)
class _Refused:
    """A refused value with all that encloses it, outermost first."""

    file: TextFile
    path: Path
    expected: tuple[_Expected, ...]
    values: tuple[Any, ...]
    definitions: Mapping[str, Any]

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
        """What the value, or (by a negative end) one that encloses it, is called in a sentence."""
        path = self.path[:end]
        title = self.expected[len(path)].title
        if not path:
            return "the register" if title == "register" else "an included file"
        if len(path) == 1:
            return f"`{path[0]}`"
        section, which = path[0], path[1]
        if section == "texts":
            head = f"unit {which}'s texts"
        elif isinstance(which, int):
            head = f"{self.expected[2].title} {which + 1}"
        elif section in _BY_TAG:
            head = _shown(which)
        elif section == "units":
            head = f"unit {_shown(which)}"
        else:
            return f"the {self.expected[1].title}'s `{_shown(which)}`"
        if len(path) == 2:
            return head
        last = path[-1]
        if isinstance(last, int):
            name = f"`{path[-2]}` entry {last + 1}"
        elif self.expected[len(path) - 1].entry is not None:
            name = f"{title} {_shown(last)}"
        elif len(path) > 3 and path[-2] == "alarms":
            name = f"{str(last).replace('_', ' ')} alarm"
        else:
            name = title
        return f"{head}'s {name}" if " " not in head else f"{name} of {head}"

    def _subject(self) -> str:
        """The value's key and where it belongs, or its name where it is an entry."""
        if len(self.path) < 2 or isinstance(self.path[-1], int) or self.expected[-2].entry is not None:
            return self._name()
        return f"`{_shown(self.path[-1])}` of {self._name(-1)}"

    # -- keys

    def _partner(self) -> str:
        """The key that excludes this one in the mapping where both stand; empty where there is none."""
        if not self.path:
            return ""
        for key, schema in self.expected[-2].schema.get("dependentSchemas", {}).items():
            if key in self.values[-2] and schema["properties"].get(self.path[-1]) is False:
                return str(key)
        return ""

    def _of_hold(self, value: Mapping[str, Any]) -> Fault:
        beside = next(key for key in value if key != "hold")
        return self._fault(
            f"{self._subject()} is held and has `{_shown(beside)}` as well",
            f"keep {_HOLD} alone, or remove `hold`",
            key=True,
        )

    def _of_keys(self, expected: _Expected, value: Mapping[str, Any]) -> Iterator[Fault]:
        missing = [key for key in expected.required if key not in value]
        unknown = [key for key in value if key not in expected.keys] if expected.entry is None else []
        owner = (
            f"{expected.title} {self._name()}"
            if len(self.path) == 2 and self.path[0] in _BY_TAG
            else self._name()
        )
        for key in unknown:
            meant = self._meant(key, value)
            if meant in missing:
                missing.remove(meant)  # one mistake, one fault
            yield Fault(
                self.file.place((*self.path, key), key=True),
                f"`{_shown(key)}` is not a key of {owner}",
                f"write `{meant}`" if meant else self._elsewhere(key) or self._known_keys(),
                _pointer((*self.path, key)),
            )
        for key in missing:
            example = _expected(expected.keys[key], self.definitions).example
            yield self._fault(
                f"{self._name()} has no `{key}`", f"add it, as in `{key}: {_flow(example)}`", key=True
            )

    def _meant(self, key: str, value: Mapping[str, Any]) -> str:
        """The key of the same mapping that an unknown one stands for; empty where none is near."""
        free = [known for known in self.expected[-1].keys if known not in value]
        plain = key[:_COMPARED_CHARACTERS].lower().replace("-", "_").replace(" ", "_")
        if plain in free:
            return plain
        if _OTHER_WORDS.get(plain) in free:
            return _OTHER_WORDS[plain]
        if self._elsewhere(key):
            return ""
        return next(iter(get_close_matches(plain, free, n=1, cutoff=_NEAR)), "")

    def _elsewhere(self, key: str) -> str:
        """Where to move a key that belongs one level down or further up; empty where it belongs nowhere near."""
        entry = self.values[-1][key]
        homes = []
        for name, schema in self.expected[-1].keys.items():
            below = _expected(schema, self.definitions)
            if key in below.keys and below.is_mapping:
                inner = _expected(below.keys[key], self.definitions)
                if inner.is_mapping == isinstance(entry, dict):
                    homes.append(name)
            elif below.entry is not None and isinstance(entry, dict) and entry:
                if set(entry) <= set(_expected(below.entry, self.definitions).keys):
                    homes.append(name)
        if homes:
            return f"move it into {_either(homes)}"
        for depth in range(len(self.path) - 1, 1, -1):
            if key in self.expected[depth].keys:
                return f"move it up, to {self._name(depth)}"
        if not self.path and key in self.definitions["root"]["properties"]:
            return "move it to the root file, register.yaml"
        return ""

    def _known_keys(self) -> str:
        keys = list(self.expected[-1].keys)
        return f"write one of {_either(keys)}, or remove it"

    # -- values

    def _of_value(self, expected: _Expected, value: Any) -> Fault:
        subject, wanted = self._subject(), _wanted(expected)
        if value is None:
            needed = (
                not self.path or isinstance(self.path[-1], int) or self.path[-1] in self.expected[-2].required
            )
            return self._fault(f"{subject} is empty", wanted if needed else f"{wanted}, or leave the key out")
        if isinstance(value, dict):
            if "hold" in value and expected.may_be_held:
                return self._of_hold(value)
            return self._fault(f"{subject} is a mapping", wanted)
        if isinstance(value, list):
            return self._fault(f"{subject} is a list", wanted)
        if isinstance(value, str):
            return self._of_text(expected, value)
        if isinstance(value, bool):
            return self._fault(f"{subject} is `{str(value).lower()}`", wanted)
        if expected.title in _PARSERS:
            return self._fault(f"{subject} is the number {value}, without a unit", wanted)
        if "string" in expected.types and not expected.options:
            return self._fault(f"{subject} is the number {value}", f'write `"{value}"` in quotes')
        return self._fault(f"{subject} is the number {value}", wanted)

    def _of_text(self, expected: _Expected, value: str) -> Fault:
        subject, wanted = self._subject(), _wanted(expected, value)
        if not value.strip():
            return self._fault(f"{subject} has no text", wanted)
        if "number" in expected.types and _is_number(value):
            return self._fault(f"{subject} is in quotes", f"write `{value.strip()}` without quotes")
        if expected.title in _PARSERS:
            try:
                _PARSERS[expected.title](value)
            except QuantityError as error:
                reason, _, remedy = str(error).partition("; ")
                or_hold = f", or {_HOLD}" if expected.may_be_held and "such as" in remedy else ""
                return self._fault(
                    f"{subject}: {' '.join(reason.split())}", f"{remedy}{or_hold}" if remedy else wanted
                )
        return self._fault(f"{subject} is `{_shown(value)}`", wanted)


# ---------------------------------------------------------------- words


def _wanted(expected: _Expected, value: str = "") -> str:
    """What to write at a place, near to the text that stands there."""
    options = [str(option) for option in expected.options]
    if options and not expected.is_mapping:
        near = (
            get_close_matches(value[:_COMPARED_CHARACTERS].lower(), options, n=1)
            if len(options) > _SHORT_LIST
            else []
        )
        return f"write {_either(near or options)}"
    or_hold = f", or {_HOLD}" if expected.may_be_held else ""
    if "boolean" in expected.types:
        return "write `true` or `false`"
    if "array" in expected.types:
        return f"write a list, such as `{_flow(expected.example)}`{or_hold}"
    if options:
        return f"write {_either(options)}, or a mapping such as `{_flow(expected.schema['examples'][-1])}`"
    if expected.is_mapping:
        return f"write a mapping, such as `{_flow(expected.example)[1:-1]}`{or_hold}"
    if "number" in expected.types:
        return f"write a number without a unit, such as `{_flow(expected.example)}`{or_hold}"
    title = expected.title
    article = "" if title == "text" else "an " if title[0] in "aeiou" else "a "
    return f"write {article}{title} such as `{_flow(expected.example)}`{or_hold}"


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
        return (
            value
            if plain and value not in ("true", "false", "null")
            else json.dumps(value, ensure_ascii=False)
        )
    return json.dumps(value)


def _shown(value: object) -> str:
    """Text of the register as a message shows it: on one line, short, without backticks."""
    plain = " ".join(str(value).split()).replace("`", "'")
    return plain if len(plain) <= _SHOWN_CHARACTERS else plain[: _SHOWN_CHARACTERS - 1] + "…"


def _is_number(text: str) -> bool:
    return re.fullmatch(r"\s*[-+]?[0-9]+(\.[0-9]*)?([eE][-+]?[0-9]{1,3})?\s*", text) is not None


def _pointer(path: Path) -> str:
    return "".join("/" + str(step).replace("~", "~0").replace("/", "~1") for step in path)
