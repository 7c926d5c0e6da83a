"""Percent, milliampere and engineering units; square root extraction; expected sensor signals."""

import math
from dataclasses import dataclass

# IEC 60381-1 (1982), analogue direct current signals: the live zero and the full scale (from memory).
SIGNAL_LOW_MA = 4.0
SIGNAL_HIGH_MA = 20.0

# NAMUR NE 43 (editions 2003 and 2021): measurement information and failure information.
MEASUREMENT_LOW_MA = 3.8
MEASUREMENT_HIGH_MA = 20.5
FAILURE_LOW_MA = 3.6
FAILURE_HIGH_MA = 21.0

# The steps of a loop check, in percent of the signal: common practice of instrument calibration.
CHECK_POINTS_PCT = (0.0, 25.0, 50.0, 75.0, 100.0)


def percent_from_value(value: float, *, low: float, high: float) -> float:
    """Return where a value lies on a range [%]; the range may fall (low above high)."""
    if low == high:
        raise ValueError("a range needs two different ends")
    return 100.0 * (value - low) / (high - low)


def value_from_percent(percent: float, *, low: float, high: float) -> float:
    """Return the value at a percentage of a range."""
    if low == high:
        raise ValueError("a range needs two different ends")
    return low + (high - low) * percent / 100.0


def milliampere_from_percent(percent: float) -> float:
    """Return the 4-20 mA signal [mA] of a percentage of span."""
    return SIGNAL_LOW_MA + (SIGNAL_HIGH_MA - SIGNAL_LOW_MA) * percent / 100.0


def percent_from_milliampere(current_ma: float) -> float:
    """Return the percentage of span of a 4-20 mA signal [mA]."""
    return 100.0 * (current_ma - SIGNAL_LOW_MA) / (SIGNAL_HIGH_MA - SIGNAL_LOW_MA)


def flow_from_dp_fraction(dp_fraction: float) -> float:
    """Return the flow fraction of a differential pressure fraction, its square root.

    Source: ISO 5167-1 (flow is proportional to the root of the differential pressure).
    """
    if not dp_fraction >= 0.0:
        raise ValueError("a differential pressure below zero has no square root: the flow would be reversed")
    return math.sqrt(dp_fraction)


def dp_from_flow_fraction(flow_fraction: float) -> float:
    """Return the differential pressure fraction of a flow fraction, its square."""
    if not flow_fraction >= 0.0:
        raise ValueError("a flow below zero cannot be read by a differential pressure element")
    return flow_fraction * flow_fraction


def signal_state(current_ma: float) -> str:
    """Return what NE 43 makes of a current: failure low, failure high, measurement, or undefined between."""
    if current_ma <= FAILURE_LOW_MA:
        return "failure low"
    if current_ma >= FAILURE_HIGH_MA:
        return "failure high"
    if MEASUREMENT_LOW_MA <= current_ma <= MEASUREMENT_HIGH_MA:
        return "measurement"
    return "undefined"


@dataclass(frozen=True, slots=True)
class CheckPoint:
    """One step of a loop check: the signal that is applied and the reading that is expected."""

    signal_pct: float
    """Applied signal [% of the signal range]."""
    current_ma: float
    """The same on a 4-20 mA signal [mA]."""
    measurement_pct: float
    """Expected reading [% of the measurement range]."""
    value: float
    """Expected reading [unit of the range]."""


def check_points(*, low: float, high: float, square_root: bool = False) -> tuple[CheckPoint, ...]:
    """Return the five steps of a loop check over a range.

    With ``square_root`` the signal is the differential pressure and the reading its root.
    """
    points = []
    for signal_pct in CHECK_POINTS_PCT:
        measurement_pct = 100.0 * flow_from_dp_fraction(signal_pct / 100.0) if square_root else signal_pct
        points.append(
            CheckPoint(
                signal_pct=signal_pct,
                current_ma=milliampere_from_percent(signal_pct),
                measurement_pct=measurement_pct,
                value=value_from_percent(measurement_pct, low=low, high=high),
            )
        )
    return tuple(points)


def pt100_resistance_ohm(temperature_degc: float) -> float:
    """Resistance of an industrial platinum thermometer of 100 ohm at 0 degC (Callendar-Van Dusen).

    Parameters
    ----------
    temperature_degc : float
        Temperature [degC], -200 to 850.

    Returns
    -------
    float
        Resistance [ohm].

    Raises
    ------
    ValueError
        The temperature is outside -200 to 850 degC.

    Source: IEC 60751:2022, Industrial platinum resistance thermometers, clause 4.2.
    """
    t = temperature_degc
    if not -200.0 <= t <= 850.0:
        raise ValueError(f"a Pt100 is defined from -200 to 850 degC, not at {t:g} degC")
    a, b, c = 3.9083e-3, -5.775e-7, -4.183e-12
    below_zero = c * (t - 100.0) * t**3 if t < 0.0 else 0.0
    return 100.0 * (1.0 + a * t + b * t**2 + below_zero)


# IEC 60751:2022, tolerance classes: constant [degC] and share of the temperature (AA, C from memory).
PT100_TOLERANCES = {"AA": (0.1, 0.0017), "A": (0.15, 0.002), "B": (0.3, 0.005), "C": (0.6, 0.01)}


def pt100_tolerance_degc(temperature_degc: float, tolerance_class: str) -> float:
    """Return the tolerance [degC] of a Pt100 of class AA, A, B or C at a temperature [degC]."""
    if tolerance_class not in PT100_TOLERANCES:
        raise ValueError(f"no Pt100 tolerance class {tolerance_class}; IEC 60751 has AA, A, B and C")
    constant, share = PT100_TOLERANCES[tolerance_class]
    return constant + share * abs(temperature_degc)
