"""Structures under scenarios as columns of the engine: what each consists of, and which run together."""

import math
from collections import defaultdict
from collections.abc import Callable, Hashable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from loopdoc.engineering.clock import Clock
from loopdoc.engineering.disturbance_signals import ArrivingStep, DisturbanceSignals, KnownSignals, known_throughout
from loopdoc.engineering.plant_arrays import FinalElementArrays, ProcessArrays
from loopdoc.engineering.process import FloatArray
from loopdoc.engineering.scanning import ControllerArrays, Engine, controller_arrays
from loopdoc.engineering.structure import ControlStructure, Scenario

# So many columns that are alike repay a run of their own.
_WORTH_A_RUN = 3000
# Steps of a disturbance that are found at once where it is wanted in full.
_BLOCK = 64


@dataclass(frozen=True, slots=True)
class Column:
    """One structure under one scenario: a column of the engine."""

    place: tuple[int, int, int]
    """Group, structure and scenario."""
    structure: ControlStructure
    scenario: Scenario
    clock: Clock

    @property
    def every(self) -> tuple[int, ...]:
        """Steps between scans, per process, 0 where it is not controlled."""
        return tuple(
            0 if controller is None else max(1, round(controller.interval_s / self.clock.step_s))
            for controller in self.structure.controllers
        )

    @property
    def executed_interval_s(self) -> tuple[float, ...]:
        """Interval at which each controller is executed, innermost first [s]."""
        return tuple(every * self.clock.step_s for every in self.every if every)

    @property
    def disturbed_pct(self) -> float:
        """Sum of the sizes of the disturbances [%]."""
        return math.fsum(abs(disturbance.size_pct) for disturbance in self.scenario.disturbances)

    @property
    def upset_pct(self) -> float:
        """Size of what its settling is measured by: an accepted setpoint step, else the disturbances [%]."""
        return abs(setpoint_step_pct(self)) or self.disturbed_pct

def setpoint_step_pct(column: Column) -> float:
    """The setpoint step of a column after the setpoint limits, 0 without a controller."""
    controllers = [
        (controller, start)
        for controller, start in zip(column.structure.controllers, column.structure.start_pct, strict=True)
        if controller is not None
    ]
    if not controllers:
        return 0.0
    outermost, start = controllers[-1]
    asked = start + column.scenario.setpoint_step_pct
    return min(max(asked, outermost.setpoint_low_pct), outermost.setpoint_high_pct) - start


def outermost_has_reset(column: Column) -> bool:
    """Whether the outermost measurement is controlled with integral action."""
    outermost = column.structure.controllers[-1]
    return outermost is not None and math.isfinite(outermost.reset_s)


def _shape(column: Column) -> Hashable:
    """What columns must share to be run together at all: which levels are controlled."""
    return tuple(controller is None for controller in column.structure.controllers)


# What columns gain by sharing, from the most to the least: what only some have is calculated for all in a run.
_LIKENESS: tuple[Callable[[Column], Hashable], ...] = (
    lambda column: column.every,
    lambda column: any(c is not None and c.rate_s > 0.0 for c in column.structure.controllers),
    lambda column: tuple(process.order for process in column.structure.processes),
    lambda column: (column.structure.final_element.backlash_pct, column.structure.final_element.resolution_pct)
    == (0.0, 0.0),
    lambda column: column.structure.final_element.stroke_time_s > 0.0,
)


def _alike(members: list[Column], likeness: Sequence[Callable[[Column], Hashable]]) -> Iterator[list[Column]]:
    """Columns put with their like as long as enough are alike; the few that remain are run together."""
    if not likeness or len(members) < _WORTH_A_RUN:
        yield members
        return
    found: dict[Hashable, list[Column]] = defaultdict(list)
    for column in members:
        found[likeness[0](column)].append(column)
    few: list[Column] = []
    for part in found.values():
        if len(part) < _WORTH_A_RUN:
            few += part
        else:
            yield from _alike(part, likeness[1:])
    if few:
        yield from _alike(few, likeness[1:])


