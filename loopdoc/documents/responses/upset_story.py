"""What upsets a chain of loops, and what a cascade gains on it, in sentences."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.wording import sentences
from loopdoc.engineering.comparison import Comparison, NotSimulated, ScenarioResponses, moved_in
from loopdoc.engineering.dynamics import ChainDynamics
from loopdoc.engineering.pairing import ControlledLoop
from loopdoc.engineering.stages import Chain, Lacking, commanded, measured_range
from loopdoc.engineering.upsets import declared_step
from loopdoc.register.model import Disturbance, Process, known
from loopdoc.register.units import unit


def upset_name(comparison: Comparison, entry: ScenarioResponses, language: Language = ENGLISH) -> str:
    """What upsets the loop, with its size in engineering units."""
    levels = comparison.dynamics.chain.levels
    if entry.scenario.setpoint_step_pct:
        setpoint = entry.tuned.setpoint_pct[-1]
        assert setpoint is not None
        made = float(setpoint[-1]) - comparison.start_pct[-1]
        return setpoint_step(comparison.dynamics.chain.lead, entry.scenario.setpoint_step_pct, made, language)
    moved = entry.scenario.disturbances[0]
    loop = levels[moved.level].loop
    if moved.path is not None:
        return language.declared_at(entry.scenario.name, loop.tag)
    level = levels[moved.level]
    if level.stage.process.integrating:
        # There it is a share of what commands the process, not of the measurement, that is upset.
        symbol, span = commanded(level.route)
        size = language.with_unit(moved.size_pct * span / 100.0, unit(symbol).display)
        return language.upset_at_input(standard(size, loop.tag, language), loop.tag)
    size = language.change(moved.size_pct, measured_range(loop))
    return language.upset_at(standard(size, loop.tag, language), loop.tag)


def setpoint_step(lead: ControlledLoop, asked_pct: float, made_pct: float, language: Language) -> str:
    """A step of the setpoint with the size that its limits leave of it."""
    if made_pct < 1e-9:
        return language.setpoint_to_limit(lead.tag, "")
    size = language.change(made_pct, measured_range(lead))
    if made_pct < asked_pct - 1e-9:
        by = language.by_setpoint_limit()
        return language.setpoint_to_limit(lead.tag, upset_size(size, lead.tag, by, language))
    return language.setpoint_up(lead.tag, standard(size, lead.tag, language))


def standard(size: str, tag: str, language: Language) -> str:
    """The size of an upset of which the register says nothing, with its source."""
    return upset_size(size, tag, language.by_standard_upset(), language)


def upset_size(size: str, tag: str, by: str, language: Language) -> str:
    """The size of an upset with what it comes from."""
    return language.calculated(size, tag, language.label("Size of an upset"), by)


def peak(percent: float, lead: ControlledLoop, language: Language) -> str:
    """The largest deviation of an outermost measurement in its unit, with its source."""
    size = language.change(abs(percent), measured_range(lead))
    return language.calculated(size, lead.tag, language.label("Peak deviation"), language.by_simulation())


def benefit(comparison: Comparison, language: Language = ENGLISH) -> str:
    """What a cascade gains on an upset at its innermost loop, in a sentence; empty where nothing is compared."""
    entry = next((entry for entry in comparison.scenarios if entry.scenario.disturbances), None)
    if comparison.single is None or entry is None or entry.single is None:
        return ""
    lead = comparison.dynamics.chain.lead
    alone, ours = (peak(found.metrics.peak_pct, lead, language) for found in (entry.single, entry.tuned))
    ratio = entry.ratio("iae_pct_s")
    share = language.number(100.0 * ratio, 2) if ratio is not None and ratio < 1 else ""
    what, by = language.label("Share of the error integral"), language.by_simulation()
    share = language.calculated(share, lead.tag, what, by)
    upset, element = upset_name(comparison, entry, language), comparison.dynamics.chain.final_element.tag
    return language.cascade_gains(upset, lead.tag, ours, element, alone, share)


def declared_upsets(
    dynamics: ChainDynamics, comparison: Comparison | NotSimulated, language: Language = ENGLISH
) -> str:
    """What the register declares to upset the loops of a chain: what moves, how much, through what, and what comes of
    it; empty where it declares nothing.
    """
    levels = dynamics.chain.levels
    return sentences(
        *(
            _declared(written, position, dynamics, comparison, language)
            for position, level in enumerate(levels)
            for written in level.loop.loop.disturbances.values()
        )
    )


def _declared(
    written: Disturbance,
    position: int,
    dynamics: ChainDynamics,
    comparison: Comparison | NotSimulated,
    language: Language,
) -> str:
    level = dynamics.chain.levels[position]
    tag = level.loop.tag
    step = declared_step(written, level.loop, level.route, level.stage.process)
    if isinstance(step, Lacking):
        return language.upset_not_calculated(written.name, tag, language.reason(step.reason))
    size = known(written.size)
    assert size is not None  # else there were no step
    if known(written.at) == "process input":
        told = language.upset_moves_input(written.name, tag, level.route.end.tag, language.value(size))
    else:
        lag = known(written.lag)
        process = known(level.loop.loop.process)
        lags = process.lags if isinstance(process, Process) and isinstance(process.lags, tuple) else ()
        own, others = language.value(lag) if lag is not None else "", [language.value(one) for one in lags]
        told = language.upset_moves(written.name, tag, language.value(size), own, others)
    dead_time = known(written.dead_time)
    if dead_time is not None and dead_time.value:
        told = language.upset_late(told, language.value(dead_time))
    told = _with_moves(told, written, dynamics.chain, language)
    if isinstance(comparison, NotSimulated):
        return told
    entry = next(
        (
            entry
            for entry in comparison.scenarios
            if entry.scenario.name in (written.name, f"{written.name} ({tag})")
            and entry.scenario.disturbances
            and entry.scenario.disturbances[0].level == position
        ),
        None,
    )
    return told if entry is None else _outcome(told, comparison, entry, language)


def _outcome(told: str, comparison: Comparison, entry: ScenarioResponses, language: Language) -> str:
    lead = comparison.dynamics.chain.lead
    alone = peak(entry.single.metrics.peak_pct, lead, language) if entry.single is not None else ""
    unaided = entry.without_feedforward
    without = peak(unaided.metrics.peak_pct, lead, language) if unaided is not None else ""
    told = language.upset_outcome(told, lead.tag, peak(entry.tuned.metrics.peak_pct, lead, language), without, alone)
    return sentences(told, feedforward_leaves(comparison, entry, language)) if without else told


def feedforward_leaves(comparison: Comparison, entry: ScenarioResponses, language: Language = ENGLISH) -> str:
    """What feedforward leaves of an upset, without the full stop; empty where there is nothing to compare."""
    peaks, errors = entry.feedforward_ratio("peak_pct"), entry.feedforward_ratio("iae_pct_s")
    if peaks is None or errors is None:
        return ""
    tag, by = comparison.dynamics.chain.lead.tag, language.by_simulation()
    of_peak, of_error = (
        language.calculated(language.number(100.0 * share, 2), tag, what, by)
        for share, what in (
            (peaks, language.label("Share of the peak without feedforward")),
            (errors, language.label("Share of the error integral without feedforward")),
        )
    )
    return language.feedforward_leaves(of_peak, of_error)


def _with_moves(told: str, written: Disturbance, chain: Chain, language: Language) -> str:
    """Which measurements move with a disturbance, and what comes of that."""
    left = dict(written.moves)
    for entering in (one for level in reversed(chain.levels) for one in level.inputs):
        move = next((written.moves[name] for name in entering.names if name in written.moves), None)
        size = known(move.size) if move is not None else None
        if move is None or size is None or moved_in(written, entering) is None:
            continue
        lag = known(move.lag)
        told = language.upset_fed_forward(
            told, move.tag, language.value(size), language.value(lag) if lag is not None else "", entering.function
        )
        left.pop(move.tag, None)
    return language.upset_not_fed_forward(told, list(left)) if left else told


def single_loop_assumption(comparison: Comparison, language: Language = ENGLISH) -> str:
    """With what the cascade is compared, or why with nothing, in a sentence; empty for a single loop."""
    chain = comparison.dynamics.chain
    if len(chain.levels) == 1:
        return ""
    if comparison.single is None:
        return language.nothing_to_compare(chain.final_element.tag)
    settings = comparison.single.settings
    return language.single_loop(
        chain.final_element.tag,
        chain.lead.tag,
        language.number(comparison.single.max_sensitivity, 3),
        language.number(abs(settings.gain), 3),
        language.duration(settings.reset_s),
    )


def told_of(comparison: Comparison, language: Language) -> Iterator[str]:
    """For the narrative: what the cascade gains, then what the register declares."""
    yield benefit(comparison, language)
    yield declared_upsets(comparison.dynamics, comparison, language)
