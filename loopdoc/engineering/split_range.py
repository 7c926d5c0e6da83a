"""A split range as a whole: one output on several final elements, simulated across the handover between them.

Margins hold branch by branch, since about any point one branch or the other answers. What the branches bring to the
measurement adds up, each by its own linear model; the gains are per percent of opening as the register states them,
so that the inherent characteristic of a valve is not applied on top.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import TYPE_CHECKING

from loopdoc.engineering.branched import Branch, BranchedLoop, BranchedScenario, BranchedStructure
from loopdoc.engineering.clock import Unsuited
from loopdoc.engineering.comparison import (
    UPSET_PCT,
    NotSimulated,
    declared_scenarios,
    not_to_be_simulated,
    structure_of,
)
from loopdoc.engineering.direction import Undecided, element_sign
from loopdoc.engineering.dynamics import ChainDynamics
from loopdoc.engineering.functions import Curve, curve_of
from loopdoc.engineering.pairing import ControlledLoop, Route
from loopdoc.engineering.process import Process
from loopdoc.engineering.stages import Chain, Lacking, controller_of
from loopdoc.engineering.structure import Disturbance, standard_scenarios
from loopdoc.register.model import FinalElement, Function, Hold, known
from loopdoc.register.units import UNITS, UnitError

if TYPE_CHECKING:
    from loopdoc.engineering.branched_simulation import BranchedResponse

HANDOVER = "across the handover"
"""Name of the upset that is sized to carry the output over."""
MOVED_PCT = 0.5
"""Movement above which a final element has taken part [% of travel]."""


@dataclass(frozen=True, slots=True, eq=False)
class SplitRange:
    """The responses of a split range, and of the loops above it, across a handover."""

    chains: tuple[ChainDynamics, ...]
    """One for each final element."""
    function: Function
    structure: BranchedStructure
    near: int
    """Place of the final element that is moved at the start."""
    far: int
    """Place of the one that takes over."""
    handover_pct: float
    """Output halfway between the parts of the two [%]."""
    is_declared: bool
    """Whether the register gives the output at which it starts."""
    responses: tuple[BranchedResponse, ...]

    @property
    def lead(self) -> ControlledLoop:
        """The outermost loop."""
        return self.chains[0].chain.lead

    @property
    def elements(self) -> tuple[FinalElement, ...]:
        """The final elements, in the order of the chains."""
        return tuple(dynamics.chain.final_element for dynamics in self.chains)

    @property
    def worst(self) -> ChainDynamics:
        """The branch with the largest maximum sensitivity."""
        return max(self.chains, key=lambda dynamics: dynamics.margins[-1].max_sensitivity)

    def crosses(self, response: BranchedResponse) -> bool:
        """Whether the final element on the other side of the handover has moved."""
        start = self.structure.openings_pct[self.far]
        low, high = response.travel_range_pct[self.far]
        return max(start - low, high - start) > MOVED_PCT


def split_range(chains: Sequence[ChainDynamics]) -> SplitRange | NotSimulated | None:
    """Simulate the chains of a loop together; None where they are not branches of one split range."""
    from loopdoc.engineering.branched_simulation import clock_of, simulate_branched

    if len(chains) < 2 or len({tuple(level.loop.tag for level in one.chain.levels) for one in chains}) > 1:
        return None
    splits = [_splits(dynamics.chain.levels[0].route) for dynamics in chains]
    if any(len(found) != 1 or found != splits[0] for found in splits):
        return NotSimulated(f"the way from {chains[0].chain.levels[0].loop.tag} parts more than once")
    refused = next(filter(None, map(not_to_be_simulated, chains)), None)
    if refused is not None:
        return refused
    laid_out = _laid_out(chains)
    if isinstance(laid_out, Lacking):
        return NotSimulated(laid_out.reason)
    scenarios = _scenarios(laid_out)
    clock = clock_of([laid_out.structure], scenarios)
    if isinstance(clock, Unsuited):
        return NotSimulated(clock.reason)
    return replace(laid_out, responses=simulate_branched([laid_out.structure], scenarios)[0])


def _laid_out(chains: Sequence[ChainDynamics]) -> SplitRange | Lacking:
    """The structure of the chains, at its start."""
    inner = chains[0].chain.levels[0].loop
    routes = [dynamics.chain.levels[0].route for dynamics in chains]
    (function,) = _splits(routes[0])
    controller = controller_of(inner, routes[0])
    if isinstance(controller, Lacking):
        return controller
    stages = [dynamics.chain.stages[0] for dynamics in chains]
    if len({stage.lead_lags for stage in stages}) > 1:
        return Lacking(f"a lead-lag stands on one branch of {function.tag} and not on the other")
    if len({stage.process.integrating for stage in stages}) > 1:
        return Lacking(f"one branch of {function.tag} integrates and the other does not")
    limits = controller.output_low_pct, controller.output_high_pct
    openings = []
    for route in routes:
        opening = opening_of(route, inner.tag, limits)
        if isinstance(opening, Lacking):
            return opening
        openings.append(opening)
    bring = _brought([stage.process for stage in stages], openings)
    slopes = {math.copysign(1.0, right - left) for left, right in pairwise(bring.outputs) if right != left}
    if len(slopes) != 1:
        return Lacking(f"the branches of {function.tag} work against each other")
    parts = sorted(range(len(openings)), key=lambda place: sum(_part(openings[place])))
    declared = _declared_output(routes[0], inner.tag, limits)
    if isinstance(declared, Lacking):
        return declared
    about = 50.0 if declared is None else declared
    handovers = [
        ((_part(openings[lower])[1] + _part(openings[upper])[0]) / 2.0, lower, upper)
        for lower, upper in pairwise(parts)
    ]
    handover, lower, upper = min(handovers, key=lambda one: abs(one[0] - about))
    start = declared
    if start is None:
        start = _chosen_output(bring, handover, [stage.process for stage in stages], (lower, upper))
    near, far = (lower, upper) if start < handover else (upper, lower)
    plain = [structure_of(dynamics.chain) for dynamics in chains]
    loops = [
        BranchedLoop(
            controller, tuple(stage.process for stage in stages), None, plain[0].start_pct[0],
            lead_lags=stages[0].lead_lags,
        )
    ]  # fmt: skip
    for place, stage in enumerate(chains[0].chain.stages[1:], start=1):
        loops.append(
            BranchedLoop(
                stage.controller, (stage.process,), place - 1, plain[0].start_pct[place], lead_lags=stage.lead_lags
            )
        )
    branches = tuple(Branch(one.final_element, opening) for one, opening in zip(plain, openings, strict=True))
    structure = BranchedStructure(tuple(loops), branches, start)
    return SplitRange(tuple(chains), function, structure, near, far, handover, declared is not None, ())


def opening_of(route: Route, commander: str, limits_pct: tuple[float, float]) -> Curve | Lacking:
    """The opening of a final element [%] by the controller's output, between its limits [%], along a route."""
    assert isinstance(route.end, FinalElement)
    points = _as_it_enters(route, commander, limits_pct)
    for function in _after_split(route):
        kind = known(function.kind)
        if kind == "split range":
            assert route.branch is not None
            branch = route.branch.to("%")
            points = _through(points, _rising((branch.low, 0.0), (branch.high, 100.0)))
        elif kind == "characteriser":
            curve = curve_of(function, given=UNITS["%"], gives=UNITS["%"])
            if isinstance(curve, Undecided):
                return Lacking(curve.reason)
            points = _through(points, curve)
        elif kind != "lead-lag":
            return Lacking(f"what {function.tag} makes of one branch does not follow from the register")
    sign = element_sign(route.end)
    if isinstance(sign, Undecided):
        return Lacking(sign.reason)
    turned = _rising((0.0, 0.0), (100.0, 100.0)) if sign.sign > 0 else _rising((0.0, 100.0), (100.0, 0.0))
    points = _through(points, turned)
    return Curve(tuple(output for output, _ in points), tuple(opening for _, opening in points))


