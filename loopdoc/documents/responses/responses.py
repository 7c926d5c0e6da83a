"""Response plots: for each scheme the margins of its loops and how it answers the standard upsets."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from functools import partial
from itertools import pairwise
from typing import Any

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.magnitudes import difference_unit, duration, number, with_unit
from loopdoc.documents.narrative.narrative import Supplement
from loopdoc.documents.page_fit import foot
from loopdoc.documents.plots import to_svg
from loopdoc.documents.responses.frequency_plot import frequency_caption, frequency_drawing
from loopdoc.documents.responses.override_story import (
    override_caption,
    override_figure,
    override_section,
    override_told,
)
from loopdoc.documents.responses.response_figure import caption, figure, whole_caption
from loopdoc.documents.responses.split_range_story import split_caption, split_figure, split_section, split_told
from loopdoc.documents.responses.upset_story import declared_upsets, single_loop_assumption, told_of, upset_name
from loopdoc.documents.values import DASH, shown
from loopdoc.documents.view import Figure
from loopdoc.documents.wording import listed, sentences
from loopdoc.engineering.comparison import Comparison, NotSimulated, ScenarioResponses, input_moves
from loopdoc.engineering.dynamics import ChainDynamics
from loopdoc.engineering.frequency import speed_ratio
from loopdoc.engineering.override import Override
from loopdoc.engineering.pairing import Scheme
from loopdoc.engineering.setpoint_steps import steps_told
from loopdoc.engineering.simulation import Response
from loopdoc.engineering.split_range import SplitRange
from loopdoc.engineering.stages import measured_range
from loopdoc.engineering.tuning_review import NotReviewed, TuningReview, review
from loopdoc.engineering.tuning_table import (
    CAUTION,
    Wanted,
    legend,
    quoted_gain_margin,
    quoted_phase_margin,
    several_crossovers,
    tuning_table,
)
from loopdoc.register.model import known
from loopdoc.register.quantity import Range
from loopdoc.rules.policy import limits_from


def responses(basis: Basis) -> Iterator[Page]:
    """One document for each scheme of which a loop's dynamics follow from the register."""
    for scheme in basis.plant.schemes:
        chains = scheme_chains(basis, scheme)
        if chains:
            yield _page(basis, scheme, chains)


def supplements(basis: Basis) -> dict[str, Supplement]:
    """For the narrative, by the lead of each scheme: what its cascades gain, and how it answers upsets."""
    found = {}
    for scheme in basis.plant.schemes:
        chains, language = scheme_chains(basis, scheme), basis.language
        splits, rivals = split_ranges(basis, chains), overrides(basis, scheme)
        whole = {dynamics for split in splits for dynamics in split.chains}
        all_chains = [basis.comparison(chain) for chain in chains]
        compared = [comparison for comparison in all_chains if isinstance(comparison, Comparison)]
        # Of a split range the whole is told, which its branches are parts of.
        alone = [one for one in compared if one.dynamics not in whole]
        if compared:
            branches = [one for one in compared if one.dynamics in whole]
            found[scheme.lead.tag] = Supplement(
                partial(_benefit, alone, splits, branches, rivals),
                (
                    *(Figure(_drawn(basis, one.dynamics, language), whole_caption(one, language)) for one in alone),
                    *(Figure(_drawn_split(basis, one, language), split_caption(one, language)) for one in splits),
                    *(Figure(_drawn_override(basis, one, language), override_caption(one, language)) for one in rivals),
                ),
            )
    return found


def _benefit(
    alone: Sequence[Comparison],
    splits: Sequence[SplitRange],
    branches: Sequence[Comparison],
    rivals: Sequence[Override],
    language: Language,
) -> str:
    """What is told of the responses of a scheme: its chains, its split ranges and their upsets, its overrides."""
    told = [sentence for comparison in alone for sentence in told_of(comparison, language)]
    told += [split_told(split, language) for split in splits]
    # A disturbance stands on every branch alike, and is told once.
    told += dict.fromkeys(declared_upsets(one.dynamics, one, language) for one in branches)
    told += [override_told(found, language) for found in rivals]
    return " ".join(filter(None, told))


