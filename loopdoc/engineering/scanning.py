"""The scan-by-scan simulation itself: scalar functions, compiled, that read as the algorithm is executed.

All signals are deviations from the start, in percent. Within a time step the measurements are read, the controllers
that are due act from the outermost inward, the final element moves, and the processes advance. The output of a
controller is held until its next scan. A process is solved exactly for an input that is held over a step (the final
element) or straight between steps (the measurement below).

What a structure consists of stands in records, which compiled code reads by name. Every function that runs compiled
stands in this file: the compiler keeps what it made until this file changes.
"""

import math
from collections.abc import Callable, Sequence
from typing import Any, NamedTuple, TypeVar, cast

import numba
import numpy as np
from numpy.typing import NDArray

from loopdoc.engineering.process import FloatArray

Records = NDArray[np.void]

# A run that is watched ends when no signal has moved by more than this share of its peak for a window.
AT_REST = 1e-3
# A reversal of the final element counts once it has moved back by this much [%].
REVERSAL_PCT = 0.1

Compiled = TypeVar("Compiled", bound=Callable[..., Any])


def compiled(function: Compiled) -> Compiled:
    """Compile a function at its first call, and keep what was made for the next process where a place can be written.

    Divisions are numpy's and nothing is reordered: every process finds the same bytes.
    """
    try:
        made = numba.njit(function, cache=True, nogil=True, error_model="numpy", forceinline=True)
    except RuntimeError:
        # A read-only installation without a home has nowhere to keep it.
        made = numba.njit(function, nogil=True, error_model="numpy", forceinline=True)
    return cast(Compiled, made)


# --- records -----------------------------------------------------------------------------------------


def _record(numbers: Sequence[str], counts: Sequence[str] = ()) -> np.dtype[np.void]:
    return np.dtype([(name, np.float64) for name in numbers] + [(name, np.int64) for name in counts], align=True)


STRUCTURE = _record(
    [
        "travel_per_step",  # largest travel of the final element [%]; infinite where the stroke takes no time
        "half_backlash",  # [%]
        "resolution",  # change of the signal that does not move the final element yet [%]
        "low",  # final element fully closed [%]
        "high",  # fully open [%]
    ],
    [
        "first",  # row of its innermost process
        "levels",  # number of its processes, whose rows follow each other
        "in_manual",  # 1 where no measurement is controlled
    ],
)
"""A structure on its time step."""

PROCESS = _record(
    [
        "through_now",  # measurement per input that acts now, without delay by a lag
        "through_before",  # per input one step before
    ],
    [
        "order",  # number of states
        "delay",  # whole steps from the input to what acts now
        "last",  # last place of the ring of its inputs, whose size is a power of two
    ],
)
"""A process; its input is the final element's travel or the measurement below.

Its row of the step matrices is (m, m + 4) for states up to m: the lower triangular matrix of a step, then what the
input does as it acts now, one step before and two steps before, then the measurement per state.
"""

CONTROLLER = _record(
    [
        "gain",  # the coefficients of `loopdoc.engineering.pid.ScanCoefficients`
        "setpoint_gain",
        "integral_gain",
        "tracking",
        "derivative_decay",
        "derivative_gain",
        "derivative_setpoint_weight",
        "filter_gain",
        "setpoint_low",  # limits [%]
        "setpoint_high",
        "output_low",
        "output_high",
        "followed_low",  # lowest output that what it commands takes, whose setpoint has limits too [%]
        "followed_high",
    ],
    [
        "controls",  # 1 where the measurement is controlled; of the others the rest has no meaning
        "every",  # time steps between scans
        "reverse",  # 1 where the output falls as the measurement rises
        "lead_lags",  # number of lead-lags behind it
    ],
)
"""The controller of a process.

Its row of the lead-lags is (q, 2): the share of a lead-lag's input that passes at once, lead over lag, and the share
of the way that its lag goes in a scan.
"""

DISTURBANCE = _record(
    ["through"],  # share that is there at once [%]
    [
        "level",  # the measurement that it moves, 0 the innermost
        "order",  # number of states
        "delay",  # whole steps until it begins to act
        "there",  # first step at which all of it has begun to
    ],
)
"""A step that reaches a measurement through lags; its row of the step matrices as of a process, for the step's size."""

FEEDFORWARD = _record(
    [
        "through",  # share that is there at once, of what it brings in the end
        "factor",  # 1 for a ratio, which multiplies the output; 0 for a sum
        "steady",  # what a ratio normally makes of its input, counted from zero [%]; 1 for a sum, which adds
        "taken_low",  # limits of what is commanded [%]
        "taken_high",
    ],
    [
        "level",  # the controller whose output it joins
        "order",  # number of states
        "joins",  # behind how many of the lead-lags of that output
        "lead_lags",  # number of its own
    ],
)
"""A measured variable that moves, on its way to the output of a controller.

What it brings is in percent for a sum and a share of the normal input for a ratio. Its row of the step matrices as of
a disturbance; its row of its lead-lags as of a controller, with which they are executed.
"""

