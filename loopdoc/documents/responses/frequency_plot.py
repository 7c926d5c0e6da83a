"""The open loops and sensitivities of a chain over frequency, a column for each loop: for the specialist."""

from __future__ import annotations

import math

from loopdoc.documents.plots import Curve, Drawing, Limit, Mark, Panel
from loopdoc.engineering.dynamics import ChainDynamics
from loopdoc.engineering.frequency import Margins
from loopdoc.engineering.loop_curves import LoopCurves, loop_curves
from loopdoc.register.quantity import display_number

_PERIODS = ((7200.0, 3600.0, "h"), (120.0, 60.0, "min"), (0.0, 1.0, "s"))
"""From this period at the crossover on [s], periods are given in so many seconds, called that."""
_LOWEST_PHASE_DEG = -405.0


def frequency_drawing(dynamics: ChainDynamics) -> Drawing:
    """Magnitude and phase of the open loop, and both sensitivities, of each loop of a chain, outermost first."""
    chain = dynamics.chain
    columns = [
        _column(
            level.loop.tag,
            loop_curves(chain.stages[: position + 1], dynamics.margins[position]),
            dynamics.margins[position],
            is_first=position == len(chain.levels) - 1,
        )
        for position, level in reversed(list(enumerate(chain.levels)))
    ]
    path = " → ".join([level.loop.tag for level in reversed(chain.levels)] + [chain.final_element.tag])
    rows = tuple(zip(*columns, strict=True))
    return Drawing(f"Open loop and sensitivity over frequency, {path}", rows, frequency_caption(dynamics))


def frequency_caption(dynamics: ChainDynamics) -> str:
    """What is drawn and under which assumptions."""
    chain = dynamics.chain
    several = len(chain.levels) > 1
    whose = "each controller, every loop below it closed" if several else "the controller"
    sampled = any(margins.sampled for margins in dynamics.margins)
    has_interval = any(stage.controller.interval_s for stage in chain.stages)
    interval = ""
    if sampled:
        interval = " Loops marked as sampled are drawn as they are executed; of the others an execution interval"
    elif has_interval:
        interval = " An execution interval"
    if interval:
        interval += " counts as half of itself in dead time; the curves end at half the sampling frequency."
    path = " → ".join([level.loop.tag for level in reversed(chain.levels)] + [chain.final_element.tag])
    return (
        f"{path}: open loop L of {whose}, in % per % of span, from the linear process models about the normal values, "
        f"with exact dead time and with measurement and rate filters.{interval} |S| = |1/(1 + L)| is what the loop "
        "leaves of an upset of its measurement at that frequency, |T| = |L/(1 + L)| what it passes on of its setpoint "
        "at a setpoint weight of 1; Ms and Mt are their peaks. Dotted: the frequencies at which gain margin (GM) and "
        "phase margin (PM) are read. Output limits, stroke time and backlash take no part."
    )


