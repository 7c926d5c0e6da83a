"""Exact response of lags, integration and dead time to an input that is held between irregular times.

The lags act on the input before the dead time does, so that one pass over the input's changes serves every
dead time and every sample time: the state at a change is carried to any later moment by closed forms.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_banded

FloatArray = NDArray[np.float64]

_MANY_CHANGES = 300  # from here on a banded solution is faster than a loop; a step test has a handful


@dataclass(frozen=True, slots=True, eq=False)
class HeldInput:
    """An input that keeps each value until the next change; before the first time it has the first value."""

    time_s: FloatArray
    """(k,) strictly increasing times [s]: the start of the record, then each change."""
    value: FloatArray
    """(k,) the value from that time on, in the input's units."""


def held_input(time_s: FloatArray, value: FloatArray) -> HeldInput:
    """Return the record of an input as its changes only.

    Parameters
    ----------
    time_s : (n,) float array
        Strictly increasing sample times [s].
    value : (n,) float array
        The input at each sample, held until the next, in its own units.

    Returns
    -------
    HeldInput
        The first sample and each one that differs from the sample before it.
    """
    kept = np.concatenate(([True], np.diff(value) != 0.0))
    return HeldInput(time_s[kept], value[kept])


@dataclass(frozen=True, slots=True, eq=False)
class UnitResponse:
    """Response per unit of gain to an input, as its departure from the input's first value."""

    value: FloatArray
    """(..., n) the response, in the input's units; when integrating, in those units times seconds."""
    rate: FloatArray
    """(..., n) its rate of change [1/s]."""


def unit_response(
    held: HeldInput,
    *,
    lags_s: tuple[float, ...],
    integrating: bool,
    dead_time_s: float | FloatArray,
    time_s: FloatArray,
) -> UnitResponse:
    """Return the response of a process of unit gain that was at rest before the record.

    Parameters
    ----------
    held : HeldInput
        k values of the input.
    lags_s : tuple of float
        None, one or two lags [s] > 0; with integration none or one.
    integrating : bool
        Whether the process integrates.
    dead_time_s : float or (m,) float array
        Dead time [s] >= 0, or several of them.
    time_s : (n,) float array
        Times of the response [s], none before the first time of the input.

    Returns
    -------
    UnitResponse
        ``value`` and ``rate`` are (n,), or (m, n) for several dead times.

    Raises
    ------
    ValueError
        The lags are more than the closed forms cover.

    Source: G. F. Franklin, J. D. Powell, M. Workman, Digital Control of Dynamic Systems, 3rd ed. 1998
    (zero-order hold; section from memory); the closed forms are elementary.
    """
    if len(lags_s) > (1 if integrating else 2):
        raise ValueError("a response has two lags at most, or one where the process integrates")
    moment = time_s - np.asarray(dead_time_s, dtype=np.float64)[..., None]
    at = np.maximum(np.searchsorted(held.time_s, moment, side="right") - 1, 0)
    since = np.maximum(moment - held.time_s[at], 0.0)
    u = held.value - held.value[0]
    width = np.diff(held.time_s)
    if not lags_s:
        if not integrating:
            return UnitResponse(u[at], np.zeros_like(since))
        area = np.concatenate(([0.0], np.cumsum(u[:-1] * width)))
        return UnitResponse(area[at] + u[at] * since, u[at])
    if len(lags_s) == 1:
        (lag,) = lags_s
        gap = u - _states(np.exp(-width / lag), -np.expm1(-width / lag) * u[:-1])
        left = gap[at] * np.exp(-since / lag)
        first = u[at] - left
        if not integrating:
            return UnitResponse(first, left / lag)
        area = np.concatenate(([0.0], np.cumsum(u[:-1] * width + gap[:-1] * lag * np.expm1(-width / lag))))
        return UnitResponse(area[at] + u[at] * since + gap[at] * lag * np.expm1(-since / lag), first)
    slow, fast = max(lags_s), min(lags_s)
    first_gap = u - _states(np.exp(-width / slow), -np.expm1(-width / slow) * u[:-1])
    drive = -np.expm1(-width / fast) * u[:-1] - first_gap[:-1] * _passed_on(width, slow, fast)
    second_gap = u - _states(np.exp(-width / fast), drive)
    passed_on = first_gap[at] * _passed_on(since, slow, fast)
    second = u[at] - second_gap[at] * np.exp(-since / fast) - passed_on
    first = u[at] - first_gap[at] * np.exp(-since / slow)
    return UnitResponse(second, (first - second) / fast)


def start_terms(time_s: FloatArray, lags_s: tuple[float, ...]) -> FloatArray:
    """Return how a start away from rest dies out: one term for each lag.

    Parameters
    ----------
    time_s : (n,) float array
        Times since the start of the record [s] >= 0.
    lags_s : tuple of float
        None, one or two lags [s] > 0.

    Returns
    -------
    (n, number of lags) float array
        Response of the last lag to a unit departure of each lag's state [dimensionless].
    """
    if not lags_s:
        return np.zeros((len(time_s), 0))
    own = np.exp(-time_s / min(lags_s))
    if len(lags_s) == 1:
        return own[:, None]
    return np.column_stack((own, _passed_on(time_s, max(lags_s), min(lags_s))))


def _states(decay: FloatArray, drive: FloatArray) -> FloatArray:
    """States of z[i+1] = decay[i] z[i] + drive[i] from rest."""
    if len(decay) > _MANY_CHANGES:
        beside = np.ones((2, len(decay) + 1))
        beside[1, :-1] = -decay
        solved: FloatArray = solve_banded((1, 0), beside, np.concatenate(([0.0], drive)), check_finite=False)
        return solved
    states = [0.0]
    for share, added in zip(decay.tolist(), drive.tolist(), strict=True):
        states.append(share * states[-1] + added)
    return np.array(states)


def _passed_on(time_s: FloatArray, slow: float, fast: float) -> FloatArray:
    """What a unit departure of the slow lag's state has become at the fast lag's output after a time.

    slow (e^(-t/slow) - e^(-t/fast)) / (slow - fast), written so that equal lags give their limit t/lag e^(-t/lag).
    """
    apart = (1.0 / fast - 1.0 / slow) * time_s
    small = apart < 1e-8
    share = np.where(small, 1.0 - apart / 2.0, -np.expm1(-apart) / np.where(small, 1.0, apart))
    passed: FloatArray = np.exp(-time_s / slow) * share * time_s / fast
    return passed

