"""German: responses of a split range as a whole."""

from __future__ import annotations

from collections.abc import Sequence

from loopdoc.documents.language.english.branching import EnglishBranching
from loopdoc.documents.language.english.grammar import NO_BREAK
from loopdoc.documents.language.german.grammar import GermanGrammar


class GermanBranching(GermanGrammar, EnglishBranching):
    """Sentences about controls that branch."""

    def at_opening(self, tag: str, opening: str) -> str:
        return f"{tag} bei {opening}{NO_BREAK}%"

    def upset_over_handover(self, size: str, tag: str) -> str:
        return f"Eine Störung von {size} an {tag}, so bemessen, dass sie über den Übergang führt,"

    def panel_handover(self) -> str:
        return "Über den Übergang"

    def split_title(self, lead: str, elements: Sequence[str]) -> str:
        return f"Zeitverhalten von {lead} mit {self.listed(elements)} gemeinsam"

    def split_caption(self, lead: str, elements: Sequence[str], size: str, *, alone: bool, integrating: bool) -> str:
        whose = f"des Messwerts von {lead}" if alone else "jedes Messwerts der Kaskade"
        return (
            f"Verhalten von {lead} mit {self.listed(elements)} als einem Split-Range bei einem Sprung um "
            f"{size}{NO_BREAK}% der Messspanne: des Sollwerts und, über die Zeitkonstanten des jeweiligen Prozesses, "
            f"{whose}"
            + ("; bei einem integrierenden Prozess greift die Störung an seinem Eingang an." if integrating else ".")
        )

    def split_assumptions(self, strokes: Sequence[tuple[str, str]]) -> str:
        told = self.listed(f"{tag} {time}" for tag, time in strokes)
        stroke = f" und Stellzeit ({told})" if told else ""
        return (
            "Lineare Modelle um die Normalwerte, jedes je Prozent der eigenen Öffnung, die sich am Messwert addieren; "
            f"Abtastung für Abtastung wie ausgeführt simuliert, mit Ausgangsbegrenzung{stroke}. Grundkennlinien der "
            "Ventile kommen zu den Verstärkungen nicht hinzu."
        )

    def split_start(
        self, function: str, output: str, standing: Sequence[str], handover: str, *, declared: bool
    ) -> str:
        stands = f"{self.listed(standing)}, der Ausgang bei {output}{NO_BREAK}%"
        if declared:
            return (
                f"Anfang wie im Normalbetrieb nach dem normalen Eingang von {function}: {stands}; der Übergang liegt "
                f"bei {handover}{NO_BREAK}%."
            )
        return (
            f"Anfang: {stands}; wo der Ausgang im Normalbetrieb steht (normaler Eingang von {function}), sagt das "
            f"Register nicht, und von hier führt die Störung ihn etwa so weit über den Übergang bei "
            f"{handover}{NO_BREAK}% hinaus, wie er vor ihm begonnen hat."
        )

    def split_crosses(self, upset: str, lead: str, standing: Sequence[str], peak: str, handover: str) -> str:
        return (
            f"{upset} führt den Ausgang über den Übergang bei {handover}{NO_BREAK}%: am Ende stehen "
            f"{self.listed(standing)}, und {lead} ist um höchstens {peak} abgewichen"
        )

    def split_stays(self, handover: str) -> str:
        return f"Keine der Störungen führt den Ausgang über den Übergang bei {handover}{NO_BREAK}%"

    def split_worst(self, element: str, sensitivity: str) -> str:
        return f"Die Reserven gelten Zweig für Zweig; am kleinsten sind sie mit {element}, Ms {sensitivity}"
