"""Modes, limits and initialisation of the controllers of a scheme: who may set what, and what waits for whom."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from loopdoc.documents.naming import percent, travel
from loopdoc.documents.wording import band, listed, sentences, value
from loopdoc.engineering.pairing import ControlledLoop, Plant
from loopdoc.engineering.spreading import SELECTORS, normal_mode
from loopdoc.register.model import Controller, FinalElement, Hold, Loop, known
from loopdoc.register.quantity import Quantity


def permitted(controller: Controller) -> tuple[str, ...]:
    """Modes that the operator may select."""
    modes = known(controller.modes)
    return modes.permitted if modes else ()


def settings(loop: ControlledLoop) -> str:
    """Mode, setpoint and output limits of one controller, in sentences."""
    return sentences(_mode(loop), _limits(loop))


def _mode(loop: ControlledLoop) -> str:
    usual = normal_mode(loop)
    if usual == "out of service":
        return ""
    others = [mode for mode in permitted(loop.controller) if mode != usual]
    may = f"the operator may put it in {listed(others, 'or')}" if others else ""
    start = f"{loop.tag} runs in {usual}" if usual else ""
    return "; ".join(part for part in (start, may) if part)


def _limits(loop: ControlledLoop) -> str:
    setpoint = known(loop.controller.setpoint)
    usual = known(setpoint.normal) if setpoint else None
    limits = band(setpoint.low, setpoint.high) if setpoint else ""
    output = _output(loop)
    if usual and limits:
        told = f"its setpoint, normally {value(usual)}, may be set {_from(limits)}"
    elif usual or limits:
        told = f"its setpoint is normally {value(usual)}" if usual else f"its setpoint may be set {_from(limits)}"
    else:
        return output
    if normal_mode(loop) == "cascade" and limits:
        told = f"in automatic {told}"
    return f"{told}; {output}" if output else told


def _output(loop: ControlledLoop) -> str:
    output = known(loop.controller.output)
    limits = band(output.low, output.high) if output else ""
    if output is None or not limits or not loop.routes:
        return ""
    if not (_is(output.low, 0.0) and _is(output.high, 100.0)):
        return f"its output stays {_within(limits)}"
    end = loop.routes[0].end
    if isinstance(end, FinalElement) and len(loop.routes) == 1:
        return f"its output may use the whole {travel(end)} of {end.tag}"
    return f"its output runs from 0 to {percent(100)}"


def _is(limit: Quantity | Hold | None, end: float) -> bool:
    written = known(limit)
    return written is not None and written.unit.symbol == "%" and written.value == end


def _from(limits: str) -> str:
    return limits if limits.startswith(("up to", "from")) else f"from {limits}"


def _within(limits: str) -> str:
    return limits if limits.startswith(("up to", "from")) else f"within {limits}"


# ---------------------------------------------------------------- several controllers


def settings_rows(plant: Plant, loops: Sequence[ControlledLoop]) -> Iterator[tuple[str, ...]]:
    """One row for each controller, as `SETTINGS_HEAD` names the columns."""
    for loop in loops:
        controller = loop.controller
        setpoint, output = known(controller.setpoint), known(controller.output)
        span = known(output.span) if output else None
        to = known(output.to) if output else None
        yield (
            loop.tag,
            normal_mode(loop) or "",
            listed(permitted(controller)),
            _setpoint(plant, loop),
            band(setpoint.low, setpoint.high) if setpoint else "",
            ", ".join(part for part in (to or "", value(span) if span else "") if part),
            band(output.low, output.high) if output else "",
        )


def _setpoint(plant: Plant, loop: ControlledLoop) -> str:
    """The normal setpoint, and where it comes from in cascade."""
    setpoint = known(loop.controller.setpoint)
    usual = known(setpoint.normal) if setpoint else None
    source = listed(plant.commanders.get(loop.tag, ())) if normal_mode(loop) == "cascade" else ""
    return ", ".join(part for part in (value(usual) if usual else "", f"from {source}" if source else "") if part)


SETTINGS_HEAD = (
    "Controller", "Normal mode", "Operator may select", "Setpoint", "Setpoint limits",
    "Output, 0 to 100 %", "Output limits",
)  # fmt: skip


# ---------------------------------------------------------------- when the output is not followed


def not_followed(loops: Sequence[ControlledLoop], ordinal: int) -> str:
    """What a commanding loop does while it is not followed."""
    by_policy: dict[str, list[tuple[str, str]]] = {}
    selector = ""
    for loop in loops:
        policy = known(loop.controller.when_not_followed)
        below = next((route for route in loop.routes if isinstance(route.end, Loop)), None)
        if policy is None or below is None or normal_mode(loop) == "out of service":
            continue
        by_policy.setdefault(policy, []).append((loop.tag, below.end.tag))
        selector = selector or next((part.tag for part in below.via if known(part.kind) in SELECTORS), "")
    told = [_tracking(by_policy["track"], selector, ordinal)] if "track" in by_policy else []
    for policy, one, many in (
        ("hold", "holds its output", "hold their outputs"),
        ("nothing", "goes on calculating all the same", "go on calculating all the same"),
    ):
        pairs = by_policy.get(policy, [])
        if pairs:
            lower = pairs[0][1] if len(pairs) == 1 else "the loop below"
            who = listed(upper for upper, _ in pairs)
            told.append(f"While {lower} is out of cascade or at a limit, {who} {one if len(pairs) == 1 else many}")
    return sentences(*told)


def _tracking(pairs: Sequence[tuple[str, str]], selector: str, ordinal: int) -> str:
    uppers, lowers = [upper for upper, _ in pairs], {lower for _, lower in pairs}
    if selector and len(uppers) > 1 and len(lowers) == 1:
        everyone = "both" if len(uppers) == 2 else "all"
        return (
            f"Whichever of {listed(uppers)} does not command tracks the demand that {selector} passes, and {everyone} "
            f"track {pairs[0][1]} while it is out of cascade, so that the change of command is bumpless"
        )
    if len(pairs) > 1:
        each = [f"{upper} tracks {lower}" for upper, lower in pairs]
        told = f"{', '.join(each[:-1])} and {each[-1]}"
        return f"{told} whenever the loop below is out of cascade or at a limit, so that the return is bumpless"
    upper, lower = pairs[0]
    variants = (
        f"While {lower} is out of cascade or at a limit, {upper} tracks it, so that the return is bumpless",
        f"{upper} tracks {lower} while that is out of cascade or at a limit, and takes over again without a bump",
        f"Whenever {lower} leaves cascade or meets a limit, {upper} tracks it; the return is bumpless",
    )
    return variants[ordinal % len(variants)]
