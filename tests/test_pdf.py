"""Every issued PDF against PDF/A-3a and PDF/UA-1: by an independent validator, and by its structure."""

from __future__ import annotations

import io
import re
from collections.abc import Iterator
from pathlib import Path

import page as validator
import pypdf
import pytest
import weasyprint

from loopdoc.documents import pdf
from loopdoc.documents.basis import Basis, basis_of
from loopdoc.documents.handover.issue import KINDS, pdf_of
from loopdoc.register.load import Loaded, load

ROOT = Path(__file__).parent.parent
SLOW = ("narrative", "response", "failure-effects", "channel-list")
"""Kinds whose documents have many pages."""


def documents() -> Iterator[tuple[str, bytes]]:
    """Of both examples, the first two documents of each kind."""
    for example in ("tarn-hollow", "tennessee-eastman"):
        loaded = load(ROOT / "examples" / example)
        assert isinstance(loaded, Loaded)
        basis: Basis = basis_of(loaded)
        for kind, pages in KINDS.items():
            for _, page in zip(range(2), pages(basis), strict=False):
                yield f"{example} {page.folder}/{page.name}", pdf_of(basis, kind, page)


@pytest.fixture(scope="module")
def issued() -> dict[str, bytes]:
    return dict(documents())


def stream_lengths(content: bytes) -> Iterator[tuple[int, bytes]]:
    """Stated length of each stream, and what stands after so many bytes."""
    for found in re.finditer(rb"/Length (\d+)[^\0]{0,200}?>>\s*stream\r?\n", content):
        length = int(found[1])
        yield length, content[found.end() + length : found.end() + length + 12]


@pytest.mark.parametrize("profile", [validator.ValidationProfile.PDF_A_3A, validator.ValidationProfile.PDF_UA_1])
def test_the_validator_finds_nothing(issued: dict[str, bytes], profile: validator.ValidationProfile) -> None:
    for name, content in issued.items():
        report = validator.validate_pdf_bytes(content, profile=profile)
        # Version 0.11 counts a carriage return that ends compressed data as an end of line; the next test counts.
        failures = [one for one in report.failures if not one.rule_id.endswith("STREAM-LENGTH-001")]
        assert not failures, (name, [(one.rule_id, one.message) for one in failures])


def test_every_stream_is_as_long_as_it_states(issued: dict[str, bytes]) -> None:
    for name, content in issued.items():
        lengths = list(stream_lengths(content))
        assert len(lengths) > 5, name
        assert all(after.startswith(b"\nendstream") for _, after in lengths), name


def test_the_register_is_inside_once_as_source(issued: dict[str, bytes]) -> None:
    for name, content in issued.items():
        example = name.split()[0]
        folder = ROOT / "examples" / example
        catalog = pypdf.PdfReader(io.BytesIO(content)).trailer["/Root"]
        files = [entry.get_object() for entry in catalog["/AF"]]
        names = [file["/UF"] for file in files]
        assert len(names) == len(set(names))
        for file in files:
            assert file["/AFRelationship"] == "/Source"
            embedded = file["/EF"]["/F"].get_object()
            if file["/UF"].startswith("register/"):
                assert embedded["/Subtype"] == "/application/yaml"
                assert embedded.get_data() == (folder / file["/UF"].removeprefix("register/")).read_bytes()
            else:
                assert (file["/UF"], embedded["/Subtype"]) == ("loopdoc.json", "/application/json")
        # Results of loop checks stand beside the register and are no part of it.
        held = {path.relative_to(folder).as_posix() for path in folder.rglob("*.yaml")}
        held = {name for name in held if not name.startswith("records/")}
        assert {name.removeprefix("register/") for name in names} - {"loopdoc.json"} == held


def test_narratives_have_bookmarks(issued: dict[str, bytes]) -> None:
    narratives = [content for name, content in issued.items() if "narratives/" in name]
    for content in narratives:
        outline = pypdf.PdfReader(io.BytesIO(content)).outline
        assert len([entry for entry in outline if not isinstance(entry, list)]) >= 1


def test_pages_read_as_xml_are_those_that_a_parser_of_html_reads(monkeypatch: pytest.MonkeyPatch) -> None:
    """The same bytes either way, for a page of each kind."""
    loaded = load(ROOT / "examples" / "tarn-hollow")
    assert isinstance(loaded, Loaded)
    basis = basis_of(loaded)
    quick = {kind: page for kind in KINDS if kind not in SLOW for page in list(KINDS[kind](basis))[:1]}
    read_as_xml = {kind: pdf_of(basis, kind, page) for kind, page in quick.items()}

    monkeypatch.setattr(pdf, "_tree", lambda html: weasyprint.HTML(string=html).etree_element)
    for kind, page in quick.items():
        assert pdf_of(basis, kind, page) == read_as_xml[kind], kind


@pytest.mark.parametrize("body", ["<p>one<p>two", "<p>a&nbsp;b</p>", "<table><tr><td>1<td>2</table>"])
def test_a_page_that_is_no_xml_is_set_all_the_same(body: str) -> None:
    page = f"<!doctype html><html lang=en><head><title>t</title></head><body>{body}</body></html>"
    assert pdf.to_pdf(page).startswith(b"%PDF")


def test_a_text_that_fits_its_line_but_for_its_last_space_is_not_broken_after_its_first_word() -> None:
    """The text and its width are those of a cell in which WeasyPrint 70 set the word `at` on a line of its own."""
    text = "A bypass is permitted for the test of one transmitter at a time, by key switch, for <b>8&#160;h</b> at most"
    style = "width: 33.375mm; padding: .4mm .9mm; border: .25pt solid; font: 8pt 'loopdoc narrow'"
    head = '<!doctype html><html lang="en"><head><title>-</title></head><body>'
    content = pdf.to_pdf(f'{head}<p style="{style}">{text}</p></body></html>')
    told = pypdf.PdfReader(io.BytesIO(content)).pages[0].extract_text()
    assert told.split() == re.sub("<.*?>|&#160;", " ", text).split()
    assert "at" not in [line.strip() for line in told.splitlines()]
