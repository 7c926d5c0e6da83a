"""The site in a headless Chromium, opened from disk: its scripts, its console, its accessibility.

A page is driven by a script that the test puts behind the page's own, permitted by its hash, so that the policy of
the page stays in force. The audit is axe-core's where npm can fetch it; our own structural checks run always.
"""

from __future__ import annotations

import base64
import hashlib
import json
import re
import shutil
import subprocess
import tarfile
from dataclasses import dataclass
from functools import cache
from html import unescape
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import pytest

from loopdoc.documents.basis import Basis, basis_of
from loopdoc.documents.handover.issue import issue
from loopdoc.register.load import Loaded, load
from loopdoc.register.starter import starter_files

CHROMIUM = next(filter(None, map(shutil.which, ("chromium", "chromium-browser", "google-chrome"))), None)
pytestmark = pytest.mark.skipif(CHROMIUM is None, reason="no chromium is installed")

FLAGS = (
    "--headless=new", "--no-sandbox", "--disable-gpu", "--disable-background-networking", "--disable-component-update",
    "--disable-sync", "--no-first-run", "--disable-extensions", "--host-resolver-rules=MAP * ~NOTFOUND",
    "--enable-logging=stderr", "--v=0", "--virtual-time-budget=20000",
)  # fmt: skip
AXE = "axe-core@4.10.3"
REPORT = """
const report = (found) => {
  const place = document.createElement("pre");
  place.id = "reported";
  place.textContent = JSON.stringify(found);
  document.body.append(place);
};
"""
KINDS_OF_PAGE = (
    "index", "findings", "loop-sheets/FIC-1002", "schemes/LIC-1001", "responses/LIC-1001", "cause-and-effect/unit-10",
    "narratives/unit-10", "check-records/FIC-1002", "alarm-schedules/unit-10", "failure-effects/unit-10",
    "register-text/units-10-feed.yaml",
)  # fmt: skip
"""A page of every sort."""


@dataclass(frozen=True)
class Shown:
    """What came of a page."""

    document: str
    console: tuple[str, ...]
    """What was written to the browser's console."""
    found: Any
    """What the driver reported; None without a driver."""


class Browser:
    """Opens pages, each in a browser of its own that shares a profile."""

    def __init__(self, profile: Path) -> None:
        self._profile = profile

    def show(
        self, page: Path, *, driver: str = "", fragment: str = "", size: str = "1366,900", flags: tuple[str, ...] = ()
    ) -> Shown:
        """Open a page, with a driver that calls ``report(value)`` once and a fragment behind its address."""
        opened = page
        if driver:
            opened = page.with_name(f"driven-{page.name}")
            opened.write_text(_driven(page.read_text(encoding="utf-8"), REPORT + driver), encoding="utf-8")
        address = opened.resolve().as_uri() + (f"#{fragment}" if fragment else "")
        assert CHROMIUM is not None
        run = subprocess.run(
            [
                CHROMIUM, *FLAGS, *flags, f"--window-size={size}", f"--user-data-dir={self._profile}", "--dump-dom",
                address,
            ],
            capture_output=True, text=True, encoding="utf-8", timeout=120, check=True,
        )  # fmt: skip
        if driver:
            opened.unlink()
        console = tuple(line for line in run.stderr.splitlines() if ":CONSOLE" in line)
        reported = re.search(r'<pre id="reported">(.*?)</pre>', run.stdout, re.DOTALL)
        assert bool(reported) is bool(driver), (page, console)
        return Shown(run.stdout, console, json.loads(unescape(reported[1])) if reported else None)


def _driven(html: str, script: str) -> str:
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    html, count = re.subn(r"script-src (?:&#39;none&#39;)?", f"script-src 'sha256-{digest}' ", html, count=1)
    assert count == 1
    return html.replace("</body>", f"<script>{script}</script></body>")


@pytest.fixture(scope="module")
def browser(tmp_path_factory: pytest.TempPathFactory) -> Browser:
    return Browser(tmp_path_factory.mktemp("profile"))


