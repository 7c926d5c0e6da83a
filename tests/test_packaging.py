"""What is shipped: the wheel, the sdist, the pinned packages and the set-up of a bare machine."""

import importlib.metadata
import json
import os
import re
import shutil
import subprocess
import sys
import sysconfig
import tarfile
import tomllib
import zipfile
from collections.abc import Iterator
from pathlib import Path

import pytest
from packaging.requirements import Requirement
from packaging.utils import canonicalize_name

ROOT = Path(__file__).parent.parent
PYPROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text("utf-8"))
# Package in the wheel: folder in the tree.
FOLDERS = {"loopdoc": "loopdoc", "loopdoc/templates": "templates", "loopdoc/schemas": "schemas"}


def shipped_files() -> set[str]:
    """Return the names, as in a wheel, of all files of the tree's packages."""
    return {
        f"{package}/{path.relative_to(ROOT / folder).as_posix()}"
        for package, folder in FOLDERS.items()
        for path in (ROOT / folder).rglob("*")
        if path.is_file() and "__pycache__" not in path.parts
    }


def call(*command: str | Path, cwd: Path) -> str:
    """Run a command that must succeed, away from the variables that would lead it back to the tree."""
    run = subprocess.run(
        command,
        cwd=cwd,
        env={name: value for name, value in os.environ.items() if not name.startswith("PYTHON")},
        capture_output=True,
        text=True,
    )
    assert run.returncode == 0, f"{command}\n{run.stdout}\n{run.stderr}"
    return run.stdout


