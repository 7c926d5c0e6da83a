"""English: tuning, margins, upsets and the captions of figures."""

from __future__ import annotations

from collections.abc import Sequence

from loopdoc.documents.language.english.grammar import NO_BREAK, EnglishGrammar
from loopdoc.documents.wording import upper_first


class EnglishDynamics(EnglishGrammar):
    """Sentences about what is calculated."""

    # -- tuning

    def tuning_basis(self) -> str:
        """What every table of settings and margins rests on, told once in a document."""
        return (
            "Gains are in percent of output per percent of measurement span, in the standard form (ISA-TR5.9) unless "
            "a table names another. Margins come from the exact frequency response of the process models with every "
            "loop below closed; dead time is not approximated, and an execution interval counts as half of itself in "
            "dead time; a loop whose gain margin would be read above a quarter of its sampling frequency, where that "
            "no longer holds, is analysed as it is sampled. Ms is the maximum sensitivity; the speed ratio is the "
            "crossover of the loop below over that of the loop itself."
        )

    def larger_branch(self) -> str:
        """Which branch of a split range is quoted."""
        return "Of a split range the branch with the larger maximum sensitivity is quoted"

    def not_stable(self, tag: str) -> str:
        """A loop that is unstable."""
        return f"{tag} is not stable as tuned"

    def gain_margin_sampled(self, tag: str, reason: str) -> str:
        """A gain margin that is not quoted."""
        return f"The gain margin of {tag} would need the sampled loop: {reason}"

    def margins_sampled(self, tags: Sequence[str]) -> str:
        """Loops whose margins are those of the sampled loop."""
        return f"The margins of {self.listed(tags)} are those of the sampled loop"

    def no_margins_held(self, tags: Sequence[str], what: str) -> str:
        """Loops that lack one value of their own."""
        return f"No margins can be calculated for {self.listed(tags)}, whose {what} is on hold"

    def no_margins(self, tags: Sequence[str], reason: str) -> str:
        """Loops without margins for another reason."""
        return f"No margins can be calculated for {self.listed(tags)}: {reason}"

    # -- upsets

    def setpoint_up(self, tag: str, size: str) -> str:
        """A step of the setpoint."""
        return f"Setpoint of {tag} up by {size}"

    def setpoint_to_limit(self, tag: str, size: str) -> str:
        """A step of the setpoint that its limit cuts short; ``size`` is empty where it leaves nothing."""
        return f"Setpoint of {tag} up by {size}, to its limit" if size else f"Setpoint of {tag}, at its limit already"

    def declared_at(self, name: str, tag: str) -> str:
        """An upset that the register declares."""
        return f"{upper_first(name)}, declared at {tag}"

    def upset_at_input(self, size: str, tag: str) -> str:
        """A standard upset of an integrating process."""
        return f"An upset of {size} at the process input of {tag}"

    def upset_at(self, size: str, tag: str) -> str:
        """A standard upset."""
        return f"An upset of {size} at {tag}"

    def cascade_gains(self, upset: str, lead: str, ours: str, element: str, alone: str, share: str) -> str:
        """What a cascade gains; ``share`` of the single loop's error integral is empty where it is no less."""
        integral = f" The integral of the absolute error is {share} % of the single loop's." if share else ""
        return (
            f"With the cascade, {upset[0].lower()}{upset[1:]} moves {lead} by {ours} at most; a "
            f"single loop on {element}, tuned by SIMC to the same Ms, would let it move by {alone}.{integral}"
        )

    def upset_not_calculated(self, name: str, tag: str, reason: str) -> str:
        """A declared upset whose size does not follow."""
        return f"The upset “{name}” (declared at {tag}) is not calculated: {reason}"

    def upset_moves_input(self, name: str, tag: str, end: str, size: str) -> str:
        """A declared upset at the process input."""
        return (
            f"The upset “{name}” (declared at {tag}) acts on {tag} as a change of {end} by {size} would, "
            f"through the process of {tag}"
        )

    def upset_moves(self, name: str, tag: str, size: str, lag: str, process_lags: Sequence[str]) -> str:
        """A declared upset at the measurement, through a lag of its own or those of the process."""
        if lag:
            through = f"through a lag of {lag}"
        elif process_lags:
            noun = "lag" if len(process_lags) == 1 else "lags"
            through = f"through the {noun} of its process, {self.listed(process_lags)}"
        else:
            through = "at once"
        return f"The upset “{name}” (declared at {tag}) moves the measurement of {tag} by {size}, {through}"

    def upset_late(self, told: str, dead_time: str) -> str:
        """A declared upset that arrives after a dead time of its own."""
        return f"{told}, after a dead time of {dead_time}"

    def upset_fed_forward(self, told: str, tag: str, size: str, lag: str, function: str) -> str:
        """A measurement that moves with a declared upset, at once or through a lag, and what feeds it forward."""
        how = f"through a lag of {lag}" if lag else "at once"
        return f"{told}; {tag} moves by {size} {how}, and {function} feeds that forward"

    def upset_not_fed_forward(self, told: str, tags: Sequence[str]) -> str:
        """Measurements that move with a declared upset and that no function brings to the loops on the way."""
        verb = "moves" if len(tags) == 1 else "move"
        return f"{told}; {self.listed(tags)} {verb} with it, which changes nothing in these responses"

    def upset_outcome(self, told: str, lead: str, peak: str, without: str, alone: str) -> str:
        """What comes of a declared upset; ``without`` is empty where nothing is fed forward, ``alone`` where there is
        no single loop to compare with.
        """
        unaided = f", without feedforward by {without}" if without else ""
        if not alone:
            return f"{told}; as tuned, {lead} then departs by {peak} at most{unaided}"
        single = f"with the single loop{', which has none,' if without else ''} by {alone}"
        return f"{told}; with the cascade {lead} then departs by {peak} at most{unaided}, {single}"

    def feedforward_leaves(self, share_of_peak: str, share_of_error: str) -> str:
        """What feedforward leaves of an upset just told, in percent of what comes of it without."""
        return (
            f"Feedforward leaves {share_of_peak}{NO_BREAK}% of that peak and {share_of_error}{NO_BREAK}% of the "
            "integral of the absolute error"
        )

    def nothing_to_compare(self, element: str) -> str:
        """A cascade without a single loop to compare with."""
        return (
            f"No single loop on {element} reaches the same maximum sensitivity by SIMC; there is "
            "nothing to compare with."
        )

    def single_loop(self, element: str, lead: str, sensitivity: str, gain: str, reset: str) -> str:
        """The single loop with which a cascade is compared."""
        return (
            f"Single loop: one controller on {element} in place of the cascade, tuned by SIMC on all "
            f"processes in series to the maximum sensitivity of {lead}, Ms {sensitivity} (gain {gain} % per %, "
            f"reset {reset}), so that neither side gains by being less robust."
        )

    # -- figures

    def response_title(self, lead: str, element: str) -> str:
        """What a figure shows, for those who cannot see it."""
        return f"Time responses of {lead} with {element}"

    def response_caption(
        self,
        lead: str,
        element: str,
        size: str,
        *,
        alone: bool,
        integrating: bool,
        declared: bool,
        limited: bool,
        stroke: str,
        left_out: Sequence[str],
    ) -> str:
        """What a figure shows and under which assumptions; ``left_out`` are the upsets for which it has no room."""
        whose = f"at {lead}" if alone else "at each measurement of the cascade"
        parts = [
            f"Response of {lead} with {element} to a step of {size} % of span in its setpoint"
            + (", or as far as its limit goes," if limited else "")
            + f" and, through the lags of the process concerned, {whose}"
            + ("; of an integrating process the upset is at its input." if integrating else "."),
            "Upsets that the register declares come with their own size and lag." if declared else "",
            "Linear models about the normal values, simulated scan by scan as executed, with output limits"
            + (f" and a stroke time of {stroke}" if stroke else "")
            + "; every measurement starts at its normal value and the final element in the middle of its output "
            "limits.",
            "Alarms, trips and output limits are drawn where they lie near the curves; each panel has its own scale.",
            f"Not drawn for want of room: {self.listed(left_out)}." if left_out else "",
        ]
        return " ".join(part for part in parts if part)

    def panel_upset(self, tag: str) -> str:
        """Heading of a panel with a standard upset."""
        return f"Upset at {tag}"

    def upset_unsized(self, tag: str) -> str:
        """A standard upset within a sentence, without its size."""
        return f"the upset at {tag}"

    def panel_time(self, unit: str) -> str:
        """The time axis."""
        return f"time, {unit}"

    def output_limit(self, limit: str) -> str:
        """The line of an output limit."""
        return f"limit {limit} %"

    def alarm_letters(self, kind: str) -> str:
        """An alarm on a drawing or a figure."""
        return {"high_high": "HH", "high": "H", "low": "L", "low_low": "LL", "deviation": "DEV"}.get(kind, "")

    # -- the small figure of a loop sheet

    def sheet_response(self, overshoot: str, settling: str, offset: str) -> str:
        """What the setpoint response does; overshoot and offset in percent, empty where there is none."""
        over = f"overshoot {overshoot}{NO_BREAK}%" if overshoot else "no overshoot"
        stays = f", {offset}{NO_BREAK}% short of the setpoint" if offset else ""
        return f"{over}, settles within 2{NO_BREAK}% in {settling}{stays}.".capitalize()

    def sheet_response_title(self, tag: str, words: str) -> str:
        """The same for those who cannot see it."""
        return f"Calculated setpoint response of {tag}: {words}"
