"""Rules on the text: what the register's format refuses, and what its prose names."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.engineering.pairing import Plant
from loopdoc.register.place import Fault
from loopdoc.register.pointer import Unresolved, pointed
from loopdoc.register.text import TextFile
from loopdoc.rules.finding import Level
from loopdoc.rules.prose import KnownTags, Prose
from loopdoc.rules.rule import Draft, draft, rule
from loopdoc.rules.subjects import Faults

_BY_TAG = ("loops", "final_elements", "instruments", "functions", "interlocks", "units", "texts")


@rule(level=Level.ERROR, source="the register's format, `loopdoc schema`")
def schema(file: TextFile, faults: Faults) -> Iterator[Draft]:
    """The text says something that the register's format does not know.

    Why:
        A misspelt key or a value without its unit is not read as the fact that was meant. Every document
        would then lack it in silence, and every other rule that needs it would count as not checked.
    Breaks:
        `gian: 1.8` under a controller (there is no such key), `range: 60 to 120` (no unit),
        `action: reversed` (the word is `reverse`), `reset` and `repeats` for one controller.
    Holds:
        Every key is one of the format, every value has the form its key asks for, and a value that is not
        yet known is written `{hold: reason}`.
    What this check cannot see:
        Whether a value that reads well is the right one.
    """
    for fault in faults.by_file.get(file.name, ()):
        yield draft(_tag(fault), fault.message, remedy=fault.remedy, at=fault.place)


def _tag(fault: Fault) -> str:
    """The tag (or unit) under which a fault stands, from its JSON Pointer (RFC 6901); elsewhere the section."""
    steps = [step.replace("~1", "/").replace("~0", "~") for step in fault.pointer.split("/")[1:]]
    if len(steps) > 1 and steps[0] in _BY_TAG:
        return steps[1]
    return steps[0] if steps else "register"


@rule(level=Level.WARNING, source="common practice; RFC 6901 (JSON Pointer) for what stands in braces")
def text_tag_unknown(prose: Prose, known: KnownTags, plant: Plant) -> Iterator[Draft]:
    """The prose names a tag, or points at a value, that the register does not have.

    Why:
        An operator who is told to cut FIC-2111 looks for it during an upset. Text drifts from the register when a
        tag is changed and its sentence is not; a pointer that leads nowhere is printed as it was written, where a
        value should stand.
    Breaks:
        `Reduce the steam at FIC-2111` where the loop is FIC-2011; `{TIC-2014/alarms/high/limits}`, since the key is
        `limit` (this one an error).
    Holds:
        Every tag in the prose is one of the register, and every pointer leads to a value. A word counts as a tag
        where it follows the site's grammar and its letters are those of a tag of the register: equipment, relief
        valves and gauges, which are not in it, may be named.
    What this check cannot see:
        A tag that exists but is not the one meant; one with misspelt letters; pairs such as `PV-2021A/B`.
    """
    for pointer in prose.pointers:
        found = pointed(plant.register, pointer)
        if isinstance(found, Unresolved):
            yield draft(
                prose.tag,
                f"{prose.what} points at `{{{pointer}}}`, which leads to no value: {found.reason}",
                remedy="write a tag and the keys below it, as in `{TIC-2014/alarms/high/limit}`",
                at=prose.place,
                level=Level.ERROR,
            )
    for word in prose.words if known.grammar else ():
        parts = known.grammar.fullmatch(word) if word not in known.names.tags and known.grammar else None
        if parts and parts["letters"] in known.letters:
            nearest = known.names.nearest(word)
            yield draft(
                prose.tag,
                f"{prose.what} names {word}, which the register does not know",
                remedy=f"write {nearest}, the nearest known, or the tag that is meant"
                if nearest
                else "write the tag that is meant, or define it",
                at=prose.place,
            )