CASE = _record(
    [
        "setpoint",  # step of the outermost setpoint within its limits [%]
        "manual",  # step of the final element where no controller moves it [%]
        "settled",  # measurement that it settles to [%]
        "band",  # how near to that is settled [%]
    ],
    [
        "structure",  # row of the structure
        "disturbed_from",  # first of its disturbances
        "disturbed_to",  # first that is no longer its own
        "fed_from",  # first of its feedforwards
        "fed_to",  # first that is no longer its own
        "steps",  # most steps, a multiple of the window
        "window",  # steps over which nothing moves at rest, so that the run ends; 0 to run to the end
    ],
)
"""A run: one structure under one scenario."""

READING = _record(
    [
        "error_sum",  # sum over the steps of the mean absolute deviation from the setpoint [%]
        "last",  # outermost measurement at the end [%]
        "peak",  # where it was furthest from the start [%]
        "moved",  # sum of all movements of the final element [%]
        "low",  # lowest outermost measurement [%]
        "high",  # highest [%]
    ],
    [
        "steps",  # steps that were run
        "peak_step",
        "outside_step",  # last step outside the band, -1 for none
        "turns",  # turns of the final element that went back far enough to count
        "limited_level",  # innermost level whose controller asks for more than its limit at the end, -1 for none
    ],
)
"""What is read off a run."""

MEMORY = _record(
    [
        "integral",  # integral part of the output [%]
        "filtered",  # filtered measurement [%]
        "derivative",  # derivative part of the output [%]
        "derivative_input",  # c times setpoint less filtered measurement, at the last scan [%]
        "setpoint",  # within its limits [%]
        "computed",  # output before its limits [%]
        "output",  # within its limits [%]
        "asked",  # behind the lead-lags: what is asked of what it commands [%]
        "followed_low",  # those of the controller, less what is fed forward [%]
        "followed_high",
        "added",  # what is fed forward adds to the output [%]
        "scaled",  # by what share it makes the output more
    ],
    ["wait"],  # steps until the next scan
)
"""What a controller remembers between scans."""

WATCHED = _record(["low", "high", "window_low", "window_high"])
"""Extremes of a signal since the start, and since the window began [%]."""


class Feed(NamedTuple):
    """What measured variables bring to the outputs of controllers."""

    joining: Records
    """(f,) of `FEEDFORWARD`."""
    matrices: FloatArray
    """(f, m, m + 4) step matrices of what moves them."""
    lead_lags: FloatArray
    """(f, q, 2) of their own."""


class Brought(NamedTuple):
    """The feedforwards of one run as they are executed."""

    joining: Records
    lead_lags: FloatArray
    """As of the `Feed`."""
    lagged: FloatArray
    """(f, q) signals behind the lags."""
    values: FloatArray
    """(f,) what moves them at this step."""


class Plant(NamedTuple):
    """Structures and what they consist of."""

    structures: Records
    """(s,) of `STRUCTURE`."""
    processes: Records
    """(r,) of `PROCESS`, structure by structure, innermost first."""
    matrices: FloatArray
    """(r, m, m + 4) step matrices of the processes."""
    controllers: Records
    """(r,) of `CONTROLLER`."""
    lead_lags: FloatArray
    """(r, q, 2) of the controllers."""
    disturbances: Records
    """(d,) of `DISTURBANCE`."""
    disturbance_matrices: FloatArray
    """(d, m, m + 4) step matrices of the disturbances."""
    feed: Feed | None
    """What is fed forward; None where nothing is, of which the compiler makes code without it."""


# --- the controllers ---------------------------------------------------------------------------------


@compiled
def scan(controller: Any, memory: Any, setpoint: float, measurement: float) -> float:
    """Advance the memory of a controller by one scan and return its output [%] before its limits.

    The caller limits the output, sees what became of it downstream, and calls `track` with that.
    """
    memory.filtered += controller.filter_gain * (measurement - memory.filtered)
    memory.integral += controller.integral_gain * (setpoint - memory.filtered)
    derivative_input = controller.derivative_setpoint_weight * setpoint - memory.filtered
    change = derivative_input - memory.derivative_input
    memory.derivative = controller.derivative_decay * memory.derivative + controller.derivative_gain * change
    memory.derivative_input = derivative_input
    proportional = controller.setpoint_gain * setpoint - controller.gain * memory.filtered
    memory.computed = proportional + memory.integral + memory.derivative
    return float(memory.computed)


@compiled
def track(controller: Any, memory: Any, actual: float) -> None:
    """Draw the integral of a controller toward what really happened, so that it does not wind up.

    ``actual`` is what the downstream took of the last output: the limited output, or, while the secondary is
    at a limit, the secondary's measurement. With a tracking time of Ti this is external reset.
    """
    memory.integral += controller.tracking * (actual - memory.computed)


@compiled
def _limit(value: float, low: float, high: float) -> float:
    return low if value < low else high if value > high else value


