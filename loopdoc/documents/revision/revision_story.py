"""A revision in prose: what it changes, and what a reviewer should look at first."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

from loopdoc.documents.wording import counted, listed, sentence, upper_first
from loopdoc.register.quantity import display_number
from loopdoc.revisions.changes import NAMED, Impact, Kind
from loopdoc.revisions.compare import RegisterComparison
from loopdoc.revisions.effects import MarginChange
from loopdoc.rules.finding import Level

_VERBS = ((Kind.ADDED, "adds"), (Kind.REMOVED, "removes"), (Kind.RENAMED, "renames"), (Kind.CHANGED, "changes"))
NAMED_TAGS = 5
"""So many tags are named in a sentence; of more the number is told."""


def story(found: RegisterComparison) -> tuple[str, ...]:
    """The paragraphs of the summary."""
    if not found.differs:
        written = " Some values are written otherwise, and mean the same." if found.tags else ""
        return (f"Revision {found.new} says the same as revision {found.old}.{written}",)
    return tuple(
        " ".join(sentences)
        for sentences in (list(_changes(found)), list(_effects(found)), list(_documents(found)))
        if sentences
    )


def _changes(found: RegisterComparison) -> Iterator[str]:
    parts = []
    for kind, verb in _VERBS:
        by_section: dict[str, list[str]] = {}
        for tag in found.tags:
            if tag.kind is kind and not tag.only_rewritten and tag.section != "register":
                name = f"{tag.was} to {tag.tag}" if tag.was else tag.tag
                by_section.setdefault(tag.section, []).append(name)
        if by_section:
            parts.append(f"{verb} {listed(_things(section, tags) for section, tags in by_section.items())}")
    yield sentence(f"Revision {found.new} {listed(parts) or 'changes only the head of the register'}, "
                   f"seen from revision {found.old}")  # fmt: skip
    deep = [tag.tag for tag in found.tags if found.impact(tag) is Impact.PROTECTION]
    if deep:
        yield sentence(f"To be looked at first, since trips, failures or directions are concerned: {_few(deep)}")
    rewritten = [tag.tag for tag in found.tags if tag.only_rewritten]
    if rewritten:
        yield sentence(f"Only written otherwise: {_few(rewritten)}")


def _things(section: str, tags: Sequence[str]) -> str:
    """`one loop (FIC-2011)`, `twelve loops`."""
    named = f" ({listed(tags)})" if len(tags) <= NAMED_TAGS else ""
    return f"{counted(len(tags), NAMED[section])}{named}"


def _few(tags: Sequence[str]) -> str:
    if len(tags) <= NAMED_TAGS:
        return listed(tags)
    return f"{', '.join(tags[:NAMED_TAGS])} and {len(tags) - NAMED_TAGS} more"


def _effects(found: RegisterComparison) -> Iterator[str]:
    effects = found.effects
    appear = [one.finding for one in effects.findings if one.appears]
    if appear:
        counts = [counted(sum(one.level is level for one in appear), str(level))
                  for level in sorted(Level, reverse=True) if any(one.level is level for one in appear)]  # fmt: skip
        yield sentence(f"The check has {listed(counts)} that it had not before")
    gone = sum(not one.appears for one in effects.findings)
    if gone:
        are = "is" if gone == 1 else "are"
        yield sentence(f"{upper_first(counted(gone, 'finding'))} of before {are} gone or accepted")
    if not effects.findings:
        yield "The check finds what it found before."
    if effects.margins:
        yield sentence(f"Margins change at {_few([one.tag for one in effects.margins])}")
        worst = max(effects.margins, key=_loss)
        if _loss(worst) > 0.0:
            yield sentence(_margin_told(worst))
    else:
        yield "No margin changes."
    worse = [one.tag for one in effects.failures if one.worse]
    if worse:
        told = _few(list(dict.fromkeys(worse)))
        yield sentence(
            f"After a failure at {told}, a measurement now goes to its hazard with nothing against it, which it did "
            "not before"
        )
    elif effects.failures:
        yield sentence(f"Failure effects change at {_few(list(dict.fromkeys(one.tag for one in effects.failures)))}")
    else:
        yield "No failure effect changes."
    for time in effects.times:
        if time.after_s < time.before_s:
            was, now = time.told
            alarm = f"{time.alarm.replace('_', '-')} alarm of {time.tag}"
            yield sentence(f"From the {alarm} to {time.interlock} the operator had {was} and has {now}")


def _loss(change: MarginChange) -> float:
    """By how much the maximum sensitivity rises; infinite where a loop becomes unstable."""
    if change.before.stable and not change.after.stable and not math.isnan(change.after.max_sensitivity):
        return math.inf
    rise = change.after.max_sensitivity - change.before.max_sensitivity
    return rise if math.isfinite(rise) else 0.0


def _margin_told(change: MarginChange) -> str:
    if not change.after.stable:
        return f"{change.tag} becomes unstable as written"
    before, after = (display_number(side.max_sensitivity, 3) for side in (change.before, change.after))
    return f"the largest loss is at {change.tag}, whose maximum sensitivity rises from {before} to {after}"


def _documents(found: RegisterComparison) -> Iterator[str]:
    documents = found.documents
    if documents is None:
        return
    if not documents:
        yield "No document says anything else than before, apart from its revision."
        return
    parts = []
    for what, verb in (("changed", "change"), ("new", "come new"), ("withdrawn", "are withdrawn")):
        number = sum(one.what == what for one in documents)
        if number:
            single = {"change": "changes", "come new": "comes new", "are withdrawn": "is withdrawn"}[verb]
            parts.append(f"{counted(number, 'document')} {single if number == 1 else verb}")
    yield sentence(upper_first(listed(parts)))
