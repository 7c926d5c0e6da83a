"""Margins of loops as they are executed: the exact open loop in z, for cascades of several execution intervals.

The processes of a chain see an input that is held between the scans of the innermost controller, so their
measurements at those scans follow exactly from it, dead times of a part of an interval included. With P_k from that
input to the measurement of level k, C the feedback and Cr the setpoint part of a controller as it is executed,

    L_k = C_k Q_kk        Q_k0 = P_k        Q_kj = 1/m  sum over a of  H Cr/(1 + L) Q_k,j-1   at level j - 1

Q_kj is the response of measurement k, sampled at the interval of level j, to the held output of controller j. Level
j - 1 is executed m times as often: it sees that output through the hold H = 1 + 1/z + ... + 1/z**(m - 1), and of
what it does only every m-th sample counts, which folds m frequencies w + 2 pi a/h, a whole, onto one.

All controllers scan together at the longer interval, the outermost first, and read what the process did until then.
"""

import itertools
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from loopdoc.engineering.frequency import LevelSurvey, LoopStage, Margins, analyse_chains, read_margins
from loopdoc.engineering.open_loop import (
    Crossings,
    IntArray,
    OpenLoop,
    around_resonance,
    frequency_span,
    level_arrays,
    static_gains,
    zoom_to_maximum,
)
from loopdoc.engineering.pid import Controller, scan_coefficients
from loopdoc.engineering.process import ComplexArray, FloatArray, Process, StateSpace, state_space, transition

_POINTS_PER_DECADE = 40
# Largest change of phase by dead time and sampling between two points of the grid [rad], and most points for that.
_PHASE_STEP = 0.1
_PHASE_POINTS = 5000
# Scans of the innermost controller within one interval of an outer one, beyond which the sum takes too long.
_SCANS_MOST = 2000


@dataclass(frozen=True, slots=True)
class NotSampled:
    """Why the sampled loop of a level is not calculated."""

    reason: str


@dataclass(frozen=True, slots=True, eq=False)
class PulseResponse:
    """A chain of processes behind a held input, at the sampling instants."""

    step_s: float
    """Interval at which the input may change and the measurement is read [s]."""
    whole: int
    """Whole intervals of the dead time."""
    increment: FloatArray
    """(m, m) state matrix of one interval less the identity, lower triangular."""
    first: FloatArray
    """(m,) what the input of the interval does to the state by its end."""
    second: FloatArray
    """(m,) what the input of the interval before still does, where the dead time is no whole number of intervals."""
    weights: FloatArray
    """(m,) output per state."""
    through: float
    """Output per input without delay by a lag."""
    gain: float

    def at(self, w: FloatArray) -> ComplexArray:
        """Measurement over held input at frequencies of any shape [rad/s]."""
        # z - 1 without cancellation, as an integration divides by it.
        forward = np.expm1(1j * w * self.step_s)
        back = np.exp(-1j * w * self.step_s)
        output: ComplexArray = self.through * back
        states: list[ComplexArray] = []
        for i in range(len(self.first)):
            entering = self.first[i] + self.second[i] * back
            for j, state in enumerate(states):
                entering = entering + self.increment[i, j] * state
            state = entering / (forward - self.increment[i, i])
            states.append(state)
            output = output + self.weights[i] * state
        delayed: ComplexArray = self.gain * output * np.exp(-1j * w * self.step_s * self.whole)
        return delayed


def _in_series(processes: Sequence[Process]) -> StateSpace:
    """One system of processes in series, innermost first, per unit gain and without dead time."""
    a, b, c, d = np.zeros((0, 0)), np.zeros(0), np.zeros(0), 1.0
    for process in processes:
        own = state_space([process])
        inner, order = len(b), own.b.shape[1]
        joined = np.zeros((inner + order, inner + order))
        joined[:inner, :inner], joined[inner:, inner:] = a, own.a[0]
        joined[inner:, :inner] = np.outer(own.b[0], c)
        a, b = joined, np.concatenate([b, own.b[0] * d])
        c, d = np.concatenate([own.d[0] * c, own.c[0]]), float(own.d[0]) * d
    return StateSpace(a[None], b[None], c[None], np.array([d]))


