"""Open loops of chains of controllers at real frequencies: grid, crossings, peaks, growing modes.

Arrays run over chains first and frequencies second. See `frequency` for the equations of a chain.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import ComplexArray, FloatArray, Process

IntArray = NDArray[np.intp]
LoopAt: TypeAlias = Callable[[IntArray], Callable[[FloatArray], ComplexArray]]
"""For k chosen chains, their open loop as a function of ln w, (k,) or (k, m)."""

_POINTS_PER_DECADE = 40
# Largest change of phase by dead time between two points of the grid [rad].
_DEAD_TIME_STEP = 0.25
# Beyond this phase of dead time [rad] a loop that has not rolled off yet is not resolved further.
_DEAD_TIME_REACH = 80.0
# Frequencies of all chains that are worked on at once: what is in hand stays in the processor's cache.
_CACHED = 8192
# Below this loop gain the phase does not matter to any margin that is quoted.
_ROLLED_OFF = 0.005


@dataclass(frozen=True, slots=True, eq=False)
class LevelArrays:
    """One level of n chains of equal structure; every array is (n, 1)."""

    gain: FloatArray
    """Controller gain times process gain [dimensionless], [1/s] when integrating."""
    integrating: NDArray[np.bool_]
    """True where the process integrates."""
    lags_s: tuple[FloatArray, ...]
    """Lags [s], 0 where a chain has fewer."""
    leads_s: tuple[FloatArray, ...]
    """Leads [s], 0 where a chain has fewer."""
    delay_s: FloatArray
    """Dead time and half of the execution interval [s]."""
    repeats_per_s: FloatArray
    """1/Ti [1/s], 0 for no integral action."""
    rate_s: FloatArray
    """Rate time [s]."""
    smoothing_s: FloatArray
    """Lag of the derivative filter [s]."""
    setpoint_weight: FloatArray
    """b [dimensionless]."""
    derivative_setpoint_weight: FloatArray
    """c [dimensionless]."""
    filter_s: FloatArray
    """Measurement filter [s]."""

    def take(self, rows: IntArray | slice) -> "LevelArrays":
        """Return the chains of the given rows."""
        return LevelArrays(
            gain=self.gain[rows],
            integrating=self.integrating[rows],
            lags_s=tuple(lag[rows] for lag in self.lags_s),
            leads_s=tuple(lead[rows] for lead in self.leads_s),
            delay_s=self.delay_s[rows],
            repeats_per_s=self.repeats_per_s[rows],
            rate_s=self.rate_s[rows],
            smoothing_s=self.smoothing_s[rows],
            setpoint_weight=self.setpoint_weight[rows],
            derivative_setpoint_weight=self.derivative_setpoint_weight[rows],
            filter_s=self.filter_s[rows],
        )


def _column(values: Sequence[float]) -> FloatArray:
    return np.array(values, dtype=np.float64)[:, None]


def _padded(times: Sequence[tuple[float, ...]]) -> tuple[FloatArray, ...]:
    longest = max(len(row) for row in times)
    return tuple(_column([row[i] if i < len(row) else 0.0 for row in times]) for i in range(longest))


def level_arrays(controllers: Sequence[Controller], processes: Sequence[Process]) -> LevelArrays:
    """Return one level of n chains, each a controller on a process, as columns."""
    return LevelArrays(
        gain=_column([c.gain * p.gain for c, p in zip(controllers, processes, strict=True)]),
        integrating=np.array([p.integrating for p in processes])[:, None],
        lags_s=_padded([p.lags_s for p in processes]),
        leads_s=_padded([p.leads_s for p in processes]),
        delay_s=_column(
            [p.dead_time_s + c.interval_s / 2.0 for c, p in zip(controllers, processes, strict=True)]
        ),
        repeats_per_s=_column([1.0 / c.reset_s for c in controllers]),
        rate_s=_column([c.rate_s for c in controllers]),
        smoothing_s=_column([c.rate_s / c.derivative_filter for c in controllers]),
        setpoint_weight=_column([c.setpoint_weight for c in controllers]),
        derivative_setpoint_weight=_column([c.derivative_setpoint_weight for c in controllers]),
        filter_s=_column([c.measurement_filter_s for c in controllers]),
    )


def open_loops(levels: Sequence[LevelArrays], w: FloatArray) -> list[ComplexArray]:
    """Open-loop response of every level at (n, m) frequencies [rad/s], innermost first."""
    count, points = w.shape
    loops: list[ComplexArray] = [np.empty(w.shape, dtype=np.complex128) for _ in levels]
    at_once = max(1, _CACHED // points)
    for start in range(0, count, at_once):
        rows = slice(start, start + at_once)
        taken = levels if count <= at_once else [level.take(rows) for level in levels]
        _fill(taken, w[rows], [loop[rows] for loop in loops])
    return loops


def _fill(levels: Sequence[LevelArrays], w: FloatArray, loops: Sequence[ComplexArray]) -> None:
    """Write the open loop of every level, in place throughout: fetching new memory would take most of the time."""
    s: ComplexArray = np.multiply(1j, w)
    per_s = -1j / w
    below: ComplexArray = np.ones((1, 1), dtype=np.complex128)
    factor: ComplexArray = np.empty_like(s)
    product: ComplexArray = np.empty_like(s)
    for level, loop in zip(levels, loops, strict=True):
        plant: ComplexArray = np.empty_like(s)
        np.multiply(level.gain, below, out=plant)
        if level.delay_s.any():
            angle = level.delay_s * w
            np.cos(angle, out=factor.real)
            np.sin(np.negative(angle, out=angle), out=factor.imag)
            plant *= factor
        for lead in level.leads_s:
            np.multiply(plant, _first_order(lead, s, factor), out=plant)
        # Multiplied first, since dividing costs most.
        product.fill(1.0)
        for lag in level.lags_s:
            np.multiply(product, _first_order(lag, s, factor), out=product)
        plant /= product
        if level.integrating.any():
            plant *= np.where(level.integrating, per_s, 1.0)
        integral = level.repeats_per_s * per_s
        feedback = np.add(integral, 1.0, out=loop)
        if level.rate_s.any():
            derivative = level.rate_s * s / (1.0 + level.smoothing_s * s)
            feedback += derivative
        feedback *= plant
        if level.filter_s.any():
            loop /= _first_order(level.filter_s, s, factor)
        if level is not levels[-1]:
            forward = np.add(integral, level.setpoint_weight, out=integral)
            if level.rate_s.any():
                forward += level.derivative_setpoint_weight * derivative
            forward *= plant
            forward /= np.add(loop, 1.0, out=factor)
            below = forward


def _first_order(time_s: FloatArray, s: ComplexArray, out: ComplexArray) -> ComplexArray:
    """1 + T s, written into ``out``."""
    np.multiply(time_s, s, out=out)
    out += 1.0
    return out


def static_gains(levels: Sequence[LevelArrays]) -> list[tuple[IntArray, FloatArray]]:
    """Per level: poles of L at the origin (n,), and what L s**poles is there (n,)."""
    below: FloatArray = np.ones(levels[0].gain.shape[0])
    found = []
    for level in levels:
        integral = level.repeats_per_s[:, 0] > 0.0
        poles = integral.astype(np.intp) + level.integrating[:, 0]
        gain = level.gain[:, 0] * below
        leading = np.where(integral, gain * level.repeats_per_s[:, 0], gain)
        found.append((poles, leading))
        weight = level.setpoint_weight[:, 0]
        with np.errstate(divide="ignore", invalid="ignore"):
            settled = np.where(level.integrating[:, 0], weight, weight * gain / (1.0 + gain))
        below = np.where(integral, 1.0, settled)
    return found


def frequency_span(levels: Sequence[LevelArrays]) -> tuple[FloatArray, FloatArray]:
    """(n,) lowest and highest frequency [rad/s]: well outside every break and crossover."""
    rates: list[FloatArray] = []
    with np.errstate(divide="ignore", invalid="ignore"):
        for level, (_, leading) in zip(levels, static_gains(levels), strict=True):
            times = [*level.lags_s, *level.leads_s, level.delay_s, level.rate_s, level.smoothing_s]
            rates.extend(1.0 / np.abs(time[:, 0]) for time in (*times, level.filter_s))
            rates.append(level.repeats_per_s[:, 0])
            slope = np.abs(leading)
            rates.append(
                np.where(level.integrating[:, 0] & (level.repeats_per_s[:, 0] > 0.0), slope**0.5, slope)
            )
            gain = np.abs(level.gain[:, 0])
            rates.extend(gain / lag[:, 0] for lag in level.lags_s)
    stacked = np.array(rates)
    stacked[~np.isfinite(stacked) | (stacked <= 0.0)] = np.nan
    stacked[0] = np.where(np.isnan(stacked).all(axis=0), 1.0, stacked[0])
    low, high = 0.002 * np.nanmin(stacked, axis=0), 50.0 * np.nanmax(stacked, axis=0)
    for _ in range(4):
        gains = np.max([np.abs(loop[:, 0]) for loop in open_loops(levels, high[:, None])], axis=0)
        if not (gains > _ROLLED_OFF).any():
            break
        # A loop that never rolls off (no lag at all) gains nothing beyond this reach.
        high = np.where(gains > _ROLLED_OFF, 10.0 * high, high)
    return low, high


def _spread(low: FloatArray, high: FloatArray, count: int) -> FloatArray:
    """(n, count) frequencies, evenly spread in their logarithm."""
    share = np.linspace(0.0, 1.0, count)
    grid: FloatArray = np.exp(np.log(low)[:, None] + (np.log(high) - np.log(low))[:, None] * share)
    return grid


def _frequency_grid(levels: Sequence[LevelArrays]) -> FloatArray:
    """(n, m) increasing frequencies [rad/s]: even per decade, and even where dead time turns the phase."""
    low, high = frequency_span(levels)
    decades = float(np.log10(high / low).max())
    coarse = _spread(low, high, 12 * math.ceil(decades) + 2)
    parts = [_spread(low, high, math.ceil(_POINTS_PER_DECADE * decades) + 2)]
    delay = np.zeros_like(low)
    for level, loop in zip(levels, open_loops(levels, coarse), strict=True):
        delay = delay + level.delay_s[:, 0]
        if not delay.any():
            continue
        acts = np.abs(loop) > _ROLLED_OFF
        last = coarse.shape[1] - 1 - np.argmax(acts[:, ::-1], axis=1)
        end = coarse[np.arange(len(low)), np.minimum(last + 1, coarse.shape[1] - 1)]
        end = np.where(acts.any(axis=1), end, low)
        per_rad = np.divide(1.0, delay, out=np.zeros_like(delay), where=delay > 0.0)
        # From here on the even spread per decade would step further than the dead time allows.
        start = _DEAD_TIME_STEP * _POINTS_PER_DECADE / math.log(10.0) * per_rad
        end = np.minimum(end, _DEAD_TIME_REACH * per_rad)
        turning = np.maximum(end - start, 0.0) * delay / _DEAD_TIME_STEP
        count = math.ceil(float(turning.max())) + 1
        if count > 1:
            start = np.where(start > 0.0, start, low)
            end = np.maximum(start, end)
            parts.append(start[:, None] + (end - start)[:, None] * np.linspace(0.0, 1.0, count))
    return np.sort(np.concatenate(parts, axis=1), axis=1)


def _inverse(loop: ComplexArray) -> ComplexArray:
    """1/L, very large where a secondary that ignores its setpoint leaves nothing of the loop."""
    inverse: ComplexArray = np.divide(1.0, loop, out=np.full_like(loop, 1e200), where=loop != 0.0)
    return inverse


def around_resonance(sharpness: FloatArray) -> FloatArray:
    """(n, k) offsets in ln w that resolve a peak whose height is one over the (n,) sharpness."""
    half = np.minimum(sharpness, 0.1)[:, None] * np.array([0.05, 0.15, 0.3, 0.6, 1.0, 1.7, 3.0, 6.0])
    offsets: FloatArray = np.concatenate([-half, np.zeros((len(half), 1)), half], axis=1)
    return offsets


def zoom_to_maximum(
    value: Callable[[FloatArray], FloatArray], low: FloatArray, high: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Place and height of the maximum of ``value`` of ln w, for (k,) brackets at once."""
    share = np.linspace(0.0, 1.0, 7)
    rows = np.arange(len(low))
    # Each round leaves a third of the bracket; the parabola through the last three points does the rest.
    for _ in range(6):
        x = low[:, None] + (high - low)[:, None] * share
        f = value(x)
        best = np.clip(np.argmax(f, axis=1), 1, 5)
        low, high = x[rows, best - 1], x[rows, best + 1]
    middle, left, right = f[rows, best], f[rows, best - 1], f[rows, best + 1]
    curvature = left - 2.0 * middle + right
    bowed = curvature < 0.0
    shift = np.where(bowed, 0.5 * (left - right) / np.where(bowed, curvature, 1.0), 0.0)
    shift = np.clip(shift, -1.0, 1.0)
    height = np.maximum(middle - 0.25 * (left - right) * shift, np.maximum(left, right))
    return x[rows, best] + shift * 0.5 * (high - low), height


