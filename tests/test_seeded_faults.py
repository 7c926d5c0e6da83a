"""One fault a register, put into the examples: each is found by the rule that is meant for it, and by it alone.

A fault is a change of values, named by tag and JSON Pointer (`FIC-1002/measurement/range`), so that it stays where it
is when lines move. What the check finds beyond the unchanged register must be the finding that is meant, at its place,
and what is listed with it as a true consequence, with the reason why it is one.
"""

from __future__ import annotations

import copy
import functools
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import yaml

import loopdoc.engineering.comparison
import loopdoc.engineering.crossing
import loopdoc.engineering.sampled
import loopdoc.register.edit
import loopdoc.register.load
from loopdoc.engineering.pairing import Plant
from loopdoc.register import files
from loopdoc.register.edit import set_values
from loopdoc.register.files import HeldFiles
from loopdoc.register.load import Loaded, load_files
from loopdoc.register.place import Fault
from loopdoc.register.starter import starter_files
from loopdoc.register.text import TextFile, read_text
from loopdoc.rules.baseline import new_since
from loopdoc.rules.catalogue import RULES
from loopdoc.rules.check import check
from loopdoc.rules.finding import CheckResult, Finding, Level

FOLDER = Path(__file__).parent / "seeded-faults"
PLANTS_FILE = FOLDER / "plants.yaml"
EXAMPLES = Path(__file__).parent.parent / "examples"
TAGGED = ("loops", "final_elements", "instruments", "functions", "interlocks")
"""Sections whose name is left out of a place: its tag says which it is."""

Contents = Mapping[str, bytes]
Change = Mapping[str, Any]


@dataclass(frozen=True)
class Consequence:
    """A further finding that the fault brings about, and why it is true."""

    rule: str
    at: str
    why: str


@dataclass(frozen=True)
class SeededFault:
    """A change of a register that is a fault, and what must be found."""

    fault: str
    plant: str
    """An example, the starter, or a plant of `plants.yaml`."""
    rule: str
    change: Change = field(default_factory=dict)
    """New value by tag and pointer, or by file, `#` and path; none where the value is taken out."""
    rename: Mapping[str, str] = field(default_factory=dict)
    """New last step by tag and pointer."""
    at: str = ""
    """Where the finding must stand, by tag and pointer; where the change is, unless it is given."""
    says: str = ""
    """A part of the message."""
    also: tuple[Consequence, ...] = ()

    @property
    def place(self) -> str:
        return self.at or next(iter(self.change))


def seeded() -> list[SeededFault]:
    found = []
    for file in sorted(FOLDER.glob("*.yaml")):
        for entry in yaml.safe_load(file.read_text("utf-8")) if file != PLANTS_FILE else ():
            also = tuple(Consequence(**further) for further in entry.pop("also", ()))
            found.append(SeededFault(**entry, also=also))
    return found


# ---------------------------------------------------------------- registers


@functools.cache
def contents_of(plant: str) -> Contents:
    """The files of an example, of the starter, or of a plant made of one of them."""
    if plant == "starter":
        return starter_files()
    folder = EXAMPLES / plant
    if folder.is_dir():
        return {file.relative_to(folder).as_posix(): file.read_bytes() for file in sorted(folder.glob("**/*.yaml"))}
    made = plants()[plant]
    return changed(contents_of(made["from"]), made["change"])


@functools.cache
def plants() -> dict[str, dict[str, Any]]:
    found: dict[str, dict[str, Any]] = yaml.safe_load(PLANTS_FILE.read_text("utf-8"))
    return found


def changed(contents: Contents, change: Change, rename: Mapping[str, str] | None = None) -> Contents:
    """The files with values changed and keys renamed."""
    now = dict(contents)
    for pointer, value in change.items():
        _set(now, pointer, value)
    for pointer, new in (rename or {}).items():
        name, path = located(now, pointer)
        *above, old = path
        value = at_path(read_text(now[name], name), path)
        _edit(now, name, tuple(above), {old: None, new: value}, in_place_of={new: old})
    return now


def _set(contents: dict[str, bytes], pointer: str, value: Any) -> None:
    name, path = located(contents, pointer)
    text = read_text(contents[name], name)
    assert isinstance(text, TextFile)
    # The text is edited by mappings; of a list the whole is written anew.
    for length in range(len(path)):
        listed = at_path(text, path[:length])
        if isinstance(listed, list):
            listed = copy.deepcopy(listed)
            _set_in_list(listed, path[length:], value)
            path, value = path[:length], listed
            break
    *above, key = path
    _edit(contents, name, tuple(above), {key: value})


def _set_in_list(listed: list[Any], steps: Sequence[str], value: Any) -> None:
    holder: Any = listed
    for step in steps[:-1]:
        holder = holder[int(step)] if isinstance(holder, list) else holder[step]
    last: Any = int(steps[-1]) if isinstance(holder, list) else steps[-1]
    if value is None:
        del holder[last]
    else:
        holder[last] = value


def _edit(
    contents: dict[str, bytes],
    name: str,
    path: tuple[str, ...],
    values: Mapping[str, Any],
    in_place_of: Mapping[str, str] | None = None,
) -> None:
    edited = set_values(contents[name], name, path, values, in_place_of=in_place_of)
    assert isinstance(edited, bytes), edited
    assert edited != contents[name], f"nothing changes at {'/'.join(path)}"
    contents[name] = edited