def batches(
    columns: Sequence[Column], *, most_columns: int | None = None, kept_numbers: int | None = None
) -> list[list[Column]]:
    """Columns that can run together, of like length; no more at once than given, or than memory should hold."""
    by_shape: dict[Hashable, list[Column]] = defaultdict(list)
    for column in columns:
        by_shape[_shape(column)].append(column)
    found = []
    for members in (part for shaped in by_shape.values() for part in _alike(shaped, _LIKENESS)):
        members.sort(key=lambda column: column.clock.steps)
        batch: list[Column] = []
        for column in members:
            signals = 4 * len(column.structure.processes)
            full = most_columns is not None and len(batch) >= most_columns
            full = full or (
                kept_numbers is not None and (len(batch) + 1) * column.clock.steps * signals > kept_numbers
            )
            if batch and full:
                found.append(batch)
                batch = []
            batch.append(column)
        found.append(batch)
    return found


def _disturbances(columns: Sequence[Column], level: int, block: int) -> DisturbanceSignals | None:
    """What reaches the measurement of a level from outside."""
    arriving = [
        ArrivingStep(
            position,
            disturbance.path_through(column.structure.processes[level]),
            disturbance.size_pct,
            column.clock.step_s,
        )
        for position, column in enumerate(columns)
        for disturbance in column.scenario.disturbances
        if disturbance.level == level and disturbance.size_pct
    ]
    return DisturbanceSignals(arriving, block) if arriving else None


def _final_elements(columns: Sequence[Column], step_s: FloatArray) -> FinalElementArrays:
    elements = [column.structure.final_element for column in columns]
    start = np.array([element.start_pct for element in elements])
    stroke_s = np.array([element.stroke_time_s for element in elements])
    with np.errstate(divide="ignore"):
        travel_per_step = 100.0 * step_s / stroke_s
    return FinalElementArrays(
        step_pct=np.array([column.scenario.final_element_step_pct for column in columns]),
        travel_per_step_pct=travel_per_step,
        half_backlash_pct=np.array([element.backlash_pct / 2.0 for element in elements]),
        resolution_pct=np.array([element.resolution_pct for element in elements]),
        low_pct=0.0 - start,
        high_pct=100.0 - start,
    )


def engine(columns: Sequence[Column], *, room: int, keep_signals: bool, block: int = _BLOCK) -> Engine:
    """Return the engine that runs columns in which the same levels are controlled.

    ``room`` is as for `Engine`, ``block`` the number of steps by which disturbances are found.
    """
    structures = [column.structure for column in columns]
    step_s = np.array([column.clock.step_s for column in columns])
    controllers: list[ControllerArrays | None] = []
    commanded = np.array([structure.final_element.start_pct for structure in structures])
    for level in range(len(structures[0].controllers)):
        measured = np.array([structure.start_pct[level] for structure in structures])
        at_level = [c for c in (structure.controllers[level] for structure in structures) if c is not None]
        if not at_level:
            controllers.append(None)
            continue
        controllers.append(
            controller_arrays(
                at_level,
                step_s=step_s,
                every=[column.every[level] for column in columns],
                output_start_pct=commanded,
                setpoint_start_pct=measured,
            )
        )
        commanded = measured
    disturbances: list[DisturbanceSignals | KnownSignals | None] = []
    for level in range(len(controllers)):
        signals = _disturbances(columns, level, block)
        disturbances.append(
            known_throughout(signals, len(columns), room) if signals and keep_signals else signals
        )
    return Engine(
        plants=[
            ProcessArrays(
                [structure.processes[level] for structure in structures], step_s, held_input=level == 0
            )
            for level in range(len(controllers))
        ],
        controllers=controllers,
        final_element=_final_elements(columns, step_s),
        setpoint_step_pct=np.array([column.scenario.setpoint_step_pct for column in columns]),
        disturbances=disturbances,
        room=room,
        keep_signals=keep_signals,
    )
