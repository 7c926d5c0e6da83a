"""What an issued PDF carries inside: the register that it was made from, and a statement of what it is.

`loopdoc attest` reads them back: a document handed over years ago still tells which register it said the truth of.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator, Mapping
from dataclasses import asdict, dataclass, replace
from pathlib import PurePosixPath

from loopdoc import __version__
from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.handover.house import FOLDER, House
from loopdoc.documents.pdf import Enclosure
from loopdoc.documents.rendering import render
from loopdoc.documents.titleblock import fingerprint
from loopdoc.register.records import records_text

HOUSE_FOLDER = f"{FOLDER}/"
"""Before the names of the files that the site put in the place of ours."""
STATEMENT_NAME = "loopdoc.json"
AGAINST_FOLDER = "against/"
"""The same for the earlier register, without which the bars could not be set again."""
REGISTER_FOLDER = "register/"
"""Before the names of the register's files, so that none of them can be taken for the statement."""
RESULTS_KIND = "check-record"
"""The kind of document that shows results of loop checks."""
PACKAGE_INDEX_KIND = "document-index"
"""The kind of the index of a package, which no register gives without the files that it lists."""
SOURCES = "sources"
"""The appendix that tells where each value is written."""
RESULTS_NAME = "results.yaml"
"""Results of loop checks that a check record shows; they are no part of the register and its fingerprint."""


@dataclass(frozen=True, slots=True)
class Statement:
    """What a PDF says of itself."""

    root: str
    """Name of the register's root file."""
    folder: str
    """Folder of the document among those issued with it, such as `loop-sheets`."""
    name: str
    """File name without its ending."""
    kind: str
    """Kind of document as `loopdoc issue --documents` takes it."""
    number: str
    title: str
    revision: str
    date: str
    status: str
    draft: str
    """Why it is a draft; empty where it is not."""
    fingerprint: str
    """SHA-256 of the register, all 64 hexadecimal digits."""
    content: str
    """SHA-256 of what the document says, without the register's fingerprint and the state of its check."""
    program: str
    against: str = ""
    """Name of the root file of the earlier register against which bars were set; empty where there is none."""
    house: str = ""
    """SHA-256 of the files that the site put in the place of ours; empty where there are none."""
    language: str = "en"
    """Of the document, as an ISO 639-1 code."""
    appendix: str = ""
    """`sources` where it ends with the sources of its values; else empty."""


def house_fingerprint(house: Mapping[str, bytes]) -> str:
    """SHA-256 of the site's own files; empty where there are none."""
    return fingerprint(house) if house else ""


def statement(kind: str, page: Page, sources: Mapping[str, bytes], against: Mapping[str, bytes] | None) -> Statement:
    """What a document issued from these files, the root file first, and against those of before says of itself."""
    document = page.document
    return Statement(
        root=next(iter(sources)),
        folder=page.folder,
        name=page.name,
        kind=kind,
        number=document.number,
        title=document.title,
        revision=document.revision.code,
        date=document.dated or document.revision.date,
        status=document.revision.status,
        draft=document.draft,
        fingerprint=fingerprint(sources),
        content=content(page),
        program=f"loopdoc {__version__}",
        against=next(iter(against or ()), ""),
        house=house_fingerprint(document.house.files),
        language=document.language,
        appendix=SOURCES if page.view.get("appendix") else "",
    )


def enclosures(basis: Basis, kind: str, page: Page) -> tuple[Enclosure, ...]:
    """The register's files and the statement of one document."""
    against = basis.against.sources if basis.against else {}
    told = json.dumps(asdict(statement(kind, page, basis.sources, against)), indent=2, ensure_ascii=False) + "\n"
    return (
        *(
            Enclosure(REGISTER_FOLDER + name, basis.sources[name], "application/yaml", f"Register file {name}")
            for name in sorted(basis.sources)
        ),
        *(
            Enclosure(AGAINST_FOLDER + name, against[name], "application/yaml", f"Earlier register file {name}")
            for name in sorted(against)
        ),
        *_house(basis.house),
        *_results(basis, kind, page),
        Enclosure(STATEMENT_NAME, told.encode(), "application/json", "What this document is and was made from"),
    )


_MEDIA_TYPES = {".html": "text/html", ".css": "text/css", ".svg": "image/svg+xml", ".png": "image/png"}


def _house(house: House) -> Iterator[Enclosure]:
    for name, content in sorted(house.files.items()):
        media_type = _MEDIA_TYPES.get(PurePosixPath(name).suffix, "application/yaml")
        yield Enclosure(HOUSE_FOLDER + name, content, media_type, f"The site's own {name}")


def _results(basis: Basis, kind: str, page: Page) -> Iterator[Enclosure]:
    """What a check record shows of the last checks: its own loop's, and those of the other loops of its cascade."""
    if kind != RESULTS_KIND:
        return
    tags = dict.fromkeys([page.name, *(tag for tag, _ in page.view["record"].order)])
    shown = [record for tag in tags for record in basis.records.get(tag, ())]
    if shown:
        yield Enclosure(RESULTS_NAME, records_text(shown).encode(), "application/yaml", "Results of loop checks")


def content(page: Page) -> str:
    """SHA-256 of what a document says.

    A change elsewhere in the register alters the fingerprint, the check and the numbers of lines, not what this
    document says.
    """
    document = replace(page.document, fingerprint="", check_state="", generator="", bars="")
    view = {**page.view, "appendix": None} if page.view.get("appendix") else page.view
    html = render(page.template, document=document, stylesheet="", **view)
    return hashlib.sha256(html.encode()).hexdigest()
