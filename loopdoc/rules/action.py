"""Rules on controller action and fail position."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.engineering.direction import PathSign, Undecided, curve_sign, path_sign, process_on
from loopdoc.engineering.pairing import ControlledLoop, Route
from loopdoc.register.model import FinalElement, Hold, Process, known
from loopdoc.register.place import Place
from loopdoc.register.quantity import Range
from loopdoc.rules.finding import Level
from loopdoc.rules.rule import Draft, draft, need, not_checked, only_if, rule

_MACHINES = ("variable-speed drive", "motor", "heater bank")
"""Final elements that stop where a valve closes."""


@rule(level=Level.ERROR, source="ISA-TR5.9-2023, direct and reverse action (from memory); sign algebra")
def action_wrong(controlled: ControlledLoop) -> Iterator[Draft]:
    """A controller acts in the direction that makes its error larger.

    Why:
        With the wrong action a disturbance is driven on instead of back: the output runs to its limit and
        stays there. It is the first fault that a loop shows when it is put into automatic.
    Breaks:
        A level controller on the outlet valve (opens on a rising signal; the level falls when it opens) with
        `action: reverse`.
    Holds:
        The product of the signs along the path is positive with reverse action and negative with direct
        action: output block (reversed -1), final element (opens on falling signal -1), process effect
        (falls -1). A primary's path begins at its secondary's measurement, whatever the valve below does.
    What this check cannot see:
        An effect that is stated wrongly, or a process whose effect turns round within the operating band.
    """
    action = need(controlled.controller.action, "the action")
    paths = _paths(controlled)
    decided = [path for path in paths if isinstance(path, PathSign)]
    if len(decided) < len(paths):
        not_checked("the direction of the path does not follow from the register")
    if len({path.sign for path in decided}) > 1:
        not_checked("the branches of a split range disagree")
    path = decided[0]
    if action != path.action:
        yield draft(
            controlled.tag,
            f"it is {action} acting, but its path needs {path.action} action: {path}; together {path.sign:+d}",
            remedy=f"write `action: {path.action}`, or correct the step that is not so",
            at=controlled.controller.origin.place("action"),
            related=tuple(_places(controlled)),
        )


@rule(level=Level.WARNING, source="sign algebra; common practice")
def action_undecided(controlled: ControlledLoop) -> Iterator[Draft]:
    """The register does not say which action a controller has or needs, or contradicts itself.

    Why:
        Nobody can then check the action on paper, and a wrong one is found only when the loop is put into
        automatic.
    Breaks:
        No `action`, no `process`, an `effect` on hold, `effect: rises` with a negative gain or a gain of 0, a final
        element without `opens_on`.
    Holds:
        Each step of each path has its sign.
    What this check cannot see:
        Whether the signs are true.
    """
    paths = _paths(controlled)
    told = set()
    turning = {
        function.tag
        for route in controlled.routes
        for function in route.via
        if known(function.kind) == "characteriser" and isinstance(curve_sign(function), Undecided)
    }
    for route, path in zip(controlled.routes, paths, strict=True):
        if turning & {function.tag for function in route.via}:
            continue  # `characteriser-not-monotonic` tells of it, at the curve
        if isinstance(path, Undecided) and path.reason not in told:
            told.add(path.reason)
            yield draft(
                controlled.tag,
                f"which action it needs cannot be told: {path.reason.removeprefix(f'{controlled.tag}: ')}",
                remedy=_remedy(controlled, route),
                at=_undecided_at(controlled, route),
            )
    signs = {path.sign for path in paths if isinstance(path, PathSign)}
    if controlled.controller.action is None and len(signs) == 1:
        path = next(path for path in paths if isinstance(path, PathSign))
        yield draft(
            controlled.tag,
            f"its action is not given; its path needs {path.action} action: {path}",
            remedy=f"write `action: {path.action}`, as the controller is configured",
            at=controlled.controller.origin,
        )


@rule(level=Level.ERROR, source="sign algebra; common practice for split ranges")
def split_range_direction(controlled: ControlledLoop) -> Iterator[Draft]:
    """The branches of a split range need opposite actions of their one controller.

    Why:
        Whichever action the controller has, one of the two elements then drives the measurement away from the
        setpoint: the loop works on one side of the split and runs off on the other.
    Breaks:
        Nitrogen that raises the pressure on 50 to 100 % and a vent that lowers it on 50 to 100 % too.
    Holds:
        The product of the signs is the same along every branch. Of two elements with opposite effects one opens as
        the output rises and the other as it falls (`PV-3001A: 50 to 100 %`, `PV-3001B: 50 to 0 %`).
    What this check cannot see:
        An effect that is stated wrongly.
    """
    only_if(len(controlled.routes) > 1)
    paths = _paths(controlled)
    routes = zip(controlled.routes, paths, strict=True)
    decided = [(route, path) for route, path in routes if isinstance(path, PathSign)]
    action = known(controlled.controller.action)
    wanted = action if action in {path.action for _, path in decided} else decided[0][1].action if decided else None
    for route, path in decided:
        if path.action == wanted:
            continue
        other = next(path for _, path in decided if path.action == wanted)
        splitter = next((function for function in route.via if route.end.tag in function.outputs), None)
        at = splitter.origin.place("outputs", route.end.tag) if splitter else controlled.loop.origin.place("process")
        turned = f"`{route.end.tag}: {_turned(route.branch)}`" if route.branch else "the other direction"
        yield draft(
            controlled.tag,
            f"it needs {path.action} action for {route.end.tag}: {path}; but {wanted} action for the rest: {other}",
            remedy=f"turn the branch round ({turned}), or correct the step that is not so",
            at=at,
            related=tuple(_places(controlled)),
        )
    if len(decided) < len(paths):
        not_checked("the direction of a branch does not follow from the register")


def _turned(branch: Range) -> Range:
    """A branch that opens the other way: from the same shut end to the other side, or turned round where it stands."""
    mirrored = 2 * branch.low - branch.high
    if 0 <= mirrored <= 100:
        return Range(branch.low, mirrored, branch.unit)
    return Range(branch.high, branch.low, branch.unit)


def _paths(controlled: ControlledLoop) -> list[PathSign | Undecided]:
    """The sign of each route of a controller."""
    if not controlled.routes:
        need(controlled.controller.output, "the output")
        not_checked("the output leads to nothing that the register knows")
    return [_held(controlled, route) or path_sign(controlled, route) for route in controlled.routes]


def _remedy(controlled: ControlledLoop, route: Route) -> str:
    """What to write so that the sign of a route follows."""
    if isinstance(route.end, FinalElement) and known(route.end.opens_on) is None:
        return f"write for {route.end.tag} `opens_on: rising signal` or `opens_on: falling signal`"
    process = process_on(controlled, route)
    if process and known(process.effect) and known(process.gain):
        return "correct the effect, or the gain and its sign"
    return "write under `process` whether the measurement rises or falls, as in `effect: rises`"


def _undecided_at(controlled: ControlledLoop, route: Route) -> Place:
    """Where the sign is lacking that would decide a route."""
    if isinstance(route.end, FinalElement) and known(route.end.opens_on) is None:
        return route.end.origin.place("opens_on")
    branch = ("branches", route.end.tag) if _has_branches(controlled) else ()
    return controlled.loop.origin.place("process", *branch, "effect")


def _held(controlled: ControlledLoop, route: Route) -> Undecided | None:
    """Why the process on a route has no known sign where it is on hold."""
    process = process_on(controlled, route)
    if isinstance(controlled.loop.process, Hold):
        return Undecided("`process` is on hold")
    return Undecided("the effect of the process is on hold") if process and isinstance(process.effect, Hold) else None


def _has_branches(controlled: ControlledLoop) -> bool:
    process = known(controlled.loop.process)
    return isinstance(process, Process) and bool(process.branches)


def _places(controlled: ControlledLoop) -> Iterator[tuple[Place, str]]:
    """Where the signs of a controller's paths stand."""
    for route in controlled.routes:
        end = route.end
        if isinstance(end, FinalElement):
            yield end.origin.place("opens_on"), f"{end.tag} opens on {known(end.opens_on)}"
            if known(end.output_block) == "reversed":
                yield end.origin.place("output_block"), f"the output block of {end.tag} is reversed"
        branch = ("branches", end.tag) if _has_branches(controlled) else ()
        yield controlled.loop.origin.place("process", *branch, "effect"), f"the effect of {end.tag}"


