"""How a control scheme works, told in sentences: who measures what, who commands whom, which way and why."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from loopdoc.documents.language import Language
from loopdoc.documents.language.facts import Action, Asked, Moved, Reason, Rise, Share
from loopdoc.documents.naming import Names
from loopdoc.documents.tracing import end_of
from loopdoc.documents.wording import grouped, sentences
from loopdoc.engineering.direction import Undecided, element_sign, path_sign, process_on, process_sign
from loopdoc.engineering.functions import fed_by, feeds_forward
from loopdoc.engineering.pairing import ControlledLoop, Plant, Route, Scheme
from loopdoc.engineering.spreading import PASSIVE_MODES, SELECTORS, Moves, command, feedback, normal_mode, stands_by
from loopdoc.register.model import FinalElement, Function, Loop, known


class SchemeStory:
    """One scheme, or those of its loops that stand in one unit, in words."""

    def __init__(
        self, plant: Plant, scheme: Scheme, loops: Sequence[Loop], language: Language
    ) -> None:
        self._plant = plant
        self._scheme = scheme
        self.loops = tuple(loops)
        self.controlled = tuple(plant.controlled[loop.tag] for loop in loops if loop.tag in plant.controlled)
        self.acting = tuple(loop for loop in self.controlled if normal_mode(loop) not in PASSIVE_MODES)
        self.names = Names((*scheme.loops, *_inputs(plant, scheme)), language)
        self._language = language

    def purpose(self) -> str:
        """What the loops are for, as the register says it."""
        told = (self._language.purpose(loop.tag, purpose) for loop in self.loops if (purpose := known(loop.purpose)))
        return " ".join(told)

    # -- who measures, who commands

    def course(self) -> str:
        """Who measures what, and who commands whom through which function."""
        told: list[str] = []
        explained: set[str] = set()
        tags = {loop.tag for loop in self.controlled}
        for function in self._scheme.functions:
            # A function that no loop of this story commands: the operator does, or a loop of another unit.
            commanders = set(self._plant.commanders.get(function.tag, ()))
            if known(function.to) in tags and not commanders & tags:
                explained.add(function.tag)
                elsewhere = [one for tag, one in self._plant.controlled.items() if tag in commanders]
                told.append(self._computes(function, elsewhere[0] if elsewhere else None))
        for position, loop in enumerate(self.controlled):
            told.append(self._holds(loop, position))
            waiting = {one.tag for one in self.controlled[position + 1 :]}
            for function in _functions(loop):
                if function.tag not in explained and not waiting & set(self._plant.commanders.get(function.tag, ())):
                    explained.add(function.tag)
                    told.append(self._computes(function, loop))
            told.extend(self._reversals(loop))
        return sentences(*told)

    def _holds(self, loop: ControlledLoop, position: int) -> str:
        measurement = known(loop.loop.measurement)
        language, what, how = self._language, self._language.quantity(loop.loop), self._how(loop)
        if any(self._how(other) == how for other in self.acting[:position] if not self._plant.links_to.get(loop.tag)):
            how = language.in_the_same_way()
        if loop not in self.acting:
            ends = [route.end.tag for route in loop.routes]
            return language.idle_loop(loop.tag, what, measurement, ends, normal_mode(loop) or "")
        if measurement is None or known(measurement.transmitter) is None:
            return language.holds(loop.tag, what, how)
        if self._plant.links_to.get(loop.tag):
            return language.holds(loop.tag, what, how, measurement)
        limits = any(known(function.kind) in SELECTORS and stands_by(loop, function) for function in _functions(loop))
        return language.measured_and_held(loop.tag, what, how, measurement, limits=limits)

    def _how(self, loop: ControlledLoop) -> str:
        """`by moving FV-2011, an equal percentage control valve`."""
        language = self._language
        if not loop.routes:
            output = known(loop.controller.output)
            to = known(output.to) if output else None
            return language.by_nothing_defined(to) if to else ""
        first = loop.routes[0]
        for function in first.via:
            kind = known(function.kind)
            if kind in SELECTORS:
                return language.by_selector(first.end.tag, function.tag)
            if kind == "sum":
                return language.by_sum(first.end.tag, function.tag)
            if kind == "ratio":
                return language.by_ratio(function.tag)
            if kind == "split range":
                return language.by_split(function.tag)
        through = [function.tag for function in first.via]
        if isinstance(first.end, FinalElement):
            return language.by_element(first.end, through, language.quantity(loop.loop))
        return language.by_commanding(first.end.tag, through)

    # -- functions

    def _computes(self, function: Function, loop: ControlledLoop | None) -> str:
        kind, to, language = known(function.kind), known(function.to) or "", self._language
        if kind in SELECTORS:
            return self._selects(function, kind == "low select", to)
        if kind == "split range":
            return self._splits(function)
        terms = [self._term(function, tag) for tag in fed_by(self._plant, function, "")]
        if kind == "sum" and terms:
            return language.adds(function.tag, terms, loop.tag if loop else "", to)
        if kind == "ratio" and terms:
            limits, usual = known(function.span), known(function.normal)
            return language.multiplies(
                function.tag, terms, loop.tag if loop else "", language.value(limits) if limits else "",
                language.number(usual) if usual else "", to,
            )  # fmt: skip
        if kind in ("lead-lag", "characteriser") and feeds_forward(self._plant, function):
            # A function that no controller's output goes through: feedforward.
            times = [language.value(time) if time is not None else "" for time in (function.lead, function.lag)]
            return language.feeds_forward(
                function.tag, terms, to, (times[0], times[1]) if kind == "lead-lag" else None
            )
        return language.function_between(function.tag, kind) if kind else ""

    def _selects(self, function: Function, lower: bool, to: str) -> str:
        candidates = self._plant.commanders.get(function.tag, ())
        loops = [self._plant.controlled[tag] for tag in candidates if tag in self._plant.controlled]
        idle = [loop.tag for loop in loops if stands_by(loop, function)]
        busy = [loop.tag for loop in loops if loop.tag not in idle]
        return self._language.selects(function.tag, lower, candidates, to, busy, idle)

    def _term(self, function: Function, tag: str) -> str:
        loop = self._plant.register.loops.get(tag) or self._plant.loop_of_transmitter.get(tag)
        weight = function.weights.get(tag, 1.0)
        measurement = known(loop.measurement) if loop else None
        is_function = tag in self._plant.register.functions
        if is_function or loop is None or measurement is None:
            return self._language.term_of_function(weight, tag, is_function=is_function)
        return self._language.term_of_measurement(weight, self._language.quantity(loop), measurement)

    def _splits(self, function: Function) -> str:
        elements = self._plant.register.final_elements
        shares = [
            Share(tag, elements.get(tag), end_of(one, one.low), end_of(one, one.high))
            for tag, one in function.outputs.items()
        ]
        return self._language.splits(function.tag, shares, _gap(function))

    def _reversals(self, loop: ControlledLoop) -> Iterator[str]:
        """What a reader must know of a final element to follow the signs: a reversal, a falling signal."""
        for route in loop.routes:
            element = route.end
            if not isinstance(element, FinalElement) or loop not in self.acting:
                continue
            opens_on, reversed_block = known(element.opens_on), known(element.output_block) == "reversed"
            if reversed_block and opens_on == "falling signal":
                yield self._language.reversed_twice(element, route.via[-1].tag if route.via else "")
            elif opens_on == "falling signal":
                yield self._language.opens_on_falling(element.tag)
            elif reversed_block and opens_on:
                yield self._language.block_reversed(element.tag)

    # -- which way, and why

    def rising(self) -> str:
        """What happens on a rising measurement, and why each controller acts as it does."""
        tags = {loop.tag for loop in self.acting}
        leads = [loop for loop in self.acting if not tags & {one.tag for one in self._plant.primaries_of(loop.tag)}]
        rises: list[Rise] = []
        followed: list[tuple[object, ...]] = []
        for loop in leads:
            steps = self._steps(loop)
            shape = tuple((step.name, step.up) if isinstance(step, Asked) else step.moves for step in steps)
            rises.append(Rise(loop.tag, self.names.bare(loop.loop), tuple(steps), bool(steps) and shape in followed))
            followed.append(shape)
        actions, told = self._actions()
        return self._language.rising([rise for rise in rises if rise.steps], actions, told)

    def _steps(self, loop: ControlledLoop) -> list[Asked | Moved]:
        """Who asks for what, and who moves what, when a measurement rises; none where a sign is not known."""
        found = Moves()
        command(self._plant, loop, feedback(loop), found)
        steps: list[Asked | Moved] = []
        for move in found.setpoints:
            if isinstance(move.direction, Undecided) or move.direction == 0:
                return []
            steps.append(Asked(move.by, move.loop.tag, self.names.bare(move.loop.loop), move.direction > 0))
        moved = [(move.element, move.direction) for move in found.elements if isinstance(move.direction, int)]
        if moved and len(moved) == len(found.elements) and all(direction for _, direction in moved):
            steps.append(Moved(found.setpoints[-1].loop.tag if found.setpoints else loop.tag, tuple(moved)))
        return steps

    def _actions(self) -> tuple[list[Action], list[str]]:
        """Why each controller is direct or reverse acting, and which action is not explained or wrong."""
        told: list[str] = []
        reasons: list[tuple[str, str, list[Reason]]] = []
        for loop in self.acting:
            action = known(loop.controller.action)
            signs = [path_sign(loop, route) for route in loop.routes]
            found = [reason for route in loop.routes if (reason := self._reason(loop, route))]
            if action is None or not loop.routes:
                continue
            if len(found) < len(signs) or any(isinstance(sign, Undecided) for sign in signs):
                end = loop.routes[0].end
                moved = self.names.bare(end) if isinstance(end, Loop) else None
                told.append(self._language.action_not_explained(loop.tag, action, self.names.bare(loop.loop), moved))
            elif any(not isinstance(sign, Undecided) and sign.action != action for sign in signs):
                told.append(self._language.action_wrong(loop.tag, action, found))
            else:
                reasons.append((action, loop.tag, found))
        by_action = grouped((action, tag) for action, tag, _ in reasons)
        every = len(self.acting) > 1 and len(by_action) == 1
        actions = [
            Action(
                tags,
                every and len(tags) == len(self.acting),
                action,
                tuple(reason for kind, _, found in reasons if kind == action for reason in found),
            )
            for action, tags in by_action.items()
        ]
        return actions, told

    def _reason(self, loop: ControlledLoop, route: Route) -> Reason | None:
        """Why a rising output moves the measurement as it does; None where the effect is not known."""
        process = process_on(loop, route)
        effect = process_sign(process) if process else Undecided("")
        if isinstance(effect, Undecided):
            return None
        what = self.names.bare(loop.loop)
        if isinstance(route.end, Loop):
            return Reason(what, effect > 0, beside=self.names.bare(route.end), same_way=effect > 0)
        element = element_sign(route.end)
        if isinstance(element, Undecided):
            return None
        opens = element.sign * (-1 if route.branch is not None and route.branch.low > route.branch.high else 1)
        return Reason(what, effect * opens > 0, element=route.end, opened=opens > 0)


def headline(loops: Sequence[Loop]) -> str:
    """Name of a scheme: the service of its lead, else its tag."""
    return known(loops[0].service) or loops[0].tag


def _functions(loop: ControlledLoop) -> list[Function]:
    """The functions on a controller's ways, each once."""
    found: list[Function] = []
    for route in loop.routes:
        found.extend(function for function in route.via if function not in found)
    return found


def _gap(function: Function) -> tuple[float, float, bool] | None:
    """Where two branches of a split range that open in opposite directions meet, and whether both are shut there."""
    branches = sorted(function.outputs.values(), key=lambda branch: min(branch.low, branch.high))
    if len(branches) != 2:
        return None
    lower, upper = branches
    if not (lower.low > lower.high and upper.high > upper.low) or lower.low == upper.low:
        return None
    first, last = sorted((end_of(lower, lower.low), end_of(upper, upper.low)))
    return first, last, lower.low < upper.low


def _inputs(plant: Plant, scheme: Scheme) -> list[Loop]:
    """Loops whose measurements enter the functions of a scheme."""
    tags = [tag for function in scheme.functions for tag in function.inputs]
    found = [plant.register.loops.get(tag) or plant.loop_of_transmitter.get(tag) for tag in tags]
    return [loop for loop in found if loop]
