"""The issue as a site: one static folder that opens from disk, without network, and without script where it can."""

from __future__ import annotations

import re
from collections.abc import Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

from markupsafe import Markup

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.language import ENGLISH, LANGUAGES, Language
from loopdoc.documents.responses.responses import overrides, scheme_chains, split_ranges
from loopdoc.documents.schedules.effects import MARKS, MODES
from loopdoc.documents.site.around import ROOT, Around, Entry, Link, is_told_apart
from loopdoc.documents.site.index import Choice, choices, index_rows
from loopdoc.documents.site.places import PER_LOOP, SCHEMES, Issue, Places, address, path_of
from loopdoc.documents.site.plot import override_plot_data, plot_data, split_plot_data
from loopdoc.documents.site.points import NotMade, Point, Points, all_points
from loopdoc.documents.site.script import data_block, policy, script
from loopdoc.documents.site.source import Excerpt, Marked, Sources
from loopdoc.documents.values import shown
from loopdoc.documents.whereabouts import REGISTER_TEXT, Part, anchor, file_name, unit_numbers, unit_of
from loopdoc.documents.wording import listed
from loopdoc.engineering.comparison import Comparison
from loopdoc.engineering.pairing import Scheme
from loopdoc.register.model import FinalElement, Function, Loop, Origin, known
from loopdoc.register.place import Place

INDEX, FINDINGS = "index", "findings"
FEW_UNITS = 12
"""So many units have their documents listed above the rows of the index; those of more are folded away."""
SCRIPTS = {INDEX: "site-index.js", FINDINGS: "site-index.js", "response": "site-plot.js",
           "cause-and-effect": "site-chart.js"}  # fmt: skip
"""Script of each kind of page; the others have none."""


@dataclass(frozen=True, slots=True)
class PointRow:
    """A finding, deviation or hold in the list of a page."""

    point: Point
    anchor: str
    line: str
    """Address of the register's line: on the page itself where it shows it, else on that of its file."""
    place: str


@dataclass(frozen=True, slots=True)
class Frame:
    """What stands around the content of a page of the site."""

    kind: str
    root: str
    folder: str
    places: Places
    sources: Sources
    policy: str
    script: Markup
    data: Markup
    """JSON for the script; empty where it needs none."""
    trail: tuple[Link, ...]
    """From the index down to this page, itself the last."""
    about: str = ""
    """Tag that the page is about; empty for a document of a unit."""
    around: tuple[Entry, ...] = ()
    beside: tuple[Link, ...] = ()
    """The loops, or the units, before and after this one in the register."""
    points: tuple[PointRow, ...] = ()
    not_made: tuple[NotMade, ...] = ()
    excerpts: tuple[Excerpt, ...] = ()
    plots: tuple[bool, ...] = ()
    """Whether each chain of a response page has data for the plot."""

    def leads(self, link: str) -> bool:
        """Whether a link from this page leads to a file of the issue."""
        return self.places.leads(self.folder, link)

    def line(self, place: Place) -> str:
        """Address of a line of the register, seen from this page; empty where the register has no such file."""
        return self.sources.address(place, self.root)