def pulse_response(processes: Sequence[Process], *, step_s: float) -> PulseResponse:
    """Exact response of processes in series to an input that is held between sampling instants.

    Parameters
    ----------
    processes : sequence of Process
        Innermost first; their dead times may hold a part of an interval.
    step_s : float
        Sampling interval [s] > 0.

    Returns
    -------
    PulseResponse
        The measurement of the last process over the input of the first, read just before the input changes.

    Raises
    ------
    ValueError
        The interval is not above zero.

    Source: K. J. Astrom, B. Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, section 2.3 (sampling of a system
    with time delay; section from memory).
    """
    if not step_s > 0.0:
        raise ValueError("a sampled response needs an interval above zero")
    system = _in_series(processes)
    order = system.b.shape[1]
    intervals = math.fsum(process.dead_time_s for process in processes) / step_s
    # A dead time of a whole number of intervals stays whole in spite of the division.
    whole = math.floor(intervals + 1e-9)
    part = intervals - whole if intervals - whole > 1e-9 else 0.0
    later, first, _ = transition(system, np.array([(1.0 - part) * step_s]))
    _, early, _ = transition(system, np.array([part * step_s]))
    # The change within an interval from its integral, since the difference from the identity would lose digits.
    unit = StateSpace(
        np.broadcast_to(system.a[0], (order, order, order)), np.eye(order), np.zeros((order, order)), np.zeros(order)
    )
    _, columns, _ = transition(unit, np.full(order, step_s))
    return PulseResponse(
        step_s=step_s,
        whole=whole,
        increment=system.a[0] @ columns.T,
        first=first[0],
        second=later[0] @ early[0],
        weights=system.c[0],
        through=float(system.d[0]),
        gain=math.prod(process.gain for process in processes),
    )


def controller_response(controller: Controller, w: FloatArray) -> tuple[ComplexArray, ComplexArray]:
    """A controller as it is executed: output over measurement (the sign turned), and output over setpoint.

    Parameters
    ----------
    controller : Controller
        With an execution interval above zero.
    w : (n,) float array
        Frequencies [rad/s] > 0; any shape.

    Returns
    -------
    (n,), (n,) complex arrays
        Feedback with the measurement filter, and the setpoint part [dimensionless].

    Raises
    ------
    ValueError
        The interval is not above zero.

    Source: the algorithm of `loopdoc.engineering.pid.scan`, in z.
    """
    one = scan_coefficients([controller], np.array([controller.interval_s]))
    back = np.exp(-1j * w * controller.interval_s)
    difference = -np.expm1(-1j * w * controller.interval_s)
    integral = one.integral_gain[0] / difference
    derivative = one.derivative_gain[0] * difference / (1.0 - one.derivative_decay[0] * back)
    smoothed = one.filter_gain[0] / (1.0 - (1.0 - one.filter_gain[0]) * back)
    feedback: ComplexArray = (one.gain[0] + integral + derivative) * smoothed
    forward: ComplexArray = one.setpoint_gain[0] + integral + one.derivative_setpoint_weight[0] * derivative
    return feedback, forward


