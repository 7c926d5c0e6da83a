"""Response plots: for each scheme the margins of its loops and how it answers the standard upsets."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import numpy as np

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.narrative import Supplement
from loopdoc.documents.page_fit import foot
from loopdoc.documents.plots import Curve, Drawing, Limit, Panel, to_svg
from loopdoc.documents.values import DASH, shown
from loopdoc.documents.view import Figure
from loopdoc.documents.wording import listed, sentences
from loopdoc.engineering.comparison import UPSET_PCT, Comparison, NotSimulated, ScenarioResponses
from loopdoc.engineering.dynamics import ChainDynamics
from loopdoc.engineering.pairing import Scheme
from loopdoc.engineering.process import FloatArray
from loopdoc.engineering.simulation import Response
from loopdoc.engineering.stages import measured_range
from loopdoc.register.model import known
from loopdoc.register.quantity import Range, display_number
from loopdoc.register.units import unit

ALARM_NAMES = {"high_high": "HH", "high": "H", "low": "L", "low_low": "LL"}
COLUMNS = 4
"""Upsets side by side in a figure."""
TIME_UNITS = ((7200.0, 3600.0, "h"), (600.0, 60.0, "min"), (0.0, 1.0, "s"))
"""From this duration on [s], divide by this and write that."""


def responses(basis: Basis) -> Iterator[Page]:
    """One document for each scheme of which a loop's dynamics follow from the register."""
    for scheme in basis.plant.schemes:
        chains = _chains(basis, scheme)
        if chains:
            yield _page(basis, scheme, chains)


def supplements(basis: Basis) -> dict[str, Supplement]:
    """For the narrative, by the lead of each scheme: what its cascades gain, and how it answers upsets."""
    found = {}
    for scheme in basis.plant.schemes:
        all_chains = [basis.comparison(chain) for chain in _chains(basis, scheme)]
        compared = [comparison for comparison in all_chains if isinstance(comparison, Comparison)]
        if compared:
            found[scheme.lead.tag] = Supplement(
                " ".join(sentence for comparison in compared if (sentence := benefit(comparison))),
                tuple(Figure(basis.drawn(found.dynamics, _svg), caption(found)) for found in compared),
            )
    return found


def _chains(basis: Basis, scheme: Scheme) -> list[ChainDynamics]:
    """The chains of a scheme from the outermost loops whose dynamics are known."""
    dynamics, plant = basis.dynamics, basis.plant
    return [
        chain
        for loop in scheme.loops
        if not any(dynamics.loop(primary.tag).chains for primary in plant.primaries_of(loop.tag))
        for chain in dynamics.loop(loop.tag).chains
    ]


def benefit(comparison: Comparison) -> str:
    """What a cascade gains on an upset at its innermost loop, in a sentence; empty where nothing is compared."""
    entry = next((entry for entry in comparison.scenarios if entry.scenario.disturbances), None)
    if comparison.single is None or entry is None or entry.single is None:
        return ""
    lead = comparison.dynamics.chain.lead
    own = measured_range(lead)
    unit = difference_unit(own)
    peaks = [abs(found.metrics.peak_pct) * own.span / 100.0 for found in (entry.single, entry.tuned)]
    ratio = entry.ratio("iae_pct_s")
    integral = ""
    if ratio is not None and ratio < 1:
        integral = f" The integral of the absolute error is {display_number(100.0 * ratio, 2)} % of the single loop's."
    upset = upset_name(comparison, entry)
    return (
        f"With the cascade, {upset[0].lower()}{upset[1:]} moves {lead.tag} by {_with_unit(peaks[1], unit)} at most; a "
        f"single loop on {comparison.dynamics.chain.final_element.tag}, tuned by SIMC to the same Ms, would let it "
        f"move by {_with_unit(peaks[0], unit)}.{integral}"
    )


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
    view = {"sections": [section(basis, chain, several=len(chains) > 1) for chain in chains], "foot": foot(document)}
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
        "margins": margin_rows(dynamics),
        "sampled": sampled_note(dynamics),
        "speed_ratio": number(dynamics.speed_ratio) if dynamics.speed_ratio is not None else "",
        "not_simulated": compared.reason if isinstance(compared, NotSimulated) else "",
        "unit": difference_unit(measured_range(chain.lead)),
        "rows": metric_rows(comparison) if comparison else [],
        "single": comparison is not None and comparison.single is not None,
        "figure": basis.drawn(dynamics, _svg),
        "caption": caption(comparison) if comparison else "",
    }


