"""What a cascade saves of an upset at its secondary, against one loop on the same final element, without simulation.

By Parseval's theorem the integrated squared error of a linear loop is an integral over frequencies, in which
the loop appears by its sensitivity alone:

    integral of e(t)^2 dt  =  1/pi  integral of |E(jw)|^2 dw
    E = P D S2 S1   with the cascade          E = P D S   with the single loop

P is the process of the primary, D the upset at the secondary's measurement, S2 and S1 are 1/(1 + L) of secondary
and primary, S of the single loop. Limits of outputs and setpoints do not act: small upsets.
"""

import math
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from loopdoc.engineering.frequency import LoopStage
from loopdoc.engineering.open_loop import level_arrays, open_loops, static_gains
from loopdoc.engineering.process import FloatArray

# Frequencies a decade, and how far they reach beyond every break and crossover: the integral has converged to
# four digits, lightly damped loops included.
_PER_DECADE = 80
_REACH = 300.0
# Cascades at once: large enough for numpy, small enough for the processor's cache.
_CHUNK = 50


@dataclass(frozen=True, slots=True)
class Rival:
    """A cascade, and the single loop that would stand in its place."""

    stages: tuple[LoopStage, ...]
    """Innermost first, at least two; stable."""
    single: LoopStage
    """One controller on all the processes in series; stable."""


def error_ratios(rivals: Sequence[Rival]) -> FloatArray:
    """Root of the integrated squared error after an upset at the secondary, cascade over single loop.

    The upset is a step at the measurement below the outermost, through the lags of its own process (a load where
    that integrates); what counts is the error of the outermost measurement.

    Parameters
    ----------
    rivals : sequence of n Rival
        Cascades with their single loops.

    Returns
    -------
    (n,) float array
        Ratio [dimensionless]; nan where the error of one of the two does not die out.

    Raises
    ------
    ValueError
        A cascade has fewer than two levels.

    Source: A. V. Oppenheim, A. S. Willsky, Signals and Systems, 2nd ed. 1997 (Parseval's relation, from memory);
    the cascade by D. E. Seborg and others, Process Dynamics and Control, ch. 16 (from memory).
    """
    found = np.empty(len(rivals))
    by_depth: dict[int, list[int]] = defaultdict(list)
    for position, rival in enumerate(rivals):
        if len(rival.stages) < 2:
            raise ValueError("a cascade has two levels at least")
        by_depth[len(rival.stages)].append(position)
    for members in by_depth.values():
        for start in range(0, len(members), _CHUNK):
            chunk = members[start : start + _CHUNK]
            found[chunk] = _ratios([rivals[i] for i in chunk])
    return found


def _ratios(rivals: Sequence[Rival]) -> FloatArray:
    depth = len(rivals[0].stages)
    levels = [
        level_arrays(
            [rival.stages[k].controller for rival in rivals], [rival.stages[k].path for rival in rivals]
        )
        for k in range(depth)
    ]
    single = [level_arrays([rival.single.controller for rival in rivals], [rival.single.process for rival in rivals])]
    w = _frequencies(rivals)
    loops = open_loops(levels, w)
    cascade = 1.0 / np.abs((1.0 + loops[-1]) * (1.0 + loops[-2]))
    alone = 1.0 / np.abs(1.0 + open_loops(single, w)[0])
    weight = _upset_spectrum(rivals, w)
    poles = [zeros for zeros, _ in static_gains(levels)]
    # Zeros of E at the origin, from the integrations of the loops, against the poles of the upset on its way.
    integrating = [[stage.process.integrating for stage in rival.stages[-2:]] for rival in rivals]
    upset = 1 + np.sum(integrating, axis=1)
    settles = (poles[-1] + poles[-2] >= upset) & (static_gains(single)[0][0] >= upset)
    with np.errstate(invalid="ignore"):
        # dw = w d(ln w): the trapezoidal rule on a logarithmic scale.
        ratio = np.sqrt(_integral((weight * cascade) ** 2 * w, w) / _integral((weight * alone) ** 2 * w, w))
    return np.where(settles, ratio, math.nan)


def _integral(values: FloatArray, w: FloatArray) -> FloatArray:
    steps = np.diff(np.log(w), axis=1)
    area: FloatArray = ((values[:, 1:] + values[:, :-1]) * steps / 2.0).sum(axis=1)
    return area


def _upset_spectrum(rivals: Sequence[Rival], w: FloatArray) -> FloatArray:
    """(n, m) size of P D for a unit step, without the dead times, which turn the phase only."""
    spectrum: FloatArray = 1.0 / w
    for row, rival in enumerate(rivals):
        primary, secondary = rival.stages[-1].process, rival.stages[-2].process
        s = 1j * w[row]
        for lead in primary.leads_s:
            spectrum[row] *= np.abs(1.0 + lead * s)
        for lag in (*primary.lags_s, *secondary.lags_s):
            spectrum[row] /= np.abs(1.0 + lag * s)
        for process in (primary, secondary):
            if process.integrating:
                spectrum[row] /= w[row]
    return spectrum


def _frequencies(rivals: Sequence[Rival]) -> FloatArray:
    """(n, m) frequencies well outside every break of the loops [rad/s]."""
    low, high = np.empty(len(rivals)), np.empty(len(rivals))
    for row, rival in enumerate(rivals):
        rates = [rate for stage in (*rival.stages, rival.single) for rate in _rates(stage)]
        low[row], high[row] = min(rates) / _REACH, max(rates) * _REACH
    count = _PER_DECADE * math.ceil(float(np.log10(high / low).max())) + 1
    share = np.linspace(0.0, 1.0, count)
    spread: FloatArray = np.exp(np.log(low)[:, None] + np.log(high / low)[:, None] * share)
    return spread


def _rates(stage: LoopStage) -> list[float]:
    """Frequencies at which something of a loop breaks or its gain passes through 1 [rad/s]."""
    controller, process = stage.controller, stage.process
    gain = abs(controller.gain * process.gain)
    times = [*process.lags_s, *map(abs, process.leads_s), process.dead_time_s + controller.interval_s / 2.0]
    times += [controller.measurement_filter_s, controller.rate_s]
    rates = [1.0 / time for time in times if time > 0.0]
    if math.isfinite(controller.reset_s):
        rates += [1.0 / controller.reset_s, gain / controller.reset_s]
    rates += [gain / lag for lag in process.lags_s if lag > 0.0]
    if process.integrating:
        rates += [gain, math.sqrt(gain / controller.reset_s)] if math.isfinite(controller.reset_s) else [gain]
    return [rate for rate in rates if rate > 0.0]
