"""The German catalogue: the words are those of DIN, VDI/VDE and NAMUR."""

from __future__ import annotations

from loopdoc.documents.language.english import English
from loopdoc.documents.language.german.branching import GermanBranching
from loopdoc.documents.language.german.dynamics import GermanDynamics
from loopdoc.documents.language.german.protection import GermanProtection
from loopdoc.documents.language.german.scheme import GermanScheme
from loopdoc.documents.language.german.sources import GermanSources


class German(GermanScheme, GermanProtection, GermanDynamics, GermanBranching, GermanSources, English):
    """German."""
