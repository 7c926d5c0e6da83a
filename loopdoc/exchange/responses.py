"""Margins and time responses of a loop as text for people and as JSON for programs."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from itertools import pairwise
from typing import Any

from loopdoc.engineering.comparison import UPSET_PCT, Comparison, NotSimulated, ScenarioResponses, input_moves
from loopdoc.engineering.dynamics import ChainDynamics, LoopDynamics
from loopdoc.engineering.frequency import speed_ratio
from loopdoc.engineering.override import Override
from loopdoc.engineering.setpoint_steps import steps_told
from loopdoc.engineering.split_range import SplitRange
from loopdoc.engineering.stages import Chain, measured_range
from loopdoc.engineering.tuning_table import CAUTION as REVIEW_CAUTION
from loopdoc.engineering.tuning_table import quoted_gain_margin, quoted_phase_margin, several_crossovers
from loopdoc.exchange.escaping import for_json, for_terminal
from loopdoc.exchange.findings import CAUTION
from loopdoc.exchange.override import override_lines, override_object
from loopdoc.exchange.response_metrics import metric_cells, metric_heads, metrics_object, shown
from loopdoc.exchange.split_range import split_lines, split_object
from loopdoc.exchange.tuning_review import Reviews, margins_object, number, review_lines, reviews_object
from loopdoc.register.model import Hold, known
from loopdoc.register.quantity import Range
from loopdoc.register.units import difference_unit
from loopdoc.rules.policy import Limits

TUNING_CAUTION = "Try tuning changes only under supervision."
RATIOS = {"peak": "peak_pct", "iae": "iae_pct_s", "settling": "settling_s"}
"""What is compared between cascade and single loop."""


def response_json(
    loop: LoopDynamics,
    comparisons: Sequence[Comparison | NotSimulated],
    reviews: Reviews,
    limits: Limits,
    *,
    split: SplitRange | NotSimulated | None = None,
    override: Override | NotSimulated | None = None,
) -> str:
    """Margins, speed ratio, scenarios and tuning review of a loop; engineering units and seconds.

    One comparison for each chain, one entry of reviews for each loop of the chains; ``split`` is the split range that
    the chains are branches of, ``override`` what the loop is a candidate of.
    """
    document: dict[str, Any] = {"tag": loop.tag}
    if loop.reason:
        document["not_calculated"] = loop.reason
    chains = [_chain_object(chain, found) for chain, found in zip(loop.chains, comparisons, strict=True)]
    # A split range has one chain for each branch; every other loop has one, and its fields stand at the top.
    document |= chains[0] if len(chains) == 1 else {"branches": chains} if chains else {}
    if split is not None:
        document["split_range"] = split_object(split)
    if override is not None:
        document["override"] = override_object(override)
    document["tuning_review"] = reviews_object(reviews, limits)
    document["caution"] = f"{CAUTION} {REVIEW_CAUTION}"
    return for_json(document) + "\n"


def _chain_object(dynamics: ChainDynamics, comparison: Comparison | NotSimulated) -> dict[str, Any]:
    margins = [margins_object(found) for found in dynamics.margins]
    levels = [level.loop.tag for level in dynamics.chain.levels]
    found: dict[str, Any] = {"levels": levels, "final_element": dynamics.chain.final_element.tag}
    if len(margins) == 1:
        found["loop"] = margins[0]
    else:
        found |= {"inner": margins[-2], "outer": margins[-1], "speed_ratio": number(dynamics.speed_ratio)}
        found["margins_by_level"] = dict(zip(levels, margins, strict=True))
    found["process_sources"] = _model_sources(dynamics.chain)
    own = measured_range(dynamics.chain.lead)
    found["unit"] = own.unit.symbol
    if isinstance(comparison, NotSimulated):
        found["not_simulated"] = comparison.reason
    else:
        found["function_inputs"] = [
            {"function": one.function, "input": one.tag, "moved_by": list(one.moved_by)}
            | ({"not_moved": one.reason} if one.reason else {})
            for one in input_moves(dynamics.chain)
        ]
        found["scenarios"] = {
            entry.scenario.name: _scenario_object(entry, own, single=len(levels) == 1) for entry in comparison.scenarios
        }
        if comparison.single is not None:
            settings = comparison.single.settings
            found["single_loop"] = {
                "final_element": dynamics.chain.final_element.tag,
                "gain": number(abs(settings.gain)),
                "reset_s": number(settings.reset_s),
                "max_sensitivity": number(comparison.single.max_sensitivity),
                "assumption": single_assumption(comparison),
            }
    return found


def single_assumption(comparison: Comparison) -> str:
    """With what a cascade is compared, in a sentence; why with nothing, where no single loop is its equal."""
    chain = comparison.dynamics.chain
    if comparison.single is None:
        return f"no single loop on {chain.final_element.tag} reaches the same Ms by SIMC: nothing to compare with"
    settings = comparison.single.settings
    return (
        f"single: one controller on {chain.final_element.tag} in place of the cascade, tuned by SIMC on all processes "
        f"in series to the Ms of {chain.lead.tag}, {shown(comparison.single.max_sensitivity)} "
        f"(gain {shown(abs(settings.gain))} % per %, reset {shown(settings.reset_s)} s)"
    )


def _scenario_object(entry: ScenarioResponses, own: Range, *, single: bool) -> dict[str, Any]:
    name, unaided = "loop" if single else "cascade", entry.without_feedforward
    found: dict[str, Any] = {name: metrics_object(entry.tuned.metrics, own)}
    if unaided is not None:
        found[f"{name}_without_feedforward"] = metrics_object(unaided.metrics, own)
        found["with_over_without_feedforward"] = {
            name: number(entry.feedforward_ratio(of)) for name, of in RATIOS.items()
        }
    if single:
        return found
    return found | {
        "single": metrics_object(entry.single.metrics, own) if entry.single else None,
        "cascade_over_single": {name: number(entry.ratio(of)) for name, of in RATIOS.items()} if entry.single else None,
    }


def response_text(
    loop: LoopDynamics,
    comparisons: Sequence[Comparison | NotSimulated],
    reviews: Reviews,
    limits: Limits,
    *,
    split: SplitRange | NotSimulated | None = None,
    override: Override | NotSimulated | None = None,
) -> str:
    """The same for reading."""
    if loop.reason:
        return f"{loop.tag}: not calculated: {loop.reason}.\ntuning review: not checked.\n{CAUTION}\n"
    lines: list[str] = []
    for dynamics, comparison in zip(loop.chains, comparisons, strict=True):
        lines.extend(_chain_lines(dynamics, comparison))
        lines.append("")
    if split is not None:
        lines.extend((*split_lines(split), ""))
    if override is not None:
        lines.extend((*override_lines(override), ""))
    lines.extend(review_lines(reviews, limits))
    lines.append(f"{CAUTION} {REVIEW_CAUTION}")
    return for_terminal("\n".join(lines)) + "\n"


def _chain_lines(dynamics: ChainDynamics, comparison: Comparison | NotSimulated) -> list[str]:
    chain = dynamics.chain
    path = " > ".join([level.loop.tag for level in reversed(chain.levels)] + [chain.final_element.tag])
    lines = [
        path,
        f"{'':12}{'gain margin':>13}{'phase margin':>14}{'Ms':>7}{'Mt':>7}{'crossover':>20}{'bandwidth':>20}",
    ]
    for level, margins in zip(reversed(chain.levels), reversed(dynamics.margins), strict=True):
        state = ("   sampled" if margins.sampled else "") + ("" if margins.stable else "   NOT STABLE")
        lines.append(
            f"{level.loop.tag:12}{quoted_gain_margin(margins):>13}{_with_unit(quoted_phase_margin(margins), 'deg'):>14}"
            f"{shown(margins.max_sensitivity):>7}{shown(margins.max_complementary_sensitivity):>7}"
            f"{_with_unit(shown(margins.crossover_rad_per_s), 'rad/s'):>20}"
            f"{_with_unit(shown(margins.bandwidth_rad_per_s), 'rad/s'):>20}{state}"
        )
    sampled = [margins.sampled for margins in dynamics.margins]
    if any(sampled):
        others = "" if all(sampled) else "; in the others an interval counts as half of itself in dead time"
        lines.append(f"sampled: margins of the loop as it is executed{others}")
    lines.extend(
        f"{level.loop.tag}: the gain margin would need the sampled loop: {margins.not_quoted}"
        for level, margins in zip(chain.levels, dynamics.margins, strict=True)
        if margins.not_quoted
    )
    lines.extend(several_crossovers(dynamics))
    levels = list(zip(chain.levels, dynamics.margins, strict=True))
    lines.extend(
        f"speed ratio of the crossovers, {inner.loop.tag} over {outer.loop.tag}: {shown(speed_ratio(fast, slow))}"
        for (outer, slow), (inner, fast) in pairwise(reversed(levels))
    )
    sources = [f"{tag} {source}" for tag, source in _model_sources(chain).items()]
    lines.append(f"process models from: {'; '.join(sources)}")
    if isinstance(comparison, NotSimulated):
        return [*lines, f"no time responses: {comparison.reason}"]
    return [*lines, "", *_scenario_lines(comparison)]


def _model_sources(chain: Chain) -> dict[str, str]:
    """Where each process model of a chain comes from, outermost loop first."""
    found = {}
    for level in reversed(chain.levels):
        process = known(level.loop.loop.process)
        branch = process.branches.get(chain.final_element.tag) if process else None
        source = (branch and branch.source) or (process and process.source)
        told = f"on hold ({source.reason})" if isinstance(source, Hold) else source
        found[level.loop.tag] = told or "no source given"
    return found


def _scenario_lines(comparison: Comparison) -> Iterator[str]:
    own = measured_range(comparison.dynamics.chain.lead)
    unit = difference_unit(own.unit).symbol
    width = max(24, *(len(entry.scenario.name) + 2 for entry in comparison.scenarios))
    yield f"{'upset':{width}}{'':16}{metric_heads(unit)}"
    for entry in comparison.scenarios:
        unaided = entry.without_feedforward
        rows = [("as tuned", entry.tuned)] + ([("no feedforward", unaided)] if unaided else [])
        for name, response in rows + ([("single", entry.single)] if entry.single else []):
            yield (
                f"{entry.scenario.name if name == 'as tuned' else '':{width}}{name:16}"
                f"{metric_cells(response.metrics, own, entry.peak_time_s(response))}"
            )
        for name, ratio in (("with/without", entry.feedforward_ratio), ("cascade/single", entry.ratio)):
            if unaided if name == "with/without" else entry.single:
                peak, iae, settling = (_ratio(ratio(of)) for of in RATIOS.values())
                yield f"{'':{width}}{name:16}{peak:>14}{'':9}{iae:>16}{settling:>14}"
    yield from _upsets_told(comparison)
    if len(comparison.dynamics.chain.levels) > 1:
        yield single_assumption(comparison)


def _upsets_told(comparison: Comparison) -> Iterator[str]:
    """What the rows of the scenarios mean."""
    own = measured_range(comparison.dynamics.chain.lead)
    for entry in comparison.scenarios:
        setpoint = entry.tuned.setpoint_pct[-1]
        if entry.scenario.setpoint_step_pct and setpoint is not None:
            made = float(setpoint[-1]) - comparison.start_pct[-1]
            if abs(made) < 1e-9:
                yield "setpoint step: none, since the normal setpoint stands at its limit"
                continue
            limited = abs(made - entry.scenario.setpoint_step_pct) > 1e-9
            yield (
                f"setpoint step: {shown(made)} % of span, {shown(made * own.span / 100.0)} {difference_unit(own.unit)}"
                f"{', as far as the setpoint limit allows' if limited else ''}"
            )
    yield (
        f"other upsets that the register does not declare: a step of {shown(UPSET_PCT)} % of span at that "
        f"measurement, through the lags of its process, or a load of {shown(UPSET_PCT)} % at the input of an "
        "integrating one"
    )
    yield (
        "settling: until the measurement stays within 2 % of the step from the setpoint or, without reset, from its "
        "last value; 0 where that band is never left, ∞ where it is not seen to stay; overshoot: beyond the new "
        "setpoint in percent of the step, after another upset to the other side in percent of the peak; reversals: "
        "turns of the final element that went back by at least 0.1 %"
    )
    yield from _inputs_told(comparison)
    yield from steps_told(comparison.dynamics)
    for entry, tag, travel_pct in comparison.at_limit:
        yield (
            f"{entry.scenario.name}: does not settle, since the output of {tag} stands at its limit, with "
            f"{comparison.dynamics.chain.final_element.tag} at {shown(travel_pct)} %: from the middle of its limits "
            "the upset is more than it can make good"
        )
    if any(
        math.isinf(metrics.iae_pct_s) and metrics.limited_level is None
        for metrics in (entry.tuned.metrics for entry in comparison.scenarios)
    ):
        yield f"IAE ∞: an offset stays, since {comparison.dynamics.chain.lead.tag} has no reset"


def _inputs_told(comparison: Comparison) -> Iterator[str]:
    """What functions take in besides the loops, and what moves it."""
    for one in input_moves(comparison.dynamics.chain):
        named = ", ".join(one.moved_by)
        but = f", except under: {named}" if named else f" ({one.reason})" if one.reason else ""
        yield f"{one.tag} into {one.function}: stays as it is in the time responses{but}"
    if any(entry.without_feedforward for entry in comparison.scenarios):
        alone = len(comparison.dynamics.chain.levels) == 1
        yield (
            "no feedforward: the same upset with what enters the functions as it was; with/without: what feedforward "
            "leaves of it" + ("" if alone else "; single and cascade/single: without feedforward on either side")
        )


def _with_unit(figure: str, symbol: str) -> str:
    """A figure with its unit, which what is told in words, or is infinite, has none of."""
    return f"{figure} {symbol}" if figure[-1].isdigit() else figure


def _ratio(value: float | None) -> str:
    return "-" if value is None else shown(value)