@compiled
def _led(controller: Any, lead_lags: FloatArray, lagged: FloatArray, level: int, signal: float) -> float:
    """A signal behind the lead-lags of a controller, which are executed with it."""
    for i in range(controller.lead_lags):
        lead = lead_lags[level, i, 0]
        lagged[level, i] += lead_lags[level, i, 1] * (signal - lagged[level, i])
        signal = lead * signal + (1.0 - lead) * lagged[level, i]
    return signal


@compiled
def _fed(
    controller: Any,
    memory: Any,
    lead_lags: FloatArray,
    lagged: FloatArray,
    level: int,
    feed: Any,
) -> float:
    """The output of a controller behind its lead-lags and what joins it on the way.

    A measured variable moves the limits within which the output is followed: what it adds is no part of the output.
    """
    signal, added, scale, low, high = memory.output, 0.0, 1.0, 0.0, 0.0
    for i in range(controller.lead_lags + 1):
        for one in range(len(feed.joining)):
            joining = feed.joining[one]
            if joining.level == level and joining.joins == i:
                value = _led(joining, feed.lead_lags, feed.lagged, one, feed.values[one])
                signal += value * (joining.factor * signal + joining.steady)
                added += value * (joining.factor * added + joining.steady)
                scale *= 1.0 + value * joining.factor
                low, high = joining.taken_low, joining.taken_high
        if i < controller.lead_lags:
            lead = lead_lags[level, i, 0]
            lagged[level, i] += lead_lags[level, i, 1] * (signal - lagged[level, i])
            signal = lead * signal + (1.0 - lead) * lagged[level, i]
    # Of a ratio whose input has gone to nothing the output moves nothing, and there is nothing to follow.
    if low < high and scale > 0.0:
        memory.added, memory.scaled = added, scale - 1.0
        memory.followed_low = _limit((low - added) / scale, controller.output_low, controller.output_high)
        memory.followed_high = _limit((high - added) / scale, controller.output_low, controller.output_high)
    return float(signal)


@compiled
def _followed(controller: Any, memory: Any, feed: Any) -> tuple[float, float]:
    """The limits within which the output of a controller is followed [%]."""
    if feed is None:
        return controller.followed_low, controller.followed_high
    return memory.followed_low, memory.followed_high


@compiled
def _asked_for(memory: Any, reached: float, feed: Any) -> float:
    """Of what a secondary has reached, the part that the output of its primary has asked for [%]."""
    if feed is None:
        return reached
    return float((reached - memory.added) / (1.0 + memory.scaled))


@compiled
def _execute(
    controllers: Records,
    lead_lags: FloatArray,
    memories: Records,
    lagged: FloatArray,
    feed: Any,
    measured: FloatArray,
    setpoint: float,
) -> float:
    """Execute the controllers that are due, outermost first, and return the signal to the final element [%]."""
    limited = False
    for level in range(len(controllers) - 1, -1, -1):
        controller, memory = controllers[level], memories[level]
        if controller.controls:
            if memory.wait == 0:
                memory.setpoint = _limit(setpoint, controller.setpoint_low, controller.setpoint_high)
                computed = scan(controller, memory, memory.setpoint, measured[level])
                memory.output = _limit(computed, controller.output_low, controller.output_high)
                if feed is None:
                    memory.asked = _led(controller, lead_lags, lagged, level, memory.output)
                else:
                    memory.asked = _fed(controller, memory, lead_lags, lagged, level, feed)
            low, high = _followed(controller, memory, feed)
            if memory.computed < low or memory.computed > high:
                limited = True
            setpoint = memory.asked
    if limited:
        _track_limits(controllers, memories, feed, measured)
    for level in range(len(controllers)):
        memory = memories[level]
        memory.wait = (memory.wait if memory.wait else controllers[level].every) - 1
    return setpoint


@compiled
def _track_limits(controllers: Records, memories: Records, feed: Any, measured: FloatArray) -> None:
    """Tell the controllers that were due what became of their outputs.

    The setpoint that the secondary took; and while the secondary can move its measurement no further, that
    measurement, so that the primary's integral goes no further either.
    """
    no_higher, no_lower, below = False, False, 0.0
    for level in range(len(controllers)):
        controller, memory = controllers[level], memories[level]
        if controller.controls:
            low, high = _followed(controller, memory, feed)
            actual = _limit(memory.computed, low, high)
            reached = _asked_for(memory, below, feed)
            if no_higher:
                actual = min(actual, reached)
            if no_lower:
                actual = max(actual, reached)
            if memory.wait == 0:
                track(controller, memory, actual)
            at_high = memory.computed > high or no_higher
            at_low = memory.computed < low or no_lower
            no_higher, no_lower = (at_high, at_low) if controller.reverse else (at_low, at_high)
            below = measured[level]


# --- the final element and the processes -------------------------------------------------------------


@compiled
def _move(
    structure: Any, held: float, drive: float, travel: float, signal: float
) -> tuple[float, float, float, float]:
    """Move the final element for a step: what it holds of its signal, its drive, its travel, and the mean travel."""
    if abs(signal - held) > structure.resolution:
        held = signal
    target = _limit(held, structure.low, structure.high)
    rate = structure.travel_per_step
    move = _limit(target - drive, -rate, rate)
    drive = target if move == target - drive else drive + move
    # The drive runs at full speed and rests once there: mean of a ramp that may end early.
    mean = drive - move * abs(move) * (0.5 / rate)
    # The travel is left where it is within half the backlash of its drive.
    half = structure.half_backlash
    mean = _limit(travel, mean - half, mean + half)
    return held, drive, _limit(travel, drive - half, drive + half), mean


