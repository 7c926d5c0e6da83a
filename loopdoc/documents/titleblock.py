"""The title block of every document: the data fields of ISO 7200, the fingerprint and the state of the check."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date

from loopdoc import __version__
from loopdoc.documents.values import DASH, shown
from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import Revision, known
from loopdoc.rules.finding import CheckResult, Level

HOLDS_PERMITTED = ("issued for review", "issued for information")
"""Statuses at which a document may still carry holds."""

CAUTIONS = (
    "This document supports and does not replace review by licensed or competent persons. Local codes, the hazard "
    "study and the manufacturer's data govern. Safety instrumented functions need their own lifecycle (IEC 61511). "
    "Try tuning changes only under supervision."
)


@dataclass(frozen=True, slots=True)
class RevisionRow:
    """One line of the revision table."""

    code: str
    date: str
    status: str
    summary: str
    prepared_by: str
    checked_by: str
    approved_by: str


@dataclass(frozen=True, slots=True)
class Document:
    """What the title block says of one document; every field is text ready to print."""

    owner: str
    site: str
    kind: str
    """Document type in words, such as `Control narrative`."""
    title: str
    supplementary_title: str
    number: str
    revision: RevisionRow
    history: tuple[RevisionRow, ...]
    """Latest revision first."""
    dated: str
    """ISO date of the revision; empty where the register gives none. The date of the file, not that of the clock."""
    fingerprint: str
    """First 12 hexadecimal digits of the register's SHA-256."""
    check_state: str
    draft: str
    """Why DRAFT stands across the page; empty where it does not."""
    cautions: str = CAUTIONS
    language: str = "en"
    bars: str = ""
    """What the bars beside the text mark, or that the document is new; empty where it bears none."""
    generator: str = f"loopdoc {__version__}"


def fingerprint(sources: Mapping[str, bytes]) -> str:
    """SHA-256 of the register: names and contents of its files in order of name, as hexadecimal digits."""
    digest = hashlib.sha256()
    for name in sorted(sources):
        content = sources[name].replace(b"\r\n", b"\n")  # a checkout on another system is the same register
        digest.update(f"{name}\0{len(content)}\0".encode())
        digest.update(content)
    return digest.hexdigest()


def document(
    plant: Plant,
    result: CheckResult,
    sources: Mapping[str, bytes],
    *,
    kind: str,
    code: str,
    title: str,
    supplementary_title: str,
    unit: str,
    serial: str,
) -> Document:
    """The title block of a document; ``code`` is its kind in the document number, such as `CN`."""
    register = plant.register
    site = register.site
    revision = register.revision
    return Document(
        owner=shown(site.owner if site else None),
        site=shown(site.name if site else None),
        kind=kind,
        title=title,
        supplementary_title=supplementary_title,
        number=register.numbering.replace("{unit}", unit).replace("{kind}", code).replace("{serial}", serial),
        revision=_row(revision),
        history=tuple(_row(entry) for entry in ((revision,) if revision else ()) + tuple(reversed(register.history))),
        dated=_iso_date(known(revision.date) if revision else None),
        fingerprint=fingerprint(sources)[:12],
        check_state=check_state(plant, result),
        draft=draft_reason(plant, result),
    )


def check_state(plant: Plant, result: CheckResult) -> str:
    """The state of the register's check in one line."""

    def counted(number: int, one: str, many: str) -> str:
        return f"{number} {one if number == 1 else many}"

    return ", ".join(
        (
            counted(result.count(Level.ERROR), "error", "errors"),
            counted(result.count(Level.WARNING), "warning", "warnings"),
            counted(result.count(Level.NOTE), "note", "notes"),
            counted(len(result.accepted), "deviation", "deviations"),
            counted(len(plant.register.holds), "hold", "holds"),
            counted(result.not_checked, "check not made", "checks not made"),
        )
    )


def draft_reason(plant: Plant, result: CheckResult) -> str:
    """Why documents of this register are drafts; empty where they are not."""
    revision = plant.register.revision
    status = known(revision.status) if revision else None
    errors = result.count(Level.ERROR)
    if errors:
        return f"{errors} {'error' if errors == 1 else 'errors'} open"
    if plant.register.holds and status not in HOLDS_PERMITTED:
        return f"holds open at status {status or 'unknown'}"
    return ""


def _iso_date(written: str | None) -> str:
    try:
        return date.fromisoformat(written).isoformat() if written else ""
    except ValueError:
        return ""


def _row(revision: Revision | None) -> RevisionRow:
    if revision is None:
        return RevisionRow(*(DASH,) * 7)
    return RevisionRow(
        shown(revision.code),
        shown(revision.date),
        shown(revision.status),
        shown(revision.summary),
        shown(revision.prepared_by),
        shown(revision.checked_by),
        shown(revision.approved_by),
    )
