"""The responses of an override, as text and as JSON."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

from loopdoc.engineering.branched_simulation import BranchedResponse
from loopdoc.engineering.comparison import NotSimulated
from loopdoc.engineering.dynamics import inputs_beside
from loopdoc.engineering.override import TO_THE_LIMIT, Override, OverrideResponses
from loopdoc.engineering.stages import measured_range
from loopdoc.exchange.response_metrics import shown
from loopdoc.exchange.tuning_review import number
from loopdoc.register.model import known
from loopdoc.register.quantity import Range
from loopdoc.register.units import difference_unit

FOLLOWS = {
    "track": "external reset",
    "hold": "integral held",
    "nothing": "no external reset",
}
"""What a candidate does while another commands."""


def override_object(found: Override | NotSimulated) -> dict[str, Any]:
    """An override: who commands, and by upset when each that stands by takes over, gives back and how far it goes."""
    if isinstance(found, NotSimulated):
        return {"not_simulated": found.reason}
    return {
        "function": found.function.tag,
        "kind": known(found.function.kind),
        "commands": found.end.tag,
        "in_command": found.loops[found.normal].tag,
        "when_not_followed": {
            loop.tag: found.follows(place) for place, loop in enumerate(found.loops)
        },
        "scenarios": {
            entry.scenario.name: {
                "as_written": _response_object(found, entry.as_written),
                "otherwise": {
                    "when_not_followed": found.follows(found.normal, as_written=False),
                    **_response_object(found, entry.otherwise),
                },
            }
            for entry in found.responses
        },
    }


def _response_object(found: Override, response: BranchedResponse) -> dict[str, Any]:
    candidates = {}
    for place in found.standing_by:
        own = measured_range(found.loops[place])
        seen = found.taken_over(response, place)
        candidates[found.loops[place].tag] = {
            "takes_over": seen.takes_over,
            "reaches_setpoint_s": number(seen.reaches_s),
            "takes_over_s": number(seen.spell.first_s),
            "gives_back_s": number(seen.gives_back_s),
            "times_in_command": seen.spell.times,
            "past_setpoint": number(seen.past_pct * own.span / 100.0),
            "unit": own.unit.symbol,
        }
    return {
        "candidates": candidates,
        "valve_travel_pct": number(response.metrics.valve_travel_pct),
        "reversals": response.metrics.reversals,
    }


def override_lines(found: Override | NotSimulated) -> Iterator[str]:
    """The same for reading."""
    if isinstance(found, NotSimulated):
        yield f"the override as a whole: no time responses: {found.reason}"
        return
    normal = found.loops[found.normal]
    path = [found.function.tag, *(level.loop.tag for level in reversed(found.candidates[0].chain.levels[:-1]))]
    path.append(found.candidates[0].chain.final_element.tag)
    yield f"{' and '.join(loop.tag for loop in found.loops)} > {' > '.join(path)}, {known(found.function.kind)}"
    yield f"in normal operation {normal.tag} commands; {'; '.join(_standing(found))}"
    width = max(24, *(len(entry.scenario.name) + 2 for entry in found.responses))
    yield ""
    yield (
        f"{'upset':{width}}{'stands by':12}{'':19}{'reaches its SP, s':>18}{'takes over, s':>15}"
        f"{'past its SP by':>18}{'gives back, s':>15}{'valve travel, %':>17}"
    )
    for entry in found.responses:
        yield from _rows(found, entry, width)
    yield from _told(found)


def _standing(found: Override) -> Iterator[str]:
    for place in found.standing_by:
        loop = found.structure.loops[found.below + place]
        own = measured_range(found.loops[place])
        at = own.low + loop.start_pct * own.span / 100.0
        side = "below" if loop.start_error_pct > 0.0 else "above"
        yield (
            f"{found.loops[place].tag} stands by, at {shown(at)} {own.unit.symbol}, "
            f"{_change(abs(loop.start_error_pct), own)} {side} its setpoint"
        )


def _rows(found: Override, entry: OverrideResponses, width: int) -> Iterator[str]:
    name = entry.scenario.name
    for place in found.standing_by:
        own = measured_range(found.loops[place])
        for response, as_written in ((entry.as_written, True), (entry.otherwise, False)):
            seen = found.taken_over(response, place)
            past = _change(seen.past_pct, own) if seen.past_pct > 0.0 else "-"
            tag = found.loops[place].tag if as_written else ""
            yield (
                f"{name:{width}}{tag:12}{FOLLOWS[found.follows(place, as_written=as_written)]:19}"
                f"{_at(seen.reaches_s):>18}{_at(seen.spell.first_s):>15}{past:>18}{_at(seen.gives_back_s):>15}"
                f"{shown(response.metrics.valve_travel_pct):>17}"
            )
            name = ""


def _change(percent: float, own: Range) -> str:
    return f"{shown(percent * own.span / 100.0)} {difference_unit(own.unit)}"


def _at(seconds: float) -> str:
    return shown(seconds, 4) if math.isfinite(seconds) else "-"


def _told(found: Override) -> Iterator[str]:
    """What the rows mean."""
    written = "; ".join(
        f"{loop.tag} {FOLLOWS[found.follows(place)]}" for place, loop in enumerate(found.loops)
    )
    yield f"first row: as the register has it ({written}); second row: {_other(found)} for comparison"
    given = [entry for entry in found.responses if entry.scenario.origin != "sized"]
    for entry in given:
        if entry.scenario.name == TO_THE_LIMIT:
            normal = found.loops[found.normal]
            own, loop = measured_range(normal), found.structure.loops[found.below + found.normal]
            limit = own.low + (loop.start_pct + entry.scenario.setpoint_step_pct) * own.span / 100.0
            yield f"{TO_THE_LIMIT}: the setpoint of {normal.tag} is moved to its limit, {shown(limit)} {own.unit}"
    if not any(found.taken_over(entry.as_written, place).takes_over for entry in given for place in found.standing_by):
        yield "no limit or upset that the register gives brings the override into command; the last is sized to do it"
    for entry in found.responses:
        if entry.scenario.origin == "sized":
            place = entry.scenario.read - found.below
            own = measured_range(found.loops[place])
            upset = entry.scenario.disturbances[0]
            if found.candidates[place].chain.stages[-1].process.integrating:
                size = f"a load of {shown(abs(upset.size_pct))} % at the input of its process"
            else:
                size = (
                    f"a disturbance of {_change(abs(upset.size_pct), own)}, its distance from the setpoint and a tenth "
                    "of span beyond, through the lags of its process"
                )
            yield f"{entry.scenario.name}: {size}; gone again after {shown(entry.scenario.lasts_s, 4)} s"
    for tag, function in inputs_beside(found.candidates):
        yield f"{tag} into {function}: stays as it is in these responses"
    yield f"external reset: the integral is what {found.function.tag} passes, through a lag of the reset time"


def _other(found: Override) -> str:
    return f"all with {FOLLOWS[found.follows(found.normal, as_written=False)]}".replace("with no", "without")
