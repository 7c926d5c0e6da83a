"""What was found out about handed-over files, as text for people and as JSON for programs."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import asdict

from loopdoc.documents.handover.attest import Answer, Attested, NotIssued
from loopdoc.documents.handover.attest_package import Verified

CAUTION = (
    "A file bears no signature: this tells a file that was altered or is out of date, not who issued it. It does not "
    "replace review by licensed or competent persons."
)
_QUESTIONS = (
    ("register_whole", "the register inside is whole"),
    ("pages_unaltered", "the pages are those that it gives, byte for byte"),
    ("current", "the register of today says the same"),
)

Answered = tuple[str, Attested | NotIssued]
"""Name of a file and what was found out about it."""


def packages_text(verified: Sequence[tuple[str, Verified | NotIssued]]) -> str:
    """One paragraph a package, with every file that is not as listed."""
    lines = []
    for name, found in verified:
        if isinstance(found, NotIssued):
            lines += [f"{name}: {found.reason}", ""]
            continue
        state = "not as written" if found.doubted else "every file is as listed"
        lines.append(f"{name}: package of {found.files} files, {state}")
        for word, files in (("missing", found.missing), ("altered", found.altered), ("not listed", found.unlisted)):
            lines += [f"    {word:11}  {file}" for file in files]
        lines.append("")
    return "\n".join((*lines, ""))


def report_text(answered: Sequence[Answered], *, against: str) -> str:
    """One paragraph a file; ``against`` names the register compared with, if one was given."""
    lines = []
    for name, found in answered:
        if isinstance(found, NotIssued):
            lines += [f"{name}: {found.reason}", ""]
            continue
        told = found.statement
        draft = f", DRAFT: {told.draft}" if told.draft else ""
        lines.append(
            f"{name}: {told.number}, {told.title}, revision {told.revision} of {told.date}, {told.status}{draft}"
        )
        lines.append(f"    register fingerprint (SHA-256)  {told.fingerprint}")
        for key, question in _QUESTIONS:
            answer: Answer = getattr(found, key)
            if key != "current" or against:
                lines.append(f"    {answer.value:11}  {question}")
        lines += [f"    {remark}" for remark in found.remarks]
        lines.append("")
    return "\n".join((*lines, CAUTION, ""))


def report_json(
    answered: Sequence[Answered], *, against: str, verified: Sequence[tuple[str, Verified | NotIssued]] = ()
) -> str:
    """One object a file under `files`, and one a package under `packages`."""
    packages = [
        {"file": name, "issued": False, "reason": found.reason}
        if isinstance(found, NotIssued)
        else {"file": name, "issued": True, **asdict(found)}
        for name, found in verified
    ]
    files = [
        {"file": name, "issued": False, "reason": found.reason}
        if isinstance(found, NotIssued)
        else {
            "file": name,
            "issued": True,
            **asdict(found.statement),
            **{key: getattr(found, key).value for key, _ in _QUESTIONS},
            "remarks": list(found.remarks),
        }
        for name, found in answered
    ]
    told = {"register": against or None, "packages": packages, "files": files, "caution": CAUTION}
    return json.dumps(told, indent=2) + "\n"
