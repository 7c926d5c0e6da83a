"""Attesting issued files: whole, altered, damaged, stale, and none of ours."""

from __future__ import annotations

import io
import json
from pathlib import Path

import pypdf
import pytest

from loopdoc.cli import run
from loopdoc.documents.basis import Basis, basis_of
from loopdoc.documents.handover.attest import Answer, Attestation, Attested, NotIssued
from loopdoc.documents.handover.issue import issue
from loopdoc.register.load import Loaded, load
from loopdoc.register.starter import starter_files


def read(folder: Path) -> Basis:
    loaded = load(folder)
    assert isinstance(loaded, Loaded)
    return basis_of(loaded)


def write(folder: Path, old: str = "", new: str = "") -> Path:
    changed = 0
    for name, content in starter_files().items():
        file = folder / name
        file.parent.mkdir(parents=True, exist_ok=True)
        text = content.decode()
        changed += old in text
        file.write_text(text.replace(old, new) if old else text, encoding="utf-8")
    assert changed
    return folder


@pytest.fixture(scope="module")
def sheets(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The loop sheets of the starter, as issued."""
    out = tmp_path_factory.mktemp("out")
    issue(read(write(tmp_path_factory.mktemp("plant"))), out, kinds=["loop-sheet"], formats=["pdf"])
    return out / "loop-sheets"


def attested(content: bytes, register: Basis | None = None) -> Attested:
    found = Attestation(register).attest(content)
    assert isinstance(found, Attested), found
    return found


def answers(found: Attested) -> tuple[str, str, str]:
    return found.register_whole.value, found.pages_unaltered.value, found.current.value


def test_a_file_as_issued_is_what_its_register_says(sheets: Path, tmp_path: Path) -> None:
    content = (sheets / "FIC-1002.pdf").read_bytes()
    assert answers(attested(content)) == ("yes", "yes", "not checked")
    found = attested(content, read(write(tmp_path)))
    assert answers(found) == ("yes", "yes", "yes")
    assert found.remarks == ()
    assert (found.statement.kind, found.statement.name) == ("loop-sheet", "FIC-1002")


def rewritten(content: bytes, *, replace: tuple[str, bytes] | None = None) -> bytes:
    """The file opened and saved by another program, an enclosed file exchanged where asked."""
    writer = pypdf.PdfWriter(clone_from=io.BytesIO(content))
    if replace:
        for entry in writer.root_object["/AF"]:
            specification = entry.get_object()
            if specification["/UF"] == replace[0]:
                embedded = specification["/EF"]["/F"].get_object()
                embedded.set_data(replace[1])
    out = io.BytesIO()
    writer.write(out)
    return out.getvalue()


def test_one_changed_byte_is_an_alteration(sheets: Path) -> None:
    content = (sheets / "FIC-1002.pdf").read_bytes()
    found = attested(content + b"\n")
    assert answers(found) == ("yes", "no", "not checked")
    assert "altered or saved anew" in found.remarks[0]
    assert answers(attested(rewritten(content))) == ("yes", "no", "not checked")


def test_an_exchanged_register_is_not_the_one_stated(sheets: Path) -> None:
    content = (sheets / "FIC-1002.pdf").read_bytes()
    name, text = next((name, text) for name, text in starter_files().items() if b"FIC-1002:" in text)
    found = attested(rewritten(content, replace=(f"register/{name}", text + b"# one line more\n")))
    assert found.register_whole is Answer.NO
    assert found.pages_unaltered is Answer.NO


def test_a_change_elsewhere_leaves_a_document_current(sheets: Path, tmp_path: Path) -> None:
    changed = read(write(tmp_path, "Feed tank level", "Feed tank number one level"))
    assert attested((sheets / "LIC-1001.pdf").read_bytes(), changed).current is Answer.NO
    touched = read(write(tmp_path / "touched", "loops:", "# a remark\nloops:"))
    assert attested((sheets / "LIC-1001.pdf").read_bytes(), touched).current is Answer.YES


def test_a_stale_document_says_at_which_revision_it_stopped(sheets: Path, tmp_path: Path) -> None:
    later = read(write(tmp_path, "code: A", "code: B"))
    found = attested((sheets / "LIC-1001.pdf").read_bytes(), later)
    assert found.current is Answer.NO
    assert found.remarks == ("stale: the register is at revision B, the document at A",)


def test_a_document_of_a_loop_that_is_gone_is_told(sheets: Path, tmp_path: Path) -> None:
    gone = read(write(tmp_path, "LIC-1001", "LIC-1005"))
    found = attested((sheets / "LIC-1001.pdf").read_bytes(), gone)
    assert found.remarks == ("the register no longer has what this document tells of",)


@pytest.mark.parametrize("damage", [b"", b"hello", b"%PDF-1.7\n", b"%PDF-1.7\n1 0 obj\n<</Type/Catalog>>\nendobj\n"])
def test_a_file_that_is_none_of_ours_is_refused(damage: bytes) -> None:
    assert isinstance(Attestation().attest(damage), NotIssued)


def test_a_file_cut_short_is_never_attested(sheets: Path) -> None:
    content = (sheets / "FIC-1002.pdf").read_bytes()
    for end in range(200, len(content), len(content) // 12):
        found = Attestation().attest(content[:end])
        assert isinstance(found, NotIssued) or found.pages_unaltered is Answer.NO


def test_the_command_answers_with_text_json_and_exit_code(sheets: Path, tmp_path: Path) -> None:
    register = str(write(tmp_path / "plant"))
    out, err = io.StringIO(), io.StringIO()
    assert run(["attest", str(sheets / "FIC-1002.pdf"), register], out, err) == 0, err.getvalue()
    assert "yes          the register inside is whole" in out.getvalue()
    later = str(write(tmp_path / "later", "code: A", "code: B"))
    out = io.StringIO()
    assert run(["attest", str(sheets), later, "--format", "json"], out, err) == 1
    files = json.loads(out.getvalue())["files"]
    assert {file["current"] for file in files} == {"no"}
    assert len(files) == len(list(sheets.glob("*.pdf")))
    strange = tmp_path / "strange.pdf"
    strange.write_bytes(b"hello")
    assert run(["attest", str(strange)], io.StringIO(), err) == 2
    assert run(["attest", str(tmp_path / "missing.pdf")], io.StringIO(), err) == 2
    assert run(["attest", register], io.StringIO(), err) == 2
