"""Cables and terminals in words, one line for each box or cabinet from the field to the control system."""

from __future__ import annotations

from collections.abc import Callable

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.register.model import Connection, Hold

Text = Callable[[object], str]
"""How a document sets a value of the register, such as a hold with its mark."""


def cable_lines(wiring: tuple[Connection, ...] | Hold, text: Text, language: Language = ENGLISH) -> tuple[str, ...]:
    """`C-2014`, `M-20, pair 5`: the cable that arrives at each box, with its pair."""
    if isinstance(wiring, Hold):
        return (text(wiring),)
    found = []
    for connection in wiring:
        pair = connection.pair if isinstance(connection.pair, Hold) else language.pair(connection.pair or "")
        parts = [text(connection.cable)]
        parts += [text(pair)] if connection.pair is not None else []
        found.append(", ".join(parts))
    return tuple(found)


def terminal_lines(wiring: tuple[Connection, ...] | Hold, text: Text) -> tuple[str, ...]:
    """`JB-2001: 9, 10`: the terminals in each box."""
    if isinstance(wiring, Hold):
        return (text(wiring),)
    found = []
    for connection in wiring:
        terminals = connection.terminals
        told = text(terminals) if isinstance(terminals, Hold) else ", ".join(terminals)
        found.append(": ".join(filter(None, (text(connection.at), told))))
    return tuple(found)
