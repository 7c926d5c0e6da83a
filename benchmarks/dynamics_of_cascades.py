"""Margins and time responses of many cascades, beside the same work by python-control loop by loop.

Run: python benchmarks/dynamics_of_cascades.py [--cascades 10000] [--sample 10] [--jobs 2] [--register FOLDER]

The work: the margins of both loops of a cascade; a single loop on the same final element tuned to the same Ms;
and for the cascade and that single loop a setpoint step, a disturbance at the secondary and one at the primary,
each with the figures that are read off it.

What python-control does for each cascade of the sample is what a user would write: build both loops from their
models, dead times and half of each execution interval by a fifth-order Pade approximation (it has no exact dead
time), `margin` of both loops, and `forced_response` of the same three upsets for the cascade and for the single
loop, over the same number of time points and the same horizon, with the integral of the absolute error. It is
spared the tuning of the single loop, whose settings it is given, and all limits, stroke and backlash, which its
linear functions do not know; so it does less. It is one process, as its user's would be, held to one thread: the
library behind it would keep a second processor busy, which its processor time counts though the work is no sooner
done. The ratio is given for one process of ours and as it was run.

How right both are: for cascades without limits whose loops are scanned at one interval and whose dead times are
whole intervals, the exact sampled system is put together by python-control (`sample_system`, delays as powers of
z), and the largest difference of the responses is printed; and the largest difference of the delay-free margins.
"""

from __future__ import annotations

import argparse
import math
import os
import resource
import statistics
import time
import warnings
from concurrent.futures import ProcessPoolExecutor
from itertools import chain
from pathlib import Path

# Read when numpy is loaded, so before it.
os.environ["OPENBLAS_NUM_THREADS"] = os.environ["OMP_NUM_THREADS"] = "1"

import numpy as np
from varied_cascades import unlimited, varied_cascades

from loopdoc.engineering.clock import Clock, Unsuited
from loopdoc.engineering.comparison import single_loops
from loopdoc.engineering.frequency import LoopStage, Margins, analyse_chains
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.response_metrics import ResponseMetrics
from loopdoc.engineering.simulation import simulate, simulate_metrics
from loopdoc.engineering.structure import (
    ControlStructure,
    FinalElement,
    cascade_structure,
    single_loop_structure,
    standard_scenarios,
)

with warnings.catch_warnings():
    # python-control looks for optional packages with calls that newer Pythons deprecate.
    warnings.simplefilter("ignore")
    import control

Found = tuple[list[tuple[Margins, ...]], list[list[ControlStructure]], list[list[list[ResponseMetrics]]]]
Seconds = dict[str, float]


def stages_of(structure: ControlStructure) -> list[LoopStage]:
    return [
        LoopStage(controller, process)
        for controller, process in zip(structure.controllers, structure.processes, strict=True)
        if controller is not None
    ]


def by_loopdoc(cascades: list[ControlStructure]) -> tuple[Found, Seconds]:
    """Margins, structures compared and figures of each cascade, and the processor time of each part [s]."""
    clock = [time.process_time()]
    chains = [stages_of(cascade) for cascade in cascades]
    margins = list(analyse_chains(chains))
    clock.append(time.process_time())
    compared = []
    for cascade, controller in zip(cascades, single_loops(chains, margins), strict=True):
        compared.append([cascade])
        if controller is not None:
            compared[-1].append(single_loop_structure(cascade, controller))
    clock.append(time.process_time())
    scenarios = standard_scenarios(2)
    figures: list[list[list[ResponseMetrics]]] = [
        [] if isinstance(found, Unsuited) else [list(row) for row in found]
        for found in simulate_metrics(
            [(structures, scenarios) for structures in compared],
            known=dict(zip(cascades, margins, strict=True)),
        )
    ]
    clock.append(time.process_time())
    parts = ("margins", "single loops", "responses")
    return (margins, compared, figures), dict(zip(parts, np.diff(clock).tolist(), strict=True))


def share_of(cascades: list[ControlStructure]) -> tuple[int, int, Seconds, float, int]:
    """Cascades done, responses simulated, times [s], peak memory [MB], and time steps."""
    # Once for a process, whatever it then does: what is compiled is loaded.
    begun = time.process_time()
    simulate_metrics([(cascades[:1], standard_scenarios(2))])
    loading = {"loading": time.process_time() - begun}
    (_, _, figures), seconds = by_loopdoc(cascades)
    read = [one for group in figures for row in group for one in row]
    steps = sum(round(one.horizon_s / one.step_s) for one in read)
    return len(cascades), len(read), loading | seconds, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024, steps


def part_of_all(count: int, seed: int, jobs: int, job: int) -> tuple[int, int, Seconds, float, int]:
    """One process's share of the work."""
    return share_of(varied_cascades(count, seed=seed)[job::jobs])


def delayed(dead_time_s: float) -> control.TransferFunction:
    return control.tf(*control.pade(dead_time_s, 5)) if dead_time_s > 0.0 else control.tf(1, 1)


