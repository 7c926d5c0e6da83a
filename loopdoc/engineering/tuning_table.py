"""A tuning review in words and printed numbers, for every form in which it is shown."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

from loopdoc.engineering.dynamics import ChainDynamics
from loopdoc.engineering.frequency import Margins
from loopdoc.engineering.pid import proportional_band_from_gain, repeats_from_reset
from loopdoc.engineering.process import Process
from loopdoc.engineering.tuning_review import (
    FormSettings,
    NotApplicable,
    RuleSettings,
    TuningReview,
    closed_loop_times,
)
from loopdoc.register import model
from loopdoc.register.model import known
from loopdoc.register.quantity import Quantity, display_number
from loopdoc.register.units import convert, unit

CAUTION = "Margins decide, rules advise. Try tuning changes only under supervision."
NO_ACTION = "none"


@dataclass(frozen=True, slots=True)
class Wanted:
    """The least robustness that the policy of a register asks for."""

    gain_margin: float
    """[dimensionless]"""
    phase_margin_deg: float
    """[deg]"""
    max_sensitivity: float
    """Largest Ms [dimensionless]."""


@dataclass(frozen=True, slots=True)
class TableRow:
    """One rule: its settings as the register writes them, and the margins they give."""

    rule: str
    settings: tuple[str, str, str]
    gain_margin: str
    phase_margin: str
    max_sensitivity: str
    crossover: str
    remark: str
    """not stable, or which margins are outside the policy (see `legend`); empty where there is nothing to say."""


@dataclass(frozen=True, slots=True)
class TuningTable:
    """The review of one loop as a table with what belongs around it."""

    heading: str
    heads: tuple[str, str, str]
    """Of the three settings, with their units."""
    rows: tuple[TableRow, ...]
    """The settings as configured first."""
    not_applied: tuple[str, ...]
    """Rules that say nothing for this loop, with the reason; a sentence each."""
    basis: tuple[str, ...]
    """What the rules and the margins rest on, in sentences."""
    sources: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class SettingUnits:
    """How a register writes the settings of one controller."""

    as_band: bool
    """True where it writes a proportional band for the gain."""
    as_repeats: bool
    """True where it writes repeats for the reset."""
    reset: str
    """Symbol of the unit of reset, or of repeats."""
    rate: str
    """Symbol of the unit of rate."""

    def values(self, settings: FormSettings) -> tuple[float, float | None, float]:
        """Gain or band, reset or repeats (None without integral action), rate, in these units."""
        gain = proportional_band_from_gain(settings.gain) if self.as_band else settings.gain
        reset: float | None = None
        if math.isfinite(settings.reset_s):
            reset = (
                convert(repeats_from_reset(settings.reset_s), unit("1/s"), self.reset)
                if self.as_repeats
                else convert(settings.reset_s, unit("s"), self.reset)
            )
        return gain, reset, convert(settings.rate_s, unit("s"), self.rate)


def setting_units(written: model.Controller, configured: FormSettings) -> SettingUnits:
    """The units of a controller's settings as the register has them; where it gives none, by their size."""
    reset, repeats, rate = known(written.reset), known(written.repeats), known(written.rate)
    by_size = "min" if math.isfinite(configured.reset_s) and configured.reset_s >= 100.0 else "s"
    time = reset.unit.symbol if reset else by_size
    if reset is None and repeats is not None:
        time = repeats.unit.symbol.partition("/")[2]
    as_repeats = reset is None and repeats is not None
    return SettingUnits(
        as_band=known(written.gain) is None and known(written.proportional_band) is not None,
        as_repeats=as_repeats,
        reset=repeats.unit.symbol if as_repeats and repeats else time,
        rate=rate.unit.symbol if rate and rate.value else time,
    )


def tuning_table(review: TuningReview, wanted: Wanted) -> TuningTable:
    """The review of one loop, ready to be placed."""
    written = review.dynamics.chain.lead.controller
    units = setting_units(written, review.configured.settings)
    element = review.dynamics.chain.final_element.tag
    applied = [rule for rule in review.rules if isinstance(rule, RuleSettings)]
    return TuningTable(
        heading=f"{review.tag} with {element}" if review.branches > 1 else review.tag,
        heads=_heads(units, review.form),
        rows=tuple(_row(entry, units, wanted) for entry in (review.configured, *applied)),
        not_applied=tuple(_not_applied(review)),
        basis=tuple(_basis(review)),
        sources=tuple(_sources(applied)),
    )


