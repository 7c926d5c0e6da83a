"""German: how a scheme works, who commands whom, which way and why; modes, limits and tracking."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from loopdoc.documents.language.english.naming import DRIVES
from loopdoc.documents.language.english.scheme import EnglishScheme
from loopdoc.documents.language.facts import Action, Asked, Moved, Reason, Rise, Share
from loopdoc.documents.language.german.grammar import number_word, with_article
from loopdoc.documents.language.german.naming import GermanNaming, moving
from loopdoc.documents.language.noun import Noun
from loopdoc.documents.wording import sentences
from loopdoc.register.model import FinalElement, Measurement, known

_PRONOUN = {"m": "ihn", "f": "sie", "n": "es"}
_RELATIVE = {"m": "den", "f": "die", "n": "das"}
_RISING = {"m": "steigendem", "f": "steigender", "n": "steigendem"}
_IN_MODE = {
    "manual": "im Handbetrieb",
    "automatic": "in Automatik",
    "cascade": "in Kaskade",
    "initialisation": "in der Initialisierung",
    "remote output": "im Fernstellbetrieb",
    "out of service": "außer Betrieb",
}
_INTO_MODE = {
    "manual": "in Handbetrieb",
    "automatic": "in Automatik",
    "cascade": "in Kaskade",
    "initialisation": "in die Initialisierung",
    "remote output": "in Fernstellbetrieb",
    "out of service": "außer Betrieb",
}


def into_mode(mode: str) -> str:
    """A mode into which a controller is put."""
    return _INTO_MODE[mode]


class GermanScheme(GermanNaming, EnglishScheme):
    """Sentences of the section of a scheme."""

    def purpose(self, subject: str, purpose: str) -> str:
        return sentences(f"{subject}: {purpose}")

    def unit_subject(self, number: str) -> str:
        return f"Teilanlage {number}"

    def drawings(self, numbers: Sequence[str]) -> str:
        return f"Zeichnung{'' if len(numbers) == 1 else 'en'} {self.listed(numbers)}"

    def led_elsewhere(self, count: int, lead: str, document: str, unit: str) -> str:
        those = "Dieser Regler gehört" if count == 1 else "Diese Regler gehören"
        return f"{those} zur Regelung von {lead}, die {document} als Ganzes beschreibt (Teilanlage {unit})."

    # -- who measures, who commands

    def by_nothing_defined(self, to: str) -> str:
        return f"mit seinem Ausgang auf {to} (im Register nicht definiert)"

    def by_selector(self, end: str, function: str) -> str:
        return f"mit seiner Anforderung an {end} über {function}"

    def by_sum(self, end: str, function: str) -> str:
        return f"durch Korrektur des Sollwerts von {end} an {function}"

    def by_ratio(self, function: str) -> str:
        return f"durch Vorgabe des Verhältnisses an {function}"

    def by_split(self, function: str) -> str:
        return f"über {function}"

    def by_element(self, element: FinalElement, through: Sequence[str], told: Noun) -> str:
        via = f" über {self.listed(through)}" if through else ""
        what = "über die Drehzahl" if known(element.kind) in DRIVES else "durch Verstellen"
        return f"{what} von {self.element_phrase(element, told)}{via}"

    def by_commanding(self, end: str, through: Sequence[str]) -> str:
        via = f" über {self.listed(through)}" if through else ""
        return f"als Führungsregler von {end}{via}"

    def in_the_same_way(self) -> str:
        return "auf demselben Weg"

    def idle_loop(self, tag: str, what: Noun, measured: Measurement | None, ends: Sequence[str], mode: str) -> str:
        would = f" durch Verstellen von {self.listed(ends)}" if ends else ""
        beside = self.in_brackets(measured) if measured else ""
        relative = f"{_RELATIVE[what.gender]}"
        left = f"{relative} {tag}{would} regeln würde, ist ungeregelt"
        return f"{self._upper(what)}{beside}, {left}: {tag} {self.kept(mode)}"

    def kept(self, mode: str) -> str:
        return "bleibt im Handbetrieb" if mode == "manual" else "ist außer Betrieb"

    def holds(self, tag: str, what: Noun, how: str, measured: Measurement | None = None) -> str:
        beside = self.in_brackets(measured) if measured else ""
        return f"{tag} regelt {with_article(what, 2)}{beside} {how}".rstrip()

    def measured_and_held(self, tag: str, what: Noun, how: str, measured: Measurement, *, limits: bool) -> str:
        by, written = self.with_sensor(measured), self.range_of(measured)
        over = f" im Messbereich {written}" if written else ""
        verb, end = ("begrenzt", "auf seinen Sollwert") if limits else ("hält", "auf dem Sollwert")
        held = f"{verb} {_PRONOUN[what.gender]}{f' {how}' if how else ''} {end}"
        return f"{by} misst {with_article(what, 2)}{over}, und {tag} {held}"

    def _upper(self, what: Noun) -> str:
        told = self.the(what)
        return f"{told[0].upper()}{told[1:]}"

    # -- functions

    def term_of_function(self, weight: float, tag: str, *, is_function: bool) -> str:
        return f"{self._times(weight)}{'den Ausgang von ' if is_function else ''}{tag}"

    def term_of_measurement(self, weight: float, what: Noun, measured: Measurement) -> str:
        return f"{self._times(weight)}{with_article(what, 2)}{self.in_brackets(measured)}"

    def _times(self, weight: float) -> str:
        return "" if weight == 1.0 else f"{self.number(weight)}-mal "

    def adds(self, function: str, terms: Sequence[str], loop: str, to: str) -> str:
        own = f"zum Ausgang von {loop}" if loop else "zu den übrigen Eingängen"
        return f"{function} addiert {self.listed(terms)} {own}; die Summe ist der Sollwert von {to}"

    def multiplies(self, function: str, terms: Sequence[str], loop: str, limits: str, usual: str, to: str) -> str:
        by = f"dem Verhältnis, das {loop} anfordert" if loop else "einem Verhältnis, das der Bediener vorgibt"
        between = [limits, self.normally(usual) if usual else ""]
        told = ", ".join(part for part in between if part)
        return (
            f"{function} multipliziert {self.listed(terms)} mit {by}{f' ({told})' if told else ''}; "
            f"das Produkt ist der Sollwert von {to}"
        )

    def feeds_forward(self, function: str, terms: Sequence[str], to: str, times: tuple[str, str] | None) -> str:
        by = "über seine Kennlinie"
        if times is not None:
            names = ("Vorhalt", "Verzögerung")
            by = self.listed(f"{name} {time}" for name, time in zip(names, times, strict=True) if time)
            by = f"mit {by}" if by else ""
        return f"{function} schaltet {self.listed(terms)} als Störgröße auf {to} auf{f', {by}' if by else ''}"

    def function_between(self, function: str, kind: str) -> str:
        return f"{function} ({self.term('function', kind)}) liegt dazwischen"

    def selects(
        self, function: str, lower: bool, candidates: Sequence[str], to: str, busy: Sequence[str], idle: Sequence[str]
    ) -> str:
        which = "kleinere" if lower else "größere"
        if len(candidates) > 2:
            which = "kleinste" if lower else "größte"
        passed = f"{function} gibt die {which} der Anforderungen von {self.listed(candidates)} an {to} weiter"
        if not busy or not idle:
            return passed
        return (
            f"{passed}. Im Normalbetrieb {'führt' if len(busy) == 1 else 'führen'} {self.listed(busy)}, "
            f"und {self.listed(idle)} {'steht' if len(idle) == 1 else 'stehen'} in Bereitschaft"
        )

    def splits(self, function: str, shares: Sequence[Share], gap: tuple[float, float, bool] | None) -> str:
        parts: list[str] = []
        for share in shares:
            phrase = self.element_phrase(share.element) if share.element else share.tag
            way = "steigendem" if share.high > share.low else "fallendem"
            ends = f"von {self.number(share.low)} bis {self.percent(share.high)}"
            parts.append(f"{phrase} öffnet bei {way} Ausgang {ends}")
        told = f"{function} teilt den Ausgang auf (Split-Range): {'; '.join(parts)}"
        if gap is None:
            return told
        low, high, shut = gap
        both = "geschlossen" if shut else "teilweise geöffnet"
        return f"{told}. Zwischen {self.number(low)} und {self.percent(high)} sind beide {both}"

    # -- reversals

    def reversed_twice(self, element: FinalElement, function: str) -> str:
        source = f"von {function}" if function else "Stellgröße"
        return (
            f"{element.tag} öffnet bei fallendem Signal, und sein Ausgangsbaustein ist umgekehrt, "
            f"sodass {self.percent(0)} {source} weiterhin {_shut(element)} bedeuten"
        )

    def opens_on_falling(self, tag: str) -> str:
        return f"{tag} öffnet bei fallendem Signal, sodass ein steigender Ausgang es schließt"

    def block_reversed(self, tag: str) -> str:
        return f"Der Ausgangsbaustein von {tag} ist umgekehrt, sodass ein steigender Ausgang das Stellglied schließt"

    # -- which way, and why

    def rising(self, rises: Sequence[Rise], actions: Sequence[Action], told: Sequence[str]) -> str:
        acting = "; ".join(self._action(action) for action in actions)
        return sentences(*(self._rise(rise) for rise in rises), acting, *told)

    def _rise(self, rise: Rise) -> str:
        if rise.same:
            return f"Steigt {self.the(rise.what)}, reagiert {rise.tag} ebenso"
        first, *others = rise.steps
        told = [self._inverted(first), *(self._plain(step) for step in others)]
        return f"Steigt {self.the(rise.what)}, {_clauses(told)}"

    def _plain(self, step: Asked | Moved) -> str:
        if isinstance(step, Asked):
            return f"{step.by} {'erhöht' if step.up else 'senkt'} den Sollwert von {step.of}"
        return f"{step.by} {self.moves(step.moves)}"

    def _inverted(self, step: Asked | Moved) -> str:
        if isinstance(step, Asked):
            return f"{'erhöht' if step.up else 'senkt'} {step.by} den Sollwert von {step.of}"
        return self._moves_inverted(step.by, step.moves)

    def _action(self, action: Action) -> str:
        who, several = self.listed(action.tags), len(action.tags) > 1
        if action.every:
            who = "Beide Regler" if len(action.tags) == 2 else f"Alle {number_word(len(action.tags))} Regler"
        wirkt = f"{who} {'wirken' if several else 'wirkt'} {self.term('action', action.action)}"
        return f"{wirkt}, weil {self._because(action.reasons)}"

    def action_not_explained(self, tag: str, action: str, what: Noun, moved: Noun | None) -> str:
        when = f"{with_article(moved, 0)} steigt" if moved else "sein Ausgang steigt"
        return (
            f"{tag} wirkt {self.term('action', action)}; das Register gibt aber nicht an, wie sich "
            f"{with_article(what, 0)} verhält, wenn {when}"
        )

    def action_wrong(self, tag: str, action: str, reasons: Sequence[Reason]) -> str:
        return (
            f"{tag} ist mit dem Wirksinn {self.term('action', action)} eingetragen, obwohl {self._because(reasons)}; "
            "eine Regeldifferenz wird so vergrößert statt ausgeregelt"
        )

    def _how(self, reason: Reason) -> str:
        if reason.beside is not None:
            if reason.same_way:
                return f"mit {with_article(reason.beside, 1)}"
            return f"bei {_RISING[reason.beside.gender]} {reason.beside}"
        assert reason.element is not None
        if reason.opened:
            return moving(reason.element, 1)
        return f"{moving(reason.element, -1)} (durch steigenden Ausgang)"

    def _because(self, reasons: Sequence[Reason]) -> str:
        """Reasons as clauses with the verb last, nothing said twice."""
        by_what: dict[tuple[str, bool], list[str]] = {}
        for reason in reasons:
            by_what.setdefault((self.the(reason.what), reason.rises), []).append(self._how(reason))
        by_how: dict[tuple[bool, str], list[str]] = {}
        for (what, rises), hows in by_what.items():
            by_how.setdefault((rises, self.listed(hows)), []).append(what)
        parts = [
            f"{self.listed(whats)} {how} {('steigt' if rises else 'fällt') if len(whats) == 1 else _many(rises)}"
            for (rises, how), whats in by_how.items()
        ]
        return self.listed(parts)

    # -- modes and limits

    def runs_in(self, tag: str, mode: str, others: Sequence[str]) -> str:
        may = f"der Bediener darf auch {self.either(_INTO_MODE[other] for other in others)} schalten" if others else ""
        return "; ".join(part for part in (f"{tag} läuft {_IN_MODE[mode]}" if mode else "", may) if part)

    def setpoint_and_output(self, usual: str, limits: str, output: str, *, in_automatic: bool) -> str:
        where = "in Automatik " if in_automatic else ""
        if usual and limits:
            told = f"der Sollwert, normal {usual}, ist {where}{self._from(limits)} einstellbar"
        elif usual or limits:
            may = f"der Sollwert ist {where}{self._from(limits)} einstellbar"
            told = f"der Sollwert ist normal {usual}" if usual else may
        else:
            return output
        return f"{told}; {output}" if output else told

    def output_within(self, limits: str) -> str:
        return f"der Ausgang ist auf {limits.removeprefix('bis ')} begrenzt" if not limits.startswith("ab ") else (
            f"der Ausgang liegt {limits}"
        )

    def output_whole(self, element: FinalElement) -> str:
        kind = known(element.kind)
        travel = "den ganzen Stellweg"
        if kind in DRIVES:
            travel = "den ganzen Drehzahlbereich"
        elif kind == "heater bank":
            travel = "die ganze Leistung"
        return f"der Ausgang darf {travel} von {element.tag} nutzen"

    def output_all(self, limits: str) -> str:
        return f"der Ausgang läuft {self._from(limits)}"

    def _from(self, limits: str) -> str:
        return limits if limits.startswith(("bis ", "ab ")) else f"von {limits}"

    def setpoint_from(self, commanders: Sequence[str]) -> str:
        return f"von {self.listed(commanders)}"

    # -- when the output is not followed

    def tracks_selected(self, uppers: Sequence[str], selector: str, lower: str) -> str:
        everyone = "beide" if len(uppers) == 2 else "alle"
        return (
            f"Von {self.listed(uppers)} wird der jeweils nicht führende Regler der von {selector} weitergegebenen "
            f"Anforderung nachgeführt; solange {lower} nicht in Kaskade ist, werden {everyone} {lower} nachgeführt, "
            "sodass der Wechsel der Führung stoßfrei ist"
        )

    def track(self, pairs: Sequence[tuple[str, str]]) -> str:
        each = [f"{upper} {'wird ' if not index else ''}{lower}" for index, (upper, lower) in enumerate(pairs)]
        return (
            f"{self.listed(each)} nachgeführt, solange der jeweilige Folgeregler nicht in Kaskade oder an einer "
            "Grenze ist; die Rückkehr ist stoßfrei"
        )

    def tracks(self, upper: str, lower: str) -> str:
        return (
            f"Solange {lower} nicht in Kaskade oder an einer Grenze ist, wird {upper} nachgeführt, sodass die Rückkehr "
            "stoßfrei ist"
        )

    def does_not_track(self, uppers: Iterable[str], lower: str, policy: str) -> str:
        who = list(uppers)
        below = lower or "der Folgeregler"
        one = len(who) == 1
        if policy == "hold":
            does = f"{'hält' if one else 'halten'} {self.listed(who)} {'seinen Ausgang' if one else 'ihre Ausgänge'}"
        else:
            goes, may = ("rechnet", "kann") if one else ("rechnen", "können")
            does = f"{goes} {self.listed(who)} weiter und {may} auflaufen (Wind-up)"
        return f"Solange {below} nicht in Kaskade oder an einer Grenze ist, {does}"


def _clauses(told: Sequence[str]) -> str:
    """Clauses in one sentence: a comma before `und`, since each has a subject of its own."""
    return told[0] if len(told) == 1 else f"{', '.join(told[:-1])}, und {told[-1]}"


def _many(rises: bool) -> str:
    return "steigen" if rises else "fallen"


def _shut(element: FinalElement) -> str:
    kind = known(element.kind)
    if kind in DRIVES:
        return "die kleinste Drehzahl"
    if kind == "heater bank":
        return "keine Leistung"
    return "eine geschlossene Klappe" if kind == "damper" else "ein geschlossenes Ventil"