# ---------------------------------------------------------------- fail positions


@rule(level=Level.ERROR, source="common practice; the hazard study states the safe position")
def fail_position_unsafe(element: FinalElement) -> Iterator[Draft]:
    """A final element does not fail to where the hazard study wants it.

    Why:
        When the air or the power is lost, every final element of the plant goes to its fail position at
        once. One that goes elsewhere than the study supposed takes a layer of protection away.
    Breaks:
        `fails: open` with `safe: closed`; `fails: last` with `safe: closed`: the valve stays where it was,
        which may be open.
    Holds:
        `fails` and `safe` say the same. For a drive, a motor or a heater bank, closed and stopped are one
        position.
    What this check cannot see:
        Whether the spring is built as written, and what the hazard study says.
    """
    fails, safe = need(element.fails, "the fail position"), need(element.safe, "the safe position")
    if _position(element, fails) != _position(element, safe):
        loss = "power" if known(element.kind) in _MACHINES else "air or power"
        where = {"last": "stays as it is", "stopped": "stops"}.get(fails, f"goes {fails}")
        yield draft(
            element.tag,
            f"it {where} on loss of {loss}, but its safe position is {safe}",
            remedy=f"write `fails: {safe}` and order it so, or bring the position before the hazard study",
            at=element.origin.place("fails"),
            related=((element.origin.place("safe"), f"the safe position, {safe}"),),
        )


