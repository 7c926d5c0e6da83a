"""The drawn loop: from the field through the marshalling to the control system, one row below the other.

Each row has an instrument of the field at the left and what the control system does with it at the right.
Minimum content of a loop diagram: ISA-5.4-1991, clause 5 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

from loopdoc.documents.drawing import BLOCK, BUBBLE, DIAMOND, LEADING, Sheet, tag_lines, wrapped
from loopdoc.documents.language import Language
from loopdoc.documents.loop_sheet.loop_rows import (
    BESIDE_DISTANCE,
    INPUT_DISTANCE,
    MOST_BESIDE,
    NOTE_WIDTH,
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
    element_forcing_lines,
    element_words,
    forcing_height,
    forcing_lines,
    initiated_lines,
    kind_words,
    measurement_words,
    rows_of,
    transmitter_of,
)
from loopdoc.documents.values import DASH, HOLD
from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import ALARM_ORDER, FinalElement, Function, Hold, Loop, Measurement, known
from loopdoc.register.quantity import Range

WIDTH = 510.0
"""Of the drawing [pt]: the width between the margins of the page."""
LANES = (("Field", 0.5, 160.0), ("Marshalling", 160.0, 208.0), ("Control system and display", 208.0, WIDTH - 0.5))

# Columns [pt].
_FIELD, _FIELD_NOTE = 38.0, 67.0
_TERMINALS = 184.0
_CHANNEL, _CONNECTOR = 238.0, 246.0
_ROOT, _TAP = 276.0, 300.0
_MAIN, _MAIN_NOTE = 338.0, 356.5
_GATE = 412.0
_FORCE = 422.0
_SIDE, _SIDE_NOTE = 436.0, 454.5
_RIGHT = WIDTH - 4

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
    height = rows[-1].y + rows[-1].below + 4
    way = ", ".join(filter(None, (_tag_of(part) for part in parts)))
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

    def sheet(self, height: float) -> Sheet:
        for row in self._rows:
            self._draw(row)
        for above, below in pairwise(self._rows):
            self._link(above, below)
        self._sheet.frame(height, [(self._language.label(name), left, right) for name, left, right in LANES])
        return self._sheet

    def _draw(self, row: Row) -> None:
        match row.part:
            case Primary():
                self._draw_primary(row.part.loop, row.y)
            case Others():
                self._draw_connector_from_right(row.part.tags, row.y)
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
                    self._draw_connector_from_right(tuple(others), row.y)
            case Elsewhere():
                self._sheet.connector(_CONNECTOR, row.y, row.part.to, to_the_left=True)

    def _shown(self, written: object) -> str:
        return self._language.shown(written)

    def _word(self, kind: str, written: str | Hold) -> str:
        return self._language.term(kind, written) if isinstance(written, str) else HOLD

    def _lines(self, tag: str) -> tuple[str, str]:
        return tag_lines(tag, self._register.tag_pattern)

    # -- neighbours

    def _draw_primary(self, loop: Loop, y: float) -> None:
        self._sheet.shared_display(_MAIN, y, self._lines(loop.tag))
        self._draw_words(loop, y)
        commanders = self._plant.commanders.get(loop.tag, ())
        if commanders:
            self._sheet.connector(_CONNECTOR, y, _first_of(commanders))
            self._sheet.software((_CONNECTOR + 25, y), (_MAIN - BUBBLE, y))

    def _draw_connector_from_right(self, tags: tuple[str, ...], y: float) -> None:
        """Whatever else commands the same: a fault of the register, shown as it is written."""
        self._sheet.connector(_FORCE, y, _first_of(tags), to_the_left=True)
        self._sheet.software((_FORCE - 25, y), (_MAIN, y), arrow=False)

    def _draw_words(self, loop: Loop, y: float) -> None:
        """Service and measurement of a neighbour, to the right of it."""
        width = _RIGHT - _MAIN_NOTE
        self._note_beside(_MAIN_NOTE, y, (*wrapped(self._shown(loop.service), width, 2), self._measured(loop)), width)

    def _note_beside(
        self, x: float, y: float, lines: tuple[str, ...], width: float, *, bold_first: bool = False
    ) -> None:
        """Lines with their middle at a height."""
        top = y - (len(lines) - 1) * LEADING / 2 + 2.2
        self._sheet.note(x, top, lines, width=width, bold_first=bold_first)

    def _measured(self, loop: Loop) -> str:
        measurement = known(loop.measurement)
        measured = self._shown(measurement.range if measurement else loop.measurement)
        return f"{transmitter_of(loop)}, {measured}" if transmitter_of(loop) else measured

    def _draw_secondary(self, part: Secondary, y: float) -> None:
        sheet = self._sheet
        sheet.shared_display(_MAIN, y, self._lines(part.loop.tag))
        self._draw_words(part.loop, y)
        if part.element:
            self._draw_element(part.element, None, y)
            sheet.software((_MAIN - BUBBLE, y), (_CHANNEL + 21, y))
        elif part.onward:
            sheet.connector(_CONNECTOR, y, part.onward, to_the_left=True)
            sheet.software((_MAIN - BUBBLE, y), (_CONNECTOR + 25, y), arrow=False)

    # -- functions

    def _draw_block(self, part: Block, y: float) -> None:
        function = part.function
        self._sheet.function_block(_MAIN, y, _symbol(function))
        for index, tag in enumerate(function.inputs):
            self._draw_input(function, tag, y, index)
        if not part.beside:
            words = block_words(function, _RIGHT - _MAIN_NOTE, self._language)
            self._note_beside(_MAIN_NOTE, y, words, _RIGHT - _MAIN_NOTE, bold_first=True)
            return
        drawn = part.beside[:MOST_BESIDE]
        # Above and below the links that enter from the right.
        half = 3.5 * (len(drawn) - 1)
        x, width = _MAIN + BLOCK + 3, _GATE - _MAIN - BLOCK - 7
        self._sheet.note(x, y - 6 - half, (function.tag,), width=width, bold_first=True)
        self._sheet.note(x, y + 10 + half, (kind_words(function, self._language),), width=width)
        for index, tag in enumerate(drawn):
            offset = index - (len(drawn) - 1) / 2
            more = len(part.beside) - MOST_BESIDE + 1 if index == MOST_BESIDE - 1 else 1
            instead = f"{more} more" if more > 1 else ""
            self._draw_beside(tag, y + BESIDE_DISTANCE * offset, y + 7 * offset, instead)

    def _draw_beside(self, tag: str, y: float, into: float, instead: str) -> None:
        """Another commander of a function, to the right of it; ``instead`` stands for several."""
        sheet, width = self._sheet, _RIGHT - _SIDE_NOTE
        left = _SIDE - BUBBLE
        if instead:
            sheet.connector(_SIDE + 10.5, y, instead, to_the_left=True)
        elif tag in self._register.functions:
            function = self._register.functions[tag]
            sheet.function_block(_SIDE, y, _symbol(function))
            self._note_beside(_SIDE_NOTE, y, (tag, kind_words(function, self._language)), width, bold_first=True)
            left = _SIDE - BLOCK
        else:
            loop = self._register.loops[tag]
            sheet.shared_display(_SIDE, y, self._lines(tag))
            self._note_beside(_SIDE_NOTE, y, wrapped(self._measured(loop), width, 2), width)
        end = (_MAIN + BLOCK, into)
        way = ((left, y), end) if y == into else ((left, y), (_GATE, y), (_GATE, into), end)
        sheet.software(*way)

    def _draw_input(self, function: Function, tag: str, y: float, index: int) -> None:
        """A measurement that enters a function from the left: the first straight, the others from below."""
        at, count = y + INPUT_DISTANCE * index, len(function.inputs)
        loop = self._register.loops.get(tag)
        measurement = self._register.measurements.get(tag) or (known(loop.measurement) if loop else None)
        if measurement is None:
            self._sheet.connector(_CONNECTOR, at, tag)
            start = _CONNECTOR + 25
        else:
            start = self._draw_measurement(known(measurement.transmitter) or tag, measurement, at)
        edge = _MAIN - BLOCK
        if index == 0:
            self._sheet.software((start, at), (edge, at))
        else:
            # The lower an input, the further right it rises and the lower it enters: no two of them cross.
            x, into = edge - 4 - 5 * (count - index), y + 10 * index / (count - 1)
            self._sheet.software((start, at), (x, at), (x, into), (edge, into))
        weight = function.weights.get(tag, 1.0)
        if weight != 1.0:
            self._sheet.note(edge - 6 - 5 * count, at + 8.5, (f"× {self._shown(weight)}",), width=36, anchor="end")

    # -- field and wiring

    def _draw_measurement(self, tag: str, measurement: Measurement, y: float, *, strong: bool = False) -> float:
        """Transmitter, terminals and input of a measurement; the x at which its signal leaves to the right."""
        sheet = self._sheet
        sheet.measuring_point(_FIELD, y, known(measurement.variable) or "", known(measurement.element) or "")
        sheet.field_instrument(_FIELD, y, self._lines(tag), strong=strong)
        sheet.electric((_FIELD + BUBBLE, y), (_TERMINALS - 7, y))
        self._wire(y, measurement.signal)
        sheet.channel(_CHANNEL, y, self._shown(measurement.channel))
        sheet.note(_FIELD_NOTE, y + 8.5, measurement_words(measurement, self._language), width=NOTE_WIDTH)
        if known(measurement.characteristic) != "square root":
            return _CHANNEL + 21
        sheet.software((_CHANNEL + 21, y), (_ROOT - 5.5, y), arrow=False)
        sheet.square_root(_ROOT, y)
        return _ROOT + 5.5

    def _wire(self, y: float, signal: str | Hold | None) -> None:
        """Terminals, the wire from there to the control system, and what the signal is."""
        self._sheet.electric((_TERMINALS + 7, y), (_CHANNEL - 21, y))
        self._sheet.terminals(_TERMINALS, y)
        if signal is not None:
            self._sheet.note(_FIELD_NOTE, y - 2.8, (self._word("signal", signal),), width=NOTE_WIDTH)

    def _draw_element(self, element: FinalElement, branch: Range | None, y: float) -> None:
        sheet = self._sheet
        kind, fails = known(element.kind) or "", element.fails
        sheet.final_element(_FIELD, y, kind, known(fails) or "")
        if fails is not None:
            letters = HOLD if isinstance(fails, Hold) else self._language.fail_letters(fails)
            x, baseline = (_FIELD - 11, y + 21.2) if kind in _DRIVES else (_FIELD - 4, y + 11.4)
            sheet.note(x, baseline, (letters,), width=24, anchor="end")
        sheet.electric((_TERMINALS - 7, y), (_FIELD + 9.5, y), arrow=True)
        self._wire(y, element.signal)
        sheet.channel(_CHANNEL, y, self._shown(element.channel))
        sheet.note(_FIELD_NOTE, y + 9, element_words(element, self._language), width=NOTE_WIDTH, bold_first=True)
        if branch is not None:
            sheet.note(_CHANNEL + 27, y - 3.5, (self._shown(branch),), width=56)
        if known(element.output_block) == "reversed":
            sheet.note(_CHANNEL + 27, y + 8.5, (self._language.term("output block", "reversed"),), width=56)
        lines = element_forcing_lines(self._plant, element, self._language)
        if lines:
            middle = y - (forcing_height(self._plant, element, self._language) + 10) / 2
            sheet.electric((_FIELD, middle + DIAMOND), (_FIELD, y - 5.5), arrow=True)
            sheet.interlock(_FIELD, middle)
            self._note_beside(_FIELD + DIAMOND + 4, middle, lines, NOTE_WIDTH + 12)

    # -- the loop itself

    def _draw_own(self, y: float) -> None:
        sheet, loop = self._sheet, self._loop
        measurement = known(loop.measurement)
        if measurement:
            start = self._draw_measurement(transmitter_of(loop) or DASH, measurement, y, strong=True)
            tapped = initiated_lines(self._plant, loop)
            if tapped:
                sheet.software((start, y), (_TAP, y), arrow=False)
                sheet.junction(_TAP, y)
                sheet.software((_TAP, y), (_TAP, y - 13))
                sheet.interlock(_TAP, y - 21)
                sheet.note(_TAP - 12, y - 19 - (len(tapped) - 1) * LEADING / 2, tapped, width=74, anchor="end")
                start = _TAP
            sheet.software((start, y), (_MAIN - BUBBLE, y))
        sheet.shared_display(_MAIN, y, self._lines(loop.tag), strong=True)
        controller = known(loop.controller)
        if controller and controller.action is not None:
            sheet.note(_MAIN - BUBBLE - 3, y + 11.5, (self._word("action", controller.action),), width=56, anchor="end")
        self._draw_alarms(y)
        width = _RIGHT - _FORCE - DIAMOND - 3
        forced = forcing_lines(self._plant, loop.tag, width, 4, self._language)
        if forced:
            sheet.interlock(_FORCE, y)
            self._note_beside(_FORCE + DIAMOND + 3, y, forced, width)
            sheet.software((_FORCE - DIAMOND, y), (_MAIN + BUBBLE, y))

    def _draw_alarms(self, y: float) -> None:
        """High alarms above the middle of the bubble, low ones below, the outermost furthest from it."""
        alarms = self._loop.alarms
        highs = [kind for kind in reversed(ALARM_ORDER) if kind in alarms and kind.startswith("high")]
        lows = [kind for kind in ("low", "low_low", "deviation") if kind in alarms]
        places = [(kind, y - 5 - LEADING * (len(highs) - 1 - index)) for index, kind in enumerate(highs)]
        places += [(kind, y + 9.5 + LEADING * index) for index, kind in enumerate(lows)]
        for kind, baseline in places:
            words = f"{self._language.alarm_letters(kind)} {self._shown(alarms[kind].limit)}"
            self._sheet.note(_MAIN_NOTE, baseline, (words,), width=_FORCE - DIAMOND - 4 - _MAIN_NOTE)

    # -- links between rows

    def _link(self, above: Row, below: Row) -> None:
        """The link from one row to the next; final elements are reached from the side."""
        if isinstance(below.part, Element | Elsewhere):
            self._link_out(below)
            return
        top = below.y - _half_height(below.part)
        joins = isinstance(below.part, Others)
        self._sheet.software((_MAIN, above.y + _half_height(above.part)), (_MAIN, top), arrow=not joins)
        if below.label:
            # In the middle of what the words of both rows leave free.
            middle = (above.y + above.below + below.y - below.above) / 2
            self._sheet.note(_MAIN + 5, middle + 2.2, (below.label,), width=_RIGHT - _MAIN - 5)

    def _link_out(self, below: Row) -> None:
        """From the controller, or the function on its output, to a final element or a connector."""
        source = next(row for row in reversed(self._rows) if row.y < below.y and isinstance(row.part, Block | Own))
        start = source.y + _half_height(source.part)
        ends = [row for row in self._rows if row.y > source.y]
        # Several outputs leave side by side, the one that goes furthest at the right.
        x = _MAIN + (ends.index(below) - (len(ends) - 1) / 2) * 7
        edge = _CONNECTOR + 25 if isinstance(below.part, Elsewhere) else _CHANNEL + 21
        self._sheet.software((x, start), (x, below.y), (edge, below.y), arrow=isinstance(below.part, Element))


def _symbol(function: Function) -> str:
    return HOLD if isinstance(function.kind, Hold) else _SYMBOLS.get(function.kind or "", DASH)


def _first_of(tags: tuple[str, ...]) -> str:
    return tags[0] if len(tags) == 1 else f"{tags[0]} + {len(tags) - 1}"