def _heads(units: SettingUnits, form: str) -> tuple[str, str, str]:
    gain = "Band, %" if units.as_band else "Gain, % per %"
    reset, rate = ("Repeats", "Rate") if units.as_repeats else ("Reset", "Rate")
    if form == "parallel":
        gain = gain.replace("Gain", "Gain Kp")
        reset, rate = ("Ki" if units.as_repeats else "Reset 1/Ki"), "Rate Kd"
    return gain, f"{reset}, {unit(units.reset).display}", f"{rate}, {unit(units.rate).display}"


def _row(entry: RuleSettings, units: SettingUnits, wanted: Wanted) -> TableRow:
    gain, reset, rate = units.values(entry.settings)
    margins = entry.margins
    return TableRow(
        rule=entry.rule,
        settings=(_shown(gain), NO_ACTION if reset is None else _shown(reset), _shown(rate) if rate else NO_ACTION),
        gain_margin=quoted_gain_margin(margins),
        phase_margin=quoted_phase_margin(margins),
        max_sensitivity=_shown(margins.max_sensitivity),
        crossover="none" if math.isnan(margins.crossover_rad_per_s) else _shown(margins.crossover_rad_per_s),
        remark=remark(margins, wanted),
    )


def quoted_gain_margin(margins: Margins) -> str:
    """A gain margin; none where no gain brings an unstable loop to its limit, not quoted for want of a sampled one."""
    if math.isnan(margins.gain_margin):
        return "not quoted" if margins.not_quoted else "none"
    return _shown(margins.gain_margin)


def quoted_phase_margin(margins: Margins) -> str:
    """A phase margin in degrees, or that there is none: the gain never crosses 1."""
    return "none" if math.isinf(margins.phase_margin_deg) else _shown(margins.phase_margin_deg)


def several_crossovers(dynamics: ChainDynamics) -> Iterator[str]:
    """For each loop whose gain crosses 1 more than once, outermost first, which crossover is told; a sentence each."""
    for level, margins in zip(reversed(dynamics.chain.levels), reversed(dynamics.margins), strict=True):
        if margins.crossovers > 1:
            yield (
                f"The gain of {level.loop.tag} crosses 1 at {margins.crossovers} frequencies: the crossover told is "
                "the highest of them, the phase margin the least of them all."
            )


def remark(margins: Margins, wanted: Wanted) -> str:
    """What speaks against settings with these margins."""
    if not margins.stable:
        return "not stable"
    low = [
        name
        for name, is_low in (
            ("GM", margins.gain_margin < wanted.gain_margin),
            ("PM", margins.phase_margin_deg < wanted.phase_margin_deg),
            ("Ms", margins.max_sensitivity > wanted.max_sensitivity),
        )
        if is_low
    ]
    return f"outside: {', '.join(low)}" if low else ""


def legend(wanted: Wanted) -> str:
    """What `remark` means by outside, in a sentence."""
    return (
        f"Outside the policy: a gain margin (GM) below {_shown(wanted.gain_margin)}, a phase margin (PM) below "
        f"{_shown(wanted.phase_margin_deg)}°, a maximum sensitivity Ms above\N{NO-BREAK SPACE}"
        f"{_shown(wanted.max_sensitivity)}."
    )


def _not_applied(review: TuningReview) -> Iterator[str]:
    by_reason: dict[str, list[str]] = {}
    for rule in review.rules:
        if isinstance(rule, NotApplicable):
            by_reason.setdefault(rule.reason, []).append(rule.rule)
    for reason, rules in by_reason.items():
        # The name of a rule may hold a comma.
        yield f"{'; '.join(rules)}: not applied, {reason}."


def _basis(review: TuningReview) -> Iterator[str]:
    yield from _models(review)
    simc_s, lambda_s = closed_loop_times(review.seen.first)
    if simc_s > 0.0:
        yield f"Closed-loop time asked for: {_time(simc_s)} by SIMC, {_time(lambda_s)} by lambda and IMC."
    if review.action_contradicts:
        yield (
            "The action as configured contradicts the process; the margins of the rules are those with the other "
            "action."
        )
    if review.branches > 1:
        yield (
            f"The rules start from the process with {review.dynamics.chain.final_element.tag}; the one controller "
            "moves every branch of the split range, and the margins are those of the worst."
        )
    rules = [rule for rule in review.rules if isinstance(rule, RuleSettings)]
    if any(rule.margins.sampled for rule in (review.configured, *rules)):
        yield (
            "Where a gain margin lies above a quarter of the sampling frequency, the margins are those of the loop as "
            "it is sampled."
        )
    loop = review.dynamics.chain.lead.loop
    measurement = known(loop.measurement)
    variable = known(measurement.variable) if measurement else None
    if variable == "level" and review.seen.first.integrating:
        yield (
            "Each rule holds the level tight; a level that is meant to take up swings (averaging control) is tuned "
            "far more slowly than any of them says."
        )
    if variable == "flow":
        yield "Rate on a flow acts mostly on the noise of its measurement."
    modes = known(review.dynamics.chain.lead.controller.modes)
    if modes is not None and known(modes.normal) == "cascade":
        yield "A change here changes what the loop above sees: look at that loop's margins again before making it."


