"""The drawn loop: from the field through boxes and cabinets to the control system and the operator, row below row.

Each row has an instrument of the field at the left, then its wires, and what the control system does with it and the
operator sees of it at the right. Content of a loop diagram: ISA-5.4-1991, clause 5 (from memory).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise

from loopdoc.documents.drawing import BLOCK, BUBBLE, DIAMOND, LEADING, Sheet, tag_lines, text_width, wrapped
from loopdoc.documents.language import Language
from loopdoc.documents.loop_sheet.lanes import FIELD, FIELD_NOTE, WIDTH, lanes_of
from loopdoc.documents.loop_sheet.loop_rows import (
    BESIDE_DISTANCE,
    BLOCK_WIDTH,
    FORCED_BELOW,
    FORCED_WIDTH,
    MOST_BESIDE,
    NOTE_WIDTH,
    TAPPED_WIDTH,
    WORDS_ABOVE,
    Block,
    Element,
    Elsewhere,
    Others,
    Own,
    Part,
    Primary,
    Row,
    Secondary,
    block_words,
    controller_forcing_lines,
    element_forcing_lines,
    element_words,
    forcing_height,
    height_of,
    initiated_lines,
    input_offsets,
    kind_words,
    measurement_of,
    measurement_words,
    rows_of,
    solenoid_rise,
    supply_words,
    transmitter_of,
)
from loopdoc.documents.loop_sheet.wiring_columns import Stop, Wiring, columns_of, stops_of
from loopdoc.documents.values import DASH, HOLD
from loopdoc.documents.wiring_words import terminal_lines
from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import ALARM_ORDER, FinalElement, Function, Hold, Loop, Measurement, TripSolenoid, known
from loopdoc.register.quantity import Range

_SYMBOLS = {
    "ratio": "×",
    "high select": ">",
    "low select": "<",
    "sum": "Σ",
    "split range": "f(x)",
    "characteriser": "f(x)",
    "lead-lag": "f(t)",
}
_DRIVES = ("variable-speed drive", "motor")


@dataclass(frozen=True, slots=True)
class DrawnLoop:
    """A finished drawing and what stands on it."""

    svg: str
    height: float
    """[pt]."""
    functions: tuple[Function, ...]
    elements: tuple[FinalElement, ...]


def drawn_loop(plant: Plant, tag: str, language: Language) -> DrawnLoop:
    """Draw a loop.

    Raises
    ------
    KeyError
        The register has no such loop.
    """
    loop = plant.register.loops[tag]
    rows = rows_of(plant, loop, language)
    parts = [row.part for row in rows]
    height = height_of(rows)
    way = ", ".join(filter(None, (_told(part, language) for part in parts)))
    elements = (part.element for part in parts if isinstance(part, Element | Secondary))
    return DrawnLoop(
        svg=_Drawing(plant, loop, rows, language).sheet(height).svg(height, language.drawing_title(tag, way)),
        height=height,
        functions=tuple(part.function for part in parts if isinstance(part, Block)),
        elements=tuple(element for element in elements if element),
    )


def _tag_of(part: Part) -> str:
    match part:
        case Block():
            return part.function.tag
        case Element():
            return part.element.tag
        case Elsewhere():
            return part.to
        case Others():
            return ", ".join(part.tags)
        case _:
            return part.loop.tag


def _told(part: Part, language: Language) -> str:
    """What stands in a row, in words, with the terminals of the loop's own signals."""
    wired, wiring = "", None
    match part:
        case Own():
            measurement = known(part.loop.measurement)
            wired, wiring = f", {transmitter_of(part.loop)}", measurement.wiring if measurement else None
        case Element():
            wiring = part.element.wiring
    lines = terminal_lines(wiring, language.shown) if wiring else ()
    return _tag_of(part) + (f"{wired} ({'; '.join(lines)})" if lines else "")


