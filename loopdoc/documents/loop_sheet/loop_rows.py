"""Rows of a drawn loop: which there are, what stands in words beside them, and how high each one is.

From top to bottom: the primary, the functions between, the loop itself, the functions on its output, the
secondary or the final elements.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace

from loopdoc.documents.drawing import BLOCK, BUBBLE, DIAMOND, LEADING, text_width, wrapped
from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.loop_sheet.wiring_columns import stops_of, wiring_extent
from loopdoc.documents.values import DASH
from loopdoc.documents.wording import NO_BREAK
from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import FinalElement, Function, Hold, Interlock, InterlockAction, Loop, Measurement, known
from loopdoc.register.quantity import Range

NOTE_WIDTH = 86.0
"""Of the words beside an instrument of the field [pt]."""
BLOCK_WIDTH = 80.0
"""Of the words left of a function [pt]."""
TAPPED_WIDTH = 64.0
"""Of the words beside the interlock that a measurement initiates [pt]."""
FORCED_WIDTH = 76.0
"""Of the words beside the interlocks that act on the controller [pt]."""
INPUT_DISTANCE = 46.0
"""Between two inputs of a function [pt]."""
BESIDE_DISTANCE = 38.0
"""Between two commanders beside a function [pt]."""
MOST_BESIDE = 3
"""Commanders drawn beside a function; more are counted."""

_TOP = 18.0
_CLEAR = 13.0
"""Least height left between two rows for the words on the link, or for the link to change its column [pt]."""
_APART = 5.0
_CHANNEL_ABOVE, _CHANNEL_BELOW = 10.0, 15.0
"""What a channel needs with the words above and below its signal [pt]."""
_FIELD_BELOW = 31.0
"""What the pipe or vessel below a transmitter needs [pt]."""
_INPUT_DEPTH = 34.0
"""The same with the most words that stand beside an input of a function [pt]."""

WORDS_ABOVE = 10.0
"""From a signal line to the words above it, clear of a channel and a diamond [pt]."""
FORCED_BELOW = 10.0
"""From a controller's measurement to what is told of the interlocks that act on it [pt]."""

_NUMBER_AND_UNIT = re.compile(r"(?<=[0-9]) (?=[A-Za-z°%])")
_SIGNAL_ENDS = {"4-20 mA": ("4", "20", "mA"), "0-20 mA": ("0", "20", "mA"), "1-5 V": ("1", "5", "V")}


# ---------------------------------------------------------------- parts


@dataclass(frozen=True, slots=True)
class Primary:
    """The loop that commands the drawn one, directly or through functions."""

    loop: Loop


@dataclass(frozen=True, slots=True)
class Others:
    """Further loops that command the drawn one with nothing to choose between them."""

    tags: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Block:
    """A function on the way."""

    function: Function
    beside: tuple[str, ...]
    """Tags of its other commanders."""


@dataclass(frozen=True, slots=True)
class Own:
    """The loop of the drawing."""

    loop: Loop


@dataclass(frozen=True, slots=True)
class Secondary:
    """The loop that it commands, with the final element that this one moves."""

    loop: Loop
    element: FinalElement | None
    onward: str
    """What the secondary commands where that is no final element."""


@dataclass(frozen=True, slots=True)
class Element:
    """A final element of the loop."""

    element: FinalElement
    branch: Range | None
    """Of a split range: the controller's output over which it opens."""


@dataclass(frozen=True, slots=True)
class Elsewhere:
    """An output that leads to what the register does not define, or does not say."""

    to: str


Part = Primary | Others | Block | Own | Secondary | Element | Elsewhere


@dataclass(frozen=True, slots=True)
class Row:
    """One row of a drawing."""

    part: Part
    above: float
    """Height that it needs above its signal line in the control system and at the operator's station [pt]."""
    below: float
    """Height that it needs below, there [pt]."""
    field: tuple[float, float] | None = None
    """The same above and below in the field and at the boxes; None where it has nothing there [pt]."""
    label: str = ""
    """Words on the link from the row above."""
    y: float = 0.0
    """Of its signal line, from the top of the drawing [pt]."""


def rows_of(plant: Plant, loop: Loop, language: Language) -> tuple[Row, ...]:
    """The rows of a loop's drawing, placed below each other."""
    upward = _upward(plant, loop, language)
    own = _own_row(plant, loop, language, upward[0].label if upward else "")
    # Upward, the label met last belongs to the link below the row: hand each one down.
    labels = [row.label for row in upward[1:]] + [""] if upward else []
    above = [replace(row, label=label) for row, label in zip(upward, labels, strict=True)]
    placed: list[Row] = []
    field_end = _TOP - _APART
    for row in (*reversed(above), own, *_downward(plant, loop, language)):
        y = _TOP + row.above
        if placed:
            last = placed[-1]
            turns = isinstance(last.part, Block) != isinstance(row.part, Block)
            y = last.y + last.below + row.above + (_CLEAR if row.label or turns else _APART)
        if row.field:
            y = max(y, field_end + _APART + row.field[0])
            field_end = y + row.field[1]
        placed.append(replace(row, y=y))
    return tuple(placed)


