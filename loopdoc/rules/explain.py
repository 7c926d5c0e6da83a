"""What is said about a rule: one page of text or Markdown each, and the list of all."""

from __future__ import annotations

import ast
import inspect
import sys
import textwrap
from collections.abc import Callable
from functools import cache
from typing import Any

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
    limits = thresholds(rule)
    if limits:
        filled = [textwrap.fill(told, WIDTH, initial_indent="  ", subsequent_indent="    ") for told in limits]
        parts.append("\n".join(["Policy", *filled]))
    parts.append(f"Source: {rule.source}. Since version {rule.since}.")
    return "\n\n".join(parts) + "\n"


def as_markdown(rule: Rule) -> str:
    """The page on one rule in Markdown."""
    parts = [f"# {rule.id}", f"**{str(rule.level).capitalize()}.** {_plain(rule.statement)}"]
    for heading in HEADINGS:
        parts += [f"## {heading}", _plain(rule.sections[heading])]
    limits = thresholds(rule)
    if limits:
        parts += ["## Policy", "\n".join(f"- {threshold_in_markdown(told)}" for told in limits)]
    source = f"{rule.source[:1].upper()}{rule.source[1:]}. Since version {rule.since}."
    parts += ["## Source", _plain(source)]
    return "\n\n".join(parts) + "\n"


def overview() -> str:
    """Every rule with its level and statement, then every threshold with its default and source."""
    width = max(len(rule.id) for rule in RULES)
    lines = [f"{rule.id:<{width}}  {rule.level!s:<7}  {rule.statement}" for rule in RULES]
    lines += ["", "Thresholds (change them under `policy:` in register.yaml):", *all_thresholds()]
    return "\n".join(lines) + "\n"


def thresholds(rule: Rule) -> tuple[str, ...]:
    """The thresholds by which a rule judges, each with its default, unit, meaning and source."""
    asked = _limits_asked(rule.function, set())
    return tuple(told for name, told in _thresholds().items() if name in asked)


def all_thresholds() -> tuple[str, ...]:
    """Every threshold with its default, unit, meaning and source."""
    return tuple(_thresholds().values())


def threshold_in_markdown(told: str) -> str:
    """One of the thresholds in Markdown."""
    name, _, about = told.partition(":")
    return f"`{name}`:{_plain(about)}"


def _thresholds() -> dict[str, str]:
    entries = {entry.name: (entry.default, entry.metadata) for entry in policy_entries()}
    return {
        name: f"{name}: {default:g}  [{about['unit']}] {about['meaning']} ({about['source']})"
        for name, (default, about) in entries.items()
    }


def _limits_asked(function: Callable[..., Any], seen: set[Callable[..., Any]]) -> set[str]:
    """Names of the limits that a rule's function, and the functions of the rules that it calls, look at."""
    seen.add(function)
    asked: set[str] = set()
    for node in ast.walk(_functions(function.__module__)[function.__name__]):
        if isinstance(node, ast.Attribute) and isinstance(node.value, ast.Name) and node.value.id == "limits":
            asked.add(node.attr)
        elif isinstance(node, ast.Name):
            called = function.__globals__.get(node.id)
            if inspect.isfunction(called) and called.__module__.startswith("loopdoc.rules") and called not in seen:
                asked |= _limits_asked(called, seen)
    return asked


@cache
def _functions(module: str) -> dict[str, ast.AST]:
    """The functions of a module by name, as written."""
    tree = ast.parse(inspect.getsource(sys.modules[module]))
    return {node.name: node for node in tree.body if isinstance(node, ast.FunctionDef)}


def _plain(text: str) -> str:
    """Our own text, in which nothing but code spans is markup."""
    pieces = text.split("`")
    for index in range(0, len(pieces), 2):
        for character in "\\*_<[":
            pieces[index] = pieces[index].replace(character, f"\\{character}")
    return "`".join(pieces)