@compiled
def _advance(
    matrices: FloatArray, order: int, states: FloatArray, row: int, now: float, before: float, earlier: float
) -> None:
    """Advance one row of states by a step, given the input as it acts now, one and two steps before."""
    first = matrices.shape[1]
    for i in range(order - 1, -1, -1):
        value = matrices[row, i, first] * now + matrices[row, i, first + 1] * before
        value += matrices[row, i, first + 2] * earlier
        for j in range(i + 1):
            value += matrices[row, i, j] * states[row, j]
        states[row, i] = value


@compiled
def _output(matrices: FloatArray, order: int, states: FloatArray, row: int) -> float:
    """What one row of states adds up to at the measurement [%]."""
    output = 0.0
    for i in range(order):
        output += matrices[row, i, matrices.shape[1] + 3] * states[row, i]
    return output


# --- a run -------------------------------------------------------------------------------------------


@compiled
def _note(watched: Any, value: float) -> None:
    """Note the extremes of a signal within the window."""
    if value < watched.window_low:
        watched.window_low = value
    if value > watched.window_high:
        watched.window_high = value


@compiled
def _end_window(watched: Any, value: float) -> bool:
    """End a window and begin the next, and return whether the signal has rested in it, against what it had moved."""
    watched.low = min(watched.low, watched.window_low)
    watched.high = max(watched.high, watched.window_high)
    rested: bool = watched.window_high - watched.window_low <= AT_REST * max(-watched.low, watched.high)
    watched.window_low = watched.window_high = value
    return rested


@compiled
def _turn(heading: float, extreme: float, travel: float) -> tuple[float, float, int]:
    """Follow the extremes of the travel; a turn counts once it has gone back far enough from the last one."""
    gone = travel - extreme
    if heading != 0.0 and gone * heading >= 0.0:
        return heading, travel, 0
    if abs(gone) < REVERSAL_PCT:
        return heading, extreme, 0
    return math.copysign(1.0, gone), travel, 1 if heading != 0.0 else 0


@compiled
def _begin(controllers: Records, memories: Records, feed: Any, case: Any) -> Brought:
    """Begin a run in which something is fed forward: nothing yet, and outputs are followed as those of plain loops."""
    for level in range(len(controllers)):
        memories[level].followed_low = controllers[level].followed_low
        memories[level].followed_high = controllers[level].followed_high
    joining, lead_lags = feed.joining[case.fed_from : case.fed_to], feed.lead_lags[case.fed_from : case.fed_to]
    return Brought(joining, lead_lags, np.zeros(lead_lags.shape[:2]), np.zeros(len(joining)))


