"""The command line as a user meets it: exit codes, what goes to which stream, and no traceback for any bad input."""

from __future__ import annotations

import io
import json
import re
import shlex
from pathlib import Path

import jsonschema
import pytest

from loopdoc.cli import run
from loopdoc.register.load import Loaded, load
from loopdoc.register.starter import starter_files

TARN_HOLLOW = Path(__file__).parent.parent / "examples" / "tarn-hollow"


def call(*argv: object) -> tuple[int, str, str]:
    """Exit code, standard output and standard error of one command."""
    out, err = io.StringIO(), io.StringIO()
    code = run([str(argument) for argument in argv], out, err)
    return code, out.getvalue(), err.getvalue()


@pytest.fixture
def starter(tmp_path: Path) -> Path:
    folder = tmp_path / "plant"
    assert call("new", folder)[0] == 0
    return folder


def edit(file: Path, old: str, new: str) -> None:
    text = file.read_text(encoding="utf-8")
    assert old in text
    file.write_text(text.replace(old, new, 1), encoding="utf-8")


def test_a_new_register_is_written_whole_and_has_no_error(starter: Path) -> None:
    for name, content in starter_files().items():
        assert (starter / name).read_bytes() == content
    code, out, err = call("check", starter, "--fail-on", "note")
    assert (code, err) == (0, "")
    assert "0 errors, 0 warnings, 0 notes" in out


def test_new_overwrites_nothing(starter: Path) -> None:
    code, _, err = call("new", starter)
    assert code == 2
    assert "not an empty folder" in err


def test_a_finding_is_told_with_place_rule_tag_and_remedy_and_exits_1(starter: Path) -> None:
    edit(starter / "units" / "10-feed.yaml", "action: direct", "action: reverse")
    code, out, err = call("check", starter)
    assert (code, err) == (1, "")
    first = out.splitlines()[0]
    # The twelfth line of the file is `      action: ...`: six blanks, the key, a colon and a blank before the value.
    assert first.startswith("units/10-feed.yaml:12:15: error: action-wrong: LIC-1001: ")
    assert "`action: direct`" in out


@pytest.mark.parametrize(("fail_on", "code"), [("error", 0), ("warning", 0), ("note", 1), ("never", 0)])
def test_fail_on_decides_the_exit_code(starter: Path, fail_on: str, code: int) -> None:
    edit(starter / "units" / "10-feed.yaml", "stroke_time: 5 s", "stroke_time: {hold: vendor data}")
    assert call("check", starter, "--fail-on", fail_on)[0] == code


def test_json_has_the_documented_keys(starter: Path) -> None:
    edit(starter / "units" / "10-feed.yaml", "fails: closed, safe: closed", "fails: open, safe: closed")
    code, out, _ = call("check", starter, "--format", "json")
    document = json.loads(out)
    assert code == 1
    assert {"findings", "checked", "not_checked"} <= document.keys()
    rules = {finding["rule"] for finding in document["findings"]}
    assert {"fail-position-unsafe", "fail-position-signal-mismatch"} <= rules
    for finding in document["findings"]:
        assert {"rule", "level", "tag", "message", "remedy", "file", "line", "column"} <= finding.keys()


BAD_TEXT = {
    "random bytes": bytes(range(128, 256)),
    "empty": b"",
    "list at the root": b"- a\n- b\n",
    "tab": b"format: 1\nsite:\n\tname: x\n",
    "duplicate key": b"format: 1\nformat: 1\n",
    "alias bomb": b"a: &a [x, x]\nb: &b [*a, *a]\nc: [*b, *b]\n",
    "missing include": b"format: 1\ninclude: [nowhere/*.yaml]\n",
    "include outside": b"format: 1\ninclude: [../*.yaml]\n",
    "deep": b"a: " + b"[" * 60 + b"]" * 60,
}


