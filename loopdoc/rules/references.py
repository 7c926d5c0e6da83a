"""Every tag that a register defines, and every place where it names one."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import Function, Loop, Origin, Part, Register, known
from loopdoc.register.place import Place

SECTIONS = ("register", "site", "revision", "history", "texts")
"""Where a finding may stand that is about no tag; a deviation may name them."""


_SHORT = 4


_NAMED_BY = {"transmitter": "transmitter", "trip solenoid": "tag"}
"""The key under which the tag of a part stands that is no entry of a section."""


@dataclass(frozen=True, slots=True)
class DefinedTag:
    """A tag that the register defines."""

    tag: str
    what: str
    """What it is, such as `loop` or `transmitter`."""
    part: Part
    """The part of this tag, or the measurement or solenoid that has the tag as a value."""

    @property
    def place(self) -> Place:
        key = _NAMED_BY.get(self.what)
        return self.part.origin.place(key) if key else self.part.origin.key()

    @property
    def unit(self) -> str | None:
        """The unit that the register gives it; None for what has no unit of its own."""
        return known(getattr(self.part, "unit", None))


@dataclass(frozen=True)
class Names:
    """Tags among which a reference may choose."""

    what: str
    """What they are, in words: `a loop, a function or a final element`."""
    tags: Collection[str]

    def nearest(self, written: str) -> str | None:
        """The tag that differs from the written one by one character, or by two neighbours swapped.

        None for a name so short that every other one is near.
        """
        if len(written) < _SHORT:
            return None
        for short in _shortened(written):
            for tag in self._by_shortened.get(short, ()):
                if tag != written:
                    return tag
        return None

    @cached_property
    def _by_shortened(self) -> dict[str, list[str]]:
        found: dict[str, list[str]] = {}
        for tag in self.tags:
            for short in _shortened(tag):
                found.setdefault(short, []).append(tag)
        return found


def _shortened(tag: str) -> Iterator[str]:
    """A tag with no character left out, then with each in turn; two tags that share one of these are near."""
    plain = tag.casefold()
    yield plain
    for index in range(len(plain)):
        yield plain[:index] + plain[index + 1 :]


@dataclass(frozen=True, slots=True)
class Reference:
    """A place where the register names a tag (or a unit, or a rule) that it must define."""

    tag: str
    """The tag under which the name stands."""
    where: str
    """What it is named as, such as `an input`."""
    target: str
    among: Names
    origin: Origin
    steps: tuple[str | int, ...]
    is_key: bool
    """Whether the name is a key, and not a value."""

    @property
    def resolved(self) -> bool:
        return self.target in self.among.tags

    @property
    def place(self) -> Place:
        return self.origin.key(*self.steps) if self.is_key else self.origin.place(*self.steps)


def _sections(register: Register) -> Iterator[tuple[str, Mapping[str, Any]]]:
    """What the register defines under tags: what each section holds, and the section."""
    yield "loop", register.loops
    yield "final element", register.final_elements
    yield "instrument", register.instruments
    yield "function", register.functions
    yield "interlock", register.interlocks


def defined_tags(register: Register) -> Iterator[DefinedTag]:
    """Every tag that the register defines, once each."""
    for what, section in _sections(register):
        for tag, part in section.items():
            yield DefinedTag(tag, what, part)
    for tag, measurement in register.measurements.items():
        if tag not in register.instruments:
            yield DefinedTag(tag, "transmitter", measurement)
    for tag, solenoid in register.solenoids.items():
        yield DefinedTag(tag, "trip solenoid", solenoid)


def what_is(register: Register, tag: str) -> str:
    """What the register defines under a tag; empty where nothing."""
    for what, section in _sections(register):
        if tag in section:
            return what
    if tag in register.measurements:
        return "transmitter"
    return "trip solenoid" if tag in register.solenoids else ""


def references(plant: Plant, rule_ids: Collection[str]) -> Iterator[Reference]:
    """Every place where the register names a tag, a unit or a rule."""
    register = plant.register
    commanded = Names(
        "a loop, a function or a final element",
        {*register.loops, *register.functions, *register.final_elements},
    )
    measured = Names("a transmitter, an instrument or a loop", {*register.measurements, *register.loops})
    units = Names("a unit under `units`", register.units)
    for loop in register.loops.values():
        yield from _of_loop(loop, plant, commanded, measured)
    for function in register.functions.values():
        yield from _of_function(function, plant, commanded, measured)
    yield from _of_interlocks(register, measured)
    for _, section in _sections(register):
        for tag, part in section.items():
            unit = known(part.unit)
            if unit is not None and register.units:  # without any, the schema has asked for them
                yield Reference(tag, "the unit", unit, units, part.origin, ("unit",), False)
    for number, text in register.texts.items():
        yield Reference(number, "the unit of the texts", number, units, text.origin, (), True)
    yield from _of_deviations(register, rule_ids)


def _of_loop(loop: Loop, plant: Plant, commanded: Names, measured: Names) -> Iterator[Reference]:
    controller = known(loop.controller)
    output = known(controller.output) if controller else None
    to = known(output.to) if output else None
    if output is not None and to is not None:
        where = "the destination of the output"
        yield Reference(loop.tag, where, to, commanded, output.origin, ("to",), False)
    loops = Names("a loop", plant.register.loops)
    for alarm in loop.alarms.values():
        for tag in alarm.warns_of:
            where = f"what the {alarm.kind.replace('_', '-')} alarm warns of"
            yield Reference(loop.tag, where, tag, loops, alarm.origin, ("warns_of", tag), True)
    for disturbance in loop.disturbances.values():
        for tag in disturbance.moves:
            where = f"what the disturbance `{disturbance.name}` moves"
            yield Reference(loop.tag, where, tag, measured, disturbance.origin, ("moves", tag), True)
    process = known(loop.process)
    if process is not None and process.branches and loop.tag in plant.controlled:
        routes = plant.controlled[loop.tag].routes
        moved = Names(f"a final element that {loop.tag} moves", {route.end.tag for route in routes})
        for tag in process.branches:
            steps = ("branches", tag)
            yield Reference(loop.tag, "a branch of the process", tag, moved, process.origin, steps, True)


def _of_function(function: Function, plant: Plant, commanded: Names, measured: Names) -> Iterator[Reference]:
    tag, origin = function.tag, function.origin
    to = known(function.to)
    if to is not None:
        yield Reference(tag, "the destination", to, commanded, origin, ("to",), False)
    for element in function.outputs:
        yield Reference(tag, "an output", element, commanded, origin, ("outputs", element), True)
    for index, entry in enumerate(function.inputs):
        yield Reference(tag, "an input", entry, measured, origin, ("inputs", index), False)
    entering = Names(
        f"an input of {tag} or a loop whose output goes to it",
        {*function.inputs, *plant.commanders.get(tag, ())},
    )
    for entry in function.weights:
        yield Reference(tag, "a weight", entry, entering, origin, ("weights", entry), True)


def _of_interlocks(register: Register, measured: Names) -> Iterator[Reference]:
    acted_on = Names("a final element or a loop", {*register.final_elements, *register.loops})
    for tag, interlock in register.interlocks.items():
        for entry in interlock.initiators:
            yield Reference(tag, "an initiator", entry, measured, interlock.origin, ("initiators", entry), True)
        for entry in interlock.actions:
            yield Reference(tag, "an action", entry, acted_on, interlock.origin, ("actions", entry), True)


def _of_deviations(register: Register, rule_ids: Collection[str]) -> Iterator[Reference]:
    rules = Names("a rule (`loopdoc rules` lists them)", rule_ids)
    tags = (tag for _, section in _sections(register) for tag in section)
    files = (file.name for file in register.files)
    anything = Names("a tag of the register", {*tags, *register.measurements, *register.units, *SECTIONS, *files})
    for deviation in register.deviations:
        at, rule = known(deviation.at), known(deviation.rule)
        if at is not None and at not in anything.tags:
            at = at.partition("/")[0]  # it goes on to a place below the tag
        whose = at or "deviations"
        if rule is not None:
            where = "the rule of a deviation"
            yield Reference(whose, where, rule, rules, deviation.origin, ("rule",), False)
        if at is not None:
            yield Reference(whose, "the tag of a deviation", at, anything, deviation.origin, ("at",), False)
