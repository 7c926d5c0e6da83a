"""The index of an issue: every document with its number, and the state of the check behind them."""

from __future__ import annotations

from collections.abc import Collection, Sequence

from loopdoc.documents.basis import Basis, Page
from loopdoc.documents.values import shown
from loopdoc.rules.finding import Finding


def index_page(basis: Basis, pages: Sequence[Page], formats: Collection[str]) -> Page:
    """The page that links every document issued with it."""
    site = basis.plant.register.site
    kinds: dict[str, list[dict[str, object]]] = {}
    for page in pages:
        path = f"{page.folder}/{page.name}"
        links = [
            {"label": form.upper(), "address": f"{path}.{form}"}
            for form in ("html", "pdf")
            if form in formats
        ]
        row: dict[str, object] = {
            "number": page.document.number,
            "title": page.document.title,
            "supplementary_title": page.document.supplementary_title,
            "links": links,
        }
        kinds.setdefault(page.document.kind, []).append(row)
    document = basis.document(
        kind="Document index",
        code="DI",
        title="Index of documents",
        supplementary_title=shown(site.name if site else None),
        unit="00",
        serial="001",
    )
    result = basis.result
    register = basis.plant.register
    view = {
        "kinds": [{"kind": kind, "rows": rows} for kind, rows in kinds.items()],
        "findings": [_finding_row(finding) for finding in result.findings],
        "accepted": [
            _finding_row(finding)
            | {
                "reason": shown(finding.accepted_by.reason),
                "approved_by": shown(finding.accepted_by.approved_by),
                "until": shown(finding.accepted_by.until),
            }
            for finding in result.accepted
            if finding.accepted_by
        ],
        "holds": [
            {"tag": hold.tag, "value": " ".join(map(str, hold.path)).replace("_", " "), "reason": hold.reason,
             "place": str(hold.place)}
            for hold in register.holds
        ],
        "coverage": [
            {
                "rule": rule,
                "checked": str(entry.checked),
                "not_checked": str(entry.not_checked),
                "found": str(sum(1 for f in (*result.findings, *result.accepted) if f.rule == rule)),
                "reason": entry.reasons.most_common(1)[0][0] if entry.reasons else "",
            }
            for rule, entry in result.coverage.items()
        ],
    }  # fmt: skip
    return Page("", "index", document, "index.html", view)


def _finding_row(finding: Finding) -> dict[str, str]:
    return {
        "level": str(finding.level),
        "rule": finding.rule,
        "tag": finding.tag,
        "message": finding.message,
        "remedy": finding.remedy,
        "place": str(finding.place),
    }
