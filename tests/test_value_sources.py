"""Where the values of a narrative come from: each number leads to the line that holds it, or names its calculation."""

from __future__ import annotations

import io
import re
from collections.abc import Iterator, Mapping
from pathlib import Path

import pytest

from loopdoc.cli import run
from loopdoc.documents.basis import Basis, Page, basis_of
from loopdoc.documents.handover.attest import Answer, Attestation, Attested
from loopdoc.documents.handover.enclosures import content, statement
from loopdoc.documents.handover.issue import KINDS, pdf_of
from loopdoc.documents.language import ENGLISH, LANGUAGES
from loopdoc.documents.language.tracing import tracing
from loopdoc.documents.narrative.narrative import narratives
from loopdoc.documents.rendering import render
from loopdoc.documents.revision.against import page_html
from loopdoc.documents.revision.change_bars import difference
from loopdoc.documents.site.site import Site
from loopdoc.documents.tracing import CLOSES, OPENS, PARTS, Ledger, Number, Source, Word, traced, unmarked
from loopdoc.documents.view import Paragraph, Section, Steps, Table
from loopdoc.documents.wording import Prose, Run, grouped, plain
from loopdoc.register.load import Loaded, load
from loopdoc.register.model import Loop, Process, known
from loopdoc.register.quantity import Quantity, Range

ROOT = Path(__file__).parents[1]
EXAMPLES = ("tarn-hollow", "tennessee-eastman")

NOT_OF_THE_PLANT = re.compile(
    r"NAMUR NE 43|IEC 61511|ISA-TR5\.9|3[.,]6.mA|21.mA"  # what standards say
    r"|\b0.% (?:of output|from) +still means|\b0.% (?:Stellgröße|von) +weiterhin"
    r"|(?:[Uu]nit|Teilanlage) \d+|-CN-\d+"  # names
)
"""Numbers of our own sentences that no register gives: of standards, of names, and what nought percent means."""
_NUMBER = re.compile(r"(?<![\w./-])[-−]?\d+(?:[\u202f]\d{3})*(?:[.,]\d+)?(?![\w/-])")


def read(name: str) -> Basis:
    loaded = load(ROOT / "examples" / name)
    assert isinstance(loaded, Loaded)
    return basis_of(loaded)


@pytest.fixture(scope="module")
def bases() -> dict[str, Basis]:
    return {name: read(name) for name in EXAMPLES}


def pages(basis: Basis, language: str = "en") -> list[Page]:
    return list(KINDS["narrative"](basis.in_language(LANGUAGES[language])))


def proses(sections: tuple[Section, ...]) -> Iterator[Prose]:
    for section in sections:
        yield section.tags
        for block in section.blocks:
            match block:
                case Paragraph():
                    yield block.prose
                case Steps():
                    yield from block.items
                case Table():
                    yield from (cell for row in block.rows for cell in row)
        yield from proses(section.sections)


# ---------------------------------------------------------------- every number of the demo


def numbers(text: str) -> list[str]:
    """Numbers of a text as the register writes them."""
    text = text.replace("–", "-")  # 4–20 mA is a word, not two numbers
    found = (number[0].replace("\u202f", "").replace("−", "-").replace(",", ".") for number in _NUMBER.finditer(text))
    return list(found)


def line_of(source: Source, files: Mapping[str, bytes]) -> str:
    assert source.place is not None
    return files[source.place.file].decode().split("\n")[source.place.line - 1]


def unsourced(basis: Basis, page: Page, files: Mapping[str, bytes]) -> list[str]:
    """Numbers of a narrative that are neither on the line to which they lead nor said to be calculated."""
    names = " ".join(
        known(part.service) or ""
        for section in (basis.plant.register.loops, basis.plant.register.instruments, basis.plant.register.functions)
        for part in section.values()
    )
    faults = []
    for prose in proses(page.view["sections"]):
        own = NOT_OF_THE_PLANT.sub("", "".join(map(shown, prose)))
        bare = [number for number in numbers(own) if not re.search(rf"\b{re.escape(number)}\b", names)]
        faults += [f"{number} in: {plain(prose)}" for number in bare]
        for source in (end for one in prose if one.source for end in one.source.ends or (one.source,)):
            if source.calculated:
                faults += [f"not said what: {source}"] if not source.what else []
            elif not on_its_line(source, files):
                faults.append(f"{source.text} is not on {source.place}: {line_of(source, files)}")
    return faults


