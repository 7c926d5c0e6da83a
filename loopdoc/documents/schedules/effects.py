"""The cause and effect chart of each unit: what trips the interlocks downwards, what they do across.

The arrangement follows the idea of IEC 62881; the look is our own.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.drawing import text_width
from loopdoc.documents.narrative.protection_story import acts, bypass
from loopdoc.documents.narrative.time_to_act_story import response_of
from loopdoc.documents.schedules.schedule import (
    A3,
    A4,
    DASHES,
    Cell,
    Column,
    Group,
    Paper,
    Row,
    Schedule,
    ScheduleKind,
    Writer,
    extent,
    page,
)
from loopdoc.documents.values import DASH
from loopdoc.documents.whereabouts import anchor, natural, unit_numbers, unit_of
from loopdoc.documents.wording import sentence, upper_first, value
from loopdoc.engineering.pairing import Trip
from loopdoc.register.model import Hold, Interlock, InterlockAction, known

KIND = ScheduleKind(
    "cause-and-effect", "Cause and effect chart", "CE",
    signatures=("Reviewed by, for process safety", "For operations", "For instrumentation", "Date of the review",
                "Remarks"),
)  # fmt: skip
TEMPLATE = "cause-and-effect.html"

NARROWEST_EFFECT_MM = 6.35
"""Width of the column of an effect with two lines in its head."""
CAUSE_SHARES = (("Interlock", 35.0), ("Voting", 10.5), ("Cause", 53.0), ("Trips", 27.0), ("Delay", 10.0))
"""Heads of a row with their widths [mm]."""
HEAD_TYPE_PT = 7.2
HEAD_LEADING_PT = 8.2
_MM = 72 / 25.4
_SHORTEST_HEAD_MM = 26.0
_LONGEST_LINE_MM = 62.0
"""A longer service is broken in the head of its column."""

MARKS = {"closed": ("C", "closes it"), "open": ("O", "opens it"), "stopped": ("S", "stops it"),
         "started": ("R", "starts it (runs)")}  # fmt: skip
"""Mark of each position into which an interlock brings a final element, and what it means."""
MODES = {
    "manual": "M", "automatic": "A", "cascade": "K", "initialisation": "I", "remote output": "RO",
    "out of service": "OS",
}  # fmt: skip
"""Mark of each mode into which an interlock forces a controller."""
UNKNOWN = "?"

READING = (
    "Causes go down, effects go across; a mark says what the interlock of the row does to the tag of the column. Where "
    "several causes stand under one interlock, the voting says how many of them trip it."
)
CAUTION = (
    "The chart repeats what the register says and does not show that an interlock is enough. Process safety times and "
    "response times are compared as written; safety functions are judged in their own lifecycle (IEC 61511)."
)
LAYERS = ("safety", "process")
INTERLOCKS = (
    Column("Interlock", 6.0), Column("Service", 9.0), Column("Layer", 4.5), Column("Likely cause", 14.5),
    Column("Consequence without it", 15.0), Column("Reset", 12.5), Column("Response against process safety time", 12.0),
    Column("Proof test", 5.5), Column("Bypass", 15.5), Column("Drawing", 5.5),
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class Effect:
    """The head of a column."""

    lines: tuple[str, ...]
    """Tag, then the service, broken where it is long; they stand side by side when they are turned."""


@dataclass(frozen=True, slots=True)
class Chart:
    """One grid; a layer with many effects takes several of them."""

    title: str
    causes: tuple[tuple[str, str], ...]
    """Heading and width of each head of a row."""
    effects: tuple[Effect, ...]
    effect_width: str
    head_height: str
    width: str
    groups: tuple[Group, ...]


def cause_and_effect_charts(basis: Basis) -> Iterator[Page]:
    """The chart of each unit that has an interlock."""
    for number in unit_numbers(basis.plant):
        own = [one for one in basis.plant.register.interlocks.values() if unit_of(one) == number]
        if own:
            yield _Charts(basis, number, sorted(own, key=lambda one: natural(one.tag))).page()


class _Charts:
    """The charts of one unit while they are written."""

    def __init__(self, basis: Basis, number: str, interlocks: Sequence[Interlock]) -> None:
        self._basis = basis
        self._number = number
        self._interlocks = interlocks
        self._writer = Writer(basis)
        self._trips: dict[str, list[Trip]] = {}
        for trip in basis.plant.trips:
            self._trips.setdefault(trip.interlock.tag, []).append(trip)

    def page(self) -> Page:
        layers = dict.fromkeys((*LAYERS, *(self._layer(one) for one in self._interlocks)))
        by_layer = {layer: [one for one in self._interlocks if self._layer(one) == layer] for layer in layers}
        heads = {tag: self._head(tag) for tag in _targets(self._interlocks)}
        lines = max((len(head.lines) for head in heads.values()), default=0)
        column_mm = max(NARROWEST_EFFECT_MM, lines * HEAD_LEADING_PT / _MM + 0.5)
        widest = max(len(_targets(found)) for found in by_layer.values())
        paper = A4 if _most_effects(A4, column_mm) >= widest else A3
        charts = tuple(
            chart
            for layer, found in by_layer.items()
            if found
            for chart in self._charts(layer, found, heads, column_mm, _most_effects(paper, column_mm))
        )
        causes = sum(len(one.initiators) for one in self._interlocks)
        effects = len(_targets(self._interlocks))
        return page(
            self._basis, self._writer, replace(KIND, paper=paper), unit=self._number,
            extent=extent((len(self._interlocks), "interlock"), (causes, "cause"), (effects, "effect")),
            reading=(f"{READING} {self._marks()} {DASHES}", *self._from_elsewhere()), caution=CAUTION,
            schedules=(self._interlock_table(),), view={"charts": charts}, template=TEMPLATE,
        )  # fmt: skip

    def _layer(self, interlock: Interlock) -> str:
        return known(interlock.layer) or ""

    def _from_elsewhere(self) -> Iterator[str]:
        """Interlocks of other units that act on what stands in this one."""
        register = self._basis.plant.register
        own = {
            tag
            for section in (register.final_elements, register.loops)
            for tag, part in section.items()
            if unit_of(part) == self._number
        }
        for interlock in register.interlocks.values():
            does = acts(interlock, own)
            if does and unit_of(interlock) != self._number:
                yield sentence(f"{interlock.tag} of unit {unit_of(interlock)} also {does}")

    # -- the grid

    def _charts(
        self, layer: str, interlocks: Sequence[Interlock], heads: dict[str, Effect], column_mm: float, most: int
    ) -> Iterator[Chart]:
        targets = _targets(interlocks)
        parts = max(1, math.ceil(len(targets) / most))
        each = math.ceil(len(targets) / parts)
        name = f"{upper_first(layer)} layer" if layer else "Layer not known"
        for part in range(parts):
            shown = targets[part * each : (part + 1) * each]
            which = f", effects {part * each + 1} to {part * each + len(shown)} of {len(targets)}" if parts > 1 else ""
            longest_mm = max((_width_mm(head) for head in (heads[tag] for tag in shown)), default=0.0)
            width_mm = sum(share for _, share in CAUSE_SHARES) + column_mm * len(shown)
            yield Chart(
                name + which,
                tuple((heading, f"{share}mm") for heading, share in CAUSE_SHARES),
                tuple(heads[tag] for tag in shown),
                f"{column_mm:.2f}mm",
                f"{max(_SHORTEST_HEAD_MM, longest_mm + 3.0):.1f}mm" if shown else "6.0mm",
                f"{width_mm:.1f}mm",
                tuple(self._group(one, shown, first=part == 0) for one in interlocks),
            )

    def _head(self, tag: str) -> Effect:
        register = self._basis.plant.register
        part = register.final_elements.get(tag) or register.loops.get(tag)
        service = self._writer.text(part.service if part else None)
        return Effect((tag, *_broken(service)))

    def _group(self, interlock: Interlock, targets: Sequence[str], *, first: bool) -> Group:
        write = self._writer
        trips = self._trips.get(interlock.tag, [])
        held = write.reason_at(interlock.tag, "actions") if not interlock.actions else None
        service = write.text(interlock.service)
        rows = []
        for index, trip in enumerate(trips):
            initiator = trip.initiator
            side, limit = write.text(initiator.direction), write.text(initiator.limit)
            part = trip.instrument or trip.loop
            lead = (
                (write.cell(interlock.tag, *([service] if service != DASH else ()), *([f"Effects: {held}"] if held else
                 ["No effects in the register"] if not interlock.actions else ()), kind="strong", down=len(trips)),
                 write.cell(interlock.voting, down=len(trips)))
                if index == 0
                else ()
            )  # fmt: skip
            rows.append(Row((
                *lead,
                write.cell(initiator.tag, write.text(part.service if part else None)),
                write.cell(f"{side} {limit}" if known(initiator.direction) and known(initiator.limit) else
                           initiator.limit),
                write.cell(initiator.delay),
                *(self._mark(interlock.actions.get(tag)) for tag in targets),
            ), anchor(interlock.tag) if first and index == 0 else ""))  # fmt: skip
        if not rows:
            cells = [write.cell(interlock.tag, service, kind="strong"), write.cell(interlock.voting)]
            cells += [write.cell(None) for _ in range(3)] + [self._mark(interlock.actions.get(tag)) for tag in targets]
            rows.append(Row(tuple(cells), anchor(interlock.tag) if first else ""))
        return Group(tuple(rows))

    def _mark(self, action: InterlockAction | None) -> Cell:
        write = self._writer
        if action is None:
            return write.plain("", kind="mark")
        mark = _mark(action)
        output = known(action.output)
        if output is None:
            return write.plain(mark, kind="mark")
        return Cell((write.plain(mark).lines[0], write.plain(value(output)).lines[0]), "mark forced")

    def _marks(self) -> str:
        """What the marks mean that stand in these charts."""
        actions = [action for one in self._interlocks for action in one.actions.values()]
        used = dict.fromkeys(_mark(action) for action in actions)
        told = [f"{mark} {meaning}" for mark, meaning in MARKS.values() if mark in used]
        told += [f"{mark} forces the controller to {mode}" for mode, mark in MODES.items() if mark in used]
        if any(known(action.output) for action in actions):
            told.append("a percentage is the output to which it is forced")
        if UNKNOWN in used:
            told.append(f"{UNKNOWN} stands where the action is not known")
        return sentence(f"{told[0]}{''.join(f'; {one}' for one in told[1:])}") if told else ""

    # -- what stands behind the grid

    def _interlock_table(self) -> Schedule:
        write = self._writer
        rows = tuple(
            Row((
                write.cell(one.tag), write.cell(one.service), write.cell(one.layer), write.words(one.cause),
                write.words(one.consequence), write.words(one.reset), self._response(one), write.cell(one.proof_test),
                self._bypass(one), write.cell(one.drawing),
            ))
            for one in self._interlocks
        )  # fmt: skip
        return Schedule("Interlocks", INTERLOCKS, (Group(rows),))

    def _bypass(self, interlock: Interlock) -> Cell:
        told = bypass(known(interlock.bypass))
        return self._writer.words(told or (interlock.bypass if isinstance(interlock.bypass, Hold) else None))

    def _response(self, interlock: Interlock) -> Cell:
        told = response_of(interlock)
        return self._writer.cell(told.text, kind="strong" if told.strong else "")


def _most_effects(paper: Paper, column_mm: float) -> int:
    """Effects that a sheet takes beside the heads of the rows."""
    return int((paper.width_mm - sum(share for _, share in CAUSE_SHARES)) / column_mm)


def _mark(action: InterlockAction) -> str:
    """The mark of an action; of a controller forced to an output only, none but that."""
    position, mode = known(action.position), known(action.mode)
    if position:
        return MARKS.get(position, (UNKNOWN, ""))[0]
    if mode:
        return MODES.get(mode, UNKNOWN)
    return "" if known(action.output) else UNKNOWN


def _width_mm(head: Effect) -> float:
    """Length of the longest line of a head."""
    return max(text_width(line, HEAD_TYPE_PT, bold=index == 0) for index, line in enumerate(head.lines)) / _MM


def _broken(service: str) -> Iterator[str]:
    """A service broken at its spaces into lines that a head takes."""
    line = ""
    for word in service.split(" "):
        longer = f"{line} {word}" if line else word
        if line and text_width(longer, HEAD_TYPE_PT) > _LONGEST_LINE_MM * _MM:
            yield line
            longer = word
        line = longer
    yield line


def _targets(interlocks: Sequence[Interlock]) -> list[str]:
    """Tags on which these interlocks act, in natural order, final elements and controllers of one number together."""
    return sorted({tag for one in interlocks for tag in one.actions}, key=lambda tag: (natural(tag)[1:], natural(tag)))
