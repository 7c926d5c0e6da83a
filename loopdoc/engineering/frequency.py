"""Margins of single loops and of cascades from their exact frequency response.

Dead time is exp(-jwL) and an execution interval counts as half of itself in dead time (the mean delay
of a held output); nothing is approximated by a rational function. A chain of loops is given innermost
first. Level k has the loop

    L = C F G T      F measurement filter, G process behind its lead-lags, T the closed loop below (1 for a
                     final element)

and, as seen by the level above, the closed loop

    T = Cr G T_below / (1 + L)      Cr is C with the setpoint weights

The filter belongs to the controller: the level above is driven by what the process really does, the
unfiltered measurement, while every controller sees its own measurement filtered.
"""

import math
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from loopdoc.engineering.lead_lag import LeadLag
from loopdoc.engineering.open_loop import (
    Crossings,
    IntArray,
    LevelArrays,
    OpenLoop,
    Survey,
    level_arrays,
    static_gains,
)
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import FloatArray, Process

METHOD = (
    "exact frequency response, dead time as exp(-jwL), execution interval as half of itself in dead "
    "time, stability by the Nyquist criterion"
)

METHOD_SAMPLED = (
    "exact frequency response of the sampled loop as it is executed, between zero and half the sampling "
    "frequency, stability by the Nyquist criterion on the unit circle"
)

# Chains analysed together: large enough for numpy, small enough for the processor's cache.
_CHUNK = 200


@dataclass(frozen=True, slots=True)
class LoopStage:
    """One level of a chain: a controller and the process that it commands, in percent of span."""

    controller: Controller
    """Its output is in percent of the final element, or of the secondary's measurement range."""
    process: Process
    """From the final element, or the secondary's measurement, to this level's measurement."""
    lead_lags: tuple[LeadLag, ...] = ()
    """Between the controller's output and what it commands."""

    @property
    def path(self) -> Process:
        """The process with the lead-lags in front of it: what the controller's output goes through."""
        if not self.lead_lags:
            return self.process
        return replace(
            self.process,
            lags_s=self.process.lags_s + tuple(one.lag_s for one in self.lead_lags),
            leads_s=self.process.leads_s + tuple(one.lead_s for one in self.lead_lags),
        )


@dataclass(frozen=True, slots=True)
class Margins:
    """Robustness and speed of one level of a chain, every other level below it closed."""

    stable: bool
    """True where this level and all below it, closed, have no growing mode."""
    gain_margin: float
    """Smallest factor on the gain that makes the loop unstable, infinite if none [dimensionless]. Of an
    unstable loop the largest factor below 1 at which it oscillates steadily, nan if there is none."""
    phase_margin_deg: float
    """Smallest angle to -1 over all gain crossovers, infinite if none [deg]. Of an unstable loop the smallest by which
    one lies beyond -1, negative; infinite where none does."""
    max_sensitivity: float
    """Ms, largest |1/(1+L)| [dimensionless]; infinite when unstable."""
    max_complementary_sensitivity: float
    """Mt, largest |L/(1+L)| [dimensionless]; infinite when unstable."""
    crossover_rad_per_s: float
    """Highest frequency with |L| = 1 [rad/s]; nan if the gain never crosses 1."""
    crossovers: int
    """Frequencies at which the gain crosses 1; more than one where a loop below resonates."""
    phase_crossover_rad_per_s: float
    """Frequency at which the gain margin is read [rad/s]; nan if there is none."""
    bandwidth_rad_per_s: float
    """First frequency where |L/(1+L)| is 3 dB below its static value [rad/s]; infinite if never, nan
    when unstable."""
    delay_margin_s: float
    """Smallest added dead time that makes the loop unstable [s]; infinite if none, 0 when unstable. Of a
    sampled loop the same quotient, phase over crossover, which is exact for whole intervals."""
    sampled: bool
    """True where the figures are those of the sampled loop, False where an interval counts as half in dead time."""
    method: str
    """How the figures were found."""
    grid: str
    """Number and span of the frequencies before refinement."""
    not_quoted: str = ""
    """Why the gain margin is not quoted; empty where it is."""


