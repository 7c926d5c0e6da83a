"""Rules on tags and references."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import Hold, Loop, Measurement, known
from loopdoc.register.quantity import Range
from loopdoc.register.units import same_kind
from loopdoc.rules.finding import Level
from loopdoc.rules.references import DefinedTag, Reference, what_is
from loopdoc.rules.rule import Draft, draft, need, rule
from loopdoc.rules.values import equal


@rule(level=Level.ERROR, source="ANSI/ISA-5.1-2022, tag numbers (from memory); the site's own `tags`")
def tag_grammar(defined: DefinedTag, plant: Plant) -> Iterator[Draft]:
    """A tag does not follow the site's tag grammar, or stands under another unit than its number says.

    Why:
        A tag is looked up in drawings, in the control system and on a plate in the field. One that the
        site's grammar cannot produce is found in none of them, and one filed under the wrong unit is missing
        from the narrative of its own.
    Breaks:
        `TIC2014` where the grammar asks for a hyphen; `TIC-2014` with `unit: "30"` where the grammar reads
        unit 20 from the number.
    Holds:
        Each whole tag matches the expression under `tags`, and the `unit` written under it is the one that
        the expression reads from it. Transmitters are held to the grammar, but may stand in another unit
        than the loop they serve. A unit that is not under `units` is told by `reference-unknown`.
    What this check cannot see:
        Whether the tag is the one on the drawing.
    """
    pattern = need(plant.register.tag_pattern, "the tag grammar, `tags`,")
    parts = pattern.fullmatch(defined.tag)
    if parts is None:
        yield draft(
            defined.tag,
            f"the tag of this {defined.what} does not follow the site's tag grammar",
            remedy=f"correct the tag, or the expression under `tags`: {pattern.pattern}",
            at=defined.place,
            related=((plant.register.root.place(("tags",)), "the site's tag grammar"),),
        )
        return
    if defined.unit not in (None, parts["unit"]) and defined.unit in plant.register.units:
        yield draft(
            defined.tag,
            f"the tag is of unit {parts['unit']}, but the register puts it in unit {defined.unit}",
            remedy=f'write `unit: "{parts["unit"]}"`, or correct the tag',
            at=defined.part.origin.place("unit"),
            related=((defined.place, "the tag"),),
        )


@rule(level=Level.ERROR, source="common practice: one thing, one tag; one fact, one place")
def tag_duplicate(plant: Plant) -> Iterator[Draft]:
    """One tag stands for two things, or one transmitter for two measurements.

    Why:
        Of two descriptions under one tag only the first is used, and the reader of the second is misled. Two
        loops on one transmitter are one measurement; where they describe it differently, one of the two
        loop sheets is wrong, and where their numbers differ, one of them most likely names the wrong
        transmitter.
    Breaks:
        `FV-2011` in two files. `TIC-2014` with TT-2014 from 60 to 120 degC and `TIC-2014A` with the same
        TT-2014 from 0 to 150 degC. `TIC-2015` copied from TIC-2014 and still measuring with TT-2014.
    Holds:
        Every tag is defined once. Loops that share a transmitter and its number (PIC-3001A and PIC-3001B on
        PT-3001) describe it alike.
    What this check cannot see:
        Two tags given to one device.
    """
    for tag, later, first in plant.register.twice:
        yield draft(
            tag,
            "defined a second time; only the first definition counts",
            remedy="keep one of the two, or give this one a tag of its own",
            at=later,
            related=((first, "the first definition"),),
        )
    yield from _solenoids_named_twice(plant)
    for transmitter, loops in plant.loops_on.items():
        instrument = plant.register.instruments.get(transmitter)
        first_tag, first_description = (
            (transmitter, instrument.measurement) if instrument else (loops[0].tag, known(loops[0].measurement))
        )
        assert first_description is not None
        for loop in loops if instrument else loops[1:]:
            yield from _second_description(plant, transmitter, first_tag, first_description, loop)


def _solenoids_named_twice(plant: Plant) -> Iterator[Draft]:
    register = plant.register
    for element in register.final_elements.values():
        solenoid = known(element.trip_solenoid)
        tag = known(solenoid.tag) if solenoid else None
        if solenoid is None or tag is None:
            continue
        first = register.defined_at(tag)
        if first is not None and first != solenoid.origin.place("tag"):
            yield draft(
                tag,
                f"it is the trip solenoid of {element.tag}, but the tag is that of a {what_is(register, tag)} already",
                remedy="give the solenoid valve a tag of its own",
                at=solenoid.origin.place("tag"),
                related=((first, f"{tag}, the {what_is(register, tag)}"),),
            )


_OF_THE_TRANSMITTER = ("variable", "sensor", "element", "characteristic", "range", "signal", "on_fault", "channel",
                       "supply")  # fmt: skip
"""What belongs to the device; the filter belongs to each loop."""


def _second_description(
    plant: Plant, transmitter: str, first_tag: str, first: Measurement, loop: Loop
) -> Iterator[Draft]:
    measurement = known(loop.measurement)
    assert measurement is not None
    differing = [key for key in _OF_THE_TRANSMITTER if _differ(getattr(first, key), getattr(measurement, key))]
    if not _same_number(plant, loop.tag, first_tag):
        keys = [f"`{key}`" for key in differing]
        others = f"{', '.join(keys[:-1])} and {keys[-1]}" if len(keys) > 1 else "".join(keys)
        yield draft(
            loop.tag,
            f"it measures with {transmitter}, which is "
            + ("an instrument of its own" if first_tag == transmitter else f"the transmitter of {first_tag} already")
            + (f", and describes it with another {others}" if others else ""),
            remedy=f"name the transmitter of {loop.tag}; if the two share it on purpose, write "
            + ("the same in both and a deviation" if others else "a deviation"),
            at=measurement.origin.place("transmitter"),
            related=(
                (first.origin.place("transmitter"), f"where {transmitter} is described first"),
                *((first.origin.place(key), f"`{key}: {getattr(first, key)}`") for key in differing),
            ),
        )
        return
    for key in differing:
        yield draft(
            loop.tag,
            f"`{key}: {getattr(measurement, key)}` is given for {transmitter} here, "
            f"and `{key}: {getattr(first, key)}` under {first_tag}",
            remedy="write the same in both, or name the transmitter that is meant",
            at=measurement.origin.place(key),
            related=((first.origin.place(key), f"what {first_tag} says of {transmitter}"),),
        )


def _differ(first: object, second: object) -> bool:
    """Whether two facts contradict each other; a fact that only one side gives does not."""
    if first is None or second is None or isinstance(first, Hold) or isinstance(second, Hold):
        return False
    if isinstance(first, Range) and isinstance(second, Range) and same_kind(first.unit, second.unit):
        there = second.to(first.unit.symbol)
        return not (equal(first.low, there.low) and equal(first.high, there.high))
    return first != second


def _same_number(plant: Plant, tag: str, other: str) -> bool:
    pattern = plant.register.tag_pattern
    parts, others = (pattern.fullmatch(tag), pattern.fullmatch(other)) if pattern else (None, None)
    return bool(parts and others and all(parts[group] == others[group] for group in ("unit", "serial")))


@rule(level=Level.ERROR, source="common practice")
def reference_unknown(reference: Reference, plant: Plant) -> Iterator[Draft]:
    """The register names a tag, a unit or a rule that does not exist, or is not of the sort wanted there.

    Why:
        The link is missing from the plant that is checked and documented: an output that leads nowhere, an
        interlock with one cause less, a deviation that accepts nothing.
    Breaks:
        `output: {to: FIC-2111}` where the loop is FIC-2011; `actions: {TT-2014: closed}`, since nothing can
        be closed there; `unit: "25"` without that unit under `units`.
    Holds:
        Outputs go to loops, functions and final elements; functions take in and interlocks watch
        transmitters, instruments and the measurements of loops; interlocks act on final elements and loops;
        branches of a process are final elements that the loop moves; weights are given to what enters the
        function; units stand under `units`;
        alarms warn of the hazards of loops.
    What this check cannot see:
        A tag that exists but is not the one meant.
    """
    if reference.resolved:
        return
    nearest = reference.among.nearest(reference.target)
    otherwise = what_is(plant.register, reference.target)
    if otherwise:
        fault = f"{reference.where} is `{reference.target}`, a {otherwise}; {reference.among.what} is wanted"
    else:
        fault = f"{reference.where} is `{reference.target}`, which is not {reference.among.what}"
    yield draft(
        reference.tag,
        fault,
        remedy=f"write `{nearest}`, the nearest known" if nearest else "correct the name, or define what it names",
        at=reference.place,
    )
