"""Is this PDF what the register says? Read back from what every issued PDF carries inside.

A file that still has the bytes which its own register gives has been altered nowhere, on no page. Files bear no
signature: who made one from a register of his own cannot be told from its owner. That is said with every answer.
"""

from __future__ import annotations

import io
import json
import logging
from collections.abc import Callable, Mapping
from dataclasses import MISSING, dataclass, fields
from enum import Enum

import pypdf
from pypdf.errors import PyPdfError

from loopdoc import __version__
from loopdoc.documents.basis import Basis, basis_of
from loopdoc.documents.handover.enclosures import (
    AGAINST_FOLDER,
    HOUSE_FOLDER,
    PACKAGE_INDEX_KIND,
    REGISTER_FOLDER,
    RESULTS_KIND,
    RESULTS_NAME,
    SOURCES,
    STATEMENT_NAME,
    Statement,
    house_fingerprint,
    statement,
)
from loopdoc.documents.handover.house import HouseError, house_of
from loopdoc.documents.handover.issue import KINDS, pages_of, pdf_of
from loopdoc.documents.language import ENGLISH, LANGUAGES
from loopdoc.documents.titleblock import fingerprint
from loopdoc.register.files import HeldFiles
from loopdoc.register.load import Loaded, Unreadable, load_files
from loopdoc.register.records import LoopRecord, by_tag, read_records

# What a damaged file lacks is answered here, and need not be told on the terminal as well.
logging.getLogger("pypdf").setLevel(logging.CRITICAL)

MAX_BYTES = 200_000_000
"""A larger file is not one of ours."""


@dataclass(frozen=True, slots=True)
class Enclosed:
    """What a PDF carries inside."""

    statement: Statement
    sources: Mapping[str, bytes]
    """Files of the register by name, the root file first."""
    results: bytes
    """Results of loop checks that the document shows; empty where there are none."""
    against: Mapping[str, bytes]
    """Files of the earlier register whose differences bear bars; empty where there are none."""
    house: Mapping[str, bytes]
    """Files that the site put in the place of ours."""


@dataclass(frozen=True, slots=True)
class NotIssued:
    """Why a file is none that loopdoc issued, or can no longer be read as one."""

    reason: str


class Answer(Enum):
    """Answer to one question about a file."""

    YES = "yes"
    NO = "no"
    NOT_CHECKED = "not checked"


@dataclass(frozen=True, slots=True)
class Attested:
    """What was found out about one file."""

    statement: Statement
    register_whole: Answer
    pages_unaltered: Answer
    current: Answer
    """Whether the register given says what the document says; not checked without a register."""
    remarks: tuple[str, ...]
    """The reasons, one for each answer that is not yes."""

    @property
    def doubted(self) -> bool:
        """Whether any question was answered with no."""
        return Answer.NO in (self.register_whole, self.pages_unaltered, self.current)


def enclosed_in(content: bytes) -> Enclosed | NotIssued:
    """What an issued PDF carries."""
    try:
        attachments = pypdf.PdfReader(io.BytesIO(content)).attachments
        files = {name: attachments[name][0] for name in attachments}
        told = json.loads(files.pop(STATEMENT_NAME))
        # What a later version states besides may be missing.
        stated = [field.name for field in fields(Statement) if field.name in told or field.default is MISSING]
        found = Statement(**{name: str(told[name]) for name in stated})
    # A file from outside may be damaged anywhere, and the reader has an exception for each way.
    except (PyPdfError, KeyError, ValueError, TypeError, AttributeError, IndexError, RecursionError, OSError):
        return NotIssued("it is no PDF that loopdoc issued, or is damaged: it states no register")
    sources, against, house = (
        {name.removeprefix(folder): body for name, body in files.items() if name.startswith(folder)}
        for folder in (REGISTER_FOLDER, AGAINST_FOLDER, HOUSE_FOLDER)
    )
    if found.root not in sources:
        return NotIssued(f"the register's file `{found.root}` is missing in it")
    if found.against in against:
        against = {found.against: against.pop(found.against), **against}
    sources = {found.root: sources.pop(found.root), **sources}
    return Enclosed(found, sources, files.get(RESULTS_NAME, b""), against, house)


