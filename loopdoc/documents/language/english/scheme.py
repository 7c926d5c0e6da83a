"""English: how a scheme works, who commands whom, which way and why; modes, limits and tracking."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from loopdoc.documents.language.english.naming import DRIVES, EnglishNaming
from loopdoc.documents.language.facts import Action, Asked, Moved, Reason, Rise, Share
from loopdoc.documents.language.noun import Noun
from loopdoc.documents.wording import number_word, sentences, told_of
from loopdoc.register.model import FinalElement, Measurement, known


class EnglishScheme(EnglishNaming):
    """Sentences of the section of a scheme."""

    def purpose(self, subject: str, purpose: str) -> str:
        """A purpose that the register gives, told of its subject."""
        return told_of(subject, purpose)

    def unit_subject(self, number: str) -> str:
        """A unit as the subject of its purpose."""
        return f"Unit {number}"

    def drawings(self, numbers: Sequence[str]) -> str:
        """The drawings on which a scheme stands."""
        return f"drawing{'' if len(numbers) == 1 else 's'} {self.listed(numbers)}"

    def led_elsewhere(self, count: int, lead: str, document: str, unit: str) -> str:
        """Where the whole scheme is told, when only a part of it stands in this unit."""
        those, belongs = ("It", "belongs") if count == 1 else ("They", "belong")
        return f"{those} {belongs} to the scheme led by {lead}, which {document} tells as a whole (unit {unit})."

    # -- who measures, who commands

    def by_nothing_defined(self, to: str) -> str:
        """How a loop acts whose output leads to what the register lacks."""
        return f"with its output to {to}, which the register does not define"

    def by_selector(self, end: str, function: str) -> str:
        """How a loop acts that is a candidate of a selector."""
        return f"by what it asks of {end} through {function}"

    def by_sum(self, end: str, function: str) -> str:
        """How a loop acts whose output is a term of a sum."""
        return f"by correcting the setpoint of {end} at {function}"

    def by_ratio(self, function: str) -> str:
        """How a loop acts that sets a ratio."""
        return f"by setting the ratio at {function}"

    def by_split(self, function: str) -> str:
        """How a loop acts through a split range."""
        return f"through {function}"

    def by_element(self, element: FinalElement, through: Sequence[str], told: Noun) -> str:
        """How a loop acts that moves a final element."""
        via = f" through {self.listed(through)}" if through else ""
        if known(element.kind) in DRIVES:
            return f"by the speed of {self.element_phrase(element)}{via}"
        return f"by moving {self.element_phrase(element, told)}{via}"

    def by_commanding(self, end: str, through: Sequence[str]) -> str:
        """How a primary acts."""
        return f"by commanding {end}{f' through {self.listed(through)}' if through else ''}"

    def in_the_same_way(self) -> str:
        """How a loop acts that acts as the one before."""
        return "in the same way"

    def idle_loop(self, tag: str, what: Noun, measured: Measurement | None, ends: Sequence[str], mode: str) -> str:
        """A loop that does nothing at present."""
        would = f" by moving {self.listed(ends)}" if ends else ""
        beside = self.in_brackets(measured) if measured else ""
        return f"{tag}, which would hold the {what}{beside}{would}, is {self.kept(mode)}"

    def kept(self, mode: str) -> str:
        """In which mode a passive controller is."""
        return "kept in manual" if mode == "manual" else "out of service"

    def holds(self, tag: str, what: Noun, how: str, measured: Measurement | None = None) -> str:
        """What a loop holds, and how."""
        return f"{tag} holds the {what}{self.in_brackets(measured) if measured else ''} {how}"

    def measured_and_held(self, tag: str, what: Noun, how: str, measured: Measurement, *, limits: bool) -> str:
        """What a transmitter measures and a loop holds, or keeps from passing its setpoint (``limits``)."""
        by, written = self.with_sensor(measured), self.range_of(measured)
        over = f" over {written}" if written else ""
        goal = "keeps it from passing its setpoint" if limits else "holds it at its setpoint"
        return f"{by} measures the {what}{over}, and {tag} {goal} {how}"

    # -- functions

    def term_of_function(self, weight: float, tag: str, *, is_function: bool) -> str:
        """A tag that enters a function, or the output of another function."""
        return f"{self._times(weight)}{'the output of ' if is_function else ''}{tag}"

    def term_of_measurement(self, weight: float, what: Noun, measured: Measurement) -> str:
        """A measurement that enters a function."""
        return f"{self._times(weight)}the {what}{self.in_brackets(measured)}"

    def _times(self, weight: float) -> str:
        return "" if weight == 1.0 else f"{self.number(weight)} times "

    def adds(self, function: str, terms: Sequence[str], loop: str, to: str) -> str:
        """A sum; ``loop`` is the controller whose output it corrects, empty where there is none."""
        own = f"the output of {loop}" if loop else "its other inputs"
        return f"{function} adds {self.listed(terms)} to {own}, and the sum is the setpoint of {to}"

    def multiplies(self, function: str, terms: Sequence[str], loop: str, limits: str, usual: str, to: str) -> str:
        """A ratio; ``loop`` is the controller that asks for it, empty where the operator sets it."""
        by = f"the ratio that {loop} asks for" if loop else "a ratio that the operator sets"
        between = [f"from {limits}" if limits else "", f"normally {usual}" if usual else ""]
        told = self.listed(part for part in between if part)
        return (
            f"{function} multiplies {self.listed(terms)} by {by}{f', {told}' if told else ''}; "
            f"the product is the setpoint of {to}"
        )

    def feeds_forward(self, function: str, terms: Sequence[str], to: str, times: tuple[str, str] | None) -> str:
        """Feedforward through a characteriser, or through a lead-lag with its two times."""
        by = "through its curve"
        if times is not None:
            by = self.listed(f"{how} {time}" for how, time in zip(("led by", "lagged by"), times, strict=True) if time)
        return f"{function} feeds {self.listed(terms)} forward to {to}{f', {by}' if by else ''}"

    def function_between(self, function: str, kind: str) -> str:
        """A function of which no more is told."""
        return f"{function} is a {kind} between the two"

    def selects(
        self, function: str, lower: bool, candidates: Sequence[str], to: str, busy: Sequence[str], idle: Sequence[str]
    ) -> str:
        """A selector, and who commands in normal running; nobody is named where that does not follow."""
        demands = self.listed(candidates)
        passed = f"{function} passes the {'lower' if lower else 'higher'} of the demands of {demands} on to {to}"
        if not busy or not idle:
            return passed
        return (
            f"{passed}. In normal running {self.listed(busy)} {'commands' if len(busy) == 1 else 'command'} "
            f"and {self.listed(idle)} {'stands' if len(idle) == 1 else 'stand'} by"
        )

    def splits(self, function: str, shares: Sequence[Share], gap: tuple[float, float, bool] | None) -> str:
        """A split range; ``gap`` is where two branches meet: from, to, and whether both are shut there."""
        parts: list[str] = []
        for share in shares:
            phrase = self.element_phrase(share.element) if share.element else share.tag
            way = "rises" if share.high > share.low else "falls"
            ends = f"from {self.number(share.low)} to {self.percent(share.high)}"
            start = f"{phrase}{',' if ',' in phrase else ''}"
            parts.append(f"{start} opens as the output {way} {ends}" if not parts else f"{start} as it {way} {ends}")
        told = f"{function} splits the output: {'; '.join(parts)}"
        if gap is None:
            return told
        low, high, shut = gap
        both = "shut" if shut else "partly open"
        return f"{told}. Between {self.number(low)} and {self.percent(high)} both are {both}"

    # -- reversals

    def reversed_twice(self, element: FinalElement, function: str) -> str:
        """A falling signal and a reversed output block; ``function`` stands between, or nothing does."""
        source = f"from {function}" if function else "of output"
        return (
            f"{element.tag} opens on a falling signal, and its output block is reversed, "
            f"so that {self.percent(0)} {source} still means {_shut(element)}"
        )

    def opens_on_falling(self, tag: str) -> str:
        """A falling signal alone."""
        return f"{tag} opens on a falling signal, so that a rising output closes it"

    def block_reversed(self, tag: str) -> str:
        """A reversed output block alone."""
        return f"The output block of {tag} is reversed, so that a rising output closes it"

    # -- which way, and why

    def rising(self, rises: Sequence[Rise], actions: Sequence[Action], told: Sequence[str]) -> str:
        """What happens on a rising measurement, why each controller acts as it does, and what else is told."""
        acting = "; ".join(self._action(action) for action in actions)
        return sentences(*(self._rise(rise) for rise in rises if rise.steps), acting, *told)

    def _rise(self, rise: Rise) -> str:
        if rise.same:
            return f"{rise.tag} does the same when the {rise.what} rises"
        return f"When the {rise.what} rises, {self._chained(rise.steps)}"

    def _chained(self, steps: Sequence[Asked | Moved]) -> str:
        """`AIC-2015 asks for a higher temperature, TIC-2014 for a higher flow, and FIC-2011 opens FV-2011`."""
        told: list[str] = []
        for index, step in enumerate(steps):
            if isinstance(step, Asked):
                asked = f"for a {'higher' if step.up else 'lower'} {step.name}"
                told.append(f"{step.by} {asked}" if index else f"{step.by} asks {asked}")
            else:
                told.append(f"{step.by} {self.moves(step.moves)}")
        return self.listed(told) if len(told) < 3 else f"{', '.join(told[:-1])}, and {told[-1]}"

    def _action(self, action: Action) -> str:
        who = self.listed(action.tags)
        if action.every:
            who = "Both" if len(action.tags) == 2 else f"All {number_word(len(action.tags))}"
        verb = "is" if len(action.tags) == 1 else "are"
        return f"{who} {verb} {action.action} acting, because {self._because(action.reasons)}"

    def action_not_explained(self, tag: str, action: str, what: Noun, moved: Noun | None) -> str:
        """An action of which the register does not give the reason."""
        other = f"the {moved}" if moved else "its output"
        return (
            f"{tag} is {action} acting, but the register does not say what the {what} does when {other} rises"
        )

    def action_wrong(self, tag: str, action: str, reasons: Sequence[Reason]) -> str:
        """An action that contradicts the reasons."""
        return (
            f"{tag} is written as {action} acting although {self._because(reasons)}, so that it drives an "
            "error on instead of back"
        )

    def _how(self, reason: Reason) -> str:
        if reason.beside is not None:
            return f"with the {reason.beside}" if reason.same_way else f"as the {reason.beside} rises"
        assert reason.element is not None
        if reason.opened:
            return f"as {self.moves_by_itself(((reason.element, 1),))}"
        return f"as a rising output {self.moves(((reason.element, -1),))}"

    def _because(self, reasons: Sequence[Reason]) -> str:
        """Reasons in one clause, nothing said twice."""
        by_what: dict[tuple[str, bool], list[str]] = {}
        for reason in reasons:
            by_what.setdefault((f"the {reason.what}", reason.rises), []).append(self._how(reason))
        by_how: dict[tuple[bool, str], list[str]] = {}
        for (what, rises), hows in by_what.items():
            by_how.setdefault((rises, self.listed(hows)), []).append(what)
        parts: list[str] = []
        last: tuple[bool, int] | None = None
        for (rises, how), subjects in by_how.items():
            verb = ("rise" if rises else "fall") + ("s" if len(subjects) == 1 else "")
            # `the level rises with the flow and the flow as FV-1002 opens`
            said = last == (rises, 1) and len(subjects) == 1 and len(by_how) == 2
            parts.append(f"{self.listed(subjects)} {how}" if said else f"{self.listed(subjects)} {verb} {how}")
            last = (rises, len(subjects))
        several = len(parts) > 1 and any(len(subjects) > 1 for subjects in by_how.values())
        return f"{', '.join(parts[:-1])}, and {parts[-1]}" if several else self.listed(parts)

    # -- modes and limits

    def runs_in(self, tag: str, mode: str, others: Sequence[str]) -> str:
        """The normal mode, and the others that the operator may select; either may be missing."""
        may = f"the operator may put it in {self.either(others)}" if others else ""
        return "; ".join(part for part in (f"{tag} runs in {mode}" if mode else "", may) if part)

    def setpoint_and_output(self, usual: str, limits: str, output: str, *, in_automatic: bool) -> str:
        """Normal setpoint, its limits and what the output may do; each empty where it is not known."""
        if usual and limits:
            told = f"its setpoint, normally {usual}, may be set {self._from(limits)}"
        elif usual or limits:
            told = f"its setpoint is normally {usual}" if usual else f"its setpoint may be set {self._from(limits)}"
        else:
            return output
        if in_automatic and limits:
            told = f"in automatic {told}"
        return f"{told}; {output}" if output else told

    def output_within(self, limits: str) -> str:
        """An output that does not use the whole of its range."""
        return f"its output stays {limits if limits.startswith(('up to', 'from')) else f'within {limits}'}"

    def output_whole(self, element: FinalElement) -> str:
        """An output that may move a final element all the way."""
        kind = known(element.kind)
        travel = "speed range" if kind in DRIVES else "power" if kind == "heater bank" else "travel"
        return f"its output may use the whole {travel} of {element.tag}"

    def output_all(self, limits: str) -> str:
        """An output from end to end, where it moves no single final element."""
        return f"its output runs {self._from(limits)}"

    def _from(self, limits: str) -> str:
        return limits if limits.startswith(("up to", "from")) else f"from {limits}"

    def setpoint_from(self, commanders: Sequence[str]) -> str:
        """Where a setpoint comes from in cascade, behind the normal value."""
        return f"from {self.listed(commanders)}"

    # -- when the output is not followed

    def tracks_selected(self, uppers: Sequence[str], selector: str, lower: str) -> str:
        """Candidates of a selector that track."""
        everyone = "both" if len(uppers) == 2 else "all"
        return (
            f"Whichever of {self.listed(uppers)} does not command tracks the demand that {selector} passes, and "
            f"{everyone} track {lower} while it is out of cascade, so that the change of command is bumpless"
        )

    def track(self, pairs: Sequence[tuple[str, str]]) -> str:
        """Several loops that track those below them."""
        each = self.listed(f"{upper} tracks {lower}" for upper, lower in pairs)
        return f"{each} whenever the loop below is out of cascade or at a limit, so that the return is bumpless"

    def tracks(self, upper: str, lower: str) -> str:
        """One loop that tracks the one below."""
        return f"While {lower} is out of cascade or at a limit, {upper} tracks it, so that the return is bumpless"

    def does_not_track(self, uppers: Iterable[str], lower: str, policy: str) -> str:
        """Loops that hold their output, or do nothing; ``lower`` is empty where there are several below."""
        who = list(uppers)
        below = lower or "the loop below"
        one = len(who) == 1
        if policy == "hold":
            does = "holds its output" if one else "hold their outputs"
        else:
            does = "goes on calculating and may wind up" if one else "go on calculating and may wind up"
        return f"While {below} is out of cascade or at a limit, {self.listed(who)} {does}"


def _shut(element: FinalElement) -> str:
    kind = known(element.kind)
    if kind in DRIVES:
        return "the lowest speed"
    return "no power" if kind == "heater bank" else f"a shut {'damper' if kind == 'damper' else 'valve'}"


