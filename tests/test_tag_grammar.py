"""The bound on the tag grammar: what is refused, what is accepted, and that what is accepted comes to an end."""

from __future__ import annotations

import pytest

from loopdoc.register.tag_grammar import MAX_TAG_CHARACTERS, GrammarFault, TagGrammar, read_grammar

GROUPS = r"(?P<letters>[A-Z]{2,5})-(?P<unit>\d{2})(?P<serial>\d{2})"


@pytest.mark.parametrize(
    "expression",
    [
        GROUPS,
        GROUPS + "(?P<suffix>[A-Z]?)",
        r"(?P<unit>\d{2,3})-(?P<letters>[A-Z]+)-(?P<serial>\d+)(?P<suffix>[A-Z]*)",
        r"(?:(?P<area>\d)\.)?(?P<unit>\d+)(?P<letters>[A-Z]{1,6})(?P<serial>\d{3,5})(?:[./](?P<part>\d))?",
        r"(?P<letters>[A-Z]{2}|[A-Z]{3}|XV)_(?P<unit>[]\d]{2})(?P<serial>\d{2})",
        GROUPS + r"(ab){3}\{x}",
    ],
)
def test_the_grammars_of_sites_are_accepted(expression: str) -> None:
    grammar = read_grammar(expression)
    assert isinstance(grammar, TagGrammar), grammar
    assert grammar.pattern == expression


@pytest.mark.parametrize(
    ("more", "says"),
    [
        ("(a+)+", "repeats a group that itself repeats"),
        ("(a|a)*", "repeats a group that itself repeats or chooses"),
        ("((ab)?c){2,9}", "repeats a group"),
        ("(?:a*){3}", "repeats a group"),
        (r"\1", "refers back"),
        ("(?P=unit)", "refers to a group"),
        ("(?=a)", "looks ahead"),
        ("(?<!a)", "looks ahead or back"),
        ("a?" * 30, "too many ways"),
        (".*" * 8, "too many ways"),
        (r"\d{0,9}" * 12, "too many ways"),
        ("(a|b|c)" * 20, "too many ways"),
        ("a" * 400, "more than 400 characters"),
    ],
)
def test_an_expression_that_could_run_away_is_refused(more: str, says: str) -> None:
    fault = read_grammar(GROUPS + more)
    assert isinstance(fault, GrammarFault)
    assert says in fault.message


@pytest.mark.parametrize(
    ("expression", "says"),
    [
        ("(?P<letters>", "not a regular expression"),
        ("(?P<letters>A)(?P<unit>1)", "no group named serial"),
        (GROUPS + "a{99999999999}", "not a regular expression"),
    ],
)
def test_what_is_no_grammar_at_all_is_told(expression: str, says: str) -> None:
    fault = read_grammar(expression)
    assert isinstance(fault, GrammarFault)
    assert says in fault.message


# Each fails only at the last character, after every way has been tried.
@pytest.mark.parametrize("parts", ["[A-Z]*" * 4, "[A-Z]*[A-Z]*[A-Z]+[A-Z]{0,40}", "A?" * 15])
def test_an_accepted_grammar_comes_to_an_end_on_a_tag_made_against_it(parts: str) -> None:
    grammar = read_grammar(f"(?P<letters>{parts})(?P<unit>1)(?P<serial>2)")
    assert isinstance(grammar, TagGrammar), grammar
    assert grammar.fullmatch("A" * (MAX_TAG_CHARACTERS - 1) + "!") is None


def test_a_tag_longer_than_any_plate_follows_no_grammar() -> None:
    grammar = read_grammar(r"(?P<letters>[A-Z]+)(?P<unit>\d)(?P<serial>\d)")
    assert isinstance(grammar, TagGrammar)
    assert grammar.fullmatch("A" * (MAX_TAG_CHARACTERS - 2) + "12") is not None
    assert grammar.fullmatch("A" * (MAX_TAG_CHARACTERS - 1) + "12") is None
