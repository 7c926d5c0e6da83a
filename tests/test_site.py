"""The site: every way leads somewhere, what the register says never becomes markup, the data of a plot is what was
calculated, the lines shown are the register's. What needs a browser is in test_site_browser.py.
"""

from __future__ import annotations

import base64
import hashlib
import json
import posixpath
import re
from html import unescape
from html.parser import HTMLParser
from pathlib import Path
from typing import Any
from urllib.parse import unquote

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from loopdoc.documents.basis import Basis, basis_of
from loopdoc.documents.handover.issue import issue
from loopdoc.documents.language import LANGUAGES
from loopdoc.documents.responses.responses import scheme_chains
from loopdoc.documents.site.plot import MOST_POINTS, TOLERANCE, plot_data, thinned
from loopdoc.documents.site.script import data_block, policy, script
from loopdoc.documents.whereabouts import document_name
from loopdoc.engineering.comparison import Comparison
from loopdoc.engineering.stages import measured_range
from loopdoc.register.load import Loaded, load
from loopdoc.register.starter import starter_files

HOSTILE = (
    """</script><script>alert(1)</script><!-- ]]> "><img src=x onerror=alert(2)> ' onfocus=alert(3) x=' """
    """javascript:alert(4) {{ 7*7 }} &lt; \\u003c"""
)
"""A text that would be markup in an element, in either sort of attribute, in a data block or in a drawing."""


def plant(folder: Path, **changes: str) -> Basis:
    """The starter's register with texts put in the place of others."""
    for name, content in starter_files().items():
        text = content.decode()
        for old, new in changes.items():
            text = text.replace(old, new)
        file = folder / name
        file.parent.mkdir(parents=True, exist_ok=True)
        file.write_text(text, encoding="utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded), loaded
    return basis_of(loaded)


class Elements(HTMLParser):
    """Start tags of a page with their attributes, the scripts with their text, and the visible text."""

    def __init__(self, file: Path) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str]]] = []
        self.scripts: list[tuple[dict[str, str], str]] = []
        self.text = ""
        self._script: dict[str, str] | None = None
        self.feed(file.read_text(encoding="utf-8"))

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        found = {name: value or "" for name, value in attrs}
        self.tags.append((tag, found))
        self._script = found if tag == "script" else None

    def handle_endtag(self, tag: str) -> None:
        self._script = None

    def handle_data(self, data: str) -> None:
        if self._script is not None:
            self.scripts.append((self._script, data))
        else:
            self.text += data

    def all(self, tag: str) -> list[dict[str, str]]:
        return [attributes for name, attributes in self.tags if name == tag]

    @property
    def ids(self) -> list[str]:
        return [attributes["id"] for _, attributes in self.tags if "id" in attributes]


def pages(out: Path) -> list[Path]:
    return sorted(out.rglob("*.html"))


@pytest.fixture(scope="module")
def basis(tmp_path_factory: pytest.TempPathFactory) -> Basis:
    """The starter with a fault, a hold and a deviation."""
    return plant(
        tmp_path_factory.mktemp("plant"),
        **{
            "channel: AI-1-02}": "channel: {hold: awaiting the cabinet layout}}",
            "      reset: 6 s\n": "      reset: 900 s\n",
            "texts:\n": "deviations:\n  - {rule: cascade-no-benefit, at: LIC-1001, reason: The tank is wide, "
            "approved_by: Process control, until: 2027-01-01}\ntexts:\n",
        },
    )


@pytest.fixture(scope="module")
def site(basis: Basis, tmp_path_factory: pytest.TempPathFactory) -> Path:
    out = tmp_path_factory.mktemp("issued")
    issue(basis, out, formats=["html"])
    return out


def assert_every_link_leads_somewhere(out: Path) -> int:
    found = {file: Elements(file) for file in pages(out)}
    count = 0
    for file, elements in found.items():
        assert len(set(elements.ids)) == len(elements.ids), (file, "an id stands twice")
        for attributes in (*elements.all("a"), *elements.all("link")):
            path, _, at = attributes["href"].partition("#")
            there = Path(posixpath.normpath(file.parent / unquote(path))) if path else file
            assert there.is_file(), (file, attributes)
            if at:
                assert unquote(at) in found[there].ids or at in found[there].ids, (file, attributes)
            count += 1
    return count