@compiled
def _run_one(
    structures: Records,
    processes: Records,
    matrices: FloatArray,
    controllers: Records,
    lead_lags: FloatArray,
    disturbances: Records,
    disturbance_matrices: FloatArray,
    feed: Any,
    case: Any,
    rings: FloatArray,
    reading: Any,
    trace: FloatArray,
    stride: int,
) -> None:
    """Run one case to its end, or to rest, and read it."""
    structure = structures[case.structure]
    levels, first, end = structure.levels, structure.first, structure.first + structure.levels
    processes, matrices = processes[first:end], matrices[first:end]
    controllers, lead_lags = controllers[first:end], lead_lags[first:end]
    disturbances = disturbances[case.disturbed_from : case.disturbed_to]
    disturbance_matrices = disturbance_matrices[case.disturbed_from : case.disturbed_to]
    setpoint, window_end = case.setpoint, case.window or case.steps
    memories, lagged = np.zeros(levels, MEMORY), np.zeros((levels, lead_lags.shape[1]))
    states, measured = np.zeros((levels, matrices.shape[1])), np.zeros(levels)
    upsets = np.zeros((len(disturbances), disturbance_matrices.shape[1]))
    watched = np.zeros(levels + 1, WATCHED)
    for level in range(levels):
        rings[level, : processes[level].last + 1] = 0.0
    if feed is not None:
        brought = _begin(controllers, memories, feed, case)
        moved_by = feed.matrices[case.fed_from : case.fed_to]
        moving = np.zeros((len(brought.joining), moved_by.shape[1]))
    held = drive = travel = mean = error = heading = extreme = 0.0
    error_sum = moved = peak = measurement = 0.0
    peak_step, outside_step, turns, step = 0, -1, 0, 0
    while True:
        # Read the measurements.
        for level in range(levels):
            process = processes[level]
            if level:
                rings[level, step & process.last] = measured[level - 1]
            at = step - process.delay
            now, before = rings[level, at & process.last], rings[level, (at - 1) & process.last]
            if step:
                earlier = rings[level, (at - 2) & process.last]
                _advance(matrices, process.order, states, level, now, before, earlier)
            measurement = _output(matrices, process.order, states, level)
            measurement += process.through_now * now + process.through_before * before
            for one in range(len(disturbances)):
                upset = disturbances[one]
                if upset.level == level and step >= upset.delay:
                    if step > upset.delay:
                        already = 1.0 if step > upset.delay + 1 else 0.0
                        _advance(disturbance_matrices, upset.order, upsets, one, 1.0, already, 0.0)
                    measurement += _output(disturbance_matrices, upset.order, upsets, one)
                    if step >= upset.there:
                        measurement += upset.through
            measured[level] = measurement
            _note(watched[level], measurement)
        if feed is not None:
            for one in range(len(brought.joining)):
                joining = brought.joining[one]
                if step:
                    _advance(moved_by, joining.order, moving, one, 1.0, 0.0, 0.0)
                brought.values[one] = _output(moved_by, joining.order, moving, one) + joining.through
        # Execute the controllers and move the final element.
        if structure.in_manual:
            signal = case.manual
        elif feed is None:
            signal = _execute(controllers, lead_lags, memories, lagged, None, measured, setpoint)
        else:
            signal = _execute(controllers, lead_lags, memories, lagged, brought, measured, setpoint)
        last_mean = mean
        held, drive, travel, mean = _move(structure, held, drive, travel, signal)
        rings[0, step & processes[0].last] = mean
        _note(watched[levels], mean)
        # Read what is asked of the response.
        last_error, error = error, abs(setpoint - measurement)
        if step:
            error_sum += 0.5 * (last_error + error)
        if abs(measurement) > abs(peak):
            peak, peak_step = measurement, step
        if abs(measurement - case.settled) > case.band:
            outside_step = step
        moved += abs(mean - last_mean)
        heading, extreme, turned = _turn(heading, extreme, mean)
        turns += turned
        if trace.shape[1] and step % stride == 0:
            point = step // stride
            trace[0, point] = mean
            for level in range(levels):
                trace[1 + level, point] = measured[level]
                trace[1 + levels + level, point] = memories[level].setpoint
                trace[1 + 2 * levels + level, point] = memories[level].output
        if step == window_end:
            rested = _end_window(watched[levels], mean)
            for level in range(levels):
                rested = _end_window(watched[level], measured[level]) and rested
            if step == case.steps or (rested and step > case.window):
                break
            window_end += case.window
        step += 1
    reading.steps, reading.last, reading.error_sum = step, measurement, error_sum
    reading.peak, reading.peak_step, reading.outside_step = peak, peak_step, outside_step
    reading.low, reading.high = watched[levels - 1].low, watched[levels - 1].high
    reading.moved, reading.turns = moved, turns
    reading.limited_level = -1
    for level in range(levels - 1, -1, -1):
        low, high = _followed(controllers[level], memories[level], feed)
        asked = memories[level].computed
        if controllers[level].controls and (asked < low or asked > high):
            reading.limited_level = level


@compiled
def run(
    structures: Records,
    processes: Records,
    matrices: FloatArray,
    controllers: Records,
    lead_lags: FloatArray,
    disturbances: Records,
    disturbance_matrices: FloatArray,
    feed: Any,
    cases: Records,
    readings: Records,
    traces: FloatArray,
    stride: int,
) -> None:
    """Run cases one after the other and fill in what is read off them.

    Parameters
    ----------
    structures, processes, matrices, controllers, lead_lags, disturbances, disturbance_matrices, feed
        The parts of a `Plant`.
    cases : (n,) array of CASE
        Runs of its structures.
    readings : (n,) array of READING
        Overwritten.
    traces : (n, w, k) float array
        Overwritten with every ``stride``-th step of the signals [%]: travel, then by level the measurements, the
        setpoints and the outputs; k = 0 where no signals are to be kept.
    stride : int
        Steps from one point of the traces to the next.

    Source: K. J. Astrom, B. Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, ch. 2 and 8 (sampling of lags and
    dead time, digital PID; chapters from memory).
    """
    levels, last = 0, 0
    for i in range(len(structures)):
        levels = max(levels, structures[i].levels)
    for i in range(len(processes)):
        last = max(last, processes[i].last)
    rings = np.zeros((levels, last + 1))
    for i in range(len(cases)):
        _run_one(
            structures, processes, matrices, controllers, lead_lags, disturbances, disturbance_matrices,
            feed, cases[i], rings, readings[i], traces[i], stride,
        )  # fmt: skip


# --- branched structures: several final elements, several controllers for one of them -----------------

TRACKS, HOLDS, WINDS_UP = 0, 1, 2
"""What a controller does that a selector does not let through: external reset, its integral held, nothing."""

BRANCHED = _record(
    [],
    [
        "elements_from",  # first and last but one of its final elements
        "elements_to",
        "paths_from",  # of its paths
        "paths_to",
        "loops_from",  # of its loops
        "loops_to",
    ],
)
"""A structure of loops, innermost first, that command one another or its final elements."""