def parts_of(stage: LoopStage) -> tuple[control.TransferFunction, ...]:
    """Controller from the error, controller from the setpoint, process, and the path of a disturbance."""
    s, one, process = control.tf("s"), stage.controller, stage.process
    lags = control.tf(1, 1)
    for lag in process.lags_s:
        lags = lags / (lag * s + 1)
    gain, path = process.gain, lags
    if process.integrating:
        lags, path = lags / s, abs(process.gain) * lags / s
    plant = gain * lags * delayed(process.dead_time_s + one.interval_s / 2.0)
    integral = 1 / (one.reset_s * s)
    rate = one.rate_s * s / (1 + one.rate_s / one.derivative_filter * s)
    feedback = one.gain * (1 + integral + rate) / (1 + one.measurement_filter_s * s)
    return feedback, one.gain * (one.setpoint_weight + integral), plant, path


def by_control(structures: list[ControlStructure], clock: Clock) -> tuple[list[tuple[float, ...]], list[float]]:
    """Gain and phase margin of both loops, and the error integrals of the responses [% s]."""
    inner, outer = stages_of(structures[0])
    feedback2, forward2, plant2, path2 = parts_of(inner)
    feedback1, forward1, plant1, path1 = parts_of(outer)
    time_s = clock.step_s * np.arange(clock.steps + 1)
    step = np.full(len(time_s), 10.0)
    margins, errors = [], []
    states = [control.ss(one) for one in (feedback2, forward2, plant2, feedback1, forward1, plant1)]
    feedback2, forward2, plant2, feedback1, forward1, plant1 = states
    closed2 = control.feedback(plant2, feedback2) * forward2
    rest2 = control.feedback(control.ss([], [], [], [[1.0]]), plant2 * feedback2) * control.ss(path2)
    margins.append(control.margin(plant2 * feedback2)[:2])
    margins.append(control.margin(plant1 * closed2 * feedback1)[:2])
    systems = [(plant1 * closed2, forward1, feedback1, plant1 * rest2)]
    for single in structures[1:]:
        feedback, forward, _, _ = parts_of(LoopStage(stages_of(single)[0].controller, outer.process))
        systems.append((plant1 * plant2, control.ss(forward), control.ss(feedback), plant1 * control.ss(path2)))
    for loop, forward, feedback, upset in systems:
        rest = control.feedback(control.ss([], [], [], [[1.0]]), loop * feedback)
        for target, system in (
            (10.0, control.feedback(loop, feedback) * forward),
            (0.0, rest * upset),
            (0.0, rest * control.ss(path1)),
        ):
            _, response = control.forced_response(system, time_s, step)
            errors.append(float(np.trapezoid(np.abs(target - response), time_s)))
    return margins, errors


def sampled_difference(count: int, seed: int) -> float:
    """Largest difference of setpoint responses from the exact sampled system, as a share of the step."""
    rng = np.random.default_rng(seed)
    worst, h = 0.0, 0.5
    z = control.tf([1, 0], [1], h)

    def pi(stage: LoopStage) -> control.TransferFunction:
        return stage.controller.gain * (1 + h / stage.controller.reset_s * z / (z - 1))

    for _ in range(count):
        lag2, lag1, dead2, dead1 = rng.uniform(2, 8), rng.uniform(40, 120), rng.integers(1, 5), rng.integers(4, 30)
        inner = LoopStage(Controller(rng.uniform(0.3, 0.6), lag2, interval_s=h), Process(1.0, (lag2,), dead2 * h))
        outer = LoopStage(Controller(rng.uniform(0.5, 1.0), lag1, interval_s=h), Process(1.2, (lag1,), dead1 * h))
        stages = [LoopStage(unlimited(stage.controller), stage.process) for stage in (inner, outer)]
        structure = cascade_structure(stages, final_element=FinalElement())
        response = simulate([structure], [standard_scenarios(2, size_pct=5.0)[0]], clock=Clock(h, 800))[0][0]
        plant2 = control.sample_system(control.tf(1, [lag2, 1]), h, "zoh") / z ** int(dead2)
        # The secondary measurement is straight between scans: a first-order hold.
        a = math.exp(-h / lag1)
        ramp = 1 - lag1 / h * (1 - a)
        plant1 = 1.2 * (ramp * z + (1 - a - ramp)) / (z - a) / z ** int(dead1)
        inner_closed = control.ss(control.feedback(pi(inner) * plant2, 1))
        closed = control.feedback(control.ss(pi(outer)) * inner_closed * control.ss(plant1), 1)
        _, expected = control.forced_response(closed, response.time_s, np.full(len(response.time_s), 5.0))
        worst = max(worst, float(np.abs(response.measurement_pct[1] - 50.0 - expected).max()) / 5.0)
    return worst