def _drawn(basis: Basis, dynamics: ChainDynamics, language: Language = ENGLISH) -> str:
    return basis.drawn(dynamics, lambda comparison: to_svg(figure(basis.plant, comparison, language)), language)


def _drawn_split(basis: Basis, split: SplitRange, language: Language = ENGLISH) -> str:
    return basis.drawn_whole(split, lambda one: to_svg(split_figure(basis.plant, one, language)), language)


def _drawn_override(basis: Basis, found: Override, language: Language = ENGLISH) -> str:
    return basis.drawn_whole(found, lambda one: to_svg(override_figure(basis.plant, one, language)), language)


def split_ranges(basis: Basis, chains: Sequence[ChainDynamics]) -> list[SplitRange]:
    """The split ranges among the chains of a scheme, each as a whole, where they can be simulated."""
    leads = dict.fromkeys(dynamics.chain.lead.tag for dynamics in chains)
    wholes = (basis.split_range(tag) for tag in leads)
    return [whole for whole in wholes if isinstance(whole, SplitRange)]


def overrides(basis: Basis, scheme: Scheme) -> list[Override]:
    """The overrides of a scheme, each as a whole, where they can be simulated."""
    found = {
        whole.function.tag: whole
        for loop in scheme.loops
        if isinstance(whole := basis.override(loop.tag), Override)
    }
    return list(found.values())


def _not_whole(basis: Basis, scheme: Scheme) -> list[str]:
    """Why a split range or an override of a scheme is not simulated as a whole, in sentences."""
    wholes = [whole for loop in scheme.loops for whole in (basis.split_range(loop.tag), basis.override(loop.tag))]
    reasons = dict.fromkeys(whole.reason for whole in wholes if isinstance(whole, NotSimulated))
    return [sentences(f"No response is drawn of the whole: {reason}") for reason in reasons]


def scheme_chains(basis: Basis, scheme: Scheme) -> list[ChainDynamics]:
    """The chains of a scheme from the outermost loops whose dynamics are known."""
    dynamics, plant = basis.dynamics, basis.plant
    return [
        chain
        for loop in scheme.loops
        if not any(dynamics.loop(primary.tag).chains for primary in plant.primaries_of(loop.tag))
        for chain in dynamics.loop(loop.tag).chains
    ]


def _page(basis: Basis, scheme: Scheme, chains: list[ChainDynamics]) -> Page:
    lead = scheme.lead
    register = basis.plant.register
    unit = known(lead.unit) or "00"
    match = register.tag_pattern.fullmatch(lead.tag) if register.tag_pattern else None
    serial = f"{match['serial']}{match.groupdict().get('suffix') or ''}" if match else lead.tag
    name = register.units[unit].name if unit in register.units else None
    document = basis.document(
        kind="Response plots",
        code="RP",
        title=f"{lead.tag} {shown(lead.service)}",
        supplementary_title=f"Unit {unit} {shown(name)}",
        unit=unit,
        serial=f"{match['letters']}{serial}" if match else serial,
    )
    view = {
        "sections": [section(basis, chain, several=len(chains) > 1) for chain in chains],
        "splits": [split_section(split, _drawn_split(basis, split)) for split in split_ranges(basis, chains)],
        "overrides": [override_section(one, _drawn_override(basis, one)) for one in overrides(basis, scheme)],
        "not_whole": _not_whole(basis, scheme),
        **review_section(basis, scheme),
        "foot": foot(document),
    }
    return Page("responses", lead.tag, document, "responses.html", view)


