"""A split range as a whole: its figure, the words beside it, and its tables."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.magnitudes import TIME_UNITS, difference_unit, duration, number
from loopdoc.documents.plots import Curve, Drawing, Panel
from loopdoc.documents.responses.response_figure import COLUMNS, in_units, loop_limits
from loopdoc.documents.responses.upset_story import peak, setpoint_step, standard, upset_size
from loopdoc.documents.wording import sentences, upper_first
from loopdoc.engineering.branched_simulation import BranchedResponse
from loopdoc.engineering.comparison import UPSET_PCT, peak_time_s
from loopdoc.engineering.dynamics import inputs_beside
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.split_range import HANDOVER, SplitRange
from loopdoc.engineering.stages import commanded, measured_range
from loopdoc.register.model import known
from loopdoc.register.units import unit

STYLES = ("solid", "dashed", "dotted")
"""Of the curves of several final elements; more than three share the last."""


def tags(split: SplitRange) -> list[str]:
    """The final elements."""
    return [element.tag for element in split.elements]


def split_upset(split: SplitRange, response: BranchedResponse, language: Language = ENGLISH) -> str:
    """What upsets a split range, with its size in engineering units."""
    scenario, lead = response.scenario, split.lead
    if scenario.setpoint_step_pct:
        made = float(response.setpoint_pct[-1][-1] - response.measurement_pct[-1][0])
        return setpoint_step(lead, scenario.setpoint_step_pct, made, language)
    upset = scenario.disturbances[0]
    level = split.chains[split.near].chain.levels[upset.level]
    if scenario.origin == "declared":
        return language.declared_at(scenario.name, level.loop.tag)
    if level.stage.process.integrating:
        symbol, span = commanded(level.route)
        size = language.with_unit(upset.size_pct * span / 100.0, unit(symbol).display)
    else:
        size = language.change(upset.size_pct, measured_range(level.loop))
    if scenario.name == HANDOVER:
        size = upset_size(size, level.loop.tag, language.by_sized_upset(), language)
        return language.upset_over_handover(size, level.loop.tag)
    size = standard(size, level.loop.tag, language)
    named = language.upset_at_input if level.stage.process.integrating else language.upset_at
    return named(size, level.loop.tag)


def split_panels(
    plant: Plant, split: SplitRange, response: BranchedResponse, language: Language = ENGLISH
) -> tuple[Panel, Panel]:
    """The outermost measurement and every final element under one upset."""
    own = measured_range(split.lead)
    last = float(response.time_s[-1])
    _, divisor, time_unit = next(one for one in TIME_UNITS if last >= one[0])
    time = response.time_s / divisor
    above = (
        Curve(language.label("setpoint"), "dotted", time, in_units(response.setpoint_pct[-1], own)),
        Curve(split.lead.tag, "solid", time, in_units(response.measurement_pct[-1], own)),
    )
    below = tuple(
        Curve(tag, STYLES[min(place, len(STYLES) - 1)], time, travel)
        for place, (tag, travel) in enumerate(zip(tags(split), response.travel_pct, strict=True))
    )
    return (
        Panel(
            _short_name(split, response, language), "", f"{split.lead.tag}, {language.unit(own.unit.display)}", above,
            tuple(loop_limits(plant, split.lead, own, language)),
        ),
        Panel("", language.panel_time(time_unit), f"{language.label('opening')}, %", below),
    )  # fmt: skip


def _short_name(split: SplitRange, response: BranchedResponse, language: Language) -> str:
    scenario = response.scenario
    if scenario.setpoint_step_pct:
        return language.label("Setpoint step")
    if scenario.origin == "declared":
        return upper_first(scenario.name)
    if scenario.name == HANDOVER:
        return language.panel_handover()
    return language.panel_upset(split.chains[0].chain.levels[scenario.disturbances[0].level].loop.tag)


def drawn_responses(split: SplitRange) -> list[BranchedResponse]:
    """The upsets that a figure has room for: those first that cross the handover."""
    step, *others = split.responses
    others.sort(key=lambda response: (not split.crosses(response), response.scenario.origin == "standard"))
    return [step, *others][:COLUMNS]


def split_figure(plant: Plant, split: SplitRange, language: Language = ENGLISH) -> Drawing:
    """A column for each upset: the outermost measurement above, the final elements below."""
    columns = [split_panels(plant, split, response, language) for response in drawn_responses(split)]
    # The columns share what the vertical axes are named.
    columns = columns[:1] + [(replace(up, y_label=""), replace(down, y_label="")) for up, down in columns[1:]]
    rows = (tuple(up for up, _ in columns), tuple(down for _, down in columns))
    title = language.split_title(split.lead.tag, tags(split))
    return Drawing(title, rows, split_caption(split, language), language.decimal_comma)


def standing(split: SplitRange, openings_pct: list[float], language: Language = ENGLISH) -> list[str]:
    """Where each final element stands."""
    return [
        language.at_opening(
            tag,
            language.calculated(
                language.rounded(round(opening, 2) + 0.0), tag, language.label("Opening at the end"),
                language.by_simulation(),
            ),
        )
        for tag, opening in zip(tags(split), openings_pct, strict=True)
    ]


def split_caption(split: SplitRange, language: Language = ENGLISH) -> str:
    """What is shown and under which assumptions."""
    strokes = [
        (element.tag, language.shown(stroke)) for element in split.elements if (stroke := known(element.stroke_time))
    ]
    drawn = drawn_responses(split)
    left_out = [_short_name(split, response, language) for response in split.responses if response not in drawn]
    inputs = inputs_beside(split.chains)
    processes = [stage.process for dynamics in split.chains for stage in dynamics.chain.stages]
    return " ".join(
        (
            language.split_caption(
                split.lead.tag, tags(split), language.rounded(UPSET_PCT),
                alone=len(split.structure.loops) == 1,
                integrating=any(process.integrating for process in processes),
            ),
            start_told(split, language),
            language.split_assumptions(strokes),
            *([language.inputs_stay(inputs)] if inputs else ()),
            *([language.not_drawn(left_out)] if left_out else ()),
        )
    )  # fmt: skip


def start_told(split: SplitRange, language: Language = ENGLISH) -> str:
    """Where a split range starts, and why there."""
    return language.split_start(
        split.function.tag,
        language.rounded(split.structure.output_pct),
        standing(split, list(split.structure.openings_pct), language),
        language.rounded(split.handover_pct),
        declared=split.is_declared,
    )


def split_told(split: SplitRange, language: Language = ENGLISH) -> str:
    """Which upsets carry the output over the handover, and the worst margins, in sentences."""
    by, what = language.by_simulation(), language.label("Output at the handover")
    handover = language.calculated(language.rounded(split.handover_pct), split.function.tag, what, by)
    told = [
        language.split_crosses(
            split_upset(split, response, language),
            split.lead.tag,
            standing(split, [float(travel[-1]) for travel in response.travel_pct], language),
            peak(response.metrics.peak_pct, split.lead, language),
            handover,
        )
        for response in split.responses
        if split.crosses(response)
    ]
    worst = split.worst
    sensitivity = language.calculated(
        language.number(worst.margins[-1].max_sensitivity, 3), split.lead.tag, language.label("Ms"),
        language.by_frequency_response(),
    )  # fmt: skip
    return sentences(
        *(told or [language.split_stays(handover)]),
        language.split_worst(worst.chain.final_element.tag, sensitivity),
    )


def split_section(split: SplitRange, svg: str) -> dict[str, Any]:
    """View of a split range as a whole, for the response document."""
    own = measured_range(split.lead)
    per_pct = own.span / 100.0
    path = [level.loop.tag for level in reversed(split.chains[0].chain.levels)]
    return {
        "function": split.function.tag,
        "path": " → ".join([*path, split.function.tag, ", ".join(tags(split))]),
        "elements": tags(split),
        "unit": difference_unit(own),
        "told": split_told(split),
        "figure": svg,
        "caption": split_caption(split),
        "rows": [
            {
                "upset": split_upset(split, response),
                "cells": [
                    number(response.metrics.peak_pct * per_pct),
                    number(response.metrics.iae_pct_s / 60.0 * per_pct),
                    duration(response.metrics.settling_s),
                    duration(peak_time_s(response.scenario.setpoint_step_pct, response.metrics)),
                    f"{number(response.metrics.overshoot_pct)} %",
                    f"{number(response.metrics.valve_travel_pct)} %",
                    str(response.metrics.reversals),
                ],
            }
            for response in split.responses
        ],
        "openings": [
            {
                "upset": split_upset(split, response),
                "crosses": "yes" if split.crosses(response) else "no",
                "cells": [
                    text
                    for (low, high), travel in zip(response.travel_range_pct, response.travel_pct, strict=True)
                    for text in (_opening(float(travel[-1])), f"{_opening(low)} to {_opening(high)}")
                ],
            }
            for response in split.responses
        ],
    }


def _opening(percent: float) -> str:
    return number(round(percent, 2) + 0.0)
