"""Reduction of a process to a first- or second-order model with dead time (half rule)."""

import math
from dataclasses import dataclass

from loopdoc.engineering.process import Process

# A smaller lag is close to a lead up to this ratio of the lead to it.
_CLOSE = 1.6


@dataclass(frozen=True, slots=True)
class ReducedModel:
    """First- or second-order model with dead time."""

    gain: float
    """Gain [dimensionless, % per %]; when integrating the slope [1/s]."""
    lag_s: float
    """Dominant lag [s]; infinite when integrating."""
    second_lag_s: float
    """Second lag [s]; 0 for a first-order model."""
    dead_time_s: float
    """Effective dead time [s]."""

    @property
    def integrating(self) -> bool:
        """True where the model ramps instead of settling."""
        return math.isinf(self.lag_s)

    @property
    def slope(self) -> float:
        """Initial slope of the step response [1/s]."""
        return self.gain if self.integrating else self.gain / self.lag_s


def _without_leads(process: Process, closed_loop_s: float) -> tuple[float, list[float]]:
    """Gain and lags, largest first, after each positive lead has been joined with the nearest lag."""
    gain = process.gain
    lags = sorted((lag for lag in process.lags_s if lag > 0.0), reverse=True)
    for lead in sorted((lead for lead in process.leads_s if lead > 0.0), reverse=True):
        if not lags:
            raise ValueError("a lead on an integration alone cannot be reduced to a model with dead time")
        lag = _partner(lead, lags)
        lags.remove(lag)
        if lead >= lag:
            gain *= max(lead, closed_loop_s) / max(lag, closed_loop_s)
        elif lead >= 5.0 * closed_loop_s:
            gain *= lead / lag
        else:
            shortened = min(lag, 5.0 * closed_loop_s)
            gain *= shortened / lag
            lags.append(shortened - lead)
        lags.sort(reverse=True)
    return gain, lags


def _partner(lead: float, lags: list[float]) -> float:
    """The lag that a lead is joined with: the next larger one, or the next smaller where that is closer."""
    larger = [lag for lag in lags if lag >= lead]
    smaller = [lag for lag in lags if lag < lead]
    if not larger:
        return max(smaller)
    above, below = min(larger), max(smaller, default=0.0)
    # At the limit itself the larger is taken, as the example E2 of the source does.
    is_close = lead < (1.0 - 1e-9) * _CLOSE * below and lead / below < above / lead
    return below if is_close else above


def _reduce_from(process: Process, order: int, fixed_s: float, start_s: float) -> ReducedModel:
    """Half rule, the closed-loop time of the rules for leads taken as the dead time that they lead to."""
    dead_time = start_s
    for _ in range(10):
        gain, lags = _without_leads(process, dead_time)
        kept = [math.inf, *lags] if process.integrating else list(lags)
        kept += [0.0] * (order + 1 - len(kept))
        neglected = kept[order]
        # Half of a lag cannot be given to an integration: it all counts as dead time.
        half = 0.0 if math.isinf(kept[order - 1]) else neglected / 2.0
        kept[order - 1] += half
        main = sorted(kept[:order], reverse=True)
        reduced = ReducedModel(
            gain=gain,
            lag_s=main[0],
            second_lag_s=main[1] if order == 2 else 0.0,
            dead_time_s=fixed_s + neglected - half + math.fsum(kept[order + 1 :]),
        )
        if math.isclose(reduced.dead_time_s, dead_time, rel_tol=1e-12):
            break
        dead_time = reduced.dead_time_s
    return reduced


def _reduce(process: Process, *, order: int, interval_s: float) -> ReducedModel:
    inverse = -math.fsum(lead for lead in process.leads_s if lead < 0.0)
    fixed = process.dead_time_s + inverse + interval_s / 2.0
    # With leads a fast and a slow closed loop may both agree with their own model. The fast one is right
    # where every lead acts long before it; at the five closed-loop times of the rule it is too hopeful.
    tight = _reduce_from(process, order, fixed, fixed)
    leads = [lead for lead in process.leads_s if lead > 0.0]
    if not leads or min(leads) >= 10.0 * tight.dead_time_s > 0.0:
        return tight
    return _reduce_from(process, order, fixed, fixed + math.fsum(process.lags_s))


def reduce_to_first_order(process: Process, *, interval_s: float = 0.0) -> ReducedModel:
    """First-order model with dead time by the half rule, half of the execution interval included.

    Parameters
    ----------
    process : Process
        The process.
    interval_s : float
        Execution interval of the controller [s].

    Returns
    -------
    ReducedModel
        Gain [dimensionless] or slope [1/s], lag [s], dead time [s].

    Raises
    ------
    ValueError
        There is a lead on an integration without lags.

    Source: S. Skogestad, "Simple analytic rules for model reduction and PID controller tuning",
    J. Process Control 13:291-309, 2003, section 2 (half rule, rules T1 to T3 for leads; wording from
    memory). An integrating process takes the neglected lags whole as dead time, as its example E6 does.
    """
    return _reduce(process, order=1, interval_s=interval_s)


def reduce_to_second_order(process: Process, *, interval_s: float = 0.0) -> ReducedModel:
    """Second-order model with dead time by the half rule; see `reduce_to_first_order`.

    Parameters
    ----------
    process : Process
        The process.
    interval_s : float
        Execution interval of the controller [s].

    Returns
    -------
    ReducedModel
        Gain [dimensionless] or slope [1/s], two lags [s], dead time [s].

    Raises
    ------
    ValueError
        There is a lead on an integration without lags.

    Source: as for `reduce_to_first_order`.
    """
    return _reduce(process, order=2, interval_s=interval_s)
