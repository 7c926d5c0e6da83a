"""German: tuning, margins, upsets and the captions of figures."""

from __future__ import annotations

from collections.abc import Sequence

from loopdoc.documents.language.english.dynamics import EnglishDynamics
from loopdoc.documents.language.english.grammar import NO_BREAK
from loopdoc.documents.language.german.grammar import GermanGrammar
from loopdoc.documents.language.german.reasons import held_noun


class GermanDynamics(GermanGrammar, EnglishDynamics):
    """Sentences about what is calculated."""

    # -- tuning

    def tuning_basis(self) -> str:
        return (
            "Verstärkungen gelten in Prozent des Ausgangs je Prozent der Messspanne, in der Standardform (ISA-TR5.9), "
            "sofern eine Tabelle keine andere nennt. Die Reserven stammen aus dem exakten Frequenzgang der "
            "Prozessmodelle bei geschlossenen unterlagerten Regelkreisen; die Totzeit ist nicht angenähert, und eine "
            "Abtastzeit zählt mit ihrer Hälfte als Totzeit; ein Regelkreis, dessen Verstärkungsreserve oberhalb eines "
            "Viertels der Abtastfrequenz abzulesen wäre, wo das nicht mehr gilt, ist als Abtastregelung gerechnet. Ms "
            "ist das Maximum der Empfindlichkeitsfunktion; das Geschwindigkeitsverhältnis ist die Durchtrittsfrequenz "
            "des unterlagerten Regelkreises, geteilt durch die eigene."
        )

    def larger_branch(self) -> str:
        return "Bei Split-Range gilt der Zweig mit dem größeren Ms"

    def not_stable(self, tag: str) -> str:
        return f"{tag} ist mit dieser Einstellung nicht stabil"

    def gain_margin_sampled(self, tag: str, reason: str) -> str:
        return f"Die Verstärkungsreserve von {tag} wäre am abgetasteten Regelkreis zu bestimmen: {reason}"

    def margins_sampled(self, tags: Sequence[str]) -> str:
        return f"Die Reserven von {self.listed(tags)} sind die des abgetasteten Regelkreises"

    def no_margins_held(self, tags: Sequence[str], what: str) -> str:
        verb = "sind" if what == "lags" else "ist"
        open_ = f"{held_noun(what)} {verb} noch offen (HOLD)"
        return f"Für {self.listed(tags)} lassen sich keine Reserven berechnen: {open_}"

    def no_margins(self, tags: Sequence[str], reason: str) -> str:
        return f"Für {self.listed(tags)} lassen sich keine Reserven berechnen: {reason}"

    # -- upsets

    def setpoint_up(self, tag: str, size: str) -> str:
        return f"Sollwertsprung von {tag} um {size}"

    def setpoint_to_limit(self, tag: str, size: str) -> str:
        if not size:
            return f"Sollwertsprung von {tag}, dessen Sollwert schon an seiner Grenze steht"
        return f"Sollwertsprung von {tag} um {size} bis an seine Grenze"

    def declared_at(self, name: str, tag: str) -> str:
        return f"Die Störung {self.quoted(name)} an {tag}"

    def upset_at_input(self, size: str, tag: str) -> str:
        return f"Eine Störung von {size} am Prozesseingang von {tag}"

    def upset_at(self, size: str, tag: str) -> str:
        return f"Eine Störung von {size} an {tag}"

    def cascade_gains(self, upset: str, lead: str, ours: str, element: str, alone: str, share: str) -> str:
        integral = f" Das Integral des Absolutwerts der Regeldifferenz beträgt {share}{NO_BREAK}% desjenigen der " \
                   "einschleifigen Regelung." if share else ""  # fmt: skip
        return (
            f"{upset} lenkt {lead} mit der Kaskade um höchstens {ours} aus; eine einschleifige Regelung auf {element}, "
            f"nach SIMC auf dasselbe Ms eingestellt, ließe {alone} Auslenkung zu.{integral}"
        )

    def upset_not_calculated(self, name: str, tag: str, reason: str) -> str:
        return f"Die Störung {self.quoted(name)} (angegeben bei {tag}) ist nicht berechnet: {reason}"

    def upset_moves_input(self, name: str, tag: str, end: str, size: str) -> str:
        return (
            f"Die Störung {self.quoted(name)} (angegeben bei {tag}) wirkt auf {tag} wie eine Änderung von {end} um "
            f"{size}, über den Prozess von {tag}"
        )

    def upset_moves(self, name: str, tag: str, size: str, lag: str, process_lags: Sequence[str]) -> str:
        if lag:
            through = f"mit der Zeitkonstante {lag}"
        elif process_lags:
            one = len(process_lags) == 1
            noun = "der Zeitkonstante" if one else "den Zeitkonstanten"
            through = f"mit {noun} des Prozesses ({self.listed(process_lags)})"
        else:
            through = "ohne Verzögerung"
        named = f"Die Störung {self.quoted(name)} (angegeben bei {tag})"
        return f"{named} verändert den Messwert von {tag} um {size}, {through}"

    def upset_late(self, told: str, dead_time: str) -> str:
        return f"{told}, nach einer Totzeit von {dead_time}"

    def upset_fed_forward(self, told: str, tag: str, size: str, lag: str, function: str) -> str:
        how = f"mit der Zeitkonstante {lag}" if lag else "ohne Verzögerung"
        return f"{told}; {tag} ändert sich dabei um {size} ({how}), was {function} als Störgröße aufschaltet"

    def upset_not_fed_forward(self, told: str, tags: Sequence[str]) -> str:
        verb = "ändert sich" if len(tags) == 1 else "ändern sich"
        return f"{told}; {self.listed(tags)} {verb} dabei, was in diesen Verläufen nichts bewirkt"

    def upset_outcome(self, told: str, lead: str, peak: str, without: str, alone: str) -> str:
        unaided = f", ohne Störgrößenaufschaltung um {without}" if without else ""
        if not alone:
            return f"{told}; mit der vorliegenden Einstellung weicht {lead} dann um höchstens {peak} ab{unaided}"
        single = f"mit der einschleifigen Regelung{', die keine hat,' if without else ''} um {alone}"
        return f"{told}; mit der Kaskade weicht {lead} dann um höchstens {peak} ab{unaided}, {single}"

    def feedforward_leaves(self, share_of_peak: str, share_of_error: str) -> str:
        return (
            f"Die Störgrößenaufschaltung lässt davon {share_of_peak}{NO_BREAK}% der größten Abweichung und "
            f"{share_of_error}{NO_BREAK}% des Integrals des Absolutwerts der Regeldifferenz übrig"
        )

    def nothing_to_compare(self, element: str) -> str:
        return (
            f"Keine einschleifige Regelung auf {element} erreicht nach SIMC dasselbe Ms; ein Vergleich entfällt."
        )

    def single_loop(self, element: str, lead: str, sensitivity: str, gain: str, reset: str) -> str:
        return (
            f"Einschleifige Regelung: ein Regler auf {element} anstelle der Kaskade, nach SIMC für alle Prozesse in "
            f"Reihe auf das Ms von {lead} eingestellt, Ms {sensitivity} (Verstärkung {gain}{NO_BREAK}% je %, "
            f"Nachstellzeit {reset}), sodass keine Seite durch geringere Robustheit gewinnt."
        )

    # -- figures

    def response_title(self, lead: str, element: str) -> str:
        return f"Zeitverhalten von {lead} mit {element}"

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
        whose = f"des Messwerts von {lead}" if alone else "jedes Messwerts der Kaskade"
        parts = [
            f"Verhalten von {lead} mit {element} bei einem Sprung um {size}{NO_BREAK}% der Messspanne: des Sollwerts"
            + (" (nur bis an dessen Grenze)" if limited else "")
            + f" und, über die Zeitkonstanten des jeweiligen Prozesses, {whose}"
            + ("; bei einem integrierenden Prozess greift die Störung an seinem Eingang an." if integrating else "."),
            "Im Register angegebene Störungen haben ihre eigene Größe und Zeitkonstante." if declared else "",
            "Lineare Modelle um die Normalwerte, Abtastung für Abtastung wie ausgeführt simuliert, mit "
            "Ausgangsbegrenzung"
            + (f" und einer Stellzeit von {stroke}" if stroke else "")
            + "; jeder Messwert beginnt bei seinem Normalwert, das Stellglied in der Mitte seiner Ausgangsgrenzen.",
            "Alarme, Auslösungen und Ausgangsgrenzen sind eingezeichnet, wo sie nahe den Kurven liegen; jedes Feld hat "
            "seinen eigenen Maßstab.",
            f"Aus Platzgründen nicht gezeichnet: {self.listed(left_out)}." if left_out else "",
        ]
        return " ".join(part for part in parts if part)

    def panel_upset(self, tag: str) -> str:
        return f"Störung an {tag}"

    def upset_unsized(self, tag: str) -> str:
        return f"die Störung an {tag}"

    def panel_time(self, unit: str) -> str:
        return f"Zeit, {unit}"

    def output_limit(self, limit: str) -> str:
        return f"Grenze {limit}{NO_BREAK}%"

    def alarm_letters(self, kind: str) -> str:
        return {"high_high": "HH", "high": "H", "low": "L", "low_low": "LL", "deviation": "ABW"}.get(kind, "")

    # -- the small figure of a loop sheet

    def sheet_response(self, overshoot: str, settling: str, offset: str) -> str:
        over = f"Überschwingen {overshoot}{NO_BREAK}%" if overshoot else "Kein Überschwingen"
        stays = f", {offset}{NO_BREAK}% unter dem Sollwert" if offset else ""
        return f"{over}, ausgeregelt auf 2{NO_BREAK}% in {settling}{stays}."

    def sheet_response_title(self, tag: str, words: str) -> str:
        return f"Berechnete Führungssprungantwort von {tag}: {words}"


