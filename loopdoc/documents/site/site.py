"""The issue as a site: one static folder that opens from disk, without network, and without script where it can."""

from __future__ import annotations

import re
from collections.abc import Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

from markupsafe import Markup

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.language import ENGLISH
from loopdoc.documents.responses.responses import scheme_chains, split_ranges
from loopdoc.documents.schedules.effects import MARKS, MODES
from loopdoc.documents.site.around import ROOT, Around, Entry, Link, is_told_apart
from loopdoc.documents.site.index import choices, index_rows
from loopdoc.documents.site.places import SCHEMES, Issue, Places, address
from loopdoc.documents.site.plot import plot_data, split_plot_data
from loopdoc.documents.site.points import NotMade, Point, Points, all_points
from loopdoc.documents.site.script import data_block, policy, script
from loopdoc.documents.site.source import Excerpt, Marked, Sources
from loopdoc.documents.values import shown
from loopdoc.documents.whereabouts import anchor, file_name, unit_of
from loopdoc.documents.wording import listed
from loopdoc.engineering.comparison import Comparison
from loopdoc.engineering.pairing import Scheme
from loopdoc.register.model import FinalElement, Function, Loop, Origin, known
from loopdoc.register.place import Place

INDEX, FINDINGS = "index", "findings"
SCRIPTS = {INDEX: "site-index.js", FINDINGS: "site-index.js", "response": "site-plot.js",
           "cause-and-effect": "site-chart.js"}  # fmt: skip
"""Script of each kind of page; the others have none."""


@dataclass(frozen=True, slots=True)
class PointRow:
    """A finding, deviation or hold in the list of a page."""

    point: Point
    anchor: str
    line: str
    """Address of the register's line that the page shows; empty where it shows none."""
    place: str


@dataclass(frozen=True, slots=True)
class Frame:
    """What stands around the content of a page of the site."""

    root: str
    folder: str
    places: Places
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
    """The loops before and after this one in the register."""
    points: tuple[PointRow, ...] = ()
    not_made: tuple[NotMade, ...] = ()
    excerpts: tuple[Excerpt, ...] = ()
    plots: tuple[bool, ...] = ()
    """Whether each chain of a response page has data for the plot."""

    def leads(self, link: str) -> bool:
        """Whether a link from this page leads to a file of the issue."""
        return self.places.leads(self.folder, link)


