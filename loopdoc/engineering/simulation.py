"""Time responses of control structures, simulated scan by scan as they are executed.

What runs is `loopdoc.engineering.scanning`, compiled and loaded at the first question.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.clock import HORIZON_PARTS, Clock, Unsuited, choose_clocks, lasting
from loopdoc.engineering.frequency import Margins
from loopdoc.engineering.process import FloatArray
from loopdoc.engineering.response_metrics import SETTLING_BAND, Reading, ResponseMetrics, read_metrics
from loopdoc.engineering.structure import ControlStructure, Scenario

if TYPE_CHECKING:
    from loopdoc.engineering.columns import Column
    from loopdoc.engineering.scanning import Plant, Records

# Points of a signal that is kept: more than can be drawn.
POINTS_MOST = 8000
# A step through a lag is within 0.3 % of its end after so many times the lag.
LAGS_TO_ARRIVE = 6.0


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


Group = tuple[Sequence[ControlStructure], Sequence[Scenario]]


def _run(plant: Plant, cases: Records, *, points: int = 0, stride: int = 1) -> tuple[Records, FloatArray]:
    """Run cases; return what was read, and so many points of their signals: (n, 1 + 3 levels, points)."""
    from loopdoc.engineering.scanning import READING, run

    readings = np.zeros(len(cases), READING)
    traces = np.zeros((len(cases), 1 + 3 * int(plant.structures["levels"].max()), points))
    run(*plant, cases, readings, traces, stride)
    return readings, traces


def judge_at_the_end(
    cases: Records, readings: Records, has_reset: NDArray[np.bool_], run_again: Callable[[Records], Records]
) -> None:
    """Run those cases again that are measured by what is known only at the end, and put their readings in place.

    Without integral action a response settles to its last value; where nothing steps, the band is that of its peak.
    """
    late = np.nonzero(~has_reset | (cases["band"] == 0.0))[0]
    if late.size:
        known, read = cases[late], readings[late]
        known["settled"] = np.where(has_reset[late], known["setpoint"], read["last"])
        known["band"] = np.where(known["band"] > 0.0, known["band"], SETTLING_BAND * np.abs(read["peak"]))
        known["steps"], known["window"] = read["steps"], 0
        cases[late], readings[late] = known, run_again(known)


def _read(columns: Sequence[Column], plant: Plant, cases: Records) -> list[ResponseMetrics]:
    """Run the cases of columns and return their metrics, column by column."""
    readings, _ = _run(plant, cases)
    of_case = [column for column in columns for _ in column.scenarios]
    has_reset = np.array([column.has_reset for column in of_case])
    judge_at_the_end(cases, readings, has_reset, lambda known: _run(plant, known)[0])
    return [
        read_metrics(
            Reading(*reading),
            step_s=column.clock.step_s,
            setpoint_step_pct=setpoint,
            band_pct=band,
            has_reset=column.has_reset,
            executed_interval_s=column.executed_interval_s,
        )
        for column, reading, setpoint, band in zip(
            of_case, readings.tolist(), cases["setpoint"].tolist(), cases["band"].tolist(), strict=True
        )
    ]


def _columns(structures: Sequence[ControlStructure], scenarios: Sequence[Scenario], clock: Clock) -> list[Column]:
    from loopdoc.engineering.columns import Column

    for scenario in scenarios:
        for disturbance in scenario.disturbances:
            if any(not 0 <= disturbance.level < len(structure.processes) for structure in structures):
                raise ValueError(f"scenario {scenario.name}: there is no level {disturbance.level}")
    return [Column(structure, scenarios, clock) for structure in structures]


def _slowest_disturbance_s(structures: Sequence[ControlStructure], scenarios: Sequence[Scenario]) -> float:
    """How long disturbances with a path of their own, and what is fed forward, take to come through in full [s]."""
    disturbances = [
        d.dead_time_s + (LAGS_TO_ARRIVE * d.path.lag_sum_s if d.path is not None else 0.0)
        for scenario in scenarios
        for d in scenario.disturbances
    ]
    moved = {move.measurement: move.lag_s for scenario in scenarios for move in scenario.moves}
    fed = [
        LAGS_TO_ARRIVE * (moved[one.measurement] + math.fsum(lead_lag.lag_s for lead_lag in one.lead_lags))
        for structure in structures
        for ones in structure.feedforwards
        for one in ones
        if one.measurement in moved
    ]
    return max([*disturbances, *fed], default=0.0)


def _response(
    structure: ControlStructure, scenario: Scenario, time_s: FloatArray, trace: FloatArray, metrics: ResponseMetrics
) -> Response:
    """One run's signals, the start added."""
    levels = len(structure.processes)

    def signal(row: int, start_pct: float) -> FloatArray:
        absolute: FloatArray = trace[row] + start_pct
        absolute.flags.writeable = False
        return absolute

    setpoints: list[FloatArray | None] = []
    outputs: list[FloatArray | None] = []
    commanded = structure.final_element.start_pct
    for level, (controller, start) in enumerate(zip(structure.controllers, structure.start_pct, strict=True)):
        if controller is None:
            setpoints.append(None)
            outputs.append(None)
            continue
        setpoints.append(signal(1 + levels + level, start))
        outputs.append(signal(1 + 2 * levels + level, commanded))
        commanded = start
    return Response(
        scenario=scenario,
        time_s=time_s,
        measurement_pct=tuple(signal(1 + level, start) for level, start in enumerate(structure.start_pct)),
        setpoint_pct=tuple(setpoints),
        output_pct=tuple(outputs),
        travel_pct=signal(0, structure.final_element.start_pct),
        metrics=metrics,
    )