class Attestation:
    """Attests files, one register and its pages being worked out once for all of them."""

    def __init__(self, register: Basis | None = None) -> None:
        self._register = register
        self._current: dict[tuple[str, str], dict[tuple[str, str], Statement]] = {}
        self._issued_from: dict[tuple[str, str, str, bytes, str, str], Basis | Unreadable] = {}

    def attest(self, content: bytes) -> Attested | NotIssued:
        """Find out about one file.

        Raises
        ------
        PdfError
            PDF cannot be made on this machine, so that pages cannot be compared.
        """
        if len(content) > MAX_BYTES:
            return NotIssued(f"it is larger than {MAX_BYTES // 1_000_000} MB")
        enclosed = enclosed_in(content)
        if isinstance(enclosed, NotIssued):
            return enclosed
        questions: tuple[Callable[[Enclosed, bytes], tuple[Answer, str]], ...] = (
            self._register_whole,
            self._pages_unaltered,
            self._still_current,
        )
        answers = [ask(enclosed, content) for ask in questions]
        (whole, _), (unaltered, _), (current, _) = answers
        return Attested(enclosed.statement, whole, unaltered, current, tuple(why for _, why in answers if why))

    def _register_whole(self, enclosed: Enclosed, content: bytes) -> tuple[Answer, str]:
        if house_fingerprint(enclosed.house) != enclosed.statement.house:
            return Answer.NO, "the site's own templates inside are not those whose fingerprint the document states"
        if fingerprint(enclosed.sources) == enclosed.statement.fingerprint:
            return Answer.YES, ""
        return Answer.NO, "the register inside is not the one whose fingerprint the document states"

    def _pages_unaltered(self, enclosed: Enclosed, content: bytes) -> tuple[Answer, str]:
        told = enclosed.statement
        if told.program != f"loopdoc {__version__}":
            reason = f"it was issued by {told.program}, and only that version makes the same bytes again"
            return Answer.NOT_CHECKED, reason
        if told.kind == PACKAGE_INDEX_KIND:
            return Answer.NOT_CHECKED, "it lists the files of a package: attest the package's folder or archive"
        try:
            return self._same_again(enclosed, content)
        except HouseError as error:
            return Answer.NO, f"the site's own files inside cannot be used: {error}"

    def _same_again(self, enclosed: Enclosed, content: bytes) -> tuple[Answer, str]:
        told = enclosed.statement
        basis = self._basis_of(enclosed)
        if isinstance(basis, Unreadable):
            return Answer.NO, "the register inside cannot be read"
        pages = pages_of(basis, told.kind) if told.kind in KINDS else ()
        page = next((page for page in pages if (page.folder, page.name) == (told.folder, told.name)), None)
        if page is None:
            return Answer.NO, "the register inside gives no such document"
        if pdf_of(basis, told.kind, page) == content:
            return Answer.YES, ""
        return Answer.NO, "its bytes are not those that the register inside gives: it was altered or saved anew"

    def _basis_of(self, enclosed: Enclosed) -> Basis | Unreadable:
        sources, against, house = map(fingerprint, (enclosed.sources, enclosed.against, enclosed.house))
        told = enclosed.statement
        key = (sources, against, house, enclosed.results, told.language, told.appendix)
        if key not in self._issued_from:
            self._issued_from[key] = self._read_anew(enclosed)
        return self._issued_from[key]

    def _read_anew(self, enclosed: Enclosed) -> Basis | Unreadable:
        told = enclosed.statement
        house = house_of(enclosed.house)
        read = read_records(enclosed.results, RESULTS_NAME) if enclosed.results else ()
        records = by_tag(record for record in read if isinstance(record, LoopRecord))
        before: Basis | None = None
        if told.against:
            loaded = load_files(HeldFiles(enclosed.against), told.against) if told.against in enclosed.against else None
            if not isinstance(loaded, Loaded):
                return loaded or Unreadable((), {})
            before = basis_of(loaded, records, house=house)
        now = load_files(HeldFiles(enclosed.sources), told.root)
        if isinstance(now, Unreadable):
            return now
        issued = basis_of(now, records, against=before, house=house)
        if told.appendix == SOURCES:
            issued = issued.with_appendix_of_sources()
        return issued.in_language(LANGUAGES.get(told.language, ENGLISH))

    def _still_current(self, enclosed: Enclosed, content: bytes) -> tuple[Answer, str]:
        told = enclosed.statement
        if self._register is None:
            return Answer.NOT_CHECKED, ""
        if told.kind == PACKAGE_INDEX_KIND:
            same = fingerprint(self._register.sources) == told.fingerprint
            return (Answer.YES, "") if same else (Answer.NO, "stale: the register is no longer that of the package")
        now = self._statements(self._register, told.kind, told.language).get((told.folder, told.name))
        if now is None:
            return Answer.NO, "the register no longer has what this document tells of"
        same_house = now.house == told.house
        same_register = now.fingerprint == told.fingerprint
        # What a check record shows of the last results is no part of the register.
        if now.content == told.content or (same_register and same_house and told.kind != RESULTS_KIND):
            return Answer.YES, ""
        if told.program != now.program:
            return Answer.NOT_CHECKED, f"it was issued by {told.program}, which may word the same facts otherwise"
        if same_register and not same_house:
            return Answer.NO, "stale: the site's own templates or words have changed since"
        if same_register:
            return Answer.NO, "stale: results of loop checks have been added or changed since"
        if now.revision != told.revision:
            return Answer.NO, f"stale: the register is at revision {now.revision}, the document at {told.revision}"
        return Answer.NO, f"stale: the register has changed since, still at revision {now.revision}"

    def _statements(self, register: Basis, kind: str, language: str) -> Mapping[tuple[str, str], Statement]:
        """What the register given would state in every document of a kind."""
        key = kind, language
        if key not in self._current:
            spoken = register.in_language(LANGUAGES.get(language, ENGLISH))
            self._current[key] = {
                (page.folder, page.name): statement(kind, page, register.sources, None)
                for page in (KINDS[kind](spoken) if kind in KINDS else ())
            }
        return self._current[key]
