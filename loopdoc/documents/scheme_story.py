"""How a control scheme works, told in sentences: who measures what, who commands whom, which way and why."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from loopdoc.documents.naming import (
    Names,
    element_phrase,
    in_brackets,
    made_to_move,
    moves,
    moves_by_itself,
    over_range,
    percent,
    quantity,
    with_sensor,
)
from loopdoc.documents.wording import clause, grouped, listed, number_word, sentences, told_of, value
from loopdoc.engineering.direction import Undecided, element_sign, path_sign, process_on, process_sign
from loopdoc.engineering.functions import fed_by, feeds_forward
from loopdoc.engineering.pairing import ControlledLoop, Plant, Route, Scheme
from loopdoc.engineering.spreading import PASSIVE_MODES, SELECTORS, Moves, command, feedback, normal_mode, stands_by
from loopdoc.register.model import FinalElement, Function, Loop, known
from loopdoc.register.quantity import display_number


@dataclass(frozen=True, slots=True)
class _Reason:
    """Why a controller acts as it does: `the flow` `rises` `as FV-2011 opens`."""

    what: str
    rises: bool
    how: str


@dataclass(frozen=True, slots=True)
class _Step:
    """What one controller does when a measurement rises."""

    who: str
    does: str
    """`asks for a lower flow`, `closes FV-2011`."""
    made: str
    """`ask for a lower flow`, `close FV-2011`."""
    asked: str
    """`for a lower flow`, where the step before has the verb already; empty where something is moved."""


class SchemeStory:
    """One scheme, or those of its loops that stand in one unit, in words."""

    def __init__(self, plant: Plant, scheme: Scheme, loops: Sequence[Loop], ordinal: int) -> None:
        self._plant = plant
        self._scheme = scheme
        self.loops = tuple(loops)
        self.controlled = tuple(plant.controlled[loop.tag] for loop in loops if loop.tag in plant.controlled)
        self.acting = tuple(loop for loop in self.controlled if normal_mode(loop) not in PASSIVE_MODES)
        self.names = Names((*scheme.loops, *_inputs(plant, scheme)))
        self._ordinal = ordinal
        """Which story of the document it is: neighbouring stories are not told in the same words."""

    def purpose(self) -> str:
        """What the loops are for, as the register says it."""
        return " ".join(told_of(loop.tag, purpose) for loop in self.loops if (purpose := known(loop.purpose)))

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
        what, how = f"the {quantity(loop.loop)}", self._how(loop)
        if any(self._how(other) == how for other in self.acting[:position] if not self._plant.links_to.get(loop.tag)):
            how = "in the same way"
        if loop not in self.acting:
            would = f" by moving {listed(route.end.tag for route in loop.routes)}" if loop.routes else ""
            beside = in_brackets(measurement) if measurement else ""
            return f"{loop.tag}, which would hold {what}{beside}{would}, is {_idle(loop)}"
        by = with_sensor(measurement) if measurement else ""
        if measurement is None or not by:
            return f"{loop.tag} holds {what} {how}"
        if self._plant.links_to.get(loop.tag):
            return f"{loop.tag} holds {what}{in_brackets(measurement)} {how}"
        over = over_range(measurement)
        limits = any(known(function.kind) in SELECTORS and stands_by(loop, function) for function in _functions(loop))
        if (self._ordinal + position) % 2:
            verb, end = ("keeps", f"from passing its setpoint {how}") if limits else ("holds", how)
            return f"{loop.tag} {verb} {what}, which {by} measures{over}, {end}"
        goal = "keeps it from passing its setpoint" if limits else "holds it at its setpoint"
        return f"{by} measures {what}{over}, and {loop.tag} {goal} {how}"

    def _how(self, loop: ControlledLoop) -> str:
        """`by moving FV-2011, an equal percentage control valve`."""
        if not loop.routes:
            output = known(loop.controller.output)
            to = known(output.to) if output else None
            return f"with its output to {to}, which the register does not define" if to else ""
        first = loop.routes[0]
        for function in first.via:
            kind = known(function.kind)
            if kind in SELECTORS:
                return f"by what it asks of {first.end.tag} through {function.tag}"
            if kind == "sum":
                return f"by correcting the setpoint of {first.end.tag} at {function.tag}"
            if kind == "ratio":
                return f"by setting the ratio at {function.tag}"
            if kind == "split range":
                return f"through {function.tag}"
        through = f" through {listed(function.tag for function in first.via)}" if first.via else ""
        if isinstance(first.end, FinalElement):
            if known(first.end.kind) in ("variable-speed drive", "motor"):
                return f"by the speed of {element_phrase(first.end)}{through}"
            return f"by moving {element_phrase(first.end, quantity(loop.loop))}{through}"
        return f"by commanding {first.end.tag}{through}"

    # -- functions

    def _computes(self, function: Function, loop: ControlledLoop | None) -> str:
        kind, to = known(function.kind), known(function.to) or ""
        if kind in SELECTORS:
            return self._selects(function, "lower" if kind == "low select" else "higher", to)
        if kind == "split range":
            return self._splits(function)
        terms = listed(self._term(function, tag) for tag in fed_by(self._plant, function, ""))
        if kind == "sum" and terms:
            own = f"the output of {loop.tag}" if loop else "its other inputs"
            return f"{function.tag} adds {terms} to {own}, and the sum is the setpoint of {to}"
        if kind == "ratio" and terms:
            by = f"the ratio that {loop.tag} asks for" if loop else "a ratio that the operator sets"
            limits, usual = known(function.span), known(function.normal)
            between = [f"from {value(limits)}" if limits else "", f"normally {display_number(usual)}" if usual else ""]
            told = listed((part for part in between if part), "and")
            return (
                f"{function.tag} multiplies {terms} by {by}{f', {told}' if told else ''}; "
                f"the product is the setpoint of {to}"
            )
        if kind in ("lead-lag", "characteriser") and feeds_forward(self._plant, function):
            return self._feeds_forward(function, kind, to)
        return f"{function.tag} is a {kind} between the two" if kind else ""

    def _feeds_forward(self, function: Function, kind: str, to: str) -> str:
        """A function that no controller's output goes through: feedforward."""
        tags = fed_by(self._plant, function, "")
        by = "through its curve"
        if kind == "lead-lag":
            times = [("led by", function.lead), ("lagged by", function.lag)]
            by = listed(f"{how} {value(time)}" for how, time in times if time is not None)
        terms = listed(self._term(function, tag) for tag in tags)
        return f"{function.tag} feeds {terms} forward to {to}{f', {by}' if by else ''}"

    def _selects(self, function: Function, which: str, to: str) -> str:
        candidates = self._plant.commanders.get(function.tag, ())
        passed = f"{function.tag} passes the {which} of the demands of {listed(candidates)} on to {to}"
        loops = [self._plant.controlled[tag] for tag in candidates if tag in self._plant.controlled]
        idle = [loop.tag for loop in loops if stands_by(loop, function)]
        busy = [loop.tag for loop in loops if loop.tag not in idle]
        if not idle or not busy:
            return passed
        return (
            f"{passed}. In normal running {listed(busy)} {_verb(busy, 'commands')} "
            f"and {listed(idle)} {_verb(idle, 'stands')} by"
        )

    def _term(self, function: Function, tag: str) -> str:
        loop = self._plant.register.loops.get(tag) or self._plant.loop_of_transmitter.get(tag)
        weight = function.weights.get(tag, 1.0)
        times = "" if weight == 1.0 else f"{display_number(weight)} times "
        measurement = known(loop.measurement) if loop else None
        if tag in self._plant.register.functions:
            return f"{times}the output of {tag}"
        if loop is None or measurement is None:
            return f"{times}{tag}"
        return f"{times}the {quantity(loop)}{in_brackets(measurement)}"

    def _splits(self, function: Function) -> str:
        parts: list[str] = []
        for tag, branch in function.outputs.items():
            element = self._plant.register.final_elements.get(tag)
            phrase = element_phrase(element) if element else tag
            way = "rises" if branch.high > branch.low else "falls"
            ends = f"from {display_number(branch.low)} to {percent(branch.high)}"
            start = f"{phrase}{',' if ',' in phrase else ''}"
            parts.append(f"{start} opens as the output {way} {ends}" if not parts else f"{start} as it {way} {ends}")
        told = f"{function.tag} splits the output: {'; '.join(parts)}"
        return f"{told}. {gap}" if (gap := _gap(function)) else told

    def _reversals(self, loop: ControlledLoop) -> Iterator[str]:
        """What a reader must know of a final element to follow the signs: a reversal, a falling signal."""
        for route in loop.routes:
            element = route.end
            if not isinstance(element, FinalElement) or loop not in self.acting:
                continue
            opens_on, reversed_block = known(element.opens_on), known(element.output_block) == "reversed"
            if reversed_block and opens_on == "falling signal":
                source = f"from {route.via[-1].tag}" if route.via else "of output"
                yield (
                    f"{element.tag} opens on a falling signal, and its output block is reversed, "
                    f"so that {percent(0)} {source} still means {_shut(element)}"
                )
            elif opens_on == "falling signal":
                yield f"{element.tag} opens on a falling signal, so that a rising output closes it"
            elif reversed_block and opens_on:
                yield f"The output block of {element.tag} is reversed, so that a rising output closes it"

    # -- which way, and why

    def rising(self) -> str:
        """What happens on a rising measurement, and why each controller acts as it does."""
        told: list[str] = []
        tags = {loop.tag for loop in self.acting}
        leads = [loop for loop in self.acting if not tags & {one.tag for one in self._plant.primaries_of(loop.tag)}]
        followed: list[tuple[str, ...]] = []
        for loop in leads:
            steps = self._steps(loop)
            what = self.names.bare(loop.loop)
            shape = tuple(step.asked or step.does for step in steps)
            if steps and shape in followed:
                told.append(f"{loop.tag} does the same when the {what} rises")
            elif steps and self._ordinal % 3 == 1:
                told.append(f"A rising {what} makes {_chained(steps, [step.made for step in steps])}")
            elif steps:
                told.append(f"When the {what} rises, {_chained(steps, [step.does for step in steps])}")
            followed.append(shape)
        actions = self._actions()
        if len(self.acting) == 1 and len(told) == 1 and self._ordinal % 3 == 2:
            loop = self.acting[0]
            start, because, why = actions[0].partition(", because ") if actions else ("", "", "")
            if because:  # why first, then what follows
                follows = clause(told[0]).replace(f"{loop.tag} ", "it ", 1)
                return sentences(f"Because {why}, {start}: {follows}")
        return sentences(*told, *actions)

    def _steps(self, loop: ControlledLoop) -> list[_Step]:
        """Who asks for what, and who moves what, when a measurement rises; none where a sign is not known."""
        found = Moves()
        command(self._plant, loop, feedback(loop), found)
        steps: list[_Step] = []
        for move in found.setpoints:
            if isinstance(move.direction, Undecided) or move.direction == 0:
                return []
            asked = f"for a {'higher' if move.direction > 0 else 'lower'} {self.names.bare(move.loop.loop)}"
            steps.append(_Step(move.by, f"asks {asked}", f"ask {asked}", asked))
        moved = [(move.element, move.direction) for move in found.elements if isinstance(move.direction, int)]
        if moved and len(moved) == len(found.elements) and all(direction for _, direction in moved):
            mover = found.setpoints[-1].loop.tag if found.setpoints else loop.tag
            does = listed(moves(element, direction) for element, direction in moved)
            made = listed(made_to_move(element, direction) for element, direction in moved)
            steps.append(_Step(mover, does, made, ""))
        return steps

    def _actions(self) -> list[str]:
        """Why each controller is direct or reverse acting."""
        told: list[str] = []
        reasons: list[tuple[str, str, list[_Reason]]] = []
        for loop in self.acting:
            action = known(loop.controller.action)
            signs = [path_sign(loop, route) for route in loop.routes]
            found = [reason for route in loop.routes if (reason := self._reason(loop, route))]
            if action is None or not loop.routes:
                continue
            if len(found) < len(signs) or any(isinstance(sign, Undecided) for sign in signs):
                end = loop.routes[0].end
                moved = self.names.the(end) if isinstance(end, Loop) else "its output"
                told.append(
                    f"{loop.tag} is {action} acting, but the register does not say what {self.names.the(loop.loop)} "
                    f"does when {moved} rises"
                )
            elif any(not isinstance(sign, Undecided) and sign.action != action for sign in signs):
                told.append(
                    f"{loop.tag} is written as {action} acting although {_because(found)}, so that it drives an "
                    "error on instead of back"
                )
            else:
                reasons.append((action, loop.tag, found))
        by_action = grouped((action, tag) for action, tag, _ in reasons)
        parts = []
        for action, tags in by_action.items():
            who = listed(tags)
            if len(self.acting) > 1 and len(by_action) == 1 and len(tags) == len(self.acting):
                who = "Both" if len(tags) == 2 else f"All {number_word(len(tags))}"
            why = _because([reason for kind, _, found in reasons if kind == action for reason in found])
            parts.append(f"{who} {'is' if len(tags) == 1 else 'are'} {action} acting, because {why}")
        return [*(["; ".join(parts)] if parts else []), *told]

    def _reason(self, loop: ControlledLoop, route: Route) -> _Reason | None:
        """Why a rising output moves the measurement as it does; None where the effect is not known."""
        process = process_on(loop, route)
        effect = process_sign(process) if process else Undecided("")
        if isinstance(effect, Undecided):
            return None
        what = self.names.the(loop.loop)
        if isinstance(route.end, Loop):
            other = self.names.the(route.end)
            return _Reason(what, effect > 0, f"with {other}" if effect > 0 else f"as {other} rises")
        element = element_sign(route.end)
        if isinstance(element, Undecided):
            return None
        opens = element.sign * (-1 if route.branch is not None and route.branch.low > route.branch.high else 1)
        if opens > 0:
            return _Reason(what, effect > 0, f"as {moves_by_itself(route.end, 1)}")
        return _Reason(what, effect < 0, f"as a rising output {moves(route.end, -1)}")


