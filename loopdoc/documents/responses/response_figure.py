"""The time responses of a chain as a figure: a column for each upset, measurement above, final element below."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace

import numpy as np

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.magnitudes import TIME_UNITS
from loopdoc.documents.plots import Curve, Drawing, Limit, Panel
from loopdoc.documents.responses.frequency_plot import frequency_drawing
from loopdoc.documents.responses.upset_story import single_loop_assumption
from loopdoc.documents.wording import upper_first
from loopdoc.engineering.comparison import UPSET_PCT, Comparison, NotSimulated, ScenarioResponses
from loopdoc.engineering.dynamics import ChainDynamics
from loopdoc.engineering.pairing import ControlledLoop, Plant
from loopdoc.engineering.process import FloatArray
from loopdoc.engineering.simulation import Response
from loopdoc.engineering.stages import Chain, measured_range
from loopdoc.register.model import ALARM_ORDER, Hold, known
from loopdoc.register.quantity import Quantity, Range
from loopdoc.register.units import UnitError

COLUMNS = 4
"""Upsets side by side in a figure."""
# A loop executed about as slowly as its process moves settles within a few steps: fewer make no curve.
STEPS_DRAWN = 12


def drawings(
    plant: Plant, chains: Sequence[ChainDynamics], comparisons: Sequence[Comparison | NotSimulated]
) -> list[Drawing]:
    """What is drawn of a loop alone: of each chain the time responses, where there are any, and the open loops."""
    found: list[Drawing] = []
    for dynamics, comparison in zip(chains, comparisons, strict=True):
        if isinstance(comparison, Comparison):
            found.append(figure(plant, comparison))
        found.append(frequency_drawing(dynamics))
    return found


def figure(plant: Plant, comparison: Comparison, language: Language = ENGLISH) -> Drawing:
    """Above, the outermost measurement in engineering units; below, the final element; a column for each upset."""
    chain = comparison.dynamics.chain
    columns = [panels(plant, comparison, entry, language) for entry in _drawn(comparison)]
    # The columns share what the vertical axes are named.
    columns = columns[:1] + [(replace(up, y_label=""), replace(down, y_label="")) for up, down in columns[1:]]
    title = language.response_title(chain.lead.tag, chain.final_element.tag)
    rows = (tuple(up for up, _ in columns), tuple(down for _, down in columns))
    return Drawing(title, rows, whole_caption(comparison, language), language.decimal_comma)


def panels(
    plant: Plant, comparison: Comparison, entry: ScenarioResponses, language: Language = ENGLISH
) -> tuple[Panel, Panel]:
    """The outermost measurement and the final element under one upset."""
    chain = comparison.dynamics.chain
    lead = chain.lead
    own = measured_range(lead)
    last = drawn_until_s(
        [
            response
            for one in comparison.scenarios
            for response in (one.tuned, one.without_feedforward, one.single)
            if response
        ]
    )
    _, divisor, time_unit = next(unit for unit in TIME_UNITS if last >= unit[0])
    name_of_tuned = language.label("cascade" if entry.single else "as tuned")

    def curve(name: str, style: str, response: Response, values: FloatArray) -> Curve:
        points = int(np.searchsorted(response.time_s, last, side="right"))
        return Curve(name, style, np.asarray(response.time_s[:points] / divisor), values[:points])

    curves = [curve(language.label("setpoint"), "dotted", entry.tuned, _setpoint(entry.tuned, own))]
    valves = []
    for name, style, response in (
        (name_of_tuned, "solid", entry.tuned),
        (language.label("without feedforward"), "dash-dotted", entry.without_feedforward),
        (language.label("single loop"), "dashed", entry.single),
    ):
        if response is not None:
            curves.append(curve(name, style, response, in_units(response.measurement_pct[-1], own)))
            valves.append(curve(name, style, response, response.travel_pct))
    above = Panel(
        _short_name(comparison, entry, language), "", f"{lead.tag}, {language.unit(own.unit.display)}", tuple(curves),
        tuple(loop_limits(plant, lead, own, language)),
    )  # fmt: skip
    below = Panel(
        "", language.panel_time(time_unit), f"{chain.final_element.tag}, %", tuple(valves),
        tuple(_travel_limits(chain, language)),
    )  # fmt: skip
    return above, below


def drawn_until_s(responses: Sequence[Response]) -> float:
    """How long responses are drawn, all alike [s]: a quarter longer than any of them moves, or as long as they last.

    They move while they are off their last value by more than a hundredth of what they cover, and are drawn over
    `STEPS_DRAWN` at least.
    """
    until = 0.0
    for response in responses:
        for signal in (response.measurement_pct[-1], response.travel_pct):
            off = np.nonzero(np.abs(signal - signal[-1]) > 0.01 * np.ptp(signal))[0]
            if len(off):
                until = max(until, float(response.time_s[off[-1]]))
    end = float(responses[0].time_s[-1])
    least = float(responses[0].time_s[min(STEPS_DRAWN, len(responses[0].time_s) - 1)])
    return min(max(1.25 * until, least), end) if until > 0.0 else end


def loop_limits(plant: Plant, lead: ControlledLoop, own: Range, language: Language) -> Iterator[Limit]:
    """The alarms of the outermost loop, and the trips on what it measures."""
    for kind, alarm in lead.loop.alarms.items():
        if kind in ALARM_ORDER:
            yield from _limit(language.alarm_letters(kind), alarm.limit, own, language)
    for trip in plant.trips:
        part = trip.loop or trip.instrument
        if part is not None and lead.loop in plant.loops_watching(part):
            yield from _limit(trip.interlock.tag, trip.initiator.limit, own, language)


def _limit(name: str, written: Quantity | Hold | None, own: Range, language: Language) -> Iterator[Limit]:
    limit = known(written)
    if limit is None:
        return
    try:
        yield Limit(f"{name} {language.shown(limit)}", limit.to(own.unit.symbol))
    except UnitError:  # `unit-incompatible` tells it
        return


def _travel_limits(chain: Chain, language: Language) -> Iterator[Limit]:
    """How far the innermost controller may move the final element."""
    inner = chain.stages[0].controller
    # Of a split range's branch the limits lie beyond the travel: there the other branch is moved.
    for limit in (max(0.0, inner.output_low_pct), min(100.0, inner.output_high_pct)):
        yield Limit(language.output_limit(language.rounded(limit)), limit)


def _drawn(comparison: Comparison) -> list[ScenarioResponses]:
    """The upsets that a figure has room for."""
    return _by_weight(comparison)[:COLUMNS]


def _by_weight(comparison: Comparison) -> list[ScenarioResponses]:
    """The setpoint step, then the upsets that the register declares, then the others from the innermost out."""
    step, *others = comparison.scenarios
    declared = [entry for entry in others if entry.scenario.disturbances[0].path is not None]
    return [step, *declared, *(entry for entry in others if entry not in declared)]


def caption(comparison: Comparison, language: Language = ENGLISH) -> str:
    """What is shown and under which assumptions."""
    chain = comparison.dynamics.chain
    stroke = known(chain.final_element.stroke_time)
    return language.response_caption(
        chain.lead.tag,
        chain.final_element.tag,
        language.rounded(UPSET_PCT),
        alone=len(chain.levels) == 1,
        integrating=any(stage.process.integrating for stage in chain.stages),
        declared=any(
            entry.scenario.disturbances and entry.scenario.disturbances[0].path for entry in comparison.scenarios
        ),
        limited=_is_limited(comparison),
        stroke=language.shown(stroke) if stroke else "",
        left_out=[_in_words(comparison, entry, language) for entry in _by_weight(comparison)[COLUMNS:]],
    )


def _is_limited(comparison: Comparison) -> bool:
    """Whether a limit of the setpoint cuts its step short."""
    step = comparison.scenarios[0]
    setpoint = step.tuned.setpoint_pct[-1]
    assert setpoint is not None
    return float(setpoint[-1]) - comparison.start_pct[-1] < step.scenario.setpoint_step_pct - 1e-9


def whole_caption(comparison: Comparison, language: Language = ENGLISH) -> str:
    """The caption of a figure beside which nothing else says with what a cascade is compared."""
    parts = (caption(comparison, language), single_loop_assumption(comparison, language))
    return " ".join(part for part in parts if part)


def _short_name(comparison: Comparison, entry: ScenarioResponses, language: Language) -> str:
    if entry.scenario.setpoint_step_pct:
        return language.label("Setpoint step")
    if entry.scenario.disturbances[0].path is not None:
        return upper_first(entry.scenario.name)
    return language.panel_upset(comparison.dynamics.chain.levels[entry.scenario.disturbances[0].level].loop.tag)


def _in_words(comparison: Comparison, entry: ScenarioResponses, language: Language) -> str:
    """An upset that has no panel, as a sentence names it."""
    if entry.scenario.disturbances[0].path is not None:
        return entry.scenario.name
    return language.upset_unsized(comparison.dynamics.chain.levels[entry.scenario.disturbances[0].level].loop.tag)


def _setpoint(response: Response, own: Range) -> FloatArray:
    setpoint = response.setpoint_pct[-1]
    assert setpoint is not None
    return in_units(setpoint, own)


def in_units(percent: FloatArray, own: Range) -> FloatArray:
    """Percent of a range in its unit."""
    return own.low + percent * own.span / 100.0