def margin_rows(dynamics: ChainDynamics) -> list[dict[str, str]]:
    """Margins level by level, outermost first."""
    return [
        {
            "tag": level.loop.tag,
            "gain_margin": number(margins.gain_margin),
            "phase_margin": f"{number(margins.phase_margin_deg)}°",
            "max_sensitivity": number(margins.max_sensitivity),
            "crossover": _with_unit(margins.crossover_rad_per_s, "rad/s"),
            "period": _duration(2 * math.pi / margins.crossover_rad_per_s),
            "model": shown(known(level.loop.loop.process).source) if known(level.loop.loop.process) else DASH,  # type: ignore[union-attr]
        }
        for level, margins in zip(reversed(dynamics.chain.levels), reversed(dynamics.margins), strict=True)
    ]


def sampled_note(dynamics: ChainDynamics) -> str:
    """Which margins are those of the sampled loop, and which gain margin would need it; empty where none."""
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
    if sampled:
        told.insert(
            0,
            f"Above a quarter of the sampling frequency that no longer holds: the margins of {listed(sampled)} are "
            "those of the sampled loop",
        )
    return sentences(*told)


def metric_rows(comparison: Comparison) -> list[dict[str, str]]:
    """Peak, error integral, settling and valve travel under each upset, with the single loop beside them."""
    own = measured_range(comparison.dynamics.chain.lead)
    return [
        {
            "upset": upset_name(comparison, entry),
            "peak": _eu(entry.tuned.metrics.peak_pct, own),
            "iae": _eu(entry.tuned.metrics.iae_pct_s / 60.0, own),
            "settling": _duration(entry.tuned.metrics.settling_s),
            "travel": f"{number(entry.tuned.metrics.valve_travel_pct)} %",
            "single_peak": _eu(entry.single.metrics.peak_pct, own) if entry.single else DASH,
            "single_iae": _eu(entry.single.metrics.iae_pct_s / 60.0, own) if entry.single else DASH,
            "single_settling": _duration(entry.single.metrics.settling_s) if entry.single else DASH,
            "iae_ratio": number(ratio) if (ratio := entry.ratio("iae_pct_s")) is not None else DASH,
        }
        for entry in comparison.scenarios
    ]


def upset_name(comparison: Comparison, entry: ScenarioResponses) -> str:
    """What upsets the loop, with its size in engineering units."""
    levels = comparison.dynamics.chain.levels
    if entry.scenario.setpoint_step_pct:
        lead = comparison.dynamics.chain.lead
        return f"Setpoint of {lead.tag} up by {_step(entry.scenario.setpoint_step_pct, measured_range(lead))}"
    moved = entry.scenario.disturbances[0]
    loop = levels[moved.level].loop
    if moved.path is not None:
        return f"{entry.scenario.name[:1].upper()}{entry.scenario.name[1:]}, declared at {loop.tag}"
    size = _step(moved.size_pct, measured_range(loop))
    integrating = known(loop.loop.process).integrating if known(loop.loop.process) else False  # type: ignore[union-attr]
    return f"An upset of {size} at {loop.tag}" + (" at its process input" if integrating else "")


def figure(comparison: Comparison) -> Drawing:
    """Above, the outermost measurement in engineering units; below, the final element; a column for each upset."""
    chain = comparison.dynamics.chain
    lead = chain.lead
    own = measured_range(lead)
    alarms = tuple(
        Limit(f"{ALARM_NAMES[kind]} {shown(limit)}", limit.to(own.unit.symbol))
        for kind, alarm in lead.loop.alarms.items()
        if kind in ALARM_NAMES and (limit := known(alarm.limit)) is not None
    )
    above: list[Panel] = []
    below: list[Panel] = []
    for entry in _drawn(comparison):
        last = float(entry.tuned.time_s[-1])
        _, divisor, time_unit = next(unit for unit in TIME_UNITS if last >= unit[0])
        shown_names = ("cascade", "single loop") if entry.single else ("as tuned", "")
        curves = [Curve("setpoint", "dotted", *_xy(entry.tuned, _setpoint(entry.tuned, own), divisor))]
        valves = []
        for name, style, response in (
            (shown_names[0], "solid", entry.tuned),
            (shown_names[1], "dashed", entry.single),
        ):
            if response is not None:
                curves.append(
                    Curve(name, style, *_xy(response, _eu_curve(response.measurement_pct[-1], own), divisor))
                )
                valves.append(Curve(name, style, *_xy(response, response.travel_pct, divisor)))
        ordinate = f"{lead.tag}, {own.unit.display}" if not above else ""
        above.append(Panel(_short_name(comparison, entry), "", ordinate, tuple(curves), alarms))
        below.append(
            Panel("", f"time, {time_unit}", f"{chain.final_element.tag}, %" if not below else "", tuple(valves))
        )
    return Drawing(f"Time responses of {lead.tag} with {chain.final_element.tag}", (tuple(above), tuple(below)))


