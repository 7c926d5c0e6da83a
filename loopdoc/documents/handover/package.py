"""One folder and one archive to hand over: documents, index, register and check, with the fingerprint of every file.

The same register and version give the same bytes, the archive included. Fingerprints stand in a list that
`sha256sum --check` reads, so that the package can be verified in thirty years without loopdoc.
"""

from __future__ import annotations

import csv
import hashlib
import io
import os
import tempfile
import zipfile
from collections.abc import Callable, Collection, Mapping, Sequence
from dataclasses import asdict, dataclass
from datetime import date
from pathlib import Path

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.handover.enclosures import HOUSE_FOLDER, PACKAGE_INDEX_KIND
from loopdoc.documents.handover.issue import FORMATS, KINDS, STYLE_SHEET, issue, pages_of, pdf_of, write_whole
from loopdoc.documents.page_fit import foot
from loopdoc.documents.revision.against import page_html
from loopdoc.documents.site.places import path_of
from loopdoc.documents.values import shown
from loopdoc.register.records import FOLDER as RECORDS_FOLDER
from loopdoc.register.records import records_text

INDEX_NAME = "document-index"
SUMS_NAME = "SHA256SUMS"
"""The list of every other file with its fingerprint; a folder that holds it is a package."""
REGISTER_FOLDER = "register"
_EARLIEST = (1980, 1, 1)
"""The first day that an archive can bear."""


@dataclass(frozen=True, slots=True)
class IndexRow:
    """One file of one document, as document control enters it."""

    number: str
    title: str
    supplementary_title: str
    kind: str
    revision: str
    date: str
    status: str
    draft: str
    sheets: str
    """Pages of the PDF; a dash for HTML."""
    file: str
    sha256: str


@dataclass(frozen=True, slots=True)
class Packaged:
    """What was written."""

    folder: Path
    archive: Path
    documents: int
    files: int


def package(
    basis: Basis,
    target: Path,
    *,
    kinds: Collection[str] = tuple(KINDS),
    formats: Collection[str] = FORMATS,
    jobs: int = 1,
    progress: Callable[[int, int], None] = lambda done, total: None,
) -> Packaged:
    """Write the package as the folder ``target`` and the archive of the same name beside it, whole or not at all.

    A former package of that name is replaced; anything else is left alone.

    Raises
    ------
    PdfError
        PDF is wanted and cannot be made.
    OSError
        The place cannot be written to, or holds something else.
    """
    folder = target.with_suffix("") if target.suffix == ".zip" else target
    archive = folder.with_name(f"{folder.name}.zip")
    _refuse_other(folder, archive)
    folder.parent.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory(dir=folder.parent, prefix=f".{folder.name}.") as work:
        made = Path(work) / folder.name
        issued = issue(basis, made, kinds=kinds, formats=formats, jobs=jobs, progress=progress)
        for name, content in _register_files(basis).items():
            write_whole(made / name, content)
        _write_index(basis, made, kinds, formats)
        files = _file_names(made)
        sums = "".join(f"{_sha256((made / name).read_bytes())}  {name}\n" for name in files)
        write_whole(made / SUMS_NAME, sums.encode())
        packed = Path(work) / archive.name
        write_archive(made, packed, dated=basis_date(basis))
        if folder.exists():
            os.replace(folder, Path(work) / "former")
        os.replace(made, folder)
        os.replace(packed, archive)
    return Packaged(folder, archive, issued.documents, len(files) + 1)


def _refuse_other(folder: Path, archive: Path) -> None:
    taken = folder.exists() and not (folder / SUMS_NAME).is_file() and (not folder.is_dir() or any(folder.iterdir()))
    if taken or archive.is_dir():
        raise FileExistsError(17, "is there already and is no package; name another", str(folder))


def basis_date(basis: Basis) -> str:
    """ISO date of the register's revision; empty where it has none."""
    return basis.document(kind="", code="", title="", supplementary_title="", unit="", serial="").dated


def _register_files(basis: Basis) -> dict[str, bytes]:
    files = {f"{REGISTER_FOLDER}/{name}": content for name, content in basis.sources.items()}
    files |= {f"{REGISTER_FOLDER}/{HOUSE_FOLDER}{name}": content for name, content in basis.house.files.items()}
    for tag, records in basis.records.items():
        files[f"{REGISTER_FOLDER}/{RECORDS_FOLDER}/{tag}.yaml"] = records_text(records).encode()
    return files


