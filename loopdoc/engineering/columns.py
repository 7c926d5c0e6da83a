"""Structures and scenarios laid out as the arrays that the simulation runs on."""

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.clock import Clock
from loopdoc.engineering.lead_lag import LeadLag
from loopdoc.engineering.pid import Controller, scan_coefficients
from loopdoc.engineering.process import FloatArray, Process, state_space, transition
from loopdoc.engineering.scanning import (
    CASE,
    CONTROLLER,
    DISTURBANCE,
    FEEDFORWARD,
    PROCESS,
    STRUCTURE,
    Feed,
    Plant,
    Records,
)
from loopdoc.engineering.structure import ControlStructure, Feedforward, MeasuredMove, Scenario

IntArray = NDArray[np.int64]

# In the row of a measurement that is not controlled; nothing reads it.
_NO_CONTROLLER = Controller(1.0)


@dataclass(frozen=True, slots=True)
class Column:
    """One structure under some scenarios, on its clock."""

    structure: ControlStructure
    scenarios: Sequence[Scenario]
    clock: Clock

    @property
    def every(self) -> tuple[int, ...]:
        """Steps between scans, per process, 1 where it is not controlled."""
        return tuple(
            1 if controller is None else max(1, round(controller.interval_s / self.clock.step_s))
            for controller in self.structure.controllers
        )

    @property
    def executed_interval_s(self) -> tuple[float, ...]:
        """Interval at which each controller is executed, innermost first [s]."""
        return tuple(
            every * self.clock.step_s
            for every, controller in zip(self.every, self.structure.controllers, strict=True)
            if controller is not None
        )

    @property
    def has_reset(self) -> bool:
        """Whether the outermost measurement is controlled with integral action."""
        outermost = self.structure.controllers[-1]
        return outermost is not None and math.isfinite(outermost.reset_s)

    def setpoint_step_pct(self, scenario: Scenario) -> float:
        """The setpoint step of a scenario after the setpoint limits, 0 without a controller."""
        controlled = zip(self.structure.controllers, self.structure.start_pct, strict=True)
        controllers = [(controller, start) for controller, start in controlled if controller is not None]
        if not controllers:
            return 0.0
        outermost, start = controllers[-1]
        asked = start + scenario.setpoint_step_pct
        return min(max(asked, outermost.setpoint_low_pct), outermost.setpoint_high_pct) - start


    def fed_forward(self, scenario: Scenario) -> list[tuple[int, Feedforward, MeasuredMove]]:
        """The feedforwards that a scenario moves, each with the level that it joins, in the order of their joining."""
        moves = {move.measurement: move for move in scenario.moves}
        return [
            (level, one, moves[one.measurement])
            for level, (controller, ones) in enumerate(
                zip(self.structure.controllers, self.structure.feedforwards, strict=True)
            )
            if controller is not None
            for one in ones
            if one.measurement in moves
        ]

    def taken_pct(self, level: int) -> tuple[float, float]:
        """What the controller of a level may ask of the one below it, or of the final element, from the start."""
        structure = self.structure
        for below in range(level - 1, -1, -1):
            controller, start = structure.controllers[below], structure.start_pct[below]
            if controller is not None:
                return controller.setpoint_low_pct - start, controller.setpoint_high_pct - start
        return 0.0 - structure.final_element.start_pct, 100.0 - structure.final_element.start_pct


def disturbed_pct(scenario: Scenario) -> float:
    """Sum of the sizes of the disturbances [%]."""
    return math.fsum(abs(disturbance.size_pct) for disturbance in scenario.disturbances)


def filled(records: np.dtype[np.void], **fields: object) -> Records:
    """An array of records with the given values, all of one length."""
    length = len(fields[next(iter(fields))])  # type: ignore[arg-type]
    found = np.zeros(length, records)
    for name, values in fields.items():
        found[name] = values
    return found


@dataclass(frozen=True, slots=True, eq=False)
class Steps:
    """n linear systems over one time step each."""

    order: IntArray
    """(n,) number of states."""
    matrices: FloatArray
    """(n, m, m + 4) as `loopdoc.engineering.scanning` has them."""
    through: FloatArray
    """(n,) share of the input that is in the output without delay."""


def steps_over(
    processes: Sequence[Process], step_s: FloatArray, part: FloatArray, held: NDArray[np.bool_], size: FloatArray
) -> Steps:
    """Solve processes over a time step, for an input of that size, late by a part of it, held or straight between."""
    order = np.array([process.order for process in processes], dtype=np.int64)
    most = int(order.max(initial=0))
    matrices, through = np.zeros((len(processes), most, most + 4)), np.zeros(len(processes))
    for states in set(order.tolist()):
        rows = np.nonzero(order == states)[0]
        system = state_space([processes[row] for row in rows.tolist()])
        late, step = part[rows], step_s[rows]
        advance, whole, ramp = transition(system, step)
        remaining, after, _ = transition(system, (1.0 - late) * step)
        _, before, _ = transition(system, late * step)
        share = late[:, None]
        of_held = (after, np.einsum("nij,nj->ni", remaining, before), np.zeros_like(after))
        of_straight = (ramp * (1.0 - share), ramp * share + (whole - ramp) * (1.0 - share), (whole - ramp) * share)
        matrices[rows, :states, :states] = advance
        for tap, (one, other) in enumerate(zip(of_held, of_straight, strict=True)):
            matrices[rows, :states, most + tap] = np.where(held[rows, None], one, other) * size[rows, None]
        matrices[rows, :states, most + 3] = system.c
        through[rows] = system.d * size[rows]
    return Steps(order, matrices, through)


