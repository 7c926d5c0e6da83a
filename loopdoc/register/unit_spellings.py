"""What other spellings of units in the trade stand for, so that a refusal can say what to write."""

import difflib
import re
from collections.abc import Mapping
from functools import lru_cache

from loopdoc.register.units import UNITS

# Other spellings of the trade that no rule below mends, in lower case; two answers where one is ambiguous.
SPELLINGS: Mapping[str, str] = {
    "degC": "c celsius degcelsius degreec degreesc deg.c",
    "degF": "f fahrenheit degreef degreesf deg.f",
    "K": "kelvin degk",
    "s": "sec secs second seconds",
    "ms": "msec",
    "min": "mins minute minutes",
    "h": "hr hrs hour hours",
    "d": "day days",
    "months": "mo",
    "years": "yr",
    "A years": "a",
    "%": "pct percent",
    "mol%": "mole% %mol",
    "wt%": "mass% %wt %w/w",
    "vol%": "%v/v %vol",
    "%LEL": "lel",
    "%RH": "rh",
    "rpm": "r/min rev/min",
    "1/min": "/min permin repeats/min rpt/min",
    "1/min rpm": "min-1",
    "1/s": "/s s-1",
    "l/min": "lpm",
    "l/h": "lph",
    "Sl/min": "slpm",
    "Nl/min": "nlpm",
    "kg/h": "kgph kph",
    "t/h": "tph mt/h ton/h tons/h tonne/h tonnes/h",
    "t/d": "tpd ton/d",
    "t": "ton tonne tonnes",
    "lb": "lbs",
    "lb/h": "lbs/h pph",
    "gpm": "usgpm gal/min",
    "bbl/d": "bpd",
    "m3/h": "cmh cum/h",
    "ft3/min scfm": "cfm",
    "ft3/h scfh": "cfh",
    "ft3/min": "acfm",
    "Nm3/h": "nm3 nm3h nm3hr ncmh",
    "Sm3/h": "sm3 scmh",
    "kscfh": "mscfh",
    "bar": "bard",
    "kPa": "kpad",
    "psi": "psid",
    "psi psig psia": "lb/in2",
    "kgf/cm2 kgf/cm2g kgf/cm2a": "kg/cm2",
    "kgf/cm2g": "kg/cm2g",
    "kgf/cm2a": "kg/cm2a",
    "mmHga": "torr",
    "inH2O inH2Og": 'inwc "wc',
    "inH2Og": "inwg",
    "inH2O": "inh20 in.h2o",
    "mmH2O mmH2Og": "mmwc",
    "mmH2Og": "mmwg",
    "mmH2O": "mmh20",
    "mA": "ma-dc madc",
    "V": "vdc volt volts",
    "A": "amp amps",
    "ohm": "ohms",
    "ml/min": "cc/min",
    "l": "litre litres liter liters",
    "ft": "feet",
    "in": "inch inches",
    "um": "micron microns",
    "Hz": "hertz",
    "Hz cP": "cps",
}
_ANSWERS: Mapping[str, tuple[str, ...]] = {
    spelling: tuple(answers.split()) for answers, spellings in SPELLINGS.items() for spelling in spellings.split()
}

_TYPOGRAPHY = str.maketrans(
    {"°": "deg", "º": "deg", "˚": "deg", "℃": "degC", "℉": "degF", "²": "2", "³": "3", "₂": "2", "₃": "3"}
    | {"µ": "u", "μ": "u", "Ω": "ohm", "\u2126": "ohm", "·": ".", "⋅": ".", "∕": "/", "％": "%"}
    | {" ": None, "\u00a0": None, "\u2009": None, "\u202f": None, "^": None, "*": None}
)
_REFERENCE = re.compile(r"(?:\((g|a)\)|[-_](g|a)|\(?(gauge|abs|absolute)\)?)$", re.IGNORECASE)
_TIME_WORD = re.compile(r"/(?:(h)(?:r|our)|(s)ec(?:ond)?|(min)ute|(d)ay)$", re.IGNORECASE)
_LONGEST_SHOWN = 40


@lru_cache(maxsize=1024)  # one wrong spelling tends to stand in a whole register
def unknown_unit(symbol: str) -> tuple[str, str]:
    """Say that a unit is not known, and what to write instead."""
    if len(symbol) > _LONGEST_SHOWN:
        return f"unknown unit `{symbol[:_LONGEST_SHOWN]}...`", "write a unit of the register's table"
    if meant := intended_units(symbol):
        return f"unknown unit `{symbol}`", f"write {' or '.join(f'`{answer}`' for answer in meant)}"
    if near := difflib.get_close_matches(symbol, UNITS, n=3):
        return f"unknown unit `{symbol}`", f"near it are {', '.join(f'`{answer}`' for answer in near)}"
    return f"unknown unit `{symbol}`", "write a unit of the register's table"


@lru_cache(maxsize=1024)
def intended_units(symbol: str) -> tuple[str, ...]:
    """The symbols that another spelling of the trade stands for; none where it is not recognised."""
    plain = symbol.translate(_TYPOGRAPHY).rstrip(".")
    plain = _REFERENCE.sub(lambda found: next(filter(None, found.groups()))[0].lower(), plain)
    plain = _TIME_WORD.sub(lambda found: "/" + next(filter(None, found.groups())).lower(), plain)
    if plain in UNITS:
        return (plain,)
    folded = plain.casefold()
    return _ANSWERS.get(folded) or tuple(known for known in UNITS if known.casefold() == folded)