def test_every_link_leads_somewhere(site: Path) -> None:
    assert assert_every_link_leads_somewhere(site) > 200


@pytest.mark.parametrize("kinds", [["loop-sheet"], ["narrative", "cause-and-effect"], ["check-record"], ["response"]])
def test_an_issue_in_part_has_no_links_to_the_rest(basis: Basis, tmp_path: Path, kinds: list[str]) -> None:
    issue(basis, tmp_path, kinds=kinds, formats=["html"])
    assert assert_every_link_leads_somewhere(tmp_path) > 10


def test_from_every_page_the_index_is_one_link_away(site: Path) -> None:
    for file in set(pages(site)) - {site / "index.html"}:
        first = next(a for a in Elements(file).all("a") if a.get("class") != "skip")
        assert (file.parent / first["href"]).resolve() == (site / "index.html").resolve()


def test_the_index_leads_to_every_page(site: Path) -> None:
    reached = {
        (site / unquote(attributes["href"].partition("#")[0])).resolve()
        for attributes in Elements(site / "index.html").all("a")
    }
    assert {file.resolve() for file in pages(site)} <= reached | {(site / "index.html").resolve()}


def test_the_whole_index_stands_there_without_script(site: Path, basis: Basis) -> None:
    index = Elements(site / "index.html")
    for tag in (*basis.plant.register.loops, *basis.plant.register.interlocks):
        assert tag in index.text
    assert not any("hidden" in attributes for attributes in index.all("tr"))
    assert all("hidden" in attributes for attributes in index.all("search"))  # of no use without it


def test_the_documents_of_each_unit_stand_above_the_rows(site: Path) -> None:
    """All that are not of one loop, and the register's files, under the unit or the plant that they are of."""
    html = (site / "index.html").read_text(encoding="utf-8")
    block = re.search(r'<details class="of-units" open>(.*?)</details>', html, re.DOTALL)
    assert block
    of = {
        title: set(re.findall(r'href="([^"]*)"', links))
        for title, links in re.findall(r"<dt>(.*?)</dt><dd>(.*?)</dd>", block[1], re.DOTALL)
    }
    unit = {file.relative_to(site).as_posix() for file in pages(site) if file.name == "unit-10.html"}
    assert len(unit) >= 6
    assert of["Unit 10 Feed"] == unit
    assert of["Register"] == {"register-text/register.yaml.html", "register-text/units-10-feed.yaml.html"}
    assert set(of) == {"Unit 10 Feed", "Plant", "Register"}


def test_a_page_says_of_itself_where_the_reader_is_and_has_no_link_to_itself(site: Path) -> None:
    for file in pages(site):
        elements = Elements(file)
        assert [a for _, a in elements.tags if a.get("aria-current") == "page"], file
        own = [a["href"] for a in elements.all("a") if (file.parent / unquote(a["href"])).resolve() == file.resolve()]
        assert not own, file


# ---------------------------------------------------------------- a loop's page


def test_a_loop_leads_up_and_down_its_cascade_and_to_what_protects_it(site: Path) -> None:
    links = {a["href"] for a in Elements(site / "loop-sheets" / "FIC-1002.html").all("a")}
    assert {
        "LIC-1001.html", "../loop-sheets/LIC-1001.html", "../schemes/LIC-1001.html", "../responses/LIC-1001.html",
        "../check-records/FIC-1002.html", "../cause-and-effect/unit-10.html#tag-IS-1001",
        "../instrument-lists/unit-10.html#tag-FV-1002", "../narratives/unit-10.html#scheme-LIC-1001",
        "../tuning-schedules/unit-10.html#tag-FIC-1002", "../failure-effects/unit-10.html#tag-FIC-1002",
    } - links <= {"LIC-1001.html"}  # fmt: skip


