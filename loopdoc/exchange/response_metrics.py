"""What is read off a time response, as the cells of a line of text and as JSON."""

from __future__ import annotations

import math
from typing import Any

from loopdoc.engineering.response_metrics import ResponseMetrics
from loopdoc.exchange.tuning_review import number
from loopdoc.register.quantity import Range, display_number


def metrics_object(metrics: ResponseMetrics, own: Range) -> dict[str, Any]:
    """Metrics in the unit of a range and in seconds."""
    per_pct = own.span / 100.0
    return {
        "iae": number(metrics.iae_pct_s * per_pct),
        "peak": number(metrics.peak_pct * per_pct),
        "settling_s": number(metrics.settling_s),
        "time_to_peak_s": number(metrics.time_to_peak_s),
        "overshoot_pct": number(metrics.overshoot_pct),
        "valve_travel_pct": number(metrics.valve_travel_pct),
        "reversals": metrics.reversals,
        "output_at_limit": metrics.limited_level is not None,
    }


def metric_heads(unit: str) -> str:
    """The heads over `metric_cells`."""
    return (
        f"{f'peak, {unit}':>14}{'at, s':>9}{f'IAE, {unit} s':>16}{'settling, s':>14}{'overshoot, %':>14}"
        f"{'valve travel, %':>17}{'reversals':>11}"
    )


def metric_cells(metrics: ResponseMetrics, own: Range, peak_time_s: float) -> str:
    """Metrics in one line; ``peak_time_s`` is nan where there is no peak."""
    per_pct = own.span / 100.0
    peak_time = "-" if math.isnan(peak_time_s) else shown(peak_time_s)
    return (
        f"{shown(metrics.peak_pct * per_pct):>14}{peak_time:>9}"
        f"{shown(metrics.iae_pct_s * per_pct, 4):>16}{shown(metrics.settling_s, 4):>14}"
        f"{shown(metrics.overshoot_pct):>14}{shown(metrics.valve_travel_pct):>17}{metrics.reversals:>11}"
    )


def shown(value: float, significant: int = 3) -> str:
    """A calculated number in text."""
    return "none" if math.isnan(value) else display_number(value, significant)
