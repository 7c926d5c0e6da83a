"""What is read off a time response: error integral, peak, settling, overshoot, travel."""

import math
from dataclasses import dataclass

# A response has settled once it stays within this share of the step that caused it.
SETTLING_BAND = 0.02
# To have settled it must be seen to stay for the rest of the time after this share of it.
SEEN_TO_STAY = 0.95


@dataclass(frozen=True, slots=True)
class ResponseMetrics:
    """What is read off the outermost measurement and the final element after an upset.

    Source: D. E. Seborg and others, Process Dynamics and Control, ch. 11 (error integrals and the measures of a step
    response; chapter from memory).
    """

    iae_pct_s: float
    """Integral of the absolute deviation from the setpoint [% s]; infinite where an offset of more than 2 % of the
    causing step stays, for want of integral action or because an output stands at its limit."""
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
    limited_level: int | None
    """Innermost level whose controller stands at an output limit at the end, so that an offset stays; None where the
    measurement settles or no output is at a limit."""
    horizon_s: float
    """Time over which these were read [s]."""
    step_s: float
    """Time step [s]."""
    executed_interval_s: tuple[float, ...]
    """Interval at which each controller was executed, innermost first [s]."""


@dataclass(frozen=True, slots=True)
class Reading:
    """What was met on the way through one response, as `loopdoc.engineering.scanning` reads it."""

    error_sum_pct: float
    """Sum over the steps of the mean absolute deviation from the setpoint [%]."""
    last_pct: float
    """Outermost measurement at the end, from the start [%]."""
    peak_pct: float
    """Where it was furthest from the start [%]."""
    moved_pct: float
    """Sum of all movements of the final element [%]."""
    low_pct: float
    """Lowest outermost measurement, from the start [%]."""
    high_pct: float
    """Highest [%]."""
    steps: int
    """Steps from the start to the end."""
    peak_step: int
    """When the peak was."""
    outside_step: int
    """Last step outside the settling band, -1 for none."""
    turns: int
    """Turns of the final element."""
    limited_level: int
    """Innermost level whose controller asks for more than its limit at the end, -1 for none."""


def read_metrics(
    met: Reading,
    *,
    step_s: float,
    setpoint_step_pct: float,
    band_pct: float,
    has_reset: bool,
    executed_interval_s: tuple[float, ...],
) -> ResponseMetrics:
    """Metrics of one response; ``band_pct`` is the settling band, ``has_reset`` of the outermost measurement."""
    # The integral over a lasting offset grows for ever: what it has come to depends on the horizon alone.
    is_off = abs(setpoint_step_pct - met.last_pct) > band_pct
    is_limited = is_off and met.limited_level >= 0
    lasting = is_off and (is_limited or not has_reset)
    # A response that crosses its band on the last few steps has not been seen to stay.
    seen = met.outside_step < SEEN_TO_STAY * met.steps
    if setpoint_step_pct:
        scale = abs(setpoint_step_pct)
        furthest = met.high_pct if setpoint_step_pct > 0.0 else -met.low_pct
        beyond = furthest - scale
    else:
        scale = abs(met.peak_pct)
        beyond = -met.low_pct if met.peak_pct > 0.0 else met.high_pct
    return ResponseMetrics(
        iae_pct_s=math.inf if lasting else met.error_sum_pct * step_s,
        peak_pct=met.peak_pct,
        time_to_peak_s=met.peak_step * step_s,
        settling_s=(met.outside_step + 1) * step_s if seen else math.inf,
        overshoot_pct=100.0 * max(0.0, beyond) / scale if scale > 0.0 else 0.0,
        valve_travel_pct=met.moved_pct,
        reversals=met.turns,
        limited_level=met.limited_level if is_limited else None,
        horizon_s=met.steps * step_s,
        step_s=step_s,
        executed_interval_s=executed_interval_s,
    )