def test_the_lines_of_a_loop_are_those_of_the_register(site: Path, basis: Basis) -> None:
    """All of them, each once, with its number, up to the next part."""
    written = basis.sources["units/10-feed.yaml"].decode().split("\n")
    html = (site / "loop-sheets" / "FIC-1002.html").read_text(encoding="utf-8")
    shown = re.findall(r'<li value="(\d+)"[^>]*><code>(.*?)</code>', html, re.DOTALL)
    numbers = [int(number) for number, _ in shown]
    first = written.index("  FIC-1002:") + 1
    last = written.index("  LI-1005:")
    valve = next(index for index, line in enumerate(written, 1) if line.startswith("  FV-1002:"))
    assert numbers == [*range(first, last + 1), valve, valve + 1]
    for number, text in shown:
        assert text == written[int(number) - 1].replace('"', "&#34;").replace("'", "&#39;")


def test_a_finding_leads_to_its_line_and_the_line_to_the_finding(site: Path, basis: Basis) -> None:
    html = (site / "loop-sheets" / "FIC-1002.html").read_text(encoding="utf-8")
    found = [finding for finding in basis.result.about({"FIC-1002"}) if finding.rule != "hold-open"]
    assert found
    for finding in found:
        place = finding.place
        line = re.search(rf'<a href="#(line-\d+-{place.line})">{re.escape(str(place))}</a>', html)
        assert line, finding
        assert re.search(rf'id="{line[1]}" class="marked"><code>.*?<a href="#point-\d+">{finding.rule}</a>', html)
    assert "awaiting the cabinet layout" in html.lower()


def test_the_pages_of_the_register_are_its_files_and_lead_to_what_tells_of_a_line(site: Path, basis: Basis) -> None:
    for name, content in basis.sources.items():
        file = site / "register-text" / f"{name.replace('/', '-')}.html"
        html = file.read_text(encoding="utf-8")
        shown = re.findall(r'<li value="(\d+)" id="line-(\d+)"[^>]*><code>(.*?)</code>', html, re.DOTALL)
        assert [(int(number), int(at), unescape(text)) for number, at, text in shown] == [
            (number, number, text) for number, text in enumerate(content.decode().splitlines(), 1)
        ]
    html = (site / "register-text" / "units-10-feed.yaml.html").read_text(encoding="utf-8")
    behind = dict(re.findall(r"<code>\s*([\w-]+):[^<]*</code> <a href=\"([^\"]*)\">", html))
    assert behind["FIC-1002"] == "../loop-sheets/FIC-1002.html"
    assert behind["FV-1002"] == "../instrument-lists/unit-10.html#tag-FV-1002"
    assert behind["IS-1001"] == "../cause-and-effect/unit-10.html#tag-IS-1001"
    for finding in (*basis.result.findings, *basis.result.accepted):
        if finding.rule != "hold-open":
            line = re.search(rf'id="line-{finding.place.line}"[^>]*>(.*)</li>', html)
            assert line
            assert re.search(rf'<a href="../findings.html#point-\d+">{finding.rule}</a>', line[1])


def test_every_finding_leads_to_the_line_of_its_file(site: Path, basis: Basis) -> None:
    html = (site / "findings.html").read_text(encoding="utf-8")
    for finding in (*basis.result.findings, *basis.result.accepted):
        place = finding.place
        page = f"register-text/{place.file.replace('/', '-')}.html#line-{place.line}"
        assert f'<a href="{page}">{place}</a>' in html, finding


