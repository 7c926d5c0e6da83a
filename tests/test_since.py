"""`check --since`: the register at a git revision, read without checking anything out, and what a change brings."""

from __future__ import annotations

import io
import json
import os
import subprocess
from collections.abc import Callable
from pathlib import Path

import pytest

from loopdoc.cli import run
from loopdoc.register.files import FolderFiles, HeldFiles, matching
from loopdoc.register.load import Loaded, load, load_files
from loopdoc.revisions.git import GitError, register_at

BASE = (Path(__file__).parent / "rules" / "base-register.yaml").read_text("utf-8")
HEAD, _, LOOPS = BASE.partition("loops:\n")
LOOPS = f"loops:\n{LOOPS}"
INCLUDING = f"include: [units/*.yaml]\n{HEAD}"
# Each an error or a warning of one rule at one value.
WINDUP = ("high: 10.5 t/h}", "high: 12.5 t/h}")
HELD = ("stroke_time: 6 s", "stroke_time: {hold: awaiting vendor data}")

Git = Callable[..., str]


def call(*argv: object) -> tuple[int, str, str]:
    out, err = io.StringIO(), io.StringIO()
    code = run([str(argument) for argument in argv], out, err)
    return code, out.getvalue(), err.getvalue()


@pytest.fixture
def repository(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """An empty git repository, apart from whatever the machine and its user configure."""
    for name in [name for name in os.environ if name.startswith("GIT_")]:
        monkeypatch.delenv(name)
    monkeypatch.setenv("GIT_CONFIG_GLOBAL", os.devnull)
    monkeypatch.setenv("GIT_CONFIG_NOSYSTEM", "1")
    monkeypatch.setenv("GIT_CEILING_DIRECTORIES", str(tmp_path.parent))
    folder = tmp_path / "repository"
    folder.mkdir()
    git(folder, "init", "--quiet", "--initial-branch=main")
    return folder


def git(folder: Path, *arguments: str) -> str:
    author = ("-c", "user.name=Process control", "-c", "user.email=control@example.com")
    done = subprocess.run(("git", *author, *arguments), cwd=folder, check=True, capture_output=True, text=True)
    return done.stdout.strip()


def commit(folder: Path, *changes: tuple[str, str], root: str = INCLUDING, file: str = "units/20.yaml") -> str:
    """Write the register with some changes of its text and commit all there is."""
    text = LOOPS
    for old, new in changes:
        assert old in text
        text = text.replace(old, new, 1)
    (folder / file).parent.mkdir(parents=True, exist_ok=True)
    (folder / "register.yaml").write_text(root, "utf-8")
    (folder / file).write_text(text, "utf-8")
    git(folder, "add", "--all")
    git(folder, "commit", "--quiet", "--allow-empty", "--message", "change")
    return git(folder, "rev-parse", "HEAD")


def new_rules(*argv: object) -> tuple[list[str], int]:
    """Rules of the findings that are reported as new, and how many older ones are passed over."""
    code, out, err = call("check", *argv, "--format", "json", "--fail-on", "note")
    assert code in (0, 1), err
    document = json.loads(out)
    found = [finding["rule"] for finding in document["findings"]]
    assert code == bool(found)
    return found, document["since"]["passed_over"]


# ---------------------------------------------------------------- what is new


def test_only_what_the_change_brings_is_reported_and_decides_the_exit_code(repository: Path) -> None:
    commit(repository, HELD)
    old, passed_over = new_rules(repository, "--since", "HEAD")
    assert old == []
    assert passed_over > 0
    commit(repository, HELD, WINDUP)
    assert new_rules(repository, "--since", "HEAD~1") == (["output-limit-outside-setpoint"], passed_over)
    assert new_rules(repository, "--since", "HEAD") == ([], passed_over + 1)
    code, out, _ = call("check", repository, "--since", "HEAD~1")
    assert code == 1
    assert f"New or changed since HEAD~1; {passed_over} finding" in out


def test_a_finding_with_other_numbers_is_told_again(repository: Path) -> None:
    commit(repository, WINDUP)
    worse = ("high: 10.5 t/h}", "high: 12.6 t/h}")
    commit(repository, worse)
    assert new_rules(repository, "--since", "HEAD~1")[0] == ["output-limit-outside-setpoint"]


def test_what_is_not_committed_counts_as_changed(repository: Path) -> None:
    commit(repository)
    file = repository / "units" / "20.yaml"
    file.write_text(file.read_text("utf-8").replace(*WINDUP), "utf-8")
    assert new_rules(repository, "--since", "HEAD")[0] == ["output-limit-outside-setpoint"]


def test_moved_lines_and_renamed_files_bring_nothing(repository: Path) -> None:
    commit(repository, HELD, WINDUP)
    (repository / "units" / "20.yaml").rename(repository / "units" / "20-rectification.yaml")
    text = (repository / "units" / "20-rectification.yaml").read_text("utf-8")
    (repository / "units" / "20-rectification.yaml").write_text(f"# one line more\n{text}", "utf-8")
    found, passed_over = new_rules(repository, "--since", "HEAD")
    assert found == []
    assert passed_over >= 2


def test_a_deviation_that_is_taken_away_brings_its_finding_back(repository: Path) -> None:
    deviation = (
        "deviations:\n  - {rule: output-limit-outside-setpoint, at: TIC-2014, reason: until the shutdown, "
        "approved_by: Operations, until: 2999-12-31}\n"
    )
    commit(repository, WINDUP, root=INCLUDING + deviation)
    assert new_rules(repository, "--since", "HEAD")[0] == []
    (repository / "register.yaml").write_text(INCLUDING, "utf-8")
    assert new_rules(repository, "--since", "HEAD")[0] == ["output-limit-outside-setpoint"]
    commit(repository, WINDUP)
    (repository / "register.yaml").write_text(INCLUDING + deviation, "utf-8")
    assert new_rules(repository, "--since", "HEAD")[0] == []


def test_a_finding_that_becomes_worse_is_new() -> None:
    from loopdoc.register.place import Place
    from loopdoc.rules.baseline import new_since
    from loopdoc.rules.finding import CheckResult, Finding, Level

    def result(*levels: Level) -> CheckResult:
        found = (Finding("r", level, "T-1", "m", "r", Place("f", line, 1)) for line, level in enumerate(levels, 1))
        return CheckResult(tuple(found), (), {})

    better = new_since(result(Level.NOTE, Level.NOTE), result(Level.WARNING, Level.NOTE), "old")
    assert better.findings == ()
    worse = new_since(result(Level.ERROR, Level.NOTE), result(Level.WARNING, Level.NOTE), "old")
    assert [finding.level for finding in worse.findings] == [Level.ERROR]
    more = new_since(result(Level.NOTE, Level.NOTE), result(Level.NOTE), "old")
    assert [finding.place.line for finding in more.findings] == [2]


# ---------------------------------------------------------------- where the register lies


def test_a_register_in_a_subfolder_with_an_odd_name(repository: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    folder = repository / "sites" / "-n ü: [a]*?\n\x1b"
    folder.mkdir(parents=True)
    commit(folder, HELD)
    commit(folder, HELD, WINDUP)
    assert new_rules(folder, "--since", "HEAD~1")[0] == ["output-limit-outside-setpoint"]
    monkeypatch.chdir(folder)
    assert new_rules(".", "--since", "HEAD~1")[0] == ["output-limit-outside-setpoint"]
    assert new_rules("register.yaml", "--since", "HEAD~1")[0] == ["output-limit-outside-setpoint"]


def test_files_are_the_revision_s_own_whatever_lies_in_the_folder_now(repository: Path) -> None:
    first = commit(repository, file="units/10.yaml")
    (repository / "units" / "10.yaml").unlink()
    (repository / "other.txt").write_text("not of the register\n")
    commit(repository, HELD, file="units/20.yaml")
    assert set(register_at(repository, first)) == {"register.yaml", "units/10.yaml"}
    assert set(register_at(repository, "main")) == {"register.yaml", "units/20.yaml"}
    contents = register_at(repository, first)
    assert contents["units/10.yaml"] == LOOPS.encode()
    loaded = load_files(HeldFiles(contents))
    assert isinstance(loaded, Loaded)
    assert "TIC-2014" in loaded.register.loops


def test_line_ends_and_filters_of_a_checkout_do_not_count(repository: Path) -> None:
    """Objects are read as they are stored: no filter, no attribute, no program of the repository's runs."""
    (repository / ".gitattributes").write_text("*.yaml diff=odd filter=odd textconv=odd\n")
    commit(repository)
    ran = repository.parent / "ran"
    for key in ("diff.odd.textconv", "filter.odd.smudge", "diff.external", "core.fsmonitor", "core.pager", "pager.log"):
        git(repository, "config", key, f"touch {ran}; cat")
    assert register_at(repository, "HEAD")["units/20.yaml"] == LOOPS.encode()
    assert not ran.exists()


def test_a_hook_s_environment_does_not_lead_elsewhere(
    repository: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    commit(repository, HELD)
    other = tmp_path / "other"
    other.mkdir()
    git(other, "init", "--quiet")
    monkeypatch.setenv("GIT_DIR", str(other / ".git"))
    monkeypatch.setenv("GIT_WORK_TREE", str(other))
    monkeypatch.setenv("GIT_INDEX_FILE", str(other / "index"))
    assert "units/20.yaml" in register_at(repository, "HEAD")


# ---------------------------------------------------------------- what cannot be read


@pytest.mark.parametrize(
    "revision",
    ["nowhere", "--output=pwned", "-h", "--all", "", "HEAD\nmain", "HEAD:register.yaml", "$(touch pwned)", "main..HEAD",
     "../x", "\x00", "HEAD^{tree}", "@{-1}", "\udc80"],
)  # fmt: skip
def test_a_revision_that_is_none_is_told_and_exits_2(
    revision: str, repository: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    commit(repository)
    monkeypatch.chdir(repository)
    before = sorted(repository.rglob("*"))
    code, out, err = call("check", repository, f"--since={revision}")
    assert (code, out) == (2, "")
    assert err.startswith("loopdoc: ")
    assert "revision" in err
    assert sorted(repository.rglob("*")) == before


def test_a_folder_outside_any_repository_is_told_and_exits_2(repository: Path, tmp_path: Path) -> None:
    (tmp_path / "register.yaml").write_text(BASE, "utf-8")
    code, out, err = call("check", tmp_path, "--since", "HEAD")
    assert (code, out) == (2, "")
    assert "not a git repository" in err


def test_a_machine_without_git_is_told_and_exits_2(repository: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    commit(repository)
    monkeypatch.setenv("PATH", str(repository))
    code, out, err = call("check", repository, "--since", "HEAD")
    assert (code, out) == (2, "")
    assert "git is not installed" in err
    assert call("check", repository)[0] == 0, "a check without --since needs no git"


@pytest.mark.parametrize("form", ["text", "sarif", "markdown", "junit"])
def test_an_older_revision_that_is_no_register_hides_nothing_and_is_told(form: str, repository: Path) -> None:
    commit(repository, WINDUP, root="format: [1\n")
    commit(repository, WINDUP)
    code, out, _ = call("check", repository, "--since", "HEAD~1", "--format", form)
    assert code == 1
    assert "output-limit-outside-setpoint" in out
    assert "HEAD~1 cannot be read as a register" in out.replace("&#8203;", "").replace("\\~", "~")
    assert "every finding counts as new" in out


def test_a_register_that_the_older_revision_had_not_is_all_new(repository: Path) -> None:
    commit(repository, root="unused: true\n")
    (repository / "plant").mkdir()
    commit(repository / "plant", WINDUP)
    code, out, _ = call("check", repository / "plant", "--since", "HEAD~1")
    assert code == 1
    assert "Nothing is passed over: the revision HEAD~1 has no `plant/register.yaml`" in out


def test_before_the_first_commit_all_is_new(repository: Path) -> None:
    (repository / "register.yaml").write_text(BASE.replace(*WINDUP), "utf-8")
    code, out, _ = call("check", repository, "--since", "HEAD")
    assert code == 1
    assert "Nothing is passed over: the repository has no commit yet, so that every finding counts as new." in out


def test_a_missing_object_is_told(repository: Path) -> None:
    commit(repository)
    blob = git(repository, "rev-parse", "HEAD:units/20.yaml")
    (repository / ".git" / "objects" / blob[:2] / blob[2:]).unlink()
    with pytest.raises(GitError, match="has not got the content of"):
        register_at(repository, "HEAD")


# ---------------------------------------------------------------- files held in memory


NAMES = ("register.yaml", "a.yaml", "b.yml", "units/10.yaml", "units/20/x.yaml", "units/20/deep/y.yaml", "A.yaml",
         "units/[x].yaml", ".hidden.yaml", "units/z y.yaml")  # fmt: skip
PATTERNS = ("*.yaml", "units/*.yaml", "**/*.yaml", "units/**/*.yaml", "**/x.yaml", "units/[0-9]*.yaml", "?.yaml",
            "units/[[]x].yaml", "*/*", "*", "**", "units/20", "units//10.yaml", "./a.yaml", "[!a].yaml", "**/**/y.yaml",
            "**/20/**/*.yaml", "a**", ".", "units/", "u*/*/*")  # fmt: skip


@pytest.mark.parametrize("pattern", PATTERNS)
def test_a_pattern_finds_in_memory_what_it_finds_in_a_folder(pattern: str, tmp_path: Path) -> None:
    for name in NAMES:
        (tmp_path / name).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / name).write_bytes(b"")
    assert matching(pattern, NAMES) == FolderFiles(tmp_path).matching(pattern)


def test_a_register_reads_the_same_from_memory_and_from_its_folder() -> None:
    folder = Path(__file__).parent.parent / "examples" / "tarn-hollow"
    on_disk = load(folder)
    assert isinstance(on_disk, Loaded)
    held = {path.relative_to(folder).as_posix(): path.read_bytes() for path in folder.rglob("*") if path.is_file()}
    in_memory = load_files(HeldFiles(held))
    assert isinstance(in_memory, Loaded)
    assert in_memory.sources == on_disk.sources
    assert in_memory.register == on_disk.register
