"""Setting values in a register file, with everything else in it left as it is.

The text is changed only where the values stand: comments, order, quoting, indentation and line ends elsewhere
stay, and a comment goes only with a value that it stands inside or beside when that value is removed. What
comes out is read again and must hold exactly what was meant; else the edit is refused.
"""

from __future__ import annotations

import copy
import os
import tempfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import yaml
from yaml._yaml import CParser

from loopdoc.register.place import Fault, Place
from loopdoc.register.text import read_text

Value = str | bool | int | float | list[Any] | dict[str, Any]
"""A scalar, a list, or a mapping of such values."""

LONGEST_LINE = 120
"""Characters after which a flow mapping continues on a line of its own."""
_INDENT = 2


@dataclass(frozen=True, slots=True)
class _Node:
    """A value with the stretch of text that it takes."""

    start: int
    end: int
    entries: tuple[_Entry, ...] | None
    """Of a mapping."""
    items: tuple[_Node, ...] | None
    """Of a list."""
    flow: bool
    """Whether a mapping or list is written in brackets."""
    style: str = ""
    """How a scalar is written: a quote, `|` or `>`, or nothing where it is plain."""


@dataclass(frozen=True, slots=True)
class _Entry:
    key: str
    at: _Node
    value: _Node


class _Refused(Exception):
    """Carries the reason out of the edit; never leaves this module."""


def set_values(
    content: bytes,
    name: str,
    path: tuple[str, ...],
    values: Mapping[str, Value | None],
    *,
    in_place_of: Mapping[str, str] | None = None,
    after: tuple[str, ...] = (),
) -> bytes | Fault:
    """The content of a register file with values set in the mapping at a path, or why that cannot be done.

    A value of None removes its key. A new key is put after those that stand before it in ``values``; where
    ``in_place_of`` names an old key for it that is to be removed, there. A mapping that is missing, empty or on
    hold is made; in its parent it is put behind the last of the keys of ``after``.
    """
    before = read_text(content, name)
    if isinstance(before, Fault):
        return before
    mark = b"\xef\xbb\xbf" if content.startswith(b"\xef\xbb\xbf") else b""
    text = content[len(mark) :].decode("utf-8")
    wanted = _wanted(before.data, path, values)
    place = before.place(path)
    try:
        edit = _Edit(text)
        edit.set(path, values, in_place_of or {}, after)
        changed = mark + edit.result().encode("utf-8")
    except _Refused as refused:
        return _refusal(place, str(refused))
    again = read_text(changed, name)
    if isinstance(again, Fault) or again.data != wanted:
        return _refusal(place, "the text as edited would not read back as meant")
    return changed


def replace_file(path: Path, *, before: bytes, after: bytes) -> str | None:
    """Put new content in the place of old, whole or not at all; says why where the file is no longer as it was read."""
    target = path.resolve()
    if target.read_bytes() != before:
        return f"{path} was changed meanwhile; nothing was written"
    handle, name = tempfile.mkstemp(prefix=f".{target.name}-", dir=target.parent)
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(after)
            file.flush()
            os.fchmod(file.fileno(), target.stat().st_mode & 0o7777)
            os.fsync(file.fileno())
        Path(name).replace(target)
    except BaseException:
        Path(name).unlink(missing_ok=True)
        raise
    return None


def _refusal(place: Place, reason: str) -> Fault:
    return Fault(place, f"the file cannot be edited here: {reason}", "write the values by hand")


def _wanted(data: Any, path: tuple[str, ...], values: Mapping[str, Value | None]) -> Any:
    """The data as they should read after the edit."""
    whole = copy.deepcopy(data)
    mapping = whole
    for step in path:
        inner = mapping.get(step)
        if not isinstance(inner, dict) or "hold" in inner:
            inner = mapping[step] = {}
        mapping = inner
    for key, value in values.items():
        if value is None:
            mapping.pop(key, None)
        else:
            mapping[key] = copy.deepcopy(value)
    return whole


# ---------------------------------------------------------------- the text as nodes


def _parsed(text: str) -> _Node:
    parser = CParser(text)
    parser.get_event()  # stream start
    parser.get_event()  # document start
    return _node(parser, parser.get_event(), text)


