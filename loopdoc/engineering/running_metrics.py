"""What is read off time responses while they run, so that no signal has to be kept.

The figures are those of `loopdoc.engineering.response_metrics.read_metrics` for columns whose end is known
beforehand: the outermost measurement has integral action and something upsets it.
"""

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.process import FloatArray
from loopdoc.engineering.response_metrics import REVERSAL_PCT, SEEN_TO_STAY, SETTLING_BAND, ResponseMetrics

IntArray = NDArray[np.intp]
BoolArray = NDArray[np.bool_]

# A run is cut short when nothing moved by more than this share of its peak for an eighth of the horizon.
AT_REST = 1e-3
# Smaller movements in one step are rounding and turn nothing [%].
_ROUNDING = 1e-10


class RunningMetrics:
    """Error integral, peaks, settling, travel and reversals of n columns, added up block by block."""

    def __init__(
        self,
        *,
        setpoint_step_pct: FloatArray,
        disturbed_pct: FloatArray,
        horizon: IntArray,
        window: IntArray,
        start: Sequence[FloatArray],
    ) -> None:
        """``horizon`` and ``window`` are in steps; ``start`` holds each signal at time zero, the travel last."""
        n = len(setpoint_step_pct)
        self._setpoint = setpoint_step_pct
        cause = np.where(setpoint_step_pct != 0.0, np.abs(setpoint_step_pct), disturbed_pct)
        self._band = SETTLING_BAND * cause
        self._horizon, self._window = horizon, window
        measurement, travel = start[-2], start[-1]
        self._error = np.abs(setpoint_step_pct - measurement)
        self._first_error = self._error.copy()
        self._low, self._high = [one.copy() for one in start], [one.copy() for one in start]
        self._window_low, self._window_high = [one.copy() for one in start], [one.copy() for one in start]
        self._peak, self._peak_step = measurement.copy(), np.zeros(n, dtype=np.intp)
        self._outside = np.where(self._error > self._band, 0, -1)
        self._moved = np.abs(travel)
        self._heading, self._extreme = np.zeros(n), np.zeros(n)
        self._turns = np.zeros(n, dtype=np.intp)

    def take_in(self, signals: Sequence[FloatArray], step: int) -> None:
        """Take in a block that ends at ``step``: each signal (block + 2, n), the two rows before it first."""
        measurement = signals[-2]
        for i, signal in enumerate(signals):
            low, high = signal[1:].min(axis=0), signal[1:].max(axis=0)
            np.minimum(self._window_low[i], low, out=self._window_low[i])
            np.maximum(self._window_high[i], high, out=self._window_high[i])
            np.minimum(self._low[i], low, out=self._low[i])
            np.maximum(self._high[i], high, out=self._high[i])
            if signal is measurement:
                self._read_measurement(signal[2:], low, high, step)
        self._read_travel(signals[-1], low, high)

    def _read_measurement(self, block: FloatArray, low: FloatArray, high: FloatArray, step: int) -> None:
        first = step - len(block) + 1
        total = len(block) * self._setpoint - block.sum(axis=0)
        error = np.abs(total)
        # Where the deviation changes its sign the absolute values are added one by one.
        both = ((low < self._setpoint) & (high > self._setpoint)).nonzero()[0]
        if both.size:
            error[both] = np.abs(self._setpoint[both] - block.take(both, axis=1)).sum(axis=0)
        self._error += error
        higher = (np.maximum(-low, high) > np.abs(self._peak)).nonzero()[0]
        if higher.size:
            part = block.take(higher, axis=1)
            at = np.argmax(np.abs(part), axis=0)
            found = part[at, np.arange(len(higher))]
            further = np.abs(found) > np.abs(self._peak[higher])
            self._peak[higher] = np.where(further, found, self._peak[higher])
            self._peak_step[higher] = np.where(further, first + at, self._peak_step[higher])
        furthest = np.maximum(self._setpoint - low, high - self._setpoint)
        outside = (furthest > self._band).nonzero()[0]
        if outside.size:
            beyond = np.abs(block[::-1].take(outside, axis=1) - self._setpoint[outside]) > self._band[outside]
            last = step - np.argmax(beyond, axis=0)
            self._outside[outside] = np.where(beyond.any(axis=0), last, self._outside[outside])

    def _read_travel(self, travel: FloatArray, low: FloatArray, high: FloatArray) -> None:
        change = np.diff(travel[1:], axis=0)
        np.abs(change, out=change)
        self._moved += change.sum(axis=0)
        # Within less than what counts as a turn the order of the points does not matter.
        near = high - low < REVERSAL_PCT
        far = (~near).nonzero()[0]
        up = np.where(self._heading != 0.0, self._heading > 0.0, high >= REVERSAL_PCT)
        begun = (self._heading != 0.0) | (high >= REVERSAL_PCT) | (low <= -REVERSAL_PCT)
        extreme = np.where(up, np.maximum(self._extreme, high), np.minimum(self._extreme, low))
        back = np.where(up, extreme - low, high - extreme) >= REVERSAL_PCT
        turned, near = near & begun & back, near & begun
        self._turns += turned
        np.copyto(self._heading, np.where(up != turned, 1.0, -1.0), where=near)
        np.copyto(self._extreme, np.where(turned, np.where(up, low, high), extreme), where=near)
        if far.size:
            self._follow_in_order(far, travel.take(far, axis=1))

    def _follow_in_order(self, members: IntArray, travel: FloatArray) -> None:
        """Follow the travel of some columns through every point at which it begins to move the other way."""
        change = np.diff(travel, axis=0)
        rising, falling = change > _ROUNDING, change < -_ROUNDING
        begins = (rising[1:] & ~rising[:-1]) | (falling[1:] & ~falling[:-1])
        begins[0] = True
        columns, rows = begins.T.nonzero()
        up = rising[rows + 1, columns]
        turns = np.ones(len(columns), dtype=bool)
        # Of movements in one direction only the first begins at a turn.
        turns[1:] = (columns[1:] != columns[:-1]) | (up[1:] != up[:-1])
        columns, rows = columns[turns], rows[turns]
        self._follow(members[columns], travel[rows + 1, columns])
        self._follow(members, travel[-1])

    def _follow(self, columns: IntArray, points: FloatArray) -> None:
        """Follow the extremes of the travel, and count a turn once it has gone back far enough from the last one.

        ``points`` are the turning points in the order of time, column by column.
        """
        first = np.concatenate([[0], (columns[1:] != columns[:-1]).nonzero()[0] + 1])
        count = np.diff(np.concatenate([first, [len(columns)]]))
        for nth in range(int(count.max())):
            at = first[count > nth] + nth
            column, point = columns[at], points[at]
            heading, extreme = self._heading[column], self._extreme[column]
            gone = point - extreme
            on = (heading != 0.0) & (gone * heading >= 0.0)
            far = np.abs(gone) >= REVERSAL_PCT
            self._turns[column] += far & ~on & (heading != 0.0)
            self._heading[column] = np.where(far & ~on, np.copysign(1.0, gone), heading)
            self._extreme[column] = np.where(on | far, point, extreme)

    def ended(self, step: int) -> BoolArray:
        """Which columns end at ``step``: at their horizon, or at rest at one of its parts."""
        due: BoolArray = step % self._window == 0
        if not due.any():
            return due
        rest = due & (step >= 2 * self._window)
        for i, (low, high) in enumerate(zip(self._window_low, self._window_high, strict=True)):
            rest &= high - low <= AT_REST * np.maximum(-self._low[i], self._high[i])
        ended: BoolArray = np.logical_or(rest, np.equal(step, self._horizon))
        return ended

    def begin_windows(self, step: int, signals: Sequence[FloatArray]) -> None:
        """Begin the next window of the columns that have come to the end of one."""
        due = step % self._window == 0
        if due.any():
            for i, signal in enumerate(signals):
                np.copyto(self._window_low[i], signal[-1], where=due)
                np.copyto(self._window_high[i], signal[-1], where=due)

    def keep(self, columns: IntArray) -> None:
        """Go on with some of the columns only."""
        for name, value in vars(self).items():
            if isinstance(value, list):
                setattr(self, name, [one[columns] for one in value])
            else:
                setattr(self, name, value[columns])

    def read(
        self,
        columns: IntArray,
        *,
        step: int,
        last: Sequence[FloatArray],
        step_s: FloatArray,
        executed_interval_s: Sequence[tuple[float, ...]],
    ) -> list[ResponseMetrics]:
        """Metrics of the columns that end at ``step``, at the last value of each signal."""
        travel = last[-1][columns]
        self._follow(columns, travel)
        setpoint, peak = self._setpoint[columns], self._peak[columns]
        error = self._error[columns] - (self._first_error[columns] + np.abs(setpoint - last[-2][columns])) / 2.0
        outside = self._outside[columns]
        # A response that crosses its band on the last few points has not been seen to stay.
        settling = np.where(outside >= SEEN_TO_STAY * step, math.inf, (outside + 1) * step_s)
        low, high = self._low[-2][columns], self._high[-2][columns]
        beyond = np.where(setpoint > 0.0, high - setpoint, setpoint - low)
        opposite = np.where(peak > 0.0, -low, high)
        share = np.maximum(0.0, np.where(setpoint != 0.0, beyond, opposite))
        scale = np.where(setpoint != 0.0, np.abs(setpoint), np.abs(peak))
        overshoot = 100.0 * np.divide(share, scale, out=np.zeros_like(share), where=scale > 0.0)
        return [
            ResponseMetrics(
                iae_pct_s=float(error[i] * step_s[i]),
                peak_pct=float(peak[i]),
                time_to_peak_s=float(self._peak_step[column] * step_s[i]),
                settling_s=float(settling[i]),
                overshoot_pct=float(overshoot[i]),
                valve_travel_pct=float(self._moved[column]),
                reversals=int(self._turns[column]),
                horizon_s=float(step * step_s[i]),
                step_s=float(step_s[i]),
                executed_interval_s=executed_interval_s[i],
            )
            for i, column in enumerate(columns.tolist())
        ]