def located(contents: Contents, pointer: str) -> tuple[str, tuple[str, ...]]:
    """The file in which a value stands, or is to stand, and its whole path there."""
    named, in_file, below = pointer.rpartition("#")
    steps = below.split("/")
    if in_file:
        return named, tuple(steps)
    first, *rest = steps
    for name, content in contents.items():
        text = read_text(content, name)
        assert isinstance(text, TextFile)
        for section in TAGGED:
            if first in text.data.get(section, {}):
                return name, (section, first, *rest)
        if first in text.data and (not rest or not isinstance(text.data[first], dict) or rest[0] in text.data[first]):
            return name, tuple(steps)
    return "register.yaml", tuple(steps)


def at_path(text: TextFile | Fault, path: Sequence[str]) -> Any:
    """The value at a path; None where there is none."""
    assert isinstance(text, TextFile)
    value: Any = text.data
    for step in path:
        value = value.get(step) if isinstance(value, dict) else None
    return value


# ---------------------------------------------------------------- the check


@functools.cache
def found_in(plant: str) -> CheckResult:
    """What the check finds in the unchanged register."""
    return checked(contents_of(plant))


def checked(contents: Contents) -> CheckResult:
    loaded = load_files(HeldFiles(contents))
    assert isinstance(loaded, Loaded), loaded
    return check(Plant(loaded.register), loaded.faults)


def new_findings(plant: str, contents: Contents) -> tuple[Finding, ...]:
    """What the check finds that it does not find in the unchanged register."""
    return new_since(checked(contents), found_in(plant), plant).findings


def place_of(finding: Finding) -> str:
    """Where a finding stands, by tag and pointer."""
    first, _, rest = finding.path.partition("/")
    return rest if first in TAGGED else finding.path


@pytest.fixture(scope="module", autouse=True)
def _calculated_once() -> Iterator[None]:
    """Whatever a change leaves as it was is read and calculated once; all of it are pure functions of frozen values."""
    with pytest.MonkeyPatch.context() as patch:
        read = functools.cache(read_text)
        for module in (files, loopdoc.register.edit):
            patch.setattr(module, "read_text", read)
        patch.setitem(globals(), "read_text", read)
        sampled, comparison, crossing = (
            loopdoc.engineering.sampled, loopdoc.engineering.comparison, loopdoc.engineering.crossing,
        )  # fmt: skip
        patch.setattr(sampled, "quoted_margins", each_once(sampled.quoted_margins, key=tuple))
        patch.setattr(
            comparison,
            "cascade_error_ratios",
            each_once(comparison.cascade_error_ratios, key=lambda cascade: (cascade.chain.stages, cascade.margins)),
        )
        patch.setattr(crossing, "crossing_times", _crossing_times_once(crossing.crossing_times))
        yield


def each_once(function: Callable[[Sequence[Any]], Sequence[Any]], *, key: Callable[[Any], Any]) -> Callable[..., Any]:
    """A function of many items that calculates only those that it has not met before."""
    met: dict[Any, Any] = {}

    def once(items: Sequence[Any]) -> tuple[Any, ...]:
        keys = [key(item) for item in items]
        new = {one: item for one, item in zip(keys, items, strict=True) if one not in met}
        met.update(zip(new, function(list(new.values())), strict=True))
        return tuple(met[one] for one in keys)

    return once


def _crossing_times_once(function: Callable[..., Any]) -> Callable[..., Any]:
    def of_items(items: Sequence[Any]) -> Sequence[Any]:
        if not items:
            return ()
        paths, sizes, ramps, limits = zip(*items, strict=True)
        times: Sequence[Any] = function(
            paths, size_pct=np.array(sizes), ramp_s=np.array(ramps), limit_pct=np.array(limits)
        )
        return times

    once = each_once(of_items, key=lambda item: item)

    def crossing_times(paths: Any, *, size_pct: Any, ramp_s: Any, limit_pct: Any) -> Any:
        return np.array(
            once(list(zip(paths, size_pct.tolist(), ramp_s.tolist(), limit_pct.tolist(), strict=True)))
        )

    return crossing_times


@pytest.mark.parametrize("seed", [pytest.param(seed, id=f"{seed.rule}: {seed.fault}") for seed in seeded()])
def test_a_fault_is_found_by_the_rule_meant_for_it_and_by_no_other(seed: SeededFault) -> None:
    new = new_findings(seed.plant, changed(contents_of(seed.plant), seed.change, seed.rename))

    meant = (seed.rule, seed.place)
    told = [f"{finding.level} {finding.rule} {place_of(finding)}: {finding.message}" for finding in new]
    assert sorted((finding.rule, place_of(finding)) for finding in new) == sorted(
        [meant, *((further.rule, further.at) for further in seed.also)]
    ), "\n".join(told)
    (finding,) = (finding for finding in new if (finding.rule, place_of(finding)) == meant)
    assert seed.says in finding.message


@pytest.mark.parametrize("plant", plants())
def test_nothing_more_is_found_in_a_plant_made_for_a_fault(plant: str) -> None:
    assert new_findings(plants()[plant]["from"], contents_of(plant)) == ()


@pytest.mark.parametrize(("plant", "errors"), [("tarn-hollow", 0), ("starter", 0), ("tennessee-eastman", 7)])
def test_the_registers_that_are_changed_hold_no_error_but_the_published_ones(plant: str, errors: int) -> None:
    # Six shutdown limits of Downs and Vogel 1993, Table 6, lie outside the ranges of their measurements, and two of
    # the published controllers move one valve.
    assert found_in(plant).count(Level.ERROR) == errors


def test_every_rule_is_meant_by_a_fault_and_every_consequence_has_its_reason() -> None:
    faults = seeded()
    assert {fault.rule for fault in faults} == {rule.id for rule in RULES}
    assert len(faults) >= 150
    assert len({(fault.rule, fault.fault) for fault in faults}) == len(faults)
    assert all(len(further.why) > 10 for fault in faults for further in fault.also)
