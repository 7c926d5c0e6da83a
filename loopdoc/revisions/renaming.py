"""Tags that are the same thing under another name, where the evidence is good; a guess is never made."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from loopdoc.revisions.values import leaves, same

ALIKE = 0.75
"""Share of the values that must be the same."""
LEAST_VALUES = 4
"""Fewer values that agree are no evidence."""
APART = 0.1
"""By so much the best partner must lead the next, from either side."""
_WORD = r"(?<![\w-]){}(?![\w-])"


@dataclass(frozen=True, slots=True)
class Renamed:
    """A tag of before under its new name."""

    section: str
    was: str
    tag: str
    evidence: str


def renamed(section: str, old: Mapping[str, Any], new: Mapping[str, Any]) -> Iterator[Renamed]:
    """Tags of one section that went and came with the same values.

    Each must be the other's best partner by far: of two that are alike none is taken.
    """
    gone = [tag for tag in old if tag not in new]
    came = [tag for tag in new if tag not in old]
    agreed = {(was, now): _agreement(was, old[was], now, new[now]) for was in gone for now in came}
    for was in gone:
        for now in came:
            equal, of = agreed[was, now]
            rivals = [agreed[was, other] for other in came if other != now]
            rivals += [agreed[other, now] for other in gone if other != was]
            next_best = max((count / whole for count, whole in rivals), default=0.0)
            if equal >= LEAST_VALUES and equal / of >= ALIKE and equal / of >= next_best + APART:
                yield Renamed(section, was, now, f"{equal} of {of} values are the same")


def _agreement(was: str, old: Any, now: str, new: Any) -> tuple[int, int]:
    """How many values agree, and of how many; the serial number of the tag may change inside them as well."""
    serials = _serial(was), _serial(now)
    before = leaves(with_new_tags(old, {was: now}))
    after = leaves(new)
    equal = 0
    for path in before.keys() & after.keys():
        key = str(path[-1]) if path else ""
        first, second = before[path], after[path]
        numbered = isinstance(first, str) and all(serials)
        equal += same(first, second, key) or (
            numbered and same(first.replace(f"-{serials[0]}", f"-{serials[1]}"), second, key)
        )
    return equal, max(len(before.keys() | after.keys()), 1)


def _serial(tag: str) -> str:
    return tag.partition("-")[2]


def with_new_tags(data: Any, names: Mapping[str, str]) -> Any:
    """The same data with every old tag named by its new name, in keys and in texts."""
    if not names:
        return data
    match data:
        case Mapping():
            return {_named(str(key), names): with_new_tags(value, names) for key, value in data.items()}
        case list():
            return [with_new_tags(value, names) for value in data]
        case str():
            return _named(data, names)
        case _:
            return data


def _named(text: str, names: Mapping[str, str]) -> str:
    pattern = "|".join(_WORD.format(re.escape(was)) for was in sorted(names, key=len, reverse=True))
    return re.sub(pattern, lambda found: names[found[0]], text)
