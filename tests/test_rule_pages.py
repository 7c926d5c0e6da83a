"""The pages of `docs/rules/`: made from the rules and their cases, and not left behind by them."""

from __future__ import annotations

import importlib.util
import re
from pathlib import Path
from types import ModuleType

import pytest
from markdown_it import MarkdownIt

from loopdoc.rules.catalogue import RULES
from loopdoc.rules.explain import as_markdown, explanation, thresholds
from loopdoc.rules.rule import Rule

ROOT = Path(__file__).parent.parent
PAGES = ROOT / "docs" / "rules"


def maker() -> ModuleType:
    specification = importlib.util.spec_from_file_location("make_rule_pages", ROOT / "docs" / "make_rule_pages.py")
    assert specification is not None
    assert specification.loader is not None
    module = importlib.util.module_from_spec(specification)
    specification.loader.exec_module(module)
    return module


def test_the_pages_say_what_the_rules_say_now() -> None:
    wanted = maker().pages()
    written = {path.name: path.read_text("utf-8") for path in PAGES.glob("*")}
    stale = sorted(name for name in wanted.keys() | written.keys() if wanted.get(name) != written.get(name))
    assert stale == [], "run: python docs/make_rule_pages.py"


def test_links_between_the_documents_lead_somewhere() -> None:
    broken = [
        f"{page.name}: {target}"
        for page in [*ROOT.glob("*.md"), *(ROOT / "docs").rglob("*.md")]
        for target in re.findall(r"\]\(([^)#:]+)(?:#[^)]*)?\)", page.read_text("utf-8"))
        if not (page.parent / target).exists()
    ]
    assert broken == []


@pytest.mark.parametrize("rule", RULES, ids=lambda rule: rule.id)
def test_a_page_is_plain_markdown(rule: Rule) -> None:
    tokens = MarkdownIt("gfm-like").parse(as_markdown(rule))
    parts = {part.type for token in tokens for part in token.children or []}
    assert parts <= {"text", "text_special", "code_inline", "strong_open", "strong_close"}
    assert {token.type for token in tokens if token.type.endswith("_block") or token.type == "fence"} == set()
    heads = [tokens[at + 1].content for at, token in enumerate(tokens) if token.type == "heading_open"]
    assert heads[0] == rule.id


def test_a_rule_names_the_thresholds_by_which_it_judges() -> None:
    by_id = {rule.id: rule for rule in RULES}
    assert [told.split(":")[0] for told in thresholds(by_id["cascade-too-slow"])] == ["cascade_speed_ratio"]
    assert thresholds(by_id["action-wrong"]) == ()
    told = {line.split(":")[0] for line in thresholds(by_id["margin-low"])}  # asked for in functions that it calls
    assert {"gain_margin", "max_sensitivity"} <= told
    assert "cascade_speed_ratio: 4" in " ".join(explanation(by_id["cascade-too-slow"]).split())
