"""Documents issued against an earlier revision: bars beside what differs, and a line that says so."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import replace
from typing import Any

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.rendering import render
from loopdoc.documents.revision.change_bars import with_bars
from loopdoc.documents.titleblock import fingerprint
from loopdoc.register.model import known


def pages_against(basis: Basis, kind: str, build: Callable[[Basis], Iterator[Page]]) -> tuple[Page, ...]:
    """The documents of one kind, each beside what it was at the revision against which it is issued, if at any."""
    pages = basis.pages(kind, build)
    if basis.against is None or kind in WITHOUT_BARS:
        return pages
    before = {(page.folder, page.name): page for page in basis.against.pages(kind, build)}
    since = _since(basis, basis.against)
    return tuple(_beside(page, before.get((page.folder, page.name)), since) for page in pages)


WITHOUT_BARS = ("revision-summary",)
"""Kinds of documents that tell of a change and of nothing else."""


def _beside(page: Page, earlier: Page | None, since: str) -> Page:
    bars = f"Bars mark changes since {since}; a short or dotted bar marks where something before it is gone."
    note = bars if earlier else f"New in this revision, not issued at {since}."
    return replace(page, document=replace(page.document, bars=note), earlier=earlier)


def _since(basis: Basis, before: Basis) -> str:
    """The earlier revision by its code, and where the code is still the same by its fingerprint too."""
    now, then = basis.plant.register.revision, before.plant.register.revision
    code = known(then.code) if then else None
    date = known(then.date) if then else None
    named = f"revision {code}" if code else "the earlier register"
    named += f" of {date}" if date else ""
    if now and code == known(now.code):
        named += f" as it was at fingerprint {fingerprint(before.sources)[:12]}"
    return named


def page_html(page: Page, *, stylesheet: str, **frame: Any) -> str:
    """The HTML of one document, with bars where it is issued against an earlier revision."""

    def html(one: Page) -> str:
        return render(one.template, document=one.document, stylesheet=stylesheet, **frame, **one.view)

    return with_bars(html(page.earlier), html(page)) if page.earlier else html(page)