def shown(piece: Run) -> str:
    """A run as it reads, without what is a tag, a code or a value that knows its source."""
    told_apart = piece.source or piece.kind in ("tag", "code")
    return f"{piece.before} {piece.after}" if told_apart else plain((piece,))


def on_its_line(source: Source, files: Mapping[str, bytes]) -> bool:
    line = line_of(source, files)
    day = re.fullmatch(r"(\d\d)\.(\d\d)\.(\d{4})", source.text)
    if day:
        return f"{day[3]}-{day[2]}-{day[1]}" in line
    held = numbers(line.replace("{", " ").replace("}", " ").replace("[", " ").replace("]", " "))
    return all(any(float(number) == float(other) for other in held) for number in numbers(source.text))


@pytest.mark.parametrize("language", ["en", "de"])
def test_every_number_of_the_demo_leads_to_its_line_or_is_said_to_be_calculated(
    bases: dict[str, Basis], language: str
) -> None:
    basis = bases["tarn-hollow"]
    for page in pages(basis, language):
        assert unsourced(basis, page, basis.sources) == []
        found = [one.source for prose in proses(page.view["sections"]) for one in prose if one.source]
        assert len([one for one in found if one.place]) > 150
        assert len([one for one in found if one.calculated]) > 15


def test_that_test_finds_a_wrong_line_and_a_number_without_a_source(bases: dict[str, Basis]) -> None:
    basis = bases["tarn-hollow"]
    page = pages(basis)[0]
    moved = {name: b"# one line more\n" + written for name, written in basis.sources.items()}
    assert len(unsourced(basis, page, moved)) > 100
    told = Section("1", "Told", "told", (Paragraph((Run("The limit is "), Run("98\u00a0°C", "value"), Run("."))),))
    bare = Page(page.folder, page.name, page.document, page.template, {"sections": (told,)})
    assert unsourced(basis, bare, basis.sources) == ["98 in: The limit is 98\u00a0°C."]


def test_words_of_closed_lists_lead_to_their_lines(bases: dict[str, Basis]) -> None:
    basis = bases["tarn-hollow"]
    (page,) = [page for page in pages(basis) if page.name == "unit-20"]
    words = {
        (one.source.tag, one.source.path): (one.text, line_of(one.source, basis.sources))
        for prose in proses(page.view["sections"])
        for one in prose
        if one.source and one.source.place
    }
    for at, word in {
        ("TIC-2014", ("controller", "modes", "normal")): "cascade",
        ("AIC-2015", ("alarms", "high", "priority")): "medium",
        ("FV-2031", ("fails",)): "open",
        ("AIC-2015", ("drawing",)): "D-20-102",
    }.items():
        printed, line = words[at]
        assert printed == word
        assert word in line


# ---------------------------------------------------------------- values that know their origin


def test_a_traced_register_is_the_same_and_knows_its_places(bases: dict[str, Basis]) -> None:
    for name in EXAMPLES:
        loaded = load(ROOT / "examples" / name)
        assert isinstance(loaded, Loaded)
        found = traced(loaded.register)
        assert found == loaded.register
        for tag, loop in found.loops.items():
            process = known(loop.process)
            for lag in process.lags if isinstance(process, Process) and isinstance(process.lags, tuple) else ():
                assert lag.origin is not None
                assert str(lag) in line_at(lag, bases[name].sources), tag


def line_at(value: Quantity, files: Mapping[str, bytes]) -> str:
    assert value.origin is not None
    place = value.origin.place()
    return files[place.file].decode().split("\n")[place.line - 1]


def test_a_number_of_a_text_is_found_on_its_own_line(tmp_path: Path) -> None:
    written = 'format: 1\ntexts:\n  "1":\n    overview: |\n      It runs.\n\n      At 40 degC it stops.\n'
    (tmp_path / "register.yaml").write_text(written, encoding="utf-8")
    loaded = load(tmp_path)
    assert isinstance(loaded, Loaded)
    ledger = Ledger(loaded.sources)
    told = tracing(ENGLISH, ledger).text(known(traced(loaded.register).texts["1"].overview) or "")
    assert unmarked(told).split() == ["It", "runs.", "At", "40", "°C", "it", "stops."]
    assert (ledger[0].text, ledger[0].place and ledger[0].place.line) == ("40\u00a0°C", 7)


