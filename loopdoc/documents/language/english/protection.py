"""English: alarms and interlocks, and the time between the two."""

from __future__ import annotations

from collections.abc import Sequence

from loopdoc.documents.language.english.failure import EnglishFailure
from loopdoc.documents.language.noun import Noun
from loopdoc.documents.wording import clause, number_word, sentences

_DOES = {"closed": "closes", "open": "opens", "stopped": "stops", "started": "starts"}


class EnglishProtection(EnglishFailure):
    """Sentences about alarms, interlocks and times to act."""

    # -- alarms

    def alarm_heading(self, tag: str, kind: str) -> str:
        """An alarm at the head of its row."""
        return f"{tag} {self.alarm_kind(kind)}"

    def alarm_limit(self, limit: str, deadband: str, delay: str) -> str:
        """Limit, dead band and delay of an alarm; each empty where it is not given."""
        parts = [limit, f"deadband {deadband}" if deadband else "", f"after {delay}" if delay else ""]
        return ", ".join(part for part in parts if part)

    def alarm_consequence(self, consequence: str, hazards: Sequence[tuple[str, Noun, str]]) -> str:
        """What follows where nobody answers, and of which hazards at other loops (tag, what, high or low) it tells."""
        if not hazards:
            return consequence
        told = self.listed(f"{self.hazard(name, side)} at {tag}" for tag, name, side in hazards)
        return sentences(consequence, f"the alarm also warns of {told}")

    def alarm_response(self, response: str, time: str) -> str:
        """What the operator does, and within what time."""
        return sentences(response, f"within {time}" if time else "")

    # -- interlocks

    def effects(self, first: str, does: str, others: Sequence[str]) -> str:
        """What an interlock does, and which others do the same."""
        also = f"; so {'does' if len(others) == 1 else 'do'} {self.listed(others)}" if others else ""
        return f"{first} {does}{also}"

    def trips_alone(self, tag: str, conditions: Sequence[str]) -> str:
        """An interlock that one initiator is enough for."""
        return f"{tag} trips when {self.either(conditions)}"

    def counts(self, tag: str, voting: str, conditions: Sequence[str]) -> str:
        """An interlock that votes."""
        return f"{tag} ({voting or 'voting not given'}) counts {self.listed(conditions)} among its conditions"

    def condition(self, tag: str, side: str, limit: str, delay: str, *, counted: bool = False) -> str:
        """When an initiator trips, as a clause; ``counted`` names the condition alone."""
        if not side or not limit:
            return f"{tag} passes its limit, which is on hold"
        lasting = f" for {delay}" if delay else ""
        return f"{tag} {'' if counted else 'stands '}{self.side(side, limit)}{lasting}"

    def acts(
        self, positions: Sequence[tuple[str, Sequence[str]]], forced: Sequence[tuple[str, str, Sequence[str]]]
    ) -> str:
        """What an interlock does: `closes FV-2011, stops PM-2001 and puts FIC-2011 in manual at 0 % output`.

        Positions with their final elements; mode and output, either of which may be empty, with their controllers.
        """
        told = [f"{_DOES.get(position, f'brings to {position}')} {self.listed(tags)}" for position, tags in positions]
        for mode, output, tags in forced:
            at = f" at {output} output" if output else ""
            told.append(f"puts {self.listed(tags)} {f'in {mode}{at}' if mode else f'to {output} output'}")
        return self.listed(told)

    def trips_when_alike(
        self, tags: Sequence[str], needed: int, side: str, limit: str, delay: str
    ) -> str:
        """Initiators with one limit, of which ``needed`` must stand beyond it; 0 where the voting is not given."""
        names = self.listed(tags)
        rest = f"{self.side(side, limit)}{f' for {delay}' if delay else ''}"
        if not needed:
            return f"{names} stand {rest}; the voting is not given"
        if needed == len(tags):
            return f"all of {names} stand {rest}"
        if needed == 1:
            return f"any of {names} stands {rest}"
        return f"{number_word(needed)} of {names} stand {rest}"

    def trips_when(self, conditions: Sequence[str], needed: int, of: int) -> str:
        """Initiators with limits of their own; ``needed`` is 0 where the voting is not given."""
        if len(conditions) == 1 or needed == 1:
            return self.either(conditions)
        if needed and needed == of:
            return self.listed(conditions)
        if needed:
            return f"{number_word(needed)} of these hold: {self.listed(conditions)}"
        return f"{self.either(conditions)}; the voting is not given"

    def interlock_told(self, tag: str, layer: str, when: str, does: str, cause: str, consequence: str) -> str:
        """One interlock in sentences: its layer, what trips it, what it does, and why; each may be empty."""
        who = "it" if layer else tag
        trips = f"{who} trips when {when}" if when else ""
        if trips and does:
            trips = f"{trips}. It then {does}" if ";" in trips or ":" in trips else f"{trips}, and then {does}"
        elif does:
            trips = f"{who} {does}"
        belongs = f"{tag} belongs to the {layer} layer" if layer else ""
        without = f"{'Without it, ' if does else 'Consequence: '}{clause(consequence)}" if consequence else ""
        return sentences(belongs, *trips.split(". "), f"Likely cause: {clause(cause)}" if cause else "", without)

    def reset_is(self, written: str, *, plain: bool) -> str:
        """How an interlock is reset; ``plain`` where the register says no more than manual or automatic, and where."""
        return f"reset is {written}" if plain else f"reset: {written}"

    def proof_tested(self, every: str) -> str:
        """The interval of the proof test."""
        return f"it is proof-tested every {every}"

    def no_bypass(self) -> str:
        """An interlock that may not be bypassed."""
        return "no bypass is permitted"

    def bypass(self, permitted: str, who: str, limit: str) -> str:
        """When an interlock may be bypassed, by whose leave and for how long."""
        told = f"a bypass is permitted {clause(permitted)}"
        told += f", for {limit} at most" if limit else ", without a limit in time"
        return f"{told}; each one is approved by: {who}" if who else told

    def only_limits(self, tag: str) -> str:
        """Interlocks of which the register gives no more than the limits; the tag is empty where there are several."""
        return f"Of {tag or 'each of these'} the register gives no more than what trips it"

    def unused_by_interlocks(self, tags: Sequence[str]) -> str:
        """Instruments that no interlock uses."""
        return f"No interlock uses {self.listed(tags)}"

    def also_enters(self, sensor: str, functions: Sequence[str]) -> str:
        """Functions that an indicator's measurement enters."""
        return f"{sensor} also enters {self.listed(functions)}"

    # -- response of an interlock

    def acts_within(self, tag: str, response: str, share: str, given: str, *, late: bool) -> tuple[str, ...]:
        """Response time against process safety time; ``share`` and ``given`` are empty where one is not known."""
        if not given:
            return (f"{tag} acts within {response}",)
        judged = "Whether that is enough is judged in the lifecycle of the safety function"
        if late:
            return f"{tag} acts within {response}, no sooner than the process safety time of {given}", judged
        return f"{tag} acts within {response}, {share} of the process safety time of {given}", judged

    def safety_time(self, given: str) -> str:
        """The process safety time alone."""
        return f"The process safety time is {given}"

    def not_checked_in_time(self, *, safety_time: bool, response: bool) -> str:
        """Which of the two times of a safety interlock is lacking."""
        names = [*(["process safety time"] if safety_time else []), *(["response time"] if response else [])]
        lacking = f"the {self.listed(names)} {'is' if len(names) == 1 else 'are'} not known"
        return f"Whether the interlock acts in time is not checked: {lacking}"

    # -- time to act

    def times_caution(self, *, measured: bool) -> str:
        """The caution as a narrative carries it, in one sentence; ``measured`` where a function would feed an upset
        forward.
        """
        manual = "in manual, where nothing is fed forward either" if measured else "in manual"
        return (
            f"Calculated from normal operation with the loops {manual}, this does not show that the interlock is enough"
        )

    def the_alarm(self, tag: str, kind: str) -> str:
        """An alarm inside a sentence."""
        return f"the {self.alarm_kind(kind)} alarm of {tag}"

    def not_carried_on(self, alarms: Sequence[tuple[str, str]], trip: str) -> str:
        """Alarms (tag, kind) that no upset carries on to a trip."""
        names = self.either(self.the_alarm(*alarm) for alarm in alarms)
        return f"No upset in the register carries {names} on to the trip of {trip}"

    def time_not_checked(self, alarms: Sequence[tuple[str, str]], trip: str, reason: str) -> str:
        """Alarms whose time to a trip cannot be calculated."""
        names = self.listed(self.the_alarm(*alarm) for alarm in alarms)
        return f"The time from {names} to the trip of {trip} is not checked: {reason}"

    def upset(self, name: str) -> str:
        """An upset as a figure or a line names it: `FV-1002 shuts`, or a name that the register gives."""
        return name

    def upset_if(self, name: str, *, moved: bool) -> str:
        """`If FV-1002 shuts`, or `Under the upset “cooling water lost”` of a name that the register gives."""
        return f"If {name}" if moved else f"Under the upset “{name}”"

    def trips_before(self, when: str, trip: str, late: str, alarm: tuple[str, str]) -> str:
        """A trip that comes before its alarm."""
        named = self.the_alarm(*alarm)
        return f"{when}, {trip} trips {late} before {named}: no response can come in time, and the trip alone acts"

    def operator_has(
        self, when: str, left: str, alarm: tuple[str, str], trip: str, given: str, *, least: bool, short: bool
    ) -> str:
        """Time from an alarm to a trip against what the response is given, which is empty where it is not known."""
        time = f"{'at least ' if least else ''}{left}"
        has = f"{when}, the operator has {time} from {self.the_alarm(*alarm)} to the trip of {trip}"
        if not given:
            return f"{has}; how long the response takes is not known, so that this is not checked"
        if not short:
            return f"{has}; the response is given {given}"
        if least:
            return f"{has}; whether the {given} given to the response are enough is not checked"
        return f"{has}, less than the {given} given to the response"

    # -- on the loop sheet

    def times_line_caution(self) -> str:
        """The caution that the line of a loop sheet has room for."""
        return "calculated with the loops in manual, no proof that an interlock is enough"

    def alarm_to_trip(self, kind: str, trip: str, told: str) -> str:
        """One alarm in the line of a loop sheet."""
        return f"{self.alarm_kind(kind)} alarm to {trip}: {told}"

    def not_reached(self, *, checked: bool) -> str:
        """A trip that no upset reaches, or that could not be checked."""
        return "not reached" if checked else "not checked"

    def before_the_alarm(self, late: str, upset: str) -> str:
        """A trip before its alarm, in short."""
        return f"trips {late} before the alarm ({self.upset(upset)})"

    def time_left(self, left: str, upset: str, given: str, *, least: bool) -> str:
        """Time from an alarm to its trip, in short."""
        told = f"{'at least ' if least else ''}{left} ({self.upset(upset)})"
        return f"{told}, {given} given" if given else told