@pytest.fixture(scope="session")
def built(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with a wheel and an sdist, each built from a copy of the tree."""
    base = tmp_path_factory.mktemp("built")
    not_sources = shutil.ignore_patterns(".*", "build", "dist", "issued", "*.egg-info")
    shutil.copytree(ROOT, base / "tree", ignore=not_sources)
    # What an interpreter leaves beside the sources must not be shipped with them.
    for folder in ("templates", "templates/starter", "schemas"):
        left_over = base / "tree" / folder / "__pycache__" / "left_over.cpython-311.pyc"
        left_over.parent.mkdir(exist_ok=True)
        left_over.write_bytes(b"")
    build = (sys.executable, "-m", "build", "--no-isolation", "--sdist", "--wheel", "--outdir", base, ".")
    call(*build, cwd=base / "tree")
    return base


@pytest.fixture(scope="session")
def wheel(built: Path) -> Path:
    """The wheel, built from the tree."""
    return next(built.glob("*.whl"))


@pytest.fixture(scope="session")
def sdist(built: Path) -> Path:
    """The sdist, built from the tree."""
    return next(built.glob("*.tar.gz"))


@pytest.fixture(scope="session", params=["wheel", "sdist"])
def installed(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The folder of a new environment in which loopdoc was installed from the wheel or the sdist.

    The pinned dependencies are lent by the environment of the tests, which holds loopdoc only as a link
    that a plain path entry does not follow.
    """
    environment = tmp_path_factory.mktemp("installed") / "environment"
    call(sys.executable, "-m", "venv", "--without-pip", environment, cwd=environment.parent)
    python = environment / "bin" / "python"
    own_site = "import sysconfig; print(sysconfig.get_path('purelib'))"
    path_entry = Path(call(python, "-c", own_site, cwd=environment).strip(), "lent.pth")
    path_entry.write_text(f"{sysconfig.get_path('purelib')}\n", "utf-8")
    pip = (sys.executable, "-m", "pip", "--python", python, "install", "--no-index", "--no-deps")
    archive = request.getfixturevalue(request.param)
    call(*pip, "--no-build-isolation", "--ignore-installed", archive, cwd=environment)
    return environment


def test_packages_listed_are_the_packages_of_the_tree() -> None:
    tree = {
        f"{package}/{path.parent.relative_to(ROOT / folder).as_posix()}".removesuffix("/.").replace("/", ".")
        for package, folder in FOLDERS.items()
        for path in (ROOT / folder).rglob("__init__.py")
    }
    assert sorted(PYPROJECT["tool"]["setuptools"]["packages"]) == sorted(tree)


def test_wheel_holds_every_file_of_the_packages_and_no_other(wheel: Path) -> None:
    names = {name for name in zipfile.ZipFile(wheel).namelist() if ".dist-info/" not in name}
    assert names == shipped_files()


def test_sdist_holds_what_it_takes_to_build_and_to_test(sdist: Path) -> None:
    with tarfile.open(sdist) as archive:
        names = {name.split("/", 1)[-1] for name in archive.getnames()}
    folders = ("templates", "schemas", "loopdoc", "tests", "examples", "docs", "bin")
    wanted = {
        path.relative_to(ROOT).as_posix()
        for folder in folders
        for path in (ROOT / folder).rglob("*")
        if path.is_file() and "__pycache__" not in path.parts
    }
    files = {"pyproject.toml", "requirements.txt", "README.md", "DEVELOPERS.md", "CHANGELOG.md", "LICENSE"}
    assert (wanted | files) - names == set()
    assert [name for name in names if name.endswith(".pyc")] == []


def test_installed_tool_finds_its_schema_and_templates(installed: Path, tmp_path: Path) -> None:
    loopdoc = installed / "bin" / "loopdoc"
    schema = json.loads(call(loopdoc, "schema", cwd=tmp_path))
    assert schema["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    call(loopdoc, "new", "site", cwd=tmp_path)
    call(loopdoc, "check", "site", cwd=tmp_path)
    call(loopdoc, "issue", "site", "--out", "issued", "--formats", "html", cwd=tmp_path)
    assert (tmp_path / "issued" / "index.html").is_file()


def test_installed_package_is_the_one_that_runs(installed: Path, tmp_path: Path) -> None:
    program = (
        "import importlib.resources as r; print(*(r.files(f'loopdoc.{n}') for n in ('templates', 'schemas')))"
    )
    for place in call(installed / "bin" / "python", "-c", program, cwd=tmp_path).split():
        assert Path(place).is_relative_to(installed)


def pins() -> dict[str, str]:
    """Return the pinned version of each package, by normal name."""
    lines = (ROOT / "requirements.txt").read_text("utf-8").splitlines()
    entries = [line.split("==") for line in lines if line and not line.startswith("#")]
    return {canonicalize_name(name): version for name, version in entries}


def declared() -> Iterator[Requirement]:
    """Yield every requirement that pyproject.toml states."""
    project = PYPROJECT["project"]
    groups = [
        PYPROJECT["build-system"]["requires"],
        project["dependencies"],
        *project["optional-dependencies"].values(),
    ]
    return (Requirement(text) for group in groups for text in group)


def needed(requirement: Requirement, seen: set[tuple[str, frozenset[str]]]) -> Iterator[Requirement]:
    """Yield a requirement and, from the installed packages, all that it needs in turn."""
    key = (canonicalize_name(requirement.name), frozenset(requirement.extras))
    yield requirement
    if key in seen:
        return
    seen.add(key)
    for text in importlib.metadata.requires(requirement.name) or []:
        further = Requirement(text)
        extras = requirement.extras or {""}
        if further.marker is None or any(further.marker.evaluate({"extra": extra}) for extra in extras):
            yield from needed(further, seen)


def test_pins_cover_every_requirement_and_what_it_needs() -> None:
    pinned, seen = pins(), set[tuple[str, frozenset[str]]]()
    wanted = [further for requirement in declared() for further in needed(requirement, seen)]
    wrong = [
        str(requirement)
        for requirement in wanted
        if not requirement.specifier.contains(pinned.get(canonicalize_name(requirement.name), "0a0"))
    ]
    assert wrong == []
    assert set(pinned) == {canonicalize_name(requirement.name) for requirement in wanted}


@pytest.mark.parametrize(
    "name", ["requirements.txt", "pyproject.toml", "bin/environment.bash", "bin/demo", "bin/test", ".ci/run"]
)
def test_set_up_leaves_the_package_index_to_the_machine(name: str) -> None:
    assert re.findall(r"https?://|index-url|find-links|trusted-host", (ROOT / name).read_text("utf-8")) == []


def test_readme_names_the_libraries_that_the_set_up_installs() -> None:
    script = (ROOT / "bin" / "environment.bash").read_text("utf-8")
    stated = set(re.findall(r"\blib[a-z0-9.-]+\b(?= |\n)", (ROOT / "README.md").read_text("utf-8")))
    assert stated == set(re.findall(r'", "(lib[a-z0-9.-]+)"\)', script))


class Machine:
    """A copy of the set-up scripts on a machine whose python3, id, sudo and apt-get are stand-ins."""

    def __init__(self, folder: Path, *, user: int, sudo: int = 1, python: str = "without ensurepip") -> None:
        self.root = folder / "project folder"
        self.log = folder / "apt.log"
        self.stand_ins = folder / "stand-ins"
        self.stand_ins.mkdir()
        shutil.copytree(ROOT / "bin", self.root / "bin")
        for name in ("pyproject.toml", "requirements.txt"):
            shutil.copy(ROOT / name, self.root)
        # Answers as Debian's python3 does where python3-venv is not installed.
        answers = {
            "without ensurepip": 'case "$*" in *ensurepip*|*"-m venv"*) exit 1;; esac\n'
            f'exec {sys.executable} "$@"',
            "too old": '[ "$*" = --version ] && echo Python 3.9.2 || exit 1',
        }
        self.stand_in("python3", answers[python])
        for minor in range(11, 15):
            self.stand_in(f"python3.{minor}", "exit 1")
        self.stand_in("id", f"echo {user}")
        self.stand_in("sudo", f'[ {sudo} -eq 0 ] || exit 1\n[ "$1" = -n ] && shift\nexec "$@"')
        self.stand_in("apt-get", f'echo "$*" >>"{self.log}"')

    def stand_in(self, name: str, body: str) -> None:
        """Put a shell script of that name before the machine's own commands."""
        path = self.stand_ins / name
        path.write_text(f"#!/bin/sh\n{body}\n", "utf-8")
        path.chmod(0o755)

    def run(self, name: str) -> subprocess.CompletedProcess[str]:
        """Run a script of bin/ from another folder, in an empty environment."""
        return subprocess.run(
            ["bash", self.root / "bin" / name],
            cwd=self.stand_ins,
            env={"PATH": f"{self.stand_ins}:/usr/bin:/bin"},
            capture_output=True,
            text=True,
            stdin=subprocess.DEVNULL,
        )

    def installs(self) -> list[str]:
        """Return the packages that apt-get was asked to install."""
        asked = self.log.read_text("utf-8").splitlines() if self.log.exists() else []
        return [word for line in asked if " install " in line for word in line.split() if "python3" in word]


@pytest.mark.parametrize("name", ["demo", "test"])
def test_set_up_without_rights_says_exactly_what_to_install(name: str, tmp_path: Path) -> None:
    machine = Machine(tmp_path, user=1000)
    run = machine.run(name)
    assert run.returncode == 2
    assert "apt-get update && apt-get install --yes --no-install-recommends python3-venv" in run.stderr
    assert machine.installs() == []
    assert not (machine.root / ".venv").exists()


@pytest.mark.parametrize(("user", "sudo"), [(0, 1), (1000, 0)], ids=["root", "sudo without password"])
def test_set_up_with_rights_installs_what_is_missing(user: int, sudo: int, tmp_path: Path) -> None:
    machine = Machine(tmp_path, user=user, sudo=sudo)
    run = machine.run("demo")
    assert machine.installs() == ["python3-venv"]
    assert "makes the Python environment in .venv" in run.stderr


def test_interrupted_set_up_is_made_anew(tmp_path: Path) -> None:
    machine = Machine(tmp_path, user=0)
    left_over = machine.root / ".venv" / "half a package"
    left_over.mkdir(parents=True)
    (left_over.parent / "loopdoc-stamp").write_text("unfinished\n", "utf-8")
    run = machine.run("demo")
    assert "unfinished" in run.stderr
    assert not left_over.exists()
    # The stand-in's venv module fails, so this set-up is unfinished too and the next must not trust it.
    assert run.returncode == 2
    assert (left_over.parent / "loopdoc-stamp").read_text("utf-8") == "unfinished\n"


def test_set_up_names_the_python_that_it_needs(tmp_path: Path) -> None:
    run = Machine(tmp_path, user=0, python="too old").run("test")
    assert run.returncode == 2
    assert "needs Python 3.11 or newer; this machine has Python 3.9.2" in run.stderr
