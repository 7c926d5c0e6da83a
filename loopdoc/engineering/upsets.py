"""What may upset a measurement while its loops are in manual: a final element at its limit, a declared disturbance.

Each upset is a step and its path to the measurement, from the process models of the register; the controllers
take no part, and what functions make of measured variables reaches no final element either. A final element starts
from its opening in normal operation, which the register does not give. It follows for a flow, which is nothing when
its valve is shut: the normal flow over the process gain. Where it does not follow, the whole travel is taken, the
quickest upset that there can be, and said to be so.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import reduce

from loopdoc.engineering.pairing import ControlledLoop, Plant, Route, normal_value
from loopdoc.engineering.process import Process, in_series
from loopdoc.engineering.stages import (
    Lacking,
    Way,
    commanded,
    measured_range,
    process_along,
    process_of_indicator,
    ways_down,
)
from loopdoc.register import model
from loopdoc.register.model import FinalElement, Loop, known, seconds
from loopdoc.register.units import UnitError

_MOVES = {
    # kind of final element: what it does at 0 and at 100 % of its travel
    "variable-speed drive": ("stops", "runs at full speed"),
    "motor": ("stops", "runs at full speed"),
    "heater bank": ("goes off", "goes to full power"),
}
_VALVE_MOVES = ("shuts", "opens fully")


@dataclass(frozen=True, slots=True)
class Upset:
    """One upset of one measurement."""

    name: str
    """In words: `FV-2011 opens fully`, or the name of the disturbance in the register."""
    path: Process
    """From the step to the measurement, in percent of its range."""
    size_pct: float
    """Size of the step [%]."""
    ramp_s: float = 0.0
    """Time in which it arrives, where a final element has to travel [s]."""
    whole_travel: bool = False
    """True where the opening in normal operation does not follow, and the whole travel is taken for the step."""


@dataclass(frozen=True, slots=True)
class UndecidedUpset:
    """An upset that cannot be calculated, and why."""

    name: str
    reason: str


def upsets_of(plant: Plant, loop: Loop) -> tuple[Upset | UndecidedUpset, ...]:
    """Every upset that the register gives of a loop's measurement; none for an indicator without disturbances."""
    controlled = plant.controlled.get(loop.tag)
    if controlled is None:
        return tuple(_of_indicator(loop))
    ways = ways_down(plant, controlled)
    if isinstance(ways, Lacking):
        return (UndecidedUpset("the final element at its limits", ways.reason),)
    # A disturbance stands on every branch of a split range alike, and counts once.
    found = {upset.name: upset for way in ways for upset in (*_by_element(way), *_by_disturbances(way))}
    return tuple(found.values())


@dataclass(frozen=True, slots=True)
class Step:
    """A declared disturbance as a step in percent, with its path to the measurement of its loop."""

    size_pct: float
    """Size [%]: of the measurement's span; at the input of an integrating process, of what commands it."""
    path: Process


def declared_step(
    written: model.Disturbance, loop: ControlledLoop, route: Route, process: Process | Lacking
) -> Step | Lacking:
    """A declared disturbance of a controlled loop whose process on a route is given."""
    if route.branch is not None and known(written.at) == "process input":
        return Lacking(f"{loop.tag} has several process inputs, one for each final element of its split range")
    unit, span = ("%", 100.0) if isinstance(process, Lacking) else commanded(route)
    return _step(written, loop.loop, process, unit, span)


def _step(
    written: model.Disturbance, loop: Loop, process: Process | Lacking, input_unit: str, input_span: float
) -> Step | Lacking:
    """The step of a loop with a process from percent of the input's span to percent of the loop's range."""
    measurement = known(loop.measurement)
    own = known(measurement.range) if measurement else None
    size, lag = known(written.size), written.lag
    if size is None or own is None or own.span <= 0.0:
        return Lacking(f"its size, or the range of {loop.tag}, is not known")
    for name, time in (("lag", lag), ("dead time", written.dead_time)):
        if isinstance(time, model.Hold):
            return Lacking(f"its {name} {'is on hold' if time.readable else 'could not be read'}")
    dead_time_s = max(0.0, seconds(written.dead_time))
    try:
        if known(written.at) == "process input":
            if isinstance(process, Lacking):
                return process
            late = replace(process, dead_time_s=process.dead_time_s + dead_time_s)
            return _through(late, 100.0 * size.difference_in(input_unit) / input_span)
        size_pct = 100.0 * size.difference_in(own.unit.symbol) / own.span
    except UnitError:
        return Lacking("its size is in a unit of another kind")
    if lag is not None:
        return Step(size_pct, Process(1.0, (seconds(lag),), dead_time_s))
    if isinstance(process, Lacking):
        return Lacking(f"it has no lag of its own, and {process.reason}")
    return Step(size_pct, Process(1.0, process.lags_s, dead_time_s))


