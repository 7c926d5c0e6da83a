"""An override: controllers of which a selector passes one, simulated as control goes from one to another and back.

Who does not command follows by external reset: the integral of a controller is the signal that the selector passes,
through a lag of its reset time (positive feedback), so that its output is the proportional action above what passes
and comes into command as its error changes sign. Without it the integral runs to the output limit, and the way back
has to be integrated away first.

Source: F. G. Shinskey, "The power of external-reset feedback", Control, 2006, and Process Control Systems, 4th ed. 1996
(selective control; chapters from memory).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from loopdoc.engineering.branched import (
    UNFOLLOWED,
    WHOLE,
    Branch,
    BranchedLoop,
    BranchedScenario,
    BranchedStructure,
)
from loopdoc.engineering.clock import Clock, Unsuited
from loopdoc.engineering.comparison import (
    UPSET_PCT,
    NotSimulated,
    declared_scenarios,
    not_to_be_simulated,
    structure_of,
)
from loopdoc.engineering.direction import Undecided, curve_sign, element_sign
from loopdoc.engineering.dynamics import ChainDynamics, Dynamics
from loopdoc.engineering.functions import SELECTORS, fed_by
from loopdoc.engineering.pairing import ControlledLoop, Plant, Route
from loopdoc.engineering.process import Process
from loopdoc.engineering.spreading import PASSIVE_MODES, normal_mode, stands_by
from loopdoc.engineering.stages import Chain, measured_range, percent_of_range
from loopdoc.engineering.structure import Disturbance
from loopdoc.register.model import FinalElement, Function, Loop, known
from loopdoc.register.units import UnitError

if TYPE_CHECKING:
    from loopdoc.engineering.branched_simulation import BranchedResponse, Spell

TO_THE_LIMIT = "setpoint to its limit"
"""Name of the upset by the setpoint of the loop that commands in normal operation."""
ERROR_LEAST_PCT = 0.05
"""Measurement past its setpoint from which it is told [% of span]."""


@dataclass(frozen=True, slots=True)
class OverrideResponses:
    """One upset, answered as the register has the candidates follow, and the other way."""

    scenario: BranchedScenario
    as_written: BranchedResponse
    otherwise: BranchedResponse
    """All of them without external reset where the register has it for all, else all with it."""


@dataclass(frozen=True, slots=True)
class Takeover:
    """What a candidate that stands by did in a response."""

    spell: Spell
    reaches_s: float
    """When its measurement passed its setpoint [s]; infinite for never."""
    past_pct: float
    """How far its measurement went past its setpoint [% of span]; 0 where it did not."""
    gives_back_s: float
    """When control passed back from it for good [s]; infinite where it never had it or kept it."""

    @property
    def takes_over(self) -> bool:
        """Whether it came into command at all."""
        return math.isfinite(self.spell.first_s)


@dataclass(frozen=True, slots=True, eq=False)
class Override:
    """The responses of the candidates of one selector."""

    function: Function
    candidates: tuple[ChainDynamics, ...]
    normal: int
    """Place among them of the one that commands in normal operation."""
    structure: BranchedStructure
    otherwise: BranchedStructure
    """The same with the candidates following the other way."""
    responses: tuple[OverrideResponses, ...]

    @property
    def below(self) -> int:
        """How many loops stand below the selector: the place of the first candidate in the structure."""
        return len(self.structure.loops) - len(self.candidates)

    @property
    def loops(self) -> tuple[ControlledLoop, ...]:
        """The candidates."""
        return tuple(dynamics.chain.lead for dynamics in self.candidates)

    @property
    def standing_by(self) -> tuple[int, ...]:
        """Places of the candidates that do not command in normal operation."""
        return tuple(place for place in range(len(self.candidates)) if place != self.normal)

    @property
    def end(self) -> FinalElement | Loop:
        """What the candidates command."""
        return self.candidates[0].chain.levels[-1].route.end

    def follows(self, place: int, *, as_written: bool = True) -> str:
        """What a candidate does while another commands: track, hold or nothing."""
        structure = self.structure if as_written else self.otherwise
        return structure.loops[self.below + place].unfollowed

    def taken_over(self, response: BranchedResponse, place: int) -> Takeover:
        """What a candidate that stands by did in a response."""
        at = self.below + place
        loop, spell = self.structure.loops[at], response.spells[at]
        setpoint = loop.start_pct + loop.start_error_pct
        side = -1.0 if loop.start_error_pct < 0.0 else 1.0
        low, high = response.measurement_range_pct[at]
        past = side * (response.measurement_pct[at] - setpoint)
        beyond = (past > ERROR_LEAST_PCT).nonzero()[0]
        ends = response.metrics.step_s + spell.last_s
        kept = not math.isfinite(spell.last_s) or spell.last_s >= response.metrics.horizon_s
        return Takeover(
            spell,
            reaches_s=float(response.time_s[beyond[0]]) if beyond.size else math.inf,
            past_pct=max(0.0, side * ((high if side > 0.0 else low) - setpoint)),
            gives_back_s=math.inf if kept else ends,
        )


def selector_of(loop: ControlledLoop) -> Function | None:
    """The selector that the output of a loop passes first; None where it passes none."""
    return next((part for route in loop.routes for part in route.via if known(part.kind) in SELECTORS), None)


def override(plant: Plant, dynamics: Dynamics, tag: str) -> Override | NotSimulated | None:
    """Simulate the candidates of the selector that the output of a loop passes; None where it passes none."""
    function = selector_of(plant.controlled[tag]) if tag in plant.controlled else None
    if function is None:
        return None
    rivals = [loop for loop in plant.controlled.values() if any(function in route.via for route in loop.routes)]
    reason = _unlike(plant, function, rivals)
    if reason:
        return NotSimulated(reason)
    candidates: list[ChainDynamics] = []
    for loop in rivals:
        found = dynamics.loop(loop.tag)
        if found.reason:
            return NotSimulated(found.reason)
        candidates.extend(found.chains)
    refused = next(filter(None, map(not_to_be_simulated, candidates)), None)
    if refused is not None:
        return refused
    busy = [place for place, loop in enumerate(rivals) if not stands_by(loop, function)]
    if len(busy) != 1:
        listed = ", ".join(rivals[place].tag for place in busy) or "none of its candidates"
        return NotSimulated(
            f"{listed} would command by the normal values at {function.tag}: who stands by has a normal value "
            "(`operating`) apart from its normal setpoint, on the side from which it does not ask"
        )
    starts = []
    for place, dynamics_of in enumerate(candidates):
        start = None if place == busy[0] else _normal_measurement_pct(dynamics_of.chain)
        if isinstance(start, NotSimulated):
            return start
        starts.append(start)
    return _simulated(_laid_out(function, tuple(candidates), busy[0], starts))


def _unlike(plant: Plant, function: Function, rivals: Sequence[ControlledLoop]) -> str:
    """Why the candidates of a selector are not simulated together; empty where they are."""
    if len(rivals) < 2:
        return f"{function.tag} has one candidate alone"
    for loop in rivals:
        if len(loop.routes) != 1:
            return f"{function.tag} stands before a split range"
        mode = normal_mode(loop)
        if mode in PASSIVE_MODES:
            return f"{loop.tag} stands in {mode} in normal operation"
        (route,) = loop.routes
        if sum(known(part.kind) in SELECTORS for part in route.via) > 1:
            return f"the output of {loop.tag} passes several selectors"
        if any(known(part.kind) == "lead-lag" for part in _behind(function, route)):
            return f"a lead-lag stands behind {function.tag}"
        if _turned(function, route) == 0:
            return f"which way {function.tag} moves {route.end.tag} does not follow from the register"
    entering = fed_by(plant, function, "")
    if any(tag not in plant.controlled and _is_measured(plant, tag) for tag in entering):
        return f"{entering[0]} enters {function.tag} beside the controllers"
    return ""


def _is_measured(plant: Plant, tag: str) -> bool:
    """Whether what enters a selector brings a measurement, and no controller's output."""
    function = plant.register.functions.get(tag)
    return function is None or not any(
        function in route.via for loop in plant.controlled.values() for route in loop.routes
    )


