"""Closed-loop setpoint responses from the exact frequency response: quick enough for a figure on every sheet.

A small step, so that no limit acts; the simulation (`loopdoc.engineering.simulation`) is for those that do.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from loopdoc.engineering.frequency import LoopStage
from loopdoc.engineering.open_loop import level_arrays, open_loops
from loopdoc.engineering.process import ComplexArray, FloatArray

_HARMONICS = 4096
# Half period of the square wave in units of 1/pace: long enough for a tail of reset to die away.
_HALF_PERIOD = 400.0


@dataclass(frozen=True, slots=True, eq=False)
class SetpointResponse:
    """Answer of a loop to a unit step of its setpoint."""

    time_s: FloatArray
    """(n,) time since the step [s], evenly spaced from 0."""
    measurement: FloatArray
    """(n,) the unfiltered measurement, in steps of the setpoint [dimensionless]."""
    final: float
    """Where it settles [dimensionless]: 1 with reset."""
    overshoot: float
    """Largest excess over the final value, as a share of it [dimensionless]."""
    settling_s: float
    """Time after which it stays within 2 % of the final value [s]."""


def setpoint_response(stages: Sequence[LoopStage], *, pace_rad_per_s: float) -> SetpointResponse | None:
    """Response of the outermost loop of a stable chain to a unit step of its setpoint.

    Parameters
    ----------
    stages : sequence of LoopStage
        Innermost level first, at least one; the chain must be stable.
    pace_rad_per_s : float
        Frequency that sets the scale of time: the gain crossover or the bandwidth [rad/s] > 0.

    Returns
    -------
    SetpointResponse or None
        None where the response has not settled after 200 times the inverse of the pace.

    Raises
    ------
    ValueError
        The pace is not a positive frequency.

    Source: response of a linear system to the Fourier series of a square wave so long that each half of it
    settles; A. V. Oppenheim, A. S. Willsky, Signals and Systems, 2nd ed. 1997, ch. 3 (from memory).
    """
    if not (math.isfinite(pace_rad_per_s) and pace_rad_per_s > 0.0):
        raise ValueError("the pace must be a positive frequency")
    half_period_s = _HALF_PERIOD / pace_rad_per_s
    odd: FloatArray = 2.0 * np.arange(_HARMONICS, dtype=np.float64) + 1.0
    closed = _closed_loop(stages, odd * math.pi / half_period_s)
    final = float(_closed_loop(stages, np.array([1e-9 * pace_rad_per_s])).real[0])
    # sum of (4/pi) Im(T e^{jwt}) / k over odd k, at 4 times the harmonics points of one period.
    size = 4 * _HARMONICS
    spectrum = np.zeros(size // 2 + 1, dtype=np.complex128)
    spectrum[1 : 2 * _HARMONICS : 2] = -1j * closed * (2.0 / math.pi) / odd * size
    square = np.fft.irfft(spectrum, n=size)
    # The wave jumps from -1 to 1: half of it is a unit step.
    measurement: FloatArray = (square[: size // 4] + final) / 2.0
    time_s: FloatArray = np.arange(size // 4, dtype=np.float64) * (2.0 * half_period_s / size)
    excess = np.abs(measurement - final) > 0.02 * abs(final)
    if excess[-1]:
        return None
    last = int(np.nonzero(excess)[0][-1]) if excess.any() else 0
    peak = float((measurement / final).max()) - 1.0 if final else 0.0
    return SetpointResponse(
        time_s=time_s,
        measurement=measurement,
        final=final,
        overshoot=max(0.0, peak),
        settling_s=float(time_s[min(last + 1, len(time_s) - 1)]),
    )


def _closed_loop(stages: Sequence[LoopStage], w_rad_per_s: FloatArray) -> ComplexArray:
    """Unfiltered measurement over setpoint of the outermost loop at (m,) frequencies."""
    levels = [level_arrays([stage.controller], [stage.process]) for stage in stages]
    loop = open_loops(levels, w_rad_per_s[None, :])[-1][0]
    controller, s = stages[-1].controller, 1j * w_rad_per_s
    integral = (1.0 / controller.reset_s) / s
    derivative = controller.rate_s * s / (1.0 + controller.rate_s / controller.derivative_filter * s)
    feedback = 1.0 + integral + derivative
    forward = controller.setpoint_weight + integral + controller.derivative_setpoint_weight * derivative
    # L = C F G T below; the measurement itself is not filtered, and the setpoint meets its own weights.
    unfiltered = loop * (1.0 + controller.measurement_filter_s * s)
    closed: ComplexArray = unfiltered * forward / feedback / (1.0 + loop)
    return closed
