"""Rules on the layers of protection: what they share, and what keeps a safety function alive."""

from __future__ import annotations

from collections.abc import Iterator

from loopdoc.engineering.failure import FailureAnalysis
from loopdoc.engineering.pairing import Plant, Trip
from loopdoc.register.model import Interlock, known
from loopdoc.rules.finding import Level
from loopdoc.rules.policy import Limits
from loopdoc.rules.rule import Draft, draft, need, not_checked, only_if, rule
from loopdoc.rules.values import above, time_s


def _is_safety(interlock: Interlock) -> bool:
    """Whether an interlock belongs to the safety layer; not checked where the layer is not known."""
    return need(interlock.layer, "the layer") == "safety"


# ---------------------------------------------------------------- independence


@rule(
    level=Level.WARNING,
    source="IEC 61511-1:2016, clause 11.2, independence of the safety system from the control system (from memory)",
)
def interlock_shared_sensor(trip: Trip, plant: Plant, failures: FailureAnalysis) -> Iterator[Draft]:
    """A safety interlock trips on a transmitter that the control system controls by.

    Why:
        One wrong reading then drives the process to the hazard and hides it from the interlock that should meet it:
        demand and failure are one event, and the risk calculation that multiplied them is false.
    Breaks:
        A safety interlock on TT-2014, by which TIC-2014 controls; on a transmitter that enters a ratio, or that trips
        a process interlock.
    Holds:
        No controller, function or process interlock uses the transmitter. An indicator may show it.
    What this check cannot see:
        Shared tappings, impulse lines, power supplies and calibrations; whether the shared use was allowed for in
        the calculation, which a deviation should then say.
    """
    only_if(trip.measurement is not None and _is_safety(trip.interlock))
    assert trip.measurement is not None
    transmitter = need(trip.measurement.transmitter, "the transmitter")
    uses = []
    for loop in plant.loops_on.get(transmitter, ()):
        if loop.tag in plant.controlled:
            uses.append((loop.tag, loop.origin.key(), f"{loop.tag} controls by it"))
        uses.extend(
            (function.tag, function.origin.key(), f"it enters {function.tag}")
            for function, _ in failures.functions_of(loop)
        )
    uses.extend(
        (other.interlock.tag, other.initiator.origin.key(), f"it trips {other.interlock.tag} of the process layer")
        for other in failures.trips_on(transmitter)
        if known(other.interlock.layer) == "process"
    )
    uses = list(dict.fromkeys(uses))
    if uses:
        yield draft(
            trip.interlock.tag,
            f"it is of the safety layer and trips on {transmitter}, which the control system uses as well: "
            f"{'; '.join(what for _, _, what in uses)}",
            remedy="give it a transmitter of its own, or say in a deviation how the calculation allows for it",
            at=trip.initiator.origin.key(),
            related=tuple((where, what) for _, where, what in uses),
        )


@rule(
    level=Level.WARNING,
    source="IEC 61511-1:2016, clause 11.2, independence of the safety system from the control system (from memory)",
)
def interlock_shared_final_element(interlock: Interlock, plant: Plant, failures: FailureAnalysis) -> Iterator[Draft]:
    """All that a safety interlock moves is moved by the control system too.

    Why:
        A control valve that sticks open is a likely cause of the demand, and it then cannot meet it.
    Breaks:
        A safety interlock whose only action is on FV-2011, which FIC-2011 moves, or a process interlock trips.
    Holds:
        At least one of the final elements belongs to the safety layer alone, such as an isolating valve or the
        contactor of a pump.
    What this check cannot see:
        Which of several elements is enough by itself to meet the hazard, and solenoids that are shared or are not.
    """
    only_if(_is_safety(interlock))
    if any(path[:1] == ("actions",) for path in plant.register.held.get(interlock.tag, ())):
        not_checked("the actions are on hold")
    elements = [tag for tag in interlock.actions if tag in plant.register.final_elements]
    only_if(elements)
    shared = {}
    for tag in elements:
        movers = [(loop.tag, loop.loop.origin.key()) for loop in plant.moved_by.get(tag, ())]
        movers += [
            (other.tag, other.actions[tag].origin.key())
            for other in failures.interlocks_on.get(tag, ())
            if known(other.layer) == "process"
        ]
        if not movers:
            return
        shared[tag] = movers
    told = "; ".join(f"{tag} by {' and '.join(mover for mover, _ in movers)}" for tag, movers in shared.items())
    yield draft(
        interlock.tag,
        f"it is of the safety layer, but all that it moves is moved by the control system too ({told})",
        remedy="let it move an element of its own as well, or say in a deviation how the calculation allows for it",
        at=interlock.origin.key("actions"),
        related=tuple(
            (where, f"{mover} moves {tag}") for tag, movers in shared.items() for mover, where in movers
        ),
    )


