"""The site's tag grammar: a regular expression that can be matched in bounded time.

An expression that repeats what repeats, or that leaves many ways to share out one text, keeps a backtracking
matcher at work for years on a single tag. So a grammar is weighed before it is used: it is accepted where the
number of ways in which it can take a tag of the greatest length apart is small.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

MAX_TAG_CHARACTERS = 40
"""A longer tag fits no plate and no grammar."""
MAX_GRAMMAR_CHARACTERS = 400
MAX_WAYS = 200_000
"""Ways to take one tag apart; below this a match takes some milliseconds at the very worst."""

_REPEAT = re.compile(r"(?:[*+?]|\{(?P<least>\d+)?(?P<comma>,)?(?P<most>\d+)?\})[?+]?")
_GROUPS = re.compile(r"\((?:\?:|\?P<\w+>|(?!\?))")


@dataclass(frozen=True, slots=True)
class TagGrammar:
    """A tag grammar that has been weighed."""

    compiled: re.Pattern[str]

    @property
    def pattern(self) -> str:
        """The expression as the register writes it."""
        return self.compiled.pattern

    def fullmatch(self, tag: str) -> re.Match[str] | None:
        """The parts of a tag; None where it does not follow the grammar or is longer than any tag."""
        return self.compiled.fullmatch(tag) if len(tag) <= MAX_TAG_CHARACTERS else None


class _Unbounded(Exception):
    """Carries the reason out of the weighing; never leaves this module."""


@dataclass(frozen=True, slots=True)
class GrammarFault:
    """Why an expression cannot be used as a tag grammar."""

    message: str
    remedy: str


def read_grammar(written: str) -> TagGrammar | GrammarFault:
    """The tag grammar that an expression states, or why it cannot be used as one."""
    reason = f"it has more than {MAX_GRAMMAR_CHARACTERS} characters" if len(written) > MAX_GRAMMAR_CHARACTERS else ""
    if not reason:
        try:
            compiled = re.compile(written)
        except (re.error, OverflowError, RecursionError) as error:
            return GrammarFault(f"`tags` is not a regular expression ({error})", "correct the expression")
        missing = [group for group in ("letters", "unit", "serial") if group not in compiled.groupindex]
        if missing:
            return GrammarFault(
                f"`tags` has no group named {' or '.join(missing)}", "name it, as in `(?P<letters>[A-Z]+)`"
            )
        reason = _unbounded(written)
    if reason:
        return GrammarFault(
            f"`tags` is an expression that could be matched without end: {reason}",
            "state how many characters each part of a tag has, as in `[A-Z]{2,5}` and `\\d{2}`",
        )
    return TagGrammar(compiled)


def _unbounded(expression: str) -> str:
    """Why a valid regular expression might be matched without bound; empty where it cannot."""
    try:
        if _Weighing(expression).ways() > MAX_WAYS:
            return "it leaves too many ways to take one tag apart"
    except _Unbounded as found:
        return str(found)
    return ""


class _Weighing:
    """Counts, from above, the ways in which an expression can take a tag of the greatest length apart."""

    def __init__(self, expression: str) -> None:
        self._expression = expression
        self._at = 0
        self._repeats = 0
        """Repeats of no fixed number so far: they share out the characters of one tag between them."""

    def ways(self) -> int:
        ways, _ = self._alternatives()
        if self._at < len(self._expression):  # an expression that compiles does not end early
            raise _Unbounded("it holds a form that tags do not need")
        shared = math.comb(MAX_TAG_CHARACTERS + self._repeats, self._repeats)
        return min(ways, shared * self._branches(ways))

    def _branches(self, ways: int) -> int:
        """Alternatives multiply the ways to share out, unless there are none."""
        return 1 if "|" not in self._expression else ways

    def _alternatives(self) -> tuple[int, bool]:
        """Ways up to the end of a group, and whether the group can take a text in one way only."""
        total, fixed = self._sequence()
        while self._next("|"):
            ways, _ = self._sequence()
            total, fixed = total + ways, False
        return total, fixed

    def _sequence(self) -> tuple[int, bool]:
        ways, fixed = 1, True
        while self._at < len(self._expression) and self._expression[self._at] not in "|)":
            inner, inner_fixed = self._atom()
            repeat = _REPEAT.match(self._expression, self._at)
            if repeat and self._is_repeat(repeat):
                self._at = repeat.end()
                least, most = _bounds(repeat)
                if most > 1 and not inner_fixed:
                    raise _Unbounded("it repeats a group that itself repeats or chooses")
                if most != least:
                    self._repeats += 1
                    inner *= most - least + 1
                    inner_fixed = False
            ways, fixed = ways * inner, fixed and inner_fixed
        return ways, fixed

    def _atom(self) -> tuple[int, bool]:
        character = self._expression[self._at]
        if character == "\\":
            if self._expression[self._at + 1].isdigit():
                raise _Unbounded("it refers back to a group")
            self._at += 2
        elif character == "[":
            self._at = self._after_class()
        elif character == "(":
            group = _GROUPS.match(self._expression, self._at)
            if group is None:
                raise _Unbounded("it looks ahead or back, refers to a group, or sets a flag")
            self._at = group.end()
            found = self._alternatives()
            self._at += 1  # the closing parenthesis, which an expression that compiles has
            return found
        else:
            self._at += 1
        return 1, True

    def _after_class(self) -> int:
        at = self._at + 1
        at += self._expression[at] == "^"
        at += self._expression[at] == "]"  # stands for itself at the beginning
        while self._expression[at] != "]":
            at += 2 if self._expression[at] == "\\" else 1
        return at + 1

    def _next(self, character: str) -> bool:
        found = self._expression[self._at : self._at + 1] == character
        self._at += found
        return found

    def _is_repeat(self, found: re.Match[str]) -> bool:
        """Whether braces hold numbers; others stand for themselves."""
        return not found[0].startswith("{") or bool(found["least"] or found["most"])


def _bounds(repeat: re.Match[str]) -> tuple[int, int]:
    match repeat[0][0]:
        case "*":
            return 0, MAX_TAG_CHARACTERS
        case "+":
            return 1, MAX_TAG_CHARACTERS
        case "?":
            return 0, 1
    least = min(int(repeat["least"] or 0), MAX_TAG_CHARACTERS)
    if not repeat["comma"]:
        return least, least
    most = int(repeat["most"]) if repeat["most"] else MAX_TAG_CHARACTERS
    return least, max(least, min(most, MAX_TAG_CHARACTERS))
