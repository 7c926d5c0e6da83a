"""When the response to an upset first passes a limit: exact for lags, leads, dead time and integration."""

import math
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from loopdoc.engineering.process import FloatArray, Process, StateSpace, state_space, transition

# Times tried before the first passage is closed in on: so many in each decade, over so many decades.
_PER_DECADE = 8
_DECADES = 5
# A response through n lags is within 1e-15 of its end after so many times the largest, for each of them.
_LAGS_TO_END = 40.0
# Steps of false position that close in on it; a dozen are enough as a rule.
_STEPS_MOST = 60


@dataclass(frozen=True, slots=True, eq=False)
class _Steps:
    """Steps that arrive at full rate through paths of equal order, scaled so that the limit is 1; all are (n,)."""

    system: StateSpace
    scale: FloatArray
    """Gain times size over the limit."""
    ramp_s: FloatArray
    horizon_s: FloatArray

    def at(self, time_s: FloatArray) -> FloatArray:
        """(n,) response at one time for each path [limit = 1]."""
        rising_s = np.minimum(time_s, self.ramp_s)
        arrived = np.divide(rising_s, self.ramp_s, out=np.ones_like(time_s), where=self.ramp_s > 0.0)
        _, _, ramped = transition(self.system, rising_s)
        advance, held, _ = transition(self.system, time_s - rising_s)
        state = np.einsum("nij,nj->ni", advance, ramped * arrived[:, None]) + held
        response: FloatArray = self.scale * ((self.system.c * state).sum(axis=1) + self.system.d * arrived)
        return response


def crossing_times(
    paths: Sequence[Process], *, size_pct: FloatArray, ramp_s: FloatArray, limit_pct: FloatArray
) -> FloatArray:
    """Times at which the responses of paths at rest to a step first reach a limit.

    Parameters
    ----------
    paths : sequence of n Process
        From the upset to the measurement.
    size_pct : (n,) float array
        Size of the step at the input of each path [%].
    ramp_s : (n,) float array
        Time in which it arrives at a constant rate [s] >= 0; 0 for a step at once.
    limit_pct : (n,) float array
        How far the limit lies from the start, with its sign [%]; not zero.

    Returns
    -------
    (n,) float array
        Time from the upset [s], the dead time included; infinite where the limit is never reached.

    Raises
    ------
    ValueError
        A limit is zero.

    Source: response of a linear state-space model to a held input and to a ramp, exact at any time; G. F. Franklin,
    J. D. Powell, M. Workman, Digital Control of Dynamic Systems, 3rd ed. 1998 (section from memory).
    """
    if not np.all(limit_pct):
        raise ValueError("a limit at the start itself has no time to be reached")
    found = np.empty(len(paths))
    by_order: dict[int, list[int]] = defaultdict(list)
    for position, path in enumerate(paths):
        by_order[path.order].append(position)
    for members in by_order.values():
        at = np.array(members)
        group = [paths[i] for i in members]
        scale = np.array([path.gain for path in group]) * size_pct[at] / limit_pct[at]
        steps = _Steps(state_space(group), scale, ramp_s[at], _horizons(group, scale, ramp_s[at]))
        found[at] = _first_passage(steps) + np.array([path.dead_time_s for path in group])
    return found


def _horizons(paths: Sequence[Process], scale: FloatArray, ramp_s: FloatArray) -> FloatArray:
    """(n,) times by which each limit is reached, if it ever is [s]."""
    lags = np.array([math.fsum(path.lags_s) for path in paths])
    leads = np.array([math.fsum(map(abs, path.leads_s)) for path in paths])
    longest = np.array([max(path.lags_s, default=0.0) * path.order for path in paths])
    integrating = np.array([path.integrating for path in paths])
    with np.errstate(divide="ignore"):
        # A ramp of slope `scale` stands at the limit of 1 after 1/scale, and its lags hold it back by their sum.
        ramped = np.where(scale > 0.0, 1.0 / np.maximum(scale, 1e-300), 0.0) + lags + leads
    horizon: FloatArray = ramp_s + np.where(integrating, 2.0 * ramped, _LAGS_TO_END * longest)
    return horizon


def _first_passage(steps: _Steps) -> FloatArray:
    """(n,) times after the dead time [s]."""
    shares = np.concatenate(([0.0], np.logspace(-_DECADES, 0.0, _DECADES * _PER_DECADE + 1)))
    low, high = np.zeros_like(steps.scale), np.full_like(steps.scale, math.inf)
    before = np.zeros_like(steps.scale)
    for share in shares.tolist():
        time_s = share * steps.horizon_s
        reached = (steps.at(time_s) >= 1.0) & np.isinf(high)
        low[reached], high[reached] = before[reached], time_s[reached]
        before = time_s
    open_ones = np.isfinite(high)
    found = high.copy()
    high = np.where(open_ones, high, 0.0)
    over_low, over_high = steps.at(low) - 1.0, steps.at(high) - 1.0
    moved_high = moved_low = np.zeros_like(open_ones)
    for _ in range(_STEPS_MOST):
        if not open_ones.any():
            break
        width = over_high - over_low
        time_s = np.where(width > 0.0, high - over_high * (high - low) / np.where(width > 0.0, width, 1.0), high)
        over = steps.at(time_s) - 1.0
        found = np.where(open_ones, time_s, found)
        after = over >= 0.0
        # The Illinois rule: an end that stays where it was for the second time counts half.
        over_low = np.where(after, np.where(moved_high, 0.5 * over_low, over_low), over)
        over_high = np.where(after, over, np.where(moved_low, 0.5 * over_high, over_high))
        low, high = np.where(after, low, time_s), np.where(after, time_s, high)
        moved_high, moved_low = after, ~after
        open_ones &= (np.abs(over) > 1e-12) & (high - low > 1e-13 * high)
    return found