_Points = list[tuple[float, float]]
"""Output of the controller and what has become of it, joined by straight lines."""


def _splits(route: Route) -> list[Function]:
    """The split ranges on a route."""
    return [part for part in route.via if known(part.kind) == "split range"]


def _after_split(route: Route) -> tuple[Function, ...]:
    """The split range and what stands on its branch."""
    return route.via[route.via.index(_splits(route)[0]) :]


def _as_it_enters(route: Route, commander: str, limits_pct: tuple[float, float]) -> _Points:
    """What enters the split range; what a sum adds shifts the output and is left out, as in the margins."""
    points = [(limit, limit) for limit in limits_pct]
    for function in route.via[: -len(_after_split(route))]:
        if known(function.kind) == "sum":
            weight = function.weights.get(commander, 1.0)
            points = [(output, weight * value) for output, value in points]
        elif known(function.kind) == "characteriser":
            curve = curve_of(function, given=UNITS["%"], gives=UNITS["%"])
            if not isinstance(curve, Undecided):  # else there are no chains
                points = _through(points, curve)
        commander = function.tag
    return points


def _rising(one: tuple[float, float], other: tuple[float, float]) -> Curve:
    """A straight line between two points, written in whichever order."""
    (left, at_left), (right, at_right) = sorted((one, other))
    return Curve((left, right), (at_left, at_right))


