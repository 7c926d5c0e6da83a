"""Which page of an issue tells of which tag, and how one page leads to another."""

from __future__ import annotations

import posixpath
from collections.abc import Collection, Iterable, Iterator, Sequence
from dataclasses import dataclass
from urllib.parse import quote, unquote

from loopdoc.documents.basis import Page
from loopdoc.documents.view import Section, Table
from loopdoc.documents.whereabouts import REGISTER_TEXT, anchor, document_name

PER_LOOP = {"loop-sheet": "sheet", "check-record": "check record", "response": "responses"}
"""Kinds of which a loop (or a scheme) has one document, and what a short link to it says."""
SCHEMES = "schemes"
"""Folder of the pages of control schemes."""


@dataclass(frozen=True, slots=True)
class Issue:
    """One document of the issue, found by what it is about."""

    kind: str
    page: Page

    @property
    def path(self) -> str:
        return path_of(self.page)


def path_of(page: Page) -> str:
    """Path of a page below the folder of the issue, without its ending."""
    name = document_name(page.name)
    return f"{page.folder}/{name}" if page.folder else name


def address(path: str, *, root: str = "", ending: str = ".html", at: str = "") -> str:
    """Address of a page as a link writes it; ``root`` leads from the linking page to the folder of the issue."""
    return f"{root}{quote(path)}{ending}{f'#{quote(at)}' if at else ''}"


class Places:
    """The pages of one issue by path, by tag and by row."""

    def __init__(
        self,
        issued: Sequence[tuple[str, Page]],
        formats: Collection[str],
        schemes: Iterable[str],
        register_pages: Iterable[str],
    ) -> None:
        self.issued = tuple(Issue(kind, page) for kind, page in issued)
        self.formats = tuple(form for form in ("html", "pdf") if form in formats)
        self._files = {f"{one.path}.{form}" for one in self.issued for form in self.formats}
        self._files.update(f"{SCHEMES}/{document_name(lead)}.html" for lead in schemes)
        self._files.update(f"{REGISTER_TEXT}/{name}.html" for name in register_pages)
        self._by_name = {(one.kind, one.page.name): one for one in self.issued}
        self._rows: dict[str, list[tuple[Issue, str]]] = {}
        self._told: dict[str, list[tuple[Issue, str, str]]] = {}
        for one in self.issued:
            for at in dict.fromkeys(_row_anchors(one.page)):
                self._rows.setdefault(at, []).append((one, at))
            for tag, section in _sections_by_tag(one.page):
                self._told.setdefault(tag, []).append((one, section.anchor, f"{section.number} {section.title}"))

    def has(self, path: str) -> bool:
        """Whether the issue holds a file."""
        return path in self._files

    def leads(self, folder: str, link: str) -> bool:
        """Whether a link from a page in a folder leads to a file of the issue."""
        return self.has(posixpath.normpath(posixpath.join(folder, unquote(link.partition("#")[0]))))

    def document(self, kind: str, name: str) -> Issue | None:
        """The document of a kind about a tag."""
        return self._by_name.get((kind, name))

    def rows(self, tags: Sequence[str]) -> Iterator[tuple[Issue, str]]:
        """Documents with a row for one of these tags, and the name of its place; each document once."""
        seen: set[str] = set()
        for tag in tags:
            for one, at in self._rows.get(anchor(tag), ()):
                if one.path not in seen:
                    seen.add(one.path)
                    yield one, at

    def told(self, tag: str) -> Sequence[tuple[Issue, str, str]]:
        """Sections of the narratives about a tag: document, place and heading."""
        return self._told.get(tag, ())


def _row_anchors(page: Page) -> Iterator[str]:
    for table in (*page.view.get("charts", ()), *page.view.get("schedules", ())):
        for group in table.groups:
            yield from (row.anchor for row in group.rows if row.anchor)


def _sections_by_tag(page: Page) -> Iterator[tuple[str, Section]]:
    """Of a narrative, each tag that heads a section, or a row of a section without sections of its own."""
    for section in page.view.get("sections", ()):
        if not isinstance(section, Section):
            return
        for part in section.sections:
            yield from ((run.text, part) for run in part.tags if run.kind == "tag")
        if section.anchor == "indicators":
            for block in section.blocks:
                if isinstance(block, Table):
                    for row in block.rows:
                        yield from ((run.text, section) for run in row[0] if run.kind == "tag")