class Site:
    """The pages around the documents of one issue, and what stands around the content of each."""

    def __init__(self, basis: Basis, issued: Sequence[tuple[str, Page]], formats: Collection[str]) -> None:
        self._basis = basis
        plant = basis.plant
        self._schemes = {scheme.lead.tag: scheme for scheme in plant.schemes if is_told_apart(plant, scheme)}
        self._sources = Sources(basis.sources)
        self._places = Places(issued, formats, self._schemes, self._sources.pages.values())
        self._around = Around(plant, self._places)
        self._points = Points(basis)
        loops = list(plant.register.loops)
        self._before = {after: before for before, after in pairwise(loops)}
        self._after = dict(pairwise(loops))
        self._of_unit: dict[str, list[Issue]] = {}
        self._units: dict[str, list[str]] = {}
        for one in self._places.issued:
            self._of_unit.setdefault(one.page.name, []).append(one)
            self._units.setdefault(one.kind, []).append(one.page.name)

    # -- documents

    def frame(self, kind: str, page: Page) -> Frame:
        """What stands around a document."""
        loop = self._basis.plant.register.loops.get(page.name)
        if kind == "loop-sheet" and loop is not None:
            return self._of_loop(loop, page)
        if loop is not None:
            scheme = self._basis.plant.scheme_of(loop.tag)
            data: list[Any] = []
            if kind == "response":
                chains = scheme_chains(self._basis, scheme)
                compared = [self._basis.comparison(chain) for chain in chains]
                data = [plot_data(self._basis.plant, one) if isinstance(one, Comparison) else None for one in compared]
                data += [split_plot_data(self._basis.plant, one) for one in split_ranges(self._basis, chains)]
                data += [override_plot_data(self._basis.plant, one) for one in overrides(self._basis, scheme)]
            return self._frame(
                kind, page, about=loop.tag, unit=unit_of(loop),
                around=self._around.loop(loop, path_of(page), language_of(page)), beside=self._neighbours(loop, kind),
                data=data or None,
            )  # fmt: skip
        number = self._unit_named(page.name)
        marks = dict(MARKS.values())
        marks |= {mark: f"forces the controller to {mode}" for mode, mark in MODES.items()}
        beside = tuple(
            Link(one.page.document.kind, address(one.path, root=ROOT))
            for one in self._of_unit.get(page.name, ())
            if one.kind != kind
        )
        around = (Entry("Of this unit" if number else "Of the plant", beside),) if beside else ()
        return self._frame(kind, page, unit=number, around=around, beside=self._units_beside(kind, page),
                           data={"marks": marks} if kind == "cause-and-effect" else None)  # fmt: skip

    def _unit_named(self, name: str) -> str:
        """The unit whose documents have this name; empty for those of the plant."""
        return next((number for number in unit_numbers(self._basis.plant) if file_name(number) == name), "")

    def _units_beside(self, kind: str, page: Page) -> tuple[Link, ...]:
        """The documents of the same kind of the units before and after."""
        names, language = self._units[kind], language_of(page)
        at = names.index(page.name)
        beside = (("Previous", names[at - 1 : at]), ("Next", names[at + 1 : at + 2]))
        return tuple(
            Link(
                f"{language.label('Unit')} {unit}" if (unit := self._unit_named(other)) else language.label("Plant"),
                address(one.path, root=ROOT),
                label,
            )
            for label, others in beside
            for other in others
            if (one := self._places.document(kind, other)) is not None
        )

    def _of_loop(self, loop: Loop, page: Page) -> Frame:
        around = self._around
        parts: list[tuple[str, Origin]] = [(loop.tag, loop.origin)]
        parts += [(function.tag, function.origin) for function in around.functions(loop)]
        parts += [(element.tag, element.origin) for element in around.elements(loop)]
        points, excerpts = self._told(around.tags(loop), parts)
        return self._frame(
            "loop-sheet", page, about=loop.tag, unit=unit_of(loop),
            around=around.loop(loop, path_of(page), language_of(page)),
            beside=self._neighbours(loop, "loop-sheet"), points=points, excerpts=excerpts,
            not_made=self._points.not_made(around.tags(loop)),
        )  # fmt: skip

    def _told(
        self, tags: Sequence[str], parts: Sequence[tuple[str, Origin]]
    ) -> tuple[tuple[PointRow, ...], tuple[Excerpt, ...]]:
        """What is open at these tags, and the lines of these parts, each leading to the other."""
        found = self._points.points(tags)
        marks: dict[Place, list[Marked]] = {}
        for index, point in enumerate(found, 1):
            marks.setdefault(point.place, []).append(Marked(point.what, f"#point-{index}"))
        excerpts = self._sources.excerpts(parts, marks, ROOT)
        lines = {line.anchor for excerpt in excerpts for line in excerpt.lines}
        rows = []
        for index, point in enumerate(found, 1):
            line = self._sources.anchor(point.place)
            there = f"#{line}" if line in lines else self._sources.address(point.place, ROOT)
            rows.append(PointRow(point, f"point-{index}", there, str(point.place)))
        return tuple(rows), excerpts

    def _neighbours(self, loop: Loop, kind: str) -> tuple[Link, ...]:
        found = []
        for label, tag in (("Previous", self._before.get(loop.tag)), ("Next", self._after.get(loop.tag))):
            one = self._places.document(kind, tag) if tag else None
            if one is not None and tag:
                found.append(Link(tag, address(one.path, root=ROOT), label))
        return tuple(found)

    def _frame(self, kind: str, page: Page, *, unit: str = "", about: str = "", data: Any = None, **rest: Any) -> Frame:
        name = SCRIPTS.get(kind, "")
        root = ROOT if page.folder else ""
        register = self._basis.plant.register
        site = shown(register.site.name if register.site else None)
        language = language_of(page)
        trail = [Link(f"{language.label('Index of')} {site}", "" if kind == INDEX else f"{root}index.html")]
        if unit:
            trail.append(Link(self._unit_title(unit, language),
                              f"{root}index.html#unit={re.sub('[^A-Za-z0-9]', _escaped, unit)}"))  # fmt: skip
        if kind != INDEX:
            trail.append(Link(" ".join(part for part in (page.document.kind, about) if part)))
        return Frame(
            kind, root, page.folder, self._places, self._sources, policy(name), script(name) if name else Markup(""),
            data_block(data) if data is not None else Markup(""), tuple(trail), about,
            plots=tuple(one is not None for one in data) if kind == "response" and data else (), **rest,
        )  # fmt: skip

    def _unit_title(self, number: str, language: Language = ENGLISH) -> str:
        described = self._basis.plant.register.units.get(number)
        title = known(described.name) if described else None
        return " ".join(part for part in (language.label("Unit"), number, title) if part)

    # -- pages of the site itself

    def pages(self) -> Iterator[tuple[Page, Frame]]:
        """The schemes, the register's files, the findings and, last, the index."""
        for scheme in self._schemes.values():
            yield self._scheme_page(scheme)
        yield from self._register_pages()
        yield self._findings_page()
        yield self._index_page()

    def _scheme_page(self, scheme: Scheme) -> tuple[Page, Frame]:
        plant, around = self._basis.plant, self._around
        inside = {*(loop.tag for loop in scheme.loops), *(function.tag for function in scheme.functions)}
        roots = [loop.tag for loop in scheme.loops if not inside & set(plant.commanders.get(loop.tag, ()))] or [
            scheme.lead.tag
        ]  # a ring has no outermost loop
        seen: set[str] = set()
        nodes = [around.node(tag, seen=seen) for tag in roots]
        nodes += [around.node(function.tag, seen=seen) for function in scheme.functions if function.tag not in seen]
        tags = [tag for loop in scheme.loops for tag in around.tags(loop)]
        parts: tuple[Loop | Function | FinalElement, ...] = (*scheme.loops, *scheme.functions, *scheme.final_elements)
        points, excerpts = self._told(tags, [(part.tag, part.origin) for part in scheme.functions])
        unit = unit_of(scheme.lead)
        document = self._basis.document(
            kind="Control scheme", code="CS", title=f"{scheme.lead.tag} {shown(scheme.lead.service)}",
            supplementary_title=f"{len(scheme.loops)} loops" if len(scheme.loops) > 1 else "1 loop",
            unit=unit, serial=scheme.lead.tag,
        )  # fmt: skip
        view = {
            "nodes": nodes,
            "loops": [self._loop_row(loop) for loop in scheme.loops],
            "anchors": {part.tag: anchor(part.tag) for part in parts},
        }
        page = Page(SCHEMES, scheme.lead.tag, document, "scheme.html", view)
        return page, self._frame(
            "scheme", page, unit=unit, about=scheme.lead.tag, around=around.scheme(scheme), points=points,
            excerpts=excerpts, not_made=self._points.not_made(tags),
        )  # fmt: skip

    def _loop_row(self, loop: Loop) -> Mapping[str, Any]:
        measurement, controller = known(loop.measurement), known(loop.controller)
        modes = known(controller.modes) if controller else None
        return {
            "link": self._around.to(loop.tag),
            "service": shown(loop.service),
            "transmitter": self._around.transmitter(loop) or shown(None),
            "range": shown(measurement.range if measurement else None),
            "action": shown(controller.action if controller else None),
            "mode": shown(modes.normal if modes else None),
            "hazard": shown(loop.hazard),
            "open": self._points.counts(self._around.tags(loop)).open or shown(None),
        }

    def _register_pages(self) -> Iterator[tuple[Page, Frame]]:
        marks: dict[str, dict[Place, list[Marked]]] = {}
        for place, mark in self._ways_out():
            marks.setdefault(place.file, {}).setdefault(place, []).append(mark)
        for number, (file, name) in enumerate(self._sources.pages.items(), 1):
            excerpt = self._sources.whole(file, marks.get(file, {}))
            document = self._basis.document(
                kind="Register file", code="RF", title=file,
                supplementary_title=f"{len(excerpt.lines)} lines", unit="00", serial=f"{number:03d}",
            )  # fmt: skip
            page = Page(REGISTER_TEXT, name, document, "register-file.html", {"excerpt": excerpt})
            yield page, self._frame(REGISTER_TEXT, page)

    def _ways_out(self) -> Iterator[tuple[Place, Marked]]:
        """From the first line of each part to its document, and from lines to what was found in them."""
        register = self._basis.plant.register
        sections: tuple[tuple[str, Mapping[str, Part]], ...] = (
            ("loop sheet", register.loops), ("instrument list", register.final_elements),
            ("instrument list", register.instruments), ("control scheme", register.functions),
            ("cause and effect chart", register.interlocks),
        )  # fmt: skip
        for document, section in sections:
            for tag, part in section.items():
                link = self._around.to(tag)
                if link.address:
                    yield part.origin.key(), Marked(document, link.address)
        for unit, text in register.texts.items():
            told = self._places.document("narrative", file_name(unit))
            if told is not None:
                yield text.origin.key(), Marked(told.page.document.kind.lower(), address(told.path, root=ROOT))
        for index, point in enumerate(all_points(self._basis), 1):
            yield point.place, Marked(point.what, f"{ROOT}{FINDINGS}.html#point-{index}")

    def _findings_page(self) -> tuple[Page, Frame]:
        result = self._basis.result
        register = self._basis.plant.register
        document = self._basis.document(
            kind="Findings", code="FL", title="Findings, deviations and holds",
            supplementary_title=shown(register.site.name if register.site else None), unit="00", serial="001",
        )  # fmt: skip
        points = all_points(self._basis)
        found: dict[str, int] = {}
        for finding in (*result.findings, *result.accepted):
            found[finding.rule] = found.get(finding.rule, 0) + 1
        view = {
            "points": [
                {"point": point, "unit": self._unit_at(point.tag), "link": self._near(point.tag),
                 "anchor": f"point-{index}", "line": self._sources.address(point.place, ""), "place": str(point.place)}
                for index, point in enumerate(points, 1)
            ],
            "units": self._unit_choices(self._unit_at(point.tag) for point in points),
            "kinds": choices((point.kind, point.kind) for point in points),
            "rules": choices(sorted((point.what, point.what) for point in points if point.kind != "hold")),
            "coverage": [
                {
                    "rule": rule,
                    "checked": str(entry.checked),
                    "not_checked": str(entry.not_checked),
                    "found": str(found.get(rule, 0)),
                    "reason": entry.reasons.most_common(1)[0][0] if entry.reasons else "",
                }
                for rule, entry in result.coverage.items()
            ],
        }  # fmt: skip
        page = Page("", FINDINGS, document, "site-findings.html", view)
        return page, self._frame(FINDINGS, page, data={"also": []})

    def _unit_at(self, tag: str) -> str:
        """Unit of what a finding is about; empty where it is the register itself."""
        plant, register = self._basis.plant, self._basis.plant.register
        sections: tuple[Mapping[str, Part], ...] = (
            register.loops, plant.loop_of_transmitter, register.final_elements, register.instruments,
            register.functions, register.interlocks,
        )  # fmt: skip
        unit = next((unit_of(section[tag]) for section in sections if tag in section), tag)
        return unit if unit in register.units else ""

    def _unit_choices(self, units: Iterable[str]) -> tuple[Choice, ...]:
        return choices((unit, self._unit_title(unit).removeprefix("Unit ")) for unit in units if unit)

    def _unit_documents(self) -> tuple[Entry, ...]:
        """Documents of each unit and of the plant, those of single loops apart."""
        titles = {file_name(number): self._unit_title(number) for number in unit_numbers(self._basis.plant)}
        found: dict[str, list[Link]] = {}
        for one in self._places.issued:
            if one.kind not in PER_LOOP:
                form = self._places.formats[0]
                found.setdefault(titles.get(one.page.name, "Plant"), []).append(
                    Link(one.page.document.kind, address(one.path, ending=f".{form}"))
                )
        found["Register"] = [
            Link(file, address(f"{REGISTER_TEXT}/{name}")) for file, name in self._sources.pages.items()
        ]
        return tuple(
            Entry(title, tuple(found[title])) for title in (*titles.values(), "Plant", "Register") if title in found
        )

    def _near(self, tag: str) -> Link:
        """A link to a tag from the folder of the issue itself."""
        link = self._around.to(tag)
        return Link(link.label, link.address.removeprefix(ROOT))

    def _index_page(self) -> tuple[Page, Frame]:
        register = self._basis.plant.register
        site = shown(register.site.name if register.site else None)
        document = self._basis.document(
            kind="Document index", code="DI", title="Index of documents", supplementary_title=site, unit="00",
            serial="001",
        )  # fmt: skip
        rows = tuple(index_rows(self._basis, self._places, self._around, self._points))
        entries = self._unit_documents()
        view = {
            "rows": rows,
            "of_units": entries,
            "few": len(entries) <= FEW_UNITS,
            "first_of_unit": {
                index: f"unit={unit}" for unit, index in _first(row.unit for row in rows).items() if unit
            },
            "units": self._unit_choices(row.unit for row in rows),
            "kinds": choices((row.kind, row.kind) for row in rows),
            "rules": choices(sorted((rule, rule) for row in rows if row.counts for rule in row.counts.rules)),
            "documents": len(self._places.issued),
            "languages": _languages(self._places.issued),
        }
        page = Page("", INDEX, document, "index.html", view)
        return page, self._frame(INDEX, page, data={"also": [row.also for row in rows]})


def language_of(page: Page) -> Language:
    """The language of a page's words."""
    return LANGUAGES[page.document.language]


def _languages(issued: Sequence[Issue]) -> str:
    """Which kinds are not in English, in a sentence; empty where all are."""
    kinds = dict.fromkeys(one.page.document.kind for one in issued if one.page.document.language != ENGLISH.code)
    if not kinds:
        return ""
    codes = dict.fromkeys(one.page.document.language for one in issued if one.page.document.kind in kinds)
    told = f"In the language {listed(codes)}: {listed(kinds)}"
    rest = len(kinds) < len(dict.fromkeys(one.page.document.kind for one in issued))
    return f"{told}. The other kinds have no catalogue in that language and are in English." if rest else f"{told}."


def _first(values: Iterable[str]) -> dict[str, int]:
    """Where each value stands first, counted from 0."""
    found: dict[str, int] = {}
    for index, value in enumerate(values):
        found.setdefault(value, index)
    return found


def _escaped(found: re.Match[str]) -> str:
    return "".join(f"%{byte:02X}" for byte in found[0].encode())
