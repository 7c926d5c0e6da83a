"""A small figure of a loop's setpoint response, for its sheet."""

from __future__ import annotations

import math

import numpy as np

from loopdoc.documents.drawing import Sheet
from loopdoc.documents.language import Language
from loopdoc.engineering.dynamics import LoopDynamics
from loopdoc.engineering.step_response import SetpointResponse, setpoint_response

WIDTH, HEIGHT, LOW_HEIGHT = 251.0, 56.0, 40.0
"""Of the figure, and of a lower one where the page is short of room [pt]."""
_LEFT, _RIGHT, _TOP = 24.0, 246.0, 4.0
_BELOW = 12.0
"""Below the axis of time, for its labels [pt]."""
_POINTS = 140
_TIME_UNITS = ((7200.0, 3600.0, "h"), (300.0, 60.0, "min"), (0.0, 1.0, "s"))
"""From this duration on [s], divide by this and write that."""


def calculated_response(dynamics: LoopDynamics) -> SetpointResponse | None:
    """The response of a loop's least robust chain; None where it is unknown, unstable or does not settle."""
    worst = dynamics.worst
    if worst is None or not all(margins.stable for margins in worst.margins):
        return None
    margins = worst.margins[-1]
    # A proportional loop of low gain crosses late or never; its bandwidth says then how quick it is.
    paces = [pace for pace in (margins.crossover_rad_per_s, margins.bandwidth_rad_per_s) if math.isfinite(pace)]
    return setpoint_response(worst.chain.stages, pace_rad_per_s=max(paces)) if paces else None


def response_plot(tag: str, response: SetpointResponse, language: Language, height: float = HEIGHT) -> str:
    """The figure as SVG text: setpoint and measurement over time, in percent of the step."""
    bottom = height - _BELOW
    end_s = max(1.4 * response.settling_s, float(response.time_s[8]))
    _, divisor, unit = next(entry for entry in _TIME_UNITS if end_s >= entry[0])
    step = _tick(end_s / divisor)
    count = math.ceil(end_s / divisor / step)
    end_s = count * step * divisor
    highest = max(1.0, response.final * (1.0 + response.overshoot)) * 1.08

    def at(time_s: float, share: float) -> tuple[float, float]:
        return _LEFT + (_RIGHT - _LEFT) * time_s / end_s, bottom - (bottom - _TOP) * share / highest

    sheet = Sheet(WIDTH)
    sheet.polyline([at(0.0, highest), at(0.0, 0.0), at(end_s, 0.0)], width=0.6)
    for index in range(count + 1):
        x, y = at(index * step * divisor, 0.0)
        sheet.polyline([(x, y), (x, y + 2.0)], width=0.6)
        label = language.number(index * step) + (f"\u00a0{unit}" if index == count else "")
        sheet.text(x, y + 8.5, label, size=5.8, anchor="end" if index == count else "middle")
    for share, name in ((0.0, "0\u00a0%"), (1.0, "100\u00a0%")):
        sheet.text(_LEFT - 3, at(0.0, share)[1] + 2, name, size=5.8, anchor="end")
    sheet.polyline([at(0.0, 1.0), at(end_s, 1.0)], width=0.5, dash="2 1.6")
    times = np.linspace(0.0, end_s, _POINTS)
    curve = np.interp(times, response.time_s, response.measurement)
    sheet.polyline([at(float(time), float(share)) for time, share in zip(times, curve, strict=True)], width=1.1)
    return sheet.svg(height, language.sheet_response_title(tag, response_words(response, language)))


def response_words(response: SetpointResponse, language: Language) -> str:
    """What the figure shows, in figures."""
    _, divisor, unit = next(entry for entry in _TIME_UNITS if response.settling_s >= entry[0])
    offset = abs(1.0 - response.final)
    return language.sheet_response(
        language.number(100 * response.overshoot, 2) if response.overshoot >= 0.005 else "",
        f"{language.number(response.settling_s / divisor, 2)}\u00a0{unit}",
        language.number(100 * offset, 2) if offset >= 0.005 else "",
    )


def _tick(end: float) -> float:
    """Distance of the ticks: 1, 2 or 5 times a power of ten, three to seven of them."""
    power = 10.0 ** math.floor(math.log10(end / 3.0))
    return next(factor * power for factor in (5.0, 2.0, 1.0) if factor * power <= end / 3.0)
