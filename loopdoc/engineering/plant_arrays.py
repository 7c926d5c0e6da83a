"""Processes and final elements of many columns at once, advanced step by step in place.

All signals are deviations from the start, in percent. A process is solved exactly for an input that is held
over a step (the final element) or straight between steps (a secondary measurement).
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, fields, replace

import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.process import FloatArray, Process, state_space, transition

IntArray = NDArray[np.intp]


def of_order(process: Process, order: int) -> Process:
    """Return the process with that many states: lags are added whose leads cancel them."""
    missing = order - process.order
    if not missing:
        return process
    # As long as the longest lag, the added ones come first and leave the states of the others as they are.
    added = (max((lag for lag in process.lags_s if lag > 0.0), default=1.0),) * missing
    return replace(process, lags_s=process.lags_s + added, leads_s=process.leads_s + added)


class ProcessArrays:
    """One process level of n columns: its state, and how the delayed input moves it within a step."""

    def __init__(self, processes: Sequence[Process], step_s: FloatArray, *, held_input: bool) -> None:
        self.order = order = max(process.order for process in processes)
        system = state_space([of_order(process, order) for process in processes])
        gain = np.array([process.gain for process in processes])
        steps = np.array([process.dead_time_s for process in processes]) / step_s
        # A dead time of a whole number of steps stays whole in spite of the division.
        whole = np.floor(steps + 1e-9).astype(np.intp)
        part = np.maximum(steps - whole, 0.0)
        part[part < 1e-9] = 0.0
        advance, held, ramp = transition(system, step_s)
        if held_input:
            late_advance, late, _ = transition(system, (1.0 - part) * step_s)
            _, early, _ = transition(system, part * step_s)
            carried = np.einsum("nij,nj->ni", late_advance, early)
            state_taps = [late, carried]
            output_taps = [system.d, np.zeros_like(part)]
        else:
            share = part[:, None]
            state_taps = [ramp * (1.0 - share), ramp * share + (held - ramp) * (1.0 - share), (held - ramp) * share]
            output_taps = [system.d * (1.0 - part), system.d * part, np.zeros_like(part)]
        # A held input acts from the step before, as what is held at this one is not known yet.
        self._first = 1 if held_input else 0
        taps = range(len(state_taps))
        self.whole = whole
        self.state = [np.zeros(len(processes)) for _ in range(order)]
        # Factors with the state or the tap that they multiply; what is zero in every column is left out.
        self._own = [advance[:, i, i].copy() for i in range(order)]
        self._from_state = [
            [(j, advance[:, i, j].copy()) for j in range(i) if advance[:, i, j].any()] for i in range(order)
        ]
        self._from_tap = [
            [(tap, state_taps[tap][:, i] * gain) for tap in taps if state_taps[tap][:, i].any()]
            for i in range(order)
        ]
        self._through = [(tap, output_taps[tap] * gain) for tap in taps if output_taps[tap].any()]
        self._weights = [(i, system.c[:, i].copy()) for i in range(order) if system.c[:, i].any()]
        self._plain = order > 0 and bool(
            np.all(system.c[:, :-1] == 0.0) and np.all(system.c[:, -1] == 1.0) and not self._through
        )
        self._lay_out()

    def _lay_out(self) -> None:
        """Note where each column finds its delayed input, and make room to work in."""
        whole = self.whole
        self._same = int(whole[0]) if (whole == whole[0]).all() else None
        self._longest = int(whole.max())
        # In the rows from the longest dead time on, laid end to end.
        self._places = (self._longest - whole) * len(whole) + np.arange(len(whole))
        self._scratch = np.empty(len(whole))
        self._recent = [np.empty(len(whole)) for _ in range(3 - self._first)]
        self._recent_row: int | None = None

    def take(self, columns: IntArray) -> "ProcessArrays":
        """Return the processes of some columns as they stand; a column may be taken several times."""
        other = object.__new__(ProcessArrays)
        other.order, other._plain, other._first = self.order, self._plain, self._first
        other.whole = self.whole[columns]
        other.state = [values[columns] for values in self.state]
        other._own = [values[columns] for values in self._own]
        other._from_state = [[(j, values[columns]) for j, values in row] for row in self._from_state]
        other._from_tap = [[(tap, values[columns]) for tap, values in row] for row in self._from_tap]
        other._through = [(tap, values[columns]) for tap, values in self._through]
        other._weights = [(i, values[columns]) for i, values in self._weights]
        other._lay_out()
        return other

    def _gather(self, history: FloatArray, row: int, out: FloatArray) -> None:
        earliest = history[row - self._longest : row + 1].reshape(-1)
        earliest.take(self._places, out=out, mode="clip")

    def _delayed(self, history: FloatArray, row: int) -> list[FloatArray]:
        """The input that acts at ``row``, and those one and two steps before it, each column its dead time ago."""
        row -= self._first
        if self._same is not None:
            at = row - self._same
            return [history[at], history[at - 1], history[at - 2]]
        recent = self._recent
        if self._recent_row == row - 1:
            recent.insert(0, recent.pop())
            self._gather(history, row, recent[0])
        else:
            for tap, out in enumerate(recent):
                self._gather(history, row - tap, out)
        self._recent_row = row
        return recent

    def forget_rows(self) -> None:
        """Drop what was gathered: the rows of the history have changed."""
        self._recent_row = None

    def feedthrough(self, history: FloatArray, row: int) -> FloatArray:
        """(n,) output at ``row`` [%] while the state is at rest."""
        output = np.zeros(len(self.whole))
        inputs = self._delayed(history, row)
        for tap, factor in self._through:
            output += factor * inputs[tap]
        return output

    def advance(self, history: FloatArray, row: int, out: FloatArray) -> None:
        """Advance the state by one step, to ``row`` of the input history, and write the output [%]."""
        inputs, state, scratch = self._delayed(history, row), self.state, self._scratch
        for i in range(self.order - 1, -1, -1):
            value = state[i]
            np.multiply(value, self._own[i], out=value)
            for j, factor in self._from_state[i]:
                np.multiply(factor, state[j], out=scratch)
                np.add(value, scratch, out=value)
            for tap, factor in self._from_tap[i]:
                np.multiply(factor, inputs[tap], out=scratch)
                np.add(value, scratch, out=value)
        if self._plain:
            np.copyto(out, state[-1])
            return
        out.fill(0.0)
        for i, factor in self._weights:
            np.multiply(factor, state[i], out=scratch)
            np.add(out, scratch, out=out)
        for tap, factor in self._through:
            np.multiply(factor, inputs[tap], out=scratch)
            np.add(out, scratch, out=out)


@dataclass(frozen=True, slots=True, eq=False)
class FinalElementArrays:
    """Final elements of n columns; every array is (n,), deviations from the start."""

    step_pct: FloatArray
    """Step of the final element where no controller moves it [%]."""
    travel_per_step_pct: FloatArray
    """Largest travel within a time step [%]; infinite where the stroke takes no time."""
    half_backlash_pct: FloatArray
    """Half of the backlash [%]."""
    resolution_pct: FloatArray
    """Change of the signal that does not move it yet [%]."""
    low_pct: FloatArray
    """Fully closed [%]."""
    high_pct: FloatArray
    """Fully open [%]."""

    def take(self, columns: IntArray) -> "FinalElementArrays":
        """Return the final elements of some columns."""
        return FinalElementArrays(*(getattr(self, field.name)[columns] for field in fields(self)))


class MovingElement:
    """Resolution, stroke rate and backlash between the signal and the travel of the final element."""

    def __init__(self, arrays: FinalElementArrays, *, ends: bool) -> None:
        """``ends`` says whether the signal may go beyond the ends of the travel."""
        n = len(arrays.step_pct)
        self._arrays = arrays
        self._ends = ends
        self._rated = bool(np.isfinite(arrays.travel_per_step_pct).any())
        self._least = -arrays.travel_per_step_pct
        self._half_inverse = 0.5 / arrays.travel_per_step_pct
        self._slack = bool((arrays.half_backlash_pct > 0.0).any())
        self._coarse = bool((arrays.resolution_pct > 0.0).any())
        self._held = np.zeros(n)
        self._drive = np.zeros(n)
        self._travel = np.zeros(n)
        self._scratch = (np.empty(n), np.empty(n), np.empty(n))

    @property
    def loose(self) -> bool:
        """True where backlash or resolution stands between the signal and the travel."""
        return self._slack or self._coarse

    def take(self, columns: IntArray) -> "MovingElement":
        """Return the final elements of some columns as they stand."""
        other = MovingElement(self._arrays.take(columns), ends=self._ends)
        other._held, other._drive = self._held[columns], self._drive[columns]
        other._travel = self._travel[columns]
        return other

    def move(self, signal: FloatArray, out: FloatArray) -> None:
        """Write the (n,) mean travel over a step whose signal is held [%]."""
        arrays, (one, two, target) = self._arrays, self._scratch
        if self._coarse:
            np.subtract(signal, self._held, out=one)
            np.abs(one, out=one)
            np.copyto(self._held, signal, where=one > arrays.resolution_pct)
            signal = self._held
        if self._ends:
            np.maximum(signal, arrays.low_pct, out=target)
            signal = np.minimum(target, arrays.high_pct, out=target)
        if not self._rated:
            np.copyto(self._drive, signal)
            np.copyto(out, signal)
        else:
            np.subtract(signal, self._drive, out=one)
            np.minimum(one, arrays.travel_per_step_pct, out=one)
            np.maximum(one, self._least, out=one)
            np.add(self._drive, one, out=self._drive)
            # The drive runs at full speed and rests once there: mean of a ramp that may end early.
            np.abs(one, out=two)
            np.multiply(one, two, out=one)
            np.multiply(one, self._half_inverse, out=one)
            np.subtract(self._drive, one, out=out)
        if self._slack:
            half = arrays.half_backlash_pct
            self._play(out, half, out)
            self._play(self._drive, half, self._travel)

    def _play(self, moved: FloatArray, half: FloatArray, out: FloatArray) -> None:
        """Where the travel is left when its drive is at ``moved``: within half the backlash of it."""
        one, two, _ = self._scratch
        np.subtract(moved, half, out=one)
        np.add(moved, half, out=two)
        np.maximum(self._travel, one, out=one)
        np.minimum(one, two, out=out)

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
        np.copyto(self._drive, signal)


def still(columns: int) -> FinalElementArrays:
    """Return final elements without step, limits, stroke, backlash or resolution."""
    return FinalElementArrays(
        step_pct=np.zeros(columns),
        travel_per_step_pct=np.full(columns, math.inf),
        half_backlash_pct=np.zeros(columns),
        resolution_pct=np.zeros(columns),
        low_pct=np.full(columns, -math.inf),
        high_pct=np.full(columns, math.inf),
    )
