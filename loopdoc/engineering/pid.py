"""The PID controller: forms, units of its settings, and what one scan of it multiplies by.

error = setpoint - measurement, so a positive gain is reverse action: the output falls as the
measurement rises. Gains are per unit: percent of output per percent of measurement.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Controller:
    """A PID controller in the standard form, u = K (b r - y + (1/Ti) integral of e + Td d(c r - y)/dt).

    Source: ISA-TR5.9-2023, Proportional-integral-derivative (PID) algorithms and performance (form
    names, from memory); K. J. Astrom, T. Hagglund, Advanced PID Control, ISA 2006, ch. 3.
    """

    gain: float
    """Gain K [dimensionless, % per %]; positive is reverse action, negative direct action."""
    reset_s: float = math.inf
    """Reset time Ti [s] > 0; infinite where there is no integral action."""
    rate_s: float = 0.0
    """Rate time Td [s] >= 0."""
    derivative_filter: float = 10.0
    """N: the derivative is filtered with the lag Td/N [dimensionless] > 0; infinite for no filter."""
    setpoint_weight: float = 1.0
    """b: share of the setpoint seen by the proportional action [dimensionless]."""
    derivative_setpoint_weight: float = 0.0
    """c: share of the setpoint seen by the derivative action [dimensionless]."""
    interval_s: float = 0.0
    """Execution interval [s]; 0 is continuous."""
    measurement_filter_s: float = 0.0
    """First-order lag on the measurement before the controller sees it [s]."""
    output_low_pct: float = 0.0
    """Lower output limit [%]."""
    output_high_pct: float = 100.0
    """Upper output limit [%]."""
    setpoint_low_pct: float = 0.0
    """Lower setpoint limit [% of the measurement range]."""
    setpoint_high_pct: float = 100.0
    """Upper setpoint limit [% of the measurement range]."""

    def __post_init__(self) -> None:
        if not math.isfinite(self.gain) or self.gain == 0.0:
            raise ValueError("the controller gain must be a finite number other than zero")
        if not self.reset_s > 0.0:
            raise ValueError("the reset time must be above zero; no integral action is an infinite one")
        if not (math.isfinite(self.rate_s) and self.rate_s >= 0.0):
            raise ValueError("the rate time must be a finite time of zero or more")
        if not self.derivative_filter > 0.0:
            raise ValueError("the derivative filter factor N must be above zero")
        if not (math.isfinite(self.setpoint_weight) and math.isfinite(self.derivative_setpoint_weight)):
            raise ValueError("setpoint weights must be finite numbers")
        if not (math.isfinite(self.interval_s) and self.interval_s >= 0.0):
            raise ValueError("the execution interval must be a finite time of zero or more")
        if not (math.isfinite(self.measurement_filter_s) and self.measurement_filter_s >= 0.0):
            raise ValueError("the measurement filter must be a finite time of zero or more")
        if not self.output_low_pct < self.output_high_pct:
            raise ValueError("the lower output limit must be below the upper one")
        if not self.setpoint_low_pct < self.setpoint_high_pct:
            raise ValueError("the lower setpoint limit must be below the upper one")


def on_secondary_range(controller: Controller, *, span_low_pct: float, span_high_pct: float) -> Controller:
    """Return the controller with its output in percent of the secondary's range.

    The output span of a primary (0 to 12 t/h) is seldom the range of its secondary (0 to 15 t/h).
    ``span_low_pct`` and ``span_high_pct`` say where 0 and 100 % of the output lie on that range (0 and
    80 %); the gain and the output limits are converted.
    """
    if not (math.isfinite(span_low_pct) and math.isfinite(span_high_pct)) or span_low_pct == span_high_pct:
        raise ValueError("the output span has no width on the secondary's range")
    slope = (span_high_pct - span_low_pct) / 100.0
    limits = sorted(
        span_low_pct + slope * limit for limit in (controller.output_low_pct, controller.output_high_pct)
    )
    return replace(
        controller,
        gain=controller.gain * slope,
        output_low_pct=limits[0],
        output_high_pct=limits[1],
    )


# --- forms ---------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class StandardSettings:
    """Settings of the standard form: K (1 + 1/(Ti s) + Td s)."""

    gain: float
    """Gain K [dimensionless, % per %]."""
    reset_s: float = math.inf
    """Reset time Ti [s]; infinite for none."""
    rate_s: float = 0.0
    """Rate time Td [s]."""


@dataclass(frozen=True, slots=True)
class SeriesSettings:
    """Settings of the series form: K' (1 + 1/(Ti' s)) (1 + Td' s)."""

    gain: float
    """Gain K' [dimensionless, % per %]."""
    reset_s: float = math.inf
    """Reset time Ti' [s]; infinite for none."""
    rate_s: float = 0.0
    """Rate time Td' [s]."""


@dataclass(frozen=True, slots=True)
class ParallelSettings:
    """Settings of the parallel form: Kp + Ki/s + Kd s."""

    proportional: float
    """Proportional gain Kp [dimensionless, % per %]."""
    integral_per_s: float = 0.0
    """Integral gain Ki [1/s]."""
    derivative_s: float = 0.0
    """Derivative gain Kd [s]."""


def standard_from_series(settings: SeriesSettings) -> StandardSettings:
    """Return the standard form of series settings; always possible.

    Source: S. Skogestad, J. Process Control 13:291-309, 2003, eq. 36 (number from memory).
    """
    if math.isinf(settings.reset_s):
        return StandardSettings(settings.gain, math.inf, settings.rate_s)
    factor = 1.0 + settings.rate_s / settings.reset_s
    return StandardSettings(settings.gain * factor, settings.reset_s * factor, settings.rate_s / factor)


def series_from_standard(settings: StandardSettings) -> SeriesSettings:
    """Return the series form of standard settings; refuse a rate time above a quarter of the reset time.

    Source: K. J. Astrom, T. Hagglund, PID Controllers, 2nd ed., ISA 1995, section 3.2 (from memory).
    """
    if math.isinf(settings.reset_s):
        return SeriesSettings(settings.gain, math.inf, settings.rate_s)
    if 4.0 * settings.rate_s > settings.reset_s:
        raise ValueError(
            "these settings have no series form: the rate time is above a quarter of the reset time, "
            "and two lead terms in series cannot give that pair of complex zeros"
        )
    root = math.sqrt(1.0 - 4.0 * settings.rate_s / settings.reset_s)
    half = (1.0 + root) / 2.0
    rate_s = settings.reset_s * (1.0 - root) / 2.0
    return SeriesSettings(settings.gain * half, settings.reset_s * half, rate_s)


def parallel_from_standard(settings: StandardSettings) -> ParallelSettings:
    """Return the parallel form of standard settings; always possible."""
    return ParallelSettings(settings.gain, settings.gain / settings.reset_s, settings.gain * settings.rate_s)


def standard_from_parallel(settings: ParallelSettings) -> StandardSettings:
    """Return the standard form of parallel settings; refuse a proportional gain of zero or opposed signs."""
    kp, ki, kd = settings.proportional, settings.integral_per_s, settings.derivative_s
    if kp == 0.0:
        raise ValueError("without proportional gain there is no standard form: its one gain multiplies all")
    if ki * kp < 0.0 or kd * kp < 0.0:
        raise ValueError("parallel gains of opposite sign have no standard form: one gain carries the action")
    return StandardSettings(kp, kp / ki if ki else math.inf, kd / kp)


# --- units of the settings -----------------------------------------------------------------------


def gain_from_proportional_band(band_pct: float) -> float:
    """Return the gain [% per %] of a proportional band [%], K = 100/PB; the sign (action) passes through."""
    if not math.isfinite(band_pct) or band_pct == 0.0:
        raise ValueError("a proportional band must be a finite number other than zero")
    return 100.0 / band_pct


def proportional_band_from_gain(gain: float) -> float:
    """Return the proportional band [%] of a gain [% per %], PB = 100/K."""
    if not math.isfinite(gain) or gain == 0.0:
        raise ValueError("a gain must be a finite number other than zero")
    return 100.0 / gain


def reset_from_repeats(repeats_per_s: float) -> float:
    """Return the reset time [s] of repeats per second; zero repeats is no integral action."""
    if not (math.isfinite(repeats_per_s) and repeats_per_s >= 0.0):
        raise ValueError("repeats must be a finite number of zero or more")
    return 1.0 / repeats_per_s if repeats_per_s else math.inf


def repeats_from_reset(reset_s: float) -> float:
    """Return the repeats per second of a reset time [s]; an infinite reset time gives zero."""
    if not reset_s > 0.0:
        raise ValueError("a reset time must be above zero")
    return 1.0 / reset_s


# --- one scan of the algorithm, which `loopdoc.engineering.scanning` executes ---------------------


class ScanCoefficients(NamedTuple):
    """What n controllers multiply by at each scan; every array is (n,)."""

    gain: FloatArray
    """K [dimensionless]."""
    setpoint_gain: FloatArray
    """K b [dimensionless]."""
    integral_gain: FloatArray
    """K h/Ti [dimensionless], 0 for no integral action."""
    tracking: FloatArray
    """h/Tt, at most 1 [dimensionless]; Tt is Ti, or sqrt(Ti Td) where there is rate."""
    derivative_decay: FloatArray
    """Share of the derivative that is left after a scan [dimensionless]."""
    derivative_gain: FloatArray
    """Derivative per change of its input within a scan [dimensionless]."""
    derivative_setpoint_weight: FloatArray
    """c [dimensionless]."""
    filter_gain: FloatArray
    """Share of the way the filtered measurement goes in a scan [dimensionless]; 1 for no filter."""


def scan_coefficients(controllers: Sequence[Controller], interval_s: FloatArray) -> ScanCoefficients:
    """Coefficients of the positional algorithm, executed at the given intervals.

    The integral is summed backward (it holds the present error), the derivative is a backward
    difference through its filter, the measurement filter is exact for a held input.

    Parameters
    ----------
    controllers : sequence of n Controller
        Their own ``interval_s`` is not used.
    interval_s : (n,) float array
        Time between scans [s] > 0.

    Returns
    -------
    ScanCoefficients
        Arrays of shape (n,).

    Raises
    ------
    ValueError
        An interval is not above zero.

    Source: K. J. Astrom, T. Hagglund, Advanced PID Control, ISA 2006, ch. 13 (discretisation) and
    section 3.5 (back-calculation and the choice of the tracking time).
    """
    h = np.asarray(interval_s, dtype=np.float64)
    if not np.all(h > 0.0):
        raise ValueError("a scan needs an execution interval above zero")
    gain = np.array([c.gain for c in controllers])
    reset = np.array([c.reset_s for c in controllers])
    rate = np.array([c.rate_s for c in controllers])
    filter_lag = np.array([c.measurement_filter_s for c in controllers])
    smoothing = rate / np.array([c.derivative_filter for c in controllers])
    has_both = (rate > 0.0) & np.isfinite(reset)
    tracking_time = np.sqrt(reset * np.where(has_both, rate, reset))
    with np.errstate(divide="ignore"):
        filter_gain = -np.expm1(-h / filter_lag)
    return ScanCoefficients(
        gain=gain,
        setpoint_gain=gain * np.array([c.setpoint_weight for c in controllers]),
        integral_gain=gain * h / reset,
        tracking=np.minimum(1.0, h / tracking_time),
        derivative_decay=smoothing / (smoothing + h),
        derivative_gain=gain * rate / (smoothing + h),
        derivative_setpoint_weight=np.array([c.derivative_setpoint_weight for c in controllers]),
        filter_gain=filter_gain,
    )
