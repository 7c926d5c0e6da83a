"""Control structures to be simulated and compared, and what upsets them.

A `ControlStructure` is a chain of processes from one final element outward, with a controller on some
or all of their measurements: on every one it is a cascade, on the outermost alone a single loop on the
same final element, on none a loop in manual. Upsets enter all of them in the same places.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

from loopdoc.engineering.frequency import LoopStage
from loopdoc.engineering.functions import Curve
from loopdoc.engineering.lead_lag import LeadLag
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process


@dataclass(frozen=True, slots=True)
class FinalElement:
    """Valve or drive at the end of the chain, in percent of its travel."""

    stroke_time_s: float = 0.0
    """Time for the full travel at the full rate [s]; 0 is immediate."""
    backlash_pct: float = 0.0
    """Signal lost on a reversal [%]; the start is in the middle of it."""
    resolution_pct: float = 0.0
    """Change of the signal since the last movement up to which nothing moves [%].

    Source: ISA-TR75.25.02, Control valve response measurement from step inputs; IEC 61298-2 (definitions of
    resolution and dead band; from memory).
    """
    start_pct: float = 50.0
    """Travel before the upset [%]."""

    def __post_init__(self) -> None:
        if not (math.isfinite(self.stroke_time_s) and self.stroke_time_s >= 0.0):
            raise ValueError("the stroke time must be a finite time of zero or more")
        if not 0.0 <= self.backlash_pct < 100.0:
            raise ValueError("the backlash must be zero or more, and below 100 %")
        if not 0.0 <= self.resolution_pct < 100.0:
            raise ValueError("the resolution must be zero or more, and below 100 %")
        if not 0.0 <= self.start_pct <= 100.0:
            raise ValueError("the final element starts outside its travel of 0 to 100 %")


@dataclass(frozen=True, slots=True)
class Feedforward:
    """What functions bring from a measured variable to the output of a controller, on the way to what that commands.

    A sum adds it: ``gain`` is in percent of what is commanded per percent of the measured variable. A ratio multiplies
    by it: there ``gain`` is in shares of the normal input per percent.

    Source: D. E. Seborg and others, Process Dynamics and Control, ch. 15 (feedforward and ratio control; from memory).
    """

    measurement: str
    """Tag of what is measured."""
    gain: float
    """Per percent of the measurement's span, or per unit of what the last characteriser gives."""
    lead_lags: tuple[LeadLag, ...] = ()
    """Between the measurement and where it joins, a filter as a lag alone; executed with the controller."""
    curves: tuple[Curve, ...] = ()
    """Characterisers on its way: the first from the change of the measurement [%], each to the change of what it
    gives."""
    joins: int = 0
    """Behind how many of the lead-lags of the controller's output it joins."""
    multiplied_pct: float | None = None
    """Of a ratio, what it normally makes of its input, counted from zero [% of what is commanded]; None for a sum."""

    def brings(self, size_pct: float) -> float:
        """What it brings in the end as the measurement moves by so much: [%], or a share of the normal input.

        Between the start and the end a characteriser is taken as straight.
        """
        value = size_pct
        for curve in self.curves:
            value = curve.at(value)
        return self.gain * value


@dataclass(frozen=True, slots=True)
class ControlStructure:
    """Processes in a chain from one final element, and the controllers on their measurements."""

    processes: tuple[Process, ...]
    """Innermost first: each takes the measurement below it, the first the final element."""
    controllers: tuple[Controller | None, ...]
    """One per process; None where the measurement is not controlled."""
    final_element: FinalElement = FinalElement()
    start_pct: tuple[float, ...] = ()
    """Measurements, and setpoints, before the upset [%]; 50 % each if left empty."""
    lead_lags: tuple[tuple[LeadLag, ...], ...] = ()
    """Per process, those between its controller's output and what that commands; none if left empty."""
    feedforwards: tuple[tuple[Feedforward, ...], ...] = ()
    """Per process, what joins its controller's output on that way, in order; none if left empty."""

    def __post_init__(self) -> None:
        if not self.processes:
            raise ValueError("a control structure needs at least one process")
        if len(self.controllers) != len(self.processes):
            raise ValueError("a control structure needs one entry per process in its controllers")
        if not self.start_pct:
            object.__setattr__(self, "start_pct", (50.0,) * len(self.processes))
        if not self.lead_lags:
            object.__setattr__(self, "lead_lags", ((),) * len(self.processes))
        if not self.feedforwards:
            object.__setattr__(self, "feedforwards", ((),) * len(self.processes))
        if len(self.start_pct) != len(self.processes):
            raise ValueError("a control structure needs one start per process")
        if len(self.lead_lags) != len(self.processes):
            raise ValueError("a control structure needs one entry per process in its lead-lags")
        if len(self.feedforwards) != len(self.processes):
            raise ValueError("a control structure needs one entry per process in its feedforwards")