def find_root(value: Callable[[FloatArray], FloatArray], low: FloatArray, high: FloatArray) -> FloatArray:
    """Roots of ``value`` of ln w in (k,) brackets whose ends differ in sign, by false position (Illinois)."""
    f_low, f_high = value(low), value(high)
    x = low
    for _ in range(60):
        step = f_high - f_low
        x = np.where(
            step != 0.0, high - f_high * (high - low) / np.where(step != 0.0, step, 1.0), 0.5 * (low + high)
        )
        f = value(x)
        if np.all((np.abs(f) < 1e-13) | (np.abs(high - low) < 1e-14)):
            break
        crossed = f * f_high < 0.0
        low = np.where(crossed, high, low)
        f_low = np.where(crossed, f_high, 0.5 * f_low)
        high, f_high = x, f
    return x


@dataclass(frozen=True, slots=True, eq=False)
class Crossings:
    """Refined crossings of one level, over all chains of a chunk."""

    row: IntArray
    """(k,) chain of each crossing."""
    w: FloatArray
    """(k,) frequency [rad/s]."""
    loop: ComplexArray
    """(k,) open loop there [dimensionless]."""


class OpenLoop:
    """The open loop of one level of n chains on a grid of frequencies, with refinement of what is found there."""

    def __init__(self, w: FloatArray, loop: ComplexArray, at: LoopAt) -> None:
        """Take the (n, m) frequencies [rad/s], the loop there, and what gives it anywhere for chosen chains."""
        self.w = w
        self.loop = loop
        self.at = at

    def _refine(
        self,
        bracket: tuple[IntArray, IntArray],
        value: Callable[[ComplexArray], FloatArray],
    ) -> Crossings:
        """Refine the crossings between the grid points ``columns`` and ``columns + 1`` of ``rows``."""
        rows, columns = bracket
        if not len(rows):
            return Crossings(rows, np.zeros(0), np.zeros(0, dtype=np.complex128))
        loop = self.at(rows)
        x = find_root(
            lambda x: value(loop(x)), np.log(self.w[rows, columns]), np.log(self.w[rows, columns + 1])
        )
        return Crossings(rows, np.exp(x), loop(x))

    def gain_crossings(self) -> Crossings:
        """Where |L| passes through 1."""
        above = np.abs(self.loop) > 1.0
        rows, columns = np.nonzero(above[:, 1:] != above[:, :-1])
        return self._refine((rows, columns), lambda loop: np.log(np.abs(loop)))

    def real_axis_crossings(self) -> tuple[Crossings, IntArray]:
        """Where L crosses the negative real axis, and +1 where it does so downward, -1 upward.

        Of the crossings inside the unit circle only the outermost few are refined: the rest bear on
        no margin.
        """
        loop = self.loop
        above = loop.imag >= 0.0
        left = np.minimum(loop.real[:, 1:], loop.real[:, :-1]) < 0.0
        rows, columns = np.nonzero((above[:, 1:] != above[:, :-1]) & left)
        size = np.maximum(np.abs(loop[rows, columns]), np.abs(loop[rows, columns + 1]))
        outermost = np.zeros(len(loop))
        np.maximum.at(outermost, rows, np.where(size < 1.0, size, 0.0))
        needed = (size >= 1.0) | (size >= 0.5 * outermost[rows])
        rows, columns = rows[needed], columns[needed]
        roots = self._refine((rows, columns), lambda loop: loop.imag / np.abs(loop))
        direction = np.where(above[rows, columns], 1, -1)
        kept = roots.loop.real < 0.0
        return Crossings(roots.row[kept], roots.w[kept], roots.loop[kept]), direction[kept]

    def bandwidths(self, floor: FloatArray) -> FloatArray:
        """(n,) first frequency where |L/(1+L)| falls below ``floor`` (n,), infinite if never."""
        loop = self.loop
        under = np.abs(loop / (1.0 + loop)) < floor[:, None]
        rows = np.nonzero(under.any(axis=1) & ~under[:, 0])[0]
        columns = np.argmax(under[rows], axis=1) - 1
        roots = self._refine((rows, columns), lambda loop: np.log(np.abs(loop / (1.0 + loop)) / floor[rows]))
        width = np.full(len(floor), math.inf)
        width[roots.row] = roots.w
        return width

    def peak(self, *, complementary: bool) -> FloatArray:
        """(n,) largest |1/(1+L)| or |L/(1+L)| = |1/(1+1/L)| over the frequencies above zero."""
        curve = _inverse(self.loop) if complementary else self.loop
        distance = np.abs(1.0 + curve)
        nearest = distance.min(axis=1)
        inside = (distance[:, 1:-1] <= distance[:, :-2]) & (distance[:, 1:-1] < distance[:, 2:])
        # Between grid points the curve can come nearer than they do by half a step of it at most.
        step = np.abs(curve[:, 1:] - curve[:, :-1])
        reach = distance[:, 1:-1] - 0.6 * np.maximum(step[:, 1:], step[:, :-1])
        rows, columns = np.nonzero(inside & (reach < nearest[:, None]))
        if len(rows):
            loop = self.at(rows)

            def height(x: FloatArray) -> FloatArray:
                found = _inverse(loop(x)) if complementary else loop(x)
                value: FloatArray = -np.log(np.abs(1.0 + found))
                return value

            low, high = np.log(self.w[rows, columns]), np.log(self.w[rows, columns + 2])
            np.minimum.at(nearest, rows, np.exp(-zoom_to_maximum(height, low, high)[1]))
        largest: FloatArray = 1.0 / nearest
        return largest

    def growing_modes(
        self, poles: IntArray, below: FloatArray, crossed: Crossings, direction: IntArray, end_angle: FloatArray
    ) -> FloatArray:
        """(n,) growing modes of the closed loop by the argument principle.

        With P growing modes ``below``, m ``poles`` of L at the origin (or at z = 1), and D the change of the angle of
        1 + L from frequency zero to its end, at ``end_angle``, there are P + m/2 - D/pi.
        """
        turns = np.zeros(len(self.w))
        encircling = crossed.loop.real < -1.0
        np.add.at(turns, crossed.row[encircling], direction[encircling])
        change = end_angle - np.angle(1.0 + self.loop[:, 0]) + 2.0 * math.pi * turns
        modes: FloatArray = np.maximum(np.round(below + poles / 2.0 - change / math.pi), 0.0)
        return modes


