"""The files of a register, in a folder or held in memory: which belong to it, and their content."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from fnmatch import fnmatchcase
from pathlib import Path, PurePosixPath
from typing import Protocol

from loopdoc.register.place import Fault, Place
from loopdoc.register.text import TextFile, read_text

ROOT_NAME = "register.yaml"
MAX_FILES = 5_000


class Files(Protocol):
    """Files by name; a name is relative to the register's folder, with forward slashes."""

    def read(self, name: str) -> bytes:
        """Content of a file; an OSError where it cannot be read."""
        ...

    def matching(self, pattern: str) -> list[str]:
        """Names of the files that a pattern of `include` matches, in order."""
        ...

    def leads_outside(self, name: str) -> bool:
        """Whether the file is a link to a place outside the register's folder."""
        ...


@dataclass(frozen=True, slots=True)
class FolderFiles:
    """Files of a folder on disk."""

    folder: Path

    def read(self, name: str) -> bytes:
        return (self.folder / name).read_bytes()

    def matching(self, pattern: str) -> list[str]:
        if not _names_files(pattern):
            return []
        found = sorted(file for file in self.folder.glob(pattern) if file.is_file())
        return [file.relative_to(self.folder).as_posix() for file in found]

    def leads_outside(self, name: str) -> bool:
        return not (self.folder / name).resolve().is_relative_to(self.folder.resolve())


@dataclass(frozen=True, slots=True)
class HeldFiles:
    """Files held in memory, as those of an earlier revision."""

    contents: Mapping[str, bytes]

    def read(self, name: str) -> bytes:
        return self.contents[name]

    def matching(self, pattern: str) -> list[str]:
        return matching(pattern, self.contents)

    def leads_outside(self, name: str) -> bool:
        return False


def located(path: Path) -> tuple[Path, str]:
    """Folder and name of the root file of the register that a path names."""
    return (path.parent, path.name) if path.is_file() else (path, ROOT_NAME)


def is_register(path: Path) -> bool:
    """Whether a path names a register: its folder, or a root file."""
    return (path / ROOT_NAME).is_file() or (path.is_file() and path.suffix in (".yaml", ".yml"))


def matching(pattern: str, names: Iterable[str]) -> list[str]:
    """The names that a pattern of `include` matches, as a folder's `glob` finds and orders them."""
    parts = PurePosixPath(pattern).parts
    if not _names_files(pattern):
        return []
    return sorted((name for name in names if _matches(parts, PurePosixPath(name).parts)), key=PurePosixPath)


def _names_files(pattern: str) -> bool:
    """Whether a pattern means the same to every version of Python: `a**` and a last `**` do not."""
    parts = PurePosixPath(pattern).parts
    return bool(parts) and parts[-1] != "**" and all("**" not in part or part == "**" for part in parts)


def _matches(pattern: tuple[str, ...], name: tuple[str, ...]) -> bool:
    """Whether a name matches, folder by folder; `**` stands for any number of folders."""
    reached = {0}
    for part in pattern:
        if part == "**":
            reached = set(range(min(reached), len(name))) if reached else set()
        else:
            reached = {at + 1 for at in reached if at < len(name) and fnmatchcase(name[at], part)}
    return len(name) in reached


def read_file(files: Files, name: str, sources: dict[str, bytes]) -> TextFile | Fault:
    """One file of the register, its content kept in ``sources``; or why it cannot be read."""
    try:
        content = files.read(name)
    except OSError as error:
        return Fault(Place(name, 1, 1), f"the file cannot be read ({error.strerror})", "check its name and permissions")
    sources[name] = content
    return read_text(content, name)


def included(files: Files, root: TextFile) -> tuple[list[str], list[Fault]]:
    """Names of the included files in order, and a fault for each pattern that leads nowhere or outside."""
    patterns = root.data.get("include", []) if isinstance(root.data, dict) else []
    if not isinstance(patterns, list):
        return [], [Fault(root.place(("include",)), "`include` is not a list", "write `include: [units/*.yaml]`")]
    names: dict[str, None] = {}
    faults = []
    for index, pattern in enumerate(patterns):
        place = root.place(("include", index))
        if not isinstance(pattern, str) or not pattern:
            faults.append(Fault(place, "an `include` entry is not a file name", "write `include: [units/*.yaml]`"))
            continue
        if Path(pattern).is_absolute() or ".." in Path(pattern).parts:
            faults.append(
                Fault(
                    place,
                    f"`{pattern}` leads outside the register's folder",
                    "include files inside the folder only",
                )
            )
            continue
        found = [name for name in files.matching(pattern) if PurePosixPath(name).name != root.name]
        outside = [name for name in found if files.leads_outside(name)]
        if outside:
            faults.append(
                Fault(
                    place,
                    f"`{outside[0]}` is a link that leads outside the register's folder",
                    "include files inside the folder only",
                )
            )
        elif not found:
            faults.append(Fault(place, f"no file matches `{pattern}`", "correct the name, or remove the entry"))
        names.update(dict.fromkeys(found))
    if len(names) > MAX_FILES:
        faults.append(
            Fault(root.place(("include",)), f"more than {MAX_FILES} files are included", "include fewer files")
        )
    return list(names), faults
