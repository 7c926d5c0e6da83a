"""The tuning review of a loop as text for people and as JSON for programs."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from typing import Any

from loopdoc.engineering.frequency import Margins
from loopdoc.engineering.tuning_review import NotApplicable, NotReviewed, RuleSettings, TuningReview
from loopdoc.engineering.tuning_table import Wanted, legend, remark, setting_units, tuning_table
from loopdoc.rules.policy import Limits

Reviews = Sequence[tuple[TuningReview | NotReviewed, ...]]
"""One entry a loop: its review on each of its chains."""


def wanted_by(limits: Limits) -> Wanted:
    """The robustness that the policy asks for."""
    return Wanted(limits.gain_margin, limits.phase_margin, limits.max_sensitivity)


def reviews_object(reviews: Reviews, limits: Limits) -> dict[str, Any]:
    """By the tag of the loop; of a split range a list of its branches."""
    found: dict[str, Any] = {}
    for entries in reviews:
        objects = [_review_object(entry, limits) for entry in entries]
        found[entries[0].tag] = objects[0] if len(objects) == 1 else {"branches": objects}
    return found


def _review_object(review: TuningReview | NotReviewed, limits: Limits) -> dict[str, Any]:
    if isinstance(review, NotReviewed):
        return {"not_checked": review.reason}
    table = tuning_table(review, wanted_by(limits))
    units = setting_units(review.dynamics.chain.lead.controller, review.configured.settings)
    seen = review.seen
    return {
        "final_element": review.dynamics.chain.final_element.tag,
        "form": review.form,
        "model": {
            "gain": number(seen.first.gain),
            "integrating": seen.first.integrating,
            "lag_s": number(seen.first.lag_s),
            "dead_time_s": number(seen.first.dead_time_s),
            "gain_error": number(seen.gain_error),
            "phase_error_deg": number(seen.phase_error_deg),
            "error_at_rad_per_s": number(seen.matched_rad_per_s),
        },
        "basis": list(table.basis),
        "units": {
            ("proportional_band" if units.as_band else "gain"): "%" if units.as_band else "% per %",
            ("repeats" if units.as_repeats else "reset"): units.reset,
            "rate": units.rate,
        },
        "settings": [
            _rule_object(rule, limits, units.values(rule.settings), as_band=units.as_band, as_repeats=units.as_repeats)
            for rule in (review.configured, *review.rules)
            if isinstance(rule, RuleSettings)
        ],
        "not_applied": [
            {"rule": rule.rule, "reason": rule.reason} for rule in review.rules if isinstance(rule, NotApplicable)
        ],
        "sources": list(table.sources),
    }


def _rule_object(
    rule: RuleSettings, limits: Limits, values: tuple[float, float | None, float], *, as_band: bool, as_repeats: bool
) -> dict[str, Any]:
    gain, reset, rate = values
    return {
        "rule": rule.rule,
        ("proportional_band" if as_band else "gain"): number(gain),
        ("repeats" if as_repeats else "reset"): number(reset),
        "rate": number(rate),
        **margins_object(rule.margins),
        "remark": remark(rule.margins, wanted_by(limits)),
    }


def margins_object(margins: Margins) -> dict[str, Any]:
    """Stability, margins, crossovers and bandwidth of one loop."""
    return {
        "stable": margins.stable,
        "gain_margin": number(margins.gain_margin),
        "phase_margin_deg": number(margins.phase_margin_deg),
        "delay_margin_s": number(margins.delay_margin_s),
        "max_sensitivity": number(margins.max_sensitivity),
        "max_complementary_sensitivity": number(margins.max_complementary_sensitivity),
        "crossover_rad_per_s": number(margins.crossover_rad_per_s),
        "crossovers": margins.crossovers,
        "phase_crossover_rad_per_s": number(margins.phase_crossover_rad_per_s),
        "bandwidth_rad_per_s": number(margins.bandwidth_rad_per_s),
    }


def number(value: float | None) -> float | None:
    """JSON has no infinity and no NaN: a margin without limit and a crossover that is not there are null."""
    return None if value is None or not math.isfinite(value) else float(f"{value:.6g}")


def review_lines(reviews: Reviews, limits: Limits) -> Iterator[str]:
    """The same for reading."""
    sources: dict[str, None] = {}
    for review in (entry for entries in reviews for entry in entries):
        if isinstance(review, NotReviewed):
            yield f"tuning review of {review.tag}: not checked: {review.reason}"
            yield ""
            continue
        table = tuning_table(review, wanted_by(limits))
        yield f"tuning review of {table.heading}, {review.form} form"
        heads = "".join(f"{head:>16}" for head in table.heads)
        yield f"{'':37}{heads}{'gain margin':>13}{'phase, deg':>12}{'Ms':>7}{'rad/s':>14}"
        for row in table.rows:
            settings = "".join(f"{cell:>16}" for cell in row.settings)
            yield (
                f"{row.rule:37}{settings}{row.gain_margin:>13}{row.phase_margin:>12}{row.max_sensitivity:>7}"
                f"{row.crossover:>14}{f'  {row.remark}' if row.remark else ''}"
            )
        yield from table.not_applied
        yield from table.basis
        yield ""
        sources |= dict.fromkeys(table.sources)
    if sources:
        yield legend(wanted_by(limits))
        yield "sources of the rules:"
        yield from (f"  {source}" for source in sources)
        yield ""