def height_of(rows: tuple[Row, ...]) -> float:
    """Height of a drawing with these rows [pt]."""
    return max(row.y + max(row.below, row.field[1] if row.field else 0.0) for row in rows) + 4


def _upward(plant: Plant, loop: Loop, language: Language) -> list[Row]:
    """Rows above the loop, the nearest first; the label of each is that of the link below it."""
    register = plant.register
    rows: list[Row] = []
    target, seen = loop.tag, {loop.tag}
    while True:
        commanders = [tag for tag in plant.commanders.get(target, ()) if tag not in seen]
        main = next((tag for tag in commanders if tag in register.loops), commanders[0] if commanders else None)
        beside = tuple(tag for tag in commanders if tag != main)
        if rows and isinstance(last := rows[-1].part, Block):
            rows[-1] = _block_row(plant, last.function, beside, rows[-1].label, language)
        elif beside:
            rows.append(Row(Others(beside), 9, 9))
        if main is None:
            return rows
        seen.add(main)
        if main in register.loops:
            primary = register.loops[main]
            rows.append(Row(Primary(primary), BUBBLE + 2, BUBBLE + 2, label=demand_words(primary, language)))
            return rows
        rows.append(_block_row(plant, register.functions[main], (), language.label("setpoint"), language))
        target = main


def _own_row(plant: Plant, loop: Loop, language: Language, label: str) -> Row:
    high = sum(kind in loop.alarms for kind in ("high", "high_high"))
    low = sum(kind in loop.alarms for kind in ("low", "low_low", "deviation"))
    measurement = known(loop.measurement)
    tapped = 30.0 if measurement and initiated_lines(plant, loop) else 0.0
    wires = wiring_extent(stops_of(measurement.wiring, language)) if measurement else (0.0, 0.0)
    forced = len(controller_forcing_lines(plant, loop, language))
    above = max(BUBBLE + 2, 8 + high * LEADING, tapped)
    below = max(BUBBLE + 3, 12 + low * LEADING)
    if forced:
        below = max(below, FORCED_BELOW + max(2 * DIAMOND, forced * LEADING) + 3)
    field = (max(BUBBLE + 2, wires[0]), max(measurement_depth(measurement, language), wires[1]))
    return Row(Own(loop), above, below, field if measurement else None, label)


def _downward(plant: Plant, loop: Loop, language: Language) -> Iterator[Row]:
    """Rows below the loop."""
    register = plant.register
    controller = known(loop.controller)
    if controller is None:
        return
    output = known(controller.output)
    to = output.to if output else controller.output
    label, source, seen = demand_words(loop, language), loop.tag, {loop.tag}
    while isinstance(to, str) and to in register.functions and to not in seen:
        seen.add(to)
        function = register.functions[to]
        beside = tuple(tag for tag in plant.commanders.get(to, ()) if tag != source)
        yield _block_row(plant, function, beside, label, language)
        for end, branch in function.outputs.items():
            if end in register.final_elements:
                yield _element_row(plant, Element(register.final_elements[end], branch), language)
            else:
                yield Row(Elsewhere(end), 8, 12)
        if function.outputs:
            return
        label, source, to = language.label("setpoint"), to, function.to
    if isinstance(to, str) and to in register.final_elements:
        yield _element_row(plant, Element(register.final_elements[to], None), language)
    elif isinstance(to, str) and to in register.loops and to not in seen:
        yield _secondary_row(plant, register.loops[to], label, language)
    else:
        yield Row(Elsewhere(language.shown(to)), 8, 12)


def _block_row(plant: Plant, function: Function, beside: tuple[str, ...], label: str, language: Language) -> Row:
    drawn = min(len(beside), MOST_BESIDE)
    side = BUBBLE + 2 + (drawn - 1) * BESIDE_DISTANCE / 2 if drawn else 0.0
    words = LEADING * len(block_words(function, BLOCK_WIDTH, language))
    if not function.inputs:
        extent = max(BLOCK + 2, side, words / 2 + 2)
        return Row(Block(function, beside), extent, extent, label=label)
    entering = [measurement_of(plant, tag) for tag in function.inputs]
    wires = [wiring_extent(stops_of(found.wiring, language)) if found else (0.0, 0.0) for found in entering]
    last = input_offsets(plant, function, language)[-1]
    below = max(BLOCK + 2, side, last + _CHANNEL_BELOW)
    field = (max(BUBBLE + 2, wires[0][0]), last + max(_input_depth(entering[-1], language), wires[-1][1]))
    return Row(Block(function, beside), max(side, words + WORDS_ABOVE), below, field, label)