def cascade_structure(
    stages: Sequence[LoopStage],
    *,
    final_element: FinalElement,
    start_pct: tuple[float, ...] = (),
    feedforwards: tuple[tuple[Feedforward, ...], ...] = (),
) -> ControlStructure:
    """Return the structure in which every level of the chain, innermost first, is controlled."""
    return ControlStructure(
        processes=tuple(stage.process for stage in stages),
        controllers=tuple(stage.controller for stage in stages),
        final_element=final_element,
        start_pct=start_pct,
        lead_lags=tuple(stage.lead_lags for stage in stages),
        feedforwards=feedforwards,
    )


def single_loop_structure(cascade: ControlStructure, controller: Controller) -> ControlStructure:
    """Return the same processes with one controller, from the outermost measurement to the final element.

    Nothing is fed forward to it: the functions of the cascade give a setpoint that it does not have.
    """
    levels = len(cascade.processes)
    return ControlStructure(
        processes=cascade.processes,
        controllers=(None,) * (levels - 1) + (controller,),
        final_element=cascade.final_element,
        start_pct=cascade.start_pct,
    )


@dataclass(frozen=True, slots=True)
class Disturbance:
    """A step that reaches the measurement of a level through the lags of that level's own process.

    Through a process that settles it ends at its full size; through an integrating one it is a load
    of that size at the process input, and the measurement ramps. It may have a path of its own instead.
    """

    level: int
    """Level whose measurement it moves, 0 the innermost."""
    size_pct: float
    """Size [% of span]."""
    path: Process | None = None
    """From the step to the measurement; its dead time would only postpone the upset and is left out."""
    dead_time_s: float = 0.0
    """Time before it arrives [s], which counts where a measurement tells of it beforehand."""

    def path_through(self, process: Process) -> Process:
        """Return the path to the measurement of a level with the given process, without dead time."""
        if self.path is not None:
            return replace(self.path, dead_time_s=0.0)
        gain = abs(process.gain) if process.integrating else 1.0
        return Process(gain=gain, lags_s=process.lags_s, integrating=process.integrating)


@dataclass(frozen=True, slots=True)
class MeasuredMove:
    """What a measured variable does in an upset, which no loop of the structure changes."""

    measurement: str
    """Its tag, as feedforwards name it."""
    size_pct: float
    """How far it moves in the end [% of its span]."""
    lag_s: float = 0.0
    """First-order time constant with which it moves [s]; 0 for at once."""


@dataclass(frozen=True, slots=True)
class Scenario:
    """What upsets a structure at time zero."""

    name: str
    """How the scenario is called in results."""
    setpoint_step_pct: float = 0.0
    """Step of the outermost controller's setpoint [%]."""
    disturbances: tuple[Disturbance, ...] = ()
    """Steps that reach measurements from outside."""
    moves: tuple[MeasuredMove, ...] = ()
    """What measured variables do meanwhile, for feedforwards."""
    final_element_step_pct: float = 0.0
    """Step of the final element [%]; only where no controller moves it."""


def standard_scenarios(levels: int, *, size_pct: float = 10.0) -> tuple[Scenario, ...]:
    """Return a setpoint step and a disturbance per level, outermost last, each a share of span [%]."""
    names = ("primary", "secondary", "tertiary")
    disturbances = [
        Scenario(
            name=f"{names[levels - 1 - level]} disturbance"
            if levels - 1 - level < len(names)
            else f"level {level + 1} disturbance",
            disturbances=(Disturbance(level, size_pct),),
        )
        for level in range(levels)
    ]
    return (Scenario(name="setpoint step", setpoint_step_pct=size_pct), *disturbances)
