"""Rules on the letters of a tag: what it measures and what it is, by ISA-5.1."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import FinalElement, Function, Instrument, Loop, Measurement, known
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, need, only_if, rule

_LETTERS = "ANSI/ISA-5.1-2009, Table 4.1, identification letters"

_FIRST = {
    "temperature": "T",
    "temperature difference": "T",
    "pressure": "P",
    "differential pressure": "P",
    "flow": "F",
    "level": "L",
    "analysis": "A",
    "speed": "S",
    "position": "Z",
    "power": "J",
    "current": "I",
    "weight": "W",
    "vibration": "V",
    "density": "D",
    "conductivity": "C",
}
"""First letter of each variable; density and conductivity have none in the table, and take a user's choice."""
_MEANINGS = {
    "A": "analysis", "B": "burner, combustion", "E": "voltage", "F": "flow", "H": "hand", "I": "current", "J": "power",
    "K": "time, schedule", "L": "level", "P": "pressure", "Q": "quantity", "R": "radiation", "S": "speed, frequency",
    "T": "temperature", "U": "multivariable", "V": "vibration", "W": "weight, force", "Y": "event, state",
    "Z": "position, dimension",
}  # fmt: skip
"""What each first letter stands for; C, D, G, M, N and O are the user's choice, X is unclassified."""
_OWN_CHOICE = ("analysis", "density", "conductivity", "position")
"""Variables that sites give one of the user's-choice letters: D for density, C for conductivity, M for moisture."""
_ANY_FIRST = "UX"
"""Multivariable and unclassified: they say nothing of the variable."""
_ALSO_FIRST = {
    "flow": "Q",  # a quantity: a flow that is added up
    "weight": "Q",
    "density": "A",  # measured to know the composition
    "conductivity": "A",
}
_DIFFERENTIAL = ("temperature difference", "differential pressure")
_OF_DIFFERENCES = (*_DIFFERENTIAL, "temperature", "pressure")
"""Variables for which the modifier D is wanted, or is wrong."""
_OPEN = "BNUX"
"""Succeeding letters that are the user's choice, multifunction or unclassified."""
_VALVES = ("control valve", "on-off valve", "damper")


@dataclass(frozen=True, slots=True)
class _Identification:
    """The letters of a tag, taken apart."""

    letters: str
    first: str
    differential: bool
    """The first letter is modified by D."""
    succeeding: str


def _identification(plant: Plant, tag: str) -> _Identification | None:
    """The letters of a tag; None where it does not follow the grammar, of which `tag-grammar` tells."""
    grammar = need(plant.register.tag_pattern, "the tag grammar, `tags`,")
    parts = grammar.fullmatch(tag)
    letters = (parts["letters"] or "").upper() if parts else ""
    if not letters.isascii() or not letters.isalpha():
        return None
    differential = letters[1:2] == "D" and len(letters) > 2
    return _Identification(letters, letters[0], differential, letters[2 if differential else 1 :])


# ---------------------------------------------------------------- first letter


