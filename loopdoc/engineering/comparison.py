"""What a cascade buys: the same upsets with the cascade as tuned and with one loop on the same final element.

The single loop is tuned by SIMC to the maximum sensitivity of the cascade's outermost loop, so that neither
side wins by being less robust. Source of the rule: S. Skogestad, J. Process Control 13:291-309, 2003; of Ms as
the measure of robustness: K. J. Astrom, T. Hagglund, Advanced PID Control, ISA 2006, section 4.5.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import reduce
from typing import TYPE_CHECKING

from loopdoc.engineering.attenuation import Rival, error_ratios
from loopdoc.engineering.clock import Unsuited
from loopdoc.engineering.direction import Undecided
from loopdoc.engineering.dynamics import ChainDynamics
from loopdoc.engineering.feedforward import FunctionInput
from loopdoc.engineering.frequency import LoopStage, Margins
from loopdoc.engineering.pairing import normal_value
from loopdoc.engineering.pid import Controller
from loopdoc.engineering.process import Process, in_series
from loopdoc.engineering.stages import Chain, Lacking, Level, percent_of_range
from loopdoc.engineering.structure import (
    ControlStructure,
    Disturbance,
    Feedforward,
    FinalElement,
    MeasuredMove,
    Scenario,
    cascade_structure,
    single_loop_structure,
    standard_scenarios,
)
from loopdoc.engineering.tuning import SensitivityTuning, simc_at_sensitivities
from loopdoc.engineering.upsets import Step, declared_step
from loopdoc.register import model
from loopdoc.register.model import Hold, known, seconds
from loopdoc.register.quantity import Quantity
from loopdoc.register.units import UnitError

if TYPE_CHECKING:
    from loopdoc.engineering.response_metrics import ResponseMetrics
    from loopdoc.engineering.simulation import Response

UPSET_PCT = 10.0
"""Size of the standard upsets: a tenth of the span of the measurement that they move [%]."""
NO_OVERSHOOT_PCT = 0.5
"""Overshoot that no plot shows, in percent of the step: below it a setpoint is approached, not passed."""


@dataclass(frozen=True, slots=True)
class ScenarioResponses:
    """One upset, answered by the loop or cascade as tuned and, for a cascade, by a single loop in its place."""

    scenario: Scenario
    tuned: Response
    single: Response | None
    """None for a single loop, and where no tuning of equal robustness exists. Nothing is fed forward to it."""
    without_feedforward: Response | None = None
    """The same as tuned, with all that enters its functions as it was; None where nothing is fed forward."""

    def ratio(self, of: str) -> float | None:
        """A metric of the cascade over that of the single loop, both without feedforward; None where there is nothing
        to compare.
        """
        return _ratio(self.without_feedforward or self.tuned, self.single, of)

    def feedforward_ratio(self, of: str) -> float | None:
        """A metric with feedforward over that without; None where there is nothing to compare."""
        return _ratio(self.tuned, self.without_feedforward, of)

    def peak_time_s(self, response: Response) -> float:
        """When a response peaks [s]; see the function of this name."""
        return peak_time_s(self.scenario.setpoint_step_pct, response.metrics)


def peak_time_s(setpoint_step_pct: float, metrics: ResponseMetrics) -> float:
    """When a response peaks [s]; nan where it only approaches a new setpoint or an offset, nearest at the end."""
    if setpoint_step_pct:
        only_approached = metrics.overshoot_pct < NO_OVERSHOOT_PCT
    else:
        only_approached = math.isinf(metrics.iae_pct_s) and metrics.settling_s < metrics.time_to_peak_s
    return math.nan if only_approached else metrics.time_to_peak_s


def _ratio(one: Response, other: Response | None, of: str) -> float | None:
    if other is None:
        return None
    ours, theirs = abs(getattr(one.metrics, of)), abs(getattr(other.metrics, of))
    return ours / theirs if theirs > 0.0 and math.isfinite(ours) and math.isfinite(theirs) else None


@dataclass(frozen=True, slots=True)
class Comparison:
    """Time responses of one chain under the standard upsets."""

    dynamics: ChainDynamics
    single: SensitivityTuning | None
    """Settings of the single loop; None for a single loop or where none of equal robustness exists."""
    scenarios: tuple[ScenarioResponses, ...]
    start_pct: tuple[float, ...]
    """Where each measurement stood before the upset, innermost first [% of range]."""

    @property
    def at_limit(self) -> tuple[tuple[ScenarioResponses, str, float], ...]:
        """Upsets of which the loops as tuned keep an offset since an output stands at its limit: the upset, the tag of
        the innermost such controller, and where the final element stands at the end [% of travel].
        """
        return tuple(
            (entry, self.dynamics.chain.levels[level].loop.tag, float(entry.tuned.travel_pct[-1]))
            for entry in self.scenarios
            if (level := entry.tuned.metrics.limited_level) is not None
        )


@dataclass(frozen=True, slots=True)
class NotSimulated:
    """Why there is no time response to show."""

    reason: str


def compare(dynamics: ChainDynamics) -> Comparison | NotSimulated:
    """Simulate one chain, and for a cascade the single loop in its place."""
    return compare_all([dynamics])[0]


def compare_all(chains: Sequence[ChainDynamics]) -> tuple[Comparison | NotSimulated, ...]:
    """Simulate many chains together, and for each cascade the single loop in its place; see `compare`."""
    # Loaded for responses only: a check compares cascades without simulating them.
    from loopdoc.engineering.simulation import simulate_groups

    found: dict[int, Comparison | NotSimulated] = {}
    stable = {}
    for position, dynamics in enumerate(chains):
        refused = not_to_be_simulated(dynamics)
        if refused is not None:
            found[position] = refused
        else:
            stable[position] = dynamics
    singles = dict(zip(stable, _single_loops(list(stable.values())), strict=True))
    groups, known = [], {}
    for position, dynamics in stable.items():
        chain, single = dynamics.chain, singles[position]
        structure = structure_of(chain)
        known[structure] = dynamics.margins
        structures = [structure]
        if single is not None:
            structures.append(single_loop_structure(structure, _single_controller(chain.stages, single)))
        standard = standard_scenarios(len(chain.levels), size_pct=UPSET_PCT)
        scenarios = (*standard, *declared_scenarios(chain))
        groups.append((structures, (*scenarios, *(replace(one, moves=()) for one in scenarios if one.moves))))
    for (position, dynamics), (structures, scenarios), responses in zip(
        stable.items(), groups, simulate_groups(groups, known=known), strict=True
    ):
        if isinstance(responses, Unsuited):
            found[position] = NotSimulated(responses.reason)
            continue
        tuned, *others = responses
        alone = others[0] if others else (None,) * len(scenarios)
        # Those without feedforward were added behind the others.
        shown = len(scenarios) - sum(bool(scenario.moves) for scenario in scenarios)
        without = iter(tuned[shown:])
        found[position] = Comparison(
            dynamics,
            singles[position],
            tuple(
                ScenarioResponses(scenario, ours, theirs, next(without) if scenario.moves else None)
                for scenario, ours, theirs in zip(scenarios[:shown], tuned[:shown], alone[:shown], strict=True)
            ),
            structures[0].start_pct,
        )
    return tuple(found[position] for position in range(len(chains)))


def not_to_be_simulated(dynamics: ChainDynamics) -> NotSimulated | None:
    """Why a chain has no time response to show that would mean anything; None where it has one."""
    levels = zip(dynamics.chain.levels, dynamics.margins, strict=True)
    unstable = next((level.loop.tag for level, margins in levels if not margins.stable), None)
    if unstable is not None:
        return NotSimulated(f"{unstable} as tuned is not stable")
    at_once = next((level.loop.tag for level in dynamics.chain.levels if _answers_at_once(level.stage)), None)
    if at_once is None:
        return None
    return NotSimulated(
        f"the process of {at_once} answers at once, so that its response hangs on the execution interval, which the "
        "register does not give"
    )


def _answers_at_once(stage: LoopStage) -> bool:
    """Whether nothing in a loop takes time: no lag that a lead does not undo, no dead time, no execution interval."""
    process = stage.process
    followed = process.order > sum(lead != 0.0 for lead in process.leads_s)
    return not (followed or process.dead_time_s or stage.controller.interval_s)


def declared_scenarios(chain: Chain) -> tuple[Scenario, ...]:
    """The disturbances that the register declares for the loops of a chain, by name; those it gives in full."""
    found: dict[str, Scenario] = {}
    standard = {scenario.name for scenario in standard_scenarios(len(chain.levels))}
    for level, (loop, route, stage) in enumerate((one.loop, one.route, one.stage) for one in chain.levels):
        for written in loop.loop.disturbances.values():
            step = declared_step(written, loop, route, stage.process)
            if isinstance(step, Step) and step.size_pct:
                moves = _moves(written, chain)
                # A dead time counts where something is known of the upset before it arrives.
                dead_time_s = step.path.dead_time_s if moves else 0.0
                # Two loops may use one name for what each of them meets.
                taken = written.name in found or written.name in standard
                name = f"{written.name} ({loop.tag})" if taken else written.name
                disturbance = Disturbance(level, step.size_pct, step.path, dead_time_s)
                found[name] = Scenario(name, disturbances=(disturbance,), moves=moves)
    return tuple(found.values())


def _moves(written: model.Disturbance, chain: Chain) -> tuple[MeasuredMove, ...]:
    """What a disturbance moves that functions of the chain feed forward."""
    found = {}
    for one in (one for level in chain.levels for one in level.inputs):
        move = moved_in(written, one)
        if move is not None:
            found[move.measurement] = move
    return tuple(found.values())


def moved_in(written: model.Disturbance, entering: FunctionInput) -> MeasuredMove | None:
    """How a disturbance moves what enters a function; None where it does not, or where that does not follow."""
    move = next((written.moves[name] for name in entering.names if name in written.moves), None)
    if move is None or entering.range is None or isinstance(entering.path, Undecided):
        return None
    size = known(move.size)
    if size is None or isinstance(move.lag, Hold):
        return None
    try:
        size_pct = 100.0 * size.difference_in(entering.range.unit.symbol) / entering.range.span
    except UnitError:  # `unit-incompatible` tells of it
        return None
    return MeasuredMove(entering.path.measurement, size_pct, max(0.0, seconds(move.lag))) if size_pct else None


@dataclass(frozen=True, slots=True)
class InputMoves:
    """What a function takes in besides the loops of a chain, and which declared upsets move it in the responses."""

    function: str
    """Tag of the function."""
    tag: str
    """As the function takes it in."""
    moved_by: tuple[str, ...]
    """Names of the scenarios; under every other one it stays as it is."""
    reason: str
    """Why a move that the register gives is not followed; empty where none is left out."""


def input_moves(chain: Chain) -> tuple[InputMoves, ...]:
    """What functions on the way of a chain take in besides its loops, the outermost first."""
    scenarios = declared_scenarios(chain)
    written = [one for level in chain.levels for one in level.loop.loop.disturbances.values()]
    found = []
    for entering in (one for level in reversed(chain.levels) for one in level.inputs):
        path, reason = entering.path, ""
        moved: tuple[str, ...] = ()
        if isinstance(path, Undecided):
            named = any(name in one.moves for one in written for name in entering.names)
            reason = path.reason if named else ""
        else:
            moved = tuple(
                scenario.name
                for scenario in scenarios
                if any(move.measurement == path.measurement for move in scenario.moves)
            )
        found.append(InputMoves(entering.function, entering.tag, moved, reason))
    return tuple(found)


def cascade_error_ratios(cascades: Sequence[ChainDynamics]) -> tuple[float | Lacking, ...]:
    """What each cascade leaves of the error after an upset at its secondary, as a share of the single loop's.

    Root of the integrated squared error of the outermost measurement, by `loopdoc.engineering.attenuation`: for
    all cascades of a plant together, where a simulation of each would take minutes.
    """
    unreached = Lacking("no single loop reaches the same maximum sensitivity by SIMC")
    found: list[float | Lacking] = [unreached] * len(cascades)
    rivals: dict[int, Rival] = {}
    for position, (dynamics, single) in enumerate(zip(cascades, _single_loops(cascades), strict=True)):
        chain = dynamics.chain
        process = _joined(chain.stages)
        if not all(margins.stable for margins in dynamics.margins):
            found[position] = Lacking(f"{chain.lead.tag} as tuned, or a loop below it, is not stable")
        elif single is not None and process is not None:
            rivals[position] = Rival(chain.stages, LoopStage(_single_controller(chain.stages, single), process))
    for position, ratio in zip(rivals, error_ratios(list(rivals.values())).tolist(), strict=True):
        found[position] = Lacking("the error after an upset does not die out") if math.isnan(ratio) else ratio
    return tuple(found)


def _joined(stages: Sequence[LoopStage]) -> Process | None:
    """All processes in series; None for two integrators, on which no rule tunes one loop."""
    try:
        return reduce(in_series, (stage.process for stage in stages))
    except ValueError:
        return None


def _single_loops(cascades: Sequence[ChainDynamics]) -> list[SensitivityTuning | None]:
    """One loop on all processes in series for each cascade, as robust as its outermost loop; None for a single loop."""
    return _single_tunings([c.chain.stages for c in cascades], [c.margins for c in cascades])


def _single_tunings(
    chains: Sequence[Sequence[LoopStage]], margins: Sequence[Sequence[Margins]]
) -> list[SensitivityTuning | None]:
    found: list[SensitivityTuning | None] = [None] * len(chains)
    processes = {
        position: process
        for position, (stages, of_levels) in enumerate(zip(chains, margins, strict=True))
        # A loop that adds nothing to any disturbance has no tuning that is its equal.
        if len(stages) > 1
        and (process := _joined(stages)) is not None
        and 1.0 < of_levels[-1].max_sensitivity < math.inf
    }
    leads = [chains[position][-1].controller for position in processes]
    tuned = simc_at_sensitivities(
        list(processes.values()),
        target_ms=[margins[position][-1].max_sensitivity for position in processes],
        interval_s=[lead.interval_s for lead in leads],
        measurement_filter_s=[lead.measurement_filter_s for lead in leads],
    )
    for position, tuning in zip(processes, tuned, strict=True):
        found[position] = tuning
    return found


def single_loops(
    chains: Sequence[Sequence[LoopStage]], margins: Sequence[Sequence[Margins]]
) -> tuple[Controller | None, ...]:
    """Return the controller of the single loop in the place of each cascade, tuned by SIMC to the same Ms.

    ``chains`` and their ``margins`` are innermost level first; None for a single loop, and where no tuning has
    that Ms.
    """
    return tuple(
        None if tuning is None else _single_controller(stages, tuning)
        for stages, tuning in zip(chains, _single_tunings(chains, margins), strict=True)
    )


def _single_controller(stages: Sequence[LoopStage], single: SensitivityTuning) -> Controller:
    lead = stages[-1].controller
    return Controller(
        single.settings.gain,
        single.settings.reset_s,
        single.settings.rate_s,
        interval_s=lead.interval_s,
        measurement_filter_s=lead.measurement_filter_s,
        setpoint_low_pct=lead.setpoint_low_pct,
        setpoint_high_pct=lead.setpoint_high_pct,
    )


def structure_of(chain: Chain) -> ControlStructure:
    """Return a chain of the register as the structure that is simulated, at its normal values."""
    return cascade_structure(
        chain.stages,
        final_element=_final_element(chain),
        start_pct=tuple(_start_pct(level) for level in chain.levels),
        feedforwards=tuple(
            tuple(one.path for one in level.inputs if isinstance(one.path, Feedforward)) for level in chain.levels
        ),
    )


def _final_element(chain: Chain) -> FinalElement:
    """The final element as written, in the middle of what the innermost controller may ask of it.

    The register does not say how far a valve is open in normal operation, and the process models are linear: what
    the start decides is only how far the limits are away.
    """
    element = chain.final_element
    inner = chain.stages[0].controller
    # Of a split range's branch the limits lie beyond the travel: the other branch is moved there.
    middle = (max(0.0, inner.output_low_pct) + min(100.0, inner.output_high_pct)) / 2.0
    return FinalElement(
        stroke_time_s=seconds(element.stroke_time),
        backlash_pct=_share_of_travel(known(element.backlash)),
        resolution_pct=_share_of_travel(known(element.resolution)),
        start_pct=min(100.0, max(0.0, middle)),
    )


def _share_of_travel(written: Quantity | None) -> float:
    """A share of the travel [%], none where it is not given as one."""
    # `tuning-invalid` tells of one that leaves no travel.
    return min(99.9, max(0.0, written.value)) if written and written.unit.symbol == "%" else 0.0


def _start_pct(level: Level) -> float:
    """Normal setpoint or normal measurement in percent of range; the middle where the register gives neither."""
    loop = level.loop.loop
    measurement = known(loop.measurement)
    own = known(measurement.range) if measurement else None
    normal = normal_value(loop)
    if own is None or normal is None:
        return 50.0
    try:
        return min(100.0, max(0.0, percent_of_range(normal, own)))
    except UnitError:  # `unit-incompatible` tells it
        return 50.0