def _column(tag: str, curves: LoopCurves, margins: Margins, *, is_first: bool) -> tuple[Panel, Panel, Panel]:
    w = curves.w_rad_per_s
    state = ("" if margins.stable else ", NOT STABLE") + (", as sampled" if margins.sampled else "")
    center = margins.crossover_rad_per_s if math.isfinite(margins.crossover_rad_per_s) else float(w[len(w) // 2])
    _, unit_s, unit = next(entry for entry in _PERIODS if 2.0 * math.pi / center >= entry[0])
    guides = []
    gain_marks: tuple[Mark, ...] = ()
    phase_marks: tuple[Mark, ...] = ()
    has_gain_margin = math.isfinite(margins.phase_crossover_rad_per_s) and math.isfinite(margins.gain_margin)
    if has_gain_margin and w[0] <= margins.phase_crossover_rad_per_s <= w[-1] * (1.0 + 1e-6):
        at = margins.phase_crossover_rad_per_s
        guides.append(at)
        # On the right of its stroke a name stands above the falling curve. Near the right end there is no room, and
        # of a gain margin below 1 the curve is on that side: there it stands on the left, below the curve.
        is_late = math.log(at / w[0]) > 0.75 * math.log(w[-1] / w[0])
        is_left = is_late or margins.gain_margin < 1.0
        gain_marks = (
            Mark(
                f"GM {_shown(margins.gain_margin)}", at, 1.0, 1.0 / margins.gain_margin, is_left=is_left,
                is_below=is_left,
            ),
        )  # fmt: skip
    if curves.phase_margin_at is not None and math.isfinite(margins.phase_margin_deg):
        at, phase = curves.phase_margin_at
        guides.append(at)
        turns = 360.0 * round((phase + 180.0) / 360.0)
        # The name stands on the side of its stroke on which the curve stays higher over the width of the name.
        before, after = (curves.phase_deg[(w >= low) & (w <= high)] for low, high in ((at / 5.0, at), (at, at * 5.0)))
        is_left = before.min(initial=math.inf) >= after.min(initial=math.inf)
        phase_marks = (
            Mark(f"PM {_shown(margins.phase_margin_deg)}°", at, -180.0 + turns, phase, is_left=bool(is_left)),
        )
    lowest = max(_LOWEST_PHASE_DEG, math.floor(min(-225.0, float(curves.phase_deg.min())) / 45.0) * 45.0)
    highest = max(-45.0, math.ceil(float(curves.phase_deg.max()) / 45.0) * 45.0)
    # A decade about 1 at least, and as far down as the gain margin is read.
    low = min(0.1, max(0.02, float(curves.magnitude.min())))
    if gain_marks:
        low = max(1e-4, min(low, 0.5 / margins.gain_margin))
    high = max(10.0, min(50.0, float(curves.magnitude.max())))
    top = max(1.5, 1.25 * min(max(float(curves.sensitivity.max()), float(curves.complementary.max())), 6.0))
    unity = Limit("", 1.0)
    return (
        Panel(
            f"{tag}{state}", "", "|L|, % per %" if is_first else "", (Curve("", "solid", w, curves.magnitude),),
            (unity,), gain_marks, tuple(guides), x_is_log=True, y_is_log=True, y_view=(low, high),
            period=(f"period, {unit}", unit_s),
        ),
        Panel(
            "", "", "phase of L, °" if is_first else "", (Curve("", "solid", w, curves.phase_deg),),
            (Limit("", -180.0),), phase_marks, tuple(guides), x_is_log=True, y_view=(lowest, highest),
            y_step=90.0 if highest - lowest > 200.0 else 45.0,
        ),
        Panel(
            "", "frequency, rad/s", "|S|, |T|" if is_first else "",
            (
                Curve("sensitivity |S|", "solid", w, curves.sensitivity),
                Curve("complementary sensitivity |T|", "dashed", w, curves.complementary),
            ),
            (unity,), _peaks(curves, margins), tuple(guides), x_is_log=True, y_view=(0.0, top),
        ),
    )  # fmt: skip


def _peaks(curves: LoopCurves, margins: Margins) -> tuple[Mark, ...]:
    """Ms and Mt where they are; at an end of the curves there is no peak, but for half the sampling frequency."""
    if not margins.stable:
        return ()
    found = []
    for name, curve, peak, is_left in (
        ("Ms", curves.sensitivity, margins.max_sensitivity, False),
        ("Mt", curves.complementary, margins.max_complementary_sensitivity, True),
    ):
        top = int(curve.argmax())
        is_last = top == len(curve) - 1
        if top > 0 and (margins.sampled or not is_last) and peak > 1.005:
            at = float(curves.w_rad_per_s[top])
            found.append(Mark(f"{name} {_shown(peak)}", at, peak, peak, is_left=is_left or is_last))
    return tuple(found)


def _shown(value: float) -> str:
    return display_number(value, 3)