def _respond(columns: Sequence[Column], *, stride: int, until_rest: bool) -> tuple[tuple[Response, ...], ...]:
    """Responses of the columns of one group, with every so many steps of their signals."""
    from loopdoc.engineering.columns import cases_of, plant_of

    plant = plant_of(columns)
    cases = cases_of(columns, parts=HORIZON_PARTS if until_rest else 0, band=SETTLING_BAND)
    metrics = _read(columns, plant, cases)
    # Curves that are drawn together end together; the figures were read where each had come to rest.
    step_s = columns[0].clock.step_s
    end = max(round(one.horizon_s / step_s) for one in metrics)
    points = end // stride + 1
    cases["steps"], cases["window"] = end, 0
    _, traces = _run(plant, cases, points=points, stride=stride)
    time_s: FloatArray = stride * step_s * np.arange(points, dtype=np.float64)
    time_s.flags.writeable = False
    each = zip(traces, metrics, strict=True)
    return tuple(
        tuple(_response(column.structure, scenario, time_s, *next(each)) for scenario in column.scenarios)
        for column in columns
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
        Time step and horizon, kept to the end, with every step of the signals. Without it both are chosen from the
        dynamics, a run ends at an eighth of the horizon once all signals have come to rest, and of a long one some
        thousand points of the signals are kept; the metrics are read at every step.

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
        return _respond(_columns(structures, scenarios, clock), stride=1, until_rest=False)
    found = simulate_groups([(structures, scenarios)])[0]
    if isinstance(found, Unsuited):
        raise ValueError(found.reason)
    return found


def simulate_groups(
    groups: Sequence[Group], *, known: Mapping[ControlStructure, Sequence[Margins]] | None = None
) -> tuple[tuple[tuple[Response, ...], ...] | Unsuited, ...]:
    """Time responses of many groups of structures, each as by `simulate` on a clock of its own.

    Parameters
    ----------
    groups : sequence of (structures, scenarios)
        Each group as in `simulate`.
    known : mapping of ControlStructure to Margins, optional
        Margins of structures, innermost loop first, that need not be analysed again for the clock.

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
    return tuple(
        columns
        if isinstance(columns, Unsuited)
        else _respond(columns, stride=math.ceil(columns[0].clock.steps / POINTS_MOST), until_rest=True)
        for columns in _on_clocks(groups, known)
    )


def simulate_metrics(
    groups: Sequence[Group], *, known: Mapping[ControlStructure, Sequence[Margins]] | None = None
) -> tuple[tuple[tuple[ResponseMetrics, ...], ...] | Unsuited, ...]:
    """Metrics of many groups of structures at once, a whole plant for example, without their signals.

    Parameters
    ----------
    groups : sequence of (structures, scenarios)
        Each group as in `simulate`, on a clock of its own chosen from its dynamics.
    known : mapping of ControlStructure to Margins, optional
        Margins of structures, innermost loop first, that need not be analysed again for the clock.

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
    from loopdoc.engineering.columns import cases_of, plant_of

    each = _on_clocks(groups, known)
    columns = [column for group in each if not isinstance(group, Unsuited) for column in group]
    if not columns:
        return tuple(group for group in each if isinstance(group, Unsuited))
    cases = cases_of(columns, parts=HORIZON_PARTS, band=SETTLING_BAND)
    metrics = iter(_read(columns, plant_of(columns), cases))
    return tuple(
        group
        if isinstance(group, Unsuited)
        else tuple(tuple(next(metrics) for _ in column.scenarios) for column in group)
        for group in each
    )


def _on_clocks(
    groups: Sequence[Group], known: Mapping[ControlStructure, Sequence[Margins]] | None
) -> list[list[Column] | Unsuited]:
    """The columns of each group, on a clock that lasts until its disturbances have come through."""
    clocks = choose_clocks([structures for structures, _ in groups], known=known)
    return [
        clock
        if isinstance(clock, Unsuited)
        else _columns(structures, scenarios, lasting(clock, _slowest_disturbance_s(structures, scenarios)))
        for (structures, scenarios), clock in zip(groups, clocks, strict=True)
    ]
