"""Values as the register writes them, compared by what they mean: 60 s is 1 min, however it is written."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from loopdoc.register.quantity import (
    Gain,
    Quantity,
    QuantityError,
    Range,
    parse_gain,
    parse_quantity,
    parse_range,
)
from loopdoc.register.units import UnitError, convert, convert_difference

Path = tuple[str | int, ...]
Leaves = dict[Path, Any]
"""Every value of a part by its path; a list is one value, and so is a hold."""

SETS = ("permitted", "inputs", "include", "distribution")
"""Lists whose order says nothing."""
_DIFFERENCES = ("deadband", "size", "tolerance", "backlash", "resolution")
"""Keys whose quantity is a difference of readings, not a reading."""
_CLOSE = 1e-9
"""Relative; the factors of two units multiplied leave less than this of rounding."""
_NOUGHT = 1e-12
"""What is left of a nought after units with zeros of their own, in the unit written."""
_LIMIT = re.compile(r"(above|below) (.+)")


@dataclass(frozen=True, slots=True)
class Alternative:
    """A key that says the same as another in other terms."""

    key: str
    other: str
    """The key in whose terms ``value`` gives it."""
    value: Callable[[Any], Any]


def _band_as_gain(written: Any) -> Any:
    band = _parsed(written)
    return 100.0 / band.value if isinstance(band, Quantity) and band.unit.symbol == "%" and band.value else None


def _repeats_as_reset(written: Any) -> Any:
    rate = _parsed(written)
    if not isinstance(rate, Quantity) or not rate.value:
        return None
    try:
        return f"{1.0 / rate.to('1/s')!r} s"
    except UnitError:
        return None


ALTERNATIVES = (
    Alternative("proportional_band", "gain", _band_as_gain),
    Alternative("repeats", "reset", _repeats_as_reset),
    Alternative("lag", "lags", lambda written: [written]),
)


def leaves(data: Any, path: Path = ()) -> Leaves:
    """Every value written under a part, by its path."""
    if isinstance(data, Mapping) and data and "hold" not in data:
        found: Leaves = {}
        for key, value in data.items():
            found |= leaves(value, (*path, key))
        return found
    return {path: data}


def same(old: Any, new: Any, key: str = "") -> bool:
    """Whether two values of one key mean the same, in whatever units and words they are written."""
    if isinstance(old, list) and isinstance(new, list):
        if key in SETS:
            return sorted(map(told, old)) == sorted(map(told, new))
        return len(old) == len(new) and all(same(one, other, key) for one, other in zip(old, new, strict=True))
    if isinstance(old, Mapping) and isinstance(new, Mapping):
        return old.keys() == new.keys() and all(same(old[name], new[name], str(name)) for name in old)
    if isinstance(old, bool) or isinstance(new, bool):
        return old is new
    if isinstance(old, int | float) and isinstance(new, int | float):
        return math.isclose(old, new, rel_tol=_CLOSE)
    if not isinstance(old, str) or not isinstance(new, str):
        return bool(old == new)
    if old.split() == new.split():
        return True
    limits = _LIMIT.fullmatch(old), _LIMIT.fullmatch(new)
    if limits[0] and limits[1]:
        return limits[0][1] == limits[1][1] and same(limits[0][2], limits[1][2], key)
    restated = _restated(_parsed(old), _parsed(new), key)
    close = (math.isclose(one, other, rel_tol=_CLOSE, abs_tol=_NOUGHT) for one, other in restated or ())
    return restated is not None and all(close)


def in_old_units(old: Any, new: Any, key: str = "") -> tuple[float, ...]:
    """A new quantity or range in the units of the old one, where both are written in different units; else empty."""
    first, second = _parsed(old), _parsed(new)
    if not isinstance(first, Quantity | Range) or type(first) is not type(second) or first.unit == second.unit:
        return ()
    restated = _restated(first, second, key)
    return tuple(other for _, other in restated) if restated else ()


def _restated(old: Any, new: Any, key: str) -> tuple[tuple[float, float], ...] | None:
    """Pairs of numbers in the units of the old value, to be compared; None where the two are of different sorts."""
    turned = convert_difference if key in _DIFFERENCES else convert
    try:
        match old, new:
            case Quantity(), Quantity():
                return ((old.value, turned(new.value, new.unit, old.unit)),)
            case Range(), Range():
                return tuple((one, convert(other, new.unit, old.unit))
                             for one, other in ((old.low, new.low), (old.high, new.high)))  # fmt: skip
            case Gain(), Gain():
                units = old.numerator.symbol, old.denominator.symbol
                if (old.per_time is None) == (new.per_time is None):
                    return ((old.in_units(*units), new.in_units(*units)),)
    except UnitError:
        pass
    return None


def _parsed(written: Any) -> Quantity | Range | Gain | None:
    if isinstance(written, str):
        for parse in (parse_quantity, parse_range, parse_gain):
            try:
                return parse(written)
            except QuantityError:
                continue
    return None


def told(value: Any) -> str:
    """A value on one line, as written."""
    match value:
        case None:
            return "nothing"
        case bool():
            return "true" if value else "false"
        case float():
            return repr(value).removesuffix(".0")
        case list():
            parted = any(isinstance(one, Mapping) for one in value)
            return ("; " if parted else ", ").join(map(told, value)) or "nothing"
        case Mapping():
            if "hold" in value:
                return f"HOLD ({told(value['hold'])})"
            return ", ".join(f"{str(key).replace('_', ' ')} {told(one)}" for key, one in value.items()) or "nothing"
        case _:
            return " ".join(str(value).split())


def alternatives(old: Leaves, new: Leaves) -> Iterator[tuple[Path, Path, bool]]:
    """Pairs of paths at which the two sides say one thing by different keys, and whether they say the same."""
    for one in ALTERNATIVES:
        for here, there, value_of in ((old, new, one.value), (new, old, one.value)):
            for path in [path for path in here if path and path[-1] == one.key and path not in there]:
                other = (*path[:-1], one.other)
                if other not in there or other in here:
                    continue
                restated = value_of(here[path])
                equal = restated is not None and same(restated, there[other], one.other)
                yield (path, other, equal) if here is old else (other, path, equal)