def headline(loops: Sequence[Loop]) -> str:
    """Name of a scheme: the service of its lead, else its tag."""
    return known(loops[0].service) or loops[0].tag


def _because(reasons: Sequence[_Reason]) -> str:
    """Reasons in one clause, nothing said twice."""
    by_what: dict[tuple[str, bool], list[str]] = {}
    for reason in reasons:
        by_what.setdefault((reason.what, reason.rises), []).append(reason.how)
    by_how: dict[tuple[bool, str], list[str]] = {}
    for (what, rises), hows in by_what.items():
        by_how.setdefault((rises, listed(hows)), []).append(what)
    parts: list[str] = []
    last: tuple[bool, int] | None = None
    for (rises, how), subjects in by_how.items():
        verb = ("rise" if rises else "fall") + ("s" if len(subjects) == 1 else "")
        # `the level rises with the flow and the flow as FV-1002 opens`
        said = last == (rises, 1) and len(subjects) == 1 and len(by_how) == 2
        parts.append(f"{listed(subjects)} {how}" if said else f"{listed(subjects)} {verb} {how}")
        last = (rises, len(subjects))
    several = len(parts) > 1 and any(len(subjects) > 1 for subjects in by_how.values())
    return f"{', '.join(parts[:-1])}, and {parts[-1]}" if several else listed(parts)


