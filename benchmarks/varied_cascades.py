"""Cascades as plants have them, drawn at random from a seed, for the benchmarks."""

from __future__ import annotations

import math
import random
from dataclasses import replace

from loopdoc.engineering.frequency import LoopStage
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process
from loopdoc.engineering.structure import ControlStructure, FinalElement, cascade_structure


def _skogestad(process: Process, *, detune: float, interval_s: float, rng: random.Random) -> Controller:
    """A PI controller by the SIMC rule with the closed-loop time of a careful engineer, never twice the same."""
    lags = sorted(process.lags_s, reverse=True)
    delay_s = process.dead_time_s + interval_s / 2.0 + sum(lags[1:]) / 2.0
    if process.integrating:
        delay_s += sum(lags[:1]) / 2.0
    wanted_s = detune * max(2.0 * delay_s, 2.0 * interval_s)
    if process.integrating:
        gain, reset_s = 1.0 / (process.gain * wanted_s), 4.0 * wanted_s
    else:
        gain, reset_s = lags[0] / (process.gain * wanted_s), min(lags[0], 4.0 * wanted_s)
    return Controller(
        gain * rng.uniform(0.6, 1.2),
        reset_s * rng.uniform(0.9, 1.8),
        interval_s=interval_s,
        setpoint_weight=rng.choice((1.0, 1.0, 1.0, 0.5)),
    )


def _secondary(rng: random.Random) -> tuple[LoopStage, float]:
    """A flow, pressure or fast temperature loop, and how slow it is [s]."""
    kind = rng.choice(("flow", "flow", "flow", "pressure", "temperature"))
    interval_s = rng.choice((0.25, 0.5, 0.5, 1.0))
    sign = rng.choice((1.0, 1.0, -1.0))
    if kind == "flow":
        process = Process(sign * rng.uniform(0.5, 2.0), (rng.uniform(1.0, 6.0),), rng.uniform(0.3, 2.0))
    elif kind == "pressure":
        lags = (rng.uniform(4.0, 20.0), rng.uniform(0.3, 2.0))
        process = Process(sign * rng.uniform(0.5, 3.0), lags, rng.uniform(0.2, 1.5))
    else:
        lags = (rng.uniform(15.0, 60.0), rng.uniform(2.0, 8.0))
        process = Process(sign * rng.uniform(0.5, 2.5), lags, rng.uniform(1.0, 6.0))
        interval_s = rng.choice((0.5, 1.0))
    controller = _skogestad(process, detune=rng.uniform(1.0, 1.6), interval_s=interval_s, rng=rng)
    if kind == "flow":
        controller = replace(controller, measurement_filter_s=rng.choice((0.0, 0.5, 1.0)))
    return LoopStage(controller, process), sum(process.lags_s) / 4.0 + 3.0 * process.dead_time_s + interval_s


def _primary(slow_s: float, interval_s: float, rng: random.Random) -> LoopStage:
    """A temperature, level or composition loop on a secondary as slow as that [s]."""
    kind = rng.choice(("temperature", "temperature", "temperature", "level", "composition"))
    scale_s = slow_s * 10.0 ** rng.uniform(0.7, 1.5)
    interval_s *= rng.choice((1, 2, 2, 4))
    if kind == "level":
        process = Process(rng.uniform(0.3, 2.0) / scale_s, (), 0.1 * scale_s, integrating=True)
    elif kind == "temperature":
        lags = (scale_s * rng.uniform(2.0, 5.0), scale_s * rng.uniform(0.1, 0.4))
        process = Process(rng.uniform(0.5, 2.5), lags, scale_s * rng.uniform(0.15, 0.6))
    else:
        process = Process(rng.uniform(0.5, 2.0), (scale_s * rng.uniform(1.0, 2.0),), scale_s * rng.uniform(0.5, 1.0))
        interval_s *= rng.choice((1, 5))
    controller = _skogestad(process, detune=rng.uniform(1.2, 2.5), interval_s=interval_s, rng=rng)
    if kind == "temperature" and rng.random() < 0.3:
        controller = replace(controller, rate_s=0.5 * min(process.lags_s), measurement_filter_s=2.0 * interval_s)
    return LoopStage(controller, process)


def varied_cascades(count: int, *, seed: int, linear: bool = False) -> list[ControlStructure]:
    """Return so many cascades of two levels, their final elements with stroke time and some with backlash.

    ``linear`` leaves stroke, backlash and limits away.
    """
    rng = random.Random(seed)
    found = []
    for _ in range(count):
        inner, slow_s = _secondary(rng)
        outer = _primary(slow_s, inner.controller.interval_s, rng)
        stroke_s = rng.choice((0.0, 2.0, 4.0, 6.0, 10.0)) if slow_s > 2.0 else rng.choice((0.0, 1.0, 2.0))
        backlash_pct = rng.choice((0.0,) * 9 + (0.5,))
        start_pct = (rng.uniform(35.0, 65.0), rng.uniform(40.0, 60.0))
        valve = FinalElement(stroke_s, backlash_pct, start_pct=rng.uniform(40.0, 60.0))
        if linear:
            valve = FinalElement()
            inner, outer = (replace(stage, controller=unlimited(stage.controller)) for stage in (inner, outer))
        found.append(cascade_structure([inner, outer], final_element=valve, start_pct=start_pct))
    return found


def unlimited(controller: Controller) -> Controller:
    """Return the controller without limits of its output and setpoint."""
    return replace(
        controller,
        output_low_pct=-math.inf,
        output_high_pct=math.inf,
        setpoint_low_pct=-math.inf,
        setpoint_high_pct=math.inf,
    )
