"""Many steps at once of one control structure while no limit acts: the engine's own steps, as one matrix.

As long as nothing is limited, the signals of the next steps are linear in what the engine remembers, in the
setpoint and in the disturbances of those steps. The matrix is found by running the engine itself from each
unit of these; its rows are the signals. A block in which a limit would act is left to the engine.
"""

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from loopdoc.engineering.disturbance_signals import KnownSignals
from loopdoc.engineering.plant_arrays import still
from loopdoc.engineering.process import FloatArray
from loopdoc.engineering.scanning import ControllerArrays, Engine, Traces

# Steps of a block: long enough to win over single steps, short enough for a small matrix.
_STEPS = 64
# Fewer blocks than this do not repay the making of the matrix.
_BLOCKS_WORTH = 6


def _intervals(engine: Engine) -> list[int] | None:
    """Steps between scans of each controller; None where the columns are scanned unlike each other."""
    every = [arrays.every for _, arrays in engine.loops.controlled]
    alike = [one for one in every if isinstance(one, int)]
    return alike if len(alike) == len(every) else None


def _unlimited(arrays: ControllerArrays, columns: int) -> ControllerArrays:
    """The controller of the first column, without its limits, in so many columns."""
    below, above = np.full(columns, -math.inf), np.full(columns, math.inf)
    return replace(
        arrays.take(np.zeros(columns, dtype=np.intp)),
        output_low_pct=below,
        output_high_pct=above,
        setpoint_low_pct=below,
        setpoint_high_pct=above,
    )