class SampledChain:
    """The open loops of one chain of controllers as they are executed."""

    def __init__(self, stages: Sequence[LoopStage]) -> None:
        """Take a chain, innermost first, in which each interval is a whole number of times the one below."""
        self._stages = stages
        base = stages[0].controller.interval_s
        self._pulses = [
            pulse_response([stage.process for stage in stages[: level + 1]], step_s=base)
            for level in range(len(stages))
        ]

    def loop(self, level: int, w: FloatArray) -> ComplexArray:
        """Open loop of a level at frequencies of any shape [rad/s]."""
        feedback, _ = self._controller(level, w)
        found: ComplexArray = feedback * self._response(level, level, w)
        return found

    def _response(self, measured: int, moved: int, w: FloatArray) -> ComplexArray:
        """Measurement of one level over the held output of another, sampled at the interval of the latter."""
        if moved == 0:
            return self._pulses[measured].at(w)
        interval, shorter = (self._stages[level].controller.interval_s for level in (moved, moved - 1))
        scans = round(interval / shorter)
        if scans == 1:
            return self._closed(moved - 1, w) * self._response(measured, moved - 1, w)
        folded = w[..., None] + 2.0 * math.pi / interval * np.arange(-(scans // 2), scans - scans // 2)
        held = np.expm1(-1j * w * interval)[..., None] / np.expm1(-1j * folded * shorter)
        each = held * self._closed(moved - 1, folded) * self._response(measured, moved - 1, folded)
        total: ComplexArray = each.sum(axis=-1) / scans
        return total

    def _controller(self, level: int, w: FloatArray) -> tuple[ComplexArray, ComplexArray]:
        """A controller with the lead-lags behind it, executed together."""
        stage = self._stages[level]
        feedback, forward = controller_response(stage.controller, w)
        for one in stage.lead_lags:
            # The lag is exact for an input that is held, as the measurement filter is.
            share = -math.expm1(-stage.controller.interval_s / one.lag_s)
            lagged = share / (1.0 - (1.0 - share) * np.exp(-1j * w * stage.controller.interval_s))
            led = one.lead_s / one.lag_s + (1.0 - one.lead_s / one.lag_s) * lagged
            feedback, forward = feedback * led, forward * led
        return feedback, forward

    def _closed(self, level: int, w: FloatArray) -> ComplexArray:
        """Output of a controller over its setpoint, its loop closed."""
        _, forward = self._controller(level, w)
        closed: ComplexArray = forward / (1.0 + self.loop(level, w))
        return closed


class SampledLoop(OpenLoop):
    """The open loop of one sampled level, from zero to half its sampling frequency, where it is real."""

    def __init__(self, w: FloatArray, loop_at: Callable[[FloatArray], ComplexArray]) -> None:
        """Take (m,) frequencies, the last of them half the sampling frequency, and the loop at any."""
        values = loop_at(w)
        # Real but for rounding: it ends on the side of the axis from which it comes.
        values[-1] = complex(values[-1].real, math.copysign(1e-300, values[-2].imag))
        super().__init__(w[None], values[None], lambda rows: lambda x: loop_at(np.exp(x)))

    def real_axis_crossings(self) -> tuple[Crossings, IntArray]:
        """As in `OpenLoop`; where L ends on the negative real axis that is one as well, neither up nor down."""
        roots, direction = super().real_axis_crossings()
        end = self.loop[0, -1]
        if not end.real < 0.0:
            return roots, direction
        return Crossings(
            np.append(roots.row, 0), np.append(roots.w, self.w[0, -1]), np.append(roots.loop, end)
        ), np.append(direction, 0)


def _grid(stages: Sequence[LoopStage], sharp: Sequence[tuple[float, float]]) -> FloatArray:
    """(m,) frequencies up to half the sampling frequency of the outermost level [rad/s]."""
    interval = stages[-1].controller.interval_s
    high = math.pi / interval
    arrays = [level_arrays([stage.controller], [stage.path]) for stage in stages]
    low = min(float(frequency_span(arrays)[0][0]), 1e-3 * high)
    delay = math.fsum(stage.process.dead_time_s + stage.controller.interval_s for stage in stages)
    evenly = min(math.ceil(high * delay / _PHASE_STEP) + 1, _PHASE_POINTS)
    parts = [
        np.geomspace(low, high, math.ceil(_POINTS_PER_DECADE * math.log10(high / low)) + 2),
        np.linspace(low, high, evenly + 1),
    ]
    for at, sharpness in sharp:
        # The resonance of a level below, where the sampling of this one folds it to.
        spread = at * around_resonance(np.array([sharpness]))[0]
        parts.append(abs(math.remainder(at, 2.0 * high)) + spread)
    w = np.unique(np.concatenate(parts))
    kept: FloatArray = np.append(w[(w >= low) & (w < high * (1.0 - 1e-9))], high)
    return kept


def _resonance(loop: OpenLoop) -> tuple[float, float] | None:
    """Frequency and inverse height of a peak of 1/(1 + L) that is sharper than the grid resolves."""
    w, sensitivity = loop.w[0], 1.0 / np.abs(1.0 + loop.loop[0])
    top = int(np.argmax(sensitivity))
    if sensitivity[top] < 3.0:
        return None
    if not 0 < top < len(w) - 1:
        return float(w[top]), float(1.0 / sensitivity[top])
    x, height = zoom_to_maximum(
        lambda x: -np.log(np.abs(1.0 + loop.at(np.zeros(1, dtype=np.intp))(x))),
        np.log(w[top - 1 : top]),
        np.log(w[top + 1 : top + 2]),
    )
    return float(np.exp(x[0])), float(np.exp(-height[0]))


def _unsuited(controllers: Sequence[Controller]) -> NotSampled | None:
    """Why the outermost of these controllers has no sampled loop."""
    if any(controller.interval_s == 0.0 for controller in controllers):
        return NotSampled("the execution interval of a loop below is not given")
    for below, above in itertools.pairwise(controllers):
        ratio = above.interval_s / below.interval_s
        if round(ratio) < 1 or abs(ratio - round(ratio)) > 1e-9 * ratio:
            return NotSampled(
                f"its interval of {above.interval_s:g} s is no whole multiple of {below.interval_s:g} s, that of the "
                "loop below"
            )
    if controllers[-1].interval_s > _SCANS_MOST * controllers[0].interval_s:
        return NotSampled(f"the innermost loop is executed more than {_SCANS_MOST} times in an interval of this one")
    return None


def sampled_margins(stages: Sequence[LoopStage]) -> tuple[Margins | NotSampled, ...]:
    """Margins of every level of one chain as it is executed.

    Parameters
    ----------
    stages : sequence of LoopStage
        Innermost first, at least one; the outermost with an execution interval above zero.

    Returns
    -------
    tuple of Margins or NotSampled
        One per level, innermost first; from the first level that is not sampled on, the reason.

    Raises
    ------
    ValueError
        The chain has no level.

    Source: K. J. Astrom, B. Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, ch. 2 and 3 (sampled systems,
    Nyquist criterion on the unit circle); the sum over frequencies for slower sampling by A. V. Oppenheim,
    R. W. Schafer, Discrete-Time Signal Processing, section 4.6 (both from memory).
    """
    if not stages:
        raise ValueError("a chain needs at least one loop")
    found: list[Margins | NotSampled] = []
    sharp: list[tuple[float, float]] = []
    chain, growing = None, np.zeros(1)
    for level in range(len(stages)):
        part = stages[: level + 1]
        unsuited = _unsuited([stage.controller for stage in part])
        if unsuited is not None:
            found.append(unsuited)
            continue
        chain = chain or SampledChain(stages)
        surveyed = _survey(part, chain, growing, sharp)
        growing = surveyed.growing
        resonance = _resonance(surveyed.open_loop)
        if resonance is not None:
            sharp.append(resonance)
        found.extend(read_margins(surveyed))
    return tuple(found)


def _survey(
    stages: Sequence[LoopStage], chain: SampledChain, below: FloatArray, sharp: Sequence[tuple[float, float]]
) -> LevelSurvey:
    level = len(stages) - 1
    loop = SampledLoop(_grid(stages, sharp), lambda w: chain.loop(level, w))
    roots, direction = loop.real_axis_crossings()
    poles, leading = static_gains([level_arrays([stage.controller], [stage.path]) for stage in stages])[level]
    return LevelSurvey(
        open_loop=loop,
        axis_roots=roots,
        growing=loop.growing_modes(poles, below, roots, direction, np.angle(1.0 + loop.loop[:, -1])),
        sensitivity=loop.peak(complementary=False),
        complementary=loop.peak(complementary=True),
        poles=poles,
        leading=leading,
        sampled=True,
    )


def quoted_margins(chains: Sequence[Sequence[LoopStage]]) -> tuple[tuple[Margins, ...], ...]:
    """Margins as `loopdoc.engineering.frequency.analyse_chains`, sampled where half an interval does not stand for it.

    A level whose gain margin is read above a quarter of its sampling frequency is analysed as it is executed; where
    that cannot be done the gain margin is nan, with the reason in ``not_quoted``.

    Source: K. J. Astrom, B. Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, ch. 7 (how far a delay stands for
    the sampling; from memory).
    """
    # Many primaries and branches stand on the same secondary.
    known: dict[tuple[LoopStage, ...], Margins | NotSampled] = {}
    return tuple(
        _quoted(tuple(stages), found, known) for stages, found in zip(chains, analyse_chains(chains), strict=True)
    )


def _quoted(
    stages: tuple[LoopStage, ...],
    found: tuple[Margins, ...],
    known: dict[tuple[LoopStage, ...], Margins | NotSampled],
) -> tuple[Margins, ...]:
    quoted: list[Margins] = []
    for level, half in enumerate(found):
        # A level below that is stable in one form only leaves this one no choice.
        differs = any(one.stable != other.stable for one, other in zip(quoted, found, strict=False))
        if not (differs or _beyond_half_interval(half, stages[level])):
            quoted.append(half)
            continue
        part = stages[: level + 1]
        if part not in known:
            known.update((stages[: depth + 1], margins) for depth, margins in enumerate(sampled_margins(part)))
        sampled = known[part]
        if isinstance(sampled, Margins):
            quoted.append(sampled)
        elif half.stable and not math.isnan(half.phase_crossover_rad_per_s):
            quoted.append(
                replace(half, gain_margin=math.nan, phase_crossover_rad_per_s=math.nan, not_quoted=sampled.reason)
            )
        else:
            quoted.append(half)
    return tuple(quoted)


def _beyond_half_interval(margins: Margins, stage: LoopStage) -> bool:
    """Whether the gain margin is not read below a quarter of the sampling frequency.

    Above it half an interval of dead time no longer stands for the sampling: a held output is 10 % smaller at that
    quarter already and a loop without dead time turns unstable at half the sampling frequency, which no delay tells.
    """
    interval_s = stage.controller.interval_s
    return interval_s > 0.0 and not margins.phase_crossover_rad_per_s <= math.pi / 2.0 / interval_s
