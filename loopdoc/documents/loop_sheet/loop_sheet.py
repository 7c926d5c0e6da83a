"""The loop sheet: one page for each loop, with its drawing, its data and what a loop check should find."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

from markupsafe import Markup

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.language import Language
from loopdoc.documents.loop_sheet.loop_drawing import drawn_loop
from loopdoc.documents.loop_sheet.loop_panels import controller_panel, measurement_panel, tuning_panel
from loopdoc.documents.loop_sheet.loop_tables import (
    alarm_table,
    element_table,
    expected_table,
    hold_lines,
    interlock_table,
    related_interlocks,
    revision_table,
)
from loopdoc.documents.loop_sheet.panels import Panel, Table, cell, term
from loopdoc.documents.loop_sheet.response_plot import HEIGHT as PLOT_HEIGHT
from loopdoc.documents.loop_sheet.response_plot import LOW_HEIGHT as LOW_PLOT_HEIGHT
from loopdoc.documents.loop_sheet.response_plot import calculated_response, response_plot, response_words
from loopdoc.documents.narrative import time_to_act_story
from loopdoc.documents.narrative.open_points import HOLD_RULE
from loopdoc.documents.page_fit import (
    DENSITIES,
    MM,
    PAGE_WIDTH,
    line_count,
    paragraph_height,
    room,
    table_height,
)
from loopdoc.documents.titleblock import Document
from loopdoc.documents.values import DASH
from loopdoc.documents.wording import upper_first
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.step_response import SetpointResponse
from loopdoc.register.model import Loop, known
from loopdoc.rules.finding import Finding

FOLDER = "loop-sheets"
TEMPLATE = "loop-sheet.html"
REVISIONS = 2
"""Latest revisions on a sheet; the register holds them all."""
MOST_FINDINGS = 4
"""Open findings on a sheet; the index of the issue lists them all."""
LEGIBLE = DENSITIES[:2]
"""Type sizes at which a page still takes the figure of the response."""

TIME_TO_ACT = "Time to act"
"""Words before the line of times from alarm to trip."""
MOST_TIME_LINES = 2
"""Lines that the times may take; the narrative tells longer ones."""
OVERFULL = "overfull"
"""Class of a sheet that no type size brings onto one page: it runs on, clear of a high title block."""

COLUMN_WIDTH = 0.493 * PAGE_WIDTH
"""Of each of the two columns below the drawing [pt]."""
LABEL_SHARE = 0.21
"""Of a column's width, for a label."""
_HEADING = 8 * 1.36 + 1.6 * MM
_SIGN_OFF = 8 * MM + 0.5


@dataclass(frozen=True, slots=True)
class Point:
    """An open finding or an accepted one, as a sheet tells it."""

    kind: str
    rule: str
    text: str


@dataclass(frozen=True, slots=True)
class SheetView:
    """What the template of a loop sheet places: text, tables and figures."""

    tag: str
    service: str
    purpose: str
    """Empty where the register gives none."""
    facts: tuple[tuple[str, str], ...]
    drawing: Markup
    drawing_height: float
    measurement: Panel
    controller: tuple[Panel, ...]
    """Controller and tuning; empty for an indicator."""
    expected: Table | None
    tables: tuple[Table, ...]
    points: tuple[Point, ...]
    more_points: str
    holds: tuple[str, ...]
    revisions: Table | None
    response: str = ""
    """Figure of the setpoint response; empty where there is none or no room."""
    response_words: str = ""
    response_height: float = PLOT_HEIGHT
    """Of the figure [pt]."""
    time_to_act: str = ""
    """From each alarm to the trip behind it, in two lines at most; empty where there is none or no room."""
    density: str = ""
    """Classes of the page."""


def loop_sheets(basis: Basis) -> Iterator[Page]:
    """One sheet for every loop, in the order of the register."""
    for loop in basis.plant.register.loops.values():
        document = basis.document(
            kind="Loop sheet",
            code="LS",
            title=" ".join(part for part in (loop.tag, known(loop.service)) if part),
            supplementary_title=basis.language.unit_title(_unit_words(basis.plant, loop), ""),
            unit=known(loop.unit) or "00",
            serial=serial(basis.plant, loop),
            language=basis.language,
        )
        view = _fitted(basis, loop, _view(basis, loop, document), room(document))
        yield Page(FOLDER, loop.tag, document, TEMPLATE, {"sheet": view})


def serial(plant: Plant, loop: Loop) -> str:
    """The part of a sheet's document number that tells the loops of a unit apart.

    Letters, serial and suffix of the tag: two loops may share a serial (FIC-2011, TIC-2011), and a number must
    not change when a loop is added. A tag that is not built so, or not of its unit, is taken whole.
    """
    pattern = plant.register.tag_pattern
    found = pattern.fullmatch(loop.tag) if pattern else None
    if found is None or "{unit}" not in plant.register.numbering:
        return loop.tag
    parts = found.groupdict()
    if parts["unit"] != known(loop.unit):
        return loop.tag
    return "".join(parts.get(name) or "" for name in ("letters", "serial", "suffix"))