def _through(process: Process, input_pct: float) -> Step:
    if process.integrating:
        return Step(input_pct, process)
    # Told by what it makes of the measurement in the end, as every disturbance that settles.
    return Step(process.gain * input_pct, replace(process, gain=1.0))


def _of_indicator(loop: Loop) -> Iterator[Upset | UndecidedUpset]:
    process = process_of_indicator(loop)
    model_of = known(loop.process)
    gain = known(model_of.gain) if model_of else None
    unit = gain.denominator.symbol if gain else "%"
    for written in loop.disturbances.values():
        yield _upset(written.name, _step(written, loop, process, unit, 1.0), [])


def _by_disturbances(way: Way) -> Iterator[Upset | UndecidedUpset]:
    """The declared disturbances of the loop and of each secondary below it."""
    processes = [process_along(loop, route) for loop, route in way]
    lead = way[-1][0]
    for level, (loop, route) in enumerate(way):
        for written in loop.loop.disturbances.values():
            name = written.name if loop is lead else f"{written.name} ({loop.tag})"
            step = declared_step(written, loop, route, processes[level])
            yield _upset(name, step, processes[level + 1 :])


def _upset(name: str, step: Step | Lacking, outer: list[Process | Lacking]) -> Upset | UndecidedUpset:
    if isinstance(step, Lacking):
        return UndecidedUpset(name, step.reason)
    path = _joined([step.path, *outer])
    return UndecidedUpset(name, path.reason) if isinstance(path, Lacking) else Upset(name, path, step.size_pct)


def _joined(processes: list[Process | Lacking]) -> Process | Lacking:
    joined: list[Process] = []
    for process in processes:
        if isinstance(process, Lacking):
            return process
        joined.append(process)
    try:
        return reduce(in_series, joined)
    except ValueError as error:
        return Lacking(str(error))


# ---------------------------------------------------------------- final elements


def _by_element(way: Way) -> Iterator[Upset | UndecidedUpset]:
    """The final element at either end of its travel."""
    inner, route = way[0]
    assert isinstance(route.end, FinalElement)
    tag = route.end.tag
    processes = [process_along(loop, one) for loop, one in way]
    path = _joined(processes)
    if isinstance(path, Lacking):
        yield UndecidedUpset(f"{tag} at its limits", path.reason)
        return
    assert isinstance(processes[0], Process)
    start_pct = _opening_pct(inner, route, processes[0])
    stroke_s = seconds(route.end.stroke_time)
    moves = _MOVES.get(known(route.end.kind) or "", _VALVE_MOVES)
    for move, end_pct in zip(moves, (0.0, 100.0), strict=True):
        size_pct = (2.0 * end_pct - 100.0) if start_pct is None else end_pct - start_pct
        if size_pct:
            ramp_s = stroke_s * abs(size_pct) / 100.0
            yield Upset(f"{tag} {move}", path, size_pct, ramp_s, whole_travel=start_pct is None)


def _opening_pct(loop: ControlledLoop, route: Route, process: Process) -> float | None:
    """Travel in normal operation, where it follows: of a flow, which is nothing when the element is shut."""
    measurement = known(loop.loop.measurement)
    normal = normal_value(loop.loop)
    flows = measurement is not None and known(measurement.variable) == "flow"
    if not flows or normal is None or route.branch is not None or process.integrating or process.gain <= 0.0:
        return None
    own = measured_range(loop)
    try:
        opening = 100.0 * normal.to(own.unit.symbol) / (own.span * process.gain)
    except UnitError:
        return None
    return opening if 0.0 <= opening <= 100.0 else None
