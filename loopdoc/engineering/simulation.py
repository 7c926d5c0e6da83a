"""Time responses of control structures, simulated scan by scan as they are executed.

Many structures and scenarios advance together as columns of arrays: a whole plant is simulated at once.
"""

import math
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from loopdoc.engineering.clock import HORIZON_PARTS, Clock, Unsuited, choose_clocks, lasting
from loopdoc.engineering.linear_blocks import Run
from loopdoc.engineering.process import FloatArray, Process, state_space, transition
from loopdoc.engineering.response_metrics import ResponseMetrics, read_metrics
from loopdoc.engineering.scanning import (
    ControllerArrays,
    Engine,
    FinalElementArrays,
    IntArray,
    ProcessArrays,
    Traces,
    controller_arrays,
)
from loopdoc.engineering.structure import ControlStructure, Scenario

# Numbers held at once by one run: bounds the memory of a batch to some 100 MB.
_BATCH_NUMBERS = 12_000_000
# Up to so many columns blocks of steps are quicker than steps.
_FEW = 24
# A run is cut short when nothing moved by more than this share of its peak for an eighth of the horizon.
_AT_REST = 1e-3
# A step through a lag is within 0.3 % of its end after so many times the lag.
_LAGS_TO_ARRIVE = 6.0


@dataclass(frozen=True, slots=True, eq=False)
class Response:
    """A simulated time response; arrays are (n,) over time, percent of span or travel."""

    scenario: Scenario
    time_s: FloatArray
    """Time since the upset [s]."""
    measurement_pct: tuple[FloatArray, ...]
    """Per process, innermost first."""
    setpoint_pct: tuple[FloatArray | None, ...]
    """Per process, after the setpoint limits; None where it is not controlled."""
    output_pct: tuple[FloatArray | None, ...]
    """Per process, after the output limits; None where it is not controlled."""
    travel_pct: FloatArray
    """Final element, mean over the step that begins at each time."""
    metrics: ResponseMetrics


@dataclass(frozen=True, slots=True)
class _Column:
    """One structure under one scenario: a column of the engine."""

    place: tuple[int, int, int]
    structure: ControlStructure
    scenario: Scenario
    clock: Clock

    @property
    def every(self) -> tuple[int, ...]:
        """Steps between scans, per process, 0 where it is not controlled."""
        return tuple(
            0 if controller is None else max(1, round(controller.interval_s / self.clock.step_s))
            for controller in self.structure.controllers
        )

    @property
    def pattern(self) -> tuple[object, ...]:
        """What columns must share to be run together."""
        return (tuple(process.order for process in self.structure.processes), self.every)


def _disturbances(
    columns: Sequence[_Column], level: int, step_s: FloatArray, steps: int
) -> FloatArray | None:
    """(steps + 1, n) disturbance at the measurement of a level [%]: steps through the path of each."""
    by_order: dict[int, list[tuple[int, Process, float]]] = defaultdict(list)
    for position, column in enumerate(columns):
        for disturbance in column.scenario.disturbances:
            if disturbance.level == level and disturbance.size_pct:
                path = disturbance.path_through(column.structure.processes[level])
                by_order[path.order].append((position, path, disturbance.size_pct))
    if not by_order:
        return None
    signal = np.zeros((steps + 1, len(columns)))
    for members in by_order.values():
        positions = [position for position, _, _ in members]
        sizes = np.array([path.gain * size for _, path, size in members])
        moved = _unit_steps([path for _, path, _ in members], step_s[positions], steps) * sizes
        for position, one in zip(positions, moved.T, strict=True):  # a column may have several
            signal[:, position] += one
    return signal


def _unit_steps(paths: Sequence[Process], step_s: FloatArray, steps: int) -> FloatArray:
    """(steps + 1, n) response to a unit step of n paths of equal order, per unit of their gains."""
    system = state_space(paths)
    advance, held, _ = transition(system, step_s)
    order = held.shape[1]
    # With the input as a last state that stays at 1, each doubling takes all samples so far further on.
    further = np.zeros((len(paths), order + 1, order + 1))
    further[:, :order, :order], further[:, :order, order], further[:, order, order] = advance, held, 1.0
    states = [np.zeros((1, len(paths))) for _ in range(order)] + [np.ones((1, len(paths)))]
    while len(states[0]) <= steps:
        later = [
            sum((further[:, i, j] * states[j] for j in range(order + 1)), np.zeros_like(states[0]))
            for i in range(order + 1)
        ]
        states = [np.concatenate([now, then]) for now, then in zip(states, later, strict=True)]
        further = further @ further
    response = np.broadcast_to(system.d, (steps + 1, len(paths)))
    for i in range(order):
        response = response + system.c[:, i] * states[i][: steps + 1]
    return response


