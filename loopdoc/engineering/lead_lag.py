"""The lead-lag, a signal led by one time constant and lagged by another."""

import math
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class LeadLag:
    """A lead-lag, (1 + lead s)/(1 + lag s), of steady gain one.

    Source: D. E. Seborg and others, Process Dynamics and Control, ch. 15 (feedforward control; from memory).
    """

    lead_s: float
    """Lead [s] >= 0; 0 for a lag alone."""
    lag_s: float
    """Lag [s] > 0."""

    def __post_init__(self) -> None:
        if not (math.isfinite(self.lead_s) and self.lead_s >= 0.0):
            raise ValueError("the lead must be a finite time of zero or more")
        if not (math.isfinite(self.lag_s) and self.lag_s > 0.0):
            raise ValueError("the lag must be a finite time above zero: a lead alone cannot be built")
