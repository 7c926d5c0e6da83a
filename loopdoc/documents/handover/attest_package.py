"""A handed-over package against its own list of fingerprints: what is missing, altered or not listed."""

from __future__ import annotations

import hashlib
import zipfile
import zlib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path

from loopdoc.documents.handover.attest import MAX_BYTES, NotIssued
from loopdoc.documents.handover.package import SUMS_NAME, read_sums

MAX_FILES = 100_000


@dataclass(frozen=True, slots=True)
class PackageFiles:
    """The files of a package by name, each read when it is asked for."""

    names: tuple[str, ...]
    read: Callable[[str], bytes]
    """Content by name; an OSError where it cannot be read."""


@dataclass(frozen=True, slots=True)
class Verified:
    """A package's files against its list."""

    files: int
    """Listed in it."""
    missing: tuple[str, ...]
    altered: tuple[str, ...]
    unlisted: tuple[str, ...]

    @property
    def doubted(self) -> bool:
        """Whether the package is not as it was written."""
        return bool(self.missing or self.altered or self.unlisted)


def is_package(path: Path) -> bool:
    """Whether a path names a package: an archive, or a folder with the list."""
    return path.suffix.lower() == ".zip" or (path / SUMS_NAME).is_file()


def open_package(path: Path) -> PackageFiles | NotIssued:
    """The files of a package, in a folder or an archive; nothing of an archive is written to disk.

    Raises
    ------
    OSError
        There is no such file or folder.
    """
    if path.is_dir():
        names = sorted(file.relative_to(path).as_posix() for file in path.rglob("*") if file.is_file())
        return PackageFiles(tuple(names), lambda name: (path / name).read_bytes())
    try:
        with zipfile.ZipFile(path) as packed:
            entries = [entry for entry in packed.infolist() if not entry.is_dir()]
    except (zipfile.BadZipFile, ValueError, NotImplementedError):
        return NotIssued("it is no archive, or is damaged")
    if len(entries) > MAX_FILES or any(entry.file_size > MAX_BYTES for entry in entries):
        return NotIssued(f"it holds more than {MAX_FILES:,} files, or one larger than {MAX_BYTES // 1_000_000} MB")
    root = next((entry.filename.removesuffix(SUMS_NAME) for entry in entries if _is_list(entry.filename)), "")
    by_name = {entry.filename.removeprefix(root): entry for entry in entries}
    if len(by_name) < len(entries):
        return NotIssued("it holds two files of one name")

    def read(name: str) -> bytes:
        try:
            with zipfile.ZipFile(path) as packed, packed.open(by_name[name]) as file:
                return file.read(MAX_BYTES)
        except (zipfile.BadZipFile, zlib.error, EOFError, NotImplementedError, RuntimeError) as error:
            raise OSError(5, f"cannot be read from the archive ({error})", name) from error

    return PackageFiles(tuple(sorted(by_name)), read)


def verify(package: PackageFiles) -> Verified | NotIssued:
    """Compare every file with the list of the package."""
    if SUMS_NAME not in package.names:
        return NotIssued(f"it is no package that loopdoc wrote: it holds no `{SUMS_NAME}`")
    try:
        listed: Mapping[str, str] = read_sums(package.read(SUMS_NAME))
    except OSError:
        return NotIssued(f"its `{SUMS_NAME}` cannot be read")
    present = set(package.names) - {SUMS_NAME}
    return Verified(
        len(listed),
        missing=tuple(sorted(set(listed) - present)),
        altered=tuple(name for name in sorted(present & set(listed)) if _sha256(package, name) != listed[name]),
        unlisted=tuple(sorted(present - set(listed))),
    )


def _is_list(name: str) -> bool:
    return name.rsplit("/", 1)[-1] == SUMS_NAME


def _sha256(package: PackageFiles, name: str) -> str:
    try:
        return hashlib.sha256(package.read(name)).hexdigest()
    except OSError:  # a damaged entry of an archive is an altered file
        return ""
