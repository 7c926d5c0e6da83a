"""What two registers say differently, tag by tag and value by value.

A tag is one thing under one name in one section, in whichever file it stands. Moved lines, renamed files, other
units for the same value and another order where order says nothing are no change.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from difflib import SequenceMatcher
from enum import IntEnum, StrEnum
from typing import Any

from loopdoc.register.model import Register
from loopdoc.register.place import Place
from loopdoc.register.quantity import display_number, parse_range
from loopdoc.register.text import TextFile
from loopdoc.revisions import values
from loopdoc.revisions.renaming import Renamed, renamed, with_new_tags
from loopdoc.revisions.values import Leaves, Path, in_old_units, leaves, same, told

SECTIONS = ("interlocks", "loops", "final_elements", "instruments", "functions", "units", "texts")
"""Sections that hold one entry a tag or unit number."""
NAMED = {
    "interlocks": "interlock", "loops": "loop", "final_elements": "final element", "instruments": "instrument",
    "functions": "function", "units": "unit", "texts": "text", "deviations": "deviation", "register": "register",
}  # fmt: skip
"""One entry of a section in words."""

STEPS = ("start_up", "shut_down", "upsets")
"""Lists of sentences, of which one more or less leaves the others what they are."""


class Kind(StrEnum):
    """What became of a value or a tag."""

    ADDED = "added"
    REMOVED = "removed"
    CHANGED = "changed"
    RENAMED = "renamed"
    REWRITTEN = "the same value written otherwise"


class Impact(IntEnum):
    """How far a change reaches into the plant; a higher number reaches farther."""

    RECORD = 1
    CONTROL = 2
    ALARMS = 3
    PROTECTION = 4

    def __str__(self) -> str:
        return _IMPACTS[self]


_IMPACTS = {
    Impact.RECORD: "words and records",
    Impact.CONTROL: "measurement and control",
    Impact.ALARMS: "alarms",
    Impact.PROTECTION: "trips, failures and directions",
}


@dataclass(frozen=True, slots=True)
class Change:
    """One value that is not what it was."""

    kind: Kind
    pointer: str
    """JSON Pointer under the tag, such as `/controller/gain`."""
    old: str
    """As written; empty where there was none."""
    new: str
    """As written; empty where there is none."""
    impact: Impact
    place: Place | None
    """Where the new value stands; where nothing is left, the old one in the old file."""
    remark: str = ""


@dataclass(frozen=True, slots=True)
class TagChange:
    """What changed under one tag."""

    kind: Kind
    section: str
    tag: str
    unit: str
    service: str
    changes: tuple[Change, ...]
    """Without those that only a new name of another tag brings."""
    was: str = ""
    """The old tag of a renamed one."""
    evidence: str = ""
    """Why it is taken to be the same under another name."""

    @property
    def impact(self) -> Impact:
        """The farthest reach of its changes; rewritten values reach nowhere."""
        real = [change.impact for change in self.changes if change.kind is not Kind.REWRITTEN]
        if self.kind in (Kind.ADDED, Kind.REMOVED):
            return max([*real, Impact.RECORD if self.section in ("units", "texts", "deviations") else Impact.CONTROL])
        return max([*real, Impact.RECORD])

    @property
    def only_rewritten(self) -> bool:
        """Whether nothing but the writing is different."""
        return self.kind is Kind.CHANGED and all(change.kind is Kind.REWRITTEN for change in self.changes)


@dataclass(frozen=True, slots=True)
class _Entry:
    data: Any
    source: TextFile
    path: Path

    def place(self, steps: Sequence[str | int]) -> Place:
        return self.source.place((*self.path, *steps))


_Key = tuple[str, str]


def changes_between(old: Register, new: Register) -> tuple[TagChange, ...]:
    """What the new register says differently from the old one, in the order of sections and tags."""
    before, after = _entries(old), _entries(new)
    # That the revision compared with has become a line of the history is how revisions go, and no change.
    revision = before["register", "register"].data.get("revision")
    code = told(revision.get("code")) if isinstance(revision, Mapping) else ""
    if code not in before["register", "register"].data["history"]:
        after["register", "register"].data["history"].pop(code, None)
    names = [
        found
        for section in ("interlocks", "loops", "final_elements", "instruments", "functions")
        for found in renamed(
            section,
            {tag: entry.data for (of, tag), entry in before.items() if of == section},
            {tag: entry.data for (of, tag), entry in after.items() if of == section},
        )
    ]
    new_names = {found.was: found.tag for found in names}
    by_new = {(found.section, found.tag): found for found in names}
    before = {(section, with_new_tags(name, new_names) if section == "deviations" else name): entry
              for (section, name), entry in before.items()}  # fmt: skip
    old_key = {key: (key[0], by_new[key].was) if key in by_new else key for key in after}
    found = []
    for key, entry in after.items():
        earlier = before.get(old_key[key])
        change = _tag_change(key, earlier, entry, by_new.get(key), new_names)
        if change:
            found.append(change)
    gone = before.keys() - set(old_key.values())
    found += [change for key in before if key in gone and (change := _tag_change(key, before[key], None, None, {}))]
    return tuple(found)


def _entries(register: Register) -> dict[_Key, _Entry]:
    """Every entry of the register by section and name; of a tag defined twice the first, which counts."""
    found: dict[_Key, _Entry] = {}
    for file in register.files:
        data = file.data if isinstance(file.data, Mapping) else {}
        for section in SECTIONS:
            entries = data.get(section)
            if isinstance(entries, Mapping) and "hold" not in entries:
                for tag, entry in entries.items():
                    found.setdefault((section, tag), _Entry(entry, file, (section, tag)))
        for index, entry in enumerate(_list(data.get("deviations"))):
            if isinstance(entry, Mapping):
                name = f"{told(entry.get('rule'))} at {told(entry.get('at'))}"
                found.setdefault(("deviations", name), _Entry(entry, file, ("deviations", index)))
    root = register.root.data if isinstance(register.root.data, Mapping) else {}
    head = {key: value for key, value in root.items() if key not in (*SECTIONS, "deviations", "include", "history")}
    head["history"] = {told(one.get("code")): one for one in _list(root.get("history")) if isinstance(one, Mapping)}
    found["register", "register"] = _Entry(head, register.root, ())
    return found


def _list(value: Any) -> list[Any]:
    return value if isinstance(value, list) else []


def _tag_change(
    key: _Key, old: _Entry | None, new: _Entry | None, name: Renamed | None, new_names: Mapping[str, str]
) -> TagChange | None:
    section, tag = key
    here = new or old
    assert here is not None
    before = leaves(with_new_tags(old.data, new_names)) if old else {}
    after = leaves(new.data) if new else {}
    found = tuple(_changes(section, before, after, old, new))
    if not found and old and new and not name:
        return None
    kind = Kind.ADDED if old is None else Kind.REMOVED if new is None else Kind.RENAMED if name else Kind.CHANGED
    data = here.data if isinstance(here.data, Mapping) else {}
    unit = tag if section in ("units", "texts") else data.get("unit")
    service = data.get("service", data.get("name"))
    return TagChange(
        kind, section, tag, unit if isinstance(unit, str) else "", service if isinstance(service, str) else "", found,
        name.was if name else "", name.evidence if name else "",
    )  # fmt: skip


def _changes(section: str, before: Leaves, after: Leaves, old: _Entry | None, new: _Entry | None) -> Iterator[Change]:
    def place(path: Path) -> Place | None:
        if new is not None and path in after:
            return new.place(path)
        return old.place(path) if old is not None and path in before else None

    def change(kind: Kind, path: Path, was: str, now: str, remark: str = "") -> Change:
        return Change(kind, _pointer(path), was, now, impact_of(section, path), place(path), remark)

    def whole(kind: Kind, path: Path, found: Leaves, entry: _Entry) -> Change:
        """A part that came or went with all that it holds."""
        held = "; ".join(f"{' '.join(map(str, leaf[len(path) :]))} {told(one)}" for leaf, one in found.items())
        impact = max(impact_of(section, leaf) for leaf in found)
        texts = ("", held) if kind is Kind.ADDED else (held, "")
        return Change(kind, _pointer(path), *texts, impact, entry.place(path))

    paired_old: set[Path] = set()
    paired_new: set[Path] = set()
    for here, there, equal in values.alternatives(before, after):
        paired_old.add(here)
        paired_new.add(there)
        kind = Kind.REWRITTEN if equal else Kind.CHANGED
        yield change(kind, there, _term(here, before), _term(there, after))
    gathered: set[Path] = set()
    if old and new:
        sides = ((Kind.ADDED, after, before, paired_new, new), (Kind.REMOVED, before, after, paired_old, old))
        for kind, here_only, other, paired, entry in sides:
            for part, found in _whole_parts(here_only, other, paired).items():
                gathered.update(found)
                yield whole(kind, part, found, entry)
    for path in dict.fromkeys((*after, *before)):
        if path in gathered:
            continue
        was, now = path in before and path not in paired_old, path in after and path not in paired_new
        if was and now:
            yield from _value_changes(change, path, before[path], after[path])
        elif now:
            yield change(Kind.ADDED, path, "", told(after[path]))
        elif was:
            yield change(Kind.REMOVED, path, told(before[path]), "")


def _whole_parts(here: Leaves, other: Leaves, paired: set[Path]) -> dict[Path, Leaves]:
    """Parts of several values of which the other side has none, such as an alarm, each with its values."""
    known_there = {path[:end] for path in other for end in range(1, len(path) + 1)}
    found: dict[Path, Leaves] = {}
    for path, value in here.items():
        part = next((path[:end] for end in range(1, len(path)) if path[:end] not in known_there), None)
        if part is not None and path not in paired:
            found.setdefault(part, {})[path] = value
    return {part: values for part, values in found.items() if len(values) > 1}


def _term(path: Path, data: Leaves) -> str:
    return f"{str(path[-1]).replace('_', ' ')} {told(data[path])}"


def _value_changes(change: Any, path: Path, old: Any, new: Any) -> Iterator[Change]:
    key = next((step for step in reversed(path) if isinstance(step, str)), "")
    if type(old) is type(new) and old == new:
        return
    if same(old, new, key):
        # Nothing is told of a text whose lines are broken elsewhere.
        if told(old) != told(new):
            yield change(Kind.REWRITTEN, path, told(old), told(new))
    elif isinstance(old, list) and isinstance(new, list) and key in values.SETS:
        yield from (change(Kind.REMOVED, path, told(one), "") for one in old if one not in new)
        yield from (change(Kind.ADDED, path, "", told(one)) for one in new if one not in old)
    elif isinstance(old, list) and isinstance(new, list) and key in STEPS:
        yield from _items(change, path, old, new)
    else:
        yield change(Kind.CHANGED, path, told(old), told(new), _remark(old, new, key))


def _items(change: Any, path: Path, old: list[str], new: list[str]) -> Iterator[Change]:
    """Steps added, removed and changed; a step that only has another number is none."""
    matcher = SequenceMatcher(None, [told(one) for one in old], [told(one) for one in new], autojunk=False)
    for what, first, last, start, end in matcher.get_opcodes():
        if what == "equal":
            continue
        both = min(last - first, end - start)
        for offset in range(both):
            yield change(Kind.CHANGED, (*path, start + offset), told(old[first + offset]), told(new[start + offset]))
        for index in range(first + both, last):
            yield change(Kind.REMOVED, (*path, index), told(old[index]), "")
        for index in range(start + both, end):
            yield change(Kind.ADDED, (*path, index), "", told(new[index]))


def _remark(old: Any, new: Any, key: str) -> str:
    """The new value in the old unit, where both are written in different ones."""
    restated = in_old_units(old, new, key)
    if not restated:
        return ""
    try:
        symbol = parse_range(old).unit.symbol if isinstance(old, str) and " to " in old else told(old).split()[-1]
    except ValueError:
        return ""
    return f"{' to '.join(display_number(one, 5) for one in restated)} {symbol}"


def _pointer(path: Path) -> str:
    """JSON Pointer (RFC 6901)."""
    return "".join("/" + str(step).replace("~", "~0").replace("/", "~1") for step in path)


# ---------------------------------------------------------------- how far a value reaches

_WORDS = frozenset({
    "service", "drawing", "purpose", "cause", "consequence", "source", "name", "owner", "reason",
})  # fmt: skip
_DIRECTIONS = frozenset({
    "action", "on_fault", "on_bad_measurement", "hazard", "fails", "safe", "opens_on", "output_block", "effect",
    "when_not_followed",
})  # fmt: skip


def impact_of(section: str, path: Path) -> Impact:
    """How far a value of a section reaches into the plant."""
    steps = {str(step) for step in path}
    if "alarms" in steps:
        return Impact.ALARMS
    if steps & _WORDS and not steps & {"initiators", "actions"}:
        return Impact.RECORD
    if section in ("register", "texts", "units"):
        return Impact.RECORD
    if section in ("interlocks", "deviations") or steps & _DIRECTIONS:
        return Impact.PROTECTION if section != "deviations" else Impact.RECORD
    return Impact.CONTROL