ELEMENT = _record(
    ["travel_per_step", "half_backlash", "resolution", "low", "high"],  # as of a `STRUCTURE`
    ["corners"],  # number of points of its opening
)
"""A final element.

Its row of the openings is (p, 2): the points of the straight lines from the output that moves it to the opening that
this asks for, in the order of the output [%]; beyond them it is held.
"""

PATH = _record(
    ["through_now", "through_before"],  # as of a `PROCESS`
    [
        "order",
        "delay",
        "last",
        "source",  # place of the final element, or of the loop on whose measurement it begins
        "from_element",  # 1 where it begins at a final element
        "loop",  # place of the loop whose measurement it moves, innermost path first
    ],
)
"""A process from a final element or a measurement to a measurement, where what several bring adds up."""


def _names(records: np.dtype[np.void], kind: type) -> list[str]:
    return [name for name in records.names or () if records[name] == np.dtype(kind)]


LOOP = _record(
    [
        *_names(CONTROLLER, np.float64),
        "reset_share",  # how far the lag of an external reset goes in a scan, solved backward as the integral is
        "start_setpoint",  # setpoint less measurement at the start [%]
        "start_integral",  # [%]
    ],
    [
        *_names(CONTROLLER, np.int64),
        "commands",  # place of the loop whose setpoint it gives; the number of loops for the final elements
        "prefers",  # 1 where the lowest of what is asked passes, -1 where the highest does
        "unfollowed",  # TRACKS, HOLDS or WINDS_UP
    ],
)
"""A controller with what it commands; its row of the lead-lags as of a `CONTROLLER`."""

BRANCHED_CASE = _record(
    [
        "setpoint",  # step of a setpoint within its limits [%]
        "settled",  # measurement that it settles to [%]
        "band",  # how near to that is settled [%]
    ],
    [
        "structure",  # row of the structure
        "read",  # place of the loop whose setpoint steps and of which it is read
        "passes",  # step at which the disturbances pass again, -1 for never
        "disturbed_from",
        "disturbed_to",
        "steps",
        "window",
    ],
)
"""A run of a branched structure; fields without a word as of a `CASE`."""

SPELL = _record([], ["first", "last", "times"])
"""When a loop commands: first and last step, -1 for never, and how many times it took command."""


class BranchedPlant(NamedTuple):
    """Branched structures and what they consist of."""

    structures: Records
    """(s,) of `BRANCHED`."""
    elements: Records
    """(e,) of `ELEMENT`."""
    openings: FloatArray
    """(e, p, 2) of the final elements."""
    paths: Records
    """(r,) of `PATH`."""
    matrices: FloatArray
    """(r, m, m + 4) step matrices of the paths."""
    loops: Records
    """(n,) of `LOOP`, structure by structure, innermost first."""
    lead_lags: FloatArray
    """(n, q, 2) of the loops."""
    disturbances: Records
    """(d,) of `DISTURBANCE`, whose level is the place of a loop."""
    disturbance_matrices: FloatArray
    """(d, m, m + 4) step matrices of the disturbances."""


@compiled
def _opening(corners: FloatArray, count: int, output: float) -> float:
    """The opening that an output asks for [%]."""
    if output <= corners[0, 0]:
        return float(corners[0, 1])
    for i in range(1, count):
        if output < corners[i, 0]:
            slope = (corners[i, 1] - corners[i - 1, 1]) / (corners[i, 0] - corners[i - 1, 0])
            return float(corners[i - 1, 1] + slope * (output - corners[i - 1, 0]))
    return float(corners[count - 1, 1])


@compiled
def _execute_branched(
    loops: Records,
    lead_lags: FloatArray,
    memories: Records,
    lagged: FloatArray,
    held: FloatArray,
    measured: FloatArray,
    setpoints: FloatArray,
    passed: FloatArray,
    chosen: NDArray[np.int64],
) -> float:
    """Execute the loops that are due, outermost first, and return the output to the final elements [%].

    Of what several ask of one thing the lowest or the highest passes; ``chosen`` becomes who asked for it.
    """
    for target in range(len(loops) + 1):
        chosen[target] = -1
    for place in range(len(loops) - 1, -1, -1):
        loop, memory = loops[place], memories[place]
        if memory.wait == 0:
            setpoint = setpoints[place] if chosen[place] < 0 else passed[place]
            memory.setpoint = _limit(setpoint, loop.setpoint_low, loop.setpoint_high)
            held[place] = memory.integral
            computed = scan(loop, memory, memory.setpoint, measured[place])
            memory.output = _limit(computed, loop.output_low, loop.output_high)
            memory.asked = _led(loop, lead_lags, lagged, place, memory.output)
        target = loop.commands
        if chosen[target] < 0 or (memory.asked - passed[target]) * loop.prefers < 0.0:
            passed[target], chosen[target] = memory.asked, place
    return float(passed[len(loops)])


