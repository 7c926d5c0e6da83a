"""What upsets a chain of loops, and what a cascade gains on it, in sentences."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.documents.magnitudes import change, duration, with_unit
from loopdoc.documents.wording import listed, sentences, upper_first, value
from loopdoc.engineering.comparison import Comparison, NotSimulated, ScenarioResponses
from loopdoc.engineering.dynamics import ChainDynamics
from loopdoc.engineering.stages import Lacking, Level, commanded, measured_range
from loopdoc.engineering.upsets import declared_step
from loopdoc.register.model import Disturbance, Process, known
from loopdoc.register.quantity import display_number
from loopdoc.register.units import unit


def upset_name(comparison: Comparison, entry: ScenarioResponses) -> str:
    """What upsets the loop, with its size in engineering units."""
    levels = comparison.dynamics.chain.levels
    if entry.scenario.setpoint_step_pct:
        lead = comparison.dynamics.chain.lead
        return f"Setpoint of {lead.tag} up by {change(entry.scenario.setpoint_step_pct, measured_range(lead))}"
    moved = entry.scenario.disturbances[0]
    loop = levels[moved.level].loop
    if moved.path is not None:
        return f"{upper_first(entry.scenario.name)}, declared at {loop.tag}"
    level = levels[moved.level]
    if level.stage.process.integrating:
        # There it is a share of what commands the process, not of the measurement, that is upset.
        symbol, span = commanded(level.route)
        size = with_unit(moved.size_pct * span / 100.0, unit(symbol).display)
        return f"An upset of {size} at the process input of {loop.tag}"
    return f"An upset of {change(moved.size_pct, measured_range(loop))} at {loop.tag}"


def benefit(comparison: Comparison) -> str:
    """What a cascade gains on an upset at its innermost loop, in a sentence; empty where nothing is compared."""
    entry = next((entry for entry in comparison.scenarios if entry.scenario.disturbances), None)
    if comparison.single is None or entry is None or entry.single is None:
        return ""
    lead = comparison.dynamics.chain.lead
    own = measured_range(lead)
    alone, ours = (change(abs(found.metrics.peak_pct), own) for found in (entry.single, entry.tuned))
    ratio = entry.ratio("iae_pct_s")
    integral = ""
    if ratio is not None and ratio < 1:
        integral = f" The integral of the absolute error is {display_number(100.0 * ratio, 2)} % of the single loop's."
    upset = upset_name(comparison, entry)
    return (
        f"With the cascade, {upset[0].lower()}{upset[1:]} moves {lead.tag} by {ours} at most; a "
        f"single loop on {comparison.dynamics.chain.final_element.tag}, tuned by SIMC to the same Ms, would let it "
        f"move by {alone}.{integral}"
    )


def declared_upsets(dynamics: ChainDynamics, comparison: Comparison | NotSimulated) -> str:
    """What the register declares to upset the loops of a chain: what moves, how much, through what, and what comes of
    it; empty where it declares nothing.
    """
    levels = dynamics.chain.levels
    return sentences(
        *(
            _declared(written, position, level, comparison)
            for position, level in enumerate(levels)
            for written in level.loop.loop.disturbances.values()
        )
    )


def _declared(written: Disturbance, position: int, level: Level, comparison: Comparison | NotSimulated) -> str:
    tag = level.loop.tag
    name = f"{upper_first(written.name)} (declared at {tag})"
    step = declared_step(written, level.loop, level.route, level.stage.process)
    if isinstance(step, Lacking):
        return f"{name} is not calculated: {step.reason}"
    size = known(written.size)
    assert size is not None  # else there were no step
    if known(written.at) == "process input":
        moved = f"what commands {tag} ({level.route.end.tag}) by {value(size)}, through the process of {tag}"
    else:
        moved = f"the measurement of {tag} by {value(size)}, {_through(written, level)}"
    told = f"{name} moves {moved}"
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
    return told if entry is None else f"{told}; {_outcome(comparison, entry)}"


def _through(written: Disturbance, level: Level) -> str:
    lag = known(written.lag)
    if lag is not None:
        return f"through a lag of {value(lag)}"
    process = known(level.loop.loop.process)
    lags = process.lags if isinstance(process, Process) and isinstance(process.lags, tuple) else ()
    if not lags:
        return "at once"
    noun = "lag" if len(lags) == 1 else "lags"
    return f"through the {noun} of its process, {listed(value(lag) for lag in lags)}"


def _outcome(comparison: Comparison, entry: ScenarioResponses) -> str:
    lead = comparison.dynamics.chain.lead
    own = measured_range(lead)
    peak = change(abs(entry.tuned.metrics.peak_pct), own)
    if entry.single is None:
        return f"as tuned, {lead.tag} then departs by {peak} at most"
    alone = change(abs(entry.single.metrics.peak_pct), own)
    return f"with the cascade {lead.tag} then departs by {peak} at most, with the single loop by {alone}"


def single_loop_assumption(comparison: Comparison) -> str:
    """With what the cascade is compared, or why with nothing, in a sentence; empty for a single loop."""
    chain = comparison.dynamics.chain
    if len(chain.levels) == 1:
        return ""
    if comparison.single is None:
        return (
            f"No single loop on {chain.final_element.tag} reaches the same maximum sensitivity by SIMC; there is "
            "nothing to compare with."
        )
    settings = comparison.single.settings
    return (
        f"Single loop: one controller on {chain.final_element.tag} in place of the cascade, tuned by SIMC on all "
        f"processes in series to the maximum sensitivity of {chain.lead.tag}, Ms "
        f"{display_number(comparison.single.max_sensitivity, 3)} (gain {display_number(abs(settings.gain), 3)} % per "
        f"%, reset {duration(settings.reset_s)}), so that neither side gains by being less robust."
    )


def told_of(comparison: Comparison) -> Iterator[str]:
    """For the narrative: what the cascade gains, then what the register declares."""
    yield benefit(comparison)
    yield declared_upsets(comparison.dynamics, comparison)