def basis_with(folder: Path, **changes: str) -> Basis:
    for name, content in starter_files().items():
        text = content.decode()
        for old, new in changes.items():
            assert old in text or name == "register.yaml", old
            text = text.replace(old, new)
        file = folder / name
        file.parent.mkdir(parents=True, exist_ok=True)
        file.write_text(text, encoding="utf-8")
    loaded = load(folder)
    assert isinstance(loaded, Loaded), loaded
    return basis_of(loaded)


@pytest.fixture(scope="module")
def site(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The starter with a hold, two findings, one of them accepted, and words that would be markup."""
    basis = basis_with(
        tmp_path_factory.mktemp("plant"),
        **{
            "channel: AI-1-02}": "channel: {hold: awaiting the cabinet layout}}",
            "      reset: 6 s\n": "      reset: 900 s\n",
            "service: Feed pump,": "service: '<img src=x onerror=alert(1)><b>Feed</b> pump',",
            "texts:\n": "deviations:\n  - {rule: cascade-no-benefit, at: LIC-1001, reason: The tank is wide, "
            "approved_by: Process control, until: 2027-01-01}\ntexts:\n",
        },
    )
    out = tmp_path_factory.mktemp("issued")
    issue(basis, out, formats=["html"])
    return out


@pytest.mark.parametrize("name", KINDS_OF_PAGE)
def test_no_page_writes_to_the_console_or_is_wider_than_a_phone(site: Path, browser: Browser, name: str) -> None:
    """No error, no warning, no refusal by the policy; nothing hostile became an element; what is wide scrolls alone."""
    driver = """
const root = document.documentElement;
report([root.scrollWidth, root.clientWidth,
  [...document.querySelectorAll("body *")]
    .filter((e) => e.getBoundingClientRect().right > root.clientWidth + 1 && !e.closest("svg"))
    .slice(0, 4).map((e) => e.tagName + "." + e.className)]);
"""
    shown = browser.show(site / f"{name}.html", driver=driver, size="390,900")
    assert shown.console == ()
    assert "<img" not in shown.document
    assert "<b>Feed</b>" not in shown.document
    wide, screen, which = shown.found
    assert screen < 520  # a window may have a least width
    assert wide <= screen, which


# ---------------------------------------------------------------- index

_LISTED = """
const form = document.querySelector(".finder form");
const listed = () =>
  [...document.querySelectorAll("#rows tbody tr:not([hidden]) th")].map((cell) => cell.textContent);
const set = (name, value) => {
  form.elements[name].value = value;
  form.dispatchEvent(new Event("input", { bubbles: true }));
};
const later = () => new Promise((done) => setTimeout(done, 400));
const said = () => form.querySelector(".found").textContent;
"""


def test_search_and_filters_of_the_index(site: Path, browser: Browser) -> None:
    shown = browser.show(
        site / "index.html",
        driver=_LISTED
        + """
(async () => {
  const found = { visible: !document.querySelector(".finder").hidden, all: listed().length };
  const ask = async (name, fields) => {
    form.reset();
    await later();
    for (const [field, value] of Object.entries(fields)) set(field, value);
    await later();
    found[name] = listed();
    found[name + " said"] = said();
  };
  await ask("tag", { find: "fic1002" });
  form.requestSubmit();
  found.focus = document.activeElement.textContent;
  await ask("service", { find: "tank LEVEL pump" });
  await ask("finding", { find: "cascade-too-slow" });
  found.match = document.querySelector(".match").textContent;
  await ask("reason of a hold", { find: "cabinet layout" });
  await ask("element", { find: "FV-1002" });
  await ask("nothing", { find: "no such thing" });
  await ask("open", { state: "open" });
  await ask("accepted", { state: "accepted" });
  await ask("hold", { state: "hold" });
  await ask("rule", { state: "cascade-no-benefit" });
  await ask("interlock", { kind: "Interlock" });
  await ask("unit and kind", { unit: "10", kind: "Controller" });
  found.hash = location.hash;
  await ask("again", {});
  report(found);
})();
""",
    )
    found = shown.found
    assert shown.console == ()
    assert found["visible"]
    assert found["tag"] == ["FIC-1002", "IS-1001", "LIC-1001"]  # itself, what acts on it, what mentions it
    assert found["focus"] == "FIC-1002"
    assert found["service"] == ["LI-1005"]
    assert found["finding"] == ["FIC-1002"]
    assert "cascade-too-slow" in found["match"]
    assert found["reason of a hold"] == ["FIC-1002"]
    assert found["element"][0] == "FIC-1002"
    assert found["nothing"] == []
    assert found["nothing said"].startswith("0 of ")
    assert found["open"] == ["FIC-1002"]
    assert found["accepted"] in (["LIC-1001"], ["LIC-1001", "FIC-1002"])  # and whatever else the deviation touches
    assert found["hold"] == ["FIC-1002"]
    assert found["rule"][0] == "LIC-1001"
    assert found["interlock"] == ["IS-1001"]
    assert found["unit and kind"] == ["LIC-1001", "FIC-1002"]
    assert found["hash"] == "#unit=10&kind=Controller"
    assert len(found["again"]) == found["all"]


def test_filters_of_the_findings(site: Path, browser: Browser) -> None:
    found = browser.show(
        site / "findings.html",
        driver=_LISTED
        + """
(async () => {
  const cells = () => [...document.querySelectorAll("#rows tbody tr:not([hidden])")]
    .map((row) => [row.cells[0].textContent, row.cells[1].textContent, row.cells[2].textContent]);
  const found = { all: cells(), units: [...form.elements.unit.options].map((option) => option.value) };
  const ask = async (name, fields) => {
    form.reset();
    await later();
    for (const [field, value] of Object.entries(fields)) set(field, value);
    await later();
    found[name] = cells();
  };
  await ask("kind", { kind: "deviation" });
  await ask("rule", { rule: "cascade-too-slow" });
  await ask("unit", { unit: "10" });
  await ask("both", { kind: "hold", rule: "cascade-too-slow" });
  await ask("word", { find: "cabinet" });
  report(found);
})();
""",
    ).found
    assert {kind for _, kind, _ in found["all"]} >= {"deviation", "hold"}
    assert found["units"] == ["", "10"]
    assert found["kind"] == [one for one in found["all"] if one[1] == "deviation"]
    assert found["rule"] == [one for one in found["all"] if one[2] == "cascade-too-slow"] != []
    assert found["unit"] == found["all"]
    assert found["both"] == []
    assert [one[1] for one in found["word"]] == ["hold"]


def test_what_has_the_focus_is_outlined(site: Path, browser: Browser) -> None:
    """Links, fields and buttons, as a keyboard reaches them; the first is the way to the content."""
    for name in ("index", "loop-sheets/FIC-1002", "responses/LIC-1001", "cause-and-effect/unit-10"):
        bare, first, count = browser.show(
            site / f"{name}.html",
            driver="""
const reached = [...document.querySelectorAll("a[href], button, input, select, summary, [tabindex='0']")]
  .filter((one) => one.checkVisibility() && !one.closest(".more[hidden]"));
const bare = reached.filter((one) => {
  one.focus({ focusVisible: true });
  const style = getComputedStyle(one);
  return document.activeElement !== one || style.outlineStyle === "none" || parseFloat(style.outlineWidth) < 1.5;
});
report([bare.map((one) => one.outerHTML.slice(0, 100)), reached[0].getAttribute("href"), reached.length]);
""",
        ).found
        assert bare == [], name
        assert first == "#content"
        assert count > 10


def test_an_address_carries_its_filter(site: Path, browser: Browser) -> None:
    """As the way from a page to its unit does."""
    driver = _LISTED + "report([listed(), form.elements.unit.value, form.elements.find.value]);"
    fragment = "unit=10&find=tank%20level%20pump&strange=1&%E0%A4%A=2"
    shown = browser.show(site / "index.html", driver=driver, fragment=fragment)
    assert shown.found == [["LI-1005"], "10", "tank level pump"]


def test_the_table_sorts_by_each_column_and_back(site: Path, browser: Browser) -> None:
    shown = browser.show(
        site / "index.html",
        driver=_LISTED
        + """
const head = (name) => [...document.querySelectorAll("#rows thead th")].find((cell) => cell.textContent === name);
const press = (name) => {
  head(name).querySelector("button").click();
  return [listed(), head(name).getAttribute("aria-sort")];
};
const before = listed();
report({ before, up: press("Tag or number"), down: press("Tag or number"), back: press("Tag or number"),
         open: press("Open findings"), plain: head("Documents").querySelector("button") === null });
""",
    ).found
    up, direction = shown["up"]
    assert direction == "ascending"
    assert up.index("FIC-1002") < up.index("IS-1001") < up.index("LI-1005") < up.index("LIC-1001")
    assert shown["down"] == [list(reversed(up)), "descending"]
    assert shown["back"] == [shown["before"], None]
    assert shown["open"][0][0] == "FIC-1002"
    assert shown["plain"]


def test_a_long_list_is_shown_in_parts(site: Path, browser: Browser) -> None:
    """The same page with its rows repeated: what the index of a large plant does."""
    html = (site / "index.html").read_text(encoding="utf-8")
    body = re.search(r"<tbody>(.*?)</tbody>", html, re.DOTALL)
    assert body
    rows = re.sub(r' id="[^"]*"', "", body[1])
    large = site / "large.html"
    large.write_text(html.replace(body[1], rows * 100), encoding="utf-8")
    found = browser.show(
        large,
        driver=_LISTED
        + """
const more = document.querySelector(".more");
const found = { all: document.querySelectorAll("#rows tbody tr").length, first: listed().length, said: said() };
more.querySelector("button").click();
found.second = listed().length;
set("kind", "Interlock");
setTimeout(() => { found.last = listed().length; found.more = !more.hidden; report(found); }, 500);
""",
    ).found
    large.unlink()
    assert found["all"] > 1000
    assert found["first"] == 200
    assert found["second"] == 400
    assert found["said"] == f"{found['all']} of {found['all']} rows, the first 200 shown"
    assert found["last"] == 100
    assert not found["more"]


# ---------------------------------------------------------------- plot and chart


def test_the_plot_is_read_with_keys_and_compares(site: Path, browser: Browser) -> None:
    page = site / "responses" / "LIC-1001.html"
    found = browser.show(
        page,
        driver="""
const plot = document.querySelector(".plot");
const range = plot.querySelector("input[type=range]");
const values = () => Object.fromEntries([...plot.querySelectorAll("tbody tr")]
  .map((row) => [row.cells[0].textContent, row.cells[1].textContent]));
const at = (step) => {
  range.value = step;
  range.dispatchEvent(new Event("input", { bubbles: true }));
  return values();
};
const found = { first: at("0"), last: at("500"), spoken: range.getAttribute("aria-valuetext"),
  label: document.querySelector(`label[for="${range.id}"]`).textContent,
  fallback: getComputedStyle(plot.nextElementSibling).display,
  curves: plot.querySelectorAll(".curve").length, upsets: plot.querySelectorAll("input[type=radio]").length };
const box = [...plot.querySelectorAll("input[type=checkbox]")].find((one) => one.value === "single loop");
box.click();
found.alone = values();
found.fewer = plot.querySelectorAll(".curve").length;
plot.querySelectorAll("input[type=radio]")[1].click();
found.name = plot.querySelector("svg").getAttribute("aria-label");
const drawing = plot.querySelector("svg").getBoundingClientRect();
const middle = { bubbles: true, clientX: drawing.left + drawing.width / 2, clientY: drawing.top + 20 };
plot.querySelector("svg").dispatchEvent(new PointerEvent("pointermove", middle));
found.pointed = Number(range.value);
report(found);
""",
    )
    assert found.console == ()
    told = found.found
    block = re.search(r'<script type="application/json" id="site-data">(.*?)</script>', page.read_text("utf-8"))
    assert block
    data = json.loads(block[1])
    step = data[0]["upsets"][0]["panels"][0]
    for name in ("cascade", "single loop"):
        curve = next(one for one in step["curves"] if one["name"] == name)
        for where, index in (("first", 0), ("last", -1)):
            # Printed to the digits of the panel.
            assert abs(float(told[where][name]) - curve["y"][index]) <= 0.51 * 10.0 ** -step["digits"]
    assert "cascade" in told["spoken"]
    assert told["label"] == "Time"
    assert told["fallback"] == "none"
    assert told["upsets"] == len(data[0]["upsets"])
    assert set(told["alone"]) == {"setpoint", "cascade"}
    assert told["fewer"] == told["curves"] - 2
    assert told["name"].startswith(data[0]["upsets"][1]["name"])
    assert 180 <= told["pointed"] <= 320  # the middle of the drawing, apart from the axis on its left


def test_without_script_the_drawing_stands_there(site: Path) -> None:
    html = (site / "responses" / "LIC-1001.html").read_text(encoding="utf-8")
    assert re.search(r'<figure tabindex="0" data-plot="0"><svg role="img"', html)
    assert 'class="plot"' not in html


def test_the_chart_lights_up_a_row_and_a_column(site: Path, browser: Browser) -> None:
    found = browser.show(
        site / "cause-and-effect" / "unit-10.html",
        driver="""
const table = document.querySelector(".chart");
const stop = table.querySelector("[tabindex='0']");
const lit = (name) =>
  [...table.querySelectorAll("." + name)].map((cell) => cell.textContent.trim().replace(/\\s+/g, " "));
const said = () => document.querySelector(".chart-said").textContent.replace(/\\s+/g, " ");
const key = (name) => document.activeElement.dispatchEvent(new KeyboardEvent("keydown", { key: name, bubbles: true }));
stop.focus();
const found = { stops: table.querySelectorAll("[tabindex='0']").length, row: lit("in-row"),
  column: lit("in-column"), said: said() };
key("ArrowRight");
found.next = said();
key("ArrowUp");
found.head = said();
key("ArrowLeft");
key("ArrowLeft");
found.edge = said();
document.activeElement.blur();
table.querySelector("tbody td").dispatchEvent(new PointerEvent("pointerover", { bubbles: true }));
found.pointed = said();
report(found);
""",
    )
    assert found.console == ()
    told = found.found
    assert told["stops"] == 1
    assert any("IS-1001" in cell for cell in told["row"])
    assert any("PM-1001" in cell or "FIC-1002" in cell for cell in told["column"])
    assert told["said"].startswith("IS-1001 Feed pump dry-running protection, ")
    assert told["next"] != told["said"]
    sentences = (told["said"], told["next"])
    assert any("stops it: PM-1001" in one for one in sentences)
    assert any("forces the controller to manual to 0 %: FIC-1002" in one for one in sentences)
    assert "IS-1001" in told["head"]
    assert told["edge"] != told["head"]
    assert "PM-1001" in told["pointed"]
    assert "FIC-1002" in told["pointed"]


# ---------------------------------------------------------------- accessibility


class _Structure(HTMLParser):
    def __init__(self, html: str) -> None:
        super().__init__()
        self.levels: list[int] = []
        self.landmarks: list[str] = []
        self.unlabelled: list[str] = []
        self.headless: list[str] = []
        self.labels: set[str] = set()
        self.fields: list[dict[str, str]] = []
        self.first_link = ""
        self.tables: list[list[str]] = []
        self.drawings: list[bool] = []
        self._in_svg = False
        self.feed(html)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        found = {name: value or "" for name, value in attrs}
        if re.fullmatch("h[1-6]", tag):
            self.levels.append(int(tag[1]))
        if tag in ("main", "header", "nav", "search") or found.get("role") == "contentinfo":
            self.landmarks.append(tag if tag != "div" else "contentinfo")
        if tag == "nav" and "aria-label" not in found:
            self.unlabelled.append(tag)
        if tag == "label" and "for" in found:
            self.labels.add(found["for"])
        if tag in ("input", "select"):
            self.fields.append(found)
        if tag == "a" and not self.first_link:
            self.first_link = found.get("href", "")
        if tag == "table":
            self.tables.append([])
        if tag == "th" and "scope" not in found:
            self.headless.append(str(found))
        if tag == "svg":
            self.drawings.append(False)
            self._in_svg = True
        if tag == "title" and self._in_svg:
            self.drawings[-1] = True

    def handle_endtag(self, tag: str) -> None:
        if tag == "svg":
            self._in_svg = False


@pytest.mark.parametrize("name", KINDS_OF_PAGE)
def test_the_structure_of_a_page_can_be_heard(site: Path, name: str) -> None:
    """Landmarks once each, a skip link first, headings without a gap, fields with labels, heads with a scope."""
    structure = _Structure((site / f"{name}.html").read_text(encoding="utf-8"))
    assert structure.levels[0] == 1
    assert structure.levels.count(1) == 1
    assert all(after - before <= 1 for before, after in zip(structure.levels, structure.levels[1:], strict=False))
    assert structure.landmarks.count("main") == structure.landmarks.count("contentinfo") == 1
    assert structure.landmarks.count("header") == 1
    assert not structure.unlabelled
    assert structure.first_link == "#content"
    assert {field["id"] for field in structure.fields} <= structure.labels
    assert not structure.headless
    assert all(structure.drawings)


@cache
def axe(folder: str) -> str:
    """The text of axe-core, fetched by npm; empty where it cannot be had."""
    npm = shutil.which("npm")
    if npm is None:
        return ""
    try:
        subprocess.run([npm, "pack", AXE, "--silent"], cwd=folder, capture_output=True, timeout=60, check=True)
    except (subprocess.SubprocessError, OSError):
        return ""
    with tarfile.open(next(Path(folder).glob("axe-core-*.tgz"))) as archive:
        member = archive.extractfile("package/axe.min.js")
        assert member is not None
        return member.read().decode("utf-8")


@pytest.fixture(scope="module")
def auditor(tmp_path_factory: pytest.TempPathFactory) -> str:
    text = axe(str(tmp_path_factory.mktemp("axe")))
    if not text:
        pytest.skip("npm is not there or cannot fetch axe-core; the structural checks stand alone")
    return text


_TOLD = """
const told = (one) => [one.id, one.impact, one.nodes.slice(0, 3)
  .map((node) => node.html.slice(0, 200) + " " + (node.any[0] || {}).message)];
"""


@pytest.mark.parametrize("name", KINDS_OF_PAGE)
def test_axe_finds_nothing_on_a_phone(site: Path, browser: Browser, auditor: str, name: str) -> None:
    """Every rule that is on by default, and the size of what is pointed at (WCAG 2.2, 2.5.8) besides."""
    driver = auditor.replace("</script", "<\\/script") + _TOLD + """
axe.run(document, { resultTypes: ["violations"], rules: { "target-size": { enabled: true } } })
  .then((result) => report(result.violations.map(told)));
"""
    assert browser.show(site / f"{name}.html", driver=driver, size="390,900").found == []


@pytest.mark.parametrize("name", ["index", "loop-sheets/FIC-1002", "responses/LIC-1001", "cause-and-effect/unit-10"])
def test_axe_finds_contrast_enough_in_the_dark(site: Path, browser: Browser, auditor: str, name: str) -> None:
    driver = auditor.replace("</script", "<\\/script") + _TOLD + """
axe.run(document, { resultTypes: ["violations"], runOnly: ["color-contrast"] })
  .then((result) => report([matchMedia("(prefers-color-scheme: dark)").matches, result.violations.map(told)]));
"""
    dark = ("--blink-settings=preferredColorScheme=0",)
    assert browser.show(site / f"{name}.html", driver=driver, flags=dark).found == [True, []]
