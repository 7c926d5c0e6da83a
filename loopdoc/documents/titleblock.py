"""The title block of every document: the data fields of ISO 7200, the fingerprint and the state of the check."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date
from functools import lru_cache

from loopdoc import __version__
from loopdoc.documents.handover.house import NO_HOUSE, House
from loopdoc.documents.language import ENGLISH, Language
from loopdoc.documents.values import DASH
from loopdoc.engineering.pairing import Plant
from loopdoc.register.model import Hold, Revision, known
from loopdoc.rules.finding import CheckResult, Level

HOLDS_PERMITTED = ("issued for review", "issued for information")
"""Statuses at which a document may still carry holds."""

FINGERPRINT_DIGITS = 12
"""Digits of the register's fingerprint that a document prints."""

CAUTIONS = ENGLISH.cautions()
"""What every document says of itself, in English."""


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
    department: str = ""
    """Of this and the next three: empty where the register does not give it."""
    technical_reference: str = ""
    classification: str = ""
    distribution: str = ""
    bars: str = ""
    """What the bars beside the text mark, or that the document is new; empty where it bears none."""
    generator: str = f"loopdoc {__version__}"
    house: House = NO_HOUSE
    """The site's own templates and logo."""

    @property
    def further(self) -> tuple[tuple[tuple[str, str, int], ...], ...]:
        """Rows of the title block for what only some registers give: label, text and columns of six of each cell."""
        rows: list[tuple[tuple[str, str, int], ...]] = []
        if self.department or self.technical_reference or self.classification:
            rows.append(
                (
                    ("Responsible department", self.department or DASH, 2),
                    ("Technical reference", self.technical_reference or DASH, 2),
                    ("Classification", self.classification or DASH, 2),
                )
            )
        if self.distribution:
            rows.append((("Distribution", self.distribution, 6),))
        return tuple(rows)


def fingerprint(sources: Mapping[str, bytes]) -> str:
    """SHA-256 of the register: names and contents of its files in order of name, as hexadecimal digits."""
    return _digest(tuple(sorted(sources.items())))


@lru_cache(maxsize=8)  # every document asks, and a register may have many megabytes
def _digest(files: tuple[tuple[str, bytes], ...]) -> str:
    digest = hashlib.sha256()
    for name, written in files:
        content = written.replace(b"\r\n", b"\n")  # a checkout on another system is the same register
        digest.update(f"{name}\0{len(content)}\0".encode())
        digest.update(content)
    return digest.hexdigest()


def title_block(
    plant: Plant, result: CheckResult, sources: Mapping[str, bytes], language: Language = ENGLISH
) -> Document:
    """What the title blocks of all documents of a register share; their own fields are empty."""
    register = plant.register
    site = register.site
    revision = register.revision
    return Document(
        owner=language.shown(site.owner if site else None),
        site=language.shown(site.name if site else None),
        kind="",
        title="",
        supplementary_title="",
        number="",
        revision=_row(revision, language),
        history=tuple(
            _row(entry, language) for entry in ((revision,) if revision else ()) + tuple(reversed(register.history))
        ),
        dated=_iso_date(known(revision.date) if revision else None),
        fingerprint=fingerprint(sources)[:FINGERPRINT_DIGITS],
        check_state=check_state(plant, result, language),
        draft=draft_reason(plant, result, language),
        cautions=language.cautions(),
        language=language.code,
        department=_given(site.department if site else None, language),
        technical_reference=_given(site.technical_reference if site else None, language),
        classification=_given(site.classification if site else None, language),
        distribution=", ".join(revision.distribution) if revision else "",
    )


def check_state(plant: Plant, result: CheckResult, language: Language = ENGLISH) -> str:
    """The state of the register's check in one line."""
    return language.check_state(
        result.count(Level.ERROR),
        result.count(Level.WARNING),
        result.count(Level.NOTE),
        len(result.accepted),
        len(plant.register.holds),
        result.not_checked,
    )


def draft_reason(plant: Plant, result: CheckResult, language: Language = ENGLISH) -> str:
    """Why documents of this register are drafts; empty where they are not."""
    revision = plant.register.revision
    status = known(revision.status) if revision else None
    errors = result.count(Level.ERROR)
    if errors:
        return language.errors_open(errors)
    if plant.register.holds and status not in HOLDS_PERMITTED:
        return language.holds_open(language.term("status", status) if status else "")
    return ""


def _given(written: str | Hold | None, language: Language) -> str:
    """A value of the register, HOLD where it is held; empty where it is not given."""
    return "" if written is None else language.shown(written)


def _iso_date(written: str | None) -> str:
    try:
        return date.fromisoformat(written).isoformat() if written else ""
    except ValueError:
        return ""


def _row(revision: Revision | None, language: Language) -> RevisionRow:
    if revision is None:
        return RevisionRow(*(DASH,) * 7)
    status = revision.status
    return RevisionRow(
        language.shown(revision.code),
        language.date(language.shown(revision.date)),
        language.term("status", status) if isinstance(status, str) else language.shown(status),
        language.shown(revision.summary),
        language.shown(revision.prepared_by),
        language.shown(revision.checked_by),
        language.shown(revision.approved_by),
    )