def _drawn(comparison: Comparison) -> list[ScenarioResponses]:
    """The upsets that a figure has room for: the setpoint step, then those that the register declares."""
    step, *others = comparison.scenarios
    declared = [entry for entry in others if entry.scenario.disturbances[0].path is not None]
    return [step, *declared, *(entry for entry in others if entry not in declared)][:COLUMNS]


def _svg(comparison: Comparison) -> str:
    return to_svg(figure(comparison))


def caption(comparison: Comparison) -> str:
    """What is shown and under which assumptions."""
    chain = comparison.dynamics.chain
    stroke = known(chain.final_element.stroke_time)
    parts = [
        f"Response of {chain.lead.tag} to a step of {number(UPSET_PCT)} % of span in its setpoint and, through the lag "
        f"of the process concerned, at each measurement.",
        "Upsets that the register declares come with their own size and lag."
        if any(entry.scenario.disturbances and entry.scenario.disturbances[0].path for entry in comparison.scenarios)
        else "",
        "Linear models about the normal values, simulated scan by scan as executed, with output limits"
        + (f" and a stroke time of {shown(stroke)}" if stroke else "")
        + "; every measurement starts at its normal value and the final element in the middle of its output limits.",
    ]
    if comparison.single is not None:
        settings = comparison.single.settings
        parts.append(
            f"Single loop: one controller on {chain.final_element.tag} in place of the cascade, tuned by SIMC "
            f"to the same maximum sensitivity, Ms {number(comparison.single.max_sensitivity)} "
            f"(gain {number(abs(settings.gain))}, reset {_duration(settings.reset_s)})."
        )
    elif len(chain.levels) > 1:
        parts.append(
            "No single loop on the same final element reaches the same maximum sensitivity by SIMC; none is drawn."
        )
    return " ".join(part for part in parts if part)


def number(value: float | None) -> str:
    """A calculated number to three digits; a dash where there is none."""
    return DASH if value is None or math.isnan(value) else display_number(value, 3)


def _short_name(comparison: Comparison, entry: ScenarioResponses) -> str:
    if entry.scenario.setpoint_step_pct:
        return "Setpoint step"
    if entry.scenario.disturbances[0].path is not None:
        return f"{entry.scenario.name[:1].upper()}{entry.scenario.name[1:]}"
    return f"Upset at {comparison.dynamics.chain.levels[entry.scenario.disturbances[0].level].loop.tag}"


def _setpoint(response: Response, own: Range) -> FloatArray:
    setpoint = response.setpoint_pct[-1]
    assert setpoint is not None
    return _eu_curve(setpoint, own)


def _eu_curve(percent: FloatArray, own: Range) -> FloatArray:
    return own.low + percent * own.span / 100.0


def _xy(response: Response, values: FloatArray, divisor: float) -> tuple[FloatArray, FloatArray]:
    return np.asarray(response.time_s / divisor), values


def _eu(percent: float, own: Range) -> str:
    return number(percent * own.span / 100.0)


def _step(percent: float, own: Range) -> str:
    return _with_unit(percent * own.span / 100.0, difference_unit(own))


def difference_unit(own: Range) -> str:
    """The unit in which a change of a measurement is printed: kelvin for degrees Celsius, bar for bar gauge."""
    symbol = own.unit.symbol
    if symbol == "degC":
        return "K"
    if own.unit.kind in ("gauge pressure", "absolute pressure"):
        return unit(symbol[:-1]).display
    return own.unit.display



def _with_unit(value: float, unit: str) -> str:
    return DASH if math.isnan(value) else f"{number(value)}\u00a0{unit}"


def _duration(seconds: float) -> str:
    """A time in the unit an operator would say it in."""
    if math.isnan(seconds):
        return DASH
    if math.isinf(seconds):
        return "not within the time shown"
    _, divisor, unit = next(unit for unit in TIME_UNITS if seconds >= unit[0])
    return _with_unit(seconds / divisor, unit)