@pytest.mark.parametrize("language", [*LANGUAGES.values()])
def test_a_tracing_catalogue_says_the_same_and_a_plain_one_marks_nothing(
    bases: dict[str, Basis], language: type
) -> None:
    loop: Loop = bases["tarn-hollow"].plant.register.loops["AIC-2015"]
    controller, measurement = known(loop.controller), known(loop.measurement)
    assert controller is not None
    assert measurement is not None
    setpoint, own = known(controller.setpoint), known(measurement.range)
    assert setpoint is not None
    assert isinstance(own, Range)
    assert isinstance(controller.gain, Number)
    ledger = Ledger(bases["tarn-hollow"].sources)
    for plainly, marked in zip(
        *(
            (one.value(own), one.band(setpoint.low, setpoint.high), one.number(controller.gain))
            for one in (language, tracing(language, ledger))  # type: ignore[arg-type]
        ),
        strict=True,
    ):
        assert OPENS not in plainly
        assert (marked[0], marked[-1]) == (OPENS, CLOSES)
        assert unmarked(marked) == plainly
    band = ledger[1]
    assert [one.path[-1] for one in band.ends] == ["low", "high"]


def test_what_reads_alike_is_grouped_though_it_comes_from_two_lines() -> None:
    first, second = f"closes it at {OPENS}1{PARTS}5 %{CLOSES}", f"closes it at {OPENS}2{PARTS}5 %{CLOSES}"
    assert grouped([(first, "IS-1"), (second, "IS-2")]) == {first: ("IS-1", "IS-2")}


def test_words_and_numbers_of_a_traced_register_stay_what_they_are(bases: dict[str, Basis]) -> None:
    controller = known(bases["tarn-hollow"].plant.register.loops["AIC-2015"].controller)
    assert controller is not None
    assert (controller.action, controller.gain) == ("direct", 0.75)
    assert isinstance(controller.action, Word)
    assert hash(controller.action) == hash("direct")


# ---------------------------------------------------------------- on the screen


def test_on_the_screen_each_value_is_a_link_to_its_line(bases: dict[str, Basis]) -> None:
    basis = bases["tarn-hollow"]
    page = pages(basis)[0]
    site = Site(basis, [("narrative", page)], ["html"])
    html = page_html(page, stylesheet="../style.css", site=site.frame("narrative", page))
    links = re.findall(r'<a class="\w+ source" href="\.\./register-text/([^"#]+)\.html#([^"]+)" title="([^"]+)">', html)
    assert len(links) > 150
    lines = {
        made.name: page_html(made, stylesheet="../style.css", site=frame)
        for made, frame in site.pages()
        if made.folder == "register-text"
    }
    for name, at, note in links:
        (text,) = re.findall(rf'<li value="\d+" id="{at}"[^>]*><code>(.*?)</code>', lines[name])
        assert text.strip()
        assert re.search(r", [^:]+: \S+\.yaml:\d+$", note), note
    assert 'title="low alarm limit, LIC-1010: units/10-feed-and-evaporation.yaml:' in html
    assert re.search(r'<span class="\w+" title="Gain margin, LIC-1010: calculated, frequency response', html)


def test_no_mark_is_left_on_any_page(bases: dict[str, Basis]) -> None:
    for basis in bases.values():
        for language in LANGUAGES:
            for page in pages(basis.with_appendix_of_sources(), language):
                html = render(page.template, document=page.document, stylesheet="../style.css", **page.view)
                assert not {OPENS, PARTS, CLOSES} & set(html)


# ---------------------------------------------------------------- on paper, on request


def test_the_appendix_lists_every_value_that_the_narrative_states(bases: dict[str, Basis]) -> None:
    basis = bases["tarn-hollow"].with_appendix_of_sources()
    for language, head in (("en", "Sources of the values"), ("de", "Herkunft der Werte")):
        for page in pages(basis, language):
            _, table = page.view["appendix"].blocks
            rows = {tuple(plain(cell) for cell in row) for row in table.rows}
            stated = [one.source for prose in proses(page.view["sections"]) for one in prose if one.source]
            for source in (end for one in stated for end in one.ends or (one,)):
                where = f"{source.place.file}:{source.place.line}" if source.place else source.calculated
                assert any((tag, value, at) == (source.tag, source.text, where) for tag, _, value, at in rows), source
            assert page.view["appendix"].title == head
            tags = [plain(row[0]) for row in table.rows]
            assert [tag for at, tag in enumerate(tags) if tag in tags[:at] and tags[at - 1] != tag] == []  # together
            html = render(page.template, document=page.document, stylesheet="", **page.view)
            assert f'<h2 id="sources">{head}</h2>' in html
            assert '<a href="#sources">' in html


