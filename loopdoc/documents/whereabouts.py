"""Where things stand: in which unit a part belongs, and which document of the issue tells of a tag."""

from __future__ import annotations

import hashlib
import re
from collections.abc import Iterable, Mapping
from urllib.parse import quote

from loopdoc.documents.wording import Target
from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import FinalElement, Function, Instrument, Interlock, Loop, known

NO_UNIT = "00"
"""Unit under which parts are told whose unit the register does not give; also that of plant-wide documents."""

LOOP_SHEETS = "loop-sheets"
REGISTER_TEXT = "register-text"
"""Folder of the pages that show the files of the register."""
CHARTS = "cause-and-effect"
INSTRUMENT_LISTS = "instrument-lists"

_LONGEST_NAME = 200
"""Bytes; file systems take names of 255, and an ending and a temporary mark come to it."""

Part = Loop | FinalElement | Instrument | Function | Interlock


def unit_of(part: Part) -> str:
    """Number of the unit that a part belongs to."""
    return known(part.unit) or NO_UNIT


def unit_numbers(plant: Plant) -> tuple[str, ...]:
    """Numbers of the units, as declared; then those that only a part names."""
    register = plant.register
    found = dict.fromkeys(register.units)
    sections: tuple[Mapping[str, Part], ...] = (
        register.loops, register.final_elements, register.instruments, register.functions, register.interlocks,
    )  # fmt: skip
    for section in sections:
        for part in section.values():
            found.setdefault(unit_of(part))
    return tuple(found)


def file_name(number: str) -> str:
    """Name of a unit's document without its ending."""
    return f"unit-{re.sub(r'[^A-Za-z0-9.-]+', '-', number)}"


def document_name(tag: str) -> str:
    """Name of a tag's document without its ending: the tag, without what a path or a file system would obey."""
    name = re.sub(r"[^\w ()+,.-]", lambda found: quote(found[0], safe=""), tag)
    if len(name.encode()) <= _LONGEST_NAME:
        return name
    return f"{name[: _LONGEST_NAME // 4]}-{hashlib.sha256(tag.encode()).hexdigest()[:16]}"


def anchor(tag: str) -> str:
    """Name of the place in a document at which a tag is told."""
    return f"tag-{re.sub(r'[^A-Za-z0-9]+', '-', tag).strip('-')}"


def register_pages(files: Iterable[str]) -> dict[str, str]:
    """Name of the page of the site that shows a file of the register, by the file's name."""
    found: dict[str, str] = {}
    for file in files:
        plain = re.sub(r"[^A-Za-z0-9._-]+", "-", file)
        same = sum(name == plain or name.startswith(f"{plain}.copy-") for name in found.values())
        found[file] = f"{plain}.copy-{same + 1}" if same else plain
    return found


def line_anchor(line: int) -> str:
    """Name of the place of a line in the page of its file."""
    return f"line-{line}"


def mover(plant: Plant, tag: str) -> Loop | None:
    """The loop on whose sheet a final element or a function is drawn."""
    loops = plant.register.loops
    waiting, seen = [tag], {tag}
    while waiting:
        for commander in plant.commanders.get(waiting.pop(0), ()):
            if commander in loops:
                return loops[commander]
            if commander not in seen:
                seen.add(commander)
                waiting.append(commander)
    function = plant.register.functions.get(tag)
    return loops.get(known(function.to) or "") if function else None


def told_at(plant: Plant, tag: str) -> Target:
    """The document, seen from the folder of another one, that tells of a tag."""
    register = plant.register
    loop = register.loops.get(tag) or plant.loop_of_transmitter.get(tag) or mover(plant, tag)
    if loop is not None:
        return Target(sheet=f"../{LOOP_SHEETS}/{quote(document_name(loop.tag))}.html")
    for part, folder in (
        (register.interlocks.get(tag), CHARTS),
        (register.instruments.get(tag) or register.final_elements.get(tag), INSTRUMENT_LISTS),
    ):
        if part is not None:
            return Target(sheet=f"../{folder}/{quote(file_name(unit_of(part)))}.html#{anchor(tag)}")
    return Target()


def natural(tag: str) -> tuple[tuple[int, int, str], ...]:
    """Key that sorts numbers inside names by their value: AI-2-9 before AI-2-10."""
    pieces = re.split(r"(\d+)", tag)
    return tuple((0, int(piece), piece) if piece.isdigit() else (1, 0, piece.casefold()) for piece in pieces if piece)
