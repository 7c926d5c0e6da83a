"""The scan-by-scan engine: many control structures of one pattern advanced together in time.

All signals are deviations from the start, in percent. Within a scan the measurements are read, the
controllers act from the outermost inward, the final element moves, and the processes advance. The
output of a controller is held until its next scan; the processes are solved exactly for a held input
(the final element) or for one that is straight between steps (a secondary measurement).
"""

import copy
import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.pid import (
    Controller,
    ScanCoefficients,
    ScanState,
    repeated_coefficients,
    scan,
    scan_coefficients,
    track,
)
from loopdoc.engineering.process import FloatArray, Process, state_space, transition

IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True, eq=False)
class FinalElementArrays:
    """Final elements of n columns; every array is (n,), deviations from the start."""

    step_pct: FloatArray
    """Step of the final element where no controller moves it [%]."""
    travel_per_step_pct: FloatArray
    """Largest travel within a time step [%]; infinite where the stroke takes no time."""
    half_backlash_pct: FloatArray
    """Half of the backlash [%]."""
    low_pct: FloatArray
    """Fully closed [%]."""
    high_pct: FloatArray
    """Fully open [%]."""


@dataclass(frozen=True, slots=True, eq=False)
class ControllerArrays:
    """Controllers of one level of n columns; every array is (n,), deviations from the start."""

    coefficients: ScanCoefficients
    every: int
    """Time steps between scans."""
    output_low_pct: FloatArray
    """Lower output limit [%]."""
    output_high_pct: FloatArray
    """Upper output limit [%]."""
    setpoint_low_pct: FloatArray
    """Lower setpoint limit [%]."""
    setpoint_high_pct: FloatArray
    """Upper setpoint limit [%]."""
    reverse: NDArray[np.bool_]
    """True where the output falls as the measurement rises."""

    def unlimited(self, columns: int) -> "ControllerArrays":
        """The controller of the first column, without its limits, in so many columns."""
        return ControllerArrays(
            coefficients=repeated_coefficients(self.coefficients, columns),
            every=self.every,
            output_low_pct=np.full(columns, -math.inf),
            output_high_pct=np.full(columns, math.inf),
            setpoint_low_pct=np.full(columns, -math.inf),
            setpoint_high_pct=np.full(columns, math.inf),
            reverse=np.full(columns, self.reverse[0]),
        )


def controller_arrays(
    controllers: Sequence[Controller],
    *,
    interval_s: FloatArray,
    every: int,
    output_start_pct: FloatArray,
    setpoint_start_pct: FloatArray,
) -> ControllerArrays:
    """Return the controllers of one level as arrays, their limits taken from the start."""
    return ControllerArrays(
        coefficients=scan_coefficients(controllers, interval_s),
        every=every,
        output_low_pct=np.array([c.output_low_pct for c in controllers]) - output_start_pct,
        output_high_pct=np.array([c.output_high_pct for c in controllers]) - output_start_pct,
        setpoint_low_pct=np.array([c.setpoint_low_pct for c in controllers]) - setpoint_start_pct,
        setpoint_high_pct=np.array([c.setpoint_high_pct for c in controllers]) - setpoint_start_pct,
        reverse=np.array([c.gain > 0.0 for c in controllers]),
    )


