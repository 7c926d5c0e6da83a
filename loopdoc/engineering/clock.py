"""Time step and horizon of a simulation, chosen from the dynamics."""

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import reduce

from loopdoc.engineering.frequency import LoopStage, Margins, analyse_chains
from loopdoc.engineering.process import in_series
from loopdoc.engineering.structure import ControlStructure

# Above this many steps the interval is widened as far as the loops do not notice.
_STEPS_WANTED = 3000
_STEPS_MOST = 40_960
_STEPS_LEAST = 512
# What is not stable need not be watched for long.
_STEPS_UNSTABLE = 4096
# A widened interval may turn the phase at any crossover by this much [rad], about one degree.
_PHASE_UNNOTICED = 0.02
# Longest step, as a share of the inverse of the fastest crossover: of a controller that is meant to be
# continuous, and of processes between the scans of one that is not.
_CONTINUOUS = 0.02
_BETWEEN_SCANS = 0.35
# Horizons are checked for rest at their eighths, so that numbers of steps are multiples of eight.
HORIZON_PARTS = 8


@dataclass(frozen=True, slots=True)
class Clock:
    """Time step and number of steps of a simulation."""

    step_s: float
    """Time step [s]."""
    steps: int
    """Number of steps."""


@dataclass(frozen=True, slots=True)
class GroupClock:
    """Clock of structures that are compared."""

    common: Clock
    """On which all of them can run together."""
    steps_at_once: tuple[int, ...]
    """Per structure, how many of these steps it can take at once where it runs by itself."""

    def of(self, structure: int) -> Clock:
        """Return the clock of one structure where it runs by itself, at least as long as the common one."""
        at_once = self.steps_at_once[structure]
        if at_once == 1:
            return self.common
        return Clock(self.common.step_s * at_once, _round_up(self.common.steps / at_once))


@dataclass(frozen=True, slots=True)
class Unsuited:
    """Why structures cannot be simulated."""

    reason: str


def _controlled_chain(structure: ControlStructure) -> list[LoopStage]:
    """The loops of a structure, uncontrolled processes joined to the next loop out."""
    stages, waiting = [], []
    for process, controller in zip(structure.processes, structure.controllers, strict=True):
        waiting.append(process)
        if controller is not None:
            stages.append(LoopStage(controller, reduce(in_series, waiting)))
            waiting = []
    return stages


def _horizon_s(structure: ControlStructure, chain: Sequence[LoopStage], margins: Sequence[Margins]) -> float:
    """Several times the slowest of the open-loop lags and the closed-loop modes [s]."""
    lags = math.fsum(lag for process in structure.processes for lag in process.lags_s)
    dead = math.fsum(process.dead_time_s for process in structure.processes)
    intervals = math.fsum(stage.controller.interval_s for stage in chain)
    slow = [6.0 * lags, 10.0 * (dead + intervals), 3.0 * structure.final_element.stroke_time_s]
    for stage, found in zip(chain, margins, strict=True):
        gain, reset = abs(stage.controller.gain * stage.process.gain), stage.controller.reset_s
        if stage.process.integrating:
            slow.append(6.0 * max(reset if math.isfinite(reset) else 0.0, 2.0 / gain))
        elif math.isfinite(reset):
            # With hardly any loop gain the reset takes for ever; it need not be watched to its end.
            slow.append(6.0 * reset * (1.0 + min(1.0 / gain, 9.0)))
        if math.isfinite(found.crossover_rad_per_s):
            slow.append(6.0 * min(found.max_sensitivity, 6.0) / found.crossover_rad_per_s)
    return max(slow)


def _common_interval_s(intervals_s: Sequence[float]) -> float:
    """Largest step that all intervals are whole multiples of, or the smallest of them if there is none near."""
    micro = reduce(math.gcd, [max(1, round(interval * 1e6)) for interval in intervals_s])
    smallest = min(intervals_s)
    return micro / 1e6 if micro / 1e6 > smallest / 20.0 else smallest


def _round_up(steps: float) -> int:
    """A number of steps from a coarse series, so that many runs share theirs and can be looked at together.

    The parts of a horizon are 8 to 15 times a power of two.
    """
    part = min(max(steps, _STEPS_LEAST), _STEPS_MOST) / HORIZON_PARTS
    power = 1 << (math.floor(math.log2(part)) - 3)
    return HORIZON_PARTS * power * math.ceil(part / power)


def _multiple(base_s: float, loops: Sequence[tuple[float, float]], *, wanted: int) -> int:
    """Largest multiple of the base, up to the wanted one, at which no loop notices that it is scanned more seldom.

    A loop that is scanned at a longer interval than the step needs that interval to be a multiple of it.
    """
    for interval, speed in loops:
        if speed > 0.0:
            wanted = min(wanted, int((interval + 2.0 * _PHASE_UNNOTICED / speed) / base_s))
    longest = max(interval for interval, _ in loops)
    if wanted * base_s >= longest:
        return max(1, wanted)
    for multiple in range(wanted, 1, -1):
        ratios = [interval / (multiple * base_s) for interval, _ in loops if interval > multiple * base_s]
        if all(math.isclose(ratio, round(ratio), rel_tol=1e-9) for ratio in ratios):
            return multiple
    return 1


