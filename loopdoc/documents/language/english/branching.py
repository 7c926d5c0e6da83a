"""English: responses of a split range as a whole."""

from __future__ import annotations

from collections.abc import Sequence

from loopdoc.documents.language.english.grammar import NO_BREAK, EnglishGrammar


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
            f"input of {function}), and from there the upset carries it about as far beyond the handover at "
            f"{handover}{NO_BREAK}% as it comes from before it."
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
