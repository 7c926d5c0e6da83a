"""English: what a scheme does when something fails."""

from __future__ import annotations

from collections.abc import Sequence

from loopdoc.documents.language.english.naming import EnglishNaming
from loopdoc.documents.language.facts import Moves, Way
from loopdoc.documents.language.noun import Noun
from loopdoc.documents.wording import NO_BREAK, sentence
from loopdoc.register.model import FinalElement


class EnglishFailure(EnglishNaming):
    """Sentences of the table of failures."""

    def failure_assumptions(self) -> str:
        """What every table of failures rests on, told once in a document."""
        return (
            "Each is judged by itself, from the signs and modes in the register. A transmitter signals its own "
            "fault by a current of at most 3.6 mA or at least 21 mA (NAMUR NE 43); its controller then does what is "
            "set for a bad measurement. A reading that is merely wrong is taken as good, at the worst at the end of "
            "its range. One that stands still is taken as good too, and only another measurement can tell. With the "
            "power of the control system go its alarms and its process interlocks; the safety layer stands. Only "
            "what another sensor drives counts as standing against a failure."
        )

    def nothing_against(self) -> str:
        """Where no alarm and no trip stands against a hazard."""
        return "Nothing independent in the register"

    def no_hazard(self) -> str:
        """Where the process goes towards none of the hazards that the register declares."""
        return "No declared hazard"

    def not_told(self) -> str:
        """What does not follow from the register."""
        return "Cannot be told"

    def without_control_power(self, left: str) -> str:
        """What still stands against a failure once the control system has lost its power; may be empty."""
        return f"Without the control system's power: {left or 'nothing'}"

    def hazards(self, found: Sequence[tuple[Noun, str]]) -> str:
        """Which directions are hazards: names with high, low or both."""
        told = [self.hazard(name, which) for name, which in found]
        return sentence(f"The {'hazard is' if len(told) == 1 else 'hazards are'} {self.listed(told)}")

    def hazard(self, name: Noun, which: str) -> str:
        """One hazard with its article: high, low or both."""
        return f"a {name} too high or too low" if which == "both" else f"a {which} {name}"

    # -- the failure

    def transmitter_fails(self, sensor: str, how: str, *, as_when_it_fails: bool = False) -> str:
        """A failure of a transmitter: high, low, fault, or holds (its last value)."""
        told = {
            "high": "reads too high",
            "low": "reads too low",
            "fault": "signals a fault",
            "holds": "fails and holds its last value",
        }[how]
        return f"{sensor} {told}{', as when it fails' if as_when_it_fails else ''}"

    def losses(self, lost: Sequence[tuple[tuple[str, ...], Sequence[FinalElement | None]]], power: bool) -> str:
        """`FV-2011 loses its signal or its air, or the control system its power`.

        Each entry has the tags that lose something, and what: the signal (None), or the power of an element.
        """
        told = []
        for at, what in lost:
            own = "its" if len(at) == 1 else "their"
            names = [f"{own} {'signal' if element is None else self.power_of(element)}" for element in what]
            told.append(f"{self.listed(at)} lose{'s' if len(at) == 1 else ''} {self.either(names)}")
        if power:
            same = len(lost) == 1 and len(lost[0][0]) == 1
            told.append("the control system its power" if same else "the control system loses its power")
        return ", or ".join(told) if any(" or " in part for part in told) else self.either(told)

    # -- what the control does

    def bad_undefined(self, tag: str) -> str:
        """A controller of which the register does not say what it does with a bad measurement."""
        return f"What {tag} does is not in the register"

    def function_undefined(self, tag: str) -> str:
        """A function of which the register does not say what it does with a bad input."""
        return f"What {tag} then does is not in the register"

    def goes(self, tag: str, mode: str, output: str, moved: Moves) -> str:
        """What a controller does with a bad measurement; ``output`` is empty where it is held."""
        to = f"{tag} goes to {mode}" if mode else f"{tag} stays in its mode"
        if not output:
            return f"{to} and holds its output"
        ends = self.moves_by_itself(moved)
        return f"{to} with its output at {output}{f', and {ends}' if ends else ''}"

    def track_too(self, tags: Sequence[str]) -> str:
        """Loops above that track."""
        return f"{self.listed(tags)} {'tracks' if len(tags) == 1 else 'track'}"

    def does_nothing(self, tag: str, mode: str) -> str:
        """A passive controller."""
        return f"{tag} is {'kept in manual' if mode == 'manual' else mode} and does nothing"

    def goes_on(self, tag: str) -> str:
        """A controller that sees a frozen value."""
        return f"{tag} goes on by the old value"

    def cannot_be_told(self, tag: str, reason: str) -> str:
        """A controller whose movement does not follow."""
        return f"What {tag} does cannot be told: {reason}"

    def trips_on_it(self, tags: Sequence[str]) -> str:
        """Interlocks that the failed reading trips."""
        return f"{self.listed(tags)} {'trips' if len(tags) == 1 else 'trip'} on it"

    def demands(self, asked: Sequence[tuple[str, str, Noun, bool]], reach: str, mover: str, moved: Moves) -> str:
        """`TIC-2014 asks for a lower flow (down to 1.0 t/h) and FIC-2011 closes FV-2011`.

        Who asks of whom for what, up or down; ``reach`` is how far the first demand goes.
        """
        told: list[str] = []
        for by, _, name, up in asked:
            wanted = f"for a {'higher' if up else 'lower'} {name}"
            told.append(f"{by} {wanted}" if told else f"{by} asks {wanted}{reach}")
        if moved:
            told.append(f"{mover} {self.moves(moved)}")
        return self.listed(told)

    def reach_by(self, limit: str) -> str:
        """How far a term of a sum may go."""
        return f" (by up to {limit})"

    def reach_to(self, limit: str, *, up: bool) -> str:
        """How far a demand may go."""
        return f" ({'up' if up else 'down'} to {limit})"

    def goes_on_passing(self, tag: str, up: bool | None, selector: str, instead: Sequence[str]) -> str:
        """A selector that passes another demand; ``up`` is the demand of the loop, None where that is told already."""
        asks = "" if up is None else f"{tag} asks for {'more' if up else 'less'}. "
        return f"{asks}{selector} goes on passing the demand of {self.either(instead)}"

    def asks_of(self, by: str, loop: str, name: Noun, *, up: bool) -> str:
        """A function that moves the setpoint of a loop of another scheme."""
        return f"{by} asks {loop} for a {'higher' if up else 'lower'} {name}"

    def asks_and_moves(self, by: str, loop: str, name: Noun, up: bool, moved: Moves) -> str:
        """A function that moves the setpoint of a loop, which follows."""
        told = f"{by} asks for a {'higher' if up else 'lower'} {name}"
        return f"{told} and {loop} {self.moves(moved)}" if moved else told

    def settles(self, moved: Sequence[tuple[FinalElement, int, str]]) -> str:
        """Where final elements come to rest: with direction, and position (empty where it is set in the drive)."""
        return self.listed(self._settles(element, way, position) for element, way, position in moved)

    def _settles(self, element: FinalElement, way: int, position: str) -> str:
        if way == 0:
            return f"{element.tag} stays where it is"
        if position == "stopped":
            return f"{element.tag} stops"
        if not position:
            return f"{element.tag} stops or falls to its lowest speed, as it is set"
        return self.moves_by_itself(((element, way),))

    # -- what the process does

    def process_ways(self, ways: Sequence[Way]) -> str:
        """`the level and the flow fall`, `the temperature falls and the methanol content rises`."""
        by_way: dict[bool, list[str]] = {}
        for way in ways:
            by_way.setdefault(way.rises, []).append(self.the(way.name))
        return self.listed(
            f"{self.listed(names)} {'rise' if rises else 'fall'}{'s' if len(names) == 1 else ''}"
            for rises, names in by_way.items()
        )

    def towards_the_hazard(self, ways: Sequence[Way]) -> str:
        """Movements that hurt."""
        each = {1: "", 2: "both "}.get(len(ways), "all ")
        return f"{self.process_ways(ways)}, {each}towards the hazard"

    def unlimited(self, names: Sequence[Noun]) -> str:
        """Measurements that a failed limiter no longer limits."""
        verb = "is" if len(names) == 1 else "are"
        return f"nothing moves, but {self.listed(map(self.the, names))} {verb} no longer limited"

    def left(self, names: Sequence[Noun]) -> str:
        """Measurements that nobody controls any more."""
        verb = "is left to itself" if len(names) == 1 else "are left to themselves"
        return f"{self.listed(map(self.the, names))} {verb}"

    def way_unknown(self, names: Sequence[Noun], *, by_load: bool) -> str:
        """Measurements whose direction does not follow."""
        goes = f"{self.listed(map(self.the, names))} {'goes' if len(names) == 1 else 'go'}"
        return f"which way {goes} depends on the load" if by_load else f"which way {goes} cannot be told"

    def takes_over(self, tags: Sequence[str]) -> str:
        """Loops beside a selector that act against a failure."""
        return f"{self.either(tags)} takes over at its own setpoint"

    def makes_up(self, tag: str) -> str:
        """A loop that acts against a failure below it."""
        return f"{tag} makes up for it as far as its output limits allow"

    # -- what stands against it

    def alarms_against(self, tag: str, alarms: Sequence[tuple[str, str]]) -> str:
        """Alarms of one loop, each with its kind and its limit, which may be empty."""
        told = [f"{self.alarm_kind(kind)}{NO_BREAK}{limit}" if limit else self.alarm_kind(kind)
                for kind, limit in alarms]  # fmt: skip
        return f"{tag} alarm{'' if len(told) == 1 else 's'} ({', '.join(told)})"

    def alarm_kind(self, kind: str) -> str:
        """`high-high` of `high_high`."""
        return kind.replace("_", "-")

    def trip_against(self, tag: str, side: str, limit: str) -> str:
        """An interlock with the limit at which it trips, where that is known."""
        return f"{tag} ({self.side(side, limit)})" if side and limit else tag

    def side(self, side: str, limit: str) -> str:
        """`above 98 °C`."""
        return f"{side} {limit}"

    def moved_back(self, interlock: str, moved: Moves) -> str:
        """An interlock on something else that can still move final elements back."""
        return f"{interlock} {self.moves(moved)} at its own limit"
