"""The thresholds of the rules: each default with its unit, its meaning and its source.

A register changes one under `policy:`; no rule has a threshold in its body.
"""

from __future__ import annotations

from dataclasses import Field, dataclass, field, fields
from typing import Any


def _limit(default: float, *, unit: str, meaning: str, source: str) -> Any:
    return field(default=default, metadata={"unit": unit, "meaning": meaning, "source": source})


_DEADBAND = "ANSI/ISA-18.2-2009 (R2016), clause 10, starting values by type of signal, after EEMUA 191 (from memory)"
_DELAY = _DEADBAND


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
    low_flow: float = _limit(
        25.0,
        unit="% of the range",
        meaning="below this part of its range a flow measured by differential pressure is called poorly resolved",
        source="common practice: a turndown of 4 to 1; figures run from 25 to 30 %",
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
    loop_check_tolerance: float = _limit(
        0.5,
        unit="% of span",
        meaning="above this error of a reading a loop check fails, where the measurement states no tolerance of its "
        "own",
        source="common practice",
    )
    travel_tolerance: float = _limit(
        2.0,
        unit="% of travel",
        meaning="above this error of a final element's opening its stroke test fails",
        source="common practice",
    )
    alarm_deadband_flow: float = _limit(
        5.0,
        unit="% of the measurement range",
        meaning="the usual dead band of an alarm on a flow",
        source=_DEADBAND,
    )
    alarm_deadband_level: float = _limit(
        5.0,
        unit="% of the measurement range",
        meaning="the usual dead band of an alarm on a level",
        source=_DEADBAND,
    )
    alarm_deadband_pressure: float = _limit(
        2.0,
        unit="% of the measurement range",
        meaning="the usual dead band of an alarm on a pressure or differential pressure",
        source=_DEADBAND,
    )
    alarm_deadband_temperature: float = _limit(
        1.0,
        unit="% of the measurement range",
        meaning="the usual dead band of an alarm on a temperature",
        source=_DEADBAND,
    )
    alarm_deadband_low: float = _limit(
        0.4,
        unit="dead band per usual dead band",
        meaning="below this share of the usual dead band an alarm without the usual delay is said to chatter",
        source="common practice; published tables of the usual dead band differ by this factor",
    )
    alarm_deadband_high: float = _limit(
        4.0,
        unit="dead band per usual dead band",
        meaning="above this multiple of the usual dead band an alarm is said to stand too long",
        source="common practice",
    )
    alarm_delay_flow: float = _limit(
        15.0,
        unit="s",
        meaning="the usual delay of an alarm on a flow",
        source=_DELAY,
    )
    alarm_delay_level: float = _limit(
        60.0,
        unit="s",
        meaning="the usual delay of an alarm on a level",
        source=_DELAY,
    )
    alarm_delay_pressure: float = _limit(
        15.0,
        unit="s",
        meaning="the usual delay of an alarm on a pressure or differential pressure",
        source=_DELAY,
    )
    alarm_delay_temperature: float = _limit(
        60.0,
        unit="s",
        meaning="the usual delay of an alarm on a temperature",
        source=_DELAY,
    )
    alarm_delay_high: float = _limit(
        4.0,
        unit="delay per usual delay",
        meaning="above this multiple of the usual delay an alarm is said to come late",
        source="common practice",
    )
    alarm_mix_count: float = _limit(
        20.0,
        unit="alarms of one unit",
        meaning="below this number of alarms the shares of the priorities are not judged",
        source="common practice: with fewer, one alarm is more than the 5 % that are to be of high priority",
    )
    alarm_share_high: float = _limit(
        10.0,
        unit="% of the alarms of one unit",
        meaning="above this share of alarms of high or critical priority the priorities say too little",
        source="twice the 5 % of ANSI/ISA-18.2-2016 Table 6 and EEMUA 191; the factor is common practice",
    )
    alarm_share_raised: float = _limit(
        40.0,
        unit="% of the alarms of one unit",
        meaning="above this share of alarms of more than low priority the priorities say too little",
        source="twice the 20 % of ANSI/ISA-18.2-2016 Table 6 and EEMUA 191; the factor is common practice",
    )
    bypass_time: float = _limit(
        72.0,
        unit="h",
        meaning="above this limit in time a bypass of an interlock is called as good as unlimited",
        source="common practice: three days, after which a bypass is a change of the plant",
    )


def limits_from(policy: dict[str, float]) -> Limits:
    """The limits with what the register sets in place of the defaults; unknown names are the schema's business."""
    names = {entry.name for entry in fields(Limits)}
    return Limits(**{name: value for name, value in policy.items() if name in names})


def policy_entries() -> tuple[Field[float], ...]:
    """Name, default, unit, meaning and source of every threshold, for documents and `loopdoc rules`."""
    return fields(Limits)
