"""Places in the register's text, and faults found there."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple


class Place(NamedTuple):
    """A place in a file of the register; line and column count from 1."""

    file: str
    line: int
    column: int

    def __str__(self) -> str:
        return f"{self.file}:{self.line}:{self.column}"


@dataclass(frozen=True, slots=True)
class Fault:
    """Something in the text that cannot be taken as it stands."""

    place: Place
    """Where it stands."""
    message: str
    """What is wrong, in the trade's words."""
    remedy: str
    """What to write instead."""
    pointer: str = ""
    """JSON Pointer (RFC 6901) to the faulty value, where the text could be read."""
