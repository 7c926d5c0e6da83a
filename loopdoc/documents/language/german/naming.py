"""German: what quantities, sensors and final elements are called.

Services of the register are words of another language with an unknown gender: they stand in quotation marks behind
a German noun that carries article and case.
"""

from __future__ import annotations

from loopdoc.documents.language.english.naming import DRIVES, EnglishNaming, stem
from loopdoc.documents.language.facts import Moves
from loopdoc.documents.language.german.grammar import GermanGrammar, with_article
from loopdoc.documents.language.noun import Noun
from loopdoc.register.model import FinalElement, Loop, known

_QUANTITIES = {
    "temperature": ("Temperatur", "f"),
    "temperature difference": ("Temperaturdifferenz", "f"),
    "pressure": ("Druck", "m"),
    "differential pressure": ("Differenzdruck", "m"),
    "flow": ("Durchfluss", "m"),
    "level": ("Füllstand", "m"),
    "analysis": ("Analysenwert", "m"),
    "speed": ("Drehzahl", "f"),
    "position": ("Stellung", "f"),
    "power": ("Leistung", "f"),
    "current": ("Strom", "m"),
    "weight": ("Gewicht", "n"),
    "density": ("Dichte", "f"),
    "conductivity": ("Leitfähigkeit", "f"),
    "vibration": ("Schwingung", "f"),
}
SOFT_HYPHEN = "\u00ad"
_UNNAMED = ("Messwert", "m")


class GermanNaming(GermanGrammar, EnglishNaming):
    """Names of things in a sentence."""

    def quantity(self, loop: Loop) -> Noun:
        short = self.short_quantity(loop)
        service = stem(known(loop.service) or "")
        return Noun(f"{short} {self.quoted(service)}" if service else short, short.gender)

    def short_quantity(self, loop: Loop) -> Noun:
        measurement = known(loop.measurement)
        variable = known(measurement.variable) if measurement else None
        return Noun(*_QUANTITIES.get(variable or "", _UNNAMED))

    def the(self, name: Noun) -> str:
        return with_article(name, 0)

    def element_phrase(self, element: FinalElement, told: str = "") -> str:
        kind, service = known(element.kind), stem(known(element.service) or "")
        parts = [self.term("element", kind).replace(SOFT_HYPHEN, "")] if kind else []
        characteristic = known(element.characteristic)
        if characteristic and kind == "control valve":
            parts.append(self.term("characteristic", characteristic).replace(SOFT_HYPHEN, ""))
        if service and service.casefold() not in told.casefold():
            parts.append(self.quoted(service))
        return f"{element.tag} ({', '.join(parts)})" if parts else element.tag

    def moves(self, moved: Moves) -> str:
        return self.listed(f"{verb} {thing}" for verb, thing in map(_done, moved))

    def moves_by_itself(self, moved: Moves) -> str:
        return self.listed(_by_itself(element, way) for element, way in moved)

    def power_of(self, element: FinalElement) -> str:
        kind = known(element.kind)
        if kind in DRIVES or kind == "heater bank":
            return "elektrische Versorgung"
        return "Steuerluft" if known(element.fails) in ("closed", "open") else "Hilfsenergie"

    # -- word order

    def _moves_inverted(self, who: str, moved: Moves) -> str:
        """The verb first: `schließt FIC-2011 das Stellglied FV-2011`."""
        (verb, thing), *others = map(_done, moved)
        return self.listed([f"{verb} {who} {thing}", *(f"{verb} {thing}" for verb, thing in others)])


def _done(move: tuple[FinalElement, int]) -> tuple[str, str]:
    """Verb and object of what somebody does who moves a final element."""
    element, way = move
    kind = known(element.kind)
    if kind in DRIVES or kind == "heater bank":
        what = "Drehzahl" if kind in DRIVES else "Leistung"
        return "erhöht" if way > 0 else "verringert", f"die {what} von {element.tag}"
    return "öffnet" if way > 0 else "schließt", f"das Stellglied {element.tag}"


def _by_itself(element: FinalElement, way: int) -> str:
    kind = known(element.kind)
    if kind in DRIVES:
        return f"{element.tag} läuft {'schneller' if way > 0 else 'langsamer'}"
    if kind == "heater bank":
        return f"{element.tag} nimmt {'mehr' if way > 0 else 'weniger'} Leistung auf"
    return f"{element.tag} {'öffnet' if way > 0 else 'schließt'}"


def moving(element: FinalElement, way: int) -> str:
    """The movement as a noun with its preposition: `beim Öffnen von FV-2011`."""
    kind = known(element.kind)
    if kind in DRIVES or kind == "heater bank":
        what = "Drehzahl" if kind in DRIVES else "Leistung"
        return f"bei {'steigender' if way > 0 else 'fallender'} {what} von {element.tag}"
    return f"beim {'Öffnen' if way > 0 else 'Schließen'} von {element.tag}"
