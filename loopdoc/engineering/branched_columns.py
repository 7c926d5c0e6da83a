"""Branched structures and their scenarios laid out as the arrays that the simulation runs on."""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from loopdoc.engineering.branched import BranchedScenario, BranchedStructure
from loopdoc.engineering.clock import Clock
from loopdoc.engineering.columns import filled, lead_lag_shares, process_records, steps_over
from loopdoc.engineering.pid import Controller, scan_coefficients
from loopdoc.engineering.process import FloatArray, Process
from loopdoc.engineering.scanning import (
    BRANCHED,
    BRANCHED_CASE,
    DISTURBANCE,
    ELEMENT,
    HOLDS,
    LOOP,
    PATH,
    PROCESS,
    TRACKS,
    WINDS_UP,
    BranchedPlant,
    Records,
)

_UNFOLLOWED = {"track": TRACKS, "hold": HOLDS, "nothing": WINDS_UP}


@dataclass(frozen=True, slots=True)
class BranchedColumn:
    """One branched structure under some scenarios, on its clock."""

    structure: BranchedStructure
    scenarios: Sequence[BranchedScenario]
    clock: Clock

    @property
    def every(self) -> tuple[int, ...]:
        """Steps between scans of each loop."""
        return tuple(
            max(1, round(loop.controller.interval_s / self.clock.step_s)) for loop in self.structure.loops
        )

    @property
    def executed_interval_s(self) -> tuple[float, ...]:
        """Interval at which each controller is executed [s]."""
        return tuple(every * self.clock.step_s for every in self.every)

    def has_reset(self, scenario: BranchedScenario) -> bool:
        """Whether the loop that is read has integral action."""
        return math.isfinite(self.structure.loops[scenario.read].controller.reset_s)

    def setpoint_step_pct(self, scenario: BranchedScenario) -> float:
        """The setpoint step after the setpoint limits."""
        loop = self.structure.loops[scenario.read]
        start = loop.start_pct + loop.start_error_pct
        asked = start + scenario.setpoint_step_pct
        return min(max(asked, loop.controller.setpoint_low_pct), loop.controller.setpoint_high_pct) - start


def start_of(column: BranchedColumn, place: int) -> tuple[float, float]:
    """Setpoint less measurement, and integral, of a loop before the upset [%], both from where all rests.

    A loop that commands has no error, and its output is what it commands. One that does not is at rest with its error:
    its integral then is what it tracks, or the output limit to which it has wound up.
    """
    loop = column.structure.loops[place]
    controller, error = loop.controller, loop.start_error_pct
    reached = 0.0
    if error and loop.unfollowed == "nothing" and math.isfinite(controller.reset_s):
        away = controller.output_high_pct if controller.gain * error > 0.0 else controller.output_low_pct
        reached = away - column.structure.commanded_pct(place)
    return error, reached + controller.gain * error * (1.0 - controller.setpoint_weight)


def _loops(columns: Sequence[BranchedColumn]) -> tuple[Records, FloatArray]:
    places = [(column, place) for column in columns for place in range(len(column.structure.loops))]
    loops = [column.structure.loops[place] for column, place in places]
    controllers: list[Controller] = [loop.controller for loop in loops]
    interval_s = np.array([interval for column in columns for interval in column.executed_interval_s])
    measured = np.array([loop.start_pct for loop in loops])
    commanded = np.array([column.structure.commanded_pct(place) for column, place in places])
    first = np.repeat(
        [0, *itertools.accumulate(len(column.structure.loops) for column in columns)][:-1],
        [len(column.structure.loops) for column in columns],
    )
    below = np.array([-1 if loop.commands is None else loop.commands for loop in loops]) + first
    below[[loop.commands is None for loop in loops]] = -1
    setpoint_low = np.array([one.setpoint_low_pct for one in controllers]) - measured
    setpoint_high = np.array([one.setpoint_high_pct for one in controllers]) - measured
    output_low = np.array([one.output_low_pct for one in controllers]) - commanded
    output_high = np.array([one.output_high_pct for one in controllers]) - commanded
    starts = [start_of(column, place) for column, place in places]
    records = filled(
        LOOP,
        **scan_coefficients(controllers, interval_s)._asdict(),
        setpoint_low=setpoint_low,
        setpoint_high=setpoint_high,
        output_low=output_low,
        output_high=output_high,
        followed_low=np.where(below >= 0, np.maximum(output_low, setpoint_low[below]), output_low),
        followed_high=np.where(below >= 0, np.minimum(output_high, setpoint_high[below]), output_high),
        controls=1,
        every=[every for column in columns for every in column.every],
        reverse=[one.gain > 0.0 for one in controllers],
        lead_lags=[len(loop.lead_lags) for loop in loops],
        reset_share=interval_s / (interval_s + np.array([one.reset_s for one in controllers])),
        start_setpoint=[error for error, _ in starts],
        start_integral=[integral for _, integral in starts],
        commands=[
            len(column.structure.loops) if (below := column.structure.loops[place].commands) is None else below
            for column, place in places
        ],
        prefers=[1 if column.structure.lowest else -1 for column, _ in places],
        unfollowed=[_UNFOLLOWED[loop.unfollowed] for loop in loops],
    )
    return records, lead_lag_shares([loop.lead_lags for loop in loops], interval_s)


