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


def limits_from(policy: dict[str, float]) -> Limits:
    """The limits with what the register sets in place of the defaults; unknown names are the schema's business."""
    names = {entry.name for entry in fields(Limits)}
    return Limits(**{name: value for name, value in policy.items() if name in names})


def policy_entries() -> tuple[Field[float], ...]:
    """Name, default, unit, meaning and source of every threshold, for documents and `loopdoc rules`."""
    return fields(Limits)
