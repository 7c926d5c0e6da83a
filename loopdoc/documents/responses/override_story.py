"""An override as a whole: its figure, the words beside it, and its table."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import replace
from typing import Any

import numpy as np

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.magnitudes import TIME_UNITS, change, duration, number
from loopdoc.documents.plots import Curve, Drawing, Panel
from loopdoc.documents.responses.response_figure import in_units, loop_limits
from loopdoc.documents.responses.upset_story import upset_size
from loopdoc.documents.values import DASH
from loopdoc.documents.wording import sentences, upper_first
from loopdoc.engineering.branched_simulation import BranchedResponse
from loopdoc.engineering.dynamics import inputs_beside
from loopdoc.engineering.override import TO_THE_LIMIT, Override, OverrideResponses, Takeover
from loopdoc.engineering.pairing import ControlledLoop, Plant
from loopdoc.engineering.stages import commanded, measured_range
from loopdoc.register.model import FinalElement, known
from loopdoc.register.quantity import Quantity, Range
from loopdoc.register.units import UNITS, unit

COLUMNS = 3
"""Responses side by side in a figure of three rows."""
WHOLE = Range(0.0, 100.0, UNITS["%"])
"""The range of what is asked of a final element."""


def tags(found: Override) -> list[str]:
    """The candidates."""
    return [loop.tag for loop in found.loops]


def override_upset(found: Override, entry: OverrideResponses, language: Language = ENGLISH) -> str:
    """What upsets an override, with its size in engineering units."""
    scenario = entry.scenario
    if scenario.name == TO_THE_LIMIT:
        normal = found.loops[found.normal]
        up = scenario.setpoint_step_pct > 0.0
        return language.setpoint_as_far(normal.tag, _setpoint_end(normal, language, up=up), up=up)
    if scenario.origin == "declared":
        return language.upset_declared(scenario.name, _moved(found, entry))
    tag = _moved(found, entry)
    named = language.upset_at_input if _integrates(found, entry) else language.upset_at
    return named(upset_size(_size(found, entry, language), tag, language.by_sized_upset(), language), tag)


def _setpoint_end(loop: ControlledLoop, language: Language, *, up: bool) -> str:
    """How far a setpoint may go: its limit, else the end of the range."""
    setpoint, own = known(loop.controller.setpoint), measured_range(loop)
    limit = known(setpoint.high if up else setpoint.low) if setpoint else None
    end = Quantity(own.high if up else own.low, own.unit, origin=own.origin)
    return language.value(end if limit is None else limit)


def _moved(found: Override, entry: OverrideResponses) -> str:
    """The loop on whose measurement an upset comes."""
    at = entry.scenario.disturbances[0].level
    return (
        found.loops[at - found.below].tag if at >= found.below else found.candidates[0].chain.levels[at].loop.tag
    )


def _integrates(found: Override, entry: OverrideResponses) -> bool:
    return found.structure.loops[entry.scenario.disturbances[0].level].processes[0].integrating


def _size(found: Override, entry: OverrideResponses, language: Language) -> str:
    """The size of an upset that is sized for a candidate."""
    size_pct, place = abs(entry.scenario.disturbances[0].size_pct), entry.scenario.read - found.below
    if _integrates(found, entry):
        symbol, span = commanded(found.candidates[place].chain.levels[-1].route)
        return language.with_unit(size_pct * span / 100.0, unit(symbol).display)
    return language.change(size_pct, measured_range(found.loops[place]))


# ---------------------------------------------------------------- figure


def shown_responses(found: Override) -> list[tuple[OverrideResponses, bool]]:
    """The responses that a figure has room for, and whether each is the one as written: of an upset that is sized to
    bring a controller in both, of the others the one as written.
    """
    given = [entry for entry in found.responses if entry.scenario.origin != "sized"]
    given.sort(key=lambda entry: not _brings_in(found, entry))
    sized = [entry for entry in found.responses if entry.scenario.origin == "sized"]
    columns = [(entry, True) for entry in given[: COLUMNS - 2]]
    for entry in sized:
        columns += [(entry, True), (entry, False)]
    return columns[:COLUMNS]


def _brings_in(found: Override, entry: OverrideResponses) -> bool:
    """Whether an upset brings one that stands by into command."""
    return any(found.taken_over(entry.as_written, place).takes_over for place in found.standing_by)


def override_panels(
    plant: Plant, found: Override, entry: OverrideResponses, language: Language = ENGLISH, *, as_written: bool = True
) -> tuple[Panel, Panel, Panel]:
    """The measurement that stands by, the one in command, and what is asked and passed, under one upset."""
    response = entry.as_written if as_written else entry.otherwise
    _, divisor, time_unit = next(one for one in TIME_UNITS if float(response.time_s[-1]) >= one[0])
    time = response.time_s / divisor
    idle = _drawn_idle(found, entry)
    panels = []
    for place in (idle, found.normal):
        loop, at = found.loops[place], found.below + place
        own = measured_range(loop)
        curves = (
            Curve(language.label("setpoint"), "dotted", time, in_units(response.setpoint_pct[at], own)),
            Curve(
                language.label("measurement"), "solid", time, in_units(response.measurement_pct[at], own)
            ),
        )
        limits = tuple(loop_limits(plant, loop, own, language))
        panels.append(Panel("", "", f"{loop.tag}, {language.unit(own.unit.display)}", curves, limits))
    above = replace(panels[0], title=_short_name(found, entry, language, as_written=as_written))
    own = _asked_range(found)
    asked = [
        Curve(found.loops[place].tag, style, time, in_units(response.output_pct[found.below + place], own))
        for place, style in ((found.normal, "dashed"), (idle, "dotted"))
    ]
    passed = Curve(language.label("passed"), "solid", time, in_units(_passed(found, response), own))
    what = language.asked_of(found.end.tag, language.unit(own.unit.display))
    below = Panel("", language.panel_time(time_unit), what, (*asked, passed))
    return above, panels[1], below


def _asked_range(found: Override) -> Range:
    if isinstance(found.end, FinalElement):
        return WHOLE
    measurement = known(found.end.measurement)
    own = known(measurement.range) if measurement else None
    assert own is not None  # else there is no chain
    return own


def _passed(found: Override, response: BranchedResponse) -> Any:
    """What the selector passes [%]: the setpoint of the loop below it, or the lowest or highest output."""
    if found.below:
        return response.setpoint_pct[found.below - 1]
    outputs = np.stack(response.output_pct)
    return outputs.min(axis=0) if found.structure.lowest else outputs.max(axis=0)


def _drawn_idle(found: Override, entry: OverrideResponses) -> int:
    """Place of the candidate that stands by and is drawn under an upset."""
    read = entry.scenario.read - found.below
    return read if read != found.normal else found.standing_by[0]


def _short_name(
    found: Override, entry: OverrideResponses, language: Language, *, as_written: bool = True
) -> str:
    if entry.scenario.name == TO_THE_LIMIT:
        return language.panel_to_limit(found.loops[found.normal].tag)
    if entry.scenario.origin == "declared":
        return upper_first(entry.scenario.name)
    idle = _drawn_idle(found, entry)
    return language.panel_past(found.loops[idle].tag, found.follows(idle, as_written=as_written))


def override_figure(plant: Plant, found: Override, language: Language = ENGLISH) -> Drawing:
    """A column for each response: measurements above, what is asked and passed below."""
    columns = [
        override_panels(plant, found, entry, language, as_written=as_written)
        for entry, as_written in shown_responses(found)
    ]
    # The columns share what the vertical axes are named; of several that stand by each names its own.
    named = {panel.y_label for panel, _, _ in columns}
    rows = []
    for row in zip(*columns, strict=True):
        unnamed = [replace(panel, y_label="") for panel in row[1:]]
        rows.append((row[0], *(row[1:] if len(named) > 1 and row[0].title else unnamed)))
    title = language.override_title(tags(found), found.function.tag)
    return Drawing(title, tuple(rows), override_caption(found, language), language.decimal_comma)


def override_caption(found: Override, language: Language = ENGLISH) -> str:
    """What is shown and under which assumptions."""
    sized = [
        language.override_sized(
            _moved(found, entry), _size(found, entry, language), language.duration(entry.scenario.lasts_s)
        )
        for entry in found.responses
        if entry.scenario.origin == "sized"
    ]
    drawn = [entry for entry, _ in shown_responses(found)]
    left_out = [_short_name(found, entry, language) for entry in found.responses if entry not in drawn]
    lowest = known(found.function.kind) == "low select"
    told = language.override_caption(tags(found), found.function.tag, lowest=lowest)
    inputs = inputs_beside(found.candidates)
    return " ".join(
        (
            told,
            *sized,
            *([language.inputs_stay(inputs)] if inputs else ()),
            *([language.not_drawn(left_out)] if left_out else ()),
        )
    )


# ---------------------------------------------------------------- words


def override_told(found: Override, language: Language = ENGLISH) -> str:
    """Who stands by, what brings it into command and what comes of that, in sentences."""
    return sentences(*_told(found, language))


def _told(found: Override, language: Language) -> Iterator[str]:
    normal = found.loops[found.normal].tag
    for place in found.standing_by:
        loop, lead = found.structure.loops[found.below + place], found.loops[place]
        distance = language.calculated(
            language.change(abs(loop.start_error_pct), measured_range(lead)), lead.tag,
            language.label("Distance from the setpoint"), language.by_simulation(),
        )  # fmt: skip
        yield language.override_stands_by(lead.tag, distance, normal, below=loop.start_error_pct > 0.0)
    given = [entry for entry in found.responses if entry.scenario.origin != "sized"]
    for entry in given:
        for place in found.standing_by:
            if found.taken_over(entry.as_written, place).takes_over:
                yield from _takes_over(found, entry, place, language)
            else:
                yield language.override_stays_out(override_upset(found, entry, language), found.loops[place].tag)
    if not any(_brings_in(found, entry) for entry in given):
        yield language.override_nothing_given([found.loops[place].tag for place in found.standing_by])
    for entry in found.responses:
        place = entry.scenario.read - found.below
        if entry.scenario.origin == "sized" and found.taken_over(entry.as_written, place).takes_over:
            yield from _takes_over(found, entry, place, language)


def _takes_over(found: Override, entry: OverrideResponses, place: int, language: Language) -> Iterator[str]:
    own, tag, by = measured_range(found.loops[place]), found.loops[place].tag, language.by_simulation()

    def at(takeover: Takeover) -> str:
        late_s = takeover.spell.first_s - takeover.reaches_s
        after, late = (
            language.calculated(language.duration(seconds), tag, language.label("Time to take over"), by)
            if seconds >= 0.0
            else ""
            for seconds in (takeover.spell.first_s, late_s)
        )
        return language.takeover_at(after, late)

    def past(percent: float) -> str:
        return language.calculated(language.change(percent, own), tag, language.label("Past the setpoint"), by)

    seen = found.taken_over(entry.as_written, place)
    yield language.override_takes_over(
        override_upset(found, entry, language),
        tag,
        at(seen),
        past(seen.past_pct),
        language.how_followed(found.follows(place)),
    )
    if math.isfinite(seen.gives_back_s) and math.isfinite(entry.scenario.lasts_s):
        back_s = seen.gives_back_s - entry.scenario.lasts_s
        back = language.duration(max(0.0, back_s))
        back = language.calculated(back, tag, language.label("Time to give back"), by)
        yield language.override_gives_back(found.loops[found.normal].tag, back)
    other = found.taken_over(entry.otherwise, place)
    yield language.override_otherwise(
        language.how_followed(found.follows(place, as_written=False)),
        at(other) if other.takes_over else "",
        past(other.past_pct),
    )


# ---------------------------------------------------------------- response document


def override_section(found: Override, svg: str) -> dict[str, Any]:
    """View of an override as a whole, for the response document."""
    below = [level.loop.tag for level in reversed(found.candidates[0].chain.levels[:-1])]
    element = found.candidates[0].chain.final_element.tag
    return {
        "function": found.function.tag,
        "path": " → ".join([", ".join(tags(found)), found.function.tag, *below, element]),
        "told": override_told(found),
        "figure": svg,
        "caption": override_caption(found),
        "rows": [row for entry in found.responses for row in _rows(found, entry)],
    }


def _rows(found: Override, entry: OverrideResponses) -> Iterator[dict[str, Any]]:
    """A row for each candidate that stands by, as written and the other way."""
    for place in found.standing_by:
        own = measured_range(found.loops[place])
        for response, as_written in ((entry.as_written, True), (entry.otherwise, False)):
            seen = found.taken_over(response, place)
            times = (seen.reaches_s, seen.spell.first_s, seen.gives_back_s)
            reaches, takes_over, gives_back = (duration(time) if math.isfinite(time) else DASH for time in times)
            yield {
                "upset": override_upset(found, entry).rstrip(","),
                "tag": found.loops[place].tag,
                "follows": ENGLISH.how_followed(found.follows(place, as_written=as_written)),
                "cells": [
                    reaches, takes_over, change(seen.past_pct, own) if seen.past_pct > 0.0 else DASH, gives_back,
                    f"{number(response.metrics.valve_travel_pct)} %", str(response.metrics.reversals),
                ],
            }