def _chained(steps: Sequence[_Step], verbs: Sequence[str]) -> str:
    """`AIC-2015 asks for a higher temperature, TIC-2014 for a higher flow, and FIC-2011 opens FV-2011`."""
    told = [
        f"{step.who} {step.asked if index and step.asked else verb}"
        for index, (step, verb) in enumerate(zip(steps, verbs, strict=True))
    ]
    return listed(told) if len(told) < 3 else f"{', '.join(told[:-1])}, and {told[-1]}"


def _functions(loop: ControlledLoop) -> list[Function]:
    """The functions on a controller's ways, each once."""
    found: list[Function] = []
    for route in loop.routes:
        found.extend(function for function in route.via if function not in found)
    return found


def _gap(function: Function) -> str:
    """What stands between two branches of a split range that open in opposite directions."""
    branches = sorted(function.outputs.values(), key=lambda branch: min(branch.low, branch.high))
    if len(branches) != 2:
        return ""
    lower, upper = branches
    if not (lower.low > lower.high and upper.high > upper.low) or lower.low == upper.low:
        return ""
    ends = f"{display_number(min(lower.low, upper.low))} and {percent(max(lower.low, upper.low))}"
    return f"Between {ends} both are {'shut' if lower.low < upper.low else 'partly open'}"


def _shut(element: FinalElement) -> str:
    kind = known(element.kind)
    if kind in ("variable-speed drive", "motor"):
        return "the lowest speed"
    return "no power" if kind == "heater bank" else f"a shut {'damper' if kind == 'damper' else 'valve'}"


def _verb(subjects: Sequence[str], singular: str) -> str:
    return singular if len(subjects) == 1 else singular.removesuffix("s")


def _idle(loop: ControlledLoop) -> str:
    mode = normal_mode(loop)
    return "kept in manual" if mode == "manual" else "out of service"


def _inputs(plant: Plant, scheme: Scheme) -> list[Loop]:
    """Loops whose measurements enter the functions of a scheme."""
    tags = [tag for function in scheme.functions for tag in function.inputs]
    found = [plant.register.loops.get(tag) or plant.loop_of_transmitter.get(tag) for tag in tags]
    return [loop for loop in found if loop]