def _in_steps(dead_time_s: FloatArray, step_s: FloatArray) -> tuple[IntArray, FloatArray]:
    """Dead times as whole steps and the part of one that is left."""
    dead = dead_time_s / step_s
    # A dead time of a whole number of steps stays whole in spite of the division.
    whole = np.floor(dead + 1e-9)
    part = np.maximum(dead - whole, 0.0)
    part[part < 1e-9] = 0.0
    return whole.astype(np.int64), part


def process_records(
    processes: Sequence[Process], step_s: FloatArray, innermost: NDArray[np.bool_]
) -> tuple[Records, FloatArray]:
    """Return n processes as records, each for its time step [s], and their transition matrices as of `steps_over`.

    ``innermost`` (n,) marks those that a final element drives, whose input is held over a step.
    """
    whole, part = _in_steps(np.array([process.dead_time_s for process in processes]), step_s)
    steps = steps_over(processes, step_s, part, innermost, np.array([process.gain for process in processes]))
    # A held input acts from the step before, as what is held at this one is not known yet.
    delay = whole + innermost
    records = filled(
        PROCESS,
        through_now=np.where(innermost, steps.through, steps.through * (1.0 - part)),
        through_before=np.where(innermost, 0.0, steps.through * part),
        order=steps.order,
        delay=delay,
        # Room for what acts now and the two steps before it.
        last=[(1 << (one + 2).bit_length()) - 1 for one in delay.tolist()],
    )
    return records, steps.matrices


def lead_lag_shares(written: Sequence[tuple[LeadLag, ...]], interval_s: FloatArray) -> FloatArray:
    """Return the lead-lags of n controllers as (n, most of one, 2): lead over lag, and the share gone per interval [s].

    Those that a controller has fewer of are zeros.
    """
    found = np.zeros((len(written), max((len(ones) for ones in written), default=0), 2))
    for row, ones in enumerate(written):
        for i, one in enumerate(ones):
            # The lag is exact for an input that is held, as the measurement filter is.
            found[row, i] = one.lead_s / one.lag_s, -math.expm1(-interval_s[row] / one.lag_s)
    return found


def _controllers(
    columns: Sequence[Column], first: Sequence[int], interval_s: FloatArray, every: Sequence[int]
) -> Records:
    """Controllers as records, their limits taken from the start."""
    written = [one for column in columns for one in column.structure.controllers]
    commanded, commanded_pct = np.full(len(written), -1), np.zeros(len(written))
    for column, begin in zip(columns, first, strict=True):
        below, start_pct = -1, column.structure.final_element.start_pct
        for level, controller in enumerate(column.structure.controllers):
            commanded[begin + level], commanded_pct[begin + level] = below, start_pct
            if controller is not None:
                below, start_pct = begin + level, column.structure.start_pct[level]
    controllers = [one or _NO_CONTROLLER for one in written]
    measured_pct = np.array([start for column in columns for start in column.structure.start_pct])
    setpoint_low = np.array([one.setpoint_low_pct for one in controllers]) - measured_pct
    setpoint_high = np.array([one.setpoint_high_pct for one in controllers]) - measured_pct
    output_low = np.array([one.output_low_pct for one in controllers]) - commanded_pct
    output_high = np.array([one.output_high_pct for one in controllers]) - commanded_pct
    secondary = commanded >= 0
    return filled(
        CONTROLLER,
        **scan_coefficients(controllers, interval_s)._asdict(),
        setpoint_low=setpoint_low,
        setpoint_high=setpoint_high,
        output_low=output_low,
        output_high=output_high,
        followed_low=np.where(secondary, np.maximum(output_low, setpoint_low[commanded]), output_low),
        followed_high=np.where(secondary, np.minimum(output_high, setpoint_high[commanded]), output_high),
        controls=[one is not None for one in written],
        every=every,
        reverse=[one.gain > 0.0 for one in controllers],
        lead_lags=[len(ones) for column in columns for ones in column.structure.lead_lags],
    )


def _structures(columns: Sequence[Column], first: Sequence[int]) -> Records:
    elements = [column.structure.final_element for column in columns]
    start = np.array([element.start_pct for element in elements])
    step_s = np.array([column.clock.step_s for column in columns])
    with np.errstate(divide="ignore"):
        travel_per_step = 100.0 * step_s / np.array([element.stroke_time_s for element in elements])
    return filled(
        STRUCTURE,
        travel_per_step=travel_per_step,
        half_backlash=[element.backlash_pct / 2.0 for element in elements],
        resolution=[element.resolution_pct for element in elements],
        low=0.0 - start,
        high=100.0 - start,
        first=first,
        levels=[len(column.structure.processes) for column in columns],
        in_manual=[all(one is None for one in column.structure.controllers) for column in columns],
    )