class ProcessArrays:
    """One process level of n columns: its state, and how the delayed input moves it within a step."""

    def __init__(self, processes: Sequence[Process], step_s: FloatArray, *, held_input: bool) -> None:
        system = state_space(processes)
        gain = np.array([process.gain for process in processes])
        steps = np.array([process.dead_time_s for process in processes]) / step_s
        # A dead time of a whole number of steps stays whole in spite of the division.
        whole = np.floor(steps + 1e-9).astype(np.intp)
        part = np.maximum(steps - whole, 0.0)
        part[part < 1e-9] = 0.0
        advance, held, ramp = transition(system, step_s)
        order = system.b.shape[1]
        if held_input:
            late_advance, late, _ = transition(system, (1.0 - part) * step_s)
            _, early, _ = transition(system, part * step_s)
            carried = np.einsum("nij,nj->ni", late_advance, early)
            state_taps = [np.zeros_like(late), late, carried]
            output_taps = [np.zeros_like(part), system.d, np.zeros_like(part)]
        else:
            share = part[:, None]
            state_taps = [
                ramp * (1.0 - share),
                ramp * share + (held - ramp) * (1.0 - share),
                (held - ramp) * share,
            ]
            output_taps = [system.d * (1.0 - part), system.d * part, np.zeros_like(part)]
        self.order = order
        self.whole = whole
        self.state = [np.zeros(len(processes)) for _ in range(order)]
        self._advance = [[advance[:, i, j].copy() for j in range(i + 1)] for i in range(order)]
        self._taps = [
            (
                tap,
                [(state_taps[tap][:, i] * gain) for i in range(order)],
                output_taps[tap] * gain if output_taps[tap].any() else None,
            )
            for tap in range(3)
            if state_taps[tap].any() or output_taps[tap].any()
        ]
        self._weights = [system.c[:, i].copy() for i in range(order)]
        self._plain = order > 0 and bool(
            np.all(system.c[:, :-1] == 0.0) and np.all(system.c[:, -1] == 1.0) and not system.d.any()
        )
        self._same = int(whole[0]) if (whole == whole[0]).all() else None
        # Where each column finds its delayed input in the rows from the longest dead time on, laid end to end.
        self._longest = int(whole.max())
        self._places = (self._longest - whole) * len(processes) + np.arange(len(processes))

    def repeated(self, columns: int) -> "ProcessArrays":
        """The process of the first column, at rest, in so many columns."""

        def repeat(values: FloatArray) -> FloatArray:
            return np.full(columns, values[0])

        other = copy.copy(self)
        other.whole = np.full(columns, self.whole[0])
        other.state = [np.zeros(columns) for _ in self.state]
        other._advance = [[repeat(factor) for factor in row] for row in self._advance]
        other._taps = [
            (tap, [repeat(share) for share in state], None if through is None else repeat(through))
            for tap, state, through in self._taps
        ]
        other._weights = [repeat(weight) for weight in self._weights]
        other._same = int(self.whole[0])
        return other

    def _delayed(self, history: FloatArray, row: int, tap: int) -> FloatArray:
        if self._same is not None:
            view: FloatArray = history[row - self._same - tap]
            return view
        earliest = history[row - self._longest - tap : row - tap + 1].reshape(-1)
        gathered: FloatArray = earliest.take(self._places)
        return gathered

    def feedthrough(self, history: FloatArray, row: int) -> FloatArray:
        """(n,) output at ``row`` [%] while the state is at rest."""
        output = np.zeros(len(self.whole))
        for tap, _, through in self._taps:
            if through is not None:
                output = output + through * self._delayed(history, row, tap)
        return output

    def advance(self, history: FloatArray, row: int) -> FloatArray:
        """Advance the state by one step, to ``row`` of the input history, and return the (n,) output [%]."""
        inputs = [(self._delayed(history, row, tap), state, through) for tap, state, through in self._taps]
        if self._plain and self.order == 1:
            value = self._advance[0][0] * self.state[0]
            for delayed, tap, _ in inputs:
                value += tap[0] * delayed
            self.state[0] = value
            return value
        new = []
        for i, factors in enumerate(self._advance):
            value = factors[0] * self.state[0]
            for j in range(1, i + 1):
                value = value + factors[j] * self.state[j]
            for delayed, tap, _ in inputs:
                value = value + tap[i] * delayed
            new.append(value)
        self.state = new
        if self._plain:
            return new[-1]
        output = np.zeros(len(self.whole))
        for weight, value in zip(self._weights, new, strict=True):
            output = output + weight * value
        for delayed, _, through in inputs:
            if through is not None:
                output = output + through * delayed
        return output


