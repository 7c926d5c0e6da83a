"""Which documents a change of the register alters: each built from both registers, and compared as a reader sees it."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.handover.enclosures import content
from loopdoc.documents.rendering import render
from loopdoc.documents.revision.against import WITHOUT_BARS
from loopdoc.documents.revision.change_bars import blocks, difference
from loopdoc.revisions.compare import DocumentChange

Kinds = Mapping[str, Callable[[Basis], Iterator[Page]]]


def documents_between(old: Basis, new: Basis, kinds: Kinds) -> tuple[DocumentChange, ...]:
    """The documents that come, go or say something else than their title block's revision, in the order of an issue."""
    return tuple(_changes(old, new, kinds))


def _changes(old: Basis, new: Basis, kinds: Kinds) -> Iterator[DocumentChange]:
    for kind in (kind for kind in kinds if kind not in WITHOUT_BARS):
        before, after = ({(page.folder, page.name): page for page in side.pages(kind, kinds[kind])}
                         for side in (old, new))  # fmt: skip
        for key, page in after.items():
            if key not in before:
                yield _change("new", page, len(blocks(_html(page))), 0)
            elif content(page) != content(before[key]):
                found = difference(_html(before[key]), _html(page))
                if found.differs:
                    yield _change("changed", page, len(found.changed), found.removed)
        for key, page in before.items():
            if key not in after:
                yield _change("withdrawn", page, 0, len(blocks(_html(page))))


def _change(what: str, page: Page, changed: int, removed: int) -> DocumentChange:
    document = page.document
    return DocumentChange(
        what, document.kind, document.number, document.title, document.supplementary_title, changed, removed
    )


def _html(page: Page) -> str:
    return render(page.template, document=page.document, stylesheet="", **page.view)