def test_values_are_named_as_the_trade_names_them(bases: dict[str, Basis]) -> None:
    basis = bases["tarn-hollow"].with_appendix_of_sources()
    expected = {
        "en": ("trip limit of PT-2023A", "High setpoint limit", "Output of FIC-2011 on a trip", "Start-up, step 5",
               "Output range of PV-2021B"),
        "de": ("Auslösewert von PT-2023A", "Obere Sollwertgrenze", "Ausgang von FIC-2011 bei Auslösung",
               "Anfahren, Schritt 5", "Ausgangsbereich von PV-2021B"),
    }  # fmt: skip
    for language, names in expected.items():
        (page,) = [page for page in pages(basis, language) if page.name == "unit-20"]
        told = {plain(row[1]).casefold() for row in page.view["appendix"].blocks[1].rows}
        assert {name.casefold() for name in names} <= told
        assert not [name for name in told if re.search(r"\d reason|_", name)]


def test_without_the_request_there_is_no_appendix_and_what_is_said_is_the_same(bases: dict[str, Basis]) -> None:
    basis = bases["tarn-hollow"]
    plainly, with_it = pages(basis)[1], pages(basis.with_appendix_of_sources())[1]
    assert plainly.view["appendix"] is None
    assert content(plainly) == content(with_it)
    assert statement("narrative", plainly, basis.sources, None).appendix == ""
    assert statement("narrative", with_it, basis.sources, None).appendix == "sources"
    old, new = (
        render(page.template, document=page.document, stylesheet="", **page.view) for page in (plainly, with_it)
    )
    assert not difference(old, new).differs  # line numbers bear no bars


SMALL = """\
format: 1
site: {name: Fellside}
revision: {code: A, date: 2026-09-01, status: issued for review}
units:
  "10": {name: Tank, purpose: Keeps 20 m3 of water.}
loops:
  LI-1001:
    unit: "10"
    service: Tank level
    measurement: {transmitter: LT-1001, variable: level, range: 0 to 100 %, signal: 4-20 mA, on_fault: reads low}
    alarms:
      high: {limit: 90 %, deadband: 2 %, delay: 5 s, priority: low, cause: Filling, consequence: It overflows,
             response: Stop filling, time_to_respond: 10 min}
"""


def test_a_file_with_the_appendix_is_attested_as_it_was_issued(tmp_path: Path) -> None:
    (tmp_path / "register.yaml").write_text(SMALL, encoding="utf-8")
    loaded = load(tmp_path)
    assert isinstance(loaded, Loaded)
    basis = basis_of(loaded).in_language(LANGUAGES["de"]).with_appendix_of_sources()
    page = next(narratives(basis))
    made = pdf_of(basis, "narrative", page)
    (tmp_path / "register.yaml").write_text(f"# a remark\n{SMALL}", encoding="utf-8")
    moved = load(tmp_path)
    assert isinstance(moved, Loaded)
    found = Attestation(basis_of(moved)).attest(made)
    assert isinstance(found, Attested)
    # The lines are those of the register inside: that they stand elsewhere now makes no statement stale.
    assert (found.register_whole, found.pages_unaltered, found.current) == (Answer.YES,) * 3
    assert (found.statement.appendix, found.statement.language) == ("sources", "de")


def test_the_command_issues_the_appendix(tmp_path: Path) -> None:
    (tmp_path / "register.yaml").write_text(SMALL, encoding="utf-8")
    out = tmp_path / "out"
    arguments = ["issue", str(tmp_path), "--out", str(out), "--documents", "narrative", "--formats", "html"]
    for more, there in (([], False), (["--sources"], True)):
        assert run([*arguments, *more], io.StringIO(), io.StringIO()) == 0
        html = (out / "narratives/unit-10.html").read_text("utf-8")
        assert ('<h2 id="sources">' in html) is there
    line = r'<a class="word" href="\.\./register-text/register\.yaml\.html#line-12">register\.yaml:12</a>'
    assert re.search(line, html)
