"""The control narrative of a process unit: what its control does, told so that it can be read aloud."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import TypeVar
from urllib.parse import quote

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.language import LANGUAGES, Language
from loopdoc.documents.language.tracing import tracing
from loopdoc.documents.narrative import (
    failure_story,
    open_points,
    protection_story,
    settings_story,
    time_to_act_story,
    tuning_story,
)
from loopdoc.documents.narrative.scheme_story import SchemeStory, headline
from loopdoc.documents.page_fit import foot
from loopdoc.documents.tracing import Ledger, Source
from loopdoc.documents.values import HOLD
from loopdoc.documents.view import Block, Figure, Paragraph, Section, Steps, Table, sources_in, table
from loopdoc.documents.whereabouts import (
    REGISTER_TEXT,
    file_name,
    line_anchor,
    mover,
    natural,
    register_pages,
    unit_numbers,
    unit_of,
)
from loopdoc.documents.wording import (
    NO_BREAK,
    Prose,
    Run,
    Setter,
    Target,
    sentence,
    sentences,
    upper_first,
)
from loopdoc.engineering.failure import FailureAnalysis
from loopdoc.engineering.pairing import Scheme
from loopdoc.engineering.spreading import transmitter_of
from loopdoc.register.model import FinalElement, Function, HeldValue, Instrument, Interlock, Loop, UnitText, known
from loopdoc.rules.finding import Finding
from loopdoc.rules.references import defined_tags

_P = TypeVar("_P", Loop, FinalElement, Instrument, Function, Interlock)

FOLDER = "narratives"
_LONGEST_NAME = 60
"""Characters; what stands before a colon is the name of an upset up to this length."""

INDICATOR_HEAD = ("Tag", "Measures", "Transmitter", "Range", "Normal band", "What it is for")
SOURCE_HEAD = ("Tag", "What it is", "Value", "Register line or calculation")
INSTRUMENT_HEAD = ("Tag", "Measures", "Range", "On fault")


@dataclass(frozen=True, slots=True)
class Supplement:
    """What is calculated elsewhere and belongs to a scheme's tuning basis."""

    benefit: Callable[[Language], str] = lambda language: ""
    """What its cascade gains against a single loop, in sentences; empty where nothing is said."""
    figures: tuple[Figure, ...] = ()


def narratives(basis: Basis, supplements: Mapping[str, Supplement] | None = None) -> Iterator[Page]:
    """The control narrative of each unit; supplements by the tag of the scheme's lead."""
    register, result = basis.plant.register, basis.result
    shared = _Shared(
        FailureAnalysis(basis.plant),
        open_points.OpenPoints(register.holds, result.findings, result.accepted),
        frozenset(defined.tag for defined in defined_tags(register)),
        supplements or {},
    )
    for number in unit_numbers(basis.plant):
        unit = register.units.get(number)
        name = known(unit.name) if unit else None
        language = basis.language
        builder = _Narrative(basis, shared, number)
        sections = builder.sections()
        document = basis.document(
            kind="Control narrative",
            code="CN",
            title=language.unit_title(number, name or ""),
            supplementary_title=builder.extent(),
            unit=number,
            serial="001",
            language=language,
        )
        view = {
            "reading": builder.reading(sections),
            "sections": sections,
            "appendix": builder.appendix(sections) if basis.with_sources else None,
            "foot": foot(document),
        }
        yield Page(FOLDER, file_name(number), document, "narrative.html", view)


@dataclass(frozen=True, slots=True)
class _Shared:
    """What the narratives of all units look things up in."""

    analysis: FailureAnalysis
    points: open_points.OpenPoints
    tags: frozenset[str]
    supplements: Mapping[str, Supplement]