def _node(parser: Any, event: Any, text: str) -> _Node:
    start, end = event.start_mark.index, event.end_mark.index
    if isinstance(event, yaml.ScalarEvent):
        if event.style in ("|", ">"):
            end = start + len(text[start:end].rstrip())
        return _Node(start, end, None, None, False, event.style or "")
    flow = bool(event.flow_style)
    last = start  # a block ends with its last value; its closing event stands behind blank lines and comments
    entries, items = [], []
    mapping = isinstance(event, yaml.MappingStartEvent)
    while not isinstance(inner := parser.get_event(), yaml.MappingEndEvent | yaml.SequenceEndEvent):
        node = _node(parser, inner, text)
        if mapping:
            entry = _Entry(inner.value, node, _node(parser, parser.get_event(), text))
            entries.append(entry)
            last = entry.value.end
        else:
            items.append(node)
            last = node.end
    closing: Any = inner
    return _Node(
        start,
        closing.end_mark.index if flow else last,
        tuple(entries) if mapping else None,
        None if mapping else tuple(items),
        flow,
    )


def _entry(mapping: _Node, key: str) -> _Entry | None:
    return next((entry for entry in mapping.entries or () if entry.key == key), None)


# ---------------------------------------------------------------- values as text


def _scalar(value: str | bool | int | float, *, flow: bool, quote: str = "") -> str:
    """A scalar as text, plain where it reads back so and the old one was plain."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if not isinstance(value, str):
        return repr(value)
    if not quote:
        document = f"{{k: {value}}}" if flow else f"k: {value}"
        plain = read_text(document.encode(), "")
        if "\n" not in value and not isinstance(plain, Fault) and plain.data == {"k": value}:
            return value
    if quote == '"' and not any(c in value for c in '"\\'):
        return f'"{value}"'
    return "'" + value.replace("'", "''") + "'"


def _inline(value: Value, *, flow: bool, quote: str = "") -> str:
    """A value on one line."""
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key}: {_inline(inner, flow=True)}" for key, inner in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(_inline(item, flow=True) for item in value) + "]"
    return _scalar(value, flow=flow, quote=quote)


def _block(key: str, value: Value, indent: str) -> list[str]:
    """An entry of a block mapping as lines."""
    if isinstance(value, dict):
        lines = [f"{indent}{key}:"]
        for inner, further in value.items():
            lines += _block(inner, further, indent + " " * _INDENT)
        return lines
    return [f"{indent}{key}: {_inline(value, flow=False)}"]


# ---------------------------------------------------------------- the edit


class _Edit:
    """Replacements of stretches of a text, gathered and then made from the end to the beginning."""

    def __init__(self, text: str) -> None:
        self._text = text
        self._root = _parsed(text)
        self._changes: list[tuple[int, int, str]] = []

    def result(self) -> str:
        text = self._text
        later = len(text)
        # Of several insertions at one point the first made stays first.
        order = sorted(enumerate(self._changes), key=lambda entry: (entry[1][:2], entry[0]), reverse=True)
        for _, (start, end, new) in order:
            if end > later:
                raise _Refused("two of the values stand in one another's way")
            text, later = text[:start] + new + text[end:], start
        return text

    def set(
        self,
        path: tuple[str, ...],
        values: Mapping[str, Value | None],
        in_place_of: Mapping[str, str],
        after: tuple[str, ...],
    ) -> None:
        mapping, done = self._root, 0
        for step in path:
            entry = _entry(mapping, step)
            if entry is None or not entry.value.entries or _entry(entry.value, "hold"):
                break
            mapping, done = entry.value, done + 1
        if done == len(path):
            self._set_all(mapping, values, in_place_of)
            return
        made: dict[str, Any] = {key: value for key, value in values.items() if value is not None}
        for step in reversed(path[done + 1 :]):
            made = {step: made}
        old = _entry(mapping, path[done])
        if old is not None and (old.value.items is not None or (_is_scalar(old.value) and self._text_of(old.value))):
            raise _Refused(f"something else than a mapping stands at `{path[done]}`")
        if old is not None:
            self._replace(mapping, old, made)
        else:
            self._insert(mapping, path[done], made, after)

    def _set_all(self, mapping: _Node, values: Mapping[str, Value | None], in_place_of: Mapping[str, str]) -> None:
        removed = [key for key, value in values.items() if value is None and _entry(mapping, key)]
        order: list[str] = []
        for key, value in values.items():
            entry = _entry(mapping, key)
            old = _entry(mapping, in_place_of.get(key, ""))
            if value is not None and entry is not None:
                self._replace(mapping, entry, value)
            elif value is not None and old is not None and old.key in removed:
                removed.remove(old.key)
                self._changes.append((old.at.start, old.at.end, key))
                self._replace(mapping, old, value)
            elif value is not None:
                self._insert(mapping, key, value, tuple(order))
            order.append(key if entry is not None or value is None or old is None else old.key)
        if len(removed) == len(mapping.entries or ()):
            raise _Refused("nothing would be left of the mapping")
        self._remove(mapping, removed)

    # -- one entry

    def _replace(self, mapping: _Node, entry: _Entry, value: Value) -> None:
        old, items = entry.value, entry.value.items
        if isinstance(value, list) and items and len(items) == len(value) and all(map(_is_scalar, items)):
            for item, new in zip(items, value, strict=True):
                self._changes.append((item.start, item.end, _scalar(new, flow=old.flow, quote=_quote(item))))
            return
        in_block = not mapping.flow
        lines = isinstance(value, dict) and in_block
        new = "" if lines else " " + _inline(value, flow=mapping.flow, quote=_quote(old))
        colon = self._text.index(":", entry.at.end) + 1
        if self._is_block(old):
            # The lines of the old value go, the line of the key stays with its comment.
            first, last = self._line_start(old.start), self._line_end(old.end)
            self._changes.append((first, last, ""))
            self._changes.append((colon, colon, new))
        elif lines or old.start == old.end:
            self._changes.append((colon, max(old.end, colon), new))
        else:
            self._changes.append((old.start, old.end, new[1:]))
        if lines:
            assert isinstance(value, dict)
            indent = self._indent(mapping) + " " * _INDENT
            made = [line for key, inner in value.items() for line in _block(key, inner, indent)]
            self._insert_lines(self._line_end(colon if self._is_block(old) else old.end), made)

    def _insert(self, mapping: _Node, key: str, value: Value, after: tuple[str, ...]) -> None:
        entries = mapping.entries
        if entries is None:
            raise _Refused("there is no mapping to put the value into")
        known = [entry for entry in entries if entry.key in after]
        last = known[-1] if known else entries[-1] if entries else None
        if mapping.flow:
            written = f"{key}: {_inline(value, flow=True)}"
            if last is None:
                self._changes.append((mapping.start + 1, mapping.start + 1, written))
                return
            at = last.value.end
            line = self._line_start(at)
            added = sum(len(new) - (end - start) for start, end, new in self._changes if line <= start and end <= at)
            if at - line + added + len(written) + 2 > LONGEST_LINE:
                column = entries[0].at.start - self._line_start(entries[0].at.start)
                self._changes.append((at, at, f",{self._line_break(at)}{' ' * column}{written}"))
            else:
                self._changes.append((at, at, f", {written}"))
            return
        assert last is not None  # a block mapping has an entry
        self._insert_lines(self._line_end(last.value.end), _block(key, value, self._indent(mapping)))

    def _remove(self, mapping: _Node, keys: list[str]) -> None:
        entries = mapping.entries or ()
        for first, entry in enumerate(entries):
            if entry.key not in keys or (mapping.flow and first and entries[first - 1].key in keys):
                continue
            if not mapping.flow:
                start = self._line_start(entry.at.start)
                if self._text[start : entry.at.start].strip():
                    raise _Refused(f"`{entry.key}` does not stand on a line of its own")
                self._changes.append((start, self._line_end(entry.value.end), ""))
                continue
            last = first
            while last + 1 < len(entries) and entries[last + 1].key in keys:
                last += 1
            if last + 1 < len(entries):
                self._changes.append((entry.at.start, entries[last + 1].at.start, ""))
            else:
                self._changes.append((entries[first - 1].value.end, entries[last].value.end, ""))

    # -- lines

    def _text_of(self, node: _Node) -> str:
        return self._text[node.start : node.end]

    def _is_block(self, node: _Node) -> bool:
        return not node.flow and bool(node.entries or node.items)

    def _line_start(self, index: int) -> int:
        return self._text.rfind("\n", 0, index) + 1

    def _line_end(self, index: int) -> int:
        """Just behind the line break of the line in which a stretch ends."""
        found = self._text.find("\n", index)
        return len(self._text) if found < 0 else found + 1

    def _line_break(self, index: int) -> str:
        """The line break in use about a place."""
        end = self._text.find("\n", index)
        end = self._text.find("\n") if end < 0 else end
        return "\r\n" if end > 0 and self._text[end - 1] == "\r" else "\n"

    def _indent(self, mapping: _Node) -> str:
        first = (mapping.entries or ())[0].at.start
        return " " * (first - self._line_start(first))

    def _insert_lines(self, at: int, lines: list[str]) -> None:
        end = self._line_break(at - 1)
        written = "".join(f"{line}{end}" for line in lines)
        if at and self._text[at - 1] != "\n":  # the last line of the file has no line break
            written = end + written.removesuffix(end)
        self._changes.append((at, at, written))


def _is_scalar(node: _Node) -> bool:
    return node.entries is None and node.items is None


def _quote(node: _Node) -> str:
    return node.style if node.style in ("'", '"') else ""