# ---------------------------------------------------------------- test, reset, bypass


@rule(level=Level.WARNING, source="IEC 61511-1:2016, clause 16.3, proof testing (from memory)")
def interlock_proof_test_missing(interlock: Interlock) -> Iterator[Draft]:
    """A safety interlock has no interval between proof tests.

    Why:
        A shut-off valve that is never moved fails unseen. The probability of failure on demand grows with the
        interval; without one it was not calculated.
    Breaks:
        `layer: safety` without `proof_test`.
    Holds:
        An interval is given. Interlocks of the process layer are left out.
    What this check cannot see:
        Whether the interval is the one of the calculation, and whether the tests are done.
    """
    only_if(_is_safety(interlock))
    if interlock.proof_test is None:
        yield draft(
            interlock.tag,
            "it is of the safety layer, but no interval between proof tests is given",
            remedy="write `proof_test:` with the interval of the calculation, as in `proof_test: 12 months`",
            at=interlock.origin,
            related=((interlock.origin.place("layer"), "of the safety layer"),),
        )
    else:
        need(interlock.proof_test, "the interval between proof tests")


@rule(
    level=Level.WARNING,
    source="IEC 61511-1:2016, clause 11.2: the safe state is kept until a reset unless the requirements say otherwise "
    "(from memory)",
)
def interlock_reset_missing(interlock: Interlock) -> Iterator[Draft]:
    """An interlock does not say how it is reset, or is of the safety layer and resets by itself.

    Why:
        What is released as soon as the limit is passed the other way opens the valve again by itself, with the cause
        still there: the plant swings between trip and restart, and whoever stands at the valve is surprised.
    Breaks:
        No `reset`; `layer: safety` with `reset: automatic`.
    Holds:
        `reset` says how and where. In the process layer it may be automatic.
    What this check cannot see:
        Whether the reset is built so, and whether it waits for the measurement to be back.
    """
    if interlock.reset is None:
        yield draft(
            interlock.tag,
            "how it is reset is not given",
            remedy="write `reset:`, as in `reset: manual, local`",
            at=interlock.origin,
        )
        return
    reset = need(interlock.reset, "the reset")
    if reset.casefold().startswith(("auto", "self", "none", "by itself")) and known(interlock.layer) == "safety":
        yield draft(
            interlock.tag,
            f"it is of the safety layer, but its reset is `{reset}`: it releases by itself",
            remedy="write and build a manual reset, or say in a deviation why the requirements allow it",
            at=interlock.origin.place("reset"),
            related=((interlock.origin.place("layer"), "of the safety layer"),),
        )


@rule(
    level=Level.WARNING,
    source="IEC 61511-1:2016, clauses 11.7 and 16.2, bypasses (from memory); the longest time: common practice",
)
def interlock_bypass_unlimited(interlock: Interlock, limits: Limits) -> Iterator[Draft]:
    """An interlock may be bypassed without a limit in time, or for longer than a bypass may last.

    Why:
        A bypass that nothing ends is forgotten, and the plant runs for months without the layer that its risk was
        calculated with.
    Breaks:
        `bypass: {permitted: for the test of one transmitter at a time}`; `limit: 30 d`.
    Holds:
        A limit is given and is at most that of the policy; or `permitted: no`. Where the register has no `bypass`,
        nothing is judged.
    What this check cannot see:
        Bypasses that the register does not tell of: jumpers, forced signals, a valve left open round another.
    """
    only_if(interlock.bypass is not None)
    bypass = need(interlock.bypass, "the bypass")
    permitted = need(bypass.permitted, "whether a bypass is permitted")
    if bypass.never:
        return
    if bypass.limit is None:
        yield draft(
            interlock.tag,
            f"its bypass is permitted ({permitted}), but no limit in time is given",
            remedy="write `limit:` with the time after which it ends or is permitted anew, as in `limit: 8 h`",
            at=bypass.origin,
        )
        return
    limit = need(bypass.limit, "the limit of the bypass")
    hours = time_s(limit, "the limit of the bypass") / 3600
    if above(hours, limits.bypass_time):
        yield draft(
            interlock.tag,
            f"its bypass may last {limit}; the limit is {limits.bypass_time:g} h",
            remedy=f"write a limit of at most {limits.bypass_time:g} h; what lasts longer is a change of the plant",
            at=bypass.origin.place("limit"),
        )