@rule(level=Level.WARNING, source=f"{_LETTERS}; a final element takes the letter of its loop: clause 4 (from memory)")
def tag_variable_mismatch(part: Loop | Instrument | FinalElement | Function, plant: Plant) -> Iterator[Draft]:
    """The first letter of a tag is not that of the variable.

    Why:
        Whoever reads TT-2014 takes it for a temperature before he reads anything else. A tag with the letter of
        another variable sends the technician to the wrong instrument, and is often a tag copied and not changed.
    Breaks:
        `PT-2014` with `variable: temperature`; `PI-2016` with `variable: differential pressure`, whose letters are
        PD; `FV-3002` moved by LIC-3002, since a valve takes the letter of its loop and not of what flows through it.
    Holds:
        The first letter is that of the measured variable, with the modifier D for a difference. A final element or
        a function has the first letter of a loop that commands it, that it commands or that enters it. Density,
        conductivity, position and analysis may have one of the user's-choice letters C, D, G, M, N and O; X and U
        say nothing of the variable. Drives, motors and heaters are often named as equipment and are not judged.
    What this check cannot see:
        A site that gives the letters other meanings: accept its tags by deviations, or leave the group `letters`
        empty in the tag grammar.
    """
    if isinstance(part, Loop | Instrument):
        yield from _of_measurement(part, plant)
        return
    related = plant.commanders.get(part.tag, ())
    if isinstance(part, FinalElement):
        only_if(known(part.kind) in _VALVES)
        related = (*(loop.tag for loop in plant.moved_by.get(part.tag, ())), *related)
    if isinstance(part, Function):
        to = known(part.to)
        related = (*related, *part.inputs, *part.outputs, *((to,) if to else ()))
    own = _identification(plant, part.tag)
    only_if(own and related)
    assert own is not None
    firsts = {tag: found.first for tag in related if (found := _identification(plant, tag))}
    if own.first in _ANY_FIRST or own.first in firsts.values() or not firsts:
        return
    named, letter = next(iter(firsts.items()))
    yield draft(
        part.tag,
        f"it begins with {_told(own.first)}, but {named}, {_related(part, named, plant)}, begins with {_told(letter)}",
        remedy=f"begin the tag with {letter}, or correct the one of {named}",
        at=part.origin.key(),
        related=((plant.register.defined_at(named) or part.origin.key(), f"{named}"),),
    )


def _related(part: FinalElement | Function, named: str, plant: Plant) -> str:
    """How a tag belongs to a final element or a function, in words."""
    if isinstance(part, FinalElement):
        return "which moves it"
    if named in plant.commanders.get(part.tag, ()):
        return "which commands it"
    return "its input" if named in part.inputs else "which it commands"


def _of_measurement(part: Loop | Instrument, plant: Plant) -> Iterator[Draft]:
    measurement = known(part.measurement)
    only_if(measurement)
    assert measurement is not None
    variable = need(measurement.variable, "the variable")
    if variable not in _FIRST:
        return  # the schema has said so
    transmitter = known(measurement.transmitter)
    tags = {part.tag: part.origin.key()}
    if transmitter and transmitter not in plant.register.instruments:
        tags.setdefault(transmitter, measurement.origin.place("transmitter"))
    for tag, place in tags.items():
        own = _identification(plant, tag)
        fault = _first_letter_fault(own, variable) if own else ""
        if own and fault:
            wanted = _FIRST[variable] + ("D" if variable in _DIFFERENTIAL else "")
            yield draft(
                tag,
                f"{fault}, but it measures {variable}, for which it would be {wanted}",
                remedy=f"begin the tag with {wanted}, or correct the variable",
                at=place,
                related=((measurement.origin.place("variable"), f"the variable, {variable}"),),
            )


def _first_letter_fault(own: _Identification, variable: str) -> str:
    """What the first letters say in place of the variable; empty where they agree with it."""
    if own.first in _ANY_FIRST:
        return ""
    if own.first != _FIRST[variable] and own.first not in _ALSO_FIRST.get(variable, ""):
        if own.first not in _MEANINGS and variable in _OWN_CHOICE:
            return ""
        return f"its first letter is {_told(own.first)}"
    if variable in _OF_DIFFERENCES and own.differential != (variable in _DIFFERENTIAL):
        return f"its letters {'begin' if own.differential else 'do not begin'} with {own.first}D, a difference"
    return ""


def _told(letter: str) -> str:
    meaning = _MEANINGS.get(letter, "the user's choice")
    return f"{letter} ({meaning})"


# ---------------------------------------------------------------- succeeding letters