def input_offsets(plant: Plant, function: Function, language: Language) -> tuple[float, ...]:
    """How far below the line of a function each of its inputs runs [pt]."""
    offsets: list[float] = []
    last: Measurement | None = None
    for tag in function.inputs:
        found = measurement_of(plant, tag)
        wires = wiring_extent(stops_of(found.wiring, language)) if found else (0.0, 0.0)
        below = wiring_extent(stops_of(last.wiring, language))[1] if last else 0.0
        needed = max(_input_depth(last, language), below) + max(BUBBLE + 2, wires[0])
        offsets.append(offsets[-1] + max(INPUT_DISTANCE, needed) if offsets else 0.0)
        last = found
    return tuple(offsets)


def _input_depth(measurement: Measurement | None, language: Language) -> float:
    return max(_INPUT_DEPTH, measurement_depth(measurement, language) + 2)


def measurement_of(plant: Plant, tag: str) -> Measurement | None:
    """The measurement that a function names by its transmitter or its loop."""
    loop = plant.register.loops.get(tag)
    return plant.register.measurements.get(tag) or (known(loop.measurement) if loop else None)


def _element_row(plant: Plant, part: Element, language: Language) -> Row:
    return Row(
        part,
        *_element_in_the_system(plant, part.element, language),
        _element_in_the_field(plant, part.element, language),
    )


def _element_in_the_field(plant: Plant, element: FinalElement, language: Language) -> tuple[float, float]:
    """Height above and below the signal of a final element in the field and at the boxes [pt]."""
    words = 5 + LEADING * len(element_words(element, language))
    wires = wiring_extent(stops_of(element.wiring, language))
    above, solenoid = forcing_height(plant, element, language), known(element.trip_solenoid)
    if solenoid:
        wires_of_it = wiring_extent(stops_of(solenoid.wiring, language))
        above = solenoid_rise(element, language) + max(12.0, wires_of_it[0])
    return max(12.0, above, wires[0]), max(28.0, words, wires[1])


def _element_in_the_system(plant: Plant, element: FinalElement, language: Language) -> tuple[float, float]:
    """The same in the control system [pt]."""
    if not known(element.trip_solenoid):
        return _CHANNEL_ABOVE, _CHANNEL_BELOW
    forced = WORDS_ABOVE + LEADING * len(element_forcing_lines(plant, element, language))
    return solenoid_rise(element, language) + forced, _CHANNEL_BELOW


def solenoid_rise(element: FinalElement, language: Language) -> float:
    """How far the line of a trip solenoid runs above that of its final element [pt]."""
    solenoid = known(element.trip_solenoid)
    below = wiring_extent(stops_of(solenoid.wiring, language))[1] if solenoid else 0.0
    return max(29.0, below + wiring_extent(stops_of(element.wiring, language))[0] + 1)


def _secondary_row(plant: Plant, loop: Loop, label: str, language: Language) -> Row:
    controller = known(loop.controller)
    output = known(controller.output) if controller else None
    to = known(output.to) if output else None
    element = plant.register.final_elements.get(to) if to else None
    above, below = _element_in_the_system(plant, element, language) if element else (0.0, 0.0)
    field = _element_in_the_field(plant, element, language) if element else None
    part = Secondary(loop, element, "" if element else to or "")
    return Row(part, max(BUBBLE + 2, above), max(BUBBLE + 3, below), field, label)


# ---------------------------------------------------------------- words


def transmitter_of(loop: Loop) -> str:
    """Tag of a loop's transmitter; empty where the register does not give it."""
    measurement = known(loop.measurement)
    return (known(measurement.transmitter) if measurement else None) or ""


def demand_words(loop: Loop, language: Language) -> str:
    """What 0 and 100 % of a controller's output ask for."""
    controller = known(loop.controller)
    output = known(controller.output) if controller else None
    return language.percent_is(language.shown(output.span)) if output and output.span is not None else ""


def block_words(function: Function, width: float, language: Language) -> tuple[str, ...]:
    """Tag, kind, settings and service of a function."""
    words = [function.tag, kind_words(function, language)]
    if function.span is not None:
        # The span of a ratio is a plain number, which the register reads as a fraction.
        span = language.shown(function.span).removesuffix("\u00a0fraction")
        normal = language.normally(language.shown(function.normal)) if function.normal is not None else ""
        words.append(f"{span}, {normal}" if normal else span)
    if isinstance(function.service, str):
        words.extend(wrapped(function.service, width, 4))
    return tuple(words)


