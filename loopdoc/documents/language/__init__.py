"""The languages in which documents are issued: what is said is decided by the stories, how by a catalogue."""

from __future__ import annotations

from loopdoc.documents.language.english import English

Language = English
"""A catalogue: the English one, or one of another language with the same members."""

ENGLISH: Language = English()
LANGUAGES: dict[str, Language] = {found.code: found for found in (ENGLISH,)}
"""Catalogues by their ISO 639-1 codes."""
