"""What is wrong with a text that does not read as a quantity, range or gain, and what to write instead."""

import re

from loopdoc.register.quantity import LONGEST_TEXT
from loopdoc.register.unit_spellings import intended_units, unknown_unit
from loopdoc.register.units import UNITS, rate_parts

_QUANTITY_EXAMPLE = "such as `84.5 degC`"
_RANGE_EXAMPLE = "such as `60 to 120 degC`"
_NUMBER_RANGE_EXAMPLE = "such as `0.2 to 0.8`"
_GAIN_EXAMPLE = "such as `5.5 degC per t/h`"

# Numbers as people write them: any minus, thousands separators, decimal commas, points without digits.
_NUMBER = (
    r"(?>[+\-\u2212\u2013]? ?"
    r"(?:[0-9]{1,3}(?: [0-9]{3})+(?:[.,][0-9]+)?|[0-9]+(?:[.,'’_][0-9]+)*(?:\.(?!\.))?|\.[0-9]+)"
    r"(?:[eE][+\-\u2212]?[0-9]+)?)"
)
_QUANTITY = re.compile(rf"({_NUMBER}) ?(.*)")
_SEPARATOR = r"\bto\b|\.{2,3}|…|, |[-\u2013\u2014/;:~]"
_RANGE = re.compile(rf"[\[(]? ?({_NUMBER}) ?(.*?) ?({_SEPARATOR}) ?({_NUMBER}) ?[\])]? ?(.*)", re.IGNORECASE)
_PER = re.compile(r" +per +", re.IGNORECASE)
_PLAIN = re.compile(r"[0-9]+(?:\.[0-9]+)?")
_ONE_COMMA = re.compile(r"[1-9][0-9]{0,2},[0-9]{3}")
_GROUPED = re.compile(
    r"(?P<whole>[1-9][0-9]{0,2}(?P<mark>[ .,'’_])[0-9]{3}(?:(?P=mark)[0-9]{3})*)"
    r"(?:(?!(?P=mark))[.,](?P<decimals>[0-9]+))?"
)
_NOT_FINITE = re.compile(r"[+\-\u2212]? ?\.?(?:inf|infinity|nan)\b.*", re.IGNORECASE)
_SPACES = str.maketrans(dict.fromkeys("\t\n\r\u00a0\u2007\u2009\u202f", " "))
_MINUSES = str.maketrans(dict.fromkeys("\u2212\u2013", "-"))


def quantity_fault(text: str) -> tuple[str, str]:
    """Say why a text is not a number with a unit, and what to write."""
    plain = _plain(text)
    if (fault := _common_fault(text, plain, f"a number with its unit, {_QUANTITY_EXAMPLE}")) is not None:
        return fault
    if _is_range(plain):
        return f"`{text}` is a range where one value is wanted", f"write one value, {_QUANTITY_EXAMPLE}"
    found = _QUANTITY.fullmatch(plain)
    if found is None:
        if _symbol(plain) is not None:
            return f"`{text}` has no number", f"write the number before the unit, {_QUANTITY_EXAMPLE}"
        return f"`{text}` is not a number with a unit", f"write a number and a unit, {_QUANTITY_EXAMPLE}"
    number, symbol = found.groups()
    if not symbol:
        return f"`{text}` has no unit", f"write the unit after the number, {_QUANTITY_EXAMPLE}"
    if " per " in symbol and _gain_units(symbol) is not None:
        return f"`{text}` is a gain where one value is wanted", f"write one value, {_QUANTITY_EXAMPLE}"
    known = _symbol(symbol)
    if known is None:
        return _unknown(text, symbol)
    complaint, numbers = _number_fault(number)
    return _mended(text, complaint or _spelling_fault(symbol, known), [f"{mended} {known}" for mended in numbers])