def section(basis: Basis, dynamics: ChainDynamics, *, several: bool) -> dict[str, Any]:
    """View of one chain: heading, margins, comparison, figure and the assumptions beside them."""
    chain = dynamics.chain
    path = [level.loop.tag for level in reversed(chain.levels)] + [chain.final_element.tag]
    compared = basis.comparison(dynamics)
    comparison = compared if isinstance(compared, Comparison) else None
    return {
        "heading": f"From {path[0]} to {path[-1]}" if several else "",
        "path": " → ".join(path),
        "element": path[-1],
        "margins": margin_rows(dynamics),
        "sampled": sampled_note(dynamics),
        "speed_ratios": speed_ratios(dynamics),
        "not_simulated": compared.reason if isinstance(compared, NotSimulated) else "",
        "unit": difference_unit(measured_range(chain.lead)),
        "rows": metric_rows(comparison) if comparison else [],
        "at_limit": at_limit_note(comparison) if comparison else "",
        "movements": movement_rows(comparison) if comparison else [],
        "single": comparison is not None and comparison.single is not None,
        "figure": _drawn(basis, dynamics),
        "caption": caption(comparison) if comparison else "",
        "declared": declared_upsets(dynamics, compared),
        "stepped": " ".join(steps_told(dynamics)) if comparison else "",
        "held": held_note(dynamics) if comparison else "",
        "assumption": single_loop_assumption(comparison) if comparison else "",
        "frequency_figure": to_svg(frequency_drawing(dynamics)),
        "frequency_caption": frequency_caption(dynamics),
    }


def review_section(basis: Basis, scheme: Scheme) -> dict[str, Any]:
    """View of the tuning review: a table for each loop of a scheme (each branch of a split range), or why none."""
    limits = limits_from(basis.plant.register.policy)
    wanted = Wanted(limits.gain_margin, limits.phase_margin, limits.max_sensitivity)
    reviews = [
        found
        for loop in scheme.loops
        if loop.tag in basis.plant.controlled
        for found in review(basis.dynamics.loop(loop.tag))
    ]
    tables = [(found.form, tuning_table(found, wanted)) for found in reviews if isinstance(found, TuningReview)]
    return {
        "reviews": [{"form": form, "table": table} for form, table in tables],
        "not_reviewed": [
            {"tag": found.tag, "reason": found.reason} for found in reviews if isinstance(found, NotReviewed)
        ],
        "review_sources": list(dict.fromkeys(source for _, table in tables for source in table.sources)),
        "review_policy": legend(wanted),
        "review_caution": CAUTION,
    }


def margin_rows(dynamics: ChainDynamics) -> list[dict[str, str]]:
    """Margins level by level, outermost first."""
    return [
        {
            "tag": level.loop.tag,
            "gain_margin": quoted_gain_margin(margins),
            "phase_margin": quoted_phase_margin(margins) + ("°" if math.isfinite(margins.phase_margin_deg) else ""),
            "max_sensitivity": number(margins.max_sensitivity),
            "max_complementary": number(margins.max_complementary_sensitivity),
            "crossover": with_unit(margins.crossover_rad_per_s, "rad/s"),
            "bandwidth": "none"
            if math.isinf(margins.bandwidth_rad_per_s)
            else with_unit(margins.bandwidth_rad_per_s, "rad/s"),
            "period": duration(2 * math.pi / margins.crossover_rad_per_s),
            "model": shown(known(level.loop.loop.process).source) if known(level.loop.loop.process) else DASH,  # type: ignore[union-attr]
        }
        for level, margins in zip(reversed(dynamics.chain.levels), reversed(dynamics.margins), strict=True)
    ]


def speed_ratios(dynamics: ChainDynamics) -> str:
    """How much faster each secondary is than its primary, the innermost first; empty for a single loop."""
    levels = list(zip(dynamics.chain.levels, dynamics.margins, strict=True))
    return listed(
        [
            f"{below.loop.tag} over {above.loop.tag} {number(speed_ratio(fast, slow))}"
            for (below, fast), (above, slow) in pairwise(levels)
        ]
    )


def sampled_note(dynamics: ChainDynamics) -> str:
    """Which margins are those of the sampled loop, which would need it, and where the gain crosses 1 more than once."""
    levels = [
        (level.loop.tag, margins)
        for level, margins in zip(reversed(dynamics.chain.levels), reversed(dynamics.margins), strict=True)
    ]
    sampled = [tag for tag, margins in levels if margins.sampled]
    told = [
        f"The gain margin of {tag} would need the sampled loop: {margins.not_quoted}"
        for tag, margins in levels
        if margins.not_quoted
    ]
    told.extend(several_crossovers(dynamics))
    if sampled:
        told.insert(
            0,
            f"Above a quarter of the sampling frequency that no longer holds: the margins of {listed(sampled)} are "
            "those of the sampled loop",
        )
    return sentences(*told)