def _models(review: TuningReview) -> Iterator[str]:
    """What the rules are given for the process, by which method, and how far it is from the exact response."""
    seen, chain = review.seen, review.dynamics.chain
    first = seen.first
    at = _time(2.0 * math.pi / seen.matched_rad_per_s) if math.isfinite(seen.matched_rad_per_s) else ""
    where = f"at the period of {at}" if at else ""
    if len(chain.levels) > 1:
        below = chain.levels[-2].loop.tag
        stands = _joined_times(("lag", seen.below_lag_s), ("dead time", seen.below_dead_time_s))
        yield (
            f"The closed loop of {below} is taken as {stands}, equal to it in magnitude and phase {where}, where "
            "the phase of all together reaches −180°."
            if not isinstance(seen.ultimate, NotApplicable)
            else f"The closed loop of {below} is taken as {stands}, equal to it in magnitude and phase {where}."
        )
    model_text = (
        f"slope {_slope(first.gain)} per %, dead time {_time(first.dead_time_s)}"
        if first.integrating
        else f"gain {_shown(first.gain)} % per %, lag {_time(first.lag_s)}, dead time {_time(first.dead_time_s)}"
    )
    process = chain.stages[-1].process
    interval = "half of the execution interval included" if chain.stages[-1].controller.interval_s else ""
    if seen.is_reduced:
        yield f"Model for the rules, by the half rule: {model_text}{f' ({interval})' if interval else ''}."
    else:
        yield f"The process is a model for the rules as it stands: {model_text}{f' ({interval})' if interval else ''}."
    if seen.is_reduced and math.isfinite(seen.gain_error):
        size = _off(100.0 * seen.gain_error, " %", "larger", "smaller") or "as large"
        lag = _off(seen.phase_error_deg, "°", "less", "more") or "as much"
        yield f"Against the exact response {where} this model is {size} and lags {lag}; the margins do not rest on it."
    if seen.second.second_lag_s > 0.0 and not math.isinf(seen.second.second_lag_s):
        lags = (
            f"second lag {_time(seen.second.second_lag_s)}"
            if seen.second.integrating
            else f"lags {_time(seen.second.lag_s)} and {_time(seen.second.second_lag_s)}"
        )
        yield f"SIMC PID takes two: {lags}, dead time {_time(seen.second.dead_time_s)}."
    if _is_inverse(process):
        yield "The inverse response counts as dead time in the models."


def _off(error: float, unit_shown: str, above: str, below: str) -> str:
    """How far a model is off, empty where that is nothing but rounding."""
    if abs(error) < 0.05:
        return ""
    return f"{display_number(abs(error), 2)}{unit_shown} {above if error > 0.0 else below}"


def _is_inverse(process: Process) -> bool:
    return any(lead < 0.0 for lead in process.leads_s)


def _sources(applied: list[RuleSettings]) -> Iterator[str]:
    by_source: dict[str, list[str]] = {}
    for rule in applied:
        name = rule.rule.partition(",")[0].rpartition(" ")[0]
        names = by_source.setdefault(rule.source, [])
        if name not in names:
            names.append(name)
    for source, names in by_source.items():
        yield f"{_listed(names)}: {source}"


# ---------------------------------------------------------------- numbers and words


def _shown(value: float) -> str:
    return display_number(value, 3)


def _slope(per_s: float) -> str:
    """A slope in % per minute where that reads better than per second."""
    return f"{_shown(per_s)} %/s" if abs(per_s) >= 0.01 else f"{_shown(60.0 * per_s)} %/min"


def _time(seconds: float) -> str:
    for least, symbol in ((7200.0, "h"), (600.0, "min")):
        if seconds >= least:
            return f"{_shown(Quantity(seconds, unit('s')).to(symbol))} {symbol}"
    return f"{_shown(seconds)} s"


def _joined_times(*times: tuple[str, float]) -> str:
    told = [f"a {name} of {_time(seconds)}" for name, seconds in times if seconds > 1e-9]
    return " and ".join(told) if told else "following at once"


def _listed(items: list[str]) -> str:
    return items[0] if len(items) == 1 else f"{', '.join(items[:-1])} and {items[-1]}"
