"""Many steps at once of one control structure while no limit acts: the engine's own steps, as one matrix.

As long as nothing is limited, the signals of the next steps are linear in what the engine remembers, in the
setpoint and in the disturbances of those steps. The matrix is found by running the engine itself from each
unit of these; its rows are the signals. A block in which a limit would act is left to the engine.
"""

import math

import numpy as np

from loopdoc.engineering.process import FloatArray
from loopdoc.engineering.scanning import Engine, FinalElementArrays, Traces

# Steps of a block: long enough to win over single steps, short enough for a small matrix.
_STEPS = 64
# Fewer blocks than this do not repay the making of the matrix.
_BLOCKS_WORTH = 6
# Dead times of so many steps would make the matrix too large.
_MEMORY_MOST = 1000


class LinearBlocks:
    """Advances an engine, all columns of which are the same structure on the same clock, by blocks."""

    def __init__(self, engine: Engine) -> None:
        self._engine = engine
        # A block must find the controllers where it was made: at a step at which all are due.
        together = math.lcm(*(arrays.every for _, arrays in engine.loops.controlled))
        self._together = together
        self.steps = together * math.ceil(_STEPS / together)
        self._disturbed = [level for level, signal in enumerate(engine.disturbances) if signal is not None]
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
        disturbances: list[FloatArray | None] = [None] * len(engine.plants)
        for position, level in enumerate(self._disturbed):
            unit = np.zeros((self.steps + 1, columns))
            first = memory + 1 + position * self.steps
            unit[1:, first : first + self.steps] = np.eye(self.steps)
            disturbances[level] = unit
        controllers = dict(engine.loops.controlled)
        return Engine(
            plants=[plant.repeated(columns) for plant in engine.plants],
            controllers=[
                controllers[level].unlimited(columns) if level in controllers else None
                for level in range(len(engine.plants))
            ],
            final_element=FinalElementArrays(
                step_pct=np.zeros(columns),
                travel_per_step_pct=np.full(columns, math.inf),
                half_backlash_pct=np.zeros(columns),
                low_pct=np.full(columns, -math.inf),
                high_pct=np.full(columns, math.inf),
            ),
            setpoint_step_pct=setpoint,
            disturbances_pct=disturbances,
            steps=self.steps,
            keep_signals=True,
        )

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
            plant.state = [next(values) for _ in plant.state]
        for loop, memory in enumerate(engine.loops.memory):
            memory.integral, memory.filtered = next(values), next(values)
            memory.derivative, memory.derivative_input = next(values), next(values)
            engine.loops.setpoint[loop], engine.loops.output[loop] = next(values), next(values)
            engine.loops.computed[loop] = engine.loops.output[loop]

    @staticmethod
    def _windows(engine: Engine) -> list[FloatArray]:
        """The past inputs of each process that its dead time still holds, as views."""
        row = engine.pad + engine.step
        sources = (engine.travel, *engine.measured[:-1])
        return [
            source[row - int(plant.whole[0]) - 1 : row + 1]
            for source, plant in zip(sources, engine.plants, strict=True)
        ]

    def _memory(self, engine: Engine) -> FloatArray:
        return np.concatenate([self._short_memory(engine), *self._windows(engine)])

    def _set_memory(self, engine: Engine, rows: FloatArray) -> None:
        short = len(self._short_memory(engine))
        self._set_short_memory(engine, rows[:short])
        for window in self._windows(engine):
            window[:] = rows[short : short + len(window)]
            short += len(window)

    def advance(self) -> bool:
        """Advance by a block, or leave all as it is and return False where something would not be linear."""
        engine, steps = self._engine, self.steps
        if engine.step % self._together or any(engine.loops.limited):
            return False
        now, row = engine.step, engine.pad + engine.step
        upsets = [signal[now + 1 : now + steps + 1] for signal in engine.disturbances if signal is not None]
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
        for history, values in zip(engine.measured, measured, strict=True):
            history[row + 1 : row + steps + 1] = values
        engine.travel[row + 1 : row + steps + 1] = outputs[0]
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
        may = (
            one_structure
            and bool(engine.loops.controlled)
            and not engine.element.loose
            and engine.steps >= _BLOCKS_WORTH * _STEPS
            and sum(int(plant.whole[0]) for plant in engine.plants) <= _MEMORY_MOST
            and math.lcm(*(arrays.every for _, arrays in engine.loops.controlled)) <= 4 * _STEPS
        )
        self._blocks = LinearBlocks(engine) if may else None

    def to(self, step: int) -> Traces:
        """Advance the engine to a step, if it is not there yet, and return the signals up to it."""
        engine, blocks = self._engine, self._blocks
        by_steps = 0
        while engine.step < step:
            if by_steps == 0 and blocks is not None and step - engine.step >= blocks.steps:
                if blocks.advance():
                    continue
                # What is not linear now will hardly be so in the next few steps.
                by_steps = 16
            engine.advance()
            by_steps = max(0, by_steps - 1)
        return engine.traces(step)
