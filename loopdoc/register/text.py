"""YAML text to plain data and the place of every key and value.

The text is read as YAML 1.2 core (``NO`` is a word, ``12:30`` is text). Anchors, aliases, tags, merge keys,
second documents, duplicate keys and control characters are refused: each of them lets two readers of the
same file see two different plants.
"""

from __future__ import annotations

import re
from bisect import bisect_right
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Any, NamedTuple

import yaml
from yaml._yaml import CParser
from yaml.events import AliasEvent, MappingEndEvent, MappingStartEvent, ScalarEvent, SequenceEndEvent, StreamEndEvent

from loopdoc.register.place import Fault, Place

MAX_FILE_BYTES = 32 * 1024 * 1024
MAX_DEPTH = 40
MAX_SCALAR_CHARACTERS = 20_000
_SHOWN_CHARACTERS = 40

# What a text may not carry: control characters (a terminal would obey them), bidirectional marks (a reviewer
# would see another order than the program), line and paragraph separators (the parser breaks the line there,
# so that a comment could hide a key, and an editor does not) and what no UTF-8 text can hold.
_FORBIDDEN = re.compile(
    "[\x00-\x08\x0b-\x1f\x7f-\x9f\u061c\u200e\u200f\u2028-\u202e\u2066-\u2069\ud800-\udfff\ufeff\ufffe\uffff]"
)
_INTEGER = re.compile(r"[-+]?[0-9]{1,18}")
_LEADING_ZERO = re.compile(r"[-+]?0[0-9]+(\.[0-9]*)?([eE][-+]?[0-9]+)?")
_FLOAT = re.compile(r"[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]{1,3})?")
_NOT_FINITE = re.compile(r"[-+]?\.(inf|Inf|INF)|\.(nan|NaN|NAN)")
_OPENED = re.compile("flow (mapping|sequence)|quoted scalar")
_WORDS: dict[str, bool | None] = {
    "null": None, "Null": None, "NULL": None, "~": None, "": None,
    "true": True, "True": True, "TRUE": True, "false": False, "False": False, "FALSE": False,
}  # fmt: skip

Data = dict[str, Any] | list[Any] | str | int | float | bool | None


class Spot(NamedTuple):
    """Where one value of the text stands: its key, itself, and what is inside it. Lines and columns from 1."""

    key_line: int
    key_column: int
    line: int
    column: int
    inside: dict[str, Spot] | list[Spot] | None


@dataclass(frozen=True, slots=True)
class TextFile:
    """One file of the register as read."""

    name: str
    """Path relative to the register's folder, with forward slashes."""
    data: Data
    """Plain data: mappings with text keys, lists, text, numbers, booleans, None."""
    spot: Spot
    """Where the root stands, and through it everything."""

    def place(self, path: tuple[str | int, ...], *, key: bool = False) -> Place:
        """Place of the value (or of its key) at ``path``; of the nearest enclosing key where the path ends early."""
        spot = self.spot
        for step in path:
            inside = spot.inside
            if isinstance(inside, dict):
                found = inside.get(str(step))
            elif isinstance(inside, list) and isinstance(step, int) and step < len(inside):
                found = inside[step]
            else:
                found = None
            if found is None:
                return Place(self.name, spot.key_line, spot.key_column)
            spot = found
        if key:
            return Place(self.name, spot.key_line, spot.key_column)
        return Place(self.name, spot.line, spot.column)

    def path_at(self, line: int, column: int) -> tuple[str | int, ...]:
        """Path of the value (or of the key) at a place; the inverse of `place`.

        A mapping in lines of its own begins where its first key does; the place is then taken for the key's, but for
        the keys of a mapping that is an entry of a list: that is known by where it begins.
        """
        path: tuple[str | int, ...] = ()
        spot = self.spot
        while spot.inside and (spot.key_line, spot.key_column) != (line, column):
            steps = list(spot.inside) if isinstance(spot.inside, dict) else range(len(spot.inside))
            spots = list(spot.inside.values()) if isinstance(spot.inside, dict) else spot.inside
            index = bisect_right(spots, (line, column), key=lambda inner: (inner.key_line, inner.key_column)) - 1
            if index < 0:
                break
            path, spot = (*path, steps[index]), spots[index]
        return path


class _Refused(Exception):
    """Carries a fault out of the builder; never leaves this module."""

    def __init__(self, line: int, column: int, message: str, remedy: str) -> None:
        self.line, self.column, self.message, self.remedy = line, column, message, remedy