class LinearBlocks:
    """Advances an engine, all columns of which are the same structure on the same clock, by blocks."""

    def __init__(self, engine: Engine, every: Sequence[int]) -> None:
        """``every`` holds the steps between scans of each controller, innermost first."""
        self._engine = engine
        # A block must find the controllers where it was made: at a step at which all that act within it are due.
        # Those that are scanned more seldom must not be due: what they ask for is held.
        self._seldom = [one for one in every if one > _STEPS]
        self._together = together = math.lcm(*(one for one in every if one <= _STEPS))
        self.steps = together * math.ceil(_STEPS / together)
        self._disturbed = {
            level: signals.rows
            for level, signals in enumerate(engine.disturbances)
            if isinstance(signals, KnownSignals)
        }
        memory = len(self._memory(engine))
        columns = memory + 1 + self.steps * len(self._disturbed)
        twin = self._unlimited_twin(columns, memory)
        self._set_memory(twin, np.eye(memory, columns))
        for _ in range(self.steps):
            twin.advance()
        traces = twin.traces(self.steps)
        signals = (*traces.measurement_pct, *traces.setpoint_pct, *traces.output_pct)
        self._matrix = np.concatenate([*(signal[1:] for signal in signals), self._short_memory(twin)])

    def _unlimited_twin(self, columns: int, memory: int) -> Engine:
        """The same structure in many columns, without limits; unit setpoint and disturbances after the memory."""
        engine = self._engine
        setpoint = np.zeros(columns)
        setpoint[memory] = 1.0
        disturbances: list[KnownSignals | None] = [None] * len(engine.plants)
        for position, level in enumerate(self._disturbed):
            unit = np.zeros((self.steps + 1, columns))
            first = memory + 1 + position * self.steps
            unit[1:, first : first + self.steps] = np.eye(self.steps)
            disturbances[level] = KnownSignals(unit)
        controllers = dict(engine.loops.controlled)
        return Engine(
            plants=[plant.take(np.zeros(columns, dtype=np.intp)) for plant in engine.plants],
            controllers=[
                self._undisturbed(controllers[level], columns) if level in controllers else None
                for level in range(len(engine.plants))
            ],
            final_element=still(columns),
            setpoint_step_pct=setpoint,
            disturbances=disturbances,
            room=self.steps,
            keep_signals=True,
        )

    def _undisturbed(self, arrays: ControllerArrays, columns: int) -> ControllerArrays:
        """The controller without limits; one that is scanned seldom holds its output throughout a block."""
        unlimited = _unlimited(arrays, columns)
        return replace(unlimited, every=self.steps + 1) if unlimited.every in self._seldom else unlimited

    @staticmethod
    def _short_memory(engine: Engine) -> FloatArray:
        """States of the processes and memories of the controllers, a row each."""
        rows = [value for plant in engine.plants for value in plant.state]
        for loop, memory in enumerate(engine.loops.memory):
            rows += [memory.integral, memory.filtered, memory.derivative, memory.derivative_input]
            rows += [engine.loops.setpoint[loop], engine.loops.output[loop]]
        return np.array(rows)

    @staticmethod
    def _set_short_memory(engine: Engine, rows: FloatArray) -> None:
        values = iter(rows)
        for plant in engine.plants:
            for state in plant.state:
                np.copyto(state, next(values))
            plant.forget_rows()
        for loop, memory in enumerate(engine.loops.memory):
            for kept in (memory.integral, memory.filtered, memory.derivative, memory.derivative_input):
                np.copyto(kept, next(values))
            np.copyto(engine.loops.setpoint[loop], next(values))
            np.copyto(engine.loops.output[loop], next(values))
            np.copyto(memory.output, engine.loops.output[loop])

    def _windows(self, engine: Engine) -> list[FloatArray]:
        """The past inputs of each process that come out of its dead time within a block, as views."""
        sources = ((engine.travel, engine.travel_pad), *zip(engine.measured, engine.pads, strict=True))
        windows = []
        for (source, pad), plant in zip(sources, engine.plants, strict=False):
            now = pad + engine.step
            first = now - int(plant.whole[0]) - 1
            windows.append(source[first : min(first + self.steps + 2, now + 1)])
        return windows

    def _memory(self, engine: Engine) -> FloatArray:
        return np.concatenate([self._short_memory(engine), *self._windows(engine)])

    def _set_memory(self, engine: Engine, rows: FloatArray) -> None:
        short = len(self._short_memory(engine))
        self._set_short_memory(engine, rows[:short])
        for window in self._windows(engine):
            window[:] = rows[short : short + len(window)]
            short += len(window)

    def steps_until_worth(self) -> int:
        """Single steps to take before the next block is tried, where one could not be advanced."""
        step = self._engine.step
        due = [every - step % every for every in self._seldom if step % every + self.steps >= every]
        # A controller that is scanned seldom must have been due; what is limited now will be so for a few steps.
        return max(due, default=16)

    def advance(self) -> bool:
        """Advance by a block, or leave all as it is and return False where something would not be linear."""
        engine, steps = self._engine, self.steps
        if engine.step % self._together or engine.loops.limited:
            return False
        if any(engine.step % every + steps >= every for every in self._seldom):
            return False
        now = engine.step
        upsets = [rows[now + 1 : now + steps + 1] for rows in self._disturbed.values()]
        found = self._matrix @ np.concatenate([self._memory(engine), engine.setpoint[None], *upsets])
        levels, loops = len(engine.measured), len(engine.loops.controlled)
        count = levels + 2 * loops
        signals = found[: count * steps].reshape(count, steps, -1)
        measured, setpoints, outputs = np.split(signals, [levels, levels + loops])
        for (_, arrays), setpoint, output in zip(engine.loops.controlled, setpoints, outputs, strict=True):
            if (
                (output < arrays.output_low_pct)
                | (output > arrays.output_high_pct)
                | (setpoint < arrays.setpoint_low_pct)
                | (setpoint > arrays.setpoint_high_pct)
            ).any():
                return False
        if not engine.element.follows(outputs[0]):
            return False
        for history, pad, values in zip(engine.measured, engine.pads, measured, strict=True):
            history[pad + now + 1 : pad + now + steps + 1] = values
        engine.travel[engine.travel_pad + now + 1 : engine.travel_pad + now + steps + 1] = outputs[0]
        for kept, values in zip(engine.kept_setpoint, setpoints, strict=False):
            kept[now + 1 : now + steps + 1] = values
        for kept, values in zip(engine.kept_output, outputs, strict=False):
            kept[now + 1 : now + steps + 1] = values
        self._set_short_memory(engine, found[count * steps :])
        engine.element.rest_at(outputs[0][-1])
        engine.step += steps
        return True


class Run:
    """An engine on its way, by blocks where its columns are all one structure and by steps elsewhere."""

    def __init__(self, engine: Engine, *, one_structure: bool) -> None:
        self._engine = engine
        every = _intervals(engine) if one_structure and engine.loops.controlled else None
        self._blocks = (
            LinearBlocks(engine, every)
            if every is not None
            and math.lcm(*(one for one in every if one <= _STEPS)) <= 4 * _STEPS
            and all(one <= _STEPS or one >= 2 * _STEPS for one in every)
            and not engine.element.loose
            and engine.room >= _BLOCKS_WORTH * _STEPS
            else None
        )

    def to(self, step: int) -> Traces:
        """Advance the engine to a step, if it is not there yet, and return the signals up to it."""
        engine, blocks = self._engine, self._blocks
        by_steps = 0
        while engine.step < step:
            if by_steps == 0 and blocks is not None and step - engine.step >= blocks.steps:
                if blocks.advance():
                    continue
                by_steps = blocks.steps_until_worth()
            engine.advance()
            by_steps = max(0, by_steps - 1)
        return engine.traces(step)
