"""The thresholds of the rules: each default with its unit, its meaning and its source.

A register changes one under `policy:`; no rule has a threshold in its body.
"""

from __future__ import annotations

from dataclasses import Field, dataclass, field, fields
from typing import Any


def _limit(default: float, *, unit: str, meaning: str, source: str) -> Any:
    return field(default=default, metadata={"unit": unit, "meaning": meaning, "source": source})


@dataclass(frozen=True, slots=True)
class Limits:
    """The thresholds in force for one register."""

    secondary_range_ratio: float = _limit(
        1.5,
        unit="span of the secondary per span that the primary may ask for",
        meaning="above this ratio the secondary's range is called too wide for its primary",
        source="common practice",
    )
    split_range_gap: float = _limit(
        2.0,
        unit="% of the output",
        meaning="above this width a band of a split range in which nothing moves is told",
        source="common practice",
    )
    split_range_overlap: float = _limit(
        2.0,
        unit="% of the output",
        meaning="above this width a band of a split range in which two elements move is told",
        source="common practice",
    )
    cascade_speed_ratio: float = _limit(
        4.0,
        unit="crossover of the secondary per crossover of the primary",
        meaning="below this ratio the secondary is called too slow for its primary",
        source="the cascade rule of four of G. K. McMillan; published thresholds run from 3 to 10",
    )
    cascade_error_ratio: float = _limit(
        0.9,
        unit="error of the cascade per error of a single loop",
        meaning="above this ratio, after an upset at its secondary, a cascade is said to be of no benefit",
        source="common practice",
    )
    max_sensitivity: float = _limit(
        2.0,
        unit="dimensionless",
        meaning="above this maximum sensitivity Ms the margins of a loop are called low",
        source="K. J. Astrom, T. Hagglund, Advanced PID Control, ISA 2006: 1.2 to 2.0 (from memory)",
    )
    gain_margin: float = _limit(
        1.7,
        unit="dimensionless",
        meaning="below this gain margin the margins of a loop are called low",
        source="D. E. Seborg and others, Process Dynamics and Control: 1.7 to 4.0 (from memory)",
    )
    phase_margin: float = _limit(
        30.0,
        unit="deg",
        meaning="below this phase margin the margins of a loop are called low",
        source="D. E. Seborg and others, Process Dynamics and Control: 30 to 45 deg (from memory)",
    )
    interval_crossover: float = _limit(
        0.5,
        unit="rad",
        meaning="above this product of execution interval and crossover a controller is executed too seldom",
        source="K. J. Astrom, B. Wittenmark, Computer-Controlled Systems: 0.15 to 0.5 (from memory)",
    )
    filter_phase_lag: float = _limit(
        20.0,
        unit="deg",
        meaning="above this phase lag at crossover a measurement filter is called too slow",
        source="common practice: a third of the usual phase margin of 60 deg",
    )
    stroke_move: float = _limit(
        10.0,
        unit="% of travel",
        meaning="a final element that cannot swing by this much at the crossover of its loop is called too slow",
        source="common practice",
    )
    interlock_time_share: float = _limit(
        0.5,
        unit="response time per process safety time",
        meaning="above this share the response of an interlock is called slow",
        source="common practice; IEC 61511-1:2016 wants the response within the process safety time (from memory)",
    )


def limits_from(policy: dict[str, float]) -> Limits:
    """The limits with what the register sets in place of the defaults; unknown names are the schema's business."""
    names = {entry.name for entry in fields(Limits)}
    return Limits(**{name: value for name, value in policy.items() if name in names})


def policy_entries() -> tuple[Field[float], ...]:
    """Name, default, unit, meaning and source of every threshold, for documents and `loopdoc rules`."""
    return fields(Limits)
