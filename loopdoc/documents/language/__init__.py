"""The languages in which documents are issued: what is said is decided by the stories, how by a catalogue."""

from __future__ import annotations

from loopdoc.documents.language.english import English
from loopdoc.documents.language.german import German

Language = English
"""A catalogue: the English one, or one of another language with the same members."""

ENGLISH: Language = English()
GERMAN: Language = German()
LANGUAGES: dict[str, Language] = {found.code: found for found in (ENGLISH, GERMAN)}
"""Catalogues by their ISO 639-1 codes."""