def _behind(function: Function, route: Route) -> tuple[Function, ...]:
    return route.via[route.via.index(function) + 1 :]


def _turned(function: Function, route: Route) -> int:
    """Whether what a selector passes moves what is commanded up (1) or down (-1); 0 where that is not known."""
    sign, commander = 1, function.tag
    for part in _behind(function, route):
        curve = curve_sign(part) if known(part.kind) == "characteriser" else 1
        if isinstance(curve, Undecided):
            return 0
        sign *= curve * (-1 if part.weights.get(commander, 1.0) < 0.0 else 1)
        commander = part.tag
    if isinstance(route.end, FinalElement):
        element = element_sign(route.end)
        return 0 if isinstance(element, Undecided) else sign * element.sign
    return sign


def _laid_out(
    function: Function, candidates: tuple[ChainDynamics, ...], normal: int, starts_pct: Sequence[float | None]
) -> Override:
    """The structure of the candidates, at its start; that of the one in command is where its setpoint is."""
    chain = candidates[0].chain
    plain = structure_of(chain)
    loops = [
        BranchedLoop(
            stage.controller, (stage.process,), place - 1 if place else None, plain.start_pct[place],
            lead_lags=stage.lead_lags,
        )
        for place, stage in enumerate(chain.stages[:-1])
    ]  # fmt: skip
    below = len(loops) - 1 if loops else None
    for dynamics, apart in zip(candidates, starts_pct, strict=True):
        stage, loop = dynamics.chain.stages[-1], dynamics.chain.lead
        setpoint = structure_of(dynamics.chain).start_pct[-1]
        start = setpoint if apart is None else apart
        written = known(loop.controller.when_not_followed)
        loops.append(
            BranchedLoop(
                stage.controller, (stage.process,), below, start, setpoint,
                unfollowed=written if written in UNFOLLOWED else "nothing", lead_lags=stage.lead_lags,
            )
        )  # fmt: skip
    kind = known(function.kind)
    turned = _turned(function, chain.levels[-1].route)
    structure = BranchedStructure(
        tuple(loops), (Branch(plain.final_element, WHOLE),), plain.final_element.start_pct,
        lowest=(kind == "low select") == (turned > 0),
    )  # fmt: skip
    first = len(loops) - len(candidates)
    resets = all(loop.unfollowed == "track" for loop in loops[first:])
    other = "nothing" if resets else "track"
    turned_loops = (*loops[:first], *(replace(loop, unfollowed=other) for loop in loops[first:]))
    return Override(function, candidates, normal, structure, replace(structure, loops=turned_loops), ())


