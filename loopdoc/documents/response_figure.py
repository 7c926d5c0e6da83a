"""The time responses of a chain as a figure: a column for each upset, measurement above, final element below."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace

import numpy as np

from loopdoc.documents.frequency_plot import frequency_drawing
from loopdoc.documents.magnitudes import TIME_UNITS, number
from loopdoc.documents.plots import Curve, Drawing, Limit, Panel
from loopdoc.documents.upset_story import single_loop_assumption
from loopdoc.documents.values import shown
from loopdoc.engineering.comparison import UPSET_PCT, Comparison, NotSimulated, ScenarioResponses
from loopdoc.engineering.dynamics import ChainDynamics
from loopdoc.engineering.pairing import ControlledLoop, Plant
from loopdoc.engineering.process import FloatArray
from loopdoc.engineering.simulation import Response
from loopdoc.engineering.stages import Chain, measured_range
from loopdoc.register.model import Hold, known
from loopdoc.register.quantity import Quantity, Range
from loopdoc.register.units import UnitError

ALARM_NAMES = {"high_high": "HH", "high": "H", "low": "L", "low_low": "LL"}
COLUMNS = 4
"""Upsets side by side in a figure."""


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


def figure(plant: Plant, comparison: Comparison) -> Drawing:
    """Above, the outermost measurement in engineering units; below, the final element; a column for each upset."""
    chain = comparison.dynamics.chain
    columns = [panels(plant, comparison, entry) for entry in _drawn(comparison)]
    # The columns share what the vertical axes are named.
    columns = columns[:1] + [(replace(up, y_label=""), replace(down, y_label="")) for up, down in columns[1:]]
    title = f"Time responses of {chain.lead.tag} with {chain.final_element.tag}"
    rows = (tuple(up for up, _ in columns), tuple(down for _, down in columns))
    return Drawing(title, rows, whole_caption(comparison))


def panels(plant: Plant, comparison: Comparison, entry: ScenarioResponses) -> tuple[Panel, Panel]:
    """The outermost measurement and the final element under one upset."""
    chain = comparison.dynamics.chain
    lead = chain.lead
    own = measured_range(lead)
    last = float(entry.tuned.time_s[-1])
    _, divisor, time_unit = next(unit for unit in TIME_UNITS if last >= unit[0])
    shown_names = ("cascade", "single loop") if entry.single else ("as tuned", "")
    curves = [Curve("setpoint", "dotted", *_xy(entry.tuned, _setpoint(entry.tuned, own), divisor))]
    valves = []
    for name, style, response in (
        (shown_names[0], "solid", entry.tuned),
        (shown_names[1], "dashed", entry.single),
    ):
        if response is not None:
            curves.append(Curve(name, style, *_xy(response, _eu_curve(response.measurement_pct[-1], own), divisor)))
            valves.append(Curve(name, style, *_xy(response, response.travel_pct, divisor)))
    above = Panel(
        _short_name(comparison, entry), "", f"{lead.tag}, {own.unit.display}", tuple(curves),
        tuple(_limits(plant, lead, own)),
    )  # fmt: skip
    below = Panel(
        "", f"time, {time_unit}", f"{chain.final_element.tag}, %", tuple(valves), tuple(_travel_limits(chain))
    )
    return above, below


def _limits(plant: Plant, lead: ControlledLoop, own: Range) -> Iterator[Limit]:
    """The alarms of the outermost loop, and the trips on what it measures."""
    for kind, alarm in lead.loop.alarms.items():
        if kind in ALARM_NAMES:
            yield from _limit(ALARM_NAMES[kind], alarm.limit, own)
    for trip in plant.trips:
        part = trip.loop or trip.instrument
        if part is not None and lead.loop in plant.loops_watching(part):
            yield from _limit(trip.interlock.tag, trip.initiator.limit, own)


def _limit(name: str, written: Quantity | Hold | None, own: Range) -> Iterator[Limit]:
    limit = known(written)
    if limit is None:
        return
    try:
        yield Limit(f"{name} {shown(limit)}", limit.to(own.unit.symbol))
    except UnitError:  # `unit-incompatible` tells it
        return


def _travel_limits(chain: Chain) -> Iterator[Limit]:
    """How far the innermost controller may move the final element."""
    inner = chain.stages[0].controller
    # Of a split range's branch the limits lie beyond the travel: there the other branch is moved.
    for limit in (max(0.0, inner.output_low_pct), min(100.0, inner.output_high_pct)):
        yield Limit(f"limit {number(limit)} %", limit)


def _drawn(comparison: Comparison) -> list[ScenarioResponses]:
    """The upsets that a figure has room for: the setpoint step, then those that the register declares."""
    step, *others = comparison.scenarios
    declared = [entry for entry in others if entry.scenario.disturbances[0].path is not None]
    return [step, *declared, *(entry for entry in others if entry not in declared)][:COLUMNS]


def caption(comparison: Comparison) -> str:
    """What is shown and under which assumptions."""
    chain = comparison.dynamics.chain
    stroke = known(chain.final_element.stroke_time)
    alone = len(chain.levels) == 1
    whose = f"at {chain.lead.tag}" if alone else "at each measurement of the cascade"
    parts = [
        f"Response of {chain.lead.tag} with {chain.final_element.tag} to a step of {number(UPSET_PCT)} % of span in "
        f"its setpoint and, through the lags of the process concerned, {whose}"
        + (
            "; of an integrating process the upset is at its input."
            if any(stage.process.integrating for stage in chain.stages)
            else "."
        ),
        "Upsets that the register declares come with their own size and lag."
        if any(entry.scenario.disturbances and entry.scenario.disturbances[0].path for entry in comparison.scenarios)
        else "",
        "Linear models about the normal values, simulated scan by scan as executed, with output limits"
        + (f" and a stroke time of {shown(stroke)}" if stroke else "")
        + "; every measurement starts at its normal value and the final element in the middle of its output limits.",
        "Alarms, trips and output limits are drawn where they lie near the curves; each panel has its own scale.",
    ]
    return " ".join(part for part in parts if part)


def whole_caption(comparison: Comparison) -> str:
    """The caption of a figure beside which nothing else says with what a cascade is compared."""
    return " ".join(part for part in (caption(comparison), single_loop_assumption(comparison)) if part)


def _short_name(comparison: Comparison, entry: ScenarioResponses) -> str:
    if entry.scenario.setpoint_step_pct:
        return "Setpoint step"
    if entry.scenario.disturbances[0].path is not None:
        return f"{entry.scenario.name[:1].upper()}{entry.scenario.name[1:]}"
    return f"Upset at {comparison.dynamics.chain.levels[entry.scenario.disturbances[0].level].loop.tag}"


def _setpoint(response: Response, own: Range) -> FloatArray:
    setpoint = response.setpoint_pct[-1]
    assert setpoint is not None
    return _eu_curve(setpoint, own)


def _eu_curve(percent: FloatArray, own: Range) -> FloatArray:
    return own.low + percent * own.span / 100.0


def _xy(response: Response, values: FloatArray, divisor: float) -> tuple[FloatArray, FloatArray]:
    return np.asarray(response.time_s / divisor), values