def delay_free_difference(cascades: list[ControlStructure]) -> float:
    """Largest relative difference of the phase margins of secondary loops without dead time and interval."""
    worst = 0.0
    for cascade in cascades:
        stage = stages_of(cascade)[0]
        controller = Controller(stage.controller.gain, stage.controller.reset_s)
        bare = LoopStage(controller, Process(stage.process.gain, stage.process.lags_s))
        feedback, _, plant, _ = parts_of(bare)
        expected = control.margin(plant * feedback)[1]
        worst = max(worst, abs(analyse_chains([[bare]])[0][0].phase_margin_deg / expected - 1.0))
    return worst


def floor_ns(columns: int = 10_000, steps: int = 200) -> float:
    """Time of one step of one column in a lean loop: a PI controller on one lag, nothing else [ns]."""
    y, integral, error, scratch = (np.zeros(columns) for _ in range(4))
    start = time.process_time()
    for _ in range(steps):
        np.subtract(1.0, y, out=error)
        np.multiply(error, 0.05, out=scratch)
        integral += scratch
        np.multiply(error, 0.8, out=error)
        error += integral
        np.clip(error, -50.0, 50.0, out=error)
        error *= 0.1
        y *= 0.9
        y += error
    return (time.process_time() - start) / steps / columns * 1e9


def of_register(folder: Path) -> list[ControlStructure]:
    """The cascades of two levels of a register."""
    from loopdoc.engineering.comparison import structure_of
    from loopdoc.engineering.dynamics import Dynamics
    from loopdoc.engineering.pairing import Plant
    from loopdoc.register.load import Loaded, load

    loaded = load(folder)
    if not isinstance(loaded, Loaded):
        raise SystemExit(f"{folder} cannot be read")
    dynamics = Dynamics(Plant(loaded.register))
    found = (one.chain for tag in loaded.register.loops for one in dynamics.loop(tag).chains)
    return [structure_of(one) for one in found if len(one.levels) == 2]


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else None)
    parser.add_argument("--cascades", type=int, default=10_000)
    parser.add_argument("--sample", type=int, default=10, help="cascades that python-control does")
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--register", type=Path, help="take the cascades of this register instead")
    options = parser.parse_args()

    load_before = os.getloadavg()[0]
    start = time.perf_counter()
    if options.register:
        cascades = of_register(options.register)
        shares = [share_of(cascades)]
    else:
        with ProcessPoolExecutor(options.jobs) as pool:
            arguments = [(options.cascades, options.seed, options.jobs, job) for job in range(options.jobs)]
            shares = list(pool.map(part_of_all, *zip(*arguments, strict=True)))
        cascades = varied_cascades(max(options.sample, 1), seed=options.seed)
    wall_s = time.perf_counter() - start
    count = sum(share[0] for share in shares)
    responses = sum(share[1] for share in shares)
    print(f"{count} cascades, {2 * count} loops, {responses} responses, {len(shares)} processes")
    print(f"wall time                {wall_s:10.2f} s     {1e3 * wall_s / count:8.3f} ms a cascade")
    print(f"load of the machine      {load_before:10.1f} before, {os.getloadavg()[0]:.1f} after (one minute)")
    work_s = 0.0
    for part in shares[0][2]:
        part_s = sum(share[2][part] for share in shares)
        work_s += part_s
        print(f"  {part:20} {part_s:12.2f} s of processor time, {1e3 * part_s / count:.3f} ms a cascade")
    print(f"peak memory              {max(share[3] for share in shares):10.0f} MB a process")

    steps = sum(share[4] for share in shares)
    responses_s = sum(share[2]["responses"] for share in shares)
    print(f"steps                    {steps:10.3g}       {1e9 * responses_s / steps:8.0f} ns a step and response")

    (_, compared, figures), _ = by_loopdoc(cascades[: options.sample])
    times, difference = [], 0.0
    for structures, rows in zip(compared, figures, strict=True):
        if not rows:
            continue
        longest = max((row for rows_ in rows for row in rows_), key=lambda one: one.horizon_s)
        clock = Clock(rows[0][0].step_s, round(longest.horizon_s / rows[0][0].step_s))
        begun = time.process_time()
        _, errors = by_control(structures, clock)
        times.append(time.process_time() - begun)
        ours = [one.iae_pct_s for one in chain.from_iterable(rows)]
        apart = [abs(one / error - 1.0) for one, error in zip(ours, errors, strict=True)]
        difference = max(difference, statistics.median(apart))
    each_s = statistics.mean(times)
    one, as_run = each_s * count / work_s, each_s * count / wall_s
    exact, bare = sampled_difference(5, options.seed), delay_free_difference(cascades[: options.sample])
    print(f"python-control           {1e3 * each_s:10.1f} ms of processor time a cascade (mean of {len(times)})")
    print(f"ratio                    {one:10.0f} for one process by processor time, {as_run:.0f} as run by wall time")
    print(f"lean loop of numpy       {floor_ns():10.1f} ns a step and column: one lag, PI and a limit, the floor")
    print(f"error integrals          {difference:10.2g} of the Pade model's: median difference of the worst cascade")
    print(f"exact sampled cascades   {exact:10.2g} of the step: largest difference")
    print(f"margins without delay    {bare:10.2g} relative: largest difference")


if __name__ == "__main__":
    main()