# ---------------------------------------------------------------- the view


def _view(basis: Basis, loop: Loop, document: Document) -> SheetView:
    plant, language = basis.plant, basis.language
    drawn = drawn_loop(plant, loop.tag, language)
    interlocks = related_interlocks(plant, loop, drawn.elements)
    tags = {loop.tag, *(function.tag for function in drawn.functions), *(element.tag for element in drawn.elements)}
    measurement = known(loop.measurement)
    if measurement and (transmitter := known(measurement.transmitter)):
        tags.add(transmitter)
    controller = known(loop.controller)
    panels: tuple[Panel, ...] = ()
    if controller is not None:
        dynamics = basis.dynamics.loop(loop.tag)
        panels = (controller_panel(plant, loop, controller, language), tuning_panel(loop, dynamics, language))
    tables = (
        element_table(plant, loop, drawn.elements, language),
        alarm_table(plant, loop, language),
        interlock_table(interlocks, loop, drawn.elements, language),
    )
    # Open holds are told one by one below, with their reasons.
    findings = [finding for finding in basis.result.about(tags) if finding.rule != HOLD_RULE]
    findings.sort(key=lambda finding: -finding.level)
    more = len(findings) - MOST_FINDINGS
    accepted = [finding for finding in basis.result.accepted if not tags.isdisjoint(finding.touches)]
    return SheetView(
        tag=loop.tag,
        service=cell(loop.service, language),
        purpose=cell(loop.purpose, language) if loop.purpose is not None else "",
        facts=_facts(plant, loop, language),
        drawing=Markup(drawn.svg),
        drawing_height=drawn.height,
        measurement=measurement_panel(loop, language),
        controller=panels,
        expected=expected_table(plant, loop, language),
        tables=tuple(table for table in tables if table),
        points=(
            *(_open_point(finding, loop.tag, language) for finding in findings[:MOST_FINDINGS]),
            *(_accepted_point(finding, loop.tag, language) for finding in accepted),
        ),
        more_points=language.more_findings(more) if more > 0 else "",
        holds=tuple(
            hold_lines(plant, {*tags, *(interlock.tag for interlock in interlocks)}, loop.tag, language=language)
        ),
        revisions=revision_table(document.history[:REVISIONS], language),
    )


def _unit_words(plant: Plant, loop: Loop) -> str:
    number = known(loop.unit)
    unit = plant.register.units.get(number) if number else None
    name = known(unit.name) if unit else None
    return " ".join(part for part in (number, name) if part) or DASH


def _facts(plant: Plant, loop: Loop, language: Language) -> tuple[tuple[str, str], ...]:
    label = language.label
    facts = [
        (label("Unit"), _unit_words(plant, loop)),
        (label("Drawing"), cell(loop.drawing, language)),
        (label("Hazard direction"), term("hazard", loop.hazard, language)),
    ]
    if loop.tag in plant.controlled:
        facts.append((label("Commanded by"), _commanded_by(plant, loop.tag, language)))
        facts.append((label("Commands"), _commands(plant, loop.tag, language)))
    return tuple(facts)


def _commanded_by(plant: Plant, tag: str, language: Language) -> str:
    """The loops and functions that set a loop's setpoint; the operator where there are none."""
    links = plant.links_to.get(tag, ())
    through = dict.fromkeys(function.tag for link in links for function in link.via)
    direct = [commander for commander in plant.commanders.get(tag, ()) if commander not in through]
    words = ", ".join(dict.fromkeys([*(link.primary.tag for link in links), *direct]))
    if not words:
        return language.the_operator()
    return language.through(words, ", ".join(through)) if through else words


def _commands(plant: Plant, tag: str, language: Language) -> str:
    """Where a loop's output ends."""
    routes = plant.controlled[tag].routes
    ends = ", ".join(dict.fromkeys(route.end.tag for route in routes))
    through = ", ".join(dict.fromkeys(function.tag for route in routes for function in route.via))
    if not ends:
        return DASH
    return language.through(ends, through) if through else ends


def _open_point(finding: Finding, own: str, language: Language) -> Point:
    subject = "" if finding.tag == own else f"{finding.tag}: "
    # On a page, words of the register stand in quotation marks and not in the back ticks of a terminal.
    message = re.sub(r"`([^`]*)`", "“\\1”", finding.message)
    level = language.term("level", str(finding.level))
    return Point(upper_first(level), finding.rule, f"{subject}{language.finding_clause(message)}")


def _accepted_point(finding: Finding, own: str, language: Language) -> Point:
    deviation = finding.accepted_by
    assert deviation is not None
    subject = "" if finding.tag == own else f"{finding.tag}: "
    until = cell(deviation.until, language)
    words = Markup(language.accepted("{}", "{}", "{}")).format(
        cell(deviation.reason, language),
        cell(deviation.approved_by, language),
        until if isinstance(until, Markup) else language.date(until),
    )
    return Point(language.label("Deviation"), finding.rule, Markup("{}{}").format(subject, words))


# ---------------------------------------------------------------- one page