def range_fault(text: str) -> tuple[str, str]:
    """Say why a text is not a range with a unit, and what to write."""
    plain = _plain(text)
    if (fault := _common_fault(text, plain, f"two numbers and a unit, {_RANGE_EXAMPLE}")) is not None:
        return fault
    found = _RANGE.fullmatch(plain)
    if found is None:
        one = _QUANTITY.fullmatch(plain)
        if one is not None and (not one[2] or _symbol(one[2]) is not None):
            return f"`{text}` is one value where a range is wanted", f"write both ends, {_RANGE_EXAMPLE}"
        return (
            f"`{text}` is not a range",
            f"write the low end, `to`, the high end and the unit, {_RANGE_EXAMPLE}",
        )
    low, early, separator, high, late = found.groups()
    if not (early or late):
        return f"`{text}` has no unit", f"write the unit after the high end, {_RANGE_EXAMPLE}"
    known = _symbol(late or early)
    if known is None:
        return _unknown(text, late or early)
    if early and late and _symbol(early) != known:
        return f"`{text}` has two units", f"write both ends in one unit, {_RANGE_EXAMPLE}"
    complaint, ends = _ends_fault(low, separator, high)
    if not complaint and early:
        complaint = "has its unit twice" if late else "has its unit before the high end"
    return _mended(text, complaint or _spelling_fault(late, known), [f"{end} {known}" for end in ends])


def number_range_fault(text: str) -> tuple[str, str]:
    """Say why a text is not a range of plain numbers, and what to write."""
    plain = _plain(text)
    if (fault := _common_fault(text, plain, f"two numbers, {_NUMBER_RANGE_EXAMPLE}")) is not None:
        return fault
    found = _RANGE.fullmatch(plain)
    if found is None:
        return f"`{text}` is not a range of numbers", f"write two numbers with `to`, {_NUMBER_RANGE_EXAMPLE}"
    low, early, separator, high, late = found.groups()
    complaint, ends = _ends_fault(low, separator, high)
    if early or late:
        complaint = "has a unit where plain numbers are wanted"
    return _mended(text, complaint or "needs one ordinary space between its parts", ends)


def gain_fault(text: str) -> tuple[str, str]:
    """Say why a text is not a process gain, and what to write."""
    plain = _plain(text)
    if (fault := _common_fault(text, plain, f"a gain, {_GAIN_EXAMPLE}")) is not None:
        return fault
    found = _QUANTITY.fullmatch(plain)
    if found is None:
        return f"`{text}` has no number", f"write the number before the units, {_GAIN_EXAMPLE}"
    number, symbols = found.groups()
    if (units := _gain_units(symbols)) is not None:
        complaint, numbers = _number_fault(number)
        return _mended(text, complaint or _gain_form_fault(symbols, units), [f"{n} {units}" for n in numbers])
    parts = _PER.split(f" {symbols} ", maxsplit=1)
    if len(parts) == 1:
        remedy = f"write the change of the measurement per change of what moves it, {_GAIN_EXAMPLE}"
        return f"`{text}` does not say per what", remedy
    changed, moved = (part.strip() for part in parts)
    if not changed or not moved:
        side = "after" if changed else "before"
        return f"`{text}` has no unit {side} `per`", f"write both units, {_GAIN_EXAMPLE}"
    return _unknown(text, moved if _rate(changed) else changed)


def _plain(text: str) -> str:
    return " ".join(text[: LONGEST_TEXT + 1].translate(_SPACES).split())


def _common_fault(text: str, plain: str, wanted: str) -> tuple[str, str] | None:
    if len(text) > LONGEST_TEXT:
        return f"`{text[:LONGEST_TEXT]}...` is too long", f"write {wanted}"
    if not plain:
        return "no value is written", f"write {wanted}"
    if _NOT_FINITE.fullmatch(plain):
        return f"`{text}` is not a finite number", f"write {wanted}"
    return None


def _mended(text: str, complaint: str, answers: list[str]) -> tuple[str, str]:
    remedy = " or ".join(f"`{answer}`" for answer in answers) or "one number with one decimal point"
    return f"`{text}` {complaint}", f"write {remedy}"


def _unknown(text: str, symbol: str) -> tuple[str, str]:
    fault, remedy = unknown_unit(symbol)
    return f"`{text}`: {fault}", remedy


