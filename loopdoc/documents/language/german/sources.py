"""German: what the values of a document are called, and where they come from."""

from __future__ import annotations

from collections.abc import Sequence

from loopdoc.documents.language.english.sources import EnglishSources
from loopdoc.documents.language.german.sheet import GermanSheet

_NAMES = {
    ("controller", "modes", "normal"): "normale Betriebsart",
    ("controller", "on_bad_measurement", "mode"): "Betriebsart bei gestörtem Messwert",
    ("controller", "on_bad_measurement", "output"): "Ausgang bei gestörtem Messwert",
    ("controller", "setpoint", "low"): "untere Sollwertgrenze",
    ("controller", "setpoint", "normal"): "normaler Sollwert",
    ("controller", "setpoint", "high"): "obere Sollwertgrenze",
    ("controller", "output", "low"): "untere Ausgangsgrenze",
    ("controller", "output", "high"): "obere Ausgangsgrenze",
    ("controller", "output", "span"): "Ausgangsbereich",
    ("bypass", "permitted"): "Überbrückung",
    ("bypass", "limit"): "Höchstdauer einer Überbrückung",
    ("normal",): "normales Verhältnis",
    ("overview",): "Übersicht",
}
_LISTED = {
    "start_up": "Anfahren, Schritt", "shut_down": "Abfahren, Schritt", "upsets": "Störung", "lags": "Zeitkonstante",
}  # fmt: skip
_ACTIONS = {"mode": "Betriebsart", "output": "Ausgang"}
_DEVIATION = {"until": "Frist", "reason": "Grund", "approved_by": "genehmigt von"}


class GermanSources(GermanSheet, EnglishSources):
    """Words of the appendix of sources, and of what is calculated."""

    def origin_name(self, path: Sequence[str | int]) -> str:
        steps = tuple(str(step) for step in path)
        if steps in _NAMES:
            return _NAMES[steps]
        match steps:
            case ("controller", "modes", "permitted", *_):
                return "wählbare Betriebsart"
            case ("initiators", tag, "trips"):
                return f"Auslösewert von {tag}"
            case ("initiators", tag, "delay"):
                return f"Auslöseverzögerung von {tag}"
            case ("actions", tag, *rest):
                return f"{_ACTIONS.get(rest[0], rest[0]) if rest else 'Stellung'} von {tag} bei Auslösung"
            case ("outputs", tag):
                return f"Ausgangsbereich von {tag}"
            case ("weights", tag):
                return f"Gewicht von {tag}"
            case ((*above, name, at)) if name in _LISTED and at.isdecimal():
                of = f" für {above[-1]}" if "branches" in above else ""
                return f"{_LISTED[name]} {int(at) + 1}{of}"
            case ("deviations", name):
                return f"Abweichung, {_DEVIATION.get(name, self.quoted(name))}"
        return self.held_name(path)

    def sources_intro(self, fingerprint: str) -> str:
        return (
            "Alle Werte, die dieses Dokument nennt, nach Kennzeichen geordnet. Datei und Zeile sind die des Registers "
            f"mit dem Fingerabdruck {fingerprint}, das im PDF enthalten ist; ein berechneter Wert nennt seine "
            "Berechnung."
        )

    def source_note(self, what: str, tag: str, where: str) -> str:
        return f"{what}{f', {tag}' if tag else ''}: {where}"

    def by_frequency_response(self) -> str:
        return "berechnet, Frequenzgang der Prozessmodelle"

    def by_simulation(self) -> str:
        return "berechnet, Zeitverhalten der Prozessmodelle"

    def by_time_to_act(self) -> str:
        return "berechnet, Prozessmodelle aus dem Normalbetrieb mit den Kreisen in Hand"

    def by_the_two_times(self) -> str:
        return "berechnet, Reaktionszeit zu Prozesssicherheitszeit"

    def by_standard_upset(self) -> str:
        return "berechnet, ein Zehntel der Messspanne"

    def by_setpoint_limit(self) -> str:
        return "berechnet, vom normalen Sollwert bis an seine Grenze"

    def by_sized_upset(self) -> str:
        return "berechnet, so dass ein anderer Regler oder ein anderes Stellglied übernimmt"

    def by_check(self, rule: str) -> str:
        return f"Prüfung des Registers, Regel {rule}"
