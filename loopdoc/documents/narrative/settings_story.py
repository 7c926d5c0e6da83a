"""Modes, limits and initialisation of the controllers of a scheme: who may set what, and what waits for whom."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from loopdoc.documents.language import Language
from loopdoc.documents.wording import sentences
from loopdoc.engineering.pairing import ControlledLoop, Plant
from loopdoc.engineering.spreading import SELECTORS, normal_mode
from loopdoc.register.model import Controller, FinalElement, Hold, Loop, known
from loopdoc.register.quantity import Quantity


def permitted(controller: Controller) -> tuple[str, ...]:
    """Modes that the operator may select."""
    modes = known(controller.modes)
    return modes.permitted if modes else ()


def settings(loop: ControlledLoop, language: Language) -> str:
    """Mode, setpoint and output limits of one controller, in sentences."""
    return sentences(_mode(loop, language), _limits(loop, language))


def _mode(loop: ControlledLoop, language: Language) -> str:
    usual = normal_mode(loop)
    if usual == "out of service":
        return ""
    others = [mode for mode in permitted(loop.controller) if mode != usual]
    return language.runs_in(loop.tag, usual or "", others)


def _limits(loop: ControlledLoop, language: Language) -> str:
    setpoint = known(loop.controller.setpoint)
    usual = known(setpoint.normal) if setpoint else None
    limits = language.band(setpoint.low, setpoint.high) if setpoint else ""
    return language.setpoint_and_output(
        language.value(usual) if usual else "",
        limits,
        _output(loop, language),
        in_automatic=normal_mode(loop) == "cascade",
    )


def _output(loop: ControlledLoop, language: Language) -> str:
    output = known(loop.controller.output)
    limits = language.band(output.low, output.high) if output else ""
    if output is None or not limits or not loop.routes:
        return ""
    if not (_is(output.low, 0.0) and _is(output.high, 100.0)):
        return language.output_within(limits)
    end = loop.routes[0].end
    if isinstance(end, FinalElement) and len(loop.routes) == 1:
        return language.output_whole(end)
    return language.output_all(limits)


def _is(limit: Quantity | Hold | None, end: float) -> bool:
    written = known(limit)
    return written is not None and written.unit.symbol == "%" and written.value == end


# ---------------------------------------------------------------- several controllers


def settings_rows(plant: Plant, loops: Sequence[ControlledLoop], language: Language) -> Iterator[tuple[str, ...]]:
    """One row for each controller, as `SETTINGS_HEAD` names the columns."""
    for loop in loops:
        controller = loop.controller
        setpoint, output = known(controller.setpoint), known(controller.output)
        span = known(output.span) if output else None
        to = known(output.to) if output else None
        usual = normal_mode(loop)
        yield (
            loop.tag,
            language.term("mode", usual) if usual else "",
            language.either(language.term("mode", mode) for mode in permitted(controller)),
            _setpoint(plant, loop, language),
            language.band(setpoint.low, setpoint.high) if setpoint else "",
            ", ".join(part for part in (to or "", language.value(span) if span else "") if part),
            language.band(output.low, output.high) if output else "",
        )


def _setpoint(plant: Plant, loop: ControlledLoop, language: Language) -> str:
    """The normal setpoint, and where it comes from in cascade."""
    setpoint = known(loop.controller.setpoint)
    usual = known(setpoint.normal) if setpoint else None
    commanders = plant.commanders.get(loop.tag, ()) if normal_mode(loop) == "cascade" else ()
    parts = (language.value(usual) if usual else "", language.setpoint_from(commanders) if commanders else "")
    return ", ".join(part for part in parts if part)


SETTINGS_HEAD = (
    "Controller", "Normal mode", "Operator may select", "Setpoint", "Setpoint limits",
    "Output, 0 to 100 %", "Output limits",
)  # fmt: skip


# ---------------------------------------------------------------- when the output is not followed


def not_followed(loops: Sequence[ControlledLoop], language: Language) -> str:
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
    told = [_tracking(by_policy["track"], selector, language)] if "track" in by_policy else []
    for policy in ("hold", "nothing"):
        pairs = by_policy.get(policy, [])
        if pairs:
            lower = pairs[0][1] if len(pairs) == 1 else ""
            told.append(language.does_not_track([upper for upper, _ in pairs], lower, policy))
    return sentences(*told)


def _tracking(pairs: Sequence[tuple[str, str]], selector: str, language: Language) -> str:
    uppers, lowers = [upper for upper, _ in pairs], {lower for _, lower in pairs}
    if selector and len(uppers) > 1 and len(lowers) == 1:
        return language.tracks_selected(uppers, selector, pairs[0][1])
    if len(pairs) > 1:
        return language.track(pairs)
    upper, lower = pairs[0]
    return language.tracks(upper, lower)
