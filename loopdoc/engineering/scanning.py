"""The scan-by-scan engine: many control structures of one pattern advanced together in time.

All signals are deviations from the start, in percent. Within a scan the measurements are read, the
controllers act from the outermost inward, the final element moves, and the processes advance. The
output of a controller is held until its next scan; the processes are solved exactly for a held input
(the final element) or for one that is straight between steps (a secondary measurement).
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.pid import Controller, ScanCoefficients, ScanState, scan, scan_coefficients, track
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


class _ProcessArrays:
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
        self._columns = np.arange(len(processes))

    def _delayed(self, history: FloatArray, row: int, tap: int) -> FloatArray:
        if self._same is not None:
            view: FloatArray = history[row - self._same - tap]
            return view
        gathered: FloatArray = history[row - self.whole - tap, self._columns]
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


class _FinalElement:
    """Stroke rate and backlash between the signal and the travel of the final element."""

    def __init__(self, arrays: FinalElementArrays, innermost: ControllerArrays | None) -> None:
        self._arrays = arrays
        # Output limits inside the travel leave nothing for its ends to do.
        self._ends = innermost is None or bool(
            np.any(innermost.output_low_pct < arrays.low_pct)
            or np.any(innermost.output_high_pct > arrays.high_pct)
        )
        self._rated = bool(np.isfinite(arrays.travel_per_step_pct).any())
        self._loose = bool((arrays.half_backlash_pct > 0.0).any())
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
        if self._loose:
            half = arrays.half_backlash_pct
            mean = np.minimum(np.maximum(self._travel, mean - half), mean + half)
            self._travel = np.minimum(np.maximum(self._travel, target - half), target + half)
        return mean


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
        processes: Sequence[Sequence[Process]],
        controllers: Sequence[ControllerArrays | None],
        final_element: FinalElementArrays,
        setpoint_step_pct: FloatArray,
        disturbances_pct: Sequence[FloatArray | None],
        step_s: FloatArray,
        steps: int,
        keep_signals: bool,
    ) -> None:
        """Lay out the signals of n columns for a number of steps; sequences run over levels, innermost first.

        ``disturbances_pct`` holds per level the (steps + 1, n) disturbance at its measurement [%].
        """
        n = len(step_s)
        self._plants = [
            _ProcessArrays(level, step_s, held_input=position == 0)
            for position, level in enumerate(processes)
        ]
        controlled = [
            (position, controller)
            for position, controller in enumerate(controllers)
            if controller is not None
        ]
        self._loops = _Loops(controlled, n) if controlled else None
        self._valve = _FinalElement(final_element, controlled[0][1] if controlled else None)
        self._manual_pct = final_element.step_pct
        self._disturbances = disturbances_pct
        self._setpoint = setpoint_step_pct
        if controlled:
            outermost = controlled[-1][1]
            self._setpoint = np.minimum(
                np.maximum(setpoint_step_pct, outermost.setpoint_low_pct), outermost.setpoint_high_pct
            )
        # Rows before the start hold the rest that the dead times still look back at.
        self._pad = pad = max(int(plant.whole.max()) for plant in self._plants) + 2
        self._travel = np.zeros((pad + steps + 1, n))
        self._measured = [np.zeros((pad + steps + 1, n)) for _ in self._plants]
        self._kept = [
            (np.zeros((steps + 1, n)), np.zeros((steps + 1, n))) for _ in (controlled if keep_signals else ())
        ]
        for position, plant in enumerate(self._plants):
            if position:
                self._measured[position][pad] = plant.feedthrough(self._measured[position - 1], pad)
            disturbance = disturbances_pct[position]
            if disturbance is not None:
                self._measured[position][pad] += disturbance[0]
        self._step = 0
        self._act()

    def _act(self) -> None:
        """Execute the controllers that are due and move the final element."""
        row = self._pad + self._step
        signal = self._manual_pct
        if self._loops is not None:
            measured = [history[row] for history in self._measured]
            signal = self._loops.execute(self._step, self._setpoint, measured)
            for loop, (setpoint, output) in enumerate(self._kept):
                setpoint[self._step], output[self._step] = (
                    self._loops.setpoint[loop],
                    self._loops.output[loop],
                )
        self._travel[row] = self._valve.move(signal)

    def run_to(self, step: int) -> Traces:
        """Advance to a step and return the signals from the start to there."""
        while self._step < step:
            self._step += 1
            row = self._pad + self._step
            source = self._travel
            for plant, disturbance, history in zip(
                self._plants, self._disturbances, self._measured, strict=True
            ):
                value = plant.advance(source, row)
                history[row] = value if disturbance is None else value + disturbance[self._step]
                source = history
            self._act()
        end = self._pad + step + 1
        return Traces(
            measurement_pct=tuple(history[self._pad : end] for history in self._measured),
            travel_pct=self._travel[self._pad : end],
            setpoint_pct=tuple(setpoint[: step + 1] for setpoint, _ in self._kept),
            output_pct=tuple(output[: step + 1] for _, output in self._kept),
        )


class _Loops:
    """The controllers of n columns at work, outermost last."""

    def __init__(self, controlled: Sequence[tuple[int, ControllerArrays]], columns: int) -> None:
        zero = np.zeros(columns)
        self._controlled = controlled
        self._memory = [ScanState(zero, zero, zero, zero) for _ in controlled]
        self.setpoint = [zero for _ in controlled]
        self.output = [zero for _ in controlled]
        self._computed = [zero for _ in controlled]
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
        limited = False
        due = []
        for loop in reversed(range(len(self._controlled))):
            level, arrays = self._controlled[loop]
            if k % arrays.every == 0:
                if self._limit_setpoint[loop]:
                    asked = setpoint
                    setpoint = np.minimum(
                        np.maximum(asked, arrays.setpoint_low_pct), arrays.setpoint_high_pct
                    )
                    limited = limited or int(np.count_nonzero(setpoint != asked)) > 0
                computed = scan(arrays.coefficients, self._memory[loop], setpoint, measured[level])
                output = np.minimum(np.maximum(computed, arrays.output_low_pct), arrays.output_high_pct)
                limited = limited or int(np.count_nonzero(output != computed)) > 0
                self.setpoint[loop], self._computed[loop], self.output[loop] = setpoint, computed, output
                due.append(loop)
            setpoint = self.output[loop]
        if limited:
            self._track(due, measured)
        return setpoint

    def _track(self, due: Sequence[int], measured: Sequence[FloatArray]) -> None:
        """Tell every controller that was due what became of its output.

        The setpoint that the secondary took; and while the secondary can move its measurement no
        further, that measurement, so that the primary's integral goes no further either.
        """
        no_higher = no_lower = np.zeros(len(measured[0]), dtype=bool)
        low, high = self._controlled[0][1].output_low_pct, self._controlled[0][1].output_high_pct
        for loop, (_, arrays) in enumerate(self._controlled):
            computed = self._computed[loop]
            actual = np.minimum(np.maximum(computed, low), high)
            if loop:
                below = measured[self._controlled[loop - 1][0]]
                actual = np.where(no_higher, np.minimum(actual, below), actual)
                actual = np.where(no_lower, np.maximum(actual, below), actual)
            if loop in due:
                track(arrays.coefficients, self._memory[loop], computed, actual)
            at_high, at_low = (computed > high) | no_higher, (computed < low) | no_lower
            no_higher = np.where(arrays.reverse, at_high, at_low)
            no_lower = np.where(arrays.reverse, at_low, at_high)
            if loop + 1 < len(self._controlled):
                above = self._controlled[loop + 1][1]
                low = np.maximum(above.output_low_pct, arrays.setpoint_low_pct)
                high = np.minimum(above.output_high_pct, arrays.setpoint_high_pct)