@pytest.mark.parametrize("content", BAD_TEXT.values(), ids=BAD_TEXT.keys())
@pytest.mark.parametrize("command", [("check",), ("issue", "--out", "out"), ("response", "TIC-1001")])
def test_text_that_is_no_register_exits_2_with_its_place(
    content: bytes, command: tuple[str, ...], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    folder = tmp_path / "bad"
    folder.mkdir()
    (folder / "register.yaml").write_bytes(content)
    code, out, err = call(command[0], folder, *command[1:])
    assert (code, out) == (2, "")
    assert err.startswith("register.yaml:")
    assert ": error: schema: " in err
    assert "remedy: " in err
    assert not (tmp_path / "out").exists()


def test_a_list_where_a_mapping_belongs_is_a_finding(starter: Path) -> None:
    edit(
        starter / "units" / "10-feed.yaml",
        "operating: {low: 30 %, normal: 50 %, high: 70 %}",
        "operating: [30 %, 50 %]",
    )
    code, out, _ = call("check", starter)
    assert code == 1
    assert "error: schema: LIC-1001: " in out


@pytest.mark.parametrize("command", ["check", "issue", "response"])
def test_no_such_register(command: str, tmp_path: Path) -> None:
    more = {"check": [], "issue": ["--out", tmp_path / "out"], "response": ["TIC-1"]}[command]
    code, _, err = call(command, tmp_path / "nowhere", *more)
    assert code == 2
    assert "no such file or folder" in err


def test_unknown_names_are_answered_with_the_nearest(starter: Path, tmp_path: Path) -> None:
    assert "did you mean action-wrong?" in call("explain", "action-wrongs")[2]
    assert "did you mean action-wrong?" in call("check", starter, "--only", "action-wron")[2]
    assert "did you mean LIC-1001?" in call("response", starter, "LIC-101")[2]
    assert "narrative or loop-sheet" in call("issue", starter, "--out", tmp_path / "o", "--documents", "narrativ")[2]
    assert "pdf or html" in call("issue", starter, "--out", tmp_path / "o", "--formats", "docx")[2]


def test_only_checks_by_the_rules_named(starter: Path) -> None:
    document = json.loads(call("check", starter, "--format", "json", "--only", "action-wrong", "hold-open")[1])
    assert set(document["checked"]) == {"action-wrong", "hold-open"}


def test_text_of_the_register_cannot_command_a_terminal(starter: Path) -> None:
    """A file name is the one text that the reader of YAML does not see."""
    file = starter / "units" / "10-feed.yaml"
    edit(file, "action: direct", "action: reverse")
    file.rename(starter / "units" / "\x1b[2J\u202e.yaml")
    out = call("check", starter)[1]
    assert "\x1b" not in out
    assert "\u202e" not in out
    assert "action-wrong" in out


def test_explain_and_rules_and_schema() -> None:
    page = call("explain", "secondary-range-short")[1]
    for heading in ("Why", "Breaks", "Holds", "What this check cannot see", "Source:"):
        assert heading in page
    assert "secondary_range_ratio: 1.5" in call("rules")[1]
    assert json.loads(call("schema")[1])["$schema"] == "https://json-schema.org/draft/2020-12/schema"


@pytest.mark.parametrize(
    "example", sorted((TARN_HOLLOW.parent).glob("*/register.yaml")), ids=lambda path: path.parent.name
)
def test_the_schemas_printed_for_an_editor_accept_the_files_of_the_examples(example: Path) -> None:
    schemas = [json.loads(call("schema", *more)[1]) for more in ([], ["--included"])]
    assert schemas[0]["$ref"] != schemas[1]["$ref"]
    loaded = load(example.parent)
    assert isinstance(loaded, Loaded)
    for file in loaded.register.files:
        is_root = file is loaded.register.root
        own, other = (jsonschema.Draft202012Validator(schemas[which]) for which in (not is_root, is_root))
        assert [error.message for error in own.iter_errors(file.data)] == []
        assert not other.is_valid(file.data), "each kind of file has a schema of its own"


@pytest.mark.parametrize("page", ["README.md", "docs/ci.md"])
def test_commands_in_the_documentation_are_commands(page: str) -> None:
    from loopdoc.cli import _parser

    text = (TARN_HOLLOW.parent.parent / page).read_text(encoding="utf-8")
    blocks = re.findall(r"^```\w*\n(.*?)^```", text, re.MULTILINE | re.DOTALL)
    commands = re.findall(r"^(?:[ \w]*run: |[ ]*- |[ ]*)(loopdoc [a-z].*)", "\n".join(blocks), re.MULTILINE)
    assert len(commands) > 2
    for command in commands:
        words = shlex.split(re.sub(r" >.*", "", command), comments=True)
        _parser().parse_args(words[1:])  # exits where it is none


def test_response_json_gives_engineering_units_and_seconds(starter: Path) -> None:
    document = json.loads(call("response", starter, "LIC-1001", "--format", "json")[1])
    assert document["levels"] == ["FIC-1002", "LIC-1001"]
    for level in ("inner", "outer"):
        assert {"gain_margin", "phase_margin_deg", "max_sensitivity", "crossover_rad_per_s"} <= document[level].keys()
    ratio = document["inner"]["crossover_rad_per_s"] / document["outer"]["crossover_rad_per_s"]
    assert document["speed_ratio"] == pytest.approx(ratio, rel=1e-5)  # six digits are printed
    for name in ("setpoint step", "secondary disturbance", "primary disturbance"):
        assert {"iae", "peak", "settling_s"} <= document["scenarios"][name]["cascade"].keys()
    single = json.loads(call("response", starter, "FIC-1002", "--format", "json")[1])
    assert {"loop", "scenarios"} <= single.keys()


def test_response_draws_a_plot_or_says_why_not(starter: Path, tmp_path: Path) -> None:
    assert call("response", starter, "FIC-1002", "--plot", tmp_path / "plot.svg")[0] == 0
    assert (tmp_path / "plot.svg").read_text(encoding="utf-8").lstrip().startswith("<?xml")
    code, _, err = call("response", starter, "FIC-1002", "--plot", tmp_path / "plot.gif")
    assert code == 2
    assert ".svg, .png or .pdf" in err
    edit(starter / "units" / "10-feed.yaml", "gain: 0.25 m3/h per %", "gain: {hold: step test}")
    code, _, err = call("response", starter, "FIC-1002", "--plot", tmp_path / "other.svg")
    assert code == 2
    assert "the process gain of FIC-1002 is on hold" in err


def test_a_folder_that_cannot_be_written_is_told(starter: Path, tmp_path: Path) -> None:
    blocked = tmp_path / "file"
    blocked.write_text("not a folder")
    code, _, err = call("issue", starter, "--out", blocked, "--formats", "html")
    assert code == 2
    assert str(blocked) in err
    assert blocked.read_text() == "not a folder"


def test_a_missing_pango_leaves_the_html_and_says_what_to_install(
    starter: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    from loopdoc.documents import pdf
    from loopdoc.documents.handover import issue

    def missing() -> None:
        raise pdf.PdfError(pdf.PANGO_HINT)

    monkeypatch.setattr(issue, "ensure_available", missing)
    code, out, err = call("issue", starter, "--out", tmp_path / "out")
    assert code == 1
    assert "libpango-1.0-0" in err
    assert (tmp_path / "out" / "index.html").exists()
    assert not list((tmp_path / "out").rglob("*.pdf"))
    assert "documents in" in out
    assert call("issue", starter, "--out", tmp_path / "out2", "--formats", "pdf")[0] == 2


def test_every_command_stands_in_the_readme() -> None:
    from loopdoc.cli import _parser

    readme = (TARN_HOLLOW.parent.parent / "README.md").read_text(encoding="utf-8")
    (commands,) = [action for action in _parser()._actions if hasattr(action, "choices") and action.choices]
    assert commands.choices is not None
    for name in commands.choices:
        assert f"`loopdoc {name}" in readme, name


def test_the_demo_checks_without_errors() -> None:
    code, out, _ = call("check", TARN_HOLLOW)
    assert code == 0, out


def test_an_included_file_is_not_taken_for_the_register(starter: Path) -> None:
    code, out, err = call("check", str(starter / "units" / "10-feed.yaml"))
    assert code == 2
    assert "a file that a register includes, not the register" in out + err
    assert out.count("error:") + err.count("error:") == 1


def test_a_threshold_below_nought_is_refused(starter: Path) -> None:
    """It would switch its rule off without a word."""
    with (starter / "register.yaml").open("a", encoding="utf-8") as file:
        file.write("policy: {cascade_speed_ratio: -1}\n")
    code, out, _ = call("check", str(starter))
    assert code == 1
    assert "`cascade_speed_ratio` of the policy is the number -1, which is below 0" in out