class MovingElement:
    """Stroke rate and backlash between the signal and the travel of the final element."""

    def __init__(self, arrays: FinalElementArrays, innermost: ControllerArrays | None) -> None:
        self._arrays = arrays
        # Output limits inside the travel leave nothing for its ends to do.
        self._ends = innermost is None or bool(
            np.any(innermost.output_low_pct < arrays.low_pct)
            or np.any(innermost.output_high_pct > arrays.high_pct)
        )
        self._rated = bool(np.isfinite(arrays.travel_per_step_pct).any())
        self.loose = bool((arrays.half_backlash_pct > 0.0).any())
        self._drive = np.zeros_like(arrays.step_pct)
        self._travel = np.zeros_like(arrays.step_pct)

    def move(self, signal: FloatArray) -> FloatArray:
        """Return the (n,) mean travel over a step whose signal is held [%]."""
        arrays = self._arrays
        target = signal
        if self._ends:
            target = np.minimum(np.maximum(signal, arrays.low_pct), arrays.high_pct)
        mean = target
        if self._rated:
            most = arrays.travel_per_step_pct
            moved = np.minimum(np.maximum(target - self._drive, -most), most)
            # The drive runs at full speed and rests once there: mean of a ramp that may end early.
            mean = self._drive + moved - moved * np.abs(moved) / (2.0 * most)
            target = self._drive + moved
        self._drive = target
        if self.loose:
            half = arrays.half_backlash_pct
            mean = np.minimum(np.maximum(self._travel, mean - half), mean + half)
            self._travel = np.minimum(np.maximum(self._travel, target - half), target + half)
        return mean

    def follows(self, signals: FloatArray) -> bool:
        """Whether the element, tight, would do what the (k, n) signals of k steps ask, as good as at once."""
        arrays = self._arrays
        if self._ends and bool(((signals < arrays.low_pct) | (signals > arrays.high_pct)).any()):
            return False
        if not self._rated:
            return True
        # Moved by a fiftieth of what it could, it is late by a hundredth of a step.
        steps = np.abs(np.diff(signals, axis=0, prepend=self._drive[None]))
        return bool((steps <= 0.02 * arrays.travel_per_step_pct).all())

    def rest_at(self, signal: FloatArray) -> None:
        """Take over where the element has followed its signal."""
        self._drive = signal


@dataclass(frozen=True, slots=True, eq=False)
class Traces:
    """Signals of n columns over time, deviations from the start [%]; every array is (steps + 1, n)."""

    measurement_pct: tuple[FloatArray, ...]
    """Per level, innermost first."""
    travel_pct: FloatArray
    """Mean travel of the final element over the step that begins at each time."""
    setpoint_pct: tuple[FloatArray, ...]
    """Per controlled level, innermost first; empty unless asked for."""
    output_pct: tuple[FloatArray, ...]
    """Per controlled level, innermost first; empty unless asked for."""


class Engine:
    """Columns of one pattern: the same processes' orders, the same levels controlled, the same scan multiples."""

    def __init__(
        self,
        *,
        plants: Sequence[ProcessArrays],
        controllers: Sequence[ControllerArrays | None],
        final_element: FinalElementArrays,
        setpoint_step_pct: FloatArray,
        disturbances_pct: Sequence[FloatArray | None],
        steps: int,
        keep_signals: bool,
    ) -> None:
        """Lay out the signals of n columns for a number of steps; sequences run over levels, innermost first.

        ``disturbances_pct`` holds per level the (steps + 1, n) disturbance at its measurement [%].
        """
        n = len(setpoint_step_pct)
        controlled = [(level, one) for level, one in enumerate(controllers) if one is not None]
        self.plants = plants
        self.loops = Loops(controlled, n)
        self.element = MovingElement(final_element, controlled[0][1] if controlled else None)
        self.disturbances = disturbances_pct
        self.setpoint = setpoint_step_pct
        self._manual_pct = final_element.step_pct
        if controlled:
            outermost = controlled[-1][1]
            self.setpoint = np.minimum(
                np.maximum(setpoint_step_pct, outermost.setpoint_low_pct), outermost.setpoint_high_pct
            )
        self.steps = steps
        # Rows before the start hold the rest that the dead times still look back at.
        self.pad = pad = max(int(plant.whole.max()) for plant in plants) + 2
        self.travel = np.zeros((pad + steps + 1, n))
        self.measured = [np.zeros((pad + steps + 1, n)) for _ in plants]
        kept = controlled if keep_signals else []
        self.kept_setpoint = [np.zeros((steps + 1, n)) for _ in kept]
        self.kept_output = [np.zeros((steps + 1, n)) for _ in kept]
        for level, plant in enumerate(plants):
            if level:
                self.measured[level][pad] = plant.feedthrough(self.measured[level - 1], pad)
            disturbance = disturbances_pct[level]
            if disturbance is not None:
                self.measured[level][pad] += disturbance[0]
        self.step = 0
        self._act()

    def _act(self) -> None:
        """Execute the controllers that are due and move the final element."""
        row = self.pad + self.step
        signal = self._manual_pct
        if self.loops.controlled:
            signal = self.loops.execute(self.step, self.setpoint, [history[row] for history in self.measured])
            for kept, value in zip(self.kept_setpoint, self.loops.setpoint, strict=False):
                kept[self.step] = value
            for kept, value in zip(self.kept_output, self.loops.output, strict=False):
                kept[self.step] = value
        self.travel[row] = self.element.move(signal)

    def advance(self) -> None:
        """Advance by one step."""
        self.step += 1
        row = self.pad + self.step
        source = self.travel
        for plant, disturbance, history in zip(self.plants, self.disturbances, self.measured, strict=True):
            value = plant.advance(source, row)
            history[row] = value if disturbance is None else value + disturbance[self.step]
            source = history
        self._act()

    def traces(self, step: int) -> Traces:
        """Return the signals from the start to a step that has been reached."""
        end = self.pad + step + 1
        return Traces(
            measurement_pct=tuple(history[self.pad : end] for history in self.measured),
            travel_pct=self.travel[self.pad : end],
            setpoint_pct=tuple(kept[: step + 1] for kept in self.kept_setpoint),
            output_pct=tuple(kept[: step + 1] for kept in self.kept_output),
        )


