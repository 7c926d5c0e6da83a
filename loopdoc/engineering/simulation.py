"""Time responses of control structures, simulated scan by scan as they are executed.

Many structures and scenarios advance together as columns of arrays: a whole plant is simulated at once.
"""

import math
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from loopdoc.engineering.clock import HORIZON_PARTS, Clock, Unsuited, choose_clocks, lasting
from loopdoc.engineering.columns import Column, batches, engine, outermost_has_reset, setpoint_step_pct
from loopdoc.engineering.linear_blocks import Run
from loopdoc.engineering.process import FloatArray
from loopdoc.engineering.response_metrics import ResponseMetrics, read_metrics
from loopdoc.engineering.running_metrics import AT_REST, RunningMetrics
from loopdoc.engineering.scanning import IntArray, Traces
from loopdoc.engineering.structure import ControlStructure, Scenario

# Numbers held at once by a run that keeps its signals: bounds its memory to some 100 MB.
_KEPT_NUMBERS = 12_000_000
# Columns of a run that does not: large enough for numpy, small enough for the processor's cache.
_COLUMNS_AT_ONCE = 5000
# Steps between two looks at what moves still.
_BLOCK = 64
# Columns that have ended are dropped once only this share is left.
_WORTH_DROPPING = 0.8
# Up to so many columns blocks of steps are quicker than steps.
_FEW = 24
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
                rest &= np.ptp(signal[-window - 1 :, members], axis=0) <= AT_REST * peak[members]
            done = members[rest | (self._horizons[members] == step)]
            self.stops[done], self._going[done] = step, False
        return bool(self._going.any())


