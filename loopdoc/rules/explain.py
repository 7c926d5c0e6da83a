"""What is said about a rule: one page of text each, and the list of all."""

from __future__ import annotations

import textwrap

from loopdoc.rules.catalogue import RULES
from loopdoc.rules.policy import policy_entries
from loopdoc.rules.rule import HEADINGS, Rule

WIDTH = 88


def explanation(rule: Rule) -> str:
    """The page on one rule."""
    parts = [f"{rule.id} ({rule.level})", textwrap.fill(rule.statement, WIDTH)]
    for heading in HEADINGS:
        body = textwrap.fill(rule.sections[heading], WIDTH, initial_indent="  ", subsequent_indent="  ")
        parts.append(f"{heading}\n{body}")
    parts.append(f"Source: {rule.source}. Since version {rule.since}.")
    return "\n\n".join(parts) + "\n"


def overview() -> str:
    """Every rule with its level and statement, then every threshold with its default and source."""
    width = max(len(rule.id) for rule in RULES)
    lines = [f"{rule.id:<{width}}  {rule.level!s:<7}  {rule.statement}" for rule in RULES]
    lines += ["", "Thresholds (change them under `policy:` in register.yaml):"]
    for entry in policy_entries():
        about = entry.metadata
        lines.append(f"{entry.name}: {entry.default:g}  [{about['unit']}] {about['meaning']} ({about['source']})")
    return "\n".join(lines) + "\n"