def _choose_clock(horizon_s: float, loops: Sequence[tuple[float, float]]) -> Clock:
    """The clock of loops given as execution interval [s] and speed [rad/s].

    The speed of a loop is its crossover, or without one that of its open loop; 0 if that takes no time.
    """
    fastest = max((speed for _, speed in loops), default=0.0)
    # Without any speed nothing is faster than the horizon divided by what it was multiplied with.
    shortest = 1.0 / fastest if fastest > 0.0 else horizon_s / 60.0
    executed = [interval for interval, _ in loops if interval > 0.0]
    if not executed:
        step = _CONTINUOUS * shortest
        return Clock(step_s=step, steps=_round_up(horizon_s / step))
    base = _common_interval_s(executed)
    step = base / math.ceil(base / (_BETWEEN_SCANS * shortest))
    if step == base:
        step *= _multiple(base, loops, wanted=math.ceil(horizon_s / base / _STEPS_WANTED))
    return Clock(step_s=step, steps=_round_up(horizon_s / step))


def _in_hours(time_s: float) -> str:
    return f"{time_s / 3600.0:.3g} h" if time_s >= 7200.0 else f"{time_s:.3g} s"


def _choose_for(
    group: Sequence[ControlStructure], margins: Iterator[tuple[Margins, ...]]
) -> GroupClock | Unsuited:
    horizon_s, open_loop_s, stable, loops = 0.0, 0.0, True, []
    alone: list[tuple[float, float] | None] = []
    for structure in group:
        chain = _controlled_chain(structure)
        found = next(margins) if chain else ()
        horizon_s = max(horizon_s, _horizon_s(structure, chain, found))
        for process in structure.processes:
            open_loop_s = max(open_loop_s, math.fsum(process.lags_s) + process.dead_time_s)
        for stage, margin in zip(chain, found, strict=True):
            stable = stable and margin.stable
            speed = margin.crossover_rad_per_s
            if not math.isfinite(speed):
                open_loop = math.fsum(stage.process.lags_s) + stage.process.dead_time_s
                speed = 1.0 / open_loop if open_loop > 0.0 else 0.0
            loops.append((stage.controller.interval_s, speed))
        alone.append(loops[-1] if len(chain) == 1 else None)
    if horizon_s <= 0.0:
        return Unsuited("nothing in this structure takes time: there is no response to simulate")
    clock = _choose_clock(horizon_s, loops)
    if not stable:
        return GroupClock(Clock(clock.step_s, min(clock.steps, _STEPS_UNSTABLE)), (1,) * len(group))
    if clock.step_s * clock.steps < min(horizon_s, 2.0 * open_loop_s):
        needed = 2.0 * open_loop_s / clock.step_s
        return Unsuited(
            f"lags and dead time of its slowest process add up to {_in_hours(open_loop_s)}, and its fastest loop must "
            f"be followed every {clock.step_s:.3g} s: that would take {needed:,.0f} steps, where {_STEPS_MOST:,} are "
            "the most; they are too far apart to be simulated together (margins need no simulation, and hold)"
        )
    return GroupClock(clock, tuple(1 if loop is None else _steps_of_its_own(clock, *loop) for loop in alone))


def _steps_of_its_own(clock: Clock, interval_s: float, speed_rad_per_s: float) -> int:
    """Steps that one loop by itself, given its interval [s] and speed [rad/s], can take at once: to its next scan."""
    steps = round(interval_s / clock.step_s)
    enough = steps * clock.step_s * speed_rad_per_s <= _BETWEEN_SCANS and clock.steps / max(steps, 1) >= _STEPS_LEAST
    return steps if steps > 1 and enough else 1


def choose_clocks(groups: Sequence[Sequence[ControlStructure]]) -> tuple[GroupClock | Unsuited, ...]:
    """Return one clock per group of structures that are to be compared, or why there is none.

    The step is the common execution interval; shorter where the loops are too fast for it to show; longer
    where thousands of steps would be needed and no crossover loses a degree of phase by it. The horizon
    is several times the slowest lag or closed-loop mode, but at most 40,960 steps.
    """
    chains: list[list[LoopStage]] = []
    refused: dict[int, Unsuited] = {}
    for position, group in enumerate(groups):
        try:
            found = [chain for structure in group if (chain := _controlled_chain(structure))]
        except ValueError as error:
            refused[position] = Unsuited(str(error))
        else:
            chains += found
    margins = iter(analyse_chains(chains))
    return tuple(
        refused[position] if position in refused else _choose_for(group, margins)
        for position, group in enumerate(groups)
    )


def lasting(clock: GroupClock, least_s: float) -> GroupClock:
    """Return a clock of the same step that lasts at least so long, within the most steps there may be."""
    common = clock.common
    steps = max(common.steps, _round_up(least_s / common.step_s))
    return GroupClock(Clock(common.step_s, steps), clock.steps_at_once)