def _half_height(part: Part) -> float:
    """From the signal line of a row to the lower edge of what stands in the main column."""
    return {Block: BLOCK, Others: 0.0}.get(type(part), BUBBLE)


class _Drawing:
    """Puts the rows of one loop on a sheet."""

    def __init__(self, plant: Plant, loop: Loop, rows: tuple[Row, ...], language: Language) -> None:
        self._plant = plant
        self._register = plant.register
        self._loop = loop
        self._rows = rows
        self._language = language
        self._sheet = Sheet(WIDTH)
        self._columns = columns_of([stops_of(wiring, language) for wiring in _wirings(plant, rows)])
        self._at = lanes_of(self._columns.count)

    def sheet(self, height: float) -> Sheet:
        for row in self._rows:
            self._draw(row)
        for above, below in pairwise(self._rows):
            self._link(above, below)
        self._sheet.frame(height, [(self._language.label(name), left, right) for name, left, right in self._at.heads])
        return self._sheet

    def _draw(self, row: Row) -> None:
        match row.part:
            case Primary():
                self._draw_primary(row.part.loop, row.y)
            case Others():
                self._draw_connector_from_right(row.part.tags, row.y, self._at.display)
            case Block():
                self._draw_block(row.part, row.y)
            case Own():
                self._draw_own(row.y)
            case Secondary():
                self._draw_secondary(row.part, row.y)
            case Element():
                self._draw_element(row.part.element, row.part.branch, row.y)
                drawn = {_tag_of(part.part) for part in self._rows}
                others = [tag for tag in self._plant.commanders.get(row.part.element.tag, ()) if tag not in drawn]
                if others:
                    self._draw_connector_from_right(tuple(others), row.y, self._way_out(row))
            case Elsewhere():
                self._sheet.connector(self._at.connector, row.y, row.part.to, to_the_left=True)

    def _shown(self, written: object) -> str:
        return self._language.shown(written)

    def _word(self, kind: str, written: str | Hold) -> str:
        return self._language.term(kind, written) if isinstance(written, str) else HOLD

    def _channel(self, channel: str | Hold | None, way: str) -> str:
        """What stands in the box of a channel: what it is at least where the register does not name it."""
        return self._language.label(way) if channel is None else self._shown(channel)

    def _lines(self, tag: str) -> tuple[str, str]:
        return tag_lines(tag, self._register.tag_pattern)

    def _note_beside(
        self,
        x: float,
        y: float,
        lines: tuple[str, ...],
        width: float,
        *,
        bold_first: bool = False,
        anchor: str = "start",
    ) -> None:
        """Lines with their middle at a height."""
        top = y - (len(lines) - 1) * LEADING / 2 + 2.2
        self._sheet.note(x, top, lines, width=width, bold_first=bold_first, anchor=anchor)

    # -- neighbours

    def _draw_primary(self, loop: Loop, y: float) -> None:
        at = self._at
        self._sheet.shared_display(at.display, y, self._lines(loop.tag))
        self._draw_words(loop, y)
        commanders = self._plant.commanders.get(loop.tag, ())
        if commanders:
            self._sheet.connector(at.connector, y, _first_of(commanders))
            self._sheet.software((at.connector + 25, y), (at.display - BUBBLE, y))

    def _draw_connector_from_right(self, tags: tuple[str, ...], y: float, to: float) -> None:
        """Whatever else commands the same: a fault of the register, shown as it is written."""
        self._sheet.connector(self._at.others, y, _first_of(tags), to_the_left=True)
        self._sheet.software((self._at.others - 25, y), (to, y), arrow=False)

    def _draw_words(self, loop: Loop, y: float) -> None:
        """Service and measurement of a neighbour, to the right of it."""
        width = self._at.right - self._at.words
        words = (*wrapped(self._shown(loop.service), width, 2), *wrapped(self._measured(loop), width, 2))
        self._note_beside(self._at.words, y, words, width)

    def _measured(self, loop: Loop) -> str:
        measurement = known(loop.measurement)
        measured = self._shown(measurement.range if measurement else loop.measurement)
        return f"{transmitter_of(loop)}, {measured}" if transmitter_of(loop) else measured

    def _draw_secondary(self, part: Secondary, y: float) -> None:
        sheet, at = self._sheet, self._at
        sheet.shared_display(at.display, y, self._lines(part.loop.tag))
        self._draw_words(part.loop, y)
        if part.element:
            self._draw_element(part.element, None, y)
            sheet.software((at.display - BUBBLE, y), (at.channel + 21, y))
        elif part.onward:
            sheet.connector(at.connector, y, part.onward, to_the_left=True)
            sheet.software((at.display - BUBBLE, y), (at.connector + 25, y), arrow=False)

    # -- functions

    def _draw_block(self, part: Block, y: float) -> None:
        function, x = part.function, self._at.block
        self._sheet.function_block(x, y, _symbol(function))
        words = block_words(function, BLOCK_WIDTH, self._language)
        edge = x - BLOCK - 3.5
        if function.inputs:
            top = y - WORDS_ABOVE - (len(words) - 1) * LEADING
            self._sheet.note(edge, top, words, width=BLOCK_WIDTH, bold_first=True, anchor="end")
        else:
            self._note_beside(edge, y, words, BLOCK_WIDTH, bold_first=True, anchor="end")
        offsets = input_offsets(self._plant, function, self._language)
        for index, (tag, offset) in enumerate(zip(function.inputs, offsets, strict=True)):
            self._draw_input(function, tag, y, y + offset, index)
        drawn = part.beside[:MOST_BESIDE]
        for index, tag in enumerate(drawn):
            offset = index - (len(drawn) - 1) / 2
            more = len(part.beside) - MOST_BESIDE + 1 if index == MOST_BESIDE - 1 else 1
            instead = self._language.more(more) if more > 1 else ""
            self._draw_beside(tag, y + BESIDE_DISTANCE * offset, y + 7 * offset, instead)

    def _draw_beside(self, tag: str, y: float, into: float, instead: str) -> None:
        """Another commander of a function, to the right of it; ``instead`` stands for several."""
        sheet, at = self._sheet, self._at
        left, width = at.display - BUBBLE, at.right - at.words
        if instead or tag in self._register.functions:
            middle = left + 25
            sheet.connector(middle, y, instead or tag, to_the_left=True)
            if not instead:
                kind = kind_words(self._register.functions[tag], self._language)
                sheet.note(middle - 25, y + 14, (kind,), width=at.right - middle + 25)
        else:
            sheet.shared_display(at.display, y, self._lines(tag))
            self._note_beside(at.words, y, wrapped(self._measured(self._register.loops[tag]), width, 2), width)
        end = (at.block + BLOCK, into)
        way = ((left, y), end) if y == into else ((left, y), (at.forced + 2, y), (at.forced + 2, into), end)
        sheet.software(*way)

    def _draw_input(self, function: Function, tag: str, y: float, at: float, index: int) -> None:
        """A measurement that enters a function from the left: the first straight, the others from below."""
        count = len(function.inputs)
        measurement = measurement_of(self._plant, tag)
        if measurement is None:
            self._sheet.connector(self._at.connector, at, tag)
            start = self._at.connector + 25
        else:
            start = self._draw_measurement(known(measurement.transmitter) or tag, measurement, at)
        edge = self._at.block - BLOCK
        apart = min(5.0, 16.0 / max(1, count - 1))
        if index == 0:
            self._sheet.software((start, at), (edge, at))
        else:
            # The lower an input, the further right it rises and the lower it enters: no two of them cross.
            x, into = edge - 4 - apart * (count - index), y + 10 * index / (count - 1)
            self._sheet.software((start, at), (x, at), (x, into), (edge, into))
        weight = function.weights.get(tag, 1.0)
        if weight != 1.0:
            words = f"× {self._shown(weight)}"
            self._sheet.note(edge - 5 - apart * count, at + 12, (words,), width=26, anchor="end")

    # -- field and wiring

    def _draw_measurement(self, tag: str, measurement: Measurement, y: float, *, strong: bool = False) -> float:
        """Transmitter, wires and input of a measurement; the x at which its signal leaves to the right."""
        sheet, at = self._sheet, self._at
        sheet.measuring_point(FIELD, y, known(measurement.variable) or "", known(measurement.element) or "")
        sheet.field_instrument(FIELD, y, self._lines(tag), strong=strong)
        self._wire(FIELD + BUBBLE, y, measurement.wiring, measurement.signal, to_the_field=False)
        self._above_wire(y, measurement.signal, measurement.wiring)
        sheet.channel(at.channel, y, self._channel(measurement.channel, "Input"))
        sheet.note(FIELD_NOTE, y + 8.5, measurement_words(measurement, self._language), width=NOTE_WIDTH)
        if known(measurement.characteristic) != "square root":
            return at.channel + 21
        sheet.software((at.channel + 21, y), (at.root - 5.5, y), arrow=False)
        sheet.square_root(at.root, y)
        return at.root + 5.5

    def _wire(self, start: float, y: float, wiring: Wiring, signal: str | Hold | None, *, to_the_field: bool) -> None:
        """The wires of a signal from a device to its channel, over the boxes on the way."""
        sheet, at = self._sheet, self._at
        # A bus is a data link; every other signal is an electric one.
        piece = sheet.software if signal == "digital" else sheet.electric
        stops = stops_of(wiring, self._language)
        half, left = at.box_width / 2, start
        for number, (stop, column) in enumerate(zip(stops, self._columns.placed(stops), strict=True)):
            x = at.box(column)
            piece((x - half, y), (left, y), arrow=to_the_field and number == 0)
            sheet.terminals(x, y, stop.terminals, width=at.box_width)
            sheet.centred(x, y - stop.height / 2 - 4.6, stop.name, width=at.box_width + 8, size=6.4, bold=True)
            if number:
                self._label_cable(left, x - half, y, stop)
            left = x + half
        piece((at.channel - 21, y), (left, y), arrow=to_the_field and not stops)

    def _label_cable(self, left: float, right: float, y: float, stop: Stop) -> None:
        """The cable above a piece of wire and its pair below."""
        middle, width = (left + right) / 2, right - left - 3
        if stop.cable:
            self._sheet.centred(middle, y - 5.2, stop.cable, width=width, size=6.4)
        if stop.pair:
            self._sheet.centred(middle, y + 6.2, stop.pair, width=width, size=6.4)

    def _above_wire(self, y: float, signal: str | Hold | None, wiring: Wiring) -> None:
        """The signal above the wires in the field, and the cable that leaves the device."""
        said = self._word("signal", signal) if signal is not None else ""
        if said:
            self._sheet.note(FIELD_NOTE, y - 3.4, (said,), width=NOTE_WIDTH)
        stops = stops_of(wiring, self._language)
        if stops:
            cable = ", ".join(filter(None, (stops[0].cable, stops[0].pair)))
            taken = text_width(said) + 6 if said else 0.0
            right = self._at.field_right - 4
            self._sheet.note(right, y - 3.4, (cable,), width=right - FIELD_NOTE - taken, anchor="end")

    def _draw_element(self, element: FinalElement, branch: Range | None, y: float) -> None:
        sheet, at = self._sheet, self._at
        kind, fails = known(element.kind) or "", element.fails
        sheet.final_element(FIELD, y, kind, known(fails) or "")
        if fails is not None:
            letters = HOLD if isinstance(fails, Hold) else self._language.fail_letters(fails)
            x, baseline = (FIELD - 11, y + 21.2) if kind in _DRIVES else (FIELD - 4, y + 11.4)
            sheet.note(x, baseline, (letters,), width=24, anchor="end")
        self._wire(FIELD + 9.5, y, element.wiring, element.signal, to_the_field=True)
        self._above_wire(y, element.signal, element.wiring)
        sheet.channel(at.channel, y, self._channel(element.channel, "Output"))
        sheet.note(FIELD_NOTE, y + 9, element_words(element, self._language), width=NOTE_WIDTH, bold_first=True)
        beside, width = at.channel + 24.5, at.block - BLOCK - at.channel - 27
        if branch is not None:
            sheet.note(beside, y - 3.5, (self._shown(branch),), width=width)
        if known(element.output_block) == "reversed":
            sheet.note(beside, y + 8.5, (self._language.term("output block", "reversed"),), width=width)
        lines = element_forcing_lines(self._plant, element, self._language)
        solenoid = known(element.trip_solenoid)
        if solenoid:
            self._draw_solenoid(solenoid, y - solenoid_rise(element, self._language), y - 4, lines)
        elif lines:
            middle = y - (forcing_height(self._plant, element, self._language) + 10) / 2
            sheet.electric((FIELD, middle + DIAMOND), (FIELD, y - 5.5), arrow=True)
            sheet.interlock(FIELD, middle)
            self._note_beside(FIELD + DIAMOND + 4, middle, lines, NOTE_WIDTH + 10)

    def _draw_solenoid(self, solenoid: TripSolenoid, y: float, below: float, lines: tuple[str, ...]) -> None:
        """A trip solenoid over its actuator, with its wires and the interlocks that act by it."""
        sheet, at = self._sheet, self._at
        sheet.solenoid(FIELD, y, below)
        self._wire(FIELD + 6.5, y, solenoid.wiring, None, to_the_field=True)
        self._above_wire(y, None, solenoid.wiring)
        sheet.channel(at.channel, y, self._channel(solenoid.channel, "Output"))
        sheet.note(FIELD_NOTE, y - 3.4, (self._shown(solenoid.tag),), width=NOTE_WIDTH / 2, bold_first=True)
        sheet.note(FIELD_NOTE, y + 8.5, supply_words(solenoid.supply, self._language)[:1], width=NOTE_WIDTH)
        if lines:
            x = at.channel + 46
            sheet.interlock(x, y)
            sheet.software((x - DIAMOND, y), (at.channel + 21, y))
            top = y - WORDS_ABOVE - (len(lines) - 1) * LEADING
            sheet.note(at.control + 5, top, lines, width=BLOCK_WIDTH)

    # -- the loop itself

    def _draw_own(self, y: float) -> None:
        sheet, loop, at = self._sheet, self._loop, self._at
        measurement = known(loop.measurement)
        if measurement:
            start = self._draw_measurement(transmitter_of(loop) or DASH, measurement, y, strong=True)
            tapped = initiated_lines(self._plant, loop)
            if tapped:
                sheet.software((start, y), (at.tap, y), arrow=False)
                sheet.junction(at.tap, y)
                sheet.software((at.tap, y), (at.tap, y - 13))
                sheet.interlock(at.tap, y - 21)
                self._note_beside(at.tap - 12, y - 21, tapped, TAPPED_WIDTH, anchor="end")
                start = at.tap
            sheet.software((start, y), (at.display - BUBBLE, y))
        sheet.shared_display(at.display, y, self._lines(loop.tag), strong=True)
        controller = known(loop.controller)
        if controller and controller.action is not None:
            sheet.note(at.words, y + 2.2, (self._word("action", controller.action),), width=at.right - at.words)
        self._draw_alarms(y)
        forced = controller_forcing_lines(self._plant, loop, self._language)
        if forced:
            middle = y + FORCED_BELOW + max(2 * DIAMOND, len(forced) * LEADING) / 2
            sheet.interlock(at.block, middle)
            self._note_beside(at.block - DIAMOND - 4, middle, forced, FORCED_WIDTH, anchor="end")
            into = y + 9
            sheet.software(
                (at.block + DIAMOND, middle), (at.forced, middle), (at.forced, into), (at.display - BUBBLE, into)
            )

    def _draw_alarms(self, y: float) -> None:
        """High alarms above the middle of the bubble, low ones below, the outermost furthest from it."""
        alarms = self._loop.alarms
        highs = [kind for kind in reversed(ALARM_ORDER) if kind in alarms and kind.startswith("high")]
        lows = [kind for kind in ("low", "low_low", "deviation") if kind in alarms]
        places = [(kind, y - 7 - LEADING * (len(highs) - 1 - index)) for index, kind in enumerate(highs)]
        places += [(kind, y + 11.5 + LEADING * index) for index, kind in enumerate(lows)]
        for kind, baseline in places:
            words = f"{self._language.alarm_letters(kind)} {self._shown(alarms[kind].limit)}"
            self._sheet.note(self._at.words, baseline, (words,), width=self._at.right - self._at.words)

    # -- links between rows

    def _axis(self, part: Part) -> float:
        """Where what stands in the main column of a row stands: functions in the control system."""
        return self._at.block if isinstance(part, Block) else self._at.display

    def _link(self, above: Row, below: Row) -> None:
        """The link from one row to the next; final elements are reached from the side."""
        if isinstance(below.part, Element | Elsewhere):
            self._link_out(below)
            return
        # In the middle of what both rows leave free.
        middle = (above.y + above.below + below.y - below.above) / 2
        start = (self._axis(above.part), above.y + _half_height(above.part))
        end = (self._axis(below.part), below.y - _half_height(below.part))
        turn = () if start[0] == end[0] else ((start[0], middle), (end[0], middle))
        self._sheet.software(start, *turn, end, arrow=not isinstance(below.part, Others))
        if below.label:
            x = self._at.display + 5
            self._sheet.note(x, middle + 2.2, (below.label,), width=self._at.right - x)

    def _way_out(self, below: Row) -> float:
        """Where the link to a final element runs down: several leave side by side, the furthest at the right."""
        source = self._source_of(below)
        ends = [row for row in self._rows if row.y > source.y]
        apart = min(7.0, 21.0 / max(1, len(ends) - 1))
        return self._axis(source.part) + (ends.index(below) - (len(ends) - 1) / 2) * apart

    def _source_of(self, below: Row) -> Row:
        """The controller, or the function on its output, that a final element or a connector follows."""
        return next(row for row in reversed(self._rows) if row.y < below.y and isinstance(row.part, Block | Own))

    def _link_out(self, below: Row) -> None:
        source, x, at = self._source_of(below), self._way_out(below), self._at
        start = source.y + _half_height(source.part)
        edge = at.connector + 25 if isinstance(below.part, Elsewhere) else at.channel + 21
        self._sheet.software((x, start), (x, below.y), (edge, below.y), arrow=isinstance(below.part, Element))


def _wirings(plant: Plant, rows: tuple[Row, ...]) -> Iterator[Wiring]:
    """The wirings on a drawing."""
    for row in rows:
        match row.part:
            case Own():
                measurement = known(row.part.loop.measurement)
                if measurement:
                    yield measurement.wiring
            case Block():
                entering = (measurement_of(plant, tag) for tag in row.part.function.inputs)
                yield from (found.wiring for found in entering if found)
            case Element() | Secondary():
                element = row.part.element
                if element:
                    yield element.wiring
                    solenoid = known(element.trip_solenoid)
                    if solenoid:
                        yield solenoid.wiring


def _symbol(function: Function) -> str:
    return HOLD if isinstance(function.kind, Hold) else _SYMBOLS.get(function.kind or "", DASH)


def _first_of(tags: tuple[str, ...]) -> str:
    return tags[0] if len(tags) == 1 else f"{tags[0]} + {len(tags) - 1}"