def _write_index(basis: Basis, made: Path, kinds: Collection[str], formats: Collection[str]) -> None:
    """The index for document control: to read as a document, and to take in as a table."""
    rows = _rows(basis, made, kinds, formats)
    write_whole(made / f"{INDEX_NAME}.csv", as_csv(rows).encode("utf-8-sig"))
    page = _index_page(basis, rows)
    if "html" in formats:
        html = page_html(page, stylesheet=STYLE_SHEET)
        write_whole(made / f"{INDEX_NAME}.html", html.encode())
    if "pdf" in formats:
        write_whole(made / f"{INDEX_NAME}.pdf", pdf_of(basis, PACKAGE_INDEX_KIND, page))


def _rows(basis: Basis, made: Path, kinds: Collection[str], formats: Collection[str]) -> list[IndexRow]:
    rows = []
    for page in (page for kind in KINDS if kind in kinds for page in pages_of(basis, kind)):
        document = page.document
        for form in (form for form in FORMATS if form in formats):
            name = f"{path_of(page)}.{form}"
            content = (made / name).read_bytes()
            rows.append(
                IndexRow(
                    document.number, document.title, document.supplementary_title, document.kind,
                    document.revision.code, document.revision.date, document.revision.status, document.draft,
                    str(_sheets(content)) if form == "pdf" else shown(None), name, _sha256(content),
                )
            )  # fmt: skip
    return rows


def _index_page(basis: Basis, rows: Sequence[IndexRow]) -> Page:
    site = basis.plant.register.site
    document = basis.document(
        kind="Document index",
        code="DI",
        title="Index of the documents handed over",
        supplementary_title=shown(site.name if site else None),
        unit="00",
        serial="002",
    )
    groups: dict[str, list[IndexRow]] = {}
    for row in rows:
        groups.setdefault(row.kind, []).append(row)
    listed = [
        {"title": kind, "rows": [{**asdict(row), "sha256": (row.sha256[:32], row.sha256[32:])} for row in group]}
        for kind, group in groups.items()
    ]
    view = {
        "groups": listed,
        "sums": SUMS_NAME,
        "table": f"{INDEX_NAME}.csv",
        "register": f"{REGISTER_FOLDER}/",
        "foot": foot(document),
    }
    return Page("", INDEX_NAME, document, "document-index.html", view)


def as_csv(rows: Sequence[IndexRow]) -> str:
    """The rows with a head; no cell that a spreadsheet would take for a formula."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\r\n")  # RFC 4180
    writer.writerow(
        ("document number", "title", "supplementary title", "document type", "revision", "date of issue", "status",
         "draft", "sheets", "file", "SHA-256")
    )  # fmt: skip
    for row in rows:
        writer.writerow([f"'{cell}" if cell.startswith(("=", "+", "-", "@", "\t", "\r")) else cell
                         for cell in asdict(row).values()])  # fmt: skip
    return out.getvalue()


def write_archive(folder: Path, archive: Path, *, dated: str) -> None:
    """Pack a folder so that the same files give the same bytes: names in order, every date that of the revision."""
    day = date.fromisoformat(dated) if dated else date(*_EARLIEST)
    moment = (*max((day.year, day.month, day.day), _EARLIEST), 0, 0, 0)
    with zipfile.ZipFile(archive, "w") as packed:
        for name in _file_names(folder):
            entry = zipfile.ZipInfo(f"{folder.name}/{name}", date_time=moment)
            entry.create_system = 3  # Unix, on every system
            entry.external_attr = 0o100644 << 16
            # A PDF is pressed already.
            entry.compress_type = zipfile.ZIP_STORED if name.endswith(".pdf") else zipfile.ZIP_DEFLATED
            packed.writestr(entry, (folder / name).read_bytes())


def _file_names(folder: Path) -> list[str]:
    return sorted(path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file())


def _sha256(content: bytes) -> str:
    return hashlib.sha256(content).hexdigest()


def _sheets(content: bytes) -> int:
    import pypdf

    return len(pypdf.PdfReader(io.BytesIO(content)).pages)


def read_sums(content: bytes) -> Mapping[str, str]:
    """Fingerprint by name, as the list of a package states them; lines that are none are passed over."""
    pairs = (line.split("  ", 1) for line in content.decode("utf-8", "replace").splitlines())
    return {pair[1]: pair[0].lower() for pair in pairs if len(pair) == 2}