def _engine(columns: Sequence[_Column], steps: int, *, keep_signals: bool) -> Engine:
    structures = [column.structure for column in columns]
    step_s = np.array([column.clock.step_s for column in columns])
    elements = [structure.final_element for structure in structures]
    valve_start = np.array([element.start_pct for element in elements])
    stroke_s = np.array([element.stroke_time_s for element in elements])
    controllers: list[ControllerArrays | None] = []
    commanded = valve_start
    for level, every in enumerate(columns[0].every):
        measured = np.array([structure.start_pct[level] for structure in structures])
        at_level = [c for c in (structure.controllers[level] for structure in structures) if c is not None]
        if not at_level:
            controllers.append(None)
            continue
        controllers.append(
            controller_arrays(
                at_level,
                interval_s=step_s * every,
                every=every,
                output_start_pct=commanded,
                setpoint_start_pct=measured,
            )
        )
        commanded = measured
    with np.errstate(divide="ignore"):
        travel_per_step = 100.0 * step_s / stroke_s
    return Engine(
        plants=[
            ProcessArrays(
                [structure.processes[level] for structure in structures], step_s, held_input=level == 0
            )
            for level in range(len(controllers))
        ],
        controllers=controllers,
        final_element=FinalElementArrays(
            step_pct=np.array([column.scenario.final_element_step_pct for column in columns]),
            travel_per_step_pct=travel_per_step,
            half_backlash_pct=np.array([element.backlash_pct / 2.0 for element in elements]),
            low_pct=0.0 - valve_start,
            high_pct=100.0 - valve_start,
        ),
        setpoint_step_pct=np.array([column.scenario.setpoint_step_pct for column in columns]),
        disturbances_pct=[_disturbances(columns, level, step_s, steps) for level in range(len(controllers))],
        steps=steps,
        keep_signals=keep_signals,
    )


