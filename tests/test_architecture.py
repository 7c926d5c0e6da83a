"""The import arrows of the stages, and what the tool loads before it has work to do."""

import ast
import importlib.metadata
import json
import re
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
PACKAGE = ROOT / "loopdoc"

# Each stage may import itself and the stages of lower rank; equals do not import each other.
RANK = {
    "register": 0,
    "engineering": 1,
    "rules": 2,
    "revisions": 3,
    "documents": 4,
    "exchange": 4,
    "cli": 5,
    "__main__": 6,
}
# The package's own __init__ (the version) stands below every stage.
BELOW_ALL = "__init__"

MODULES = sorted(PACKAGE.rglob("*.py"))


def imported_names(source: str, package: str) -> Iterator[str]:
    """Yield the full dotted names that a module of the package imports, at any depth of nesting."""
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            parents = package.split(".")
            base = ".".join(parents[: len(parents) - node.level + 1]) if node.level else ""
            module = ".".join(part for part in (base, node.module) if part)
            yield from (f"{module}.{alias.name}" for alias in node.names)


def stage_of(name: str) -> str:
    """Return the stage of a dotted name in the package."""
    second = name.split(".")[1] if "." in name else BELOW_ALL
    return second if second in RANK else BELOW_ALL


def upward_imports(source: str, package: str, stage: str) -> list[str]:
    """Return the imports by which a module of a stage reaches up or sideways."""
    ours = (name for name in imported_names(source, package) if name.split(".")[0] == "loopdoc")
    return [
        name
        for name in ours
        if (target := stage_of(name)) not in (stage, BELOW_ALL)
        and (stage == BELOW_ALL or RANK[target] >= RANK[stage])
    ]


def dotted(path: Path) -> str:
    """Return the dotted name of the package that a module's relative imports start from."""
    return ".".join(path.relative_to(ROOT).parent.parts)


def stage_of_file(path: Path) -> str:
    """Return the stage that a module of the tree belongs to."""
    first = path.relative_to(PACKAGE).parts[0]
    return first.removesuffix(".py")


@pytest.mark.parametrize("path", MODULES, ids=[str(path.relative_to(ROOT)) for path in MODULES])
def test_imports_run_one_way(path: Path) -> None:
    assert upward_imports(path.read_text("utf-8"), dotted(path), stage_of_file(path)) == []


def test_every_module_belongs_to_a_known_stage() -> None:
    assert {stage_of_file(path) for path in MODULES} <= {*RANK, BELOW_ALL}


@pytest.mark.parametrize(
    ("source", "upward"),
    [
        ("from loopdoc.register.model import Loop", []),
        ("from .pairing import pair", []),
        ("from loopdoc import __version__", []),
        ("import loopdoc.rules.check", ["loopdoc.rules.check"]),
        ("from loopdoc import cli", ["loopdoc.cli"]),
        ("from ..documents import narrative", ["loopdoc.documents.narrative"]),
        ("def f():\n    from loopdoc.rules import check", ["loopdoc.rules.check"]),
    ],
)
def test_an_upward_import_is_seen_in_every_form(source: str, upward: list[str]) -> None:
    assert upward_imports(source, "loopdoc.engineering", "engineering") == upward


def third_party_imports() -> set[str]:
    """Return the top-level names of other projects that the package imports."""
    names = {
        name.split(".")[0]
        for path in MODULES
        for name in imported_names(path.read_text("utf-8"), dotted(path))
    }
    return names - sys.stdlib_module_names - {"loopdoc"}


def normal(distribution: str) -> str:
    """Return a distribution's name as package indexes compare it."""
    return re.sub(r"[-_.]+", "-", distribution).lower()


def test_the_package_imports_exactly_its_declared_dependencies() -> None:
    project = tomllib.loads((ROOT / "pyproject.toml").read_text("utf-8"))["project"]
    declared = {normal(re.split(r"[^\w.-]", requirement)[0]) for requirement in project["dependencies"]}
    owners = importlib.metadata.packages_distributions()
    used = {normal(owner) for name in third_party_imports() for owner in set(owners[name])}
    assert used == declared


def loaded_after(program: str) -> set[str]:
    """Return the top-level modules that a fresh interpreter holds after running a program."""
    report = "import json, sys; print(json.dumps(sorted({name.split('.')[0] for name in sys.modules})))"
    run = subprocess.run([sys.executable, "-c", f"{program}\n{report}"], cwd=ROOT, capture_output=True, text=True)
    assert run.returncode == 0, run.stderr
    return set(json.loads(run.stdout.splitlines()[-1]))


# Slow to import, and of no use before a document is issued or a response computed.
HEAVY = {"matplotlib", "weasyprint", "jinja2", "scipy", "control", "numba"}


def test_the_command_line_starts_without_heavy_libraries() -> None:
    assert loaded_after("import loopdoc.cli") & (HEAVY | {"numpy"}) == set()


def test_a_check_loads_nothing_that_only_documents_need() -> None:
    program = "import loopdoc.cli; loopdoc.cli.run(['check', 'examples/tarn-hollow'], sys.stdout, sys.stderr)"
    assert loaded_after(f"import sys; {program}") & HEAVY == set()


def test_a_check_that_asks_for_no_dynamics_starts_without_numpy() -> None:
    arguments = "['check', 'examples/tarn-hollow', '--only', 'tag-grammar', 'cascade-interval-order', 'rate-on-flow']"
    program = f"import sys, loopdoc.cli; loopdoc.cli.run({arguments}, sys.stderr, sys.stderr)"
    assert loaded_after(program) & (HEAVY | {"numpy"}) == set()


def test_a_check_of_a_plant_without_models_starts_without_numpy(tmp_path: Path) -> None:
    register = (ROOT / "tests" / "rules" / "base-register.yaml").read_text("utf-8")
    without = re.sub(r"\n    (?:disturbances: \{.*\}|process:( \{.*\}|\n      branches:(\n        .*)*))", "", register)
    assert "process: {" not in without
    assert "branches" not in without
    (tmp_path / "register.yaml").write_text(without, "utf-8")
    program = f"import sys, loopdoc.cli; loopdoc.cli.run(['check', {str(tmp_path)!r}], sys.stderr, sys.stderr)"
    assert loaded_after(program) & (HEAVY | {"numpy"}) == set()