def _disturbances(columns: Sequence[Column]) -> tuple[Records, FloatArray]:
    """The disturbances of every case, case by case."""
    arriving = [
        (one, one.path_through(column.structure.processes[one.level]), column.clock.step_s)
        for column in columns
        for scenario in column.scenarios
        for one in scenario.disturbances
    ]
    step_s = np.array([step_s for _, _, step_s in arriving])
    whole, part = _in_steps(np.array([one.dead_time_s for one, _, _ in arriving]), step_s)
    steps = steps_over(
        [path for _, path, _ in arriving],
        step_s,
        part,
        np.ones(len(arriving), dtype=np.bool_),
        np.array([path.gain * one.size_pct for one, path, _ in arriving]),
    )
    records = filled(
        DISTURBANCE,
        through=steps.through,
        level=[one.level for one, _, _ in arriving],
        order=steps.order,
        delay=whole,
        there=whole + (part > 0.0),
    )
    return records, steps.matrices


def _feed(columns: Sequence[Column]) -> Feed | None:
    """What the scenarios of every case bring to the outputs of controllers, case by case; None for nothing at all."""
    joining = [
        (column, level, one, move)
        for column in columns
        for scenario in column.scenarios
        for level, one, move in column.fed_forward(scenario)
    ]
    if not joining:
        return None
    steps = steps_over(
        [Process(1.0, (move.lag_s,) if move.lag_s else ()) for *_, move in joining],
        np.array([column.clock.step_s for column, *_ in joining]),
        np.zeros(len(joining)),
        np.ones(len(joining), dtype=np.bool_),
        np.array([one.brings(move.size_pct) for _, _, one, move in joining]),
    )
    interval_s = np.array([column.every[level] * column.clock.step_s for column, level, *_ in joining])
    taken = [column.taken_pct(level) for column, level, *_ in joining]
    records = filled(
        FEEDFORWARD,
        through=steps.through,
        factor=[0.0 if one.multiplied_pct is None else 1.0 for _, _, one, _ in joining],
        steady=[1.0 if one.multiplied_pct is None else one.multiplied_pct for _, _, one, _ in joining],
        taken_low=[low for low, _ in taken],
        taken_high=[high for _, high in taken],
        level=[level for _, level, *_ in joining],
        order=steps.order,
        joins=[one.joins for _, _, one, _ in joining],
        lead_lags=[len(one.lead_lags) for _, _, one, _ in joining],
    )
    return Feed(records, steps.matrices, lead_lag_shares([one.lead_lags for _, _, one, _ in joining], interval_s))


def plant_of(columns: Sequence[Column]) -> Plant:
    """Return the structures of columns, and the disturbances of their scenarios, as arrays."""
    counts = [len(column.structure.processes) for column in columns]
    first = [0, *itertools.accumulate(counts)][:-1]
    innermost = np.zeros(sum(counts), dtype=np.bool_)
    innermost[first] = True
    step_s = np.repeat([column.clock.step_s for column in columns], counts)
    every = [one for column in columns for one in column.every]
    interval_s = step_s * np.array(every)
    processes, matrices = process_records(
        [process for column in columns for process in column.structure.processes], step_s, innermost
    )
    disturbances, disturbance_matrices = _disturbances(columns)
    return Plant(
        structures=_structures(columns, first),
        processes=processes,
        matrices=matrices,
        controllers=_controllers(columns, first, interval_s, every),
        lead_lags=lead_lag_shares([ones for column in columns for ones in column.structure.lead_lags], interval_s),
        disturbances=disturbances,
        disturbance_matrices=disturbance_matrices,
        feed=_feed(columns),
    )


def cases_of(columns: Sequence[Column], *, parts: int, band: float) -> Records:
    """Return the scenarios of columns as runs, column by column.

    Runs are looked at for rest at so many ``parts`` of the horizon, 0 for not at all; settled is within ``band``, as
    a share of what upsets it, around the setpoint.
    """
    scenarios = [(column, scenario) for column in columns for scenario in column.scenarios]
    setpoint = np.array([column.setpoint_step_pct(scenario) for column, scenario in scenarios])
    disturbed = np.array([disturbed_pct(scenario) for _, scenario in scenarios])
    disturbances = [0, *itertools.accumulate(len(scenario.disturbances) for _, scenario in scenarios)]
    fed = [0, *itertools.accumulate(len(column.fed_forward(scenario)) for column, scenario in scenarios)]
    return filled(
        CASE,
        setpoint=setpoint,
        manual=[scenario.final_element_step_pct for _, scenario in scenarios],
        settled=setpoint,
        band=band * np.where(setpoint != 0.0, np.abs(setpoint), disturbed),
        structure=[place for place, column in enumerate(columns) for _ in column.scenarios],
        disturbed_from=disturbances[:-1],
        disturbed_to=disturbances[1:],
        fed_from=fed[:-1],
        fed_to=fed[1:],
        steps=[column.clock.steps for column, _ in scenarios],
        window=[column.clock.steps // parts if parts else 0 for column, _ in scenarios],
    )