class _RestWatch:
    """Watches when the columns of a run come to rest: no signal moves any more, against what it had moved."""

    def __init__(self, horizons: IntArray) -> None:
        self.stops = horizons.copy()
        self._horizons = horizons
        self._going = np.ones(len(horizons), dtype=bool)
        self._peaks: list[FloatArray] = []
        self._seen = 0

    @property
    def checks(self) -> list[int]:
        """The steps at which a column is at one of the parts of its horizon, but for the first."""
        parts = range(2, HORIZON_PARTS + 1)
        horizons = np.unique(self._horizons).tolist()
        return sorted({horizon * part // HORIZON_PARTS for horizon in horizons for part in parts})

    def check(self, step: int, traces: Traces) -> bool:
        """Note which columns are at rest at a step; False once none is left going."""
        signals = (*traces.measurement_pct, traces.travel_pct)
        since = [np.abs(signal[self._seen :]).max(axis=0) for signal in signals]
        self._peaks = (
            [np.maximum(a, b) for a, b in zip(self._peaks, since, strict=True)] if self._peaks else since
        )
        self._seen = step
        windows = self._horizons // HORIZON_PARTS
        for window in np.unique(windows[(step % windows == 0) & self._going]).tolist():
            members = np.nonzero((windows == window) & self._going)[0]
            rest = np.ones(len(members), dtype=bool)
            for signal, peak in zip(signals, self._peaks, strict=True):
                rest &= np.ptp(signal[-window - 1 :, members], axis=0) <= _AT_REST * peak[members]
            done = members[rest | (self._horizons[members] == step)]
            self.stops[done], self._going[done] = step, False
        return bool(self._going.any())


def _run(columns: Sequence[_Column], *, keep_signals: bool, until_rest: bool) -> tuple[Run, IntArray]:
    """Run columns of one pattern to the horizon, or until each is at rest; return where each ended."""
    horizons = np.array([column.clock.steps for column in columns])
    steps = int(horizons.max())
    first = columns[0]
    run = Run(
        _engine(columns, steps, keep_signals=keep_signals),
        one_structure=len(columns) <= _FEW
        and all((c.structure, c.clock) == (first.structure, first.clock) for c in columns),
    )
    if not until_rest:
        return run, horizons
    watch = _RestWatch(horizons)
    for step in watch.checks:
        if not watch.check(step, run.to(step)):
            break
    return run, watch.stops


def _accepted_step_pct(column: _Column) -> float:
    """The setpoint step of a column after the setpoint limits, 0 without a controller."""
    controllers = [
        (controller, start)
        for controller, start in zip(column.structure.controllers, column.structure.start_pct, strict=True)
        if controller is not None
    ]
    if not controllers:
        return 0.0
    outermost, start = controllers[-1]
    asked = start + column.scenario.setpoint_step_pct
    return min(max(asked, outermost.setpoint_low_pct), outermost.setpoint_high_pct) - start


def _all_metrics(columns: Sequence[_Column], traces: Traces, stops: IntArray) -> list[ResponseMetrics]:
    """Read the metrics of each column up to its own stop."""
    found: dict[int, ResponseMetrics] = {}
    for stop in np.unique(stops):
        members = np.nonzero(stops == stop)[0].tolist()
        part = [columns[i] for i in members]
        outermost = [column.structure.controllers[-1] for column in part]
        metrics = read_metrics(
            traces.measurement_pct[-1][: stop + 1, members],
            traces.travel_pct[: stop + 1, members],
            step_s=np.array([column.clock.step_s for column in part]),
            setpoint_step_pct=np.array([_accepted_step_pct(column) for column in part]),
            disturbed_pct=np.array(
                [math.fsum(abs(d.size_pct) for d in column.scenario.disturbances) for column in part]
            ),
            has_reset=np.array([c is not None and math.isfinite(c.reset_s) for c in outermost]),
            executed_interval_s=[
                tuple(every * column.clock.step_s for every in column.every if every) for column in part
            ],
        )
        found.update(zip(members, metrics, strict=True))
    return [found[i] for i in range(len(columns))]


def _batches(columns: Sequence[_Column], signals_per_column: int) -> list[list[_Column]]:
    """Columns that can run together, of like length, no more at once than memory should hold."""
    by_pattern: dict[tuple[object, ...], list[_Column]] = defaultdict(list)
    for column in columns:
        by_pattern[column.pattern].append(column)
    batches = []
    for members in by_pattern.values():
        members.sort(key=lambda column: column.clock.steps)
        batch: list[_Column] = []
        for column in members:
            if batch and (len(batch) + 1) * column.clock.steps * signals_per_column > _BATCH_NUMBERS:
                batches.append(batch)
                batch = []
            batch.append(column)
        batches.append(batch)
    return batches


def _columns(
    group: int, structures: Sequence[ControlStructure], scenarios: Sequence[Scenario], clock: Clock
) -> list[_Column]:
    for scenario in scenarios:
        for disturbance in scenario.disturbances:
            if any(not 0 <= disturbance.level < len(structure.processes) for structure in structures):
                raise ValueError(f"scenario {scenario.name}: there is no level {disturbance.level}")
    return [
        _Column((group, i, j), structure, scenario, clock)
        for i, structure in enumerate(structures)
        for j, scenario in enumerate(scenarios)
    ]


def _slowest_disturbance_s(scenarios: Sequence[Scenario]) -> float:
    """How long disturbances with a path of their own take to come through in full [s]."""
    paths = [d.path for scenario in scenarios for d in scenario.disturbances if d.path is not None]
    return max((_LAGS_TO_ARRIVE * path.lag_sum_s for path in paths), default=0.0)


def _response(column: _Column, traces: Traces, position: int, metrics: ResponseMetrics) -> Response:
    """One column of the signals as a response, the start added."""
    structure = column.structure
    starts = structure.start_pct

    def signal(values: FloatArray, start_pct: float) -> FloatArray:
        absolute: FloatArray = values[:, position] + start_pct
        absolute.flags.writeable = False
        return absolute

    setpoints: list[FloatArray | None] = []
    outputs: list[FloatArray | None] = []
    commanded, loop = structure.final_element.start_pct, 0
    for controller, start in zip(structure.controllers, starts, strict=True):
        if controller is None:
            setpoints.append(None)
            outputs.append(None)
            continue
        setpoints.append(signal(traces.setpoint_pct[loop], start))
        outputs.append(signal(traces.output_pct[loop], commanded))
        commanded, loop = start, loop + 1
    time_s: FloatArray = column.clock.step_s * np.arange(len(traces.travel_pct), dtype=np.float64)
    time_s.flags.writeable = False
    return Response(
        scenario=column.scenario,
        time_s=time_s,
        measurement_pct=tuple(
            signal(values, start) for values, start in zip(traces.measurement_pct, starts, strict=True)
        ),
        setpoint_pct=tuple(setpoints),
        output_pct=tuple(outputs),
        travel_pct=signal(traces.travel_pct, structure.final_element.start_pct),
        metrics=metrics,
    )


def simulate(
    structures: Sequence[ControlStructure], scenarios: Sequence[Scenario], *, clock: Clock | None = None
) -> tuple[tuple[Response, ...], ...]:
    """Time responses of structures that are to be compared, scan by scan with limits, on one clock.

    Parameters
    ----------
    structures : sequence of ControlStructure
        For example a cascade and the single loop in its place.
    scenarios : sequence of Scenario
        Each is applied to each structure.
    clock : Clock, optional
        Time step and horizon, kept to the end. Without it both are chosen from the dynamics, and a run
        ends at an eighth of the horizon once all signals have come to rest.

    Returns
    -------
    tuple of tuples of Response
        One tuple per structure, one `Response` per scenario, all of the same length.

    Raises
    ------
    ValueError
        A scenario names a level that a structure does not have, or they cannot be simulated together.

    Source: K. J. Astrom, B. Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, ch. 2 and 8
    (sampling of lags and dead time, digital PID; chapters from memory).
    """
    chosen = choose_clocks([structures])[0] if clock is None else clock
    if isinstance(chosen, Unsuited):
        raise ValueError(chosen.reason)
    if clock is None:
        chosen = lasting(chosen, _slowest_disturbance_s(scenarios))
    found: dict[tuple[int, int, int], Response] = {}
    columns = _columns(0, structures, scenarios, chosen)
    runs = []
    for batch in _batches(columns, 4 * max(len(structure.processes) for structure in structures)):
        run, stops = _run(batch, keep_signals=True, until_rest=clock is None)
        runs.append((batch, run, stops))
    # Curves that are drawn together end together; the figures are read where each had come to rest.
    end = max(int(stops.max()) for _, _, stops in runs)
    for batch, run, stops in runs:
        traces = run.to(end)
        for position, metrics in enumerate(_all_metrics(batch, traces, stops)):
            found[batch[position].place] = _response(batch[position], traces, position, metrics)
    return tuple(tuple(found[0, i, j] for j in range(len(scenarios))) for i in range(len(structures)))


def simulate_metrics(
    groups: Sequence[tuple[Sequence[ControlStructure], Sequence[Scenario]]],
) -> tuple[tuple[tuple[ResponseMetrics, ...], ...] | Unsuited, ...]:
    """Metrics of many groups of structures at once, a whole plant for example, without their signals.

    Parameters
    ----------
    groups : sequence of (structures, scenarios)
        Each group as in `simulate`, on a clock of its own chosen from its dynamics.

    Returns
    -------
    tuple of nested tuples of ResponseMetrics, or Unsuited
        Per group, per structure, per scenario; the figures are those of `simulate`. Where a group cannot
        be simulated, the reason.

    Raises
    ------
    ValueError
        A scenario names a level that a structure does not have.

    Source: as for `simulate`.
    """
    clocks = choose_clocks([structures for structures, _ in groups])
    columns = []
    for group, ((structures, scenarios), clock) in enumerate(zip(groups, clocks, strict=True)):
        if isinstance(clock, Clock):
            chosen = lasting(clock, _slowest_disturbance_s(scenarios))
            columns += _columns(group, structures, scenarios, chosen)
    found: dict[tuple[int, int, int], ResponseMetrics] = {}
    widest = max(
        (len(structure.processes) for structures, _ in groups for structure in structures), default=1
    )
    for batch in _batches(columns, 1 + widest):
        run, stops = _run(batch, keep_signals=False, until_rest=True)
        metrics = _all_metrics(batch, run.to(int(stops.max())), stops)
        found.update(zip((column.place for column in batch), metrics, strict=True))
    return tuple(
        clock
        if isinstance(clock, Unsuited)
        else tuple(tuple(found[group, i, j] for j in range(len(scenarios))) for i in range(len(structures)))
        for group, ((structures, scenarios), clock) in enumerate(zip(groups, clocks, strict=True))
    )
