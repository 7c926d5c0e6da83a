"""Two registers compared, as text for people, JSON for programs and Markdown for a pull request."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Sequence
from typing import Any

from loopdoc.exchange.escaping import as_code, for_json, for_markdown, for_terminal
from loopdoc.exchange.findings import CAUTION, counted
from loopdoc.revisions.changes import NAMED, Change, Kind, TagChange
from loopdoc.revisions.compare import DocumentChange, RegisterComparison
from loopdoc.revisions.effects import FindingChange, LoopMargins, MarginChange

_SIGNS = {
    Kind.ADDED: "+", Kind.REMOVED: "-", Kind.CHANGED: "~", Kind.RENAMED: "~", Kind.REWRITTEN: "=",
}  # fmt: skip
_FIGURES = ("gain margin", "phase margin, deg", "Ms", "crossover, rad/s", "speed ratio")
MAX_ROWS = 200
"""Rows of one table in Markdown; nobody reads on."""


def comparison_text(found: RegisterComparison) -> str:
    """What changed by how far it reaches, and what that does to the plant."""
    lines = [headline(found), ""]
    impact = None
    for tag in found.tags:
        if found.impact(tag) is not impact:
            impact = found.impact(tag)
            lines += [f"{str(impact).capitalize()}", ""]
        lines.append(tag_line(tag))
        if tag.kind is not Kind.REMOVED:
            lines += [f"    {line}" for change in tag.changes for line in _change_lines(change)]
        lines.append("")
    for title, told in _effects(found):
        lines += [title, "", *(f"    {line}" for line in told), ""]
    lines.append(CAUTION)
    return for_terminal("\n".join(lines) + "\n")


def headline(found: RegisterComparison) -> str:
    """What was compared, and what came of it, in one sentence."""
    between = f"From revision {found.old} ({found.old.named}) to {found.new} ({found.new.named})"
    if not found.tags:
        return f"{between}: no difference."
    if not found.differs:
        return f"{between}: the same values, some written otherwise."
    kinds = [tag.kind for tag in found.tags if not tag.only_rewritten and tag.section != "register"]
    counts = [f"{kinds.count(kind)} {kind}" for kind in (Kind.ADDED, Kind.REMOVED, Kind.RENAMED, Kind.CHANGED)
              if kind in kinds]  # fmt: skip
    told = ", ".join(counts)
    return f"{between}: {told or 'only the head of the register differs'}."


def tag_line(tag: TagChange) -> str:
    """A tag, what it is and what became of it."""
    unit = f" in unit {tag.unit}" if tag.unit and tag.section not in ("units", "texts") else ""
    service = f", {tag.service}" if tag.service else ""
    what = {
        Kind.RENAMED: f"renamed from {tag.was} ({tag.evidence})",
        Kind.CHANGED: "written otherwise" if tag.only_rewritten else "changed",
    }.get(tag.kind, str(tag.kind))
    if tag.section == "register":
        return f"Head of the register: {what}"
    return f"{tag.tag} ({NAMED[tag.section]}{unit}{service}): {what}"


def _change_lines(change: Change) -> Iterator[str]:
    remark = f" ({change.remark})" if change.remark else ""
    match change.kind:
        case Kind.ADDED:
            said = change.new
        case Kind.REMOVED:
            said = f"{change.old} (removed)"
        case Kind.REWRITTEN:
            said = f"{change.old} → {change.new}, {change.kind}"
        case _:
            said = f"{change.old} → {change.new}{remark}"
    yield f"{_SIGNS[change.kind]} {change.pointer}: {said}"


def _effects(found: RegisterComparison) -> Iterator[tuple[str, list[str]]]:
    """The title of each effect that there is, with its lines."""
    effects = found.effects
    blocks: tuple[tuple[str, Iterable[str]], ...] = (
        ("Findings that appear or stand worse", map(_finding_line, (one for one in effects.findings if one.appears))),
        ("Findings that vanish or are accepted",
         map(_finding_line, (one for one in effects.findings if not one.appears))),
        ("Margins", (line for one in effects.margins for line in _margin_lines(one))),
        ("Failure effects",
         (line for one in effects.failures
          for line in (f"{one.tag}, {one.failure}{', worse' if one.worse else ''}:",
                       f"    {one.before or 'no effect'} →", f"    {one.after or 'no effect'}"))),
        ("Time from alarm to trip",
         (f"{one.tag} {one.alarm.replace('_', '-')} to {one.interlock}: {' → '.join(one.told)}"
          for one in effects.times)),
        ("Cause and effect",
         (f"{one.interlock}, {one.what}{f' {one.about}' if one.about else ''}: {one.old or 'none'} → "
          f"{one.new or 'none'}" for one in found.cause_and_effect)),
        ("Documents", map(document_line, found.documents or ())),
    )  # fmt: skip
    for title, told in blocks:
        if lines := list(told):
            yield title, lines
    if found.documents == ():
        yield "Documents", ["None changes in more than its title block."]


def _finding_line(one: FindingChange) -> str:
    finding = one.finding
    return f"{one.what}: {finding.level}: {finding.rule}: {finding.tag}: {finding.message}"


def _margin_lines(one: MarginChange) -> Iterator[str]:
    before, after = _state(one.before), _state(one.after)
    yield f"{one.tag}:{f' {before} → {after}' if before != after else ''}"
    for name, before, after in zip(_FIGURES, one.before.figures, one.after.figures, strict=True):
        if before != after:
            yield f"    {name}: {before} → {after}"


def _state(margins: LoopMargins) -> str:
    if math.isnan(margins.max_sensitivity):
        return f"not known{f' ({margins.reason})' if margins.reason else ''}"
    return "stable" if margins.stable else "unstable"


def document_line(one: DocumentChange) -> str:
    """A document and what becomes of it."""
    counts = [counted(one.blocks, "block") + " differ" * (one.blocks != 1) + " differs" * (one.blocks == 1)]
    counts += [f"{counted(one.removed, 'block')} gone"] if one.removed else []
    told = f": {', '.join(counts)}" if one.what == "changed" else ""
    return f"{one.what}: {one.number} {one.kind}, {one.title}{told}"


# ---------------------------------------------------------------- JSON


def comparison_json(found: RegisterComparison) -> str:
    """The whole comparison as one object."""
    effects = found.effects
    return for_json(
        {
            "old": {"named": found.old.named, "revision": found.old.code, "date": found.old.date},
            "new": {"named": found.new.named, "revision": found.new.code, "date": found.new.date},
            "differs": found.differs,
            "tags": [_tag_object(found, tag) for tag in found.tags],
            "findings": [
                {"what": one.what, "rule": one.finding.rule, "level": str(one.finding.level), "tag": one.finding.tag,
                 "message": one.finding.message, "accepted": one.finding.accepted_by is not None}
                for one in effects.findings
            ],
            "margins": [
                {"tag": one.tag, "before": _margins_object(one.before), "after": _margins_object(one.after)}
                for one in effects.margins
            ],
            "failure_effects": [
                {"tag": one.tag, "failure": one.failure, "before": one.before, "after": one.after, "worse": one.worse}
                for one in effects.failures
            ],
            "times_to_trip": [
                {"tag": one.tag, "alarm": one.alarm, "interlock": one.interlock, "before_s": _number(one.before_s),
                 "after_s": _number(one.after_s), "before": one.told[0], "after": one.told[1]}
                for one in effects.times
            ],
            "cause_and_effect": [
                {"interlock": one.interlock, "what": one.what, "about": one.about, "old": one.old, "new": one.new}
                for one in found.cause_and_effect
            ],
            "documents": None if found.documents is None else [
                {"what": one.what, "kind": one.kind, "number": one.number, "title": one.title,
                 "supplementary_title": one.supplementary_title, "blocks": one.blocks, "removed": one.removed}
                for one in found.documents
            ],
            "caution": CAUTION,
        }
    ) + "\n"  # fmt: skip


def _tag_object(found: RegisterComparison, tag: TagChange) -> dict[str, Any]:
    return {
        "tag": tag.tag,
        "section": tag.section,
        "kind": "rewritten" if tag.only_rewritten else tag.kind.name.lower(),
        "unit": tag.unit or None,
        "service": tag.service or None,
        "was": tag.was or None,
        "evidence": tag.evidence or None,
        "impact": found.impact(tag).name.lower(),
        "changes": [
            {
                "kind": change.kind.name.lower(),
                "pointer": change.pointer,
                "old": change.old if change.kind is not Kind.ADDED else None,
                "new": change.new if change.kind is not Kind.REMOVED else None,
                "remark": change.remark or None,
                "impact": change.impact.name.lower(),
                "file": change.place.file if change.place else None,
                "line": change.place.line if change.place else None,
                "column": change.place.column if change.place else None,
            }
            for change in tag.changes
        ],
    }


def _margins_object(margins: LoopMargins) -> dict[str, Any]:
    return {
        "stable": margins.stable if not math.isnan(margins.max_sensitivity) else None,
        "gain_margin": _number(margins.gain_margin),
        "phase_margin_deg": _number(margins.phase_margin_deg),
        "max_sensitivity": _number(margins.max_sensitivity),
        "crossover_rad_per_s": _number(margins.crossover_rad_per_s),
        "speed_ratio": _number(margins.speed_ratio),
        "reason": margins.reason or None,
    }


def _number(value: float) -> float | None:
    """JSON knows neither infinity nor what is not a number."""
    return value if math.isfinite(value) else None


# ---------------------------------------------------------------- Markdown


def comparison_markdown(found: RegisterComparison) -> str:
    """Tables for the comment of a pull request."""
    lines = ["## What the change does", "", for_markdown(headline(found))]
    rows = [(tag, change) for tag in found.tags for change in (tag.changes if tag.kind is not Kind.REMOVED else ())]
    whole = [tag for tag in found.tags if tag.kind is not Kind.CHANGED]
    if whole:
        lines += ["", *(f"- {for_markdown(tag_line(tag))}" for tag in whole[:MAX_ROWS])]
        lines += [f"- and {len(whole) - MAX_ROWS} more"] if len(whole) > MAX_ROWS else []
    rows = [(tag, change) for tag, change in rows if tag.kind is not Kind.ADDED]
    if rows:
        lines += ["", "| Reach | Tag | Value | Was | Is |", "| --- | --- | --- | --- | --- |"]
    for tag, change in rows[:MAX_ROWS]:
        remark = f" ({change.remark})" if change.remark else ""
        same = f" ({change.kind})" if change.kind is Kind.REWRITTEN else ""
        cells = (str(found.impact(tag)), tag.tag)
        told = (change.old, f"{change.new}{remark}{same}")
        lines.append(f"| {' | '.join(map(for_markdown, cells))} | {as_code(change.pointer)} | "
                     f"{' | '.join(for_markdown(one) for one in told)} |")  # fmt: skip
    if len(rows) > MAX_ROWS:
        lines.append(f"| | | and {len(rows) - MAX_ROWS} more | | |")
    tables: dict[str, tuple[Sequence[str], Sequence[Sequence[str]]]] = {
        "Margins": (("Loop", *(name.capitalize() if name != "Ms" else name for name in _FIGURES), "State"),
                    [_margin_cells(one) for one in found.effects.margins]),
        "Failure effects": (("Loop", "Failure", "Was", "Is"),
                            [(one.tag, f"{one.failure}{', worse' if one.worse else ''}", one.before or "no effect",
                              one.after or "no effect") for one in found.effects.failures]),
    }  # fmt: skip
    for title, effects in _effects(found):
        lines += ["", f"### {title}", ""]
        if title in tables:
            lines += _markdown_table(*tables[title])
            continue
        lines += [f"- {for_markdown(line.strip())}" for line in effects[:MAX_ROWS]]
        lines += [f"- and {len(effects) - MAX_ROWS} more"] if len(effects) > MAX_ROWS else []
    return "\n".join([*lines, "", CAUTION, ""])


def _markdown_table(head: Sequence[str], rows: Sequence[Sequence[str]]) -> Iterator[str]:
    yield f"| {' | '.join(head)} |"
    yield f"|{' --- |' * len(head)}"
    for row in rows[:MAX_ROWS]:
        yield f"| {' | '.join(map(for_markdown, row))} |"
    if len(rows) > MAX_ROWS:
        yield f"| and {len(rows) - MAX_ROWS} more |{' |' * (len(head) - 1)}"


def _margin_cells(one: MarginChange) -> Sequence[str]:
    pairs = (*zip(one.before.figures, one.after.figures, strict=True), (_state(one.before), _state(one.after)))
    return (one.tag, *(before if before == after else f"{before} → {after}" for before, after in pairs))
