"""The package to hand over: the same bytes twice, whole or not at all, and verified file by file."""

from __future__ import annotations

import csv
import hashlib
import io
import json
import zipfile
from pathlib import Path

import pypdf
import pytest

from loopdoc.cli import run
from loopdoc.documents.handover import package as package_module
from loopdoc.documents.handover.attest import NotIssued
from loopdoc.documents.handover.attest_package import Verified, open_package, verify
from loopdoc.documents.handover.package import IndexRow, as_csv
from loopdoc.register.starter import starter_files

KINDS = ("loop-sheet", "channel-list")


def write(folder: Path) -> Path:
    for name, content in starter_files().items():
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).write_bytes(content)
    return folder


def issue(register: Path, target: Path, *more: str) -> tuple[int, str]:
    err = io.StringIO()
    return run(["issue", str(register), "--package", str(target), "--jobs", "1", *more], io.StringIO(), err), (
        err.getvalue()
    )


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Folder of a package of the starter."""
    folder = tmp_path_factory.mktemp("out") / "handover"
    register = write(tmp_path_factory.mktemp("plant"))
    assert issue(register, folder, "--documents", *KINDS)[0] == 0
    return folder


def test_the_package_holds_documents_index_and_register(made: Path) -> None:
    names = {path.relative_to(made).as_posix() for path in made.rglob("*") if path.is_file()}
    assert {"document-index.pdf", "document-index.html", "document-index.csv", "SHA256SUMS", "index.html"} <= names
    for name, content in starter_files().items():
        assert (made / "register" / name).read_bytes() == content
    with zipfile.ZipFile(f"{made}.zip") as packed:
        assert packed.testzip() is None
        assert packed.namelist() == [f"{made.name}/{name}" for name in sorted(names)]
        assert {entry.date_time[:3] for entry in packed.infolist()} == {(2026, 1, 1)}  # the starter's revision
        for name in names:
            assert packed.read(f"{made.name}/{name}") == (made / name).read_bytes()


def test_the_list_is_one_that_sha256sum_reads(made: Path) -> None:
    lines = (made / "SHA256SUMS").read_text(encoding="utf-8").splitlines()
    listed = dict(reversed(line.split("  ", 1)) for line in lines)
    files = {path.relative_to(made).as_posix(): path for path in made.rglob("*") if path.is_file()}
    assert set(listed) == set(files) - {"SHA256SUMS"}
    for name, digest in listed.items():
        assert hashlib.sha256(files[name].read_bytes()).hexdigest() == digest


def test_the_index_tells_number_revision_sheets_and_fingerprint(made: Path) -> None:
    rows = list(csv.DictReader(io.StringIO((made / "document-index.csv").read_text(encoding="utf-8-sig"))))
    documents = {row["file"]: row for row in rows}
    pdfs = {path.relative_to(made).as_posix() for path in made.rglob("*.pdf")} - {"document-index.pdf"}
    assert {name for name in documents if name.endswith(".pdf")} == pdfs
    for name in pdfs:
        content = (made / name).read_bytes()
        row = documents[name]
        assert row["SHA-256"] == hashlib.sha256(content).hexdigest()
        assert row["sheets"] == str(len(pypdf.PdfReader(io.BytesIO(content)).pages))
        assert row["revision"] == "A"
    text = "".join(page.extract_text() for page in pypdf.PdfReader(made / "document-index.pdf").pages)
    for row in rows:
        assert row["document number"] in text
        assert row["SHA-256"][:32] in text


def test_the_same_register_gives_the_same_archive(made: Path, tmp_path: Path) -> None:
    assert issue(write(tmp_path / "plant"), tmp_path / "handover.zip", "--documents", *KINDS)[0] == 0
    assert (tmp_path / "handover.zip").read_bytes() == Path(f"{made}.zip").read_bytes()
    # A second time at the same place: the former package is replaced, and nothing is left beside it.
    assert issue(tmp_path / "plant", tmp_path / "handover", "--documents", *KINDS, "--formats", "html")[0] == 0
    assert not list((tmp_path / "handover").rglob("*.pdf"))
    assert {path.name for path in tmp_path.iterdir()} == {"plant", "handover", "handover.zip"}


def test_a_failure_leaves_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def full(*_: object, **__: object) -> None:
        raise OSError(28, "No space left on device", "handover.zip")

    monkeypatch.setattr(package_module, "write_archive", full)
    status, told = issue(write(tmp_path / "plant"), tmp_path / "handover", "--formats", "html", "--documents", *KINDS)
    assert (status, told.splitlines()[-1]) == (2, "loopdoc: No space left on device: handover.zip")
    assert {path.name for path in tmp_path.iterdir()} == {"plant"}


def test_what_is_no_package_is_left_alone(tmp_path: Path) -> None:
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine" / "letter.txt").write_text("kept")
    status, told = issue(write(tmp_path / "plant"), tmp_path / "mine", "--formats", "html")
    assert status == 2
    assert "is no package" in told
    assert (tmp_path / "mine" / "letter.txt").read_text() == "kept"


def verified(path: Path) -> Verified:
    opened = open_package(path)
    assert not isinstance(opened, NotIssued), opened
    found = verify(opened)
    assert isinstance(found, Verified), found
    return found


def repacked(made: Path, target: Path, change: dict[str, bytes | None]) -> Path:
    """The archive with files altered, added or (None) left out."""
    with zipfile.ZipFile(f"{made}.zip") as packed:
        contents: dict[str, bytes | None] = {name: packed.read(name) for name in packed.namelist()}
    contents.update({f"{made.name}/{name}": content for name, content in change.items()})
    with zipfile.ZipFile(target, "w") as packed:
        for name, content in contents.items():
            if content is not None:
                packed.writestr(name, content)
    return target


def test_an_archive_tells_what_is_missing_altered_or_added(made: Path, tmp_path: Path) -> None:
    assert not verified(made).doubted
    assert not verified(Path(f"{made}.zip")).doubted
    changed = {"register/register.yaml": b"format: 1\n", "loop-sheets/LIC-1001.pdf": None, "note.txt": b"hello"}
    found = verified(repacked(made, tmp_path / "changed.zip", changed))
    assert found.altered == ("register/register.yaml",)
    assert found.missing == ("loop-sheets/LIC-1001.pdf",)
    assert found.unlisted == ("note.txt",)
    # A byte flipped in the archive itself, in the middle of a stored PDF.
    content = bytearray(Path(f"{made}.zip").read_bytes())
    place = content.index(b"%PDF") + 2_000
    content[place] ^= 0xFF
    (tmp_path / "flipped.zip").write_bytes(content)
    assert len(verified(tmp_path / "flipped.zip").altered) == 1


@pytest.mark.parametrize("content", [b"", b"hello", b"PK\x05\x06" + bytes(18)])
def test_an_archive_of_somebody_else_is_refused(tmp_path: Path, content: bytes) -> None:
    strange = tmp_path / "strange.zip"
    strange.write_bytes(content)
    out = io.StringIO()
    assert run(["attest", str(strange)], out, io.StringIO()) == 2
    assert "strange.zip: it " in out.getvalue()


def test_the_command_attests_the_package_and_each_document_in_it(made: Path, tmp_path: Path) -> None:
    out, err = io.StringIO(), io.StringIO()
    assert run(["attest", f"{made}.zip", "--format", "json"], out, err) == 0, err.getvalue()
    told = json.loads(out.getvalue())
    assert [(one["missing"], one["altered"], one["unlisted"]) for one in told["packages"]] == [([], [], [])]
    pages = {one["kind"]: one["pages_unaltered"] for one in told["files"]}
    assert pages == {"loop-sheet": "yes", "channel-list": "yes", "document-index": "not checked"}
    changed = repacked(made, tmp_path / "changed.zip", {"style.css": b""})
    out = io.StringIO()
    assert run(["attest", str(changed)], out, err) == 1
    assert "altered      style.css" in out.getvalue()


def test_no_cell_of_the_table_is_a_formula() -> None:
    row = IndexRow("=1+1", "@SUM(A1)", "+1", "-1", "A", "", "", "", "1", "x.pdf", "00")
    cells = next(csv.reader(io.StringIO(as_csv([row]).splitlines()[1])))
    assert cells[:5] == ["'=1+1", "'@SUM(A1)", "'+1", "'-1", "A"]