def metric_rows(comparison: Comparison) -> list[dict[str, str]]:
    """Peak, error integral and settling under each upset, with the single loop beside them."""
    own = measured_range(comparison.dynamics.chain.lead)
    return [
        {
            "upset": name,
            "peak": _eu(ours.metrics.peak_pct, own),
            "iae": _eu(ours.metrics.iae_pct_s / 60.0, own),
            "settling": duration(ours.metrics.settling_s),
            "single_peak": _eu(single.metrics.peak_pct, own) if single else DASH,
            "single_iae": _eu(single.metrics.iae_pct_s / 60.0, own) if single else DASH,
            "single_settling": duration(single.metrics.settling_s) if single else DASH,
            "peak_ratio": number(entry.ratio("peak_pct")) if single else DASH,
            "iae_ratio": number(entry.ratio("iae_pct_s")) if single else DASH,
            "settling_ratio": number(entry.ratio("settling_s")) if single else DASH,
        }
        for entry, name, ours, single in _rows(comparison)
    ]


def _rows(comparison: Comparison) -> Iterator[tuple[ScenarioResponses, str, Response, Response | None]]:
    """Each upset with its name and the responses that stand side by side.

    With feedforward there is a row without, which the single loop stands beside: it has none either.
    """
    for entry in comparison.scenarios:
        name, unaided = upset_name(comparison, entry), entry.without_feedforward
        if unaided is None:
            yield entry, name, entry.tuned, entry.single
        else:
            yield entry, name, entry.tuned, None
            yield entry, "The same without feedforward", unaided, entry.single


def held_note(dynamics: ChainDynamics) -> str:
    """What enters functions on the way besides the loops themselves, and what moves it; empty where nothing does."""
    inputs = input_moves(dynamics.chain)
    still = [
        f"{one.tag} into {one.function}" + (f" ({one.reason})" if one.reason else "")
        for one in inputs
        if not one.moved_by
    ]
    return sentences(
        f"What functions take in besides stays as it is in the responses over time: {listed(still)}" if still else "",
        *(
            f"{one.tag} into {one.function} moves in the responses over time under {listed(one.moved_by)}, and stays "
            "as it is under every other upset"
            for one in inputs
            if one.moved_by
        ),
    )


def at_limit_note(comparison: Comparison) -> str:
    """Which upsets are more than the final element can make good, so that an offset stays; empty where none is."""
    element = comparison.dynamics.chain.final_element.tag
    return sentences(
        *(
            f"{upset_name(comparison, entry)} does not settle: the output of {tag} stands at its limit, with {element} "
            f"at {number(travel_pct)}\u00a0%; from the middle of its limits that is more than it can make good"
            for entry, tag, travel_pct in comparison.at_limit
        )
    )


def movement_rows(comparison: Comparison) -> list[dict[str, Any]]:
    """How each upset is answered on the way: time to peak, overshoot, valve travel and its reversals.

    A list of cells for the loop or cascade as tuned, and one for the single loop beside it.
    """
    return [
        {
            "upset": name,
            "cells": [
                cell
                for response in (ours, *((single,) if comparison.single else ()))
                for cell in (_movements(entry, response) if response else (DASH,) * 4)
            ],
        }
        for entry, name, ours, single in _rows(comparison)
    ]


def _movements(entry: ScenarioResponses, response: Response) -> tuple[str, ...]:
    return (
        duration(entry.peak_time_s(response)),
        f"{number(response.metrics.overshoot_pct)} %",
        f"{number(response.metrics.valve_travel_pct)} %",
        str(response.metrics.reversals),
    )


def _eu(percent: float, own: Range) -> str:
    return number(percent * own.span / 100.0)