def _nearest(size: int, roots: Crossings, value: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Per chain the smallest of the values at its crossings, and the frequency there; inf and nan if none."""
    least, where = np.full(size, math.inf), np.full(size, math.nan)
    np.minimum.at(least, roots.row, value)
    # Of crossings that are alike (dead time alone crosses for ever) the first counts.
    chosen = value <= least[roots.row] * (1.0 + 1e-9)
    np.fmin.at(where, roots.row[chosen], roots.w[chosen])
    return least, where


@dataclass(frozen=True, slots=True, eq=False)
class LevelSurvey:
    """What is known of one level of n chains before its margins are read off; arrays are (n,)."""

    open_loop: OpenLoop
    axis_roots: Crossings
    """Where L crosses the negative real axis."""
    growing: FloatArray
    """Growing modes of the closed loop."""
    sensitivity: FloatArray
    """Ms over the frequencies above zero [dimensionless]."""
    complementary: FloatArray
    """Mt over the frequencies above zero [dimensionless]."""
    poles: IntArray
    """Poles of L at frequency zero."""
    leading: FloatArray
    """What L s**poles is at frequency zero."""
    sampled: bool
    """True where L is that of the sampled loop."""


def read_margins(survey: LevelSurvey) -> list[Margins]:
    """Return the margins of one level of n chains."""
    loop, axis_roots, poles = survey.open_loop, survey.axis_roots, survey.poles
    size = len(loop.w)
    gain_roots = loop.gain_crossings()
    with np.errstate(divide="ignore", invalid="ignore"):
        static_sensitivity = np.where(poles > 0, 0.0, 1.0 / np.abs(1.0 + survey.leading))
        static_complementary = np.where(poles > 0, 1.0, np.abs(survey.leading / (1.0 + survey.leading)))
    sensitivity = np.maximum(survey.sensitivity, static_sensitivity)
    complementary = np.maximum(survey.complementary, static_complementary)
    # On the stability limit itself the loop passes through -1 and no mode can be counted.
    stable = (survey.growing == 0.0) & (sensitivity < 1e7)

    factor = -1.0 / axis_roots.loop.real
    raising, raising_w = _nearest(size, axis_roots, np.where(factor > 1.0, factor, math.inf))
    lowering, lowering_w = _nearest(size, axis_roots, np.where(factor <= 1.0, 1.0 / factor, math.inf))
    gain_margin = np.where(stable, raising, np.where(np.isfinite(lowering), 1.0 / lowering, math.nan))
    at = np.where(stable, raising_w, lowering_w)
    at = np.where(np.isfinite(np.where(stable, raising, lowering)), at, math.nan)

    lag_to_go = np.mod(math.pi + np.angle(gain_roots.loop), 2.0 * math.pi)
    beyond = 2.0 * math.pi - lag_to_go
    # Of an unstable loop a crossover short of -1 says nothing: what swings lies below it or at another crossover.
    short = np.where(stable[gain_roots.row], lag_to_go, math.inf)
    phase, _ = _nearest(size, gain_roots, np.minimum(short, np.where(lag_to_go > math.pi, beyond, math.inf)))
    delay, _ = _nearest(size, gain_roots, lag_to_go / gain_roots.w)
    crossings = np.bincount(gain_roots.row, minlength=size)
    crossover = np.full(size, math.nan)
    np.fmax.at(crossover, gain_roots.row, gain_roots.w)
    phase_deg = np.where(stable | np.isinf(phase), 1.0, -1.0) * np.degrees(phase)
    static = np.where(poles > 0, 1.0, static_complementary)
    width = loop.bandwidths(static / math.sqrt(2.0))
    points = loop.w.shape[1]
    return [
        Margins(
            stable=bool(stable[i]),
            gain_margin=float(gain_margin[i]),
            phase_margin_deg=float(phase_deg[i]),
            max_sensitivity=float(sensitivity[i]) if stable[i] else math.inf,
            max_complementary_sensitivity=float(complementary[i]) if stable[i] else math.inf,
            crossover_rad_per_s=float(crossover[i]),
            crossovers=int(crossings[i]),
            phase_crossover_rad_per_s=float(at[i]),
            bandwidth_rad_per_s=float(width[i]) if stable[i] else math.nan,
            delay_margin_s=float(delay[i]) if stable[i] else 0.0,
            sampled=survey.sampled,
            method=METHOD_SAMPLED if survey.sampled else METHOD,
            grid=f"{points} frequencies, {loop.w[i, 0]:.3g} to {loop.w[i, -1]:.3g} rad/s, refined",
        )
        for i in range(size)
    ]


def _survey_level(survey: Survey, level: int, below: FloatArray) -> LevelSurvey:
    loop = survey.open_loop(level)
    axis_roots, direction = loop.real_axis_crossings()
    poles, leading = static_gains(survey.levels)[level]
    return LevelSurvey(
        open_loop=loop,
        axis_roots=axis_roots,
        growing=survey.growing_modes(level, below, axis_roots, direction),
        sensitivity=survey.peak(level, complementary=False),
        complementary=survey.peak(level, complementary=True),
        poles=poles,
        leading=leading,
        sampled=False,
    )


def _stage_arrays(stages: Sequence[LoopStage]) -> LevelArrays:
    return level_arrays([stage.controller for stage in stages], [stage.path for stage in stages])


def _chunks(depths: Sequence[int]) -> list[list[int]]:
    """Positions of the chains of equal depth, in chunks."""
    by_depth: dict[int, list[int]] = defaultdict(list)
    for position, depth in enumerate(depths):
        if depth == 0:
            raise ValueError("a chain needs at least one loop")
        by_depth[depth].append(position)
    return [
        members[start : start + _CHUNK]
        for members in by_depth.values()
        for start in range(0, len(members), _CHUNK)
    ]


def analyse_chains(chains: Sequence[Sequence[LoopStage]]) -> tuple[tuple[Margins, ...], ...]:
    """Margins of every level of many chains.

    Parameters
    ----------
    chains : sequence of sequences of LoopStage
        Each chain innermost level first, at least one level; depths may differ.

    Returns
    -------
    tuple of tuples of Margins
        One tuple per chain in the given order, one `Margins` per level, innermost first.

    Raises
    ------
    ValueError
        A chain has no level.

    Source: K. J. Astrom, R. M. Murray, Feedback Systems, 2nd ed. 2020, ch. 10 (Nyquist criterion,
    margins); D. E. Seborg and others, Process Dynamics and Control, ch. 16 (cascade; from memory).
    """
    results: list[tuple[Margins, ...]] = [()] * len(chains)
    for members in _chunks([len(chain) for chain in chains]):
        depth = len(chains[members[0]])
        survey = Survey([_stage_arrays([chains[i][level] for i in members]) for level in range(depth)])
        growing = np.zeros(len(members))
        for level in range(depth):
            surveyed = _survey_level(survey, level, growing)
            growing = surveyed.growing
            for position, found in zip(members, read_margins(surveyed), strict=True):
                results[position] = (*results[position], found)
    return tuple(results)


def analyse_chain(stages: Sequence[LoopStage]) -> tuple[Margins, ...]:
    """Return the margins of each level of one chain, innermost first."""
    return analyse_chains([stages])[0]


def maximum_sensitivities(loops: LevelArrays) -> FloatArray:
    """Maximum sensitivity Ms of many single loops, without the rest of the margins.

    Parameters
    ----------
    loops : LevelArrays
        n single loops as columns.

    Returns
    -------
    (n,) float array
        Ms [dimensionless], infinite where the loop is unstable.

    Source: K. J. Astrom, T. Hagglund, Advanced PID Control, ISA 2006, section 4.5 (maximum sensitivity).
    """
    size = len(loops.gain)
    found = np.empty(size)
    for start in range(0, size, _CHUNK):
        part = slice(start, start + _CHUNK)
        survey = Survey([loops.take(part)])
        growing = survey.growing_modes(0, np.zeros(len(survey.w)), *survey.open_loop(0).real_axis_crossings())
        poles, leading = static_gains(survey.levels)[0]
        with np.errstate(divide="ignore"):
            static = np.where(poles > 0, 0.0, 1.0 / np.abs(1.0 + leading))
        peak = np.maximum(survey.peak(0, complementary=False), static)
        found[part] = np.where((growing == 0.0) & (peak < 1e7), peak, math.inf)
    return found


def speed_ratio(inner: Margins, outer: Margins) -> float:
    """Return how many times faster the inner loop is, by the gain crossovers; nan where one has none or is unstable."""
    if not (inner.stable and outer.stable):
        return math.nan
    return inner.crossover_rad_per_s / outer.crossover_rad_per_s