def _position(element: FinalElement, position: str) -> str:
    return "stopped" if position == "closed" and known(element.kind) in _MACHINES else position


@rule(
    level=Level.ERROR, source="common practice: a spring closes a valve that air opens, and opens one that air closes"
)
def fail_position_signal_mismatch(element: FinalElement) -> Iterator[Draft]:
    """A spring-return final element goes one way without signal and the other way without air.

    Why:
        The spring decides both. A valve that opens on a rising signal is shut at the low end of the signal,
        where a lost signal puts it, and shut without air; if it is said to fail open, either the direction
        or the fail position is wrong, and with it the action of its loop or the failure study.
    Breaks:
        `opens_on: rising signal` with `fails: open`; `opens_on: falling signal` with `fails: closed`.
    Holds:
        What opens on a rising signal fails closed, what opens on a falling signal fails open. A reversed
        output block lies before the signal and changes nothing here. `fails: last`, drives, motors and
        heater banks are left out.
    What this check cannot see:
        A positioner set to act in reverse, or a double-acting actuator with a trip valve and an air tank:
        there the two losses may well differ; say so in a deviation.
    """
    only_if(known(element.kind) not in _MACHINES)
    fails = need(element.fails, "the fail position")
    only_if(fails in ("closed", "open"))
    opens_on = need(element.opens_on, "the signal on which it opens")
    without_signal = "closed" if opens_on == "rising signal" else "open"
    if fails != without_signal:
        yield draft(
            element.tag,
            f"it opens on a {opens_on}, so that it goes {without_signal} when the signal is lost, "
            f"but it fails {fails} when the air is lost",
            remedy=f"write `fails: {without_signal}`, or `opens_on: "
            f"{'falling' if opens_on == 'rising signal' else 'rising'} signal`, whichever is not so",
            at=element.origin.place("fails"),
            related=((element.origin.place("opens_on"), f"opens on {opens_on}"),),
        )