class _Narrative:
    """The narrative of one unit while it is put together."""

    def __init__(self, basis: Basis, shared: _Shared, number: str) -> None:
        self._basis = basis
        self._plant = basis.plant
        self._register = basis.plant.register
        self._ledger = Ledger(basis.sources)
        self._language = tracing(basis.language, self._ledger)
        self._analysis = shared.analysis
        self._points = shared.points
        self._supplements = shared.supplements
        self._number = number
        register = self._register
        self._loops = self._own(register.loops)
        self._elements = self._own(register.final_elements)
        self._interlocks = self._own(register.interlocks)
        self._instruments = self._own(register.instruments)
        self._functions = self._own(register.functions)
        self._schemes = self._own_schemes()
        self._indicators = [loop for loop in self._loops if loop.tag not in self._plant.controlled]
        self._told_findings: set[int] = set()
        site = register.site
        written = LANGUAGES.get((site.language if site else None) or "en", self._language).as_written
        self._pages = register_pages(basis.sources)
        self._setter = Setter(
            register, shared.tags, self._target, written, ledger=self._ledger, sourced=self._sourced
        )

    def _own(self, parts: Mapping[str, _P]) -> list[_P]:
        return [part for part in parts.values() if unit_of(part) == self._number]

    def _own_schemes(self) -> list[tuple[Scheme, tuple[Loop, ...]]]:
        """Schemes with a controller in this unit, each with the loops that are told here."""
        found: list[tuple[Scheme, tuple[Loop, ...]]] = []
        own = {loop.tag for loop in self._loops}
        for scheme in self._plant.schemes:
            controlled = [loop for loop in scheme.loops if loop.tag in self._plant.controlled]
            here = tuple(loop for loop in controlled if loop.tag in own)
            if here:
                found.append((scheme, tuple(controlled) if controlled[0].tag in own else here))
        return found

    # -- front matter

    def extent(self) -> str:
        """How much the narrative covers, for the title block."""
        return self._language.extent(len(self._schemes), len(self._indicators), len(self._interlocks))

    def reading(self, sections: Sequence[Section]) -> Prose:
        """How to read it, in two lines."""
        site = self._register.site
        owner = known(site.owner) if site else None
        open_ = next((section.number for section in sections if section.anchor == "open-points"), "")
        held = open_ if open_ and self._holds() else ""
        return self._set(self._language.reading(owner if owner and len(owner) < 60 else "", held))

    def sections(self) -> tuple[Section, ...]:
        """The numbered sections; one that would be empty is left out and takes no number."""
        found: list[Section] = []
        text = self._register.texts.get(self._number)
        for title, anchor, build in (
            ("Overview", "overview", self._overview),
            ("Control schemes", "control-schemes", None),
            ("Indicators", "indicators", self._indicator_blocks),
            ("Interlocks", "interlocks", None),
            ("Start-up", "start-up", lambda: self._steps(text.start_up if text else ())),
            ("Shutdown", "shutdown", lambda: self._steps(text.shut_down if text else ())),
            ("Upsets", "upsets", lambda: self._upsets(text)),
            ("Final elements", "final-elements", self._element_blocks),
            ("Holds, deviations and findings", "open-points", self._open_blocks),
        ):
            number = str(len(found) + 1)
            below: tuple[Section, ...] = ()
            if build is not None:
                blocks = tuple(build())
            elif anchor == "control-schemes":
                below = tuple(self._scheme_sections(number))
                blocks = tuple(self._scheme_basis()) if below else ()
            else:
                below = tuple(self._interlock_sections(number))
                blocks = tuple(self._bare_interlocks())
            if blocks or below:
                found.append(Section(number, self._language.label(title), anchor, blocks, below))
        return tuple(found)

    # -- overview, upsets

    def _overview(self) -> Iterator[Block]:
        unit = self._register.units.get(self._number)
        purpose = known(unit.purpose) if unit else None
        if purpose:
            subject = self._language.unit_subject(self._number)
            yield self._paragraph(self._language.purpose(subject, self._language.text(purpose)))
        text = self._register.texts.get(self._number)
        overview = self._language.text(known(text.overview) or "") if text else ""
        for part in re.split(r"\n+", overview):
            if part.strip():
                yield self._paragraph(sentence(part))

    def _steps(self, steps: Sequence[str]) -> Iterator[Block]:
        if steps:
            yield Steps(tuple(self._set(sentence(self._language.text(step))) for step in steps))

    def _upsets(self, text: UnitText | None) -> Iterator[Block]:
        items = []
        for upset in map(self._language.text, text.upsets if text else ()):
            name, colon, rest = upset.partition(": ")
            if colon and len(name) <= _LONGEST_NAME:
                items.append((Run(f"{name}.", "strong"), Run(" "), *self._set(sentence(rest))))
            else:
                items.append(self._set(sentence(upset)))
        if items:
            yield Steps(tuple(items))

    # -- schemes

    def _scheme_basis(self) -> Iterator[Block]:
        """What holds for all schemes, told once."""
        yield self._paragraph(self._language.failure_assumptions(), "Failures.")
        yield self._paragraph(self._language.tuning_basis(), "Tuning.")

    def _scheme_sections(self, number: str) -> Iterator[Section]:
        for ordinal, (scheme, loops) in enumerate(self._schemes, 1):
            story = SchemeStory(self._plant, scheme, loops, self._language)
            yield Section(
                f"{number}.{ordinal}",
                headline(loops),
                f"scheme-{_slug(loops[0].tag)}",
                tuple(self._scheme_blocks(scheme, loops, story)),
                tags=self._set(self._scheme_tags(scheme, loops)),
            )

    def _scheme_tags(self, scheme: Scheme, loops: Sequence[Loop]) -> str:
        tags = [loop.tag for loop in loops]
        parts: list[Function | FinalElement] = [*scheme.functions, *scheme.final_elements]
        whole = len(loops) == sum(loop.tag in self._plant.controlled for loop in scheme.loops)
        tags += [part.tag for part in parts if whole or known(part.unit) == self._number]
        found = dict.fromkeys(drawing for loop in loops if (drawing := known(loop.drawing)))
        drawings = [self._language.entry(drawing) for drawing in found]
        told = ", ".join(tags)
        return f"{told} ({self._language.drawings(drawings)})" if drawings else told

    def _scheme_blocks(self, scheme: Scheme, loops: Sequence[Loop], story: SchemeStory) -> Iterator[Block]:
        controlled = story.controlled
        lead = next(loop for loop in scheme.loops if loop.tag in self._plant.controlled)
        purpose = sentences(story.purpose(), self._elsewhere(lead, loops))
        if purpose:
            yield Paragraph(self._set(purpose), keep=True)
        yield from self._paragraphs("How it works.", story.course(), story.rising())
        waits = settings_story.not_followed(controlled, self._language)
        if len(controlled) == 1:
            told = settings_story.settings(controlled[0], self._language)
            yield from self._paragraphs("Modes and limits.", sentences(told, waits))
        else:
            rows = settings_story.settings_rows(self._plant, controlled, self._language)
            yield from self._table("settings", settings_story.SETTINGS_HEAD, rows, title="Modes and limits")
            yield from self._paragraphs("", waits)
        yield from self._alarm_table(loops)
        times = time_to_act_story.told(self._plant, self._basis.times, loops, self._language)
        yield from self._paragraphs("Time to act.", times)
        tags = [loop.tag for loop in loops] + [part.tag for part in scheme.final_elements]
        acting = sentences(
            protection_story.initiated_by(self._plant, loops, self._language),
            protection_story.interlock_effects(self._plant, tags, self._language),
        )
        yield from self._paragraphs("Interlocks.", acting)
        yield from self._failures(scheme, loops, story)
        yield from self._tuning(lead, story)
        yield from self._scheme_open(tags, [part.tag for part in scheme.functions])

    def _elsewhere(self, lead: Loop, loops: Sequence[Loop]) -> str:
        """Where the whole scheme is told, when only a part of it stands in this unit."""
        if lead.tag in {loop.tag for loop in loops}:
            return ""
        unit = unit_of(lead)
        which = self._register.numbering.replace("{unit}", unit).replace("{kind}", "CN").replace("{serial}", "001")
        return self._language.led_elsewhere(len(loops), lead.tag, which, unit)

    def _failures(self, scheme: Scheme, loops: Sequence[Loop], story: SchemeStory) -> Iterator[Block]:
        told = failure_story.FailureStory(
            self._plant, self._analysis, scheme, loops, story.names, self._language
        )
        found = told.rows()
        rows = [(row.failure, row.control, row.process, row.against) for row in found]
        hazards = failure_story.hazards(loops, story.names, self._language) if rows else ""
        title = "When something fails"
        if hazards:
            yield Paragraph(self._set(hazards), self._language.label(f"{title}."), keep=True)
        yield from self._table("failures", failure_story.HEAD, rows, title="" if hazards else title)

    def _tuning(self, lead: Loop, story: SchemeStory) -> Iterator[Block]:
        dynamics = self._basis.dynamics
        settings = tuning_story.settings_rows(story.controlled, dynamics, self._language)
        yield from self._table("tuning", tuning_story.SETTINGS_HEAD, settings, title="Tuning")
        models = list(tuning_story.process_rows(story.controlled, self._language))
        if any(cell not in ("", HOLD) for row in models for cell in row[2:-1]):
            yield from self._table("process", tuning_story.PROCESS_HEAD, models)
        # Of a scheme that another unit's narrative tells as a whole, what it does as a whole stands there.
        whole = any(loop.loop is lead for loop in story.controlled)
        supplement = self._supplements.get(lead.tag, Supplement()) if whole else Supplement()
        remarks = tuning_story.remarks(story.controlled, dynamics, self._language)
        yield from self._paragraphs("", remarks, supplement.benefit(self._language))
        yield from supplement.figures

    def _alarm_table(self, loops: Iterable[Loop]) -> Iterator[Block]:
        rows = protection_story.alarm_rows(self._plant, loops, self._language)
        yield from self._table("alarms", protection_story.ALARM_HEAD, rows, title="Alarms")

    def _scheme_open(self, tags: Sequence[str], functions: Sequence[str]) -> Iterator[Block]:
        whole = {*tags, *functions}
        holds, accepted = self._points.holds(whole), self._points.accepted(whole)
        told = sentences(
            open_points.held_in_a_sentence(holds, self._language),
            open_points.accepted_in_a_sentence(accepted, self._language),
        )
        yield from self._paragraphs("Open points.", told)
        findings = self._points.findings(whole)
        self._told_findings.update(id(finding) for finding in findings)
        yield from self._finding_table(findings)

    def _finding_table(self, findings: Sequence[Finding]) -> Iterator[Block]:
        rows = open_points.finding_rows(findings, self._language)
        yield from self._table("open-findings", open_points.FINDING_HEAD, rows, title="Open findings")

    # -- indicators

    def _indicator_blocks(self) -> Iterator[Block]:
        rows = []
        for loop in self._indicators:
            measurement = known(loop.measurement)
            operating = known(loop.operating)
            usual = known(operating.normal) if operating else None
            limits = self._language.band(operating.low, operating.high) if operating else ""
            normal = self._language.value(usual) if usual else ""
            if limits and normal:
                limits = f"{limits}, {self._language.normally(normal)}"
            kind = self._language.sensor(measurement) if measurement else ""
            tag = (known(measurement.transmitter) or "") if measurement else ""
            rows.append((
                loop.tag, known(loop.service) or "", f"{tag}, {kind}" if kind else tag,
                self._language.range_of(measurement) if measurement else "",
                limits or normal,
                self._language.text(known(loop.purpose) or ""),
            ))  # fmt: skip
        yield from self._table("indicators", INDICATOR_HEAD, rows)
        yield from self._alarm_table(self._indicators)
        times = time_to_act_story.told(self._plant, self._basis.times, self._indicators, self._language)
        yield from self._paragraphs("Time to act.", times)
        trips = protection_story.initiated_by(self._plant, self._indicators, self._language)
        yield from self._paragraphs("Interlocks.", trips)
        yield from self._paragraphs("", sentences(*map(self._entered, self._indicators)))

    def _entered(self, loop: Loop) -> str:
        """Which functions an indicator's measurement enters."""
        entered = [function.tag for function, _ in self._analysis.functions_of(loop)]
        return self._language.also_enters(transmitter_of(loop) or loop.tag, entered) if entered else ""

    # -- interlocks

    def _interlock_sections(self, number: str) -> Iterator[Section]:
        told = [interlock for interlock in self._interlocks if not protection_story.bare(interlock)]
        for ordinal, interlock in enumerate(told, 1):
            service = known(interlock.service)
            told_and_reset = (
                protection_story.told(interlock, self._language), protection_story.reset(interlock, self._language),
            )  # fmt: skip
            blocks = (*self._paragraphs("", *told_and_reset), *self._sensors(interlock))
            if blocks:
                title = f"{interlock.tag} {service}" if service else interlock.tag
                yield Section(f"{number}.{ordinal}", title, f"interlock-{_slug(interlock.tag)}", blocks)

    def _sensors(self, interlock: Interlock) -> Iterator[Block]:
        """Sensors of an interlock that belong to no loop."""
        rows = []
        for tag in interlock.initiators:
            instrument = self._register.instruments.get(tag)
            if instrument:
                measurement = instrument.measurement
                fault = known(measurement.on_fault)
                rows.append((
                    tag, known(instrument.service) or "", self._language.range_of(measurement),
                    self._language.term("on fault", fault) if fault else "",
                ))  # fmt: skip
        yield from self._table("sensors", INSTRUMENT_HEAD, rows)

    def _bare_interlocks(self) -> Iterator[Block]:
        found = [interlock for interlock in self._interlocks if protection_story.bare(interlock)]
        if found:
            told = sentence(self._language.only_limits(found[0].tag if len(found) == 1 else ""))
            yield Paragraph(self._set(told), keep=True)
        rows = protection_story.bare_rows(found, self._language)
        yield from self._table("bare-interlocks", protection_story.BARE_HEAD, rows)
        watching = {tag for interlock in self._register.interlocks.values() for tag in interlock.initiators}
        idle = [one for one in self._instruments if one.tag not in watching]
        if idle:
            yield from self._paragraphs("", sentence(self._language.unused_by_interlocks([one.tag for one in idle])))

    # -- final elements, open points

    def _element_blocks(self) -> Iterator[Block]:
        rows = protection_story.element_rows(self._plant, self._elements, self._language)
        yield from self._table("elements", protection_story.ELEMENT_HEAD, rows)

    def _unit_tags(self) -> set[str]:
        parts: list[Loop | FinalElement | Interlock | Instrument | Function] = [
            *self._loops, *self._elements, *self._interlocks, *self._instruments, *self._functions,
        ]  # fmt: skip
        return {part.tag for part in parts} | {self._number}

    def _holds(self) -> tuple[HeldValue, ...]:
        return self._points.holds(self._unit_tags())

    def _open_blocks(self) -> Iterator[Block]:
        tags = self._unit_tags()
        holds = open_points.hold_rows(self._holds(), self._language)
        yield from self._table("holds", open_points.HOLD_HEAD, holds, title="Holds")
        rows = open_points.deviation_rows(self._points.accepted(tags), self._language)
        yield from self._table("deviations", open_points.DEVIATION_HEAD, rows, title="Accepted deviations")
        findings = self._points.findings(tags)
        yield from self._finding_table([one for one in findings if id(one) not in self._told_findings])

    # -- setting text

    def _sourced(self, source: Source) -> tuple[str, str]:
        """Where a value's link leads on the screen, and what a pointer resting on it tells."""
        names = [self._what(one) for one in source.ends or (source,)]
        note = self._basis.language.source_note(
            self._basis.language.listed(dict.fromkeys(names)), source.tag, self._where(source)
        )
        return self._line(source), note

    def _what(self, source: Source) -> str:
        return source.what or self._basis.language.origin_name(source.path)

    def _where(self, source: Source) -> str:
        return f"{source.place.file}:{source.place.line}" if source.place else source.calculated

    def _line(self, source: Source) -> str:
        """Address of the register's line that holds a value; empty for a calculated one."""
        if source.place is None:
            return ""
        page = quote(self._pages[source.place.file])
        return f"../{REGISTER_TEXT}/{page}.html#{line_anchor(source.place.line)}"

    def appendix(self, sections: Sequence[Section]) -> Section:
        """Every value that these sections state, with what it is and where it comes from, in order of the tags."""
        rows: dict[tuple[str, str, str, str], tuple[Prose, ...]] = {}
        for source in sources_in(sections):
            for one in source.ends or (source,):
                what, where = self._what(one), self._where(one)
                cells = (
                    self._set(one.tag), (Run(upper_first(what)),), (Run(one.text, "value" if NO_BREAK in one.text else
                    "word"),), (Run(where, "word", self._line(one)),),
                )  # fmt: skip
                rows.setdefault((one.tag, what, one.text, where), cells)
        ordered = [cells for _, cells in sorted(rows.items(), key=lambda row: natural(row[0][0]))]
        label = self._basis.language.label
        head = tuple((f"c-{name.lower().replace(' ', '-')}", label(name)) for name in SOURCE_HEAD)
        intro = Paragraph(self._set(self._basis.language.sources_intro(self._basis.fingerprint)))
        return Section("", label("Sources of the values"), "sources", (intro, Table("sources", head, tuple(ordered))))

    def _set(self, text: str) -> Prose:
        return self._setter.prose(text)

    def _paragraph(self, text: str, label: str = "") -> Paragraph:
        return Paragraph(self._set(text), self._language.label(label) if label else "")

    def _table(
        self, name: str, head: Sequence[str], rows: Iterable[Sequence[str]], *, title: str = ""
    ) -> tuple[Block, ...]:
        return table(name, head, rows, self._set, label=self._language.label, title=title)

    def _paragraphs(self, label: str, *texts: str) -> Iterator[Paragraph]:
        """Paragraphs, the first with the label; nothing where all are empty."""
        for text in texts:
            if text:
                yield self._paragraph(text, label)
                label = ""

    def _target(self, tag: str) -> Target:
        """Where a tag leads: to its loop's sheet, or to the section that tells of its interlock."""
        register = self._register
        interlock = register.interlocks.get(tag)
        if interlock:
            anchor = f"interlock-{_slug(tag)}"
            if protection_story.bare(interlock):
                anchor = "interlocks"
            unit = unit_of(interlock)
            if unit == self._number:
                return Target(anchor=anchor)
            return Target(sheet=f"{quote(file_name(unit))}.html#{anchor}")
        loop = register.loops.get(tag) or self._plant.loop_of_transmitter.get(tag) or mover(self._plant, tag)
        return Target(sheet=f"../loop-sheets/{quote(loop.tag)}.html") if loop else Target()


def _slug(tag: str) -> str:
    return re.sub(r"[^A-Za-z0-9]+", "-", tag).strip("-")

