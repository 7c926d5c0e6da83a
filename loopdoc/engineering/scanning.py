"""The scan-by-scan engine: many control structures of one pattern advanced together in time.

All signals are deviations from the start, in percent. Within a scan the measurements are read, the
controllers act from the outermost inward, the final element moves, and the processes advance. The
output of a controller is held until its next scan.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.disturbance_signals import DisturbanceSignals, KnownSignals
from loopdoc.engineering.pid import Controller, ScanCoefficients, at_rest, scan, scan_coefficients, track
from loopdoc.engineering.pid import taken_coefficients as taken
from loopdoc.engineering.plant_arrays import FinalElementArrays, MovingElement, ProcessArrays
from loopdoc.engineering.process import FloatArray

IntArray = NDArray[np.intp]
BoolArray = NDArray[np.bool_]

# Rows of signals before the start: derivatives and reversals look back at them.
_LEAST_PAD = 2


@dataclass(frozen=True, slots=True, eq=False)
class ControllerArrays:
    """Controllers of one level of n columns; every array is (n,), deviations from the start."""

    coefficients: ScanCoefficients
    every: int | IntArray
    """Time steps between scans: one number where all columns have the same."""
    output_low_pct: FloatArray
    """Lower output limit [%]."""
    output_high_pct: FloatArray
    """Upper output limit [%]."""
    setpoint_low_pct: FloatArray
    """Lower setpoint limit [%]."""
    setpoint_high_pct: FloatArray
    """Upper setpoint limit [%]."""
    reverse: BoolArray
    """True where the output falls as the measurement rises."""

    def take(self, columns: IntArray) -> "ControllerArrays":
        """Return the controllers of some columns; a column may be taken several times."""
        return ControllerArrays(
            coefficients=taken(self.coefficients, columns),
            every=self.every if isinstance(self.every, int) else self.every[columns],
            output_low_pct=self.output_low_pct[columns],
            output_high_pct=self.output_high_pct[columns],
            setpoint_low_pct=self.setpoint_low_pct[columns],
            setpoint_high_pct=self.setpoint_high_pct[columns],
            reverse=self.reverse[columns],
        )


def controller_arrays(
    controllers: Sequence[Controller],
    *,
    step_s: FloatArray,
    every: Sequence[int],
    output_start_pct: FloatArray,
    setpoint_start_pct: FloatArray,
) -> ControllerArrays:
    """Return the controllers of one level as arrays, their limits taken from the start."""
    each = np.array(every, dtype=np.intp)
    return ControllerArrays(
        coefficients=scan_coefficients(controllers, step_s * each),
        every=int(each[0]) if (each == each[0]).all() else each,
        output_low_pct=np.array([c.output_low_pct for c in controllers]) - output_start_pct,
        output_high_pct=np.array([c.output_high_pct for c in controllers]) - output_start_pct,
        setpoint_low_pct=np.array([c.setpoint_low_pct for c in controllers]) - setpoint_start_pct,
        setpoint_high_pct=np.array([c.setpoint_high_pct for c in controllers]) - setpoint_start_pct,
        reverse=np.array([c.gain > 0.0 for c in controllers]),
    )


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
    """Columns in which the same levels are controlled, step by step.

    The signals of the last steps are kept, as far back as dead times look; or all signals of all steps.
    """

    def __init__(
        self,
        *,
        plants: Sequence[ProcessArrays],
        controllers: Sequence[ControllerArrays | None],
        final_element: FinalElementArrays,
        setpoint_step_pct: FloatArray,
        disturbances: Sequence[DisturbanceSignals | KnownSignals | None],
        room: int,
        keep_signals: bool,
    ) -> None:
        """Lay out the signals of n columns; sequences run over levels, innermost first.

        ``room`` is how many steps there is room for before `roll` is needed; a run that keeps its signals
        needs room for all.
        """
        n = len(setpoint_step_pct)
        controlled = [(level, one) for level, one in enumerate(controllers) if one is not None]
        self.plants = plants
        self.loops = Loops(controlled, n, keep_setpoints=keep_signals)
        innermost = controlled[0][1] if controlled else None
        self.element = MovingElement(
            final_element,
            # Output limits inside the travel leave nothing for its ends to do.
            ends=innermost is None
            or bool(
                np.any(innermost.output_low_pct < final_element.low_pct)
                or np.any(innermost.output_high_pct > final_element.high_pct)
            ),
        )
        self.disturbances = list(disturbances)
        self.setpoint = setpoint_step_pct
        self._manual_pct = final_element.step_pct
        if controlled:
            outermost = controlled[-1][1]
            self.setpoint = np.minimum(
                np.maximum(setpoint_step_pct, outermost.setpoint_low_pct), outermost.setpoint_high_pct
            )
        self.room = room
        # Rows before the start hold the rest that the dead times still look back at.
        back = [int(plant.whole.max()) + 3 for plant in plants]
        self.travel_pad, self.pads = back[0], (*back[1:], _LEAST_PAD)
        self.travel = np.zeros((self.travel_pad + room + 1, n))
        self.measured = [np.zeros((pad + room + 1, n)) for pad in self.pads]
        kept = controlled if keep_signals else []
        self.kept_setpoint = [np.zeros((room + 1, n)) for _ in kept]
        self.kept_output = [np.zeros((room + 1, n)) for _ in kept]
        for level, plant in enumerate(plants):
            start = self.measured[level][self.pads[level]]
            if level:
                start += plant.feedthrough(self.measured[level - 1], self.pads[level - 1])
            upset = self.disturbances[level]
            if upset is not None:
                start += upset.at_start(n)
        self.step = 0
        self._base = 0
        self._act()

    def _act(self) -> None:
        """Execute the controllers that are due and move the final element."""
        at = self.step - self._base
        signal = self._manual_pct
        if self.loops.controlled:
            measured = [history[pad + at] for history, pad in zip(self.measured, self.pads, strict=True)]
            signal = self.loops.execute(self.step, self.setpoint, measured)
            for kept, value in zip(self.kept_setpoint, self.loops.setpoint, strict=False):
                kept[self.step] = value
            for kept, value in zip(self.kept_output, self.loops.output, strict=False):
                kept[self.step] = value
        self.element.move(signal, self.travel[self.travel_pad + at])

    def advance(self) -> None:
        """Advance by one step."""
        self.step += 1
        at = self.step - self._base
        source, row = self.travel, self.travel_pad + at
        for plant, upset, history, pad in zip(
            self.plants, self.disturbances, self.measured, self.pads, strict=True
        ):
            out = history[pad + at]
            plant.advance(source, row, out)
            if upset is not None:
                part = out[upset.columns]
                np.add(part, upset.at(self.step), out=part)
            source, row = history, pad + at
        self._act()

    @property
    def room_left(self) -> int:
        """Steps until the signals must be rolled."""
        return self._base + self.room - self.step

    def roll(self) -> None:
        """Make room: drop the signals that nothing looks back at any more."""
        at = self.step - self._base
        for history, pad in zip((self.travel, *self.measured), (self.travel_pad, *self.pads), strict=True):
            history[: pad + 1] = history[at : at + pad + 1].copy()
        for plant in self.plants:
            plant.forget_rows()
        self._base = self.step

    def last(self, steps: int) -> tuple[list[FloatArray], FloatArray]:
        """Measurements, innermost first, and travel of the last steps and the two before them [%]."""
        at = self.step - self._base
        return [
            history[pad + at - steps - 1 : pad + at + 1]
            for history, pad in zip(self.measured, self.pads, strict=True)
        ], self.travel[self.travel_pad + at - steps - 1 : self.travel_pad + at + 1]

    def keep(self, columns: IntArray) -> None:
        """Go on with some of the columns only, given in increasing order."""
        self.plants = [plant.take(columns) for plant in self.plants]
        self.loops = self.loops.take(columns)
        self.element = self.element.take(columns)
        self.disturbances = [
            upset.take(columns) if isinstance(upset, DisturbanceSignals) else upset
            for upset in self.disturbances
        ]
        self.setpoint, self._manual_pct = self.setpoint[columns], self._manual_pct[columns]
        # As rows in one piece, which is how delayed inputs are gathered.
        self.travel = self.travel.take(columns, axis=1)
        self.measured = [history.take(columns, axis=1) for history in self.measured]

    def traces(self, step: int) -> Traces:
        """Return the signals from the start to a step that has been reached, of a run that keeps them."""
        return Traces(
            measurement_pct=tuple(
                history[pad : pad + step + 1] for history, pad in zip(self.measured, self.pads, strict=True)
            ),
            travel_pct=self.travel[self.travel_pad : self.travel_pad + step + 1],
            setpoint_pct=tuple(kept[: step + 1] for kept in self.kept_setpoint),
            output_pct=tuple(kept[: step + 1] for kept in self.kept_output),
        )


class Loops:
    """The controllers of n columns at work, outermost last."""

    def __init__(
        self, controlled: Sequence[tuple[int, ControllerArrays]], columns: int, *, keep_setpoints: bool
    ) -> None:
        self.controlled = controlled
        self.memory = [at_rest(columns) for _ in controlled]
        self.setpoint = [np.zeros(columns) for _ in controlled]
        self.output = [np.zeros(columns) for _ in controlled]
        self._limited = [np.zeros(columns, dtype=bool) for _ in controlled]
        self._cut = np.zeros(columns, dtype=bool)
        self._keep_setpoints = keep_setpoints
        # A primary whose output limits lie inside its secondary's setpoint limits needs no second limit.
        self._limit_setpoint = [
            position + 1 < len(controlled)
            and bool(
                np.any(controlled[position + 1][1].output_low_pct < arrays.setpoint_low_pct)
                or np.any(controlled[position + 1][1].output_high_pct > arrays.setpoint_high_pct)
            )
            for position, (_, arrays) in enumerate(controlled)
        ]
        # What a controller may ask for in the end: its own limits, and those of the setpoint that it commands.
        self._low = [arrays.output_low_pct for _, arrays in controlled]
        self._high = [arrays.output_high_pct for _, arrays in controlled]
        for position, (_, arrays) in enumerate(controlled[:-1]):
            self._low[position + 1] = np.maximum(self._low[position + 1], arrays.setpoint_low_pct)
            self._high[position + 1] = np.minimum(self._high[position + 1], arrays.setpoint_high_pct)

    @property
    def limited(self) -> bool:
        """True where a limit acts on any controller."""
        return any(bool(limited.any()) for limited in self._limited)

    def take(self, columns: IntArray) -> "Loops":
        """Return the controllers of some columns as they stand."""
        other = Loops(
            [(level, arrays.take(columns)) for level, arrays in self.controlled],
            len(columns),
            keep_setpoints=self._keep_setpoints,
        )
        for old, new in zip(self.memory, other.memory, strict=True):
            new.integral, new.filtered = old.integral[columns], old.filtered[columns]
            new.derivative, new.derivative_input = old.derivative[columns], old.derivative_input[columns]
            new.output = old.output[columns]
        other.setpoint = [values[columns] for values in self.setpoint]
        other.output = [values[columns] for values in self.output]
        other._limited = [values[columns] for values in self._limited]
        return other

    def execute(self, k: int, setpoint: FloatArray, measured: Sequence[FloatArray]) -> FloatArray:
        """Run the controllers that are due at step ``k``, outermost first, and return the valve signal [%]."""
        scanned: list[tuple[int, BoolArray | bool]] = []
        for loop in reversed(range(len(self.controlled))):
            level, arrays = self.controlled[loop]
            due: BoolArray | bool = (
                k % arrays.every == 0 if isinstance(arrays.every, int) else np.remainder(k, arrays.every) == 0
            )
            if due is not False:
                output, limited = self.output[loop], self._limited[loop]
                setpoint = self._take_setpoint(loop, setpoint, due)
                computed = scan(arrays.coefficients, self.memory[loop], setpoint, measured[level], due=due)
                np.maximum(computed, arrays.output_low_pct, out=output)
                np.minimum(output, arrays.output_high_pct, out=output)
                np.not_equal(output, computed, out=limited)
                if self._limit_setpoint[loop]:
                    np.logical_or(limited, self._cut, out=limited)
                scanned.append((loop, due))
            setpoint = self.output[loop]
        if scanned:
            limited = self._limited[0]
            for other in self._limited[1:]:
                limited = limited | other
            columns = limited.nonzero()[0]
            if columns.size:
                self._track(columns, dict(scanned), measured)
        return setpoint

    def _take_setpoint(self, loop: int, asked: FloatArray, due: BoolArray | bool) -> FloatArray:
        """The setpoint that a controller which is due takes of what it is asked for."""
        if self._limit_setpoint[loop]:
            arrays, setpoint = self.controlled[loop][1], self.setpoint[loop]
            np.maximum(asked, arrays.setpoint_low_pct, out=setpoint, where=due)
            np.minimum(setpoint, arrays.setpoint_high_pct, out=setpoint)
            np.not_equal(setpoint, asked, out=self._cut)
            return setpoint
        if due is True and not self._keep_setpoints:
            return asked
        np.copyto(self.setpoint[loop], asked, where=due)
        return self.setpoint[loop]

    def _track(
        self, columns: IntArray, scanned: dict[int, BoolArray | bool], measured: Sequence[FloatArray]
    ) -> None:
        """Tell the controllers of some columns that were due what became of their outputs.

        The setpoint that the secondary took; and while the secondary can move its measurement no
        further, that measurement, so that the primary's integral goes no further either.
        """
        no_higher = no_lower = np.zeros(len(columns), dtype=bool)
        for loop, (_, arrays) in enumerate(self.controlled):
            computed = self.memory[loop].output[columns]
            low, high = self._low[loop][columns], self._high[loop][columns]
            actual = np.minimum(np.maximum(computed, low), high)
            if loop:
                below = measured[self.controlled[loop - 1][0]][columns]
                actual = np.where(no_higher, np.minimum(actual, below), actual)
                actual = np.where(no_lower, np.maximum(actual, below), actual)
            due = scanned.get(loop, False)
            if due is True:
                track(arrays.coefficients, self.memory[loop], actual, columns)
            elif due is not False:
                part = due[columns]
                track(arrays.coefficients, self.memory[loop], actual[part], columns[part])
            at_high, at_low = (computed > high) | no_higher, (computed < low) | no_lower
            reverse = arrays.reverse[columns]
            no_higher = np.where(reverse, at_high, at_low)
            no_lower = np.where(reverse, at_low, at_high)
