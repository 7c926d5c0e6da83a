"""Write `docs/rules/`: a page for each rule, from the rule itself and its cases in `tests/rules/`.

Run: python docs/make_rule_pages.py
"""

from __future__ import annotations

import difflib
import tempfile
import textwrap
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import yaml

from loopdoc.engineering.pairing import Plant
from loopdoc.exchange.escaping import for_markdown
from loopdoc.register.load import Loaded, load
from loopdoc.rules.catalogue import RULES
from loopdoc.rules.check import check
from loopdoc.rules.explain import all_thresholds, as_markdown, threshold_in_markdown
from loopdoc.rules.finding import Finding
from loopdoc.rules.rule import Rule

ROOT = Path(__file__).resolve().parent.parent
PAGES = ROOT / "docs" / "rules"
CASES = ROOT / "tests" / "rules"
MARK = "▸"
SHOWN_CASES = 2
"""Cases of each kind on a page."""


def pages() -> dict[str, str]:
    """Text of each file of `docs/rules/`, by its name."""
    written = {f"{rule.id}.md": f"{as_markdown(rule)}\n{_examples(rule)}" for rule in RULES}
    return {"README.md": _index(), **written}


def _index() -> str:
    rows = [f"| [{rule.id}]({rule.id}.md) | {rule.level} | {rule.statement.replace('|', '&#124;')} |" for rule in RULES]
    return "\n".join(
        [
            "# Rules",
            "",
            "What `loopdoc check` looks for. `loopdoc explain RULE` prints the page of one.",
            "",
            "| Rule | Level | What it finds |",
            "| --- | --- | --- |",
            *rows,
            "",
            "## Thresholds",
            "",
            "A register changes one under `policy:` in `register.yaml`.",
            "",
            *(f"- {threshold_in_markdown(told)}" for told in all_thresholds()),
            "",
        ]
    )


def _examples(rule: Rule) -> str:
    cases = yaml.load((CASES / f"{rule.id}.yaml").read_text("utf-8"), Loader=yaml.CSafeLoader)
    breaking = [case for case in cases if case.get("finds")]
    holding = [case for case in cases if not case.get("finds") and not case.get("not_checked")]
    lines = [
        "## Examples",
        "",
        "Each is a change of [a register in which every rule holds](../../tests/rules/base-register.yaml); "
        f"further ones are in [the cases of the rule](../../tests/rules/{rule.id}.yaml).",
    ]
    for what, chosen in (("Breaks", breaking), ("Holds", holding)):
        for case in chosen[:SHOWN_CASES]:
            lines += ["", f"{what}: {for_markdown(case['case'])}", "", *_change(case)]
            if what == "Breaks":
                lines += [line for finding in _findings(rule, case) for line in ("", *_quoted(finding))]
    return "\n".join([*lines, ""])


def _patched(case: dict[str, Any]) -> tuple[str, str]:
    """The base register before and after the case's replacements."""
    base = text = (CASES / "base-register.yaml").read_text("utf-8")
    for old, new in case["replace"].items():
        text = text.replace(old, new)
    return base, text.replace(MARK, "")


def _change(case: dict[str, Any]) -> Iterator[str]:
    """The lines that a case changes, as a diff; each group of lines pushed to the left."""
    before, after = (text.splitlines() for text in _patched(case))
    groups: list[list[str]] = []
    for line in list(difflib.unified_diff(before, after, n=0, lineterm=""))[2:]:
        if line.startswith("@@"):
            groups.append([])
        else:
            groups[-1].append(line)
    if not groups:
        yield "The register as it stands."
        return
    yield "```diff"
    for number, group in enumerate(groups):
        if number:
            yield "  ..."
        plain = textwrap.dedent("\n".join(line[1:] for line in group)).split("\n")
        yield from (f"{line[0]} {rest}".rstrip() for line, rest in zip(group, plain, strict=True))
    yield "```"


def _findings(rule: Rule, case: dict[str, Any]) -> tuple[Finding, ...]:
    """What the rule finds in a case."""
    with tempfile.TemporaryDirectory() as folder:
        (Path(folder) / "register.yaml").write_text(_patched(case)[1], "utf-8")
        loaded = load(Path(folder))
    if not isinstance(loaded, Loaded):
        raise ValueError(f"the case `{case['case']}` of {rule.id} cannot be read")
    return check(Plant(loaded.register), loaded.faults, only=[rule.id]).findings


def _quoted(finding: Finding) -> Iterator[str]:
    told = f"{finding.level}: {finding.rule}: {finding.tag}: {finding.message}"
    yield f"> {for_markdown(told)}"
    yield ">"
    yield f"> remedy: {for_markdown(finding.remedy)}"


def main() -> None:
    PAGES.mkdir(exist_ok=True)
    wanted = pages()
    for old in set(PAGES.glob("*.md")) - {PAGES / name for name in wanted}:
        old.unlink()
    for name, text in wanted.items():
        (PAGES / name).write_text(text, "utf-8")
    print(f"{len(wanted)} pages in {PAGES.relative_to(ROOT)}")


if __name__ == "__main__":
    main()
