"""English: responses of split ranges and overrides as a whole."""

from __future__ import annotations

from collections.abc import Sequence

from loopdoc.documents.language.english.grammar import NO_BREAK, EnglishGrammar
from loopdoc.documents.wording import upper_first


class EnglishBranching(EnglishGrammar):
    """Sentences about controls that branch."""

    def at_opening(self, tag: str, opening: str) -> str:
        """A final element and where it stands, in percent of its travel."""
        return f"{tag} at {opening}{NO_BREAK}%"

    def upset_over_handover(self, size: str, tag: str) -> str:
        """An upset that is sized to carry the output of a split range over."""
        return f"An upset of {size} at {tag}, sized to cross the handover"

    def panel_handover(self) -> str:
        """Heading of a panel with that upset."""
        return "Across the handover"

    def not_drawn(self, upsets: Sequence[str]) -> str:
        """Upsets for which a figure has no room."""
        return f"Not drawn for want of room: {self.listed(upsets)}."

    def inputs_stay(self, inputs: Sequence[tuple[str, str]]) -> str:
        """Measurements that functions take in, and that no upset of a figure moves."""
        told = self.listed(f"what {tag} brings into {function}" for tag, function in inputs)
        return f"{upper_first(told)} stays as it is in these responses."

    def split_title(self, lead: str, elements: Sequence[str]) -> str:
        """What a figure shows, for those who cannot see it."""
        return f"Time responses of {lead} with {self.listed(elements)} together"

    def split_caption(self, lead: str, elements: Sequence[str], size: str, *, alone: bool, integrating: bool) -> str:
        """What a figure shows."""
        whose = f"at {lead}" if alone else "at each measurement of the cascade"
        return (
            f"Response of {lead} with {self.listed(elements)} as one split range to a step of {size} % of span in its "
            f"setpoint and, through the lags of the process concerned, {whose}"
            + ("; of an integrating process the upset is at its input." if integrating else ".")
        )

    def split_assumptions(self, strokes: Sequence[tuple[str, str]]) -> str:
        """Under which assumptions; with the final elements that take time, and how long."""
        told = self.listed(f"{time} of {tag}" for tag, time in strokes)
        stroke = f" and stroke times ({told})" if len(strokes) > 1 else f" and a stroke time ({told})" if told else ""
        return (
            "Linear models about the normal values, each per percent of its own opening, which add up at the "
            f"measurement; simulated scan by scan as executed, with output limits{stroke}. Inherent characteristics "
            "are not applied on top of the gains."
        )

    def split_start(
        self, function: str, output: str, standing: Sequence[str], handover: str, *, declared: bool
    ) -> str:
        """Where it starts, and why there."""
        stands = f"{self.listed(standing)}, the output at {output}{NO_BREAK}%"
        if declared:
            return (
                f"It starts as in normal operation by the normal input of {function}, {stands}; the handover is at "
                f"{handover}{NO_BREAK}%."
            )
        return (
            f"It starts with {stands}: the register does not say where the output stands in normal operation (normal "
            f"input of {function}), and from here the upset carries it about as far beyond the handover at "
            f"{handover}{NO_BREAK}% as it started before it."
        )

    def split_crosses(self, upset: str, lead: str, standing: Sequence[str], peak: str, handover: str) -> str:
        """An upset that carries the output over the handover, and what comes of it."""
        return (
            f"{upset} carries the output over the handover at {handover}{NO_BREAK}%: in the end it stands with "
            f"{self.listed(standing)}, and {lead} has departed by {peak} at most"
        )

    def split_stays(self, handover: str) -> str:
        """That no upset crosses."""
        return f"None of the upsets carries the output over the handover at {handover}{NO_BREAK}%"

    def split_worst(self, element: str, sensitivity: str) -> str:
        """The branch with the least robust margins."""
        return f"Margins hold branch by branch; the worst is that with {element}, Ms {sensitivity}"

    # -- overrides

    def how_followed(self, unfollowed: str) -> str:
        """How a controller follows while a selector passes another."""
        return {
            "track": "with external reset", "hold": "with its integral held", "nothing": "without external reset",
        }[unfollowed]  # fmt: skip

    def setpoint_as_far(self, tag: str, limit: str, *, up: bool) -> str:
        """A setpoint that is moved to its limit."""
        return f"The setpoint of {tag} {'raised' if up else 'lowered'} to its limit, {limit},"

    def upset_declared(self, name: str, tag: str) -> str:
        """An upset that the register declares, before a verb."""
        return f"{upper_first(name)} (declared at {tag})"

    def panel_to_limit(self, tag: str) -> str:
        """Heading of a panel with that upset."""
        return f"{tag}: setpoint to its limit"

    def panel_past(self, tag: str, unfollowed: str) -> str:
        """Heading of a panel in which a controller that stands by is carried past its setpoint."""
        how = {"track": "external reset", "hold": "integral held", "nothing": "no external reset"}[unfollowed]
        return f"{tag}: {how}"

    def override_title(self, tags: Sequence[str], function: str) -> str:
        """What a figure shows, for those who cannot see it."""
        return f"Time responses of {self.listed(tags)} through {function}"

    def override_stands_by(self, tag: str, distance: str, normal: str, *, below: bool) -> str:
        """Who commands, and who stands by how far from its setpoint."""
        return (
            f"{normal} commands in normal operation, and {tag} stands by with its measurement {distance} "
            f"{'below' if below else 'above'} its setpoint"
        )

    def override_stays_out(self, upset: str, tag: str) -> str:
        """An upset that brings nobody else into command."""
        return f"{upset} does not bring {tag} into command"

    def override_nothing_given(self, tags: Sequence[str]) -> str:
        """That nothing in the register does, before an upset that is sized to do it."""
        return (
            f"Nothing that the register gives brings {self.either(tags)} into command; the next upset is sized to do it"
        )

    def takeover_at(self, after: str, late: str) -> str:
        """When a controller takes over: after the upset, and ``late`` after its measurement has passed its setpoint;
        empty where it is before that.
        """
        if not late:
            return f"{after} after the upset, before its measurement has passed its setpoint"
        return f"{late} after its measurement has passed its setpoint ({after} after the upset)"

    def override_takes_over(self, upset: str, tag: str, at: str, past: str, how: str) -> str:
        """An upset that does, with what `takeover_at` says; ``how`` the controllers follow."""
        return (
            f"{upset} brings {tag} into command: {how} it takes over {at}, and its measurement goes past the setpoint "
            f"by {past} at most"
        )

    def override_gives_back(self, normal: str, after: str) -> str:
        """Control that passes back once the upset is gone."""
        return f"Once the upset is gone again, {normal} is back in command after {after}"

    def override_otherwise(self, how: str, at: str, past: str) -> str:
        """The same with the controllers following the other way; ``at`` is empty where it never takes over."""
        if not at:
            return f"For comparison: {how} it would not take over, and its measurement would go past by {past}"
        return f"For comparison: {how} it would take over {at} and let its measurement go past by {past}"

    def asked_of(self, tag: str, unit: str) -> str:
        """The axis of what is asked of a loop or a final element."""
        return f"asked of {tag}, {unit}"

    def override_caption(self, tags: Sequence[str], function: str, *, lowest: bool) -> str:
        """What a figure shows, and under which assumptions."""
        return (
            f"{self.listed(tags)} through {function}, which passes the {'lowest' if lowest else 'highest'} of what "
            "they ask for. Above the measurement that stands by, then the one in command, below what is asked and what "
            "passes. Linear models about the normal values, simulated scan by scan as executed, with output limits; "
            "loops above these hold their outputs. With external reset the integral of a controller is what "
            f"{function} passes, through a lag of the reset time; without it the integral stops at the controller's "
            "own output limit."
        )

    def override_sized(self, tag: str, size: str, lasts: str) -> str:
        """An upset that is sized to bring a controller in."""
        return (
            f"The upset at {tag}, {size}, is sized to carry its measurement a tenth of span past its setpoint, and is "
            f"gone again after {lasts}."
        )
