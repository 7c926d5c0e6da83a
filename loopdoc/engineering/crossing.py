"""When the response to an upset first passes a limit: exact for lags, leads, dead time and integration."""

import math
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

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
    arrived: FloatArray
    """(n, m) state when the whole step has arrived."""

    def take(self, rows: NDArray[np.intp]) -> "_Steps":
        """Return the steps of the given rows."""
        return _Steps(
            self.system.take(rows), self.scale[rows], self.ramp_s[rows], self.horizon_s[rows], self.arrived[rows]
        )

    def at(self, time_s: FloatArray) -> FloatArray:
        """(n,) response at one time for each path [limit = 1]."""
        response = np.empty_like(time_s)
        arriving = time_s < self.ramp_s
        for rows in (np.flatnonzero(arriving), np.flatnonzero(~arriving)):
            if not len(rows):
                continue
            part, since_s = self.take(rows), time_s[rows]
            if arriving[rows[0]]:
                share = since_s / part.ramp_s
                state = transition(part.system, since_s)[2] * share[:, None]
            else:
                share = np.ones(len(rows))
                advance, held, _ = transition(part.system, since_s - part.ramp_s)
                state = np.einsum("nij,nj->ni", advance, part.arrived) + held
            response[rows] = part.scale * ((part.system.c * state).sum(axis=1) + part.system.d * share)
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
        system = state_space(group)
        arrived = transition(system, ramp_s[at])[2]
        steps = _Steps(system, scale, ramp_s[at], _horizons(group, scale, ramp_s[at]), arrived)
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
    waiting = np.arange(len(high))
    for share in shares.tolist():
        time_s = share * steps.horizon_s
        passed = steps.take(waiting).at(time_s[waiting]) >= 1.0
        reached, waiting = waiting[passed], waiting[~passed]
        low[reached], high[reached] = before[reached], time_s[reached]
        before = time_s
    found = high.copy()
    rows = np.flatnonzero(np.isfinite(high))
    part, low, high = steps.take(rows), low[rows], high[rows]
    over_low, over_high = part.at(low) - 1.0, part.at(high) - 1.0
    moved_high = moved_low = np.zeros(len(rows), dtype=np.bool_)
    for _ in range(_STEPS_MOST):
        if not len(rows):
            break
        width = over_high - over_low
        time_s = np.where(width > 0.0, high - over_high * (high - low) / np.where(width > 0.0, width, 1.0), high)
        over = part.at(time_s) - 1.0
        found[rows] = time_s
        after = over >= 0.0
        # The Illinois rule: an end that stays where it was for the second time counts half.
        over_low = np.where(after, np.where(moved_high, 0.5 * over_low, over_low), over)
        over_high = np.where(after, over, np.where(moved_low, 0.5 * over_high, over_high))
        low, high = np.where(after, low, time_s), np.where(after, time_s, high)
        left = np.flatnonzero((np.abs(over) > 1e-12) & (high - low > 1e-13 * high))
        rows, part, moved_high, moved_low = rows[left], part.take(left), after[left], ~after[left]
        low, high, over_low, over_high = low[left], high[left], over_low[left], over_high[left]
    return found