@rule(level=Level.WARNING, source=f"{_LETTERS}, succeeding letters")
def tag_function_mismatch(part: Loop | Instrument | FinalElement | Function, plant: Plant) -> Iterator[Draft]:
    """The letters after the first say that a tag is something else than it is.

    Why:
        C promises a controller, T a transmitter, V a valve, Y a computing element. Where the register has another
        thing under the tag, either the tag is wrong or a part is missing: an `FIC` without a controller is often a
        loop that was never finished.
    Breaks:
        `FIC-3004` without `controller`; `TI-2014` with one; `transmitter: TI-2014`; a control valve `FT-2011`; a
        function `FIC-2031` of kind low select.
    Holds:
        A loop with a controller has C (or K, a control station); one without has none, and something that reads
        out: I, R, A, S. A transmitter or instrument has T, or E, S or I; a valve V or Z; a function Y, or C or K
        for a ratio station. Letters that are the user's choice (B, N, U, X) stand for anything. Drives, motors and
        heaters may be named as equipment, but not as valves.
    What this check cannot see:
        Whether a letter too few is a mistake or the site's habit.
    """
    own = _identification(plant, part.tag)
    if own:
        fault = _function_fault(part, own)
        if fault:
            message, remedy = fault
            yield draft(part.tag, message, remedy=remedy, at=part.origin.key())
    measurement = known(part.measurement) if isinstance(part, Loop) else None
    if measurement:
        yield from _of_transmitter(part.tag, measurement, plant)


def _of_transmitter(loop: str, measurement: Measurement, plant: Plant) -> Iterator[Draft]:
    transmitter = known(measurement.transmitter)
    own = _identification(plant, transmitter) if transmitter and transmitter not in plant.register.instruments else None
    if own and not _has(own, "TES"):
        yield draft(
            own_tag := str(transmitter),
            f"it is the transmitter of {loop}, but its letters {own.letters} name none",
            remedy="write the transmitter's own tag, with T for a transmitter (E for an element, S for a switch)",
            at=measurement.origin.place("transmitter"),
            related=((plant.register.defined_at(own_tag) or measurement.origin.key(), f"{own_tag}"),)
            if own_tag in plant.register.loops
            else (),
        )


def _function_fault(part: Loop | Instrument | FinalElement | Function, own: _Identification) -> tuple[str, str] | None:
    """Message and remedy where the succeeding letters do not say what a part is."""
    letters = own.letters
    match part:
        case Loop():
            if part.controller is not None and not (_controls(own) or _has(own, "")):
                return (
                    f"it has a controller, but its letters {letters} name none (C)",
                    f"write a tag with C, as in {own.first}IC, or take the controller out",
                )
            if part.controller is None and _controls(own):
                return (
                    f"its letters {letters} name a controller (C), but it has none",
                    f"write its `controller`, or a tag without C, as in {own.first}I",
                )
            if part.controller is None and not _has(own, "IRASGLQJY"):
                return (
                    f"it is an indicator, but its letters {letters} name nothing that reads out",
                    f"write a tag with I, as in {own.first}I",
                )
        case Instrument():
            if _controls(own) or not _has(own, "TESIRAG"):
                return (
                    f"it is an instrument, but its letters {letters} name "
                    + ("a controller" if _controls(own) else "no instrument"),
                    f"write a tag with T, as in {own.first}T, or file it as what it is",
                )
        case FinalElement():
            kind = known(part.kind)
            if kind in _VALVES and not _has(own, "VZ"):
                return (
                    f"it is a {kind}, but its letters {letters} name none (V, Z)",
                    f"write a tag with V, as in {own.first}V, or correct the kind",
                )
            if kind in ("variable-speed drive", "motor", "heater bank") and own.succeeding.endswith("V"):
                return f"it is a {kind}, but its letters {letters} name a valve", "correct the tag, or the kind"
        case Function():
            if not (_has(own, "Y") or _controls(own)):
                return (
                    f"it is a function, but its letters {letters} name none (Y)",
                    f"write a tag with Y, as in {own.first}Y",
                )
    return None


def _has(own: _Identification, letters: str) -> bool:
    return any(letter in letters or letter in _OPEN for letter in own.succeeding)


def _controls(own: _Identification) -> bool:
    """Whether the letters name a controller; C behind a switch or a light is its modifier `closed` (ZSC)."""
    before = ""
    for letter in own.succeeding:
        if letter == "K" or (letter == "C" and before not in ("S", "L")):
            return True
        before = letter
    return False
