"""What the quantities of loops that are told together are called, so that none is ambiguous."""

from __future__ import annotations

from collections.abc import Iterable

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.language.noun import Noun
from loopdoc.register.model import FinalElement, Loop


class Names:
    """Names of the measured quantities of loops that are told together, none of them ambiguous."""

    def __init__(self, loops: Iterable[Loop], language: Language = ENGLISH) -> None:
        self._loops = tuple(loops)
        self._language = language

    def bare(self, loop: Loop) -> Noun:
        """The short name where no other loop of the story has it, the full one otherwise."""
        short = self._language.short_quantity(loop)
        others = (other for other in self._loops if other.tag != loop.tag)
        alone = all(self._language.short_quantity(other) != short for other in others)
        return short if alone else self._language.quantity(loop)


def quantity(loop: Loop) -> Noun:
    """What a loop measures, in English."""
    return ENGLISH.quantity(loop)


def moves_by_itself(element: FinalElement, direction: int) -> str:
    """What a final element does that is moved, in English: `FV-2011 opens`, `SC-1017 slows down`."""
    return ENGLISH.moves_by_itself(((element, direction),))


def power_of(element: FinalElement) -> str:
    """What moves a final element, in English."""
    return ENGLISH.power_of(element)
