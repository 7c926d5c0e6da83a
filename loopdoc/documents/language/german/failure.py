"""German: what a scheme does when something fails."""

from __future__ import annotations

from collections.abc import Sequence

from loopdoc.documents.language.english.failure import EnglishFailure
from loopdoc.documents.language.english.grammar import NO_BREAK
from loopdoc.documents.language.facts import Moves, Way
from loopdoc.documents.language.german.naming import GermanNaming
from loopdoc.documents.language.german.scheme import into_mode
from loopdoc.documents.language.noun import Noun
from loopdoc.documents.wording import sentence
from loopdoc.register.model import FinalElement

ALARMS = {
    "high_high": "Hoch-Hoch-Alarm",
    "high": "Hochalarm",
    "low": "Tiefalarm",
    "low_low": "Tief-Tief-Alarm",
    "deviation": "Abweichungsalarm",
}
_HAZARD = {
    "m": ("ein zu hoher", "ein zu niedriger", "ein zu hoher oder zu niedriger"),
    "f": ("eine zu hohe", "eine zu niedrige", "eine zu hohe oder zu niedrige"),
    "n": ("ein zu hohes", "ein zu niedriges", "ein zu hohes oder zu niedriges"),
}


class GermanFailure(GermanNaming, EnglishFailure):
    """Sentences of the table of failures."""

    def failure_assumptions(self) -> str:
        return (
            "Betrachtet wird jeweils ein Fehler, beurteilt nach Wirksinn und Betriebsart im Register. Ein "
            "Messumformer meldet seine eigene Störung mit höchstens 3,6 mA oder mindestens 21 mA (NAMUR NE 43); sein "
            "Regler verhält sich dann wie für einen gestörten Messwert festgelegt. Ein nur falscher Messwert gilt als "
            "gültig, im ungünstigsten Fall am Ende seines Messbereichs. Auch ein stehen gebliebener Messwert gilt als "
            "gültig, und nur eine andere Messung kann ihn erkennen. Mit der Versorgung des Leitsystems fallen dessen "
            "Alarme und Betriebsverriegelungen aus; die Sicherheitsebene bleibt. Als Schutz gegen einen Fehler zählt "
            "nur, was ein anderer Sensor auslöst."
        )

    def nothing_against(self) -> str:
        return "Nichts Unabhängiges im Register"

    def no_hazard(self) -> str:
        return "Keine angegebene Gefahr"

    def not_told(self) -> str:
        return "Lässt sich nicht angeben"

    def without_control_power(self, left: str) -> str:
        return f"Ohne Versorgung des Leitsystems: {left or 'nichts'}"

    def hazards(self, found: Sequence[tuple[Noun, str]]) -> str:
        told = [self.hazard(name, which) for name, which in found]
        return sentence(f"{'Gefährlich ist' if len(told) == 1 else 'Gefährlich sind'} {self.listed(told)}")

    def hazard(self, name: Noun, which: str) -> str:
        return f"{_HAZARD[name.gender][('high', 'low', 'both').index(which)]} {name}"

    # -- the failure

    def transmitter_fails(self, sensor: str, how: str, *, as_when_it_fails: bool = False) -> str:
        told = {
            "high": "zeigt zu hoch an",
            "low": "zeigt zu niedrig an",
            "fault": "meldet eine Störung",
            "holds": "fällt aus und hält den letzten Wert",
        }[how]
        return f"{sensor} {told}{', wie bei Ausfall' if as_when_it_fails else ''}"

    def losses(self, lost: Sequence[tuple[tuple[str, ...], Sequence[FinalElement | None]]], power: bool) -> str:
        told = []
        for at, what in lost:
            names = ["Signal" if element is None else self.power_of(element) for element in what]
            told.append(f"{self.listed(at)} ohne {self.either(names)}")
        if power:
            told.append("Ausfall der Versorgung des Leitsystems")
        return "; ".join(told)

    # -- what the control does

    def bad_undefined(self, tag: str) -> str:
        return f"Die Reaktion von {tag} steht nicht im Register"

    def function_undefined(self, tag: str) -> str:
        return f"Die Reaktion von {tag} darauf steht nicht im Register"

    def goes(self, tag: str, mode: str, output: str, moved: Moves) -> str:
        to = f"{tag} geht {into_mode(mode)}" if mode else f"{tag} bleibt in seiner Betriebsart"
        if not output:
            return f"{to} und hält seinen Ausgang"
        ends = self.moves_by_itself(moved)
        return f"{to} mit dem Ausgang {output}{f', und {ends}' if ends else ''}"

    def track_too(self, tags: Sequence[str]) -> str:
        return f"{self.listed(tags)} {'wird' if len(tags) == 1 else 'werden'} nachgeführt"

    def does_nothing(self, tag: str, mode: str) -> str:
        how = "bleibt im Handbetrieb" if mode == "manual" else "ist außer Betrieb"
        return f"{tag} {how} und reagiert nicht"

    def goes_on(self, tag: str) -> str:
        return f"{tag} regelt mit dem alten Wert weiter"

    def cannot_be_told(self, tag: str, reason: str) -> str:
        return f"Das Verhalten von {tag} lässt sich nicht angeben: {reason}"

    def trips_on_it(self, tags: Sequence[str]) -> str:
        return f"{self.listed(tags)} {'löst' if len(tags) == 1 else 'lösen'} dadurch aus"

    def demands(self, asked: Sequence[tuple[str, str, Noun, bool]], reach: str, mover: str, moved: Moves) -> str:
        told = [
            f"{by} {'erhöht' if up else 'senkt'} den Sollwert von {of}{'' if index else reach}"
            for index, (by, of, _, up) in enumerate(asked)
        ]
        if moved:
            told.append(f"{mover} {self.moves(moved)}")
        return told[0] if len(told) == 1 else f"{', '.join(told[:-1])}, und {told[-1]}"

    def reach_by(self, limit: str) -> str:
        return f" (um bis zu {limit})"

    def reach_to(self, limit: str, *, up: bool) -> str:
        return f" (bis auf {limit})"

    def goes_on_passing(self, tag: str, up: bool | None, selector: str, instead: Sequence[str]) -> str:
        asks = "" if up is None else f"{tag} fordert {'mehr' if up else 'weniger'} an. "
        return f"{asks}{selector} gibt weiterhin die Anforderung von {self.either(instead)} weiter"

    def asks_of(self, by: str, loop: str, name: Noun, *, up: bool) -> str:
        return f"{by} {'erhöht' if up else 'senkt'} den Sollwert von {loop}"

    def asks_and_moves(self, by: str, loop: str, name: Noun, up: bool, moved: Moves) -> str:
        told = self.asks_of(by, loop, name, up=up)
        return f"{told}, und {loop} {self.moves(moved)}" if moved else told

    def settles(self, moved: Sequence[tuple[FinalElement, int, str]]) -> str:
        return self.listed(self._settles(element, way, position) for element, way, position in moved)

    def _settles(self, element: FinalElement, way: int, position: str) -> str:
        if way == 0:
            return f"{element.tag} bleibt stehen"
        if position == "stopped":
            return f"{element.tag} läuft aus"
        if not position:
            return f"{element.tag} läuft aus oder fällt auf seine kleinste Drehzahl, je nach Einstellung"
        return self.moves_by_itself(((element, way),))

    # -- what the process does

    def process_ways(self, ways: Sequence[Way]) -> str:
        by_way: dict[bool, list[str]] = {}
        for way in ways:
            by_way.setdefault(way.rises, []).append(self.the(way.name))
        verbs = {(True, True): "steigt", (True, False): "steigen", (False, True): "fällt", (False, False): "fallen"}
        return self.listed(
            f"{self.listed(names)} {verbs[rises, len(names) == 1]}" for rises, names in by_way.items()
        )

    def towards_the_hazard(self, ways: Sequence[Way]) -> str:
        each = {1: "", 2: "beide "}.get(len(ways), "alle ")
        return f"{self.process_ways(ways)}, {each}in Richtung der Gefahr"

    def unlimited(self, names: Sequence[Noun]) -> str:
        verb = "ist" if len(names) == 1 else "sind"
        return f"nichts bewegt sich, aber {self.listed(map(self.the, names))} {verb} nicht mehr begrenzt"

    def left(self, names: Sequence[Noun]) -> str:
        verb = "bleibt" if len(names) == 1 else "bleiben"
        return f"{self.listed(map(self.the, names))} {verb} ungeregelt"

    def way_unknown(self, names: Sequence[Noun], *, by_load: bool) -> str:
        one = len(names) == 1
        goes = f"{self.listed(map(self.the, names))} {'steigt oder fällt' if one else 'steigen oder fallen'}"
        return f"ob {goes}, hängt von der Last ab" if by_load else f"ob {goes}, lässt sich nicht angeben"

    def takes_over(self, tags: Sequence[str]) -> str:
        return f"{self.either(tags)} übernimmt bei seinem eigenen Sollwert"

    def makes_up(self, tag: str) -> str:
        return f"{tag} gleicht das aus, soweit seine Ausgangsgrenzen es zulassen"

    # -- what stands against it

    def alarms_against(self, tag: str, alarms: Sequence[tuple[str, str]]) -> str:
        told = [f"{self.alarm_kind(kind)}{NO_BREAK}{limit}" if limit else self.alarm_kind(kind)
                for kind, limit in alarms]  # fmt: skip
        return f"{tag} ({', '.join(told)})"

    def alarm_kind(self, kind: str) -> str:
        return ALARMS[kind]

    def trip_against(self, tag: str, side: str, limit: str) -> str:
        return f"{tag} ({self.side(side, limit)})" if side and limit else tag

    def moved_back(self, interlock: str, moved: Moves) -> str:
        return f"{interlock} {self.moves(moved)} bei ihrem eigenen Grenzwert"
