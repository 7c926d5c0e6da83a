"""The prose of a register, and the tags that it may name."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass

from loopdoc.register.model import Hold, Origin, Part, Register, known
from loopdoc.register.place import Place
from loopdoc.register.pointer import POINTER
from loopdoc.register.tag_grammar import TagGrammar
from loopdoc.rules.references import Names, defined_tags

_DIGIT = re.compile(r"\d")
_WORD = re.compile(r"[^\W_](?:[\w./-]*\w)?")


@dataclass(frozen=True, slots=True)
class Prose:
    """One text of the register that a document prints."""

    tag: str
    """The tag, or the unit, under which it stands."""
    what: str
    """What it is, in words, such as `the response to the high alarm`."""
    text: str
    origin: Origin
    steps: tuple[str | int, ...]

    @property
    def place(self) -> Place:
        return self.origin.place(*self.steps)

    @property
    def pointers(self) -> tuple[str, ...]:
        """What stands in braces."""
        return tuple(POINTER.findall(self.text))

    @property
    def words(self) -> tuple[str, ...]:
        """Words outside the braces that hold a digit, as every tag does; once each, in their order."""
        if not _DIGIT.search(self.text):
            return ()
        plain = POINTER.sub(" ", self.text) if "{" in self.text else self.text
        likely = (piece for piece in plain.split() if not piece.isalpha() and _DIGIT.search(piece))
        return tuple(dict.fromkeys(word for piece in likely for word in _WORD.findall(piece) if _DIGIT.search(word)))


@dataclass(frozen=True, slots=True)
class KnownTags:
    """The tags that prose may name."""

    names: Names
    letters: frozenset[str]
    """Letters with which the register forms its tags."""
    grammar: TagGrammar | None


def known_tags(register: Register) -> KnownTags:
    """The tags of a register, and the letters with which it forms them."""
    tags = dict.fromkeys(defined.tag for defined in defined_tags(register))
    grammar = register.tag_pattern
    parts = [grammar.fullmatch(tag) for tag in tags] if grammar else []
    return KnownTags(Names("a tag", tags), frozenset(part["letters"] or "" for part in parts if part), grammar)


def proses(register: Register) -> Iterator[Prose]:
    """Every text of a register in which prose may stand."""
    for number, unit in register.units.items():
        yield from _of(unit, number, (("purpose", "the purpose of the unit"),))
    for tag, loop in register.loops.items():
        yield from _of(loop, tag, (("purpose", "its purpose"),))
        for alarm in loop.alarms.values():
            whose = f"the {alarm.kind.replace('_', '-')} alarm"
            named = (("cause", "the cause"), ("consequence", "the consequence"), ("response", "the response"))
            yield from _of(alarm, tag, tuple((key, f"{what} of {whose}") for key, what in named))
    for tag, interlock in register.interlocks.items():
        yield from _of(
            interlock, tag, (("cause", "its cause"), ("consequence", "its consequence"), ("reset", "its reset"))
        )
    for deviation in register.deviations:
        yield from _of(deviation, known(deviation.at) or "deviations", (("reason", "the reason of the deviation"),))
    for number, text in register.texts.items():
        yield from _of(text, number, (("overview", "the overview"),))
        for key, what in (("start_up", "the start-up"), ("shut_down", "the shutdown"), ("upsets", "the upsets")):
            for index, step in enumerate(getattr(text, key)):
                yield Prose(number, what, step, text.origin, (key, index))


def _of(part: Part, tag: str, keys: tuple[tuple[str, str], ...]) -> Iterator[Prose]:
    for key, what in keys:
        written: str | Hold | None = getattr(part, key)
        if isinstance(written, str):
            yield Prose(tag, what, written, part.origin, (key,))