class Site:
    """The pages around the documents of one issue, and what stands around the content of each."""

    def __init__(self, basis: Basis, issued: Sequence[tuple[str, Page]], formats: Collection[str]) -> None:
        self._basis = basis
        plant = basis.plant
        self._schemes = {scheme.lead.tag: scheme for scheme in plant.schemes if is_told_apart(plant, scheme)}
        self._places = Places(issued, formats, self._schemes)
        self._around = Around(plant, self._places)
        self._points = Points(basis)
        self._sources = Sources(basis.sources)
        loops = list(plant.register.loops)
        self._before = {after: before for before, after in pairwise(loops)}
        self._after = dict(pairwise(loops))
        self._of_unit: dict[str, list[Issue]] = {}
        for one in self._places.issued:
            self._of_unit.setdefault(one.page.name, []).append(one)

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
            return self._frame(
                kind, page, about=loop.tag, unit=unit_of(loop), around=self._around.loop(loop),
                beside=self._neighbours(loop, kind), data=data or None,
            )  # fmt: skip
        number = next((n for n in self._basis.plant.register.units if file_name(n) == page.name), "")
        marks = dict(MARKS.values())
        marks |= {mark: f"forces the controller to {mode}" for mode, mark in MODES.items()}
        beside = tuple(
            Link(one.page.document.kind, address(one.path, root=ROOT))
            for one in self._of_unit.get(page.name, ())
            if one.kind != kind
        )
        around = (Entry("Of this unit" if number else "Of the plant", beside),) if beside else ()
        return self._frame(kind, page, unit=number, around=around,
                           data={"marks": marks} if kind == "cause-and-effect" else None)  # fmt: skip

    def _of_loop(self, loop: Loop, page: Page) -> Frame:
        around = self._around
        parts: list[tuple[str, Origin]] = [(loop.tag, loop.origin)]
        parts += [(function.tag, function.origin) for function in around.functions(loop)]
        parts += [(element.tag, element.origin) for element in around.elements(loop)]
        points, excerpts = self._told(around.tags(loop), parts)
        return self._frame(
            "loop-sheet", page, about=loop.tag, unit=unit_of(loop), around=around.loop(loop),
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
            marks.setdefault(point.place, []).append(Marked(point.what, f"point-{index}"))
        excerpts = self._sources.excerpts(parts, marks)
        lines = {line.anchor for excerpt in excerpts for line in excerpt.lines}
        rows = []
        for index, point in enumerate(found, 1):
            line = self._sources.anchor(point.place)
            rows.append(PointRow(point, f"point-{index}", f"#{line}" if line in lines else "", str(point.place)))
        return tuple(rows), excerpts

    def _neighbours(self, loop: Loop, kind: str) -> tuple[Link, ...]:
        found = []
        for label, tag in (("Before", self._before.get(loop.tag)), ("After", self._after.get(loop.tag))):
            one = self._places.document(kind, tag) if tag else None
            if one is not None and tag:
                found.append(Link(tag, address(one.path, root=ROOT), label))
        return tuple(found)

    def _frame(
        self, kind: str, page: Page, *, unit: str = "", about: str = "", data: Any = None, **rest: Any
    ) -> Frame:
        name = SCRIPTS.get(kind, "")
        root = ROOT if page.folder else ""
        register = self._basis.plant.register
        site = shown(register.site.name if register.site else None)
        trail = [Link(f"Index of {site}", f"{root}index.html")]
        if unit:
            described = register.units.get(unit)
            title = known(described.name) if described else None
            trail.append(Link(f"Unit {unit} {title}" if title else f"Unit {unit}",
                              f"{root}index.html#unit={re.sub('[^A-Za-z0-9]', _escaped, unit)}"))  # fmt: skip
        trail.append(Link(" ".join(part for part in (page.document.kind, about) if part)))
        return Frame(
            root, page.folder, self._places, policy(name), script(name) if name else Markup(""),
            data_block(data) if data is not None else Markup(""), tuple(trail), about,
            plots=tuple(one is not None for one in data) if kind == "response" and data else (), **rest,
        )  # fmt: skip

    # -- pages of the site itself

    def pages(self) -> Iterator[tuple[Page, Frame]]:
        """The schemes, the findings and, last, the index."""
        for scheme in self._schemes.values():
            yield self._scheme_page(scheme)
        yield self._findings_page()
        yield self._index_page()

    def _scheme_page(self, scheme: Scheme) -> tuple[Page, Frame]:
        plant, around = self._basis.plant, self._around
        inside = {*(loop.tag for loop in scheme.loops), *(function.tag for function in scheme.functions)}
        roots = [
            loop.tag
            for loop in scheme.loops
            if not inside & set(plant.commanders.get(loop.tag, ()))
        ] or [scheme.lead.tag]  # a ring has no outermost loop
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
            "points": [{"point": point, "link": self._near(point.tag), "place": str(point.place)} for point in points],
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
        names = {number: known(unit.name) or "" for number, unit in register.units.items()}
        view = {
            "rows": rows,
            "first_of_unit": {
                index: f"unit={unit}" for unit, index in _first(row.unit for row in rows).items() if unit
            },
            "units": choices((row.unit, f"{row.unit} {names.get(row.unit, '')}".strip()) for row in rows if row.unit),
            "kinds": choices((row.kind, row.kind) for row in rows),
            "documents": len(self._places.issued),
            "languages": _languages(self._places.issued),
        }
        page = Page("", INDEX, document, "index.html", view)
        return page, self._frame(INDEX, page, data={"also": [row.also for row in rows]})


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