def test_a_german_document_stands_in_a_german_frame(basis: Basis, tmp_path: Path) -> None:
    german = basis.in_language(LANGUAGES["de"])
    issue(german, tmp_path, kinds=["narrative", "loop-sheet", "alarm-schedule"], formats=["html"])
    sheet = Elements(tmp_path / "loop-sheets" / "FIC-1002.html").text
    narrative = Elements(tmp_path / "narratives" / "unit-10.html").text
    schedule = Elements(tmp_path / "alarm-schedules" / "unit-10.html").text
    for text in (sheet, narrative):
        assert "Zum Inhalt springen" in text
        assert "Übersicht New plant" in text
        assert "Befunde" in text
    for told in ("Geführt von", "Befunde, Abweichungen und HOLDs bei FIC-1002", "Zeilen des Registers"):
        assert told in sheet
    for english in ("Skip to", "Commanded by", "Lines of the register", "puts FIC-1002", "Deviation", "Not checked"):
        assert english not in sheet
    assert "Skip to the content" in schedule
    assert_every_link_leads_somewhere(tmp_path)


# ---------------------------------------------------------------- what the register says is no markup


@pytest.fixture(scope="module")
def attacked(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Hostile words wherever the register takes words of its own, with the rules and the documents that repeat them."""
    written = json.dumps(HOSTILE)
    out = tmp_path_factory.mktemp("attacked")
    issue(
        plant(
            tmp_path_factory.mktemp("plant"),
            **{
                "service: Feed tank level\n": f"service: {written}\n",
                "service: Feed to the plant": f"service: {written}",
                "service: Feed pump dry-running protection": f"service: {written}",
                "purpose: Delivers the flow that the level controller asks for.": f"purpose: {written}",
                "name: New plant": f"name: {written}",
                "name: Feed,": f"name: {written},",
                "source: design estimate}\n    hazard: none": (
                    f"source: {written}}}\n    hazard: none\n    disturbances: {{{written}: {{size: 2 m3/h}}}}"
                ),
                "channel: AI-1-02}": f"channel: {{hold: {written}}}}}",
                "cause: The tank runs empty.": f"cause: {written}",
            },
        ),
        out,
        formats=["html"],
    )
    return out


def strings(content: Any) -> str:
    """Every text inside a JSON document, one after the other."""
    if isinstance(content, dict):
        return "\n".join(map(strings, (*content, *content.values())))
    return "\n".join(map(strings, content)) if isinstance(content, list) else str(content)


def test_what_the_register_says_is_no_markup(attacked: Path) -> None:
    own = {str(script(name)) for name in ("site-index.js", "site-plot.js", "site-chart.js")}
    carried = 0
    for file in pages(attacked):
        elements = Elements(file)
        assert not elements.all("img"), file
        for tag, attributes in elements.tags:
            assert not [name for name in attributes if name.startswith("on")], (file, tag, attributes)
            assert not attributes.get("href", "").lower().startswith(("javascript", "data")), (file, attributes)
        for attributes, text in elements.scripts:
            if attributes.get("type") == "application/json":
                carried += HOSTILE in strings(json.loads(text))
            else:
                assert text in own, file
    assert carried >= 2, "the words did not reach the index and the plot, so that nothing was tested"


def test_the_policy_permits_our_own_script_and_no_other(attacked: Path) -> None:
    for file in pages(attacked):
        elements = Elements(file)
        said = next(m["content"] for m in elements.all("meta") if m.get("http-equiv") == "Content-Security-Policy")
        ours = [text for attributes, text in elements.scripts if "type" not in attributes]
        hashes = [base64.b64encode(hashlib.sha256(text.encode()).digest()).decode() for text in ours]
        allowed = re.search(r"script-src ([^;]*);", said)
        assert allowed
        assert allowed[1] == (" ".join(f"'sha256-{one}'" for one in hashes) or "'none'"), file
        assert said.startswith("default-src 'none'")
        assert len(ours) <= 1


@given(st.recursive(st.text() | st.integers() | st.none(), lambda inner: st.lists(inner, max_size=3), max_leaves=5))
def test_a_data_block_is_the_same_json_and_cannot_end_its_element(content: Any) -> None:
    text = str(data_block(content))
    assert json.loads(text) == content
    assert not re.search("[<>&\u2028\u2029]", text)


def test_a_script_that_would_end_its_element_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    script.cache_clear()
    monkeypatch.setattr("loopdoc.documents.site.script.template_text", lambda name: "const end = '</script>';")
    with pytest.raises(ValueError, match="would end its own element"):
        script("site-other.js")
    script.cache_clear()
    assert "'none'" in policy("")


@pytest.mark.parametrize(
    ("tag", "name"),
    [
        ("TIC-2014", "TIC-2014"),
        ("TIC 2014 (A)", "TIC 2014 (A)"),
        ("../../evil", "..%2F..%2Fevil"),
        ("a\\b:c*d?e", "a%5Cb%3Ac%2Ad%3Fe"),
        ("100%", "100%25"),
        ("Ä-1", "Ä-1"),
    ],
)
def test_a_document_of_an_odd_tag_stays_in_its_folder(tag: str, name: str) -> None:
    assert document_name(tag) == name


def test_long_tags_keep_names_of_their_own() -> None:
    long = [document_name("T" * 300 + str(number)) for number in range(3)]
    assert len(set(long)) == 3
    assert max(map(len, long)) < 100


def test_no_tag_writes_outside_the_folder(tmp_path: Path) -> None:
    basis = plant(tmp_path / "plant", **{"FIC-1002": "../../../FIC-1002"})
    issue(basis, tmp_path / "out" / "deep", formats=["html"])
    assert {path.name for path in tmp_path.iterdir()} == {"plant", "out"}
    assert {path.name for path in (tmp_path / "out").iterdir()} == {"deep"}
    assert (tmp_path / "out" / "deep" / "loop-sheets" / "..%2F..%2F..%2FFIC-1002.html").is_file()
    assert_every_link_leads_somewhere(tmp_path / "out" / "deep")


# ---------------------------------------------------------------- the data of a plot


def test_a_plot_shows_what_was_simulated(basis: Basis) -> None:
    """Each curve, joined by straight lines, passes every simulated value within what the screen resolves."""
    scheme = basis.plant.scheme_of("LIC-1001")
    (chain,) = scheme_chains(basis, scheme)
    compared = basis.comparison(chain)
    assert isinstance(compared, Comparison)
    data = plot_data(basis.plant, compared)
    own = measured_range(chain.chain.lead)
    assert len(data["upsets"]) == len(compared.scenarios)
    for upset, entry in zip(data["upsets"], compared.scenarios, strict=True):
        level, valve = upset["panels"]
        unit_s = {"h": 3600.0, "min": 60.0, "s": 1.0}[level["x"].rpartition(" ")[2] or valve["x"].rpartition(" ")[2]]
        assert entry.single is not None
        expected = {
            ("cascade", 0): (entry.tuned, own.low + entry.tuned.measurement_pct[-1] * own.span / 100.0),
            ("single loop", 0): (entry.single, own.low + entry.single.measurement_pct[-1] * own.span / 100.0),
            ("cascade", 1): (entry.tuned, entry.tuned.travel_pct),
            ("single loop", 1): (entry.single, entry.single.travel_pct),
        }
        for (name, row), (response, values) in expected.items():
            panel = upset["panels"][row]
            height = max(max(curve["y"]) - min(curve["y"]) for curve in panel["curves"])
            curve = next(one for one in panel["curves"] if one["name"] == name)
            drawn = np.interp(response.time_s / unit_s, curve["x"], curve["y"])
            # Twice the tolerance: the other half is the rounding of the written numbers, on steep pieces of time.
            assert np.max(np.abs(drawn - values)) <= 2 * TOLERANCE * height + 1e-9, (name, row)


@settings(max_examples=60)
@given(st.lists(st.floats(-1e3, 1e3), min_size=0, max_size=200), st.floats(0.01, 100.0))
def test_thinning_leaves_no_point_further_off_than_said(values: list[float], tolerance: float) -> None:
    x, y = np.arange(len(values), dtype=float), np.array(values, dtype=float)
    kept = thinned(x, y, tolerance)
    assert kept == sorted(set(kept))
    assert len(kept) <= MOST_POINTS + 1
    if len(values) > 2:
        assert np.max(np.abs(np.interp(x, x[kept], y[kept]) - y)) <= tolerance * (1 + 1e-9) + 1e-9
