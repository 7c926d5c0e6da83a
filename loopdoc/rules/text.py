"""Rules on the text: what the register's format refuses."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.register.place import Fault
from loopdoc.register.text import TextFile
from loopdoc.rules.finding import Level
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
