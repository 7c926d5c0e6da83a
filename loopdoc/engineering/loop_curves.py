"""The open loop and the sensitivities of a controller over frequency, as they are drawn for a specialist."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from loopdoc.engineering.frequency import LoopStage, Margins
from loopdoc.engineering.open_loop import level_arrays, open_loops
from loopdoc.engineering.process import FloatArray
from loopdoc.engineering.sampled import SampledChain

POINTS = 300
"""Frequencies of a curve: two neighbours differ by about 2 %."""
_BELOW, _ABOVE = 50.0, 20.0
"""The curves reach from so far below the lowest crossover to so far above the highest."""


@dataclass(frozen=True, slots=True, eq=False)
class LoopCurves:
    """One loop over frequency, every loop below it closed; arrays are (n,)."""

    w_rad_per_s: FloatArray
    """Frequencies, evenly spread in their logarithm [rad/s]."""
    magnitude: FloatArray
    """|L| [dimensionless]."""
    phase_deg: FloatArray
    """Phase of L without jumps, between -270 and 90 degrees at the lowest frequency [deg]."""
    sensitivity: FloatArray
    """|S| = |1/(1 + L)| [dimensionless]."""
    complementary: FloatArray
    """|T| = |L/(1 + L)| [dimensionless]."""
    phase_margin_at: tuple[float, float] | None
    """Frequency [rad/s] and phase [deg] of the gain crossover that is nearest to -1; None where |L| never is 1."""


def loop_curves(stages: Sequence[LoopStage], margins: Margins) -> LoopCurves:
    """The outermost loop of a chain over the frequencies that matter to it.

    Parameters
    ----------
    stages : sequence of LoopStage
        Innermost level first, at least one.
    margins : Margins
        Those of the outermost level: around its crossovers the curves are taken, and where it is sampled they are
        those of the sampled loop. They end at half the sampling frequency.

    Returns
    -------
    LoopCurves
        Arrays of shape (300,) [rad/s], [dimensionless], [deg].

    Source: K. J. Astrom, R. M. Murray, Feedback Systems, 2nd ed. 2020, ch. 10 and 12 (loop transfer function,
    sensitivity functions).
    """
    w = _frequencies(stages[-1], margins)
    if margins.sampled:
        loop = SampledChain(stages).loop(len(stages) - 1, w)
    else:
        levels = [level_arrays([stage.controller], [stage.process]) for stage in stages]
        loop = open_loops(levels, w[None])[-1][0]
    phase_deg = np.degrees(np.unwrap(np.angle(loop)))
    phase_deg = phase_deg - 360.0 * math.ceil((phase_deg[0] - 90.0) / 360.0)
    magnitude = np.abs(loop)
    return LoopCurves(
        w_rad_per_s=w,
        magnitude=magnitude,
        phase_deg=phase_deg,
        sensitivity=1.0 / np.abs(1.0 + loop),
        complementary=np.abs(loop / (1.0 + loop)),
        phase_margin_at=_nearest_crossing(w, magnitude, phase_deg),
    )


def _frequencies(stage: LoopStage, margins: Margins) -> FloatArray:
    anchors = (margins.crossover_rad_per_s, margins.phase_crossover_rad_per_s, margins.bandwidth_rad_per_s)
    paces = [pace for pace in anchors if math.isfinite(pace) and pace > 0.0]
    if not paces:
        process = stage.process
        time_s = math.fsum(process.lags_s) + process.dead_time_s + stage.controller.interval_s
        paces = [1.0 / time_s if time_s > 0.0 else 1.0]
    high = _ABOVE * max(paces)
    if stage.controller.interval_s:
        high = min(high, math.pi / stage.controller.interval_s * (1.0 - 1e-9))
    return np.geomspace(min(min(paces), high) / _BELOW, high, POINTS)


def _nearest_crossing(w: FloatArray, magnitude: FloatArray, phase_deg: FloatArray) -> tuple[float, float] | None:
    above = magnitude > 1.0
    columns = np.nonzero(above[1:] != above[:-1])[0]
    if not len(columns):
        return None
    height = np.log(magnitude)
    share = height[columns] / (height[columns] - height[columns + 1])
    at = np.exp(np.log(w[columns]) + share * (np.log(w[columns + 1]) - np.log(w[columns])))
    phases = phase_deg[columns] + share * (phase_deg[columns + 1] - phase_deg[columns])
    nearest = int(np.argmin(np.abs(np.mod(phases, 360.0) - 180.0)))
    return float(at[nearest]), float(phases[nearest])
