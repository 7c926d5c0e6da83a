"""The files of a register as they stood at a revision, read from git's objects.

Nothing is checked out and no program that a repository may configure is run: names are resolved by `rev-parse`
to hashes first, and objects are read by `cat-file`, which knows no filter and no pager.
"""

from __future__ import annotations

import os
import subprocess
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from loopdoc.register.files import HeldFiles, included, located
from loopdoc.register.text import TextFile, read_text

# What git itself sets for the hooks it runs, and what would turn us to another repository than the folder's.
_LOCAL = (
    "GIT_ALTERNATE_OBJECT_DIRECTORIES", "GIT_COMMON_DIR", "GIT_DIR", "GIT_GRAFT_FILE", "GIT_IMPLICIT_WORK_TREE",
    "GIT_INDEX_FILE", "GIT_NAMESPACE", "GIT_OBJECT_DIRECTORY", "GIT_PREFIX", "GIT_SHALLOW_FILE", "GIT_WORK_TREE",
)  # fmt: skip
# No lazy fetch from a remote that a partial clone names: reading a register must not call out.
_OPTIONS = ("--no-pager", "--no-replace-objects", "-c", "core.fsmonitor=false", "-c", "protocol.allow=never")
_FILE_MODES = (b"100644", b"100755")


class GitError(Exception):
    """Why a revision cannot be read: git is missing, the folder is no repository, there is no such revision."""


def register_at(path: Path, revision: str) -> Mapping[str, bytes]:
    """Content of each file of the register, by its name, as it stood at a revision.

    ``path`` is the register's folder or root file today. Files that cannot be told from the root file, because it
    is none, are left out. Raises GitError.
    """
    folder, root_name = located(path)
    prefix = os.fsdecode(_git(folder, "rev-parse", "--show-prefix").removesuffix(b"\n")).rstrip("/")
    commit = commit_of(folder, revision)
    names = _names(folder, commit, prefix)
    if root_name not in names:
        where = f"`{prefix}/{root_name}`" if prefix else f"`{root_name}`"
        raise NoRegister(f"the revision {revision} has no {where}")
    contents = _contents(folder, {root_name: names[root_name]})
    root = read_text(contents[root_name], root_name)
    if isinstance(root, TextFile):
        wanted, _ = included(HeldFiles(dict.fromkeys(names, b"")), root)
        contents |= _contents(folder, {name: names[name] for name in wanted})
    return contents


class NoRegister(GitError):
    """The revision is there, and has no register in this folder."""


def commit_of(folder: Path, revision: str) -> str:
    """Hash of the commit that a revision names; raises GitError where it names none."""
    if not revision or "\0" in revision:
        raise GitError("a revision is the name or hash of a commit")
    try:
        named = _git(folder, "rev-parse", "--verify", "--quiet", "--end-of-options", f"{revision}^{{commit}}")
    except _Refused:
        if revision == "HEAD":
            raise NoRegister("the repository has no commit yet") from None
        raise GitError(
            f"git knows no revision `{revision}`; fetch it first (a shallow clone lacks older ones)"
        ) from None
    return named.decode("ascii", "replace").strip()


def _names(folder: Path, commit: str, prefix: str) -> dict[str, str]:
    """Hash of each file below the folder by its name; links and submodules are not followed."""
    try:
        # A hash stands before the colon, so that no path can be taken for an option or a pattern.
        tree = _git(folder, "rev-parse", "--verify", "--quiet", "--end-of-options", f"{commit}:{prefix}")
        listed = _git(folder, "ls-tree", "-r", "-z", "--full-tree", tree.decode("ascii").strip())
    except _Refused:
        return {}
    names = {}
    for entry in listed.split(b"\0"):
        about, _, name = entry.partition(b"\t")
        mode, _, rest = about.partition(b" ")
        if mode in _FILE_MODES:
            names[os.fsdecode(name)] = rest.split(b" ")[1].decode("ascii")
    return names


def _contents(folder: Path, hashes: Mapping[str, str]) -> dict[str, bytes]:
    """Content of each file by its name."""
    output = _git(folder, "cat-file", "--batch", send="".join(f"{object_}\n" for object_ in hashes.values()).encode())
    contents = {}
    at = 0
    for name in hashes:
        head, _, _ = output[at : at + 200].partition(b"\n")
        words = head.split()
        if len(words) != 3 or words[1] != b"blob":
            raise GitError(f"git has not got the content of `{name}`; fetch it first")
        at += len(head) + 1
        contents[name] = output[at : at + int(words[2])]
        at += int(words[2]) + 1
    return contents


class _Refused(GitError):
    """Git ran, and answered with an error."""


def _git(folder: Path, *arguments: str, send: bytes = b"") -> bytes:
    environment = {name: value for name, value in os.environ.items() if name not in _LOCAL}
    # Messages are read by people, and matched by no one; an old git must not ask for a password.
    environment |= {"GIT_OPTIONAL_LOCKS": "0", "GIT_TERMINAL_PROMPT": "0", "GIT_NO_LAZY_FETCH": "1"}
    command: Sequence[Any] = ("git", *_OPTIONS, *arguments)
    try:
        done = subprocess.run(command, cwd=folder, env=environment, input=send, capture_output=True, check=False)
    except FileNotFoundError:
        raise GitError("git is not installed, or not on the PATH; an earlier revision is read with it") from None
    if done.returncode:
        told = os.fsdecode(done.stderr).strip() or f"git ended with exit code {done.returncode}"
        raise _Refused(f"git cannot read the folder {folder}: {told}")
    return done.stdout
