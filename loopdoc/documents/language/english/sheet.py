"""English: title block, front matter, open points and the loop sheet."""

from __future__ import annotations

from collections.abc import Sequence

from loopdoc.documents.language.english.grammar import NO_BREAK, EnglishGrammar
from loopdoc.documents.wording import grouped, sentence, sentences, upper_first

_OF_CABLE = {"cable": "number", "at": "box"}
"""What is said of one cable of a wiring, where the key does not say it."""
_HELD = {
    ("measurement", "on_fault"): "fault reading",
    ("measurement",): "measurement",
    ("controller", "on_bad_measurement"): "response to a bad measurement",
    ("controller",): "controller",
    ("process", "gain"): "process gain",
    ("process", "effect"): "process effect",
    ("process", "dead_time"): "dead time",
    ("process", "lag"): "lag",
    ("process", "lags"): "lags",
    ("process",): "process model",
    ("hazard",): "hazard",
    ("fails",): "fail position",
    ("safe",): "safe position",
    ("to",): "destination",
}


class EnglishSheet(EnglishGrammar):
    """Words of the title block, of the front matter and of the loop sheet."""

    # -- title block

    def cautions(self) -> str:
        """What every document says of itself."""
        return (
            "This document supports and does not replace review by licensed or competent persons. Local codes, the "
            "hazard study and the manufacturer's data govern. Safety instrumented functions need their own lifecycle "
            "(IEC 61511). Try tuning changes only under supervision."
        )

    def check_state(
        self, errors: int, warnings: int, notes: int, deviations: int, holds: int, not_made: int
    ) -> str:
        """The state of the register's check in one line."""
        counts = (
            (errors, "error"), (warnings, "warning"), (notes, "note"), (deviations, "deviation"), (holds, "hold"),
        )  # fmt: skip
        told = [f"{number} {one}{'' if number == 1 else 's'}" for number, one in counts]
        return ", ".join((*told, f"{not_made} {'check' if not_made == 1 else 'checks'} not made"))

    def errors_open(self, errors: int) -> str:
        """Why a document with errors is a draft."""
        return f"{errors} {'error' if errors == 1 else 'errors'} open"

    def holds_open(self, status: str) -> str:
        """Why a document with holds is a draft; ``status`` is empty where it is not known."""
        return f"holds open at status {status or 'unknown'}"

    def unit_title(self, number: str, name: str) -> str:
        """A unit with its name, which may be empty."""
        return f"Unit {number} {name}" if name else f"Unit {number}"

    # -- front matter of the narrative

    def extent(self, schemes: int, indicators: int, interlocks: int) -> str:
        """How much a narrative covers."""
        counts = ((schemes, "control scheme"), (indicators, "indicator"), (interlocks, "interlock"))
        return upper_first(self.listed(self.counted(number, noun) for number, noun in counts if number)) or "Overview"

    def reading(self, owner: str, section: str) -> str:
        """How to read it; owner of the register and section of the holds may be empty."""
        keeper = f" (kept by: {owner})" if owner else ""
        held = f"What is not yet known is on hold and listed in section {section}" if section else ""
        changed = f"Every value stands in the register{keeper} or is calculated from it, and is changed only there"
        return sentences(changed, held)

    # -- open points

    def held_name(self, path: Sequence[str | int]) -> str:
        """What is held, in words: `process gain`, `range`, `high alarm limit`."""
        steps = tuple(str(step) for step in path)
        if steps in _HELD:
            return _HELD[steps]
        words = [step.replace("_", " ") for step in steps]
        if "wiring" in steps:
            cable, *what = steps[steps.index("wiring") + 1 :] or ("",)
            name = f"cable {int(cable) + 1}" if cable else "wiring"
            name = f"{_OF_CABLE.get(what[0], what[0])} of {name}" if what else name
            return f"{name} of the trip solenoid" if steps[0] == "trip_solenoid" else name
        if len(steps) > 1 and steps[0] == "alarms":
            return f"{steps[1].replace('_', '-')} alarm {' '.join(words[2:])}".strip()
        if len(steps) > 3 and steps[0] == "disturbances":
            moved = f"{steps[3]} in the disturbance {steps[1]}"
            return f"{words[4]} of {moved}" if len(steps) > 4 else f"move of {moved}"
        if len(steps) > 1 and steps[0] == "disturbances":
            return f"{words[2]} of the disturbance {steps[1]}" if len(steps) > 2 else f"disturbance {steps[1]}"
        if len(steps) > 1 and steps[0] == "process" and steps[1] == "branches":
            return f"process {' of '.join(reversed(words[2:]))}"
        if len(steps) > 1 and steps[0] in ("setpoint", "output", "operating"):
            return " ".join(words)
        return " ".join(words[1:]) if len(words) > 1 and steps[0] in ("measurement", "controller") else " ".join(words)

    def still_on_hold(self, held: Sequence[tuple[str, str]]) -> str:
        """`Still on hold: the hazard of A, B and C; the process gain of A`; of pairs of a name and a tag."""
        tags_of = grouped(held)
        names_of = grouped((self.listed(tags), name) for name, tags in tags_of.items())
        parts = [f"the {self.listed(names)} of {tags}" for tags, names in names_of.items()]
        return sentence(f"Still on hold: {'; '.join(parts)}") if parts else ""

    def deviations_stand(self, found: Sequence[str], count: int) -> str:
        """Where how many deviations stand."""
        return sentence(f"{'a deviation stands' if count == 1 else 'deviations stand'} at {self.listed(found)}")

    def finding_text(self, text: str) -> str:
        """What a rule says of a finding, as a sentence."""
        return sentence(text)

    def finding_clause(self, text: str) -> str:
        """What a rule says of a finding, behind the tag."""
        return f"{text}."

    # -- the loop sheet

    def the_operator(self) -> str:
        """Who commands a loop that nothing else commands."""
        return "the operator"

    def through(self, tags: str, functions: str) -> str:
        """Loops, and the functions that stand between."""
        return f"{tags} through {functions}"

    def more_findings(self, number: int) -> str:
        """How many findings a sheet has no room for."""
        stand = "1 more finding about this loop stands" if number == 1 else (
            f"{number} more findings about this loop stand"
        )
        return f"{stand} in the check report"

    def accepted(self, reason: str, approved_by: str, until: str) -> str:
        """An accepted finding on a sheet."""
        return f"{reason} Approved by {approved_by}, until {until}."

    def percent_is(self, span: str) -> str:
        """What the output asks for."""
        return f"0 to 100{NO_BREAK}% = {span}"

    def output_to(self, tag: str) -> str:
        """Where the output goes."""
        return f"to {tag}"

    def permitted(self, modes: Sequence[str]) -> str:
        """The modes that may be selected."""
        return f"permitted: {', '.join(modes)}"

    def hold_output(self) -> str:
        """A controller that holds its output."""
        return "hold output"

    def sign_undecided(self, reason: str) -> str:
        """A sign path that does not follow."""
        return f"not decided: {reason}"

    def sign_step(self, what: str) -> str:
        """A step of a sign path, as the calculation says it."""
        return what

    def sign_path(self, steps: str, sign: str, action: str) -> str:
        """A sign path with its steps and the action that it needs."""
        return f"{steps}: {sign} in all, needs {action} action"

    def margins_not_calculated(self, reason: str) -> str:
        """A loop without margins."""
        return f"not calculated: {reason}"

    def unstable(self) -> str:
        """A loop that is unstable."""
        return "the loop is unstable as written"

    def as_sampled(self) -> str:
        """Margins of the sampled loop."""
        return "of the loop as it is sampled"

    def times_as_fast(self, inner: str, ratio: str) -> str:
        """The speed ratio."""
        return f"{inner} is {ratio} times as fast"

    def model_gain(self, gain: str) -> str:
        """The gain of a process model."""
        return f"gain {gain}"

    def model_lags(self, lags: Sequence[str]) -> str:
        """The lags of a process model."""
        return f"{'lag' if len(lags) == 1 else 'lags'} {' and '.join(lags)}"

    def model_lead(self, lead: str) -> str:
        """The lead of a process model."""
        return f"lead {lead}"

    def model_dead_time(self, time: str) -> str:
        """The dead time of a process model."""
        return f"dead time {time}"

    def integrating(self) -> str:
        """A process that integrates."""
        return "integrating"

    def moved_by(self, loops: str) -> str:
        """Who moves a final element that is drawn on another loop's sheet."""
        return f"moved by {loops}"

    def alarm_name(self, kind: str) -> str:
        """An alarm at the head of its row on a sheet."""
        return kind.replace("_", " ").capitalize()

    def trip_name(self, interlock: str) -> str:
        """A trip at the head of its row on a sheet."""
        return f"Trip {interlock}"

    def by_itself(self, actions: str) -> str:
        """What a trip does without the operator."""
        return f"By itself: {actions}"

    def initiated_here(self) -> str:
        """An interlock that acts elsewhere."""
        return "initiated by this loop"

    # -- expected signals

    def shows(self, tag: str) -> str:
        """The reading at the display."""
        return f"{tag} shows"

    def setpoint_of(self, tag: str) -> str:
        """A secondary's setpoint."""
        return f"{tag} setpoint"

    def signal_of(self, tag: str) -> str:
        """A transmitter's signal."""
        return f"Signal of {tag}"

    def signal_to(self, tag: str) -> str:
        """The signal to a final element."""
        return f"Signal to {tag}"

    def pt100(self) -> str:
        """The resistance of a thermometer."""
        return "Pt100 resistance"

    def thermocouple(self, letter: str) -> str:
        """The voltage of a thermocouple."""
        return f"Type {letter} at 0{NO_BREAK}°C reference"

    def position_of(self, tag: str, kind: str) -> str:
        """What a final element does: its opening, speed or power."""
        what = "speed" if kind in ("variable-speed drive", "motor") else "power" if kind == "heater bank" else "opening"
        return f"{tag} {what}"

    # -- the drawing

    def drawing_title(self, tag: str, way: str) -> str:
        """What a drawing shows, for those who cannot see it."""
        return f"Drawn loop {tag}, from top to bottom: {way}"

    def fail_letters(self, fails: str) -> str:
        """A fail position on a drawing."""
        return {"closed": "FC", "open": "FO", "last": "FL", "stopped": "stops"}.get(fails, fails)

    def signal_ends(self, first: str, last: str, kind: str) -> str:
        """At which ends of the signal a final element is shut and open."""
        speeds = (f"0{NO_BREAK}% speed", f"100{NO_BREAK}%")
        ends = {"variable-speed drive": speeds, "heater bank": ("off", "full power")}
        shut, opened = ends.get(kind, ("shut", "open"))
        return f"{first} {shut}, {last} {opened}"

    def more(self, number: int) -> str:
        """What a drawing counts in the place of drawing it."""
        return f"{number} more"

    def pair(self, mark: str) -> str:
        """A pair of a cable by its number, or as the register marks it in words."""
        return f"pair {mark}" if mark.isdigit() else mark

    def supplied_by(self, supply: str) -> str:
        """The energy source of a device."""
        return f"supply: {supply}"

    def and_more(self, number: int) -> str:
        """Entries that a drawing has no room for."""
        return f"and {number} more"
