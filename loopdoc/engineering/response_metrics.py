"""What is read off a time response: error integral, peak, settling, overshoot, travel."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.process import FloatArray

# A response has settled once it stays within this share of the step that caused it.
SETTLING_BAND = 0.02
# To have settled it must be seen to stay for the rest of the time after this share of it.
SEEN_TO_STAY = 0.95
# A reversal of the final element counts once it has moved back by this much [%].
REVERSAL_PCT = 0.1


@dataclass(frozen=True, slots=True)
class ResponseMetrics:
    """What is read off the outermost measurement and the final element after an upset."""

    iae_pct_s: float
    """Integral of the absolute deviation from the setpoint [% s]; infinite where an offset of more than 2 % of the
    causing step stays, for want of integral action."""
    peak_pct: float
    """Furthest departure from the start, with its sign [% of span]."""
    time_to_peak_s: float
    """Time of the peak [s]."""
    settling_s: float
    """Time after which the measurement stays within 2 % of the causing step (setpoint step, or size of
    the disturbances; of the peak for a step of the final element) of the setpoint, or of its last value
    where the outermost measurement has no integral action [s]; infinite if not seen to settle."""
    overshoot_pct: float
    """After a setpoint step, how far beyond it in percent of the step; else how far on the other side of
    the setpoint in percent of the peak."""
    valve_travel_pct: float
    """Sum of all movements of the final element [% of travel]."""
    reversals: int
    """Turns of the final element that went back by at least 0.1 %."""
    horizon_s: float
    """Time over which these were read [s]."""
    step_s: float
    """Time step [s]."""
    executed_interval_s: tuple[float, ...]
    """Interval at which each controller was executed, innermost first [s]."""


def _reversals(travel_pct: FloatArray) -> list[int]:
    """Per column, turns of a (k, n) travel that went back by at least the counted amount."""
    travel_pct = np.concatenate([np.zeros((1, travel_pct.shape[1])), travel_pct])  # a jump at time zero counts
    change = np.diff(travel_pct, axis=0)
    # Once the travel stays this near its end only rounding turns it.
    settled = np.abs(travel_pct - travel_pct[-1]) < 1e-3 * REVERSAL_PCT
    ends = len(travel_pct) - np.argmin(settled[::-1], axis=0)
    counts = []
    for column, end in enumerate(ends.tolist()):
        moving = np.nonzero(change[:end, column])[0]
        direction = np.sign(change[moving, column])
        turns = moving[1:][direction[1:] != direction[:-1]]
        points = [*travel_pct[turns, column].tolist(), float(travel_pct[-1, column])]
        # Follow the extremes, and count a turn once the travel has gone back far enough from the last one.
        count, heading, extreme = 0, 0.0, 0.0
        for point in points:
            gone = point - extreme
            if heading == 0.0:
                if abs(gone) >= REVERSAL_PCT:
                    heading, extreme = math.copysign(1.0, gone), point
            elif gone * heading >= 0.0:
                extreme = point
            elif abs(gone) >= REVERSAL_PCT:
                count, heading, extreme = count + 1, -heading, point
        counts.append(count)
    return counts


def read_metrics(
    measurement_pct: FloatArray,
    travel_pct: FloatArray,
    *,
    step_s: FloatArray,
    setpoint_step_pct: FloatArray,
    disturbed_pct: FloatArray,
    has_reset: NDArray[np.bool_],
    executed_interval_s: Sequence[tuple[float, ...]],
) -> list[ResponseMetrics]:
    """Metrics of n responses of equal length, as deviations from their start.

    Parameters
    ----------
    measurement_pct, travel_pct : (k, n) float arrays
        Outermost measurement and mean travel of the final element at each step [%].
    step_s : (n,) float array
        Time step [s].
    setpoint_step_pct : (n,) float array
        Step of the setpoint, as accepted [%].
    disturbed_pct : (n,) float array
        Sum of the sizes of the disturbances [%].
    has_reset : (n,) bool array
        True where the outermost measurement has integral action.
    executed_interval_s : sequence of n tuples of float
        Intervals at which the controllers were executed [s].

    Returns
    -------
    list of n ResponseMetrics
        In the order of the columns.

    Source: D. E. Seborg and others, Process Dynamics and Control, ch. 11 (error integrals and the
    measures of a step response; chapter from memory).
    """
    setpoint, measurement = setpoint_step_pct, measurement_pct
    deviation = setpoint - measurement
    absolute = np.abs(deviation)
    iae = (absolute[1:] + absolute[:-1]).sum(axis=0) * step_s / 2.0
    rows = np.arange(len(step_s))
    top = np.argmax(np.abs(measurement), axis=0)
    peak = measurement[top, rows]

    final = np.where(has_reset, setpoint, measurement[-1])
    cause = np.where(setpoint != 0.0, np.abs(setpoint), disturbed_pct)
    cause = np.where(cause > 0.0, cause, np.abs(peak))
    # The integral over a lasting offset grows for ever: what it has come to depends on the horizon alone.
    iae = np.where(~has_reset & (absolute[-1] > SETTLING_BAND * cause), math.inf, iae)
    outside = np.abs(measurement - final) > SETTLING_BAND * cause
    last = len(measurement) - 1 - np.argmax(outside[::-1], axis=0)
    last = np.where(outside.any(axis=0), last, -1)
    settling = (last + 1) * step_s
    # A response that crosses its band on the last few points has not been seen to stay.
    settling = np.where(last >= SEEN_TO_STAY * (len(measurement) - 1), math.inf, settling)

    beyond = np.maximum(0.0, (-deviation * np.sign(setpoint)).max(axis=0))
    opposite = np.maximum(0.0, (-measurement * np.sign(peak)).max(axis=0))
    share = np.where(setpoint != 0.0, beyond, opposite)
    scale = np.where(setpoint != 0.0, np.abs(setpoint), np.abs(peak))
    overshoot = 100.0 * np.divide(share, scale, out=np.zeros_like(share), where=scale > 0.0)
    moved = np.abs(np.diff(travel_pct, axis=0, prepend=0.0)).sum(axis=0)
    return [
        ResponseMetrics(
            iae_pct_s=float(iae[i]),
            peak_pct=float(peak[i]),
            time_to_peak_s=float(top[i] * step_s[i]),
            settling_s=float(settling[i]),
            overshoot_pct=float(overshoot[i]),
            valve_travel_pct=float(moved[i]),
            reversals=turns,
            horizon_s=float((len(measurement) - 1) * step_s[i]),
            step_s=float(step_s[i]),
            executed_interval_s=intervals,
        )
        for i, (intervals, turns) in enumerate(zip(executed_interval_s, _reversals(travel_pct), strict=True))
    ]