class Loops:
    """The controllers of n columns at work, outermost last."""

    def __init__(self, controlled: Sequence[tuple[int, ControllerArrays]], columns: int) -> None:
        zero = np.zeros(columns)
        self.controlled = controlled
        self.memory = [ScanState(zero, zero, zero, zero) for _ in controlled]
        self.setpoint = [zero for _ in controlled]
        self.output = [zero for _ in controlled]
        self.computed = [zero for _ in controlled]
        self.limited = [False for _ in controlled]
        # A primary whose output limits lie inside its secondary's setpoint limits needs no second limit.
        self._limit_setpoint = [
            position + 1 < len(controlled)
            and bool(
                np.any(controlled[position + 1][1].output_low_pct < arrays.setpoint_low_pct)
                or np.any(controlled[position + 1][1].output_high_pct > arrays.setpoint_high_pct)
            )
            for position, (_, arrays) in enumerate(controlled)
        ]

    def execute(self, k: int, setpoint: FloatArray, measured: Sequence[FloatArray]) -> FloatArray:
        """Run the controllers that are due at step ``k``, outermost first, and return the valve signal [%]."""
        due = []
        for loop in reversed(range(len(self.controlled))):
            level, arrays = self.controlled[loop]
            if k % arrays.every == 0:
                limited = False
                if self._limit_setpoint[loop]:
                    asked = setpoint
                    setpoint = np.minimum(
                        np.maximum(asked, arrays.setpoint_low_pct), arrays.setpoint_high_pct
                    )
                    limited = int(np.count_nonzero(setpoint != asked)) > 0
                computed = scan(arrays.coefficients, self.memory[loop], setpoint, measured[level])
                output = np.minimum(np.maximum(computed, arrays.output_low_pct), arrays.output_high_pct)
                self.limited[loop] = limited or int(np.count_nonzero(output != computed)) > 0
                self.setpoint[loop], self.computed[loop], self.output[loop] = setpoint, computed, output
                due.append(loop)
            setpoint = self.output[loop]
        if any(self.limited):
            self._track(due, measured)
        return setpoint

    def _track(self, due: Sequence[int], measured: Sequence[FloatArray]) -> None:
        """Tell every controller that was due what became of its output.

        The setpoint that the secondary took; and while the secondary can move its measurement no
        further, that measurement, so that the primary's integral goes no further either.
        """
        no_higher = no_lower = np.zeros(len(measured[0]), dtype=bool)
        low, high = self.controlled[0][1].output_low_pct, self.controlled[0][1].output_high_pct
        for loop, (_, arrays) in enumerate(self.controlled):
            computed = self.computed[loop]
            actual = np.minimum(np.maximum(computed, low), high)
            if loop:
                below = measured[self.controlled[loop - 1][0]]
                actual = np.where(no_higher, np.minimum(actual, below), actual)
                actual = np.where(no_lower, np.maximum(actual, below), actual)
            if loop in due:
                track(arrays.coefficients, self.memory[loop], computed, actual)
            at_high, at_low = (computed > high) | no_higher, (computed < low) | no_lower
            no_higher = np.where(arrays.reverse, at_high, at_low)
            no_lower = np.where(arrays.reverse, at_low, at_high)
            if loop + 1 < len(self.controlled):
                above = self.controlled[loop + 1][1]
                low = np.maximum(above.output_low_pct, arrays.setpoint_low_pct)
                high = np.minimum(above.output_high_pct, arrays.setpoint_high_pct)
