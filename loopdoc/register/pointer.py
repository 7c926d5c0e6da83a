"""Pointers from prose into the register: `{TIC-2014/alarms/high/limit}`, a tag and a JSON Pointer below it.

Source: RFC 6901 (JSON Pointer), sections 3 and 4.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from loopdoc.register.model import Hold, Origin, Part, Register

POINTER = re.compile(r"\{([^{}]*)\}")
"""Where prose points at a value; the group is the tag with its pointer."""


@dataclass(frozen=True, slots=True)
class Unresolved:
    """Why a pointer leads to no value."""

    reason: str


def pointed(register: Register, pointer: str) -> str | float | bool | Hold | Unresolved:
    """The value as written at which a pointer of the prose points."""
    tag, slash, below = pointer.partition("/")
    origin = _origin(register, tag)
    if origin is None:
        return Unresolved(f"the register does not define {tag}" if tag else "it names no tag")
    if not slash:
        return Unresolved(f"it says nothing of {tag} that could be shown")
    value: Any = origin.source.data
    for step in origin.path:
        value = value[step]
    for token in below.split("/"):
        if re.search(r"~(?![01])", token):
            return Unresolved(f"`{token}` has a `~` that is neither `~0` nor `~1`")
        step = token.replace("~1", "/").replace("~0", "~")
        if isinstance(value, dict) and step in value:
            value = value[step]
        elif isinstance(value, list) and re.fullmatch(r"0|[1-9][0-9]*", step) and int(step) < len(value):
            value = value[int(step)]
        elif isinstance(value, dict) and "hold" in value:
            break
        else:
            return Unresolved(f"{tag} has no `{below}`")
    if isinstance(value, dict) and "hold" in value:
        return Hold(str(value["hold"]))
    if isinstance(value, str | int | float):
        return value
    return Unresolved(f"`{below}` of {tag} is not a single value")


def origin_of(register: Register, pointer: str) -> Origin | None:
    """Where the value is written at which a pointer of the prose points; None for a tag that is not defined."""
    tag, _, below = pointer.partition("/")
    origin = _origin(register, tag)
    if origin is None:
        return None
    tokens = (token.replace("~1", "/").replace("~0", "~") for token in below.split("/"))
    return Origin(origin.source, (*origin.path, *(int(token) if token.isdecimal() else token for token in tokens)))


def _origin(register: Register, tag: str) -> Origin | None:
    """Where the part under a tag is written; for a transmitter, its measurement."""
    sections: tuple[Mapping[str, Part], ...] = (
        register.loops, register.final_elements, register.instruments, register.functions, register.interlocks,
    )  # fmt: skip
    for section in sections:
        if tag in section:
            return section[tag].origin
    measurement = register.measurements.get(tag)
    return measurement.origin if measurement else None
