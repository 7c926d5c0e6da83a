"""Rules on dynamics: stability and margins, execution intervals, filters, cascades, final elements.

What they judge is calculated from the process models and the tuning of the register (see
`loopdoc.engineering.dynamics`), for the whole plant at the first question.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import replace
from typing import TYPE_CHECKING

from loopdoc.engineering.dynamics import ChainDynamics, Dynamics
from loopdoc.engineering.pairing import CascadeLink, ControlledLoop
from loopdoc.register.model import Controller, FinalElement, Hold, Loop, known
from loopdoc.register.place import Place
from loopdoc.rules.finding import Level
from loopdoc.rules.policy import Limits
from loopdoc.rules.rule import Draft, draft, need, not_checked, only_if, rule
from loopdoc.rules.values import above, below, duration, duration_beside, time_s

if TYPE_CHECKING:
    from loopdoc.engineering.frequency import Margins


@rule(
    level=Level.ERROR,
    source="Nyquist's criterion; K. J. Astrom, R. M. Murray, Feedback Systems, 2nd ed. 2020, chapter 10 (from memory)",
)
def loop_unstable(controlled: ControlledLoop, dynamics: Dynamics) -> Iterator[Draft]:
    """A loop is unstable as it is tuned and acts, with the process that the register gives.

    Why:
        Put in automatic it swings with growing amplitude, or runs to a limit of its output, until an
        operator takes it out or an interlock trips.
    Breaks:
        A gain above the one at which the loop oscillates steadily; a level loop whose reset is shorter than
        its lags and dead time together, which no gain makes stable.
    Holds:
        No mode of the closed loop grows, the loops below closed as they are tuned; dead time counts in full
        and the execution interval as half of itself. A loop too fast for that is judged as it is
        sampled.
    What this check cannot see:
        A process that is not as the register says. A loop is judged only when those below it are stable, and one whose
        action drives the measurement away only by `action-wrong` and `split-range-direction`.
    """
    for chain in _chains(controlled, dynamics):
        _need_stable_below(chain)
        margins = chain.margins[-1]
        if margins.stable:
            continue
        stage, tuned = chain.chain.stages[-1], controlled.controller
        through = _through(controlled, chain)
        if stage.controller.gain * stage.process.gain < 0:
            not_checked(f"with {known(tuned.action)} action the feedback is positive{through}")
        factor = margins.gain_margin
        if math.isfinite(factor):
            fault = f"it oscillates steadily already at {factor:.3g} times its gain"
            remedy = f"lower the gain to well below {factor:.3g} times what it is"
        else:
            fault = "no lower gain makes it stable"
            remedy = "lengthen the reset time, or correct the process"
        yield draft(controlled.tag, f"it is unstable{through}: {fault}", remedy=remedy, at=_gain_place(tuned))


@rule(
    level=Level.WARNING,
    source="K. J. Astrom, T. Hagglund, Advanced PID Control, ISA 2006, section 4.5 (Ms); D. E. Seborg, T. F. Edgar, "
    "D. A. Mellichamp, F. J. Doyle, Process Dynamics and Control, 4th ed. 2016, chapter 14 (gain and phase margin; "
    "both from memory)",
)
def margin_low(controlled: ControlledLoop, dynamics: Dynamics, limits: Limits) -> Iterator[Draft]:
    """A loop is stable but so near to instability that a small change of the process makes it swing.

    Why:
        A model is right to a third at best, and a valve's gain doubles between its ends. A loop without
        margin answers every upset with many swings, and one day it does not come to rest.
    Breaks:
        A gain of four fifths of the one at which the loop oscillates steadily; a maximum sensitivity of 3. A
        level loop with so short a reset for so low a gain that it swings slowly and long: there the reset is
        to be lengthened, and a lower gain would make it worse.
    Holds:
        Gain margin, phase margin and maximum sensitivity Ms are all within the limits of the policy, the
        loops below closed; of several branches of a split range the worst is judged.
    What this check cannot see:
        How far the gain of the process moves between low and high load. A loop that is unstable is told by
        `loop-unstable`.
    """
    chains = _chains(controlled, dynamics)
    for chain in chains:
        _need_stable_below(chain)
    only_if(all(chain.margins[-1].stable for chain in chains))
    worst = max(chains, key=lambda chain: chain.margins[-1].max_sensitivity)
    faults = [fault for fault in _margin_faults(worst.margins[-1], limits) if fault]
    if faults:
        yield draft(
            controlled.tag,
            f"its margins are low{_through(controlled, worst)}: {'; '.join(faults)}",
            remedy=_more_margin(worst),
            at=_gain_place(controlled.controller),
        )
    elif worst.margins[-1].not_quoted:
        not_checked(f"the gain margin would need the sampled loop: {worst.margins[-1].not_quoted}")


def _more_margin(chain: ChainDynamics) -> str:
    """What gives a loop more margin: with integral action on an integrating process a lower gain may take from it."""
    from loopdoc.engineering.sampled import quoted_margins

    *below_it, own = chain.chain.stages
    if math.isinf(own.controller.reset_s):
        return "lower the gain"
    halved = replace(own, controller=replace(own.controller, gain=own.controller.gain / 2))
    lower = quoted_margins([[*below_it, halved]])[0][-1]
    if lower.max_sensitivity < chain.margins[-1].max_sensitivity:
        return "lower the gain, or lengthen the reset time"
    return "lengthen the reset time; at half the gain the margins would be lower still"


def _margin_faults(margins: Margins, limits: Limits) -> Iterator[str]:
    if below(margins.gain_margin, limits.gain_margin):
        yield f"a gain margin of {margins.gain_margin:.2f}, where {limits.gain_margin:g} is wanted"
    if below(margins.phase_margin_deg, limits.phase_margin):
        yield f"a phase margin of {margins.phase_margin_deg:.0f} deg, where {limits.phase_margin:g} deg are wanted"
    if above(margins.max_sensitivity, limits.max_sensitivity):
        yield f"a maximum sensitivity of {margins.max_sensitivity:.2f}, where {limits.max_sensitivity:g} is the most"


# ---------------------------------------------------------------- execution, filter, rate


@rule(
    level=Level.WARNING,
    source="K. J. Astrom, B. Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, chapter 8: interval times "
    "crossover of 0.15 to 0.5 (from memory)",
)
def interval_too_slow(controlled: ControlledLoop, dynamics: Dynamics, limits: Limits) -> Iterator[Draft]:
    """A controller is executed too seldom for the speed at which its loop is tuned.

    Why:
        Between two executions nothing is done about an upset: on average the loop acts half an interval
        late, like a dead time, and what that costs in phase no tuning gives back.
    Breaks:
        An interval of 5 s in a flow loop that crosses over at 0.2 rad/s: 1 rad between two executions.
    Holds:
        Interval times crossover is within the policy. A loop whose gain nowhere reaches 1 has no crossover
        and no phase to lose.
    What this check cannot see:
        Transmitters and networks that are slower than the controller.
    """
    interval = need(controlled.controller.interval, "the execution interval")
    interval_s = time_s(interval, "the execution interval")
    crossover = _fastest_crossover(controlled, dynamics)
    turned = interval_s * crossover
    if above(turned, limits.interval_crossover):
        # As many digits as it takes to tell it from the limit.
        shown = (f"{turned:.{digits}f}" for digits in range(2, 12))
        turned_shown = next(one for one in shown if float(one) > limits.interval_crossover)
        most = duration_beside(limits.interval_crossover / crossover, interval)
        yield draft(
            controlled.tag,
            f"it is executed every {interval}, which is {turned_shown} rad at its crossover of {crossover:.2g} rad/s "
            f"and costs {math.degrees(turned / 2):.0f} deg of phase; the limit is {limits.interval_crossover:g} rad",
            remedy=f"execute it every {most} or less, or tune it slower",
            at=controlled.controller.origin.place("interval"),
            related=((_gain_place(controlled.controller), "the gain"),),
        )


@rule(level=Level.WARNING, source="common practice: a filter that takes a third of the usual phase margin of 60 deg")
def filter_too_slow(controlled: ControlledLoop, dynamics: Dynamics, limits: Limits) -> Iterator[Draft]:
    """The filter of a measurement is so slow that it takes a good part of the loop's phase.

    Why:
        The controller sees the process late. The trend looks calm while the process itself swings, and
        whoever tunes the loop tunes the filter.
    Breaks:
        `filter: 10 s` in a flow loop that crosses over at 0.1 rad/s: 45 deg.
    Holds:
        The phase lag of the filter at crossover is within the policy.
    What this check cannot see:
        Damping set in the transmitter that the register does not give, and the noise that asked for it.
    """
    measurement = known(controlled.loop.measurement)
    only_if(measurement is not None and measurement.filter is not None)
    assert measurement is not None
    filtered = need(measurement.filter, "the measurement filter")
    only_if(filtered.value > 0)
    filter_s = time_s(filtered, "the measurement filter")
    crossover = _fastest_crossover(controlled, dynamics)
    lag_deg = math.degrees(math.atan(filter_s * crossover))
    if above(lag_deg, limits.filter_phase_lag):
        most_s = math.tan(math.radians(limits.filter_phase_lag)) / crossover
        yield draft(
            controlled.tag,
            f"the filter of {filtered} takes {lag_deg:.3g} deg of phase at the crossover of {crossover:.2g} rad/s; "
            f"the limit is {limits.filter_phase_lag:g} deg",
            remedy=f"filter by {duration(most_s)} or less, or tune the loop slower",
            at=measurement.origin.place("filter"),
        )


@rule(
    level=Level.WARNING,
    source="D. E. Seborg, T. F. Edgar, D. A. Mellichamp, F. J. Doyle, Process Dynamics and Control, 4th ed. 2016, "
    "chapter 12 (flow loops: derivative action is not used; from memory)",
)
def rate_on_flow(controlled: ControlledLoop) -> Iterator[Draft]:
    """A flow controller has rate action.

    Why:
        A flow follows its valve within seconds and its signal is noisy: rate has no slow lag to make up for
        and turns the noise into movement of the valve.
    Breaks:
        `rate: 2 s` in a controller of a flow.
    Holds:
        A flow controller has no rate, or `rate: 0 s`.
    What this check cannot see:
        Noise on measurements of other variables.
    """
    measurement = need(controlled.loop.measurement, "the measurement")
    only_if(need(measurement.variable, "the measured variable") == "flow")
    if controlled.controller.rate is None:
        return
    rate = need(controlled.controller.rate, "the rate time")
    if rate.value > 0:
        yield draft(
            controlled.tag,
            f"it controls a flow with a rate time of {rate}",
            remedy="write `rate: 0 s`",
            at=controlled.controller.origin.place("rate"),
            related=((measurement.origin.place("variable"), "the measured variable, flow"),),
        )


# ---------------------------------------------------------------- cascades


@rule(level=Level.WARNING, source="common practice: the inner loop of a cascade is executed at least as often")
def cascade_interval_order(link: CascadeLink) -> Iterator[Draft]:
    """A secondary is executed less often than the primary that commands it.

    Why:
        The primary asks for new setpoints that the secondary has not looked at: it acts on answers to what
        it asked before, and the cascade gains a dead time that belongs to neither loop.
    Breaks:
        A primary every 1 s over a secondary every 2 s.
    Holds:
        The interval of the secondary is that of the primary or shorter.
    What this check cannot see:
        The order in which the two are executed within one interval.
    """
    primary, secondary = link.primary.controller, link.secondary.controller
    own = need(secondary.interval, "the interval of the secondary")
    of_primary = need(primary.interval, "the interval of the primary")
    only_if(of_primary.value > 0)  # else `tuning-invalid` says so
    if above(time_s(own, "the interval of the secondary"), time_s(of_primary, "the interval of the primary")):
        yield draft(
            link.secondary.tag,
            f"it is executed every {own}, and {link.primary.tag}, which commands it, every {of_primary}",
            remedy=f"execute it every {of_primary} or less",
            at=secondary.origin.place("interval"),
            related=((primary.origin.place("interval"), f"the interval of {link.primary.tag}, {of_primary}"),),
        )


@rule(
    level=Level.WARNING,
    source="G. K. McMillan, cascade rule of four; S. Skogestad, Annual Reviews in Control 56, 2023 (from memory); "
    "published thresholds run from 3 to 10",
)
def cascade_too_slow(link: CascadeLink, dynamics: Dynamics, limits: Limits) -> Iterator[Draft]:
    """A secondary is not clearly faster than the primary that commands it.

    Why:
        The primary is tuned as if its output were followed at once. A secondary that takes as long makes the
        two swing against each other, and an upset reaches the primary before the secondary has met it.
    Breaks:
        A secondary that crosses over at 0.02 rad/s under a primary at 0.01 rad/s: twice as fast.
    Holds:
        The crossover of the secondary is that of the primary times the ratio of the policy, or more.
    What this check cannot see:
        Limits of the final element's speed, which `stroke-too-slow` tells.
    """
    primary, secondary = link.primary, link.secondary
    for chain in _chains(primary, dynamics):
        if chain.chain.levels[-2].loop.tag != secondary.tag:
            continue
        _need_stable_below(chain)
        if not chain.margins[-1].stable:
            not_checked(f"{primary.tag} is itself unstable")
        ratio = chain.speed_ratio
        if ratio is None or math.isnan(ratio):
            slow = secondary if math.isnan(chain.margins[-2].crossover_rad_per_s) else primary
            not_checked(f"the gain of {slow.tag} nowhere reaches 1: it has no crossover to compare")
        if below(ratio, limits.cascade_speed_ratio):
            inner, outer = (found.crossover_rad_per_s for found in chain.margins[-2:])
            yield draft(
                secondary.tag,
                f"it crosses over at {inner:.2g} rad/s, {ratio:.2g} times as fast as {primary.tag} with {outer:.2g} "
                f"rad/s; {limits.cascade_speed_ratio:g} times is the least",
                remedy=f"tune {secondary.tag} faster, or {primary.tag} slower",
                at=_gain_place(secondary.controller),
                related=((_gain_place(primary.controller), f"the gain of {primary.tag}"),),
            )


@rule(
    level=Level.WARNING,
    source="common practice; Parseval's relation for the error, S. Skogestad, J. Process Control 13:291-309, 2003, "
    "for the single loop, tuned to the same maximum sensitivity",
)
def cascade_no_benefit(controlled: ControlledLoop, dynamics: Dynamics, limits: Limits) -> Iterator[Draft]:
    """A cascade as tuned does hardly better than one controller on the same final element would.

    Why:
        A secondary costs a transmitter, a mode to be kept and a way for the primary to wind up. It pays by
        meeting an upset before the primary sees it; where it does not, it is tuned too slow or not needed.
    Breaks:
        A flow controller so slow that a swing of the header pressure goes through it to the temperature.
    Holds:
        After a step at the measurement of the secondary, through the lags of its own process, the primary's
        error is below the share of the policy of what a single loop leaves: SIMC on all the processes in
        series, tuned to the same maximum sensitivity. The error is the root of the integrated square, summed
        over frequency by Parseval's relation, which takes far less time than a simulation.
    What this check cannot see:
        Other reasons for the secondary, such as a limit on the flow or a valve that sticks. In a chain of
        three levels each primary is judged with all that stands below it.
    """
    only_if(any(isinstance(route.end, Loop) for route in controlled.routes))
    for chain in _chains(controlled, dynamics):
        ratio = dynamics.error_ratio(chain)
        if not isinstance(ratio, float):
            not_checked(ratio.reason)
        if above(ratio, limits.cascade_error_ratio):
            secondary = chain.chain.levels[-2].loop
            output = known(controlled.controller.output)
            assert output is not None
            yield draft(
                controlled.tag,
                f"after an upset at {secondary.tag} its error is {ratio:.2g} times that of a single loop on "
                f"{chain.chain.final_element.tag}; {limits.cascade_error_ratio:g} times is the most",
                remedy=f"tune {secondary.tag} faster, or command {chain.chain.final_element.tag} directly",
                at=output.origin.place("to"),
                related=((_gain_place(secondary.controller), f"the gain of {secondary.tag}"),),
            )


# ---------------------------------------------------------------- final elements


@rule(
    level=Level.WARNING,
    source="common practice: a sine of the given amplitude at crossover, just at the full rate of the final element",
)
def stroke_too_slow(controlled: ControlledLoop, dynamics: Dynamics, limits: Limits) -> Iterator[Draft]:
    """A final element cannot move as fast as the loop that moves it is tuned.

    Why:
        A valve at its full rate follows nobody: the loop meets a lag that no model of it has, and swings on
        large moves although it is calm on small ones.
    Breaks:
        A stroke time of 60 s under a flow loop that crosses over at 0.3 rad/s: for a move of 10 % at that
        frequency it may take 33 s at most.
    Holds:
        At crossover a swing of the amplitude of the policy asks for no more than the full rate of travel.
    What this check cannot see:
        Stiction and backlash, and a positioner that is slower for small moves.
    """
    only_if(any(isinstance(route.end, FinalElement) for route in controlled.routes))
    for chain in _chains(controlled, dynamics):
        element = chain.chain.final_element
        stroke = need(element.stroke_time, "the stroke time")
        crossover = chain.margins[-1].crossover_rad_per_s
        if math.isnan(crossover):
            continue  # the gain nowhere reaches 1: there is no speed to follow
        most_s = 100 / (limits.stroke_move * crossover)
        if above(time_s(stroke, "the stroke time"), most_s):
            yield draft(
                element.tag,
                f"its stroke time is {stroke}; to follow {controlled.tag} in a move of {limits.stroke_move:g} % at its "
                f"crossover of {crossover:.2g} rad/s it may take {duration(most_s)} at most",
                remedy=f"give it a faster actuator, or tune {controlled.tag} slower",
                at=element.origin.place("stroke_time"),
                related=((_gain_place(controlled.controller), f"the gain of {controlled.tag}"),),
            )


# ---------------------------------------------------------------- what the rules share


def _chains(controlled: ControlledLoop, dynamics: Dynamics) -> tuple[ChainDynamics, ...]:
    """The dynamics of a loop, one for each final element that it moves; not checked where they are not known."""
    # Asked first: a plant without process models is checked without loading what calculates.
    process = need(controlled.loop.process, "the process")
    if not process.branches:
        need(process.gain, "the process gain")
    found = dynamics.loop(controlled.tag)
    if not found.chains:
        not_checked(found.reason)
    return found.chains


def _need_stable_below(chain: ChainDynamics) -> None:
    for level, margins in zip(chain.chain.levels, chain.margins[:-1], strict=False):
        if not margins.stable:
            not_checked(f"{level.loop.tag}, which it commands, is itself unstable")


def _fastest_crossover(controlled: ControlledLoop, dynamics: Dynamics) -> float:
    """The highest crossover over the branches [rad/s]; 0 for a loop whose gain nowhere reaches 1."""
    found = [chain.margins[-1].crossover_rad_per_s for chain in _chains(controlled, dynamics)]
    return max((crossover for crossover in found if not math.isnan(crossover)), default=0.0)


def _through(controlled: ControlledLoop, chain: ChainDynamics) -> str:
    """Which branch of a split range is meant; empty where there is one way only."""
    return f" through {chain.chain.final_element.tag}" if len(controlled.routes) > 1 else ""


def _gain_place(tuned: Controller) -> Place:
    """Where the gain is written, as such or as a proportional band."""
    by_band = tuned.gain is None or isinstance(tuned.gain, Hold)
    return tuned.origin.place("proportional_band" if by_band else "gain")
