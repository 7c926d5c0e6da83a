"""Sign algebra along a controller's path: which action a loop needs.

Output percent -> output block -> signal -> final element -> process. The product of the signs is what the
controller sees: a positive path needs reverse action and a negative one direct action, with
error = setpoint - measurement. For a primary the path begins at the secondary's measurement: while the
secondary follows, it does not matter how its valve moves. Source: ISA-TR5.9 (direct and reverse action, from
memory); the algebra is elementary.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

from loopdoc.engineering.pairing import ControlledLoop, Route
from loopdoc.register.model import FinalElement, Function, Hold, Process, known


@dataclass(frozen=True, slots=True)
class SignStep:
    """One link of the path: what it is, in words, and its sign."""

    what: str
    sign: int


@dataclass(frozen=True, slots=True)
class PathSign:
    """The sign of a whole path, with its steps for the explanation."""

    steps: tuple[SignStep, ...]

    @property
    def sign(self) -> int:
        product = 1
        for step in self.steps:
            product *= step.sign
        return product

    @property
    def action(self) -> str:
        """The action that makes the loop's feedback negative."""
        return "reverse" if self.sign > 0 else "direct"

    def __str__(self) -> str:
        return "; ".join(f"{step.what} ({step.sign:+d})" for step in self.steps)


@dataclass(frozen=True, slots=True)
class Undecided:
    """Why the sign of a path does not follow from the register."""

    reason: str


def path_sign(controlled: ControlledLoop, route: Route) -> PathSign | Undecided:
    """The sign from a controller's output along one route to its own measurement."""
    loop = controlled.loop
    steps: list[SignStep] = []
    for commander, function in zip((controlled.tag, *(f.tag for f in route.via)), route.via, strict=False):
        weight = function.weights.get(commander, 1.0)
        if weight < 0:
            steps.append(SignStep(f"{function.tag} subtracts it", -1))
        if known(function.kind) == "characteriser":
            curve = curve_sign(function)
            if isinstance(curve, Undecided):
                return curve
            if curve < 0:
                steps.append(SignStep(f"the curve of {function.tag} falls", -1))
    if isinstance(route.end, FinalElement):
        if route.branch is not None and route.branch.low > route.branch.high:
            steps.append(SignStep(f"{route.end.tag} is driven by the falling output", -1))
        element = element_sign(route.end)
        if isinstance(element, Undecided):
            return element
        steps.extend(element.steps)
    process = process_on(controlled, route)
    if process is None:
        return Undecided(f"{loop.tag} has no `process` for {route.end.tag}")
    effect = process_sign(process)
    if isinstance(effect, Undecided):
        return Undecided(f"{loop.tag}: {effect.reason}")
    what = f"{route.end.tag}'s measurement" if not isinstance(route.end, FinalElement) else f"{route.end.tag}"
    verb = "rises" if effect > 0 else "falls"
    steps.append(SignStep(f"the measurement of {loop.tag} {verb} when {what} {_increases(route)}", effect))
    return PathSign(tuple(steps))


def curve_sign(function: Function) -> int | Undecided:
    """+1 where the curve of a characteriser rises all the way, -1 where it falls; +1 where none is given."""
    points = () if isinstance(function.curve, Hold) else function.curve
    outputs = [known(point.gives) for point in points]
    values = [out.value for out in outputs if out is not None]
    steps = [right - left for left, right in pairwise(values)]
    if all(step >= 0.0 for step in steps):
        return 1
    if all(step <= 0.0 for step in steps):
        return -1
    return Undecided(f"the curve of {function.tag} both rises and falls")


def element_sign(element: FinalElement) -> PathSign | Undecided:
    """The sign from output percent to opening (or speed): output block, then final element."""
    opens_on = known(element.opens_on)
    if opens_on not in ("rising signal", "falling signal"):
        return Undecided(f"{element.tag} does not say on which signal it opens")
    reversed_block = known(element.output_block) == "reversed"
    return PathSign(
        (
            SignStep(f"output block {'reversed' if reversed_block else 'direct'}", -1 if reversed_block else 1),
            SignStep(f"{element.tag} {_acts(element)} on {opens_on}", 1 if opens_on == "rising signal" else -1),
        )
    )


def process_on(controlled: ControlledLoop, route: Route) -> Process | None:
    """The process that a route acts through: the branch's own in a split range, else the loop's."""
    process = known(controlled.loop.process)
    if process is None:
        return None
    return process.branches.get(route.end.tag) if process.branches else process


def process_sign(process: Process) -> int | Undecided:
    """+1 where the measurement rises with the thing commanded, -1 where it falls."""
    effect = known(process.effect)
    gain = known(process.gain)
    if effect not in ("rises", "falls"):
        return Undecided("`process` does not say whether the measurement rises or falls")
    sign = 1 if effect == "rises" else -1
    if gain is not None and gain.value * sign < 0:
        return Undecided(f"`effect: {effect}` contradicts the sign of `gain: {gain}`")
    if gain is not None and gain.value == 0:
        return Undecided(f"`effect: {effect}` contradicts `gain: {gain}`, by which nothing moves the measurement")
    return sign


def _increases(route: Route) -> str:
    if not isinstance(route.end, FinalElement):
        return "rises"
    return _acts(route.end)


def _acts(element: FinalElement) -> str:
    """What a final element does as it goes from its shut end to its open one."""
    kind = known(element.kind)
    if kind in ("variable-speed drive", "motor"):
        return "speeds up"
    return "takes more power" if kind == "heater bank" else "opens"