def _run(columns: Sequence[Column], *, until_rest: bool) -> tuple[Run, IntArray]:
    """Run columns to the horizon, or until each is at rest, with all signals; return where each ended."""
    horizons = np.array([column.clock.steps for column in columns])
    first = columns[0]
    run = Run(
        engine(columns, room=int(horizons.max()), keep_signals=True),
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


def _all_metrics(columns: Sequence[Column], traces: Traces, stops: IntArray) -> list[ResponseMetrics]:
    """Read the metrics of each column up to its own stop."""
    found: dict[int, ResponseMetrics] = {}
    for stop in np.unique(stops):
        members = np.nonzero(stops == stop)[0].tolist()
        part = [columns[i] for i in members]
        metrics = read_metrics(
            traces.measurement_pct[-1][: stop + 1, members],
            traces.travel_pct[: stop + 1, members],
            step_s=np.array([column.clock.step_s for column in part]),
            setpoint_step_pct=np.array([setpoint_step_pct(column) for column in part]),
            disturbed_pct=np.array([column.disturbed_pct for column in part]),
            has_reset=np.array([outermost_has_reset(column) for column in part]),
            executed_interval_s=[column.executed_interval_s for column in part],
        )
        found.update(zip(members, metrics, strict=True))
    return [found[i] for i in range(len(columns))]


def _run_without_signals(columns: Sequence[Column]) -> list[ResponseMetrics]:
    """Run columns until each is at rest or at its horizon, and read their metrics on the way."""
    horizon = np.array([column.clock.steps for column in columns])
    window = horizon // HORIZON_PARTS
    # All windows are multiples of the largest power of two in the one that has the least of them.
    block = min(_BLOCK, int((window & -window).min()))
    longest = max(int(max(process.dead_time_s for process in c.structure.processes) / c.clock.step_s) for c in columns)
    at_work = engine(columns, room=block * math.ceil(max(512, longest) / block), keep_signals=False, block=block)
    measured, travel = at_work.last(0)
    running = RunningMetrics(
        setpoint_step_pct=np.array([setpoint_step_pct(column) for column in columns]),
        disturbed_pct=np.array([column.disturbed_pct for column in columns]),
        horizon=horizon,
        window=window,
        start=[signal[-1] for signal in (*measured, travel)],
    )
    found: list[ResponseMetrics | None] = [None] * len(columns)
    here = np.arange(len(columns))
    going = np.ones(len(columns), dtype=bool)
    while True:
        if at_work.room_left < block:
            at_work.roll()
        for _ in range(block):
            at_work.advance()
        measured, travel = at_work.last(block)
        signals = (*measured, travel)
        running.take_in(signals, at_work.step)
        done = (running.ended(at_work.step) & going).nonzero()[0]
        if done.size:
            part = [columns[i] for i in here[done].tolist()]
            metrics = running.read(
                done,
                step=at_work.step,
                last=[signal[-1] for signal in signals],
                step_s=np.array([column.clock.step_s for column in part]),
                executed_interval_s=[column.executed_interval_s for column in part],
            )
            for i, one in zip(here[done].tolist(), metrics, strict=True):
                found[i] = one
            going[done] = False
            left = going.nonzero()[0]
            if not left.size:
                return [one for one in found if one is not None]
            running.begin_windows(at_work.step, signals)
            if len(left) < _WORTH_DROPPING * len(going):
                at_work.keep(left)
                running.keep(left)
                here, going = here[left], going[left]
        else:
            running.begin_windows(at_work.step, signals)


def _columns(
    group: int, structures: Sequence[ControlStructure], scenarios: Sequence[Scenario], clocks: Sequence[Clock]
) -> list[Column]:
    for scenario in scenarios:
        for disturbance in scenario.disturbances:
            if any(not 0 <= disturbance.level < len(structure.processes) for structure in structures):
                raise ValueError(f"scenario {scenario.name}: there is no level {disturbance.level}")
    return [
        Column((group, i, j), structure, scenario, clocks[i])
        for i, structure in enumerate(structures)
        for j, scenario in enumerate(scenarios)
    ]


def _slowest_disturbance_s(scenarios: Sequence[Scenario]) -> float:
    """How long disturbances with a path of their own take to come through in full [s]."""
    paths = [d.path for scenario in scenarios for d in scenario.disturbances if d.path is not None]
    return max((_LAGS_TO_ARRIVE * path.lag_sum_s for path in paths), default=0.0)


def _response(column: Column, traces: Traces, position: int, end: int, metrics: ResponseMetrics) -> Response:
    """One column of the signals up to a step as a response, the start added."""
    structure = column.structure
    starts = structure.start_pct

    def signal(values: FloatArray, start_pct: float) -> FloatArray:
        absolute: FloatArray = values[: end + 1, position] + start_pct
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
    time_s: FloatArray = column.clock.step_s * np.arange(end + 1, dtype=np.float64)
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
    if clock is not None:
        return _responses([(structures, scenarios, clock)], until_rest=False)[0]
    found = simulate_groups([(structures, scenarios)])[0]
    if isinstance(found, Unsuited):
        raise ValueError(found.reason)
    return found


def simulate_groups(
    groups: Sequence[tuple[Sequence[ControlStructure], Sequence[Scenario]]],
) -> tuple[tuple[tuple[Response, ...], ...] | Unsuited, ...]:
    """Time responses of many groups of structures at once, each as by `simulate` on a clock of its own.

    Parameters
    ----------
    groups : sequence of (structures, scenarios)
        Each group as in `simulate`.

    Returns
    -------
    tuple of nested tuples of Response, or Unsuited
        Per group, per structure, per scenario. Where a group cannot be simulated, the reason.

    Raises
    ------
    ValueError
        A scenario names a level that a structure does not have.

    Source: as for `simulate`.
    """
    found: list[tuple[tuple[Response, ...], ...] | Unsuited] = []
    waiting: list[tuple[Sequence[ControlStructure], Sequence[Scenario], Clock]] = []
    places: list[int] = []
    numbers = 0

    def run_waiting() -> None:
        for place, responses in zip(places, _responses(waiting, until_rest=True), strict=True):
            found[place] = responses
        places.clear()
        waiting.clear()

    for (structures, scenarios), clock in zip(groups, choose_clocks([one for one, _ in groups]), strict=True):
        if isinstance(clock, Unsuited):
            found.append(clock)
            continue
        common = lasting(clock, _slowest_disturbance_s(scenarios)).common
        wanted = common.steps * len(scenarios) * sum(4 * len(structure.processes) for structure in structures)
        if waiting and numbers + wanted > _KEPT_NUMBERS:
            run_waiting()
            numbers = 0
        numbers += wanted
        places.append(len(found))
        waiting.append((structures, scenarios, common))
        found.append(())
    run_waiting()
    return tuple(found)


def _kept_batches(columns: Sequence[Column]) -> list[list[Column]]:
    """Batches of runs that keep their signals: by structure where blocks of steps may serve, else together."""
    by_structure: dict[tuple[int, int], list[Column]] = defaultdict(list)
    together: list[Column] = []
    for column in columns:
        element = column.structure.final_element
        if element.backlash_pct or element.resolution_pct:
            together.append(column)
        else:
            by_structure[column.place[:2]].append(column)
    return [*by_structure.values(), *batches(together, kept_numbers=_KEPT_NUMBERS)]


def _responses(
    groups: Sequence[tuple[Sequence[ControlStructure], Sequence[Scenario], Clock]], *, until_rest: bool
) -> list[tuple[tuple[Response, ...], ...]]:
    """Responses of groups that are simulated together, each on its clock."""
    columns = [
        column
        for group, (structures, scenarios, clock) in enumerate(groups)
        for column in _columns(group, structures, scenarios, [clock] * len(structures))
    ]
    runs = []
    ends = [0] * len(groups)
    for batch in _kept_batches(columns):
        run, stops = _run(batch, until_rest=until_rest)
        runs.append((batch, run, stops))
        for column, stop in zip(batch, stops.tolist(), strict=True):
            ends[column.place[0]] = max(ends[column.place[0]], stop)
    found: dict[tuple[int, int, int], Response] = {}
    for batch, run, stops in runs:
        # Curves that are drawn together end together; the figures are read where each had come to rest.
        traces = run.to(max(ends[column.place[0]] for column in batch))
        for position, (column, metrics) in enumerate(zip(batch, _all_metrics(batch, traces, stops), strict=True)):
            found[column.place] = _response(column, traces, position, ends[column.place[0]], metrics)
    return [
        tuple(tuple(found[group, i, j] for j in range(len(scenarios))) for i in range(len(structures)))
        for group, (structures, scenarios, _) in enumerate(groups)
    ]


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
        if not isinstance(clock, Unsuited):
            chosen = lasting(clock, _slowest_disturbance_s(scenarios))
            columns += _columns(group, structures, scenarios, [chosen.of(i) for i in range(len(structures))])
    found: dict[tuple[int, int, int], ResponseMetrics] = {}
    # What it settles to, or what it is measured by, is known only at the end: there the signals are kept.
    known = [column for column in columns if outermost_has_reset(column) and column.upset_pct > 0.0]
    others = [column for column in columns if not (outermost_has_reset(column) and column.upset_pct > 0.0)]
    for batch in batches(known, most_columns=_COLUMNS_AT_ONCE):
        found.update(zip((column.place for column in batch), _run_without_signals(batch), strict=True))
    for batch in batches(others, kept_numbers=_KEPT_NUMBERS):
        run, stops = _run(batch, until_rest=True)
        metrics = _all_metrics(batch, run.to(int(stops.max())), stops)
        found.update(zip((column.place for column in batch), metrics, strict=True))
    return tuple(
        clock
        if isinstance(clock, Unsuited)
        else tuple(tuple(found[group, i, j] for j in range(len(scenarios))) for i in range(len(structures)))
        for group, ((structures, scenarios), clock) in enumerate(zip(groups, clocks, strict=True))
    )