class Survey:
    """The open loops of one chunk of chains on their grid."""

    def __init__(self, levels: Sequence[LevelArrays]) -> None:
        self.levels = levels
        self.w = _frequency_grid(levels)
        self.loops = open_loops(levels, self.w)
        # So far out that only what never rolls off is left; several points, as dead time turns it.
        self.far = open_loops(levels, 1e6 * self.w[:, -1:] * np.linspace(1.0, 2.0, 16))
        # A lightly damped inner loop is a resonance in every loop around it, narrower than the grid.
        for level in range(len(levels) - 1):
            self._resolve_resonance(level)

    def _resolve_resonance(self, level: int) -> None:
        sensitivity = 1.0 / np.abs(1.0 + self.loops[level])
        if sensitivity.max() < 3.0:
            return
        rows = np.arange(len(self.w))
        top = np.clip(np.argmax(sensitivity, axis=1), 1, self.w.shape[1] - 2)
        loop = self._loop_at(level, rows)
        x, height = zoom_to_maximum(
            lambda x: -np.log(np.abs(1.0 + loop(x))),
            np.log(self.w[rows, top - 1]),
            np.log(self.w[rows, top + 1]),
        )
        extra = np.exp(x[:, None] + around_resonance(np.exp(-height)))
        self.w = np.sort(np.concatenate([self.w, extra], axis=1), axis=1)
        self.loops = open_loops(self.levels, self.w)

    def _loop_at(self, level: int, rows: IntArray) -> Callable[[FloatArray], ComplexArray]:
        """Open loop of a level as a function of ln w, (k,) or (k, m), for the given k chains."""
        taken = [one.take(rows) for one in self.levels[: level + 1]]

        def loop(x: FloatArray) -> ComplexArray:
            return open_loops(taken, np.exp(x).reshape(len(rows), -1))[level].reshape(x.shape)

        return loop

    def open_loop(self, level: int) -> OpenLoop:
        """Return the open loop of one level."""
        return OpenLoop(self.w, self.loops[level], partial(self._loop_at, level))

    def peak(self, level: int, *, complementary: bool) -> FloatArray:
        """(n,) largest |1/(1+L)| or |L/(1+L)| over the frequencies above zero, what never rolls off included."""
        far = _inverse(self.far[level]) if complementary else self.far[level]
        at_infinity = 1.0 / np.abs(1.0 + far).min(axis=1)
        largest: FloatArray = np.maximum(self.open_loop(level).peak(complementary=complementary), at_infinity)
        return largest

    def growing_modes(
        self, level: int, below: FloatArray, crossed: Crossings, direction: IntArray
    ) -> FloatArray:
        """(n,) growing modes of the closed loop, infinite where gain above 1 meets dead time forever."""
        poles, _ = static_gains(self.levels)[level]
        delay = np.sum([one.delay_s[:, 0] for one in self.levels[: level + 1]], axis=0)
        far_gain = np.abs(self.far[level]).max(axis=1)
        end = np.where(
            (far_gain > _ROLLED_OFF) & (delay == 0.0), np.angle(1.0 + self.loops[level][:, -1]), 0.0
        )
        count = self.open_loop(level).growing_modes(poles, below, crossed, direction, end)
        return np.where((far_gain >= 1.0) & (delay > 0.0), math.inf, count)