def read_text(content: bytes, name: str) -> TextFile | Fault:
    """Read one file of the register, or say why it cannot be read as one."""

    def fault(line: int, column: int, message: str, remedy: str) -> Fault:
        return Fault(Place(name, line, column), message, remedy)

    if len(content) > MAX_FILE_BYTES:
        return fault(1, 1, f"the file is larger than {MAX_FILE_BYTES // 2**20} MiB", "split it and include the parts")
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        before_text = error.object[: error.start].decode("utf-8")
        return fault(*_end(before_text), "this is not UTF-8 text", "save the file as plain text in UTF-8")
    plain = text.replace("\r\n", "\n")
    forbidden = _FORBIDDEN.search(plain)
    if forbidden:
        return fault(
            *_end(plain[: forbidden.start()]),
            f"a control character (U+{ord(forbidden.group()):04X}) stands in the text",
            "delete the character",
        )
    try:
        return _Builder(text, name).build()
    except _Refused as refused:
        return fault(refused.line, refused.column, refused.message, refused.remedy)
    except yaml.MarkedYAMLError as error:
        mark = error.problem_mark or error.context_mark
        opened = error.context_mark
        # An open bracket or quote shows only further down; what must be mended is where it was opened.
        if opened and mark and opened.line < mark.line and _OPENED.search(error.context or ""):
            mark = opened
        line, column = (mark.line + 1, mark.column + 1) if mark else (1, 1)
        return fault(line, column, *_in_trade_words(error, text, line, column))
    except yaml.YAMLError:
        return fault(1, 1, "this is not YAML text", "save the file as plain text in UTF-8")


def _end(before: str) -> tuple[int, int]:
    """Line and column just after a text."""
    return before.count("\n") + 1, len(before) - (before.rfind("\n") + 1) + 1


def _short(written: str) -> str:
    """What stands in the text, fit for a message: a tag such as `!%1b` carries a control character unseen."""
    shown = _FORBIDDEN.sub("?", written)
    return shown if len(shown) <= _SHOWN_CHARACTERS else shown[: _SHOWN_CHARACTERS - 1] + "…"


def _in_trade_words(error: yaml.MarkedYAMLError, text: str, line: int, column: int) -> tuple[str, str]:
    """Message and remedy for what the YAML scanner or parser refuses."""
    problem = error.problem or ""
    lines = text.splitlines()
    source = lines[line - 1] if line <= len(lines) else ""
    indentation = source[: len(source) - len(source.lstrip())]
    if "\t" in indentation or "'\\t'" in problem:
        return "a tab is used for indentation", "indent with spaces"
    if "cannot start any token" in problem:
        start = source[column - 1 : column]
        shown = {"`": "a backtick", "\t": "a tab"}.get(start, f"`{start}`")
        return f"a value cannot begin with {shown}", "put the value in quotes" if start != "\t" else "use spaces"
    if "mapping values are not allowed" in problem:
        return (
            "a colon and a space stand inside a value, or the indentation is wrong",
            "put the value in quotes, or align the key with its neighbours",
        )
    if "could not find expected ':'" in problem:
        return "a key is not followed by a colon", "write `key: value`"
    if "did not find expected node content" in problem:
        return "a value is missing here", "write it, or remove the comma or the bracket"
    if "block sequence entries are not allowed" in problem:
        return "a list begins beside its key", "write each `- ` of the list on a line of its own"
    if "maximum nesting" in problem:
        return f"nested deeper than {MAX_DEPTH} levels", "flatten the structure"
    if "did not find expected key" in problem and source[: column - 1].rstrip().endswith(("'", '"')):
        return "text stands after a closing quote", "put the whole value in quotes"
    if "did not find expected key" in problem or "did not find expected '-' indicator" in problem:
        return "the indentation does not agree with the lines above", "align the key with its neighbours"
    if "did not find expected ',' or" in problem:
        return "a `{...}` or `[...]` is not closed, or a comma is missing", "close the bracket or add the comma"
    if "while scanning a quoted scalar" in (error.context or "") or "unexpected end of stream" in problem:
        return "a quote is not closed", "close the quote"
    if "unknown escape" in problem:
        return "a backslash stands in double quotes", "use single quotes around the value"
    return "the text is not well-formed YAML here", "check indentation, colons, brackets and quotes"


