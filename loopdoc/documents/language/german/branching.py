"""German: responses of split ranges and overrides as a whole."""

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

    def not_drawn(self, upsets: Sequence[str]) -> str:
        return f"Aus Platzgründen nicht gezeichnet: {self.listed(upsets)}."

    def inputs_stay(self, inputs: Sequence[tuple[str, str]]) -> str:
        told = self.listed(f"{tag} (an {function})" for tag, function in inputs)
        return f"Was Funktionen sonst aufnehmen, bleibt in diesen Verläufen unverändert: {told}."

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

    # -- overrides

    def how_followed(self, unfollowed: str) -> str:
        return {
            "track": "mit externer Integralrückführung", "hold": "mit angehaltenem Integral",
            "nothing": "ohne externe Integralrückführung",
        }[unfollowed]  # fmt: skip

    def setpoint_as_far(self, tag: str, limit: str, *, up: bool) -> str:
        way = "anheben" if up else "absenken"
        return f"Den Sollwert von {tag} bis an seine Grenze, {limit}, {way}"

    def upset_declared(self, name: str, tag: str) -> str:
        return f"Die Störung {self.quoted(name)} (angegeben bei {tag})"

    def panel_to_limit(self, tag: str) -> str:
        return f"{tag}: Sollwert an die Grenze"

    def panel_past(self, tag: str, unfollowed: str) -> str:
        how = {"track": "mit Rückführung", "hold": "Integral angehalten", "nothing": "ohne Rückführung"}[unfollowed]
        return f"{tag}: {how}"

    def override_title(self, tags: Sequence[str], function: str) -> str:
        return f"Zeitverhalten von {self.listed(tags)} über {function}"

    def override_stands_by(self, tag: str, distance: str, normal: str, *, below: bool) -> str:
        return (
            f"Im Normalbetrieb führt {normal}; {tag} steht bereit, sein Messwert {distance} "
            f"{'unter' if below else 'über'} dem Sollwert"
        )

    def override_stays_out(self, upset: str, tag: str) -> str:
        return f"{upset}: {tag} übernimmt nicht"

    def override_nothing_given(self, tags: Sequence[str]) -> str:
        return (
            f"Nichts, was das Register angibt, lässt {self.either(tags)} übernehmen; die folgende Störung ist dafür "
            "bemessen"
        )

    def takeover_at(self, after: str, late: str) -> str:
        if not late:
            return f"{after} nach der Störung, noch bevor sein Messwert den Sollwert passiert hat,"
        return f"{late}, nachdem sein Messwert den Sollwert passiert hat ({after} nach der Störung),"

    def override_takes_over(self, upset: str, tag: str, at: str, past: str, how: str) -> str:
        return (
            f"{upset}: {how} übernimmt {tag} {at} und sein Messwert gerät um höchstens {past} über den Sollwert hinaus"
        )

    def override_gives_back(self, normal: str, after: str) -> str:
        return f"Ist die Störung vorbei, führt {normal} nach {after} wieder"

    def override_otherwise(self, how: str, at: str, past: str) -> str:
        takes = f"übernähme er {at}" if at else "übernähme er nicht,"
        return f"Zum Vergleich: {how} {takes} und sein Messwert geriete um {past} über den Sollwert hinaus"

    def asked_of(self, tag: str, unit: str) -> str:
        return f"Vorgabe an {tag}, {unit}"

    def override_caption(self, tags: Sequence[str], function: str, *, lowest: bool) -> str:
        return (
            f"{self.listed(tags)} über {function}, das die {'kleinste' if lowest else 'größte'} Anforderung "
            "weitergibt. Oben der Messwert des bereitstehenden Reglers, darunter der des führenden, unten was "
            "angefordert und was weitergegeben wird. Lineare Modelle um die Normalwerte, Abtastung für Abtastung wie "
            "ausgeführt simuliert, mit Ausgangsbegrenzung; übergeordnete Regelkreise halten ihre Ausgänge. Mit "
            f"externer Integralrückführung ist das Integral eines Reglers das, was {function} weitergibt, verzögert "
            "mit der Nachstellzeit; ohne sie endet das Integral erst an der eigenen Ausgangsgrenze."
        )

    def override_sized(self, tag: str, size: str, lasts: str) -> str:
        return (
            f"Die Störung an {tag}, {size}, ist so bemessen, dass der Messwert um ein Zehntel der Messspanne über den "
            f"Sollwert hinausgeriete; nach {lasts} ist sie wieder vorbei."
        )
