"""The English catalogue: how everything that documents say is said in English."""

from __future__ import annotations

from loopdoc.documents.language.english.branching import EnglishBranching
from loopdoc.documents.language.english.dynamics import EnglishDynamics
from loopdoc.documents.language.english.protection import EnglishProtection
from loopdoc.documents.language.english.scheme import EnglishScheme
from loopdoc.documents.language.english.sources import EnglishSources


class English(EnglishScheme, EnglishProtection, EnglishDynamics, EnglishBranching, EnglishSources):
    """English; also the measure of a catalogue: another language has the same members with the same parameters."""