def _normal_measurement_pct(chain: Chain) -> float | NotSimulated:
    """Where the measurement of a candidate that stands by is in normal operation [% of range]."""
    operating = known(chain.lead.loop.operating)
    normal = known(operating.normal) if operating else None
    assert normal is not None  # else it would not be known to stand by
    try:
        return percent_of_range(normal, measured_range(chain.lead))
    except UnitError:
        return NotSimulated(f"the normal value of {chain.lead.tag} is in a unit of another kind than its range")


def _simulated(laid_out: Override) -> Override | NotSimulated:
    from loopdoc.engineering.branched_simulation import clock_of, simulate_branched

    structures = [laid_out.structure, laid_out.otherwise]
    base = clock_of(structures, ())
    if isinstance(base, Unsuited):
        return NotSimulated(base.reason)
    scenarios = _scenarios(laid_out, base)
    clock = clock_of(structures, scenarios)
    if isinstance(clock, Unsuited):
        return NotSimulated(clock.reason)
    # Each upset by itself: what passes again is watched for longer than what stays.
    found = []
    for scenario in scenarios:
        (ours,), (theirs,) = simulate_branched(structures, [scenario])
        found.append(OverrideResponses(scenario, ours, theirs))
    return replace(laid_out, responses=tuple(found))


def _scenarios(laid_out: Override, clock: Clock) -> tuple[BranchedScenario, ...]:
    """The setpoint to its limit, what the register declares, and each that stands by past its setpoint and back."""
    structure, first = laid_out.structure, laid_out.below
    busy = first + laid_out.normal
    found = []
    loop = structure.loops[busy]
    # Toward where another is to take over: up where the lowest demand passes and the demand raises the measurement.
    up = (loop.processes[0].gain > 0.0) == structure.lowest
    limit = loop.controller.setpoint_high_pct if up else loop.controller.setpoint_low_pct
    if abs(limit - loop.start_pct) > ERROR_LEAST_PCT:
        found.append(BranchedScenario(TO_THE_LIMIT, busy, limit - loop.start_pct))
    named: set[str] = set()
    for place, dynamics in enumerate(laid_out.candidates):
        for scenario in declared_scenarios(dynamics.chain):
            (one,) = scenario.disturbances
            at = first + place if one.level == first else one.level
            if scenario.name not in named:
                named.add(scenario.name)
                moved = replace(one, level=at)
                found.append(BranchedScenario(scenario.name, busy, 0.0, (moved,), origin="declared"))
    horizon_s = clock.steps * clock.step_s
    for place in laid_out.standing_by:
        at = first + place
        idle, process = structure.loops[at], structure.loops[at].processes[0]
        away = abs(idle.start_error_pct)
        toward = math.copysign(1.0, idle.start_error_pct)
        if process.integrating:
            # A load, as of the standard upsets, that carries it there in time.
            path = Process(abs(process.gain), process.lags_s, integrating=True)
            size, lasts_s = UPSET_PCT, horizon_s + away / (UPSET_PCT * abs(process.gain))
        else:
            path, size, lasts_s = Process(1.0, process.lags_s), away + UPSET_PCT, horizon_s
        tag = laid_out.candidates[place].chain.lead.tag
        found.append(
            BranchedScenario(
                f"{tag} past its setpoint", at, 0.0, (Disturbance(at, toward * size, path),), lasts_s, origin="sized"
            )
        )
    return tuple(found)
