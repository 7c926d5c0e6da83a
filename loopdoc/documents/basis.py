"""What documents are made of, and one page set of them before it is rendered."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field, replace
from typing import Any, TypeVar

from loopdoc.documents.handover.house import NO_HOUSE, House
from loopdoc.documents.language import ENGLISH, LANGUAGES, Language
from loopdoc.documents.titleblock import Document, title_block
from loopdoc.documents.tracing import traced
from loopdoc.engineering.comparison import Comparison, NotSimulated, compare
from loopdoc.engineering.dynamics import ChainDynamics, Dynamics
from loopdoc.engineering.override import Override, override, selector_of
from loopdoc.engineering.pairing import Plant
from loopdoc.engineering.split_range import SplitRange, split_range
from loopdoc.engineering.time_to_act import TimeToAct
from loopdoc.register.load import Loaded
from loopdoc.register.records import LoopRecord
from loopdoc.rules.check import check
from loopdoc.rules.finding import CheckResult

Whole = TypeVar("Whole", SplitRange, Override)


@dataclass(frozen=True, slots=True, eq=False)
class Basis:
    """One register resolved, checked and calculated: the only source of every statement in a document."""

    plant: Plant
    result: CheckResult
    sources: Mapping[str, bytes]
    """Content of the register's files by name, the root file first."""
    dynamics: Dynamics
    records: Mapping[str, tuple[LoopRecord, ...]] = field(default_factory=dict)
    """Results of loop checks kept beside the register, by tag, each loop's oldest first."""
    language: Language = ENGLISH
    """Of those documents that have a catalogue in it; the others are in English."""
    house: House = NO_HOUSE
    """What the site puts in the place of ours."""
    with_sources: bool = False
    """Whether a narrative ends with an appendix that tells where each of its values is written."""
    against: Basis | None = None
    """The register at the earlier revision against which the documents are issued."""
    times: TimeToAct = field(init=False)
    """From alarm to trip under each upset, calculated at the first question."""
    _compared: dict[ChainDynamics, Comparison | NotSimulated] = field(default_factory=dict, repr=False)
    _split: dict[str, SplitRange | NotSimulated | None] = field(default_factory=dict, repr=False)
    _override: dict[str, Override | NotSimulated | None] = field(default_factory=dict, repr=False)
    _drawn: dict[tuple[object, str], str] = field(default_factory=dict, repr=False)
    _pages: dict[str, tuple[Page, ...]] = field(default_factory=dict, repr=False)
    _title_blocks: dict[str, Document] = field(default_factory=dict, repr=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "times", TimeToAct(self.plant))

    def in_language(self, language: Language) -> Basis:
        """The same, with its documents, and those that they are compared with, in this language."""
        if language is self.language:
            return self
        before = self.against.in_language(language) if self.against else None
        return replace(self, language=language, against=before, _pages={})

    def with_appendix_of_sources(self) -> Basis:
        """The same, its narratives with the appendix of sources."""
        return replace(self, with_sources=True, _pages={})

    @property
    def fingerprint(self) -> str:
        """First digits of the register's fingerprint, as the title block prints them."""
        return self._title_block(ENGLISH).fingerprint

    def comparison(self, chain: ChainDynamics) -> Comparison | NotSimulated:
        """Time responses of a chain, or why there is none, simulated once for all documents."""
        if chain not in self._compared:
            twin = self._unchanged(chain)
            self._compared[chain] = self.against.comparison(twin) if self.against and twin else compare(chain)
        return self._compared[chain]

    def drawn(
        self, chain: ChainDynamics, draw: Callable[[Comparison], str], language: Language = ENGLISH
    ) -> str:
        """The figure of a chain's time responses, drawn once for all documents; empty where there is none."""
        key = chain, language.code
        if key not in self._drawn:
            comparison, twin = self.comparison(chain), self._unchanged(chain)
            if self.against and twin:
                self._drawn[key] = self.against.drawn(twin, draw, language)
            else:
                self._drawn[key] = draw(comparison) if isinstance(comparison, Comparison) else ""
        return self._drawn[key]

    def split_range(self, tag: str) -> SplitRange | NotSimulated | None:
        """Responses of the split range below a loop as a whole, simulated once; None where there is none below it."""
        if tag not in self._split:
            self._split[tag] = split_range(self.dynamics.loop(tag).chains)
        return self._split[tag]

    def override(self, tag: str) -> Override | NotSimulated | None:
        """Responses of the override that a loop is a candidate of, simulated once; None where it is of none."""
        controlled = self.plant.controlled.get(tag)
        selector = selector_of(controlled) if controlled else None
        if selector is None:
            return None
        if selector.tag not in self._override:
            self._override[selector.tag] = override(self.plant, self.dynamics, tag)
        return self._override[selector.tag]

    def drawn_whole(self, whole: Whole, draw: Callable[[Whole], str], language: Language = ENGLISH) -> str:
        """The figure of a split range or an override, drawn once for all documents."""
        key = whole, language.code
        if key not in self._drawn:
            self._drawn[key] = draw(whole)
        return self._drawn[key]

    def _unchanged(self, chain: ChainDynamics) -> ChainDynamics | None:
        """The same chain at the earlier revision, where nothing in it has changed: it is calculated once for both."""
        before = self.against
        tag = chain.chain.lead.tag
        if before is None or tag not in before.plant.controlled:
            return None
        return next((one for one in before.dynamics.loop(tag).chains if one.chain == chain.chain), None)

    def pages(self, kind: str, build: Callable[[Basis], Iterator[Page]]) -> tuple[Page, ...]:
        """The documents of one kind, built once for all that asks for them."""
        if kind not in self._pages:
            self._pages[kind] = tuple(build(self))
        return self._pages[kind]

    def document(
        self,
        *,
        kind: str,
        code: str,
        title: str,
        supplementary_title: str,
        unit: str,
        serial: str,
        language: Language = ENGLISH,
    ) -> Document:
        """Title block of one document; ``kind`` is its English name, ``code`` its kind in the number, such as `CN`."""
        numbering = self.plant.register.numbering
        return replace(
            self._title_block(language),
            kind=language.label(kind),
            title=title,
            supplementary_title=supplementary_title,
            number=numbering.replace("{unit}", unit).replace("{kind}", code).replace("{serial}", serial),
        )

    def _title_block(self, language: Language) -> Document:
        """What all documents share, worked out once: the fingerprint reads the whole register."""
        if language.code not in self._title_blocks:
            ours = title_block(self.plant, self.result, self.sources, language)
            cautions = " ".join(filter(None, (ours.cautions, self.house.cautions)))
            self._title_blocks[language.code] = replace(
                ours, owner=self.house.owner or ours.owner, cautions=cautions, house=self.house
            )
        return self._title_blocks[language.code]


def basis_of(
    loaded: Loaded,
    records: Mapping[str, tuple[LoopRecord, ...]] | None = None,
    *,
    against: Basis | None = None,
    house: House = NO_HOUSE,
) -> Basis:
    """A register as read, resolved, checked and made ready to be calculated with, and the results of loop checks.

    Its documents are in the language of the register.
    """
    plant = Plant(traced(loaded.register))
    dynamics = Dynamics(plant)
    result = check(plant, loaded.faults, dynamics=dynamics)
    found = Basis(plant, result, loaded.sources, dynamics, records or {}, house=house, against=against)
    site = loaded.register.site
    own = site.language if site else None
    return found.in_language(LANGUAGES[own]) if own in LANGUAGES else found


@dataclass(frozen=True, slots=True)
class Page:
    """A document ready for its template."""

    folder: str
    """Folder under the output folder, such as `loop-sheets`."""
    name: str
    """File name without its ending, such as `TIC-2014`."""
    document: Document
    template: str
    view: Mapping[str, Any]
    """What the template places: text with units, tables, drawings. No numbers to compute with."""
    earlier: Page | None = None
    """The same document at the revision against which it is issued: what differs gets a bar."""
