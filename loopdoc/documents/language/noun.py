"""A noun phrase that knows its gender, so that a language with genders can put the right article before it."""

from __future__ import annotations

from typing import Self


class Noun(str):
    """A noun phrase without its article."""

    gender: str
    """m, f or n; empty in a language without genders."""

    def __new__(cls, text: str, gender: str = "") -> Self:
        found = super().__new__(cls, text)
        found.gender = gender
        return found
