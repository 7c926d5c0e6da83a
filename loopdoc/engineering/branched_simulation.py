"""Time responses of branched structures, simulated scan by scan as they are executed."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from loopdoc.engineering.branched import BranchedScenario, BranchedStructure
from loopdoc.engineering.clock import HORIZON_PARTS, Clock, Unsuited, choose_clocks, lasting
from loopdoc.engineering.pid import Controller, on_secondary_range
from loopdoc.engineering.process import FloatArray, Process
from loopdoc.engineering.response_metrics import SETTLING_BAND, Reading, ResponseMetrics, read_metrics
from loopdoc.engineering.simulation import LAGS_TO_ARRIVE, POINTS_MOST, judge_at_the_end
from loopdoc.engineering.structure import ControlStructure

if TYPE_CHECKING:
    from loopdoc.engineering.branched_columns import BranchedColumn
    from loopdoc.engineering.scanning import BranchedPlant, Records


@dataclass(frozen=True, slots=True)
class Spell:
    """When the output of a loop passed, among those that command one thing."""

    first_s: float
    """When it did first [s]; infinite for never."""
    last_s: float
    """When it did last [s]; infinite for never."""
    times: int
    """How many times it took command, the start among them."""


@dataclass(frozen=True, slots=True, eq=False)
class BranchedResponse:
    """A simulated time response; arrays are (n,) over time, percent of span or travel."""

    scenario: BranchedScenario
    time_s: FloatArray
    """Time since the upset [s]."""
    measurement_pct: tuple[FloatArray, ...]
    """Per loop."""
    setpoint_pct: tuple[FloatArray, ...]
    """Per loop, within its limits."""
    output_pct: tuple[FloatArray, ...]
    """Per loop, within its limits, in percent of what it commands."""
    travel_pct: tuple[FloatArray, ...]
    """Per final element, mean over the step that begins at each time."""
    measurement_range_pct: tuple[tuple[float, float], ...]
    """Lowest and highest of each measurement, of all steps until it was at rest."""
    travel_range_pct: tuple[tuple[float, float], ...]
    """Lowest and highest of each travel, likewise."""
    spells: tuple[Spell, ...]
    """Per loop."""
    metrics: ResponseMetrics
    """Of the measurement by which the scenario is read; travel and reversals are those of all final elements."""


def simulate_branched(
    structures: Sequence[BranchedStructure],
    scenarios: Sequence[BranchedScenario],
    *,
    clock: Clock | None = None,
) -> tuple[tuple[BranchedResponse, ...], ...]:
    """Time responses of branched structures that are to be compared, scan by scan with limits, on one clock.

    Parameters
    ----------
    structures : sequence of BranchedStructure
        For example an override with external reset and without.
    scenarios : sequence of BranchedScenario
        Each is applied to each structure.
    clock : Clock, optional
        Time step and horizon, kept to the end, with every step of the signals. Without it as of
        `loopdoc.engineering.simulation.simulate`.

    Returns
    -------
    tuple of tuples of BranchedResponse
        One tuple per structure, one response per scenario, all of the same length.

    Raises
    ------
    ValueError
        A scenario names a loop that a structure does not have, or they cannot be simulated together.

    Source: as of `loopdoc.engineering.scanning.run_branched`.
    """
    from loopdoc.engineering.branched_columns import BranchedColumn, branched_cases_of, branched_plant_of

    for structure in structures:
        for scenario in scenarios:
            places = [scenario.read, *(one.level for one in scenario.disturbances)]
            if any(not 0 <= place < len(structure.loops) for place in places):
                raise ValueError(f"scenario {scenario.name}: there is no loop {max(places)}")
    until_rest = clock is None
    if clock is None:
        chosen = clock_of(structures, scenarios)
        if isinstance(chosen, Unsuited):
            raise ValueError(chosen.reason)
        clock = chosen
    columns = [BranchedColumn(structure, scenarios, clock) for structure in structures]
    plant = branched_plant_of(columns)
    cases = branched_cases_of(columns, parts=HORIZON_PARTS if until_rest else 0, band=SETTLING_BAND)
    read = _read(columns, plant, cases)
    # Curves that are drawn together end together; the figures were read where each had come to rest.
    end = max(round(metrics.horizon_s / clock.step_s) for metrics, _, _ in read)
    stride = math.ceil(end / POINTS_MOST) if until_rest else 1
    cases["steps"], cases["window"] = end, 0
    traces = _run(plant, cases, points=end // stride + 1, stride=stride)[3]
    time_s: FloatArray = stride * clock.step_s * np.arange(end // stride + 1, dtype=np.float64)
    time_s.flags.writeable = False
    each = iter(zip(traces, read, strict=True))
    return tuple(
        tuple(_response(column, scenario, time_s, *next(each)) for scenario in column.scenarios)
        for column in columns
    )


_Read = tuple[ResponseMetrics, FloatArray, "Records"]
"""Metrics, extremes and spells of one run."""


def _run(
    plant: BranchedPlant, cases: Records, *, points: int = 0, stride: int = 1
) -> tuple[Records, FloatArray, Records, FloatArray]:
    """Run cases; return their readings, extremes and spells, and so many points of their signals."""
    from loopdoc.engineering.scanning import READING, SPELL, run_branched

    structures = plant.structures
    elements = int((structures["elements_to"] - structures["elements_from"]).max())
    loops = int((structures["loops_to"] - structures["loops_from"]).max())
    readings, spells = np.zeros(len(cases), READING), np.zeros((len(cases), loops), SPELL)
    extremes = np.zeros((len(cases), elements + loops, 2))
    traces = np.zeros((len(cases), elements + 3 * loops, points))
    run_branched(*plant, cases, readings, extremes, spells, traces, stride)
    return readings, extremes, spells, traces


def _read(columns: Sequence[BranchedColumn], plant: BranchedPlant, cases: Records) -> list[_Read]:
    """Run the cases of columns and return what is read off them, column by column."""
    readings, extremes, spells, _ = _run(plant, cases)
    of_case = [(column, scenario) for column in columns for scenario in column.scenarios]
    has_reset = np.array([column.has_reset(scenario) for column, scenario in of_case])
    judge_at_the_end(cases, readings, has_reset, lambda known: _run(plant, known)[0])
    found = []
    for (column, scenario), case, reading, reached, commanded in zip(
        of_case, cases, readings.tolist(), extremes, spells, strict=True
    ):
        metrics = read_metrics(
            Reading(*reading),
            step_s=column.clock.step_s,
            setpoint_step_pct=float(case["setpoint"]),
            band_pct=float(case["band"]),
            has_reset=column.has_reset(scenario),
            executed_interval_s=column.executed_interval_s,
        )
        found.append((metrics, reached, commanded))
    return found


def _response(
    column: BranchedColumn, scenario: BranchedScenario, time_s: FloatArray, trace: FloatArray, read: _Read
) -> BranchedResponse:
    """One run's signals, the start added."""
    structure = column.structure
    elements, loops = len(structure.branches), len(structure.loops)
    metrics, extremes, spells = read
    openings = structure.openings_pct
    starts = [loop.start_pct for loop in structure.loops]

    def signals(row: int, start_pct: Sequence[float]) -> tuple[FloatArray, ...]:
        found = []
        for place, start in enumerate(start_pct):
            absolute: FloatArray = trace[row + place] + start
            absolute.flags.writeable = False
            found.append(absolute)
        return tuple(found)

    def reached(row: int, start_pct: Sequence[float]) -> tuple[tuple[float, float], ...]:
        return tuple(
            (start + float(extremes[row + place, 0]), start + float(extremes[row + place, 1]))
            for place, start in enumerate(start_pct)
        )

    def at_s(step: int) -> float:
        return step * column.clock.step_s if step >= 0 else math.inf

    return BranchedResponse(
        scenario=scenario,
        time_s=time_s,
        measurement_pct=signals(elements, starts),
        setpoint_pct=signals(elements + loops, starts),
        output_pct=signals(elements + 2 * loops, [structure.commanded_pct(place) for place in range(loops)]),
        travel_pct=signals(0, openings),
        measurement_range_pct=reached(elements, starts),
        travel_range_pct=reached(0, openings),
        spells=tuple(
            Spell(at_s(first), at_s(last), times) for first, last, times in spells[:loops].tolist()
        ),
        metrics=metrics,
    )