def _number_fault(number: str) -> tuple[str, list[str]]:
    """Say what is wrong with a number as people write it (nothing: ""), and the forms it may stand for."""
    plain = number.translate(_MINUSES)
    mantissa, exponent_mark, exponent = plain.replace("E", "e").partition("e")
    digits = mantissa.lstrip("+- ")
    sign = mantissa[: len(mantissa) - len(digits)].strip()
    complaint = "has a typographic minus sign" if plain != number else ""
    forms = [digits]
    if _ONE_COMMA.fullmatch(digits):
        complaint = "has a comma that may mean thousands or decimals"
        forms = [digits.replace(",", ""), digits.replace(",", ".")]
    elif (grouped := _GROUPED.fullmatch(digits)) and not _PLAIN.fullmatch(digits):
        complaint = "has a thousands separator"
        whole, decimals = re.sub("[^0-9]", "", grouped["whole"]), grouped["decimals"]
        forms = [f"{whole}.{decimals}" if decimals else whole]
    elif re.fullmatch("[0-9]+,[0-9]+", digits):
        complaint = "has a decimal comma"
        forms = [digits.replace(",", ".")]
    elif re.fullmatch(r"\.[0-9]+", digits):
        complaint = "has no digit before its decimal point"
        forms = [f"0{digits}"]
    elif re.fullmatch(r"[0-9]+\.", digits):
        complaint = "has no digit after its decimal point"
        forms = [digits[:-1]]
    elif not _PLAIN.fullmatch(digits):
        return "has more than one number before its unit", []
    elif re.match("0[0-9]", digits):
        complaint = "has a leading zero"
    return complaint, [f"{sign}{re.sub('^0+(?=[0-9])', '', form)}{exponent_mark}{exponent}" for form in forms]


def _ends_fault(low: str, separator: str, high: str) -> tuple[str, list[str]]:
    (low_complaint, lows), (high_complaint, highs) = _number_fault(low), _number_fault(high)
    complaint = low_complaint or high_complaint
    if not complaint and separator != "to":
        complaint = f"joins its ends with `{separator.strip()}`"
    # Where both ends are ambiguous they are read the same way; where one is, the other stands for both.
    if len(lows) != len(highs):
        return complaint, [f"{first} to {second}" for first in lows for second in highs]
    return complaint, [f"{first} to {second}" for first, second in zip(lows, highs, strict=True)]


def _is_range(plain: str) -> bool:
    found = _RANGE.fullmatch(plain)
    if found is None:
        return False
    _, early, separator, _, late = found.groups()
    # `4 min-1` and `1/2 in` are no ranges.
    return separator not in "/:" and not (separator == "-" and early and not late)


def _symbol(written: str) -> str | None:
    if written in UNITS:
        return written
    intended = intended_units(written)
    return intended[0] if len(intended) == 1 else None


def _spelling_fault(written: str, known: str) -> str:
    if written != known:
        return f"has the unknown unit `{written}`"
    return "needs one ordinary space between its parts"


def _rate(written: str) -> str | None:
    if (known := _symbol(written)) is not None:
        return known
    changed, _, per_time = written.rpartition("/")
    rate = f"{_symbol(changed)}/{_symbol(per_time)}"
    return rate if rate_parts(rate) is not None else None


def _gain_units(symbols: str) -> str | None:
    """The units of a gain in the form of the register, from the forms in which people write them."""
    if _rate(symbols) is not None:
        return None
    parts = [part.strip(" ()") for part in _PER.split(symbols)]
    if len(parts) == 3:
        readings = [(f"{parts[0]}/{parts[1]}", parts[2]), (f"{parts[0]}/{parts[2]}", parts[1])]
    elif len(parts) == 2:
        readings = [(parts[0], parts[1])]
    else:
        slashes = [found.start() for found in re.finditer("/", symbols)]
        readings = [(symbols[:slash].strip(" ()"), symbols[slash + 1 :].strip(" ()")) for slash in slashes]
    for changed, moved in readings:
        rate, mover = _rate(changed), _symbol(moved)
        if rate is not None and mover is not None:
            return f"{rate} per {mover}"
    return None


def _gain_form_fault(symbols: str, units: str) -> str:
    if symbols == units:
        return "needs one ordinary space between its parts"
    changed, per, moved = symbols.partition(" per ")
    if per and " per " not in moved and "(" not in symbols:
        return f"has the unknown unit `{changed if _symbol(changed) != changed else moved}`"
    return "is not written with one `per`"