def _paths(columns: Sequence[BranchedColumn]) -> tuple[Records, FloatArray]:
    written: list[tuple[Process, float, bool, int, int]] = [
        (process, column.clock.step_s, loop.commands is None, source if loop.commands is None else loop.commands, place)
        for column in columns
        for place, loop in enumerate(column.structure.loops)
        for source, process in enumerate(loop.processes)
    ]
    from_element = np.array([one for _, _, one, _, _ in written])
    processes, matrices = process_records(
        [process for process, *_ in written], np.array([step_s for _, step_s, *_ in written]), from_element
    )
    of_process = {name: processes[name] for name in PROCESS.names or ()}
    records = filled(
        PATH,
        **of_process,
        source=[source for *_, source, _ in written],
        from_element=from_element,
        loop=[place for *_, place in written],
    )
    return records, matrices


def _elements(columns: Sequence[BranchedColumn]) -> tuple[Records, FloatArray]:
    moved = [
        (branch, start, column)
        for column in columns
        for branch, start in zip(column.structure.branches, column.structure.openings_pct, strict=True)
    ]
    corners = np.array([len(branch.opening.inputs) for branch, _, _ in moved])
    openings = np.zeros((len(moved), int(corners.max()), 2))
    for row, (branch, start, column) in enumerate(moved):
        openings[row, : corners[row], 0] = np.array(branch.opening.inputs) - column.structure.output_pct
        openings[row, : corners[row], 1] = np.array(branch.opening.outputs) - start
    starts = np.array([start for _, start, _ in moved])
    step_s = np.array([column.clock.step_s for _, _, column in moved])
    with np.errstate(divide="ignore"):
        travel_per_step = 100.0 * step_s / np.array([branch.final_element.stroke_time_s for branch, _, _ in moved])
    records = filled(
        ELEMENT,
        travel_per_step=travel_per_step,
        half_backlash=[branch.final_element.backlash_pct / 2.0 for branch, _, _ in moved],
        resolution=[branch.final_element.resolution_pct for branch, _, _ in moved],
        low=0.0 - starts,
        high=100.0 - starts,
        corners=corners,
    )
    return records, openings


def _disturbances(columns: Sequence[BranchedColumn]) -> tuple[Records, FloatArray]:
    arriving = [
        (one, one.path_through(column.structure.loops[one.level].processes[0]), column.clock.step_s)
        for column in columns
        for scenario in column.scenarios
        for one in scenario.disturbances
    ]
    steps = steps_over(
        [path for _, path, _ in arriving],
        np.array([step_s for _, _, step_s in arriving]),
        np.zeros(len(arriving)),
        np.ones(len(arriving), dtype=np.bool_),
        np.array([path.gain * one.size_pct for one, path, _ in arriving]),
    )
    records = filled(
        DISTURBANCE, through=steps.through, level=[one.level for one, _, _ in arriving], order=steps.order
    )
    return records, steps.matrices


def branched_plant_of(columns: Sequence[BranchedColumn]) -> BranchedPlant:
    """Return the branched structures of columns, and the disturbances of their scenarios, as arrays."""
    elements = [0, *itertools.accumulate(len(column.structure.branches) for column in columns)]
    paths = [
        0,
        *itertools.accumulate(sum(len(loop.processes) for loop in column.structure.loops) for column in columns),
    ]
    loops = [0, *itertools.accumulate(len(column.structure.loops) for column in columns)]
    structures = filled(
        BRANCHED,
        elements_from=elements[:-1], elements_to=elements[1:],
        paths_from=paths[:-1], paths_to=paths[1:],
        loops_from=loops[:-1], loops_to=loops[1:],
    )  # fmt: skip
    return BranchedPlant(
        structures, *_elements(columns), *_paths(columns), *_loops(columns), *_disturbances(columns)
    )


def branched_cases_of(columns: Sequence[BranchedColumn], *, parts: int, band: float) -> Records:
    """Return the scenarios of columns as runs, column by column; ``parts`` and ``band`` as of a chain."""
    scenarios = [(column, scenario) for column in columns for scenario in column.scenarios]
    setpoint = np.array([column.setpoint_step_pct(scenario) for column, scenario in scenarios])
    disturbed = np.array([math.fsum(abs(one.size_pct) for one in scenario.disturbances) for _, scenario in scenarios])
    counted = [0, *itertools.accumulate(len(scenario.disturbances) for _, scenario in scenarios)]
    return filled(
        BRANCHED_CASE,
        setpoint=setpoint,
        settled=setpoint,
        band=band * np.where(setpoint != 0.0, np.abs(setpoint), disturbed),
        structure=[place for place, column in enumerate(columns) for _ in column.scenarios],
        read=[scenario.read for _, scenario in scenarios],
        passes=[
            round(scenario.lasts_s / column.clock.step_s) if math.isfinite(scenario.lasts_s) else -1
            for column, scenario in scenarios
        ],
        disturbed_from=counted[:-1],
        disturbed_to=counted[1:],
        steps=[column.clock.steps for column, _ in scenarios],
        window=[column.clock.steps // parts if parts else 0 for column, _ in scenarios],
    )