def clock_of(
    structures: Sequence[BranchedStructure], scenarios: Sequence[BranchedScenario]
) -> Clock | Unsuited:
    """Return the clock of structures that are compared: that of their chains, each branch by itself.

    It goes on for as long again after the last disturbance that passes.
    """
    (clock,) = choose_clocks([[chain for structure in structures for chain in _chains(structure)]])
    if isinstance(clock, Unsuited):
        return clock
    paths = [one.path for scenario in scenarios for one in scenario.disturbances if one.path is not None]
    clock = lasting(clock, max((LAGS_TO_ARRIVE * path.lag_sum_s for path in paths), default=0.0))
    until_s = max((scenario.lasts_s for scenario in scenarios if math.isfinite(scenario.lasts_s)), default=0.0)
    return lasting(clock, until_s + clock.steps * clock.step_s) if until_s else clock


def _chains(structure: BranchedStructure) -> list[ControlStructure]:
    """The chains of a branched structure, one for each final element below each of its outermost loops."""
    commanded = {loop.commands for loop in structure.loops}
    found = []
    for outermost in range(len(structure.loops)):
        if outermost in commanded:
            continue
        places = [outermost]
        while (below := structure.loops[places[-1]].commands) is not None:
            places.append(below)
        inner, *outer = (structure.loops[place] for place in reversed(places))
        for branch, process in zip(structure.branches, inner.processes, strict=True):
            processes: list[Process] = [process, *(loop.processes[0] for loop in outer)]
            controllers: list[Controller] = [loop.controller for loop in (inner, *outer)]
            controllers[0] = _on_branch(inner.controller, branch.opening.steepest)
            lead_lags = tuple(loop.lead_lags for loop in (inner, *outer))
            found.append(
                ControlStructure(
                    tuple(processes), tuple(controllers), branch.final_element, lead_lags=lead_lags
                )
            )
    return found


def _on_branch(controller: Controller, slope: float) -> Controller:
    """The controller in percent of the opening of a branch."""
    return on_secondary_range(controller, span_low_pct=0.0, span_high_pct=100.0 * slope)
