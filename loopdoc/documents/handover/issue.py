"""Issues the documents of a register: builds the pages, renders them, writes them whole or not at all."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable, Collection, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.check_record.check_record import check_records
from loopdoc.documents.handover.enclosures import enclosures
from loopdoc.documents.loop_sheet.loop_sheet import loop_sheets
from loopdoc.documents.narrative.narrative import narratives
from loopdoc.documents.pdf import Enclosure, ensure_available, to_pdf
from loopdoc.documents.rendering import web_style_sheet
from loopdoc.documents.responses.responses import responses, supplements
from loopdoc.documents.revision.against import page_html, pages_against
from loopdoc.documents.revision.check_report import check_reports
from loopdoc.documents.revision.revision_summary import revision_summaries
from loopdoc.documents.schedules.alarms import alarm_schedules
from loopdoc.documents.schedules.effects import cause_and_effect_charts
from loopdoc.documents.schedules.failures import failure_schedules
from loopdoc.documents.schedules.lists import channel_lists, instrument_lists
from loopdoc.documents.schedules.tuning import tuning_schedules
from loopdoc.documents.site.places import path_of
from loopdoc.documents.site.site import Frame, Site

KINDS: dict[str, Callable[[Basis], Iterator[Page]]] = {
    "narrative": lambda basis: narratives(basis, supplements(basis)),
    "loop-sheet": loop_sheets,
    "response": responses,
    "check-record": check_records,
    "alarm-schedule": alarm_schedules,
    "cause-and-effect": cause_and_effect_charts,
    "tuning-schedule": tuning_schedules,
    "failure-effects": failure_schedules,
    "channel-list": channel_lists,
    "instrument-list": instrument_lists,
    "check-report": check_reports,
    "revision-summary": lambda basis: revision_summaries(basis, KINDS),
}
"""Document kinds by the name that `loopdoc issue --documents` takes."""

FORMATS = ("pdf", "html")
STYLE_SHEET = "style.css"


@dataclass(frozen=True, slots=True)
class Issued:
    """What was written."""

    folder: Path
    documents: int
    files: tuple[str, ...]
    """Paths below the folder, in the order of writing; the index last."""


def issue(
    basis: Basis,
    out: Path,
    *,
    kinds: Collection[str] = tuple(KINDS),
    formats: Collection[str] = FORMATS,
    jobs: int = 1,
    progress: Callable[[int, int], None] = lambda done, total: None,
) -> Issued:
    """Write the documents of these kinds and formats below ``out``.

    Raises
    ------
    PdfError
        PDF is wanted and cannot be made; nothing has been written then.
    OSError
        The folder cannot be written to.
    """
    if "pdf" in formats:
        ensure_available()
    issued = [(kind, page) for kind in KINDS if kind in kinds for page in pages_of(basis, kind)]
    pages = [page for _, page in issued]
    files: list[str] = []
    done, total = 0, len(pages) * len(formats)
    if "html" in formats:
        write_whole(out / STYLE_SHEET, web_style_sheet(basis.house.style_sheet).encode())
        files.append(STYLE_SHEET)
        site = Site(basis, issued, formats)
        for kind, page in issued:
            files.append(_write_page(out, page, site.frame(kind, page)))
            done += 1
            progress(done, total)
    if "pdf" in formats:
        names = [f"{path_of(page)}.pdf" for page in pages]
        for name, content in zip(names, _pdfs(basis, issued, jobs), strict=True):
            write_whole(out / name, content)
            files.append(name)
            done += 1
            progress(done, total)
    if "html" in formats:
        files.extend(_write_page(out, page, frame) for page, frame in site.pages())
    return Issued(out, len(pages), tuple(files))


def pages_of(basis: Basis, kind: str) -> tuple[Page, ...]:
    """The documents of one kind as they are issued: with bars where the register stands against an earlier one."""
    return pages_against(basis, kind, KINDS[kind])


def _write_page(out: Path, page: Page, frame: Frame) -> str:
    """Write a page of the site; returns its path below the folder."""
    name = f"{path_of(page)}.html"
    html = page_html(page, stylesheet=f"{frame.root}{STYLE_SHEET}", site=frame)
    write_whole(out / name, html.encode())
    return name


def pdf_of(basis: Basis, kind: str, page: Page) -> bytes:
    """One document as PDF/A with the register inside."""
    return _to_pdf(_pdf_source(basis, kind, page))


def _pdfs(basis: Basis, issued: Sequence[tuple[str, Page]], jobs: int) -> Iterator[bytes]:
    sources = (_pdf_source(basis, kind, page) for kind, page in issued)
    if jobs == 1:
        yield from map(_to_pdf, sources)
        return
    with ProcessPoolExecutor(jobs) as pool:
        yield from pool.map(_to_pdf, sources)  # one by one: a narrative takes as long as ten loop sheets


def _pdf_source(basis: Basis, kind: str, page: Page) -> tuple[str, tuple[Enclosure, ...], str, str]:
    html = page_html(page, stylesheet="")
    return html, enclosures(basis, kind, page), page.document.dated, basis.house.style_sheet


def _to_pdf(source: tuple[str, tuple[Enclosure, ...], str, str]) -> bytes:
    html, enclosed, dated, own_style = source
    return to_pdf(html, enclosed, dated=dated, own_style=own_style)


def write_whole(path: Path, content: bytes) -> None:
    """Write a file so that no reader ever sees half of it."""
    path.parent.mkdir(parents=True, exist_ok=True)
    handle, temporary = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        os.chmod(temporary, 0o644)
        os.replace(temporary, path)
    except BaseException:
        os.unlink(temporary)
        raise