@compiled
def _track_branched(
    loops: Records,
    memories: Records,
    held: FloatArray,
    measured: FloatArray,
    passed: FloatArray,
    chosen: NDArray[np.int64],
    stuck: NDArray[np.bool_],
) -> None:
    """Tell the controllers that were due what became of their outputs.

    The one whose output passes, as in a chain. One that a selector does not let through, what passes instead: its
    integral goes through the lag of its reset time toward that, which is the positive feedback of an external reset.
    ``stuck`` is (n + 1, 2): whether what a loop commands can move its measurement no higher and no lower.
    """
    for place in range(len(loops)):
        loop, memory = loops[place], memories[place]
        target = loop.commands
        no_higher, no_lower = stuck[target, 0], stuck[target, 1]
        if memory.wait == 0:
            is_chosen = chosen[target] == place
            wanted = memory.computed if is_chosen or loop.unfollowed == WINDS_UP else passed[target]
            actual = _limit(wanted, loop.followed_low, loop.followed_high)
            share = loop.tracking
            if not is_chosen and loop.unfollowed == WINDS_UP:
                actual = _limit(wanted, loop.output_low, loop.output_high)
            else:
                if no_higher:
                    actual = min(actual, measured[target])
                if no_lower:
                    actual = max(actual, measured[target])
                if not is_chosen:
                    share = loop.reset_share
            if not is_chosen and loop.unfollowed == HOLDS:
                memory.integral = held[place]
            else:
                memory.integral += share * (actual - memory.computed)
        at_high = memory.computed > loop.followed_high or no_higher
        at_low = memory.computed < loop.followed_low or no_lower
        stuck[place, 0], stuck[place, 1] = (at_high, at_low) if loop.reverse else (at_low, at_high)
        memory.wait = (memory.wait if memory.wait else loop.every) - 1


@compiled
def _run_branched_one(
    structure: Any,
    elements: Records,
    openings: FloatArray,
    paths: Records,
    matrices: FloatArray,
    loops: Records,
    lead_lags: FloatArray,
    disturbances: Records,
    disturbance_matrices: FloatArray,
    case: Any,
    rings: FloatArray,
    reading: Any,
    extremes: FloatArray,
    spells: Records,
    trace: FloatArray,
    stride: int,
) -> None:
    """Run one case of a branched structure to its end, or to rest, and read it."""
    elements = elements[structure.elements_from : structure.elements_to]
    openings = openings[structure.elements_from : structure.elements_to]
    paths = paths[structure.paths_from : structure.paths_to]
    matrices = matrices[structure.paths_from : structure.paths_to]
    loops = loops[structure.loops_from : structure.loops_to]
    lead_lags = lead_lags[structure.loops_from : structure.loops_to]
    disturbances = disturbances[case.disturbed_from : case.disturbed_to]
    disturbance_matrices = disturbance_matrices[case.disturbed_from : case.disturbed_to]
    n, moved_by, read = len(loops), len(elements), case.read
    memories, lagged, held = np.zeros(n, MEMORY), np.zeros((n, lead_lags.shape[1])), np.zeros(n)
    measured, setpoints, passed = np.zeros(n), np.zeros(n), np.zeros(n + 1)
    chosen, chosen_before = np.full(n + 1, -1), np.full(n + 1, -1)
    stuck = np.zeros((n + 1, 2), np.bool_)
    states = np.zeros((len(paths), matrices.shape[1]))
    upsets = np.zeros((len(disturbances), disturbance_matrices.shape[1]))
    watched = np.zeros(moved_by + n, WATCHED)
    signals, drives, travels, means = np.zeros(moved_by), np.zeros(moved_by), np.zeros(moved_by), np.zeros(moved_by)
    headings, turning = np.zeros(moved_by), np.zeros(moved_by)
    for one in range(len(paths)):
        rings[one, : paths[one].last + 1] = 0.0
    for place in range(n):
        loop, memory = loops[place], memories[place]
        setpoints[place] = loop.start_setpoint + (case.setpoint if place == read else 0.0)
        memory.integral = loop.start_integral
        memory.derivative_input = loop.derivative_setpoint_weight * loop.start_setpoint
        spells[place].first = spells[place].last = -1
        spells[place].times = 0
    window_end = case.window or case.steps
    error = error_sum = moved = peak = 0.0
    peak_step, outside_step, turns, step = 0, -1, 0, 0
    while True:
        # Read the measurements, which paths reach innermost first.
        coming = 1.0 if case.passes < 0 or step <= case.passes else 0.0
        present = 0.0 if step == case.passes else coming
        for place in range(n):
            measured[place] = 0.0
        one = 0
        for place in range(n):
            while one < len(paths) and paths[one].loop == place:
                path = paths[one]
                if not path.from_element:
                    rings[one, step & path.last] = measured[path.source]
                at = step - path.delay
                now, before = rings[one, at & path.last], rings[one, (at - 1) & path.last]
                if step:
                    _advance(matrices, path.order, states, one, now, before, rings[one, (at - 2) & path.last])
                measured[place] += _output(matrices, path.order, states, one)
                measured[place] += path.through_now * now + path.through_before * before
                one += 1
            for i in range(len(disturbances)):
                upset = disturbances[i]
                if upset.level == place:
                    if step:
                        _advance(disturbance_matrices, upset.order, upsets, i, coming, 0.0, 0.0)
                    measured[place] += _output(disturbance_matrices, upset.order, upsets, i) + present * upset.through
            _note(watched[moved_by + place], measured[place])
        # Execute the controllers and move the final elements.
        signal = _execute_branched(
            loops, lead_lags, memories, lagged, held, measured, setpoints, passed, chosen
        )  # fmt: skip
        _track_branched(loops, memories, held, measured, passed, chosen, stuck)
        for place in range(n):
            spell, target = spells[place], loops[place].commands
            if chosen[target] == place:
                if spell.first < 0:
                    spell.first = step
                if chosen_before[target] != place:
                    spell.times += 1
                spell.last = step
        for target in range(n + 1):
            chosen_before[target] = chosen[target]
        for e in range(moved_by):
            last_mean = means[e]
            asked = _opening(openings[e], elements[e].corners, signal)
            signals[e], drives[e], travels[e], means[e] = _move(elements[e], signals[e], drives[e], travels[e], asked)
            _note(watched[e], means[e])
            moved += abs(means[e] - last_mean)
            headings[e], turning[e], turned = _turn(headings[e], turning[e], means[e])
            turns += turned
        for one in range(len(paths)):
            if paths[one].from_element:
                rings[one, step & paths[one].last] = means[paths[one].source]
        # Read what is asked of the response.
        measurement = measured[read]
        last_error, error = error, abs(setpoints[read] - measurement)
        if step:
            error_sum += 0.5 * (last_error + error)
        if abs(measurement) > abs(peak):
            peak, peak_step = measurement, step
        if abs(measurement - case.settled) > case.band:
            outside_step = step
        if trace.shape[1] and step % stride == 0:
            point = step // stride
            for e in range(moved_by):
                trace[e, point] = means[e]
            for place in range(n):
                trace[moved_by + place, point] = measured[place]
                trace[moved_by + n + place, point] = memories[place].setpoint
                trace[moved_by + 2 * n + place, point] = memories[place].output
        if step == window_end:
            rested = True
            for i in range(moved_by):
                rested = _end_window(watched[i], means[i]) and rested
            for place in range(n):
                rested = _end_window(watched[moved_by + place], measured[place]) and rested
            if step == case.steps or (rested and step > case.window and step > case.passes):
                break
            window_end += case.window
        step += 1
    reading.steps, reading.last, reading.error_sum = step, measured[read], error_sum
    reading.peak, reading.peak_step, reading.outside_step = peak, peak_step, outside_step
    reading.moved, reading.turns = moved, turns
    for i in range(moved_by + n):
        extremes[i, 0], extremes[i, 1] = watched[i].low, watched[i].high
    reading.low, reading.high = watched[moved_by + read].low, watched[moved_by + read].high
    reading.limited_level = -1
    for place in range(n - 1, -1, -1):
        loop, computed = loops[place], memories[place].computed
        if chosen[loop.commands] == place and (computed < loop.followed_low or computed > loop.followed_high):
            reading.limited_level = place