def _through(points: _Points, curve: Curve) -> _Points:
    """Points through a curve, with a point more wherever it has a corner."""
    refined = points[:1]
    for (output, value), (next_output, next_value) in pairwise(points):
        corners = sorted(
            (x for x in curve.inputs if min(value, next_value) < x < max(value, next_value)),
            reverse=next_value < value,
        )
        for corner in corners:
            at = output + (corner - value) * (next_output - output) / (next_value - value)
            # A corner within a rounding of a point is that point.
            if refined[-1][0] < at < next_output:
                refined.append((at, corner))
        refined.append((next_output, next_value))
    return [(output, curve.at(value)) for output, value in refined]


def _brought(processes: Sequence[Process], openings: Sequence[Curve]) -> Curve:
    """What all final elements together bring to the measurement in the end, or to its slope, by the output [%]."""
    outputs = sorted({one for opening in openings for one in opening.inputs})
    return Curve(
        tuple(outputs),
        tuple(
            math.fsum(process.gain * opening.at(output) for process, opening in zip(processes, openings, strict=True))
            for output in outputs
        ),
    )


def _part(opening: Curve) -> tuple[float, float]:
    """The part of the output over which an opening changes [%]."""
    moving = [
        (left, right)
        for (left, right), (low, high) in zip(pairwise(opening.inputs), pairwise(opening.outputs), strict=True)
        if low != high
    ]
    return (moving[0][0], moving[-1][1]) if moving else (opening.inputs[0], opening.inputs[-1])


def _declared_output(route: Route, commander: str, limits_pct: tuple[float, float]) -> float | Lacking | None:
    """The controller's output in normal operation [%], from what enters the split range then; None if not given."""
    function = _after_split(route)[0]
    if function.normal_input is None:
        return None
    if isinstance(function.normal_input, Hold):
        return Lacking(f"the normal input of {function.tag} is on hold or could not be read")
    points = _as_it_enters(route, commander, limits_pct)
    entering = Curve(tuple(output for output, _ in points), tuple(value for _, value in points))
    try:
        output = entering.input_for(function.normal_input.to("%"))
    except UnitError:
        return Lacking(f"the normal input of {function.tag} is not in percent")
    return Lacking(f"no output of {commander} gives the normal input of {function.tag}") if output is None else output


def _load_pct(processes: Sequence[Process], place: int) -> float:
    """What the standard upset takes to be made good: a share of span, or of what one final element can do."""
    process = processes[place]
    return UPSET_PCT * abs(process.gain) if process.integrating else UPSET_PCT


def _chosen_output(
    bring: Curve, handover_pct: float, processes: Sequence[Process], places: tuple[int, int]
) -> float:
    """An output from which the standard upset, which raises the measurement, carries over to the other side.

    Half of what makes the upset good lies on either side of the handover, as far as the final element goes.
    """
    rises = bring.outputs[-1] > bring.outputs[0]
    near = places[1] if rises else places[0]
    at_handover = bring.at(handover_pct)
    reach = max(bring.outputs) - at_handover
    wanted = at_handover + 0.5 * min(_load_pct(processes, near), reach)
    # From the handover outward the first output that brings so much.
    points = list(zip(bring.inputs, bring.outputs, strict=True))
    if not rises:
        points.reverse()
    for (output, value), (next_output, next_value) in pairwise(points):
        if value <= wanted <= next_value and next_value > value:
            return output + (wanted - value) * (next_output - output) / (next_value - value)
    return handover_pct


def _scenarios(split: SplitRange) -> tuple[BranchedScenario, ...]:
    """The standard upsets, the declared ones, and one that crosses the handover where no standard one does."""
    structure = split.structure
    outermost, levels = len(structure.loops) - 1, len(structure.loops)
    inner = structure.loops[0].processes
    near = inner[split.near]
    path = Process(abs(near.gain) if near.integrating else 1.0, near.lags_s, integrating=near.integrating)
    found = []
    for scenario in standard_scenarios(levels, size_pct=UPSET_PCT):
        disturbances = tuple(
            replace(one, path=path) if one.level == 0 else one for one in scenario.disturbances
        )
        found.append(BranchedScenario(scenario.name, outermost, scenario.setpoint_step_pct, disturbances))
    chain: Chain = split.chains[split.near].chain
    found.extend(
        BranchedScenario(scenario.name, outermost, 0.0, scenario.disturbances, origin="declared")
        for scenario in declared_scenarios(chain)
    )
    bring = _brought(inner, [branch.opening for branch in structure.branches])
    beyond = bring.at(structure.output_pct) - bring.at(split.handover_pct)
    load = _load_pct(inner, split.near)
    if beyond and not 0.0 < beyond < load:
        other_side = min(bring.outputs) if beyond > 0.0 else max(bring.outputs)
        there = min(abs(beyond), 0.9 * abs(other_side - bring.at(split.handover_pct)))
        size = math.copysign(abs(beyond) + there, beyond) / (path.gain if path.integrating else 1.0)
        found.append(BranchedScenario(HANDOVER, outermost, 0.0, (Disturbance(0, size, path),), origin="sized"))
    return tuple(found)
