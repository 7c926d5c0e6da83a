"""Time step and horizon of a simulation, chosen from the dynamics."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import reduce

from loopdoc.engineering.frequency import LoopStage, Margins, analyse_chains
from loopdoc.engineering.process import in_series
from loopdoc.engineering.structure import ControlStructure

# Some tens of nanoseconds each: a tenth of a second for one structure under one upset.
_STEPS_MOST = 2_000_000
_STEPS_LEAST = 512
# What is not stable need not be watched for long.
_STEPS_UNSTABLE = 4096
# Longest step, as a share of the inverse of the fastest crossover: of a controller that is meant to be
# continuous, and of processes between the scans of one that is not.
_CONTINUOUS = 0.02
_BETWEEN_SCANS = 0.35
# Horizons are checked for rest at their eighths, so that numbers of steps are multiples of eight.
HORIZON_PARTS = 8


@dataclass(frozen=True, slots=True)
class Clock:
    """Time step and number of steps of a simulation, for all structures that are compared."""

    step_s: float
    """Time step [s]."""
    steps: int
    """Number of steps."""


@dataclass(frozen=True, slots=True)
class Unsuited:
    """Why structures cannot be simulated."""

    reason: str


def _controlled_chain(structure: ControlStructure) -> list[LoopStage]:
    """The loops of a structure, uncontrolled processes joined to the next loop out."""
    stages, waiting = [], []
    for process, controller, lead_lags in zip(
        structure.processes, structure.controllers, structure.lead_lags, strict=True
    ):
        waiting.append(process)
        if controller is not None:
            stages.append(LoopStage(controller, reduce(in_series, waiting), lead_lags))
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
    """A number of steps that has as many parts as a horizon, within what there may be."""
    return HORIZON_PARTS * math.ceil(min(max(steps, _STEPS_LEAST), _STEPS_MOST) / HORIZON_PARTS)


def _step_s(horizon_s: float, loops: Sequence[tuple[float, float]]) -> float:
    """The time step [s] of loops given as execution interval [s] and speed [rad/s].

    The speed of a loop is its crossover, or without one that of its open loop; 0 if that takes no time.
    """
    fastest = max((speed for _, speed in loops), default=0.0)
    # Without any speed nothing is faster than the horizon divided by what it was multiplied with.
    shortest = 1.0 / fastest if fastest > 0.0 else horizon_s / 60.0
    executed = [interval for interval, _ in loops if interval > 0.0]
    if not executed:
        return _CONTINUOUS * shortest
    base = _common_interval_s(executed)
    return base / math.ceil(base / (_BETWEEN_SCANS * shortest))


def _in_hours(time_s: float) -> str:
    return f"{time_s / 3600.0:.3g} h" if time_s >= 7200.0 else f"{time_s:.3g} s"


def _choose_for(group: Sequence[ControlStructure], margins: Sequence[Sequence[Margins]]) -> Clock | Unsuited:
    """The clock of structures that are compared, given the margins of the loops of each."""
    horizon_s, open_loop_s, stable, loops = 0.0, 0.0, True, []
    for structure, found in zip(group, margins, strict=True):
        chain = _controlled_chain(structure)
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
    if horizon_s <= 0.0:
        return Unsuited("nothing in this structure takes time: there is no response to simulate")
    step_s = _step_s(horizon_s, loops)
    clock = Clock(step_s, _round_up(horizon_s / step_s))
    if not stable:
        return Clock(step_s, min(clock.steps, _STEPS_UNSTABLE))
    if step_s * clock.steps < min(horizon_s, 2.0 * open_loop_s):
        return Unsuited(
            f"lags and dead time of its slowest process add up to {_in_hours(open_loop_s)}, and its fastest loop must "
            f"be followed every {step_s:.3g} s: that would take {2.0 * open_loop_s / step_s:,.0f} steps, where "
            f"{_STEPS_MOST:,} are the most; they are too far apart to be simulated together (margins need no "
            "simulation, and hold)"
        )
    return clock


def choose_clocks(
    groups: Sequence[Sequence[ControlStructure]],
    *,
    known: Mapping[ControlStructure, Sequence[Margins]] | None = None,
) -> tuple[Clock | Unsuited, ...]:
    """Return one clock per group of structures that are to be compared, or why there is none.

    The step is the common execution interval; shorter where the loops are too fast for it to show. The horizon
    is several times the slowest lag or closed-loop mode, but at most two million steps. ``known`` are the margins of
    structures, innermost loop first, that need not be analysed again.
    """
    margins: dict[ControlStructure, Sequence[Margins]] = dict(known or {})
    refused: dict[int, Unsuited] = {}
    unknown: dict[ControlStructure, list[LoopStage]] = {}
    for position, group in enumerate(groups):
        try:
            unknown.update(
                (structure, _controlled_chain(structure)) for structure in group if structure not in margins
            )
        except ValueError as error:
            refused[position] = Unsuited(str(error))
    margins.update((structure, ()) for structure, chain in unknown.items() if not chain)
    chains = {structure: chain for structure, chain in unknown.items() if chain}
    margins.update(zip(chains, analyse_chains(list(chains.values())), strict=True))
    return tuple(
        refused[position]
        if position in refused
        else _choose_for(group, [margins[structure] for structure in group])
        for position, group in enumerate(groups)
    )


def lasting(clock: Clock, least_s: float) -> Clock:
    """Return a clock of the same step that lasts at least so long, within the most steps there may be."""
    return Clock(clock.step_s, max(clock.steps, _round_up(least_s / clock.step_s)))