class _Builder:
    """Builds data and spots from the parser's events in one pass."""

    def __init__(self, text: str, name: str) -> None:
        self._next: Callable[[], Any] = CParser(text).get_event
        self._name = name
        self._good_keys: set[str] = set()

    def build(self) -> TextFile:
        self._next()  # stream start
        event = self._next()
        if isinstance(event, StreamEndEvent):
            raise _Refused(1, 1, "the file is empty", "write the register's mapping, or leave the file out")
        if event.version or event.tags:
            line, column = event.start_mark.line + 1, event.start_mark.column + 1
            raise _Refused(line, column, "a line with `%` tells the reader how to read", "remove the line")
        data, spot = self._node(self._next(), None, 1)
        self._next()  # document end
        event = self._next()
        if not isinstance(event, StreamEndEvent):
            mark = event.start_mark
            raise _Refused(
                mark.line + 1, mark.column + 1, "a second document begins here (`---`)", "use one document a file"
            )
        return TextFile(self._name, data, spot)

    def _node(self, event: Any, key: tuple[int, int] | None, depth: int) -> tuple[Data, Spot]:
        mark = event.start_mark
        line, column = mark.line + 1, mark.column + 1
        kind = type(event)
        if kind is AliasEvent:
            raise _Refused(line, column, f"`*{_short(str(event.anchor))}` repeats another value", "write the value out")
        if event.anchor is not None:
            raise _Refused(line, column, f"`&{_short(event.anchor)}` names a value for repetition", "remove the anchor")
        if event.tag is not None:
            tag = event.tag.replace("tag:yaml.org,2002:", "!!")
            raise _Refused(line, column, f"`{_short(tag)}` sets a type", "remove it; loopdoc knows the types")
        if depth > MAX_DEPTH:
            raise _Refused(line, column, f"nested deeper than {MAX_DEPTH} levels", "flatten the structure")
        key_line, key_column = key or (line, column)
        if kind is ScalarEvent:
            written = event.value
            if len(written) > MAX_SCALAR_CHARACTERS:
                raise _Refused(line, column, f"a value of more than {MAX_SCALAR_CHARACTERS} characters", "shorten it")
            if not event.style:
                value, message, remedy = _resolve(written)
                if message:
                    raise _Refused(line, column, message, remedy)
                return value, Spot(key_line, key_column, line, column, None)
            if _FORBIDDEN.search(written):
                raise _Refused(line, column, "a control character stands in the value", "delete the character")
            return written, Spot(key_line, key_column, line, column, None)
        if kind is MappingStartEvent:
            mapping, spots = self._mapping(depth)
            return mapping, Spot(key_line, key_column, line, column, spots)
        items: list[Any] = []
        item_spots: list[Spot] = []
        while type(event := self._next()) is not SequenceEndEvent:
            item, spot = self._node(event, None, depth + 1)
            items.append(item)
            item_spots.append(spot)
        return items, Spot(key_line, key_column, line, column, item_spots)

    def _mapping(self, depth: int) -> tuple[dict[str, Any], dict[str, Spot]]:
        mapping: dict[str, Any] = {}
        spots: dict[str, Spot] = {}
        get_event = self._next
        while type(event := get_event()) is not MappingEndEvent:
            mark = event.start_mark
            line, column = mark.line + 1, mark.column + 1
            if type(event) is not ScalarEvent or event.anchor is not None or event.tag is not None:
                raise _Refused(line, column, "a key is not plain text", "write `key: value`")
            key = event.value
            if key not in self._good_keys:
                self._refuse_bad(key, line, column)
            if key in mapping:
                first = spots[key].key_line
                message = f"the key `{_short(key)}` stands twice (first in line {first})"
                raise _Refused(line, column, message, "keep one of them")
            mapping[key], spots[key] = self._node(get_event(), (line, column), depth + 1)
        return mapping, spots

    def _refuse_bad(self, key: str, line: int, column: int) -> None:
        """Refuse a key that no mapping may have; note one that any may, since most keys stand thousands of times."""
        if len(key) > MAX_SCALAR_CHARACTERS:
            raise _Refused(line, column, f"a key of more than {MAX_SCALAR_CHARACTERS} characters", "shorten it")
        if key == "<<":
            raise _Refused(line, column, "`<<` merges another mapping", "write the keys out")
        if not key or _FORBIDDEN.search(key):
            raise _Refused(line, column, "a key is empty or has control characters", "write `key: value`")
        self._good_keys.add(key)


@lru_cache(maxsize=200_000)
def _resolve(written: str) -> tuple[Data, str, str]:
    """A plain scalar by the YAML 1.2 core rules: its value, or a message and a remedy."""
    if written in _WORDS:
        return _WORDS[written], "", ""
    first = written[0]
    if first.isdigit() or first in "+-.":
        if _LEADING_ZERO.fullmatch(written):
            return (
                None,
                f"`{_short(written)}` is a number with a leading zero",
                f'write `"{_short(written)}"`, or drop the zero',
            )
        if _INTEGER.fullmatch(written):
            return int(written), "", ""
        if _FLOAT.fullmatch(written):
            number = float(written)
            if number in (float("inf"), float("-inf")):
                return None, f"`{_short(written)}` is too large a number", "write a number with a unit that fits"
            return number, "", ""
        if _NOT_FINITE.fullmatch(written):
            return None, f"`{_short(written)}` is not a number of any plant", "write a finite number"
    return written, "", ""
