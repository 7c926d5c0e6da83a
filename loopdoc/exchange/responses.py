"""Margins and time responses of a loop as text for people and as JSON for programs."""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from typing import Any

from loopdoc.engineering.comparison import Comparison, NotSimulated, ScenarioResponses
from loopdoc.engineering.dynamics import ChainDynamics, LoopDynamics
from loopdoc.engineering.frequency import Margins
from loopdoc.engineering.response_metrics import ResponseMetrics
from loopdoc.engineering.stages import measured_range
from loopdoc.exchange.findings import CAUTION
from loopdoc.register.quantity import Range, display_number

TUNING_CAUTION = "Try tuning changes only under supervision."


def response_json(loop: LoopDynamics, comparisons: Sequence[Comparison | NotSimulated]) -> str:
    """Margins, speed ratio and scenarios of a loop; engineering units and seconds. One comparison for each chain."""
    document: dict[str, Any] = {"tag": loop.tag}
    if loop.reason:
        document["not_calculated"] = loop.reason
    chains = [_chain_object(chain, found) for chain, found in zip(loop.chains, comparisons, strict=True)]
    # A split range has one chain for each branch; every other loop has one, and its fields stand at the top.
    document |= chains[0] if len(chains) == 1 else {"branches": chains} if chains else {}
    document["caution"] = f"{CAUTION} {TUNING_CAUTION}"
    return json.dumps(document, ensure_ascii=False, indent=2, allow_nan=False) + "\n"


def _chain_object(dynamics: ChainDynamics, comparison: Comparison | NotSimulated) -> dict[str, Any]:
    margins = [_margins_object(found) for found in dynamics.margins]
    levels = [level.loop.tag for level in dynamics.chain.levels]
    found: dict[str, Any] = {"levels": levels, "final_element": dynamics.chain.final_element.tag}
    if len(margins) == 1:
        found["loop"] = margins[0]
    else:
        found |= {"inner": margins[-2], "outer": margins[-1], "speed_ratio": _number(dynamics.speed_ratio)}
        found["margins_by_level"] = dict(zip(levels, margins, strict=True))
    own = measured_range(dynamics.chain.lead)
    found["unit"] = own.unit.symbol
    if isinstance(comparison, NotSimulated):
        found["not_simulated"] = comparison.reason
    else:
        found["scenarios"] = {
            entry.scenario.name: _scenario_object(entry, own, single=len(levels) == 1) for entry in comparison.scenarios
        }
    return found


def _scenario_object(entry: ScenarioResponses, own: Range, *, single: bool) -> dict[str, Any]:
    if single:
        return {"loop": _metrics_object(entry.tuned.metrics, own)}
    return {
        "cascade": _metrics_object(entry.tuned.metrics, own),
        "single": _metrics_object(entry.single.metrics, own) if entry.single else None,
    }


def _metrics_object(metrics: ResponseMetrics, own: Range) -> dict[str, Any]:
    per_pct = own.span / 100.0
    return {
        "iae": _number(metrics.iae_pct_s * per_pct),
        "peak": _number(metrics.peak_pct * per_pct),
        "settling_s": _number(metrics.settling_s),
        "time_to_peak_s": _number(metrics.time_to_peak_s),
        "valve_travel_pct": _number(metrics.valve_travel_pct),
        "reversals": metrics.reversals,
    }


def _margins_object(margins: Margins) -> dict[str, Any]:
    return {
        "stable": margins.stable,
        "gain_margin": _number(margins.gain_margin),
        "phase_margin_deg": _number(margins.phase_margin_deg),
        "max_sensitivity": _number(margins.max_sensitivity),
        "crossover_rad_per_s": _number(margins.crossover_rad_per_s),
    }


def _number(value: float | None) -> float | None:
    """JSON has no infinity and no NaN: a margin without limit and a crossover that is not there are null."""
    return None if value is None or not math.isfinite(value) else float(f"{value:.6g}")


def response_text(loop: LoopDynamics, comparisons: Sequence[Comparison | NotSimulated]) -> str:
    """The same for reading."""
    if loop.reason:
        return f"{loop.tag}: not calculated: {loop.reason}.\n{CAUTION}\n"
    lines: list[str] = []
    for dynamics, comparison in zip(loop.chains, comparisons, strict=True):
        lines.extend(_chain_lines(dynamics, comparison))
        lines.append("")
    lines.append(f"{CAUTION} {TUNING_CAUTION}")
    return "\n".join(lines) + "\n"


def _chain_lines(dynamics: ChainDynamics, comparison: Comparison | NotSimulated) -> list[str]:
    chain = dynamics.chain
    path = " > ".join([level.loop.tag for level in reversed(chain.levels)] + [chain.final_element.tag])
    lines = [
        path,
        f"{'':12}{'gain margin':>13}{'phase margin':>14}{'Ms':>7}{'crossover':>16}",
    ]
    for level, margins in zip(reversed(chain.levels), reversed(dynamics.margins), strict=True):
        state = "" if margins.stable else "   NOT STABLE"
        lines.append(
            f"{level.loop.tag:12}{_gain_margin(margins):>13}{_shown(margins.phase_margin_deg, 3) + ' deg':>14}"
            f"{_shown(margins.max_sensitivity):>7}{_shown(margins.crossover_rad_per_s) + ' rad/s':>16}{state}"
        )
    if dynamics.speed_ratio is not None:
        lines.append(f"speed ratio of the crossovers, secondary over primary: {_shown(dynamics.speed_ratio)}")
    if isinstance(comparison, NotSimulated):
        return [*lines, f"no time responses: {comparison.reason}"]
    return [*lines, "", *_scenario_lines(comparison)]


def _scenario_lines(comparison: Comparison) -> list[str]:
    own = measured_range(comparison.dynamics.chain.lead)
    unit = own.unit.symbol
    heads = f"{f'peak, {unit}':>14}{f'IAE, {unit} s':>16}{'settling, s':>14}{'valve travel, %':>18}"
    width = max(24, *(len(entry.scenario.name) + 2 for entry in comparison.scenarios))
    lines = [f"{'upset':{width}}{'':10}{heads}"]
    for entry in comparison.scenarios:
        rows = [("as tuned", entry.tuned)] + ([("single", entry.single)] if entry.single else [])
        for name, response in rows:
            metrics = response.metrics
            per_pct = own.span / 100.0
            lines.append(
                f"{entry.scenario.name if name == 'as tuned' else '':{width}}{name:10}"
                f"{_shown(metrics.peak_pct * per_pct):>14}{_shown(metrics.iae_pct_s * per_pct, 4):>16}"
                f"{_shown(metrics.settling_s, 4):>14}{_shown(metrics.valve_travel_pct):>18}"
            )
    if comparison.single is not None:
        settings = comparison.single.settings
        lines.append(
            f"single: one controller on the same final element, tuned by SIMC to Ms "
            f"{_shown(comparison.single.max_sensitivity)} (gain {_shown(settings.gain)}, "
            f"reset {_shown(settings.reset_s)} s)"
        )
    return lines


def _gain_margin(margins: Margins) -> str:
    return "not quoted" if math.isnan(margins.gain_margin) else _shown(margins.gain_margin)


def _shown(value: float, significant: int = 3) -> str:
    return "none" if math.isnan(value) else display_number(value, significant)