@compiled
def run_branched(
    structures: Records,
    elements: Records,
    openings: FloatArray,
    paths: Records,
    matrices: FloatArray,
    loops: Records,
    lead_lags: FloatArray,
    disturbances: Records,
    disturbance_matrices: FloatArray,
    cases: Records,
    readings: Records,
    extremes: FloatArray,
    spells: Records,
    traces: FloatArray,
    stride: int,
) -> None:
    """Run cases of branched structures one after the other and fill in what is read off them.

    Parameters
    ----------
    structures, elements, openings, paths, matrices, loops, lead_lags, disturbances, disturbance_matrices
        The parts of a `BranchedPlant`.
    cases : (n,) array of BRANCHED_CASE
        Runs of its structures.
    readings : (n,) array of READING
        Overwritten; travel and turns are those of all final elements together.
    extremes : (n, w, 2) float array
        Overwritten with the lowest and highest of every final element, then of every measurement [%].
    spells : (n, l) array of SPELL
        Overwritten.
    traces : (n, w, k) float array
        Overwritten with every ``stride``-th step of the signals [%]: the travels, then by loop the measurements, the
        setpoints and the outputs; k = 0 where no signals are to be kept.
    stride : int
        Steps from one point of the traces to the next.

    Source: as of `run`; of external reset, F. G. Shinskey, "The power of external-reset feedback", Control, 2006, and
    Process Control Systems, 4th ed. 1996 (integral action by positive feedback of what the selector passes through a
    lag of the reset time; from memory).
    """
    most, last = 0, 0
    for i in range(len(structures)):
        most = max(most, structures[i].paths_to - structures[i].paths_from)
    for i in range(len(paths)):
        last = max(last, paths[i].last)
    rings = np.zeros((most, last + 1))
    for i in range(len(cases)):
        _run_branched_one(
            structures[cases[i].structure], elements, openings, paths, matrices, loops, lead_lags, disturbances,
            disturbance_matrices, cases[i], rings, readings[i], extremes[i], spells[i], traces[i], stride,
        )  # fmt: skip