def kind_words(function: Function, language: Language) -> str:
    """What a function computes."""
    kind = function.kind
    return language.term("function", kind) if isinstance(kind, str) else language.shown(kind)


def measurement_words(measurement: Measurement, language: Language) -> tuple[str, ...]:
    """Range, element and supply of a measurement, as they stand beside its transmitter."""
    element = measurement.element or measurement.sensor
    told = wrapped(language.shown(element), NOTE_WIDTH, 3) if element is not None else ()
    measured = () if measurement.range is None else (language.shown(measurement.range),)
    return (*measured, *told, *supply_words(measurement.supply, language))


def supply_words(supply: str | Hold | None, language: Language) -> tuple[str, ...]:
    """The energy source of a device."""
    if supply is None:
        return ()
    told = _NUMBER_AND_UNIT.sub(NO_BREAK, language.supplied_by(language.shown(supply)))
    return wrapped(told, NOTE_WIDTH, 2)


def measurement_depth(measurement: Measurement | None, language: Language) -> float:
    """Height that a transmitter needs below its signal, with its words and what it is connected to [pt]."""
    return max(_FIELD_BELOW, 5 + LEADING * len(measurement_words(measurement, language))) if measurement else 0.0


def element_words(element: FinalElement, language: Language) -> tuple[str, ...]:
    """Tag, service and signal of a final element."""
    ends = _signal_ends(element, language)
    service = wrapped(language.shown(element.service), NOTE_WIDTH, 2)
    return (element.tag, *service, *((ends,) if ends else ()), *supply_words(element.supply, language))


def _signal_ends(element: FinalElement, language: Language) -> str:
    """At which ends of the signal a final element is shut and open."""
    ends = _SIGNAL_ENDS.get(known(element.signal) or "")
    opens_on = known(element.opens_on)
    if ends is None or opens_on is None:
        return ""
    low, high, unit = ends
    first, last = (low, high) if opens_on == "rising signal" else (high, low)
    return language.signal_ends(f"{first}\u00a0{unit}", f"{last}\u00a0{unit}", known(element.kind) or "")


def initiated_lines(plant: Plant, loop: Loop) -> tuple[str, ...]:
    """Interlocks that a loop's measurement initiates, in at most three lines."""
    tags = {loop.tag, transmitter_of(loop)}
    initiated = [interlock.tag for interlock in plant.register.interlocks.values() if tags & set(interlock.initiators)]
    return wrapped(", ".join(initiated), TAPPED_WIDTH, 3) if initiated else ()


def forcing_lines(plant: Plant, tag: str, width: float, most: int, language: Language) -> tuple[str, ...]:
    """Interlocks that act on a tag, each with what it does there; those beyond the most lines are counted."""
    entries = [
        f"{interlock.tag}: {action_words(interlock.actions[tag], language)}"
        for interlock in plant.register.interlocks.values()
        if tag in interlock.actions
    ]
    lines = [line for entry in entries for line in wrapped(entry, width, 2)]
    if len(lines) <= most:
        return tuple(lines)
    kept = [entry for entry in entries if text_width(entry) <= width][: most - 1]
    return (*kept, language.and_more(len(entries) - len(kept)))


def element_forcing_lines(plant: Plant, element: FinalElement, language: Language) -> tuple[str, ...]:
    """Interlocks that act on a final element, as they stand beside its diamond."""
    width = BLOCK_WIDTH if known(element.trip_solenoid) else NOTE_WIDTH
    return forcing_lines(plant, element.tag, width, 6, language)


def controller_forcing_lines(plant: Plant, loop: Loop, language: Language) -> tuple[str, ...]:
    """Interlocks that act on a controller, as they stand beside its diamond."""
    return forcing_lines(plant, loop.tag, FORCED_WIDTH, 4, language)


def forcing_height(plant: Plant, element: FinalElement, language: Language) -> float:
    """Height above a final element's signal for the interlocks that act on it [pt]."""
    lines = len(element_forcing_lines(plant, element, language))
    return 11.0 + max(2 * DIAMOND, lines * LEADING) if lines else 0.0


def action_words(action: InterlockAction, language: Language = ENGLISH) -> str:
    """What an interlock does to one final element or controller."""
    if action.position is not None:
        return _word("position", action.position, language)
    parts = [_word("mode", action.mode, language)] if action.mode is not None else []
    parts += [language.shown(action.output)] if action.output is not None else []
    return ", ".join(parts) or DASH


def _word(kind: str, written: str | Hold, language: Language) -> str:
    return language.term(kind, written) if isinstance(written, str) else language.shown(written)


def acts_on(interlock: Interlock, tags: Iterable[str]) -> tuple[InterlockAction, ...]:
    """The actions of an interlock on any of these tags."""
    wanted = set(tags)
    return tuple(action for tag, action in interlock.actions.items() if tag in wanted)