def _fitted(basis: Basis, loop: Loop, view: SheetView, height: float) -> SheetView:
    """The sheet in the largest type that one page takes, with what else it leaves room for."""
    response = calculated_response(basis.dynamics.loop(loop.tag))
    fitted = _in_type(loop, view, response, height, basis.language)
    size = next((density.size for density in DENSITIES if density.name == fitted.density), DENSITIES[-1].size)
    fitted = _with_times(basis, loop, fitted, size, height)
    if response is None or fitted.response or fitted.density not in {density.name for density in LEGIBLE}:
        return fitted
    lower = _with_response(fitted, loop, response, basis.language, LOW_PLOT_HEIGHT)
    return lower if sheet_height(lower, size) <= height else fitted


def _with_times(basis: Basis, loop: Loop, fitted: SheetView, size: float, height: float) -> SheetView:
    """The sheet with the times from alarm to trip, where they are short and find room."""
    times = time_to_act_story.sheet_line(basis.times, loop, basis.language)
    line = f"{times}; {basis.language.times_line_caution()}" if times else ""
    if not line or line_count(f"{basis.language.label(TIME_TO_ACT)} {line}", PAGE_WIDTH, size) > MOST_TIME_LINES:
        return fitted
    told = replace(fitted, time_to_act=line)
    return told if sheet_height(told, size) <= height else fitted


def _in_type(
    loop: Loop, view: SheetView, response: SetpointResponse | None, height: float, language: Language
) -> SheetView:
    """The sheet in the largest type that one page takes, with the response where it leaves room for it."""
    if response is not None:
        told = _with_response(view, loop, response, language, PLOT_HEIGHT)
        for density in LEGIBLE:
            if sheet_height(told, density.size) <= height:
                return replace(told, density=density.name)
    for density in DENSITIES:
        if sheet_height(view, density.size) <= height:
            return replace(view, density=density.name)
    return replace(view, density=f"{DENSITIES[-1].name} {OVERFULL}")


def _with_response(
    view: SheetView, loop: Loop, response: SetpointResponse, language: Language, plot_height: float
) -> SheetView:
    figure = Markup(response_plot(loop.tag, response, language, plot_height))
    words = response_words(response, language)
    return replace(view, response=figure, response_words=words, response_height=plot_height)


def sheet_height(view: SheetView, size: float) -> float:
    """Height of a sheet with its tables in a type size [pt]."""
    title = f"{view.tag} {view.service}"
    height = line_count(title, PAGE_WIDTH, 12.0, bold=True, narrow=False) * 13.5 * 1.15 + 0.6 * MM
    if view.purpose:
        height += paragraph_height(view.purpose, PAGE_WIDTH, 8.4, 1.25, narrow=False) + 1.0 * MM
    share = PAGE_WIDTH / len(view.facts)
    height += table_height([[(value, share, False) for _, value in view.facts]], size, label=True)
    height += 1.0 * MM + view.drawing_height
    height += max(_left_height(view, size), sum(_panel_height(panel, size) for panel in view.controller))
    for table in (*view.tables, *((view.revisions,) if view.revisions else ())):
        height += 1.2 * MM + _listed_height(table, PAGE_WIDTH, size)
    lines = [f"{TIME_TO_ACT} {view.time_to_act}"] if view.time_to_act else []
    lines += [f"{point.kind} ({point.rule}): {point.text}" for point in view.points]
    lines += [*filter(None, (view.more_points,)), *(f"HOLD    {line}" for line in view.holds)]
    height += 1.2 * MM if lines else 0.0
    height += sum(paragraph_height(line, PAGE_WIDTH, size, 1.2) + 0.4 * MM for line in lines)
    return height + _SIGN_OFF


def _left_height(view: SheetView, size: float) -> float:
    height = _panel_height(view.measurement, size)
    if view.expected:
        expected = _HEADING + _listed_height(view.expected, COLUMN_WIDTH, size)
        # An indicator has it in the right column, beside the measurement.
        height = height + expected if view.controller else max(height, expected)
    if view.response_words:
        height += _HEADING + view.response_height + paragraph_height(view.response_words, COLUMN_WIDTH, size, 1.2)
    return height


def _panel_height(panel: Panel, size: float) -> float:
    def cells(row: Sequence[tuple[str, str]]) -> Iterator[tuple[str, float, bool]]:
        for label, value in row:
            yield label, LABEL_SHARE * COLUMN_WIDTH, True
            yield value, (1 - LABEL_SHARE if len(row) == 1 else 0.5 - LABEL_SHARE) * COLUMN_WIDTH, False

    return _HEADING + table_height([list(cells(row)) for row in panel.rows], size)


def _listed_height(table: Table, width: float, size: float) -> float:
    widths = [width * column.share / 100 for column in table.columns]
    head = [(column.heading, room, True) for column, room in zip(table.columns, widths, strict=True)]
    rows = [
        [(value, room, index == 0) for index, (value, room) in enumerate(zip(row, widths, strict=True))]
        for row in table.rows
    ]
    return table_height([head, *rows], size)
