"""The trade's units as a closed table: exact, gauge apart from absolute, differences apart from readings."""

import re
from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction
from functools import cache
from types import MappingProxyType


class UnitError(ValueError):
    """A unit that is not known, or two units that do not measure the same thing."""


@dataclass(frozen=True, slots=True)
class Unit:
    """A unit of measure as the register writes it."""

    symbol: str
    """How the register writes it, in ASCII: `degC`, `barg`, `Nm3/h`."""
    kind: str
    """What it measures, in plain words: `temperature`, `gauge pressure`, `mass flow`."""
    factor: float
    """Size of one unit in the kind's base unit."""
    offset: float
    """The unit's zero in the kind's base unit; nought except for degC and degF."""
    display: str
    """How documents print it: `°C`, `bar(g)`, `Nm³/h`; empty for a plain fraction."""
    difference_kind: str
    """What the difference of two readings measures: gauge and absolute both give `pressure difference`."""

    def __str__(self) -> str:
        return self.symbol


# Exact by definition. Source: NIST Special Publication 811 (2008), appendix B.
_POUND = Fraction("0.45359237")  # kg
_INCH = Fraction("0.0254")  # m
_FOOT = Fraction("0.3048")  # m
_GALLON = 231 * _INCH**3  # m3, US liquid
_BARREL = 42 * _GALLON  # m3, petroleum
_GRAVITY = Fraction("9.80665")  # m/s2, standard
_BTU = Fraction("1055.05585262")  # J, International Table
_HORSEPOWER = 550 * _FOOT * _POUND * _GRAVITY  # W, mechanical
_DAY = 86400  # s
# A year of 8760 h and a month of 730 h, so that 12 months are a year. Source: IEC 61508-6, annex B tables.
_MONTH = 730 * 3600  # s

# Columns of liquid are the conventional ones (water of 1000 kg/m3, mercury of 13595.1 kg/m3, standard
# gravity), whose factors do not hang on a temperature that the register does not state.
_PRESSURE_PA: Mapping[str, Fraction | int | str] = {
    "Pa": 1,
    "kPa": 1000,
    "MPa": 1_000_000,
    "bar": 100_000,
    "mbar": 100,
    "psi": _POUND * _GRAVITY / _INCH**2,
    "inH2O": 1000 * _GRAVITY * _INCH,
    "mmH2O": _GRAVITY,
    "inHg": Fraction("13595.1") * _GRAVITY * _INCH,
    "mmHg": Fraction("13.5951") * _GRAVITY,
    "kgf/cm2": 10_000 * _GRAVITY,
}

# Kind by kind, the size of each unit in the kind's SI unit. Standard volumes are all at the one standard
# condition of the site, so that Sm3 and scf differ by the size of the foot only (15 degC for one and 60 degF
# for the other would be 0.2 %); normal volumes (0 degC) are a kind of their own.
_TABLE: Mapping[str, Mapping[str, Fraction | int | str]] = {
    "temperature": {"degC": 1, "degF": "5/9", "K": 1},
    "pressure difference": _PRESSURE_PA,
    "gauge pressure": {f"{symbol}g": size for symbol, size in _PRESSURE_PA.items()},
    "absolute pressure": {f"{symbol}a": size for symbol, size in _PRESSURE_PA.items()},
    "mass flow": {
        "kg/s": 1,
        "kg/min": "1/60",
        "kg/h": "1/3600",
        "kg/d": Fraction(1, _DAY),
        "g/s": "1/1000",
        "g/min": "1/60000",
        "g/h": "1/3600000",
        "t/h": "1000/3600",
        "t/d": Fraction(1000, _DAY),
        "lb/s": _POUND,
        "lb/min": _POUND / 60,
        "lb/h": _POUND / 3600,
        "klb/h": 1000 * _POUND / 3600,
    },
    "volume flow": {
        "m3/s": 1,
        "m3/min": "1/60",
        "m3/h": "1/3600",
        "m3/d": Fraction(1, _DAY),
        "l/s": "1/1000",
        "l/min": "1/60000",
        "l/h": "1/3600000",
        "ml/min": "1/60000000",
        "gpm": _GALLON / 60,
        "gph": _GALLON / 3600,
        "ft3/min": _FOOT**3 / 60,
        "ft3/h": _FOOT**3 / 3600,
        "bbl/h": _BARREL / 3600,
        "bbl/d": _BARREL / _DAY,
    },
    "normal volume flow": {
        "Nm3/s": 1,
        "Nm3/min": "1/60",
        "Nm3/h": "1/3600",
        "Nm3/d": Fraction(1, _DAY),
        "kNm3/h": "1000/3600",
        "Nl/min": "1/60000",
        "Nl/h": "1/3600000",
    },
    "standard volume flow": {
        "Sm3/s": 1,
        "Sm3/min": "1/60",
        "Sm3/h": "1/3600",
        "Sm3/d": Fraction(1, _DAY),
        "kSm3/h": "1000/3600",
        "kscmh": "1000/3600",
        "Sl/min": "1/60000",
        "scfm": _FOOT**3 / 60,
        "scfh": _FOOT**3 / 3600,
        "kscfh": 1000 * _FOOT**3 / 3600,
        "MMscfd": 1_000_000 * _FOOT**3 / _DAY,
    },
    "molar flow": {"mol/s": 1, "mol/h": "1/3600", "kmol/h": "1000/3600", "lbmol/h": 1000 * _POUND / 3600},
    "time": {
        "s": 1,
        "ms": "1/1000",
        "min": 60,
        "h": 3600,
        "d": _DAY,
        "week": 7 * _DAY,
        "weeks": 7 * _DAY,
        "month": _MONTH,
        "months": _MONTH,
        "year": 12 * _MONTH,
        "years": 12 * _MONTH,
    },
    "frequency": {"Hz": 1, "kHz": 1000, "1/s": 1, "1/min": "1/60", "1/h": "1/3600"},
    "rotational speed": {"rpm": "1/60"},
    "fraction": {"fraction": 1, "%": "1/100", "ppm": "1/1000000", "ppb": "1/1000000000"},
    "mole fraction": {"mol%": "1/100"},
    "mass fraction": {"wt%": "1/100", "ppmw": "1/1000000", "ppbw": "1/1000000000"},
    "volume fraction": {"vol%": "1/100", "ppmv": "1/1000000", "ppbv": "1/1000000000"},
    "fraction of the lower explosive limit": {"%LEL": "1/100"},
    "relative humidity": {"%RH": "1/100"},
    "length": {
        "m": 1,
        "cm": "1/100",
        "mm": "1/1000",
        "um": "1/1000000",
        "km": 1000,
        "in": _INCH,
        "ft": _FOOT,
    },
    "velocity": {
        "m/s": 1,
        "m/min": "1/60",
        "mm/s": "1/1000",
        "in/s": _INCH,
        "ft/s": _FOOT,
        "ft/min": _FOOT / 60,
    },
    "acceleration": {"m/s2": 1},
    "angle": {"deg": 1},
    "mass": {"kg": 1, "g": "1/1000", "mg": "1/1000000", "t": 1000, "lb": _POUND},
    "force": {"N": 1, "kN": 1000, "lbf": _POUND * _GRAVITY},
    "volume": {
        "m3": 1,
        "l": "1/1000",
        "ml": "1/1000000",
        "gal": _GALLON,
        "bbl": _BARREL,
        "ft3": _FOOT**3,
    },
    "density": {
        "kg/m3": 1,
        "g/m3": "1/1000",
        "mg/m3": "1/1000000",
        "kg/l": 1000,
        "g/l": 1,
        "mg/l": "1/1000",
        "ug/l": "1/1000000",
        "g/cm3": 1000,
        "lb/ft3": _POUND / _FOOT**3,
    },
    "mass per normal volume": {"mg/Nm3": "1/1000000", "g/Nm3": "1/1000"},
    "molar concentration": {"mol/m3": 1, "mol/l": 1000},
    "dynamic viscosity": {"Pa.s": 1, "mPa.s": "1/1000", "cP": "1/1000"},
    "kinematic viscosity": {"m2/s": 1, "mm2/s": "1/1000000", "cSt": "1/1000000"},
    "power": {
        "W": 1,
        "kW": 1000,
        "MW": 1_000_000,
        "hp": _HORSEPOWER,
        "kJ/h": "1000/3600",
        "MJ/h": "1000000/3600",
        "GJ/h": "1000000000/3600",
        "Btu/h": _BTU / 3600,
        "MMBtu/h": 1_000_000 * _BTU / 3600,
    },
    "energy": {
        "J": 1,
        "kJ": 1000,
        "MJ": 1_000_000,
        "GJ": 1_000_000_000,
        "kWh": 3_600_000,
        "MWh": 3_600_000_000,
        "Btu": _BTU,
        "MMBtu": 1_000_000 * _BTU,
    },
    "electric current": {"A": 1, "mA": "1/1000", "uA": "1/1000000", "kA": 1000},
    "voltage": {"V": 1, "mV": "1/1000", "kV": 1000},
    "resistance": {"ohm": 1, "kohm": 1000, "Mohm": 1_000_000},
    "conductivity": {"S/m": 1, "mS/m": "1/1000", "S/cm": 100, "mS/cm": "1/10", "uS/cm": "1/10000"},
    "pH": {"pH": 1},
    "turbidity": {"NTU": 1},
}

# The zero of the scale in kelvin. Source: BIPM SI Brochure, 9th edition (2019), 2.3.1; NIST SP 811, B.8.
_ZEROS_K = {"degC": Fraction("273.15"), "degF": Fraction("459.67") * Fraction(5, 9)}

_DIFFERENCE_KINDS = {
    "temperature": "temperature difference",
    "gauge pressure": "pressure difference",
    "absolute pressure": "pressure difference",
}

# The unit one is not printed with its number. Source: BIPM SI Brochure, 9th edition (2019), 5.4.7.
_DISPLAYS = {"fraction": "", "degC": "°C", "degF": "°F", "deg": "°", "ohm": "Ω", "kohm": "kΩ", "Mohm": "MΩ"}


def _display(symbol: str, kind: str) -> str:
    if symbol in _DISPLAYS:
        return _DISPLAYS[symbol]
    if kind in ("gauge pressure", "absolute pressure") and not symbol.startswith("psi"):
        return f"{_display(symbol[:-1], 'pressure difference')}({symbol[-1]})"
    printed = re.sub(r"(?<=m)3|(?<=ft)3", "³", symbol)
    printed = re.sub(r"(?<=[ms])2", "²", printed)
    printed = re.sub(r"^u(?=[A-Zglm])", "µ", printed)
    return printed.replace("H2O", "H₂O").replace("Pa.s", "Pa·s")


_EXACT: Mapping[str, tuple[Fraction, Fraction]] = {
    symbol: (Fraction(size), _ZEROS_K.get(symbol, Fraction(0)))
    for sizes in _TABLE.values()
    for symbol, size in sizes.items()
}

UNITS: Mapping[str, Unit] = MappingProxyType(
    {
        symbol: Unit(
            symbol=symbol,
            kind=kind,
            factor=float(_EXACT[symbol][0]),
            offset=float(_EXACT[symbol][1]),
            display=_display(symbol, kind),
            difference_kind=_DIFFERENCE_KINDS.get(kind, kind),
        )
        for kind, sizes in _TABLE.items()
        for symbol in sizes
    }
)
"""Every unit the register knows, by its symbol."""


def unit(symbol: str) -> Unit:
    """Look a unit up by the symbol that the register writes, or say what to write instead."""
    found = UNITS.get(symbol)
    if found is None:
        # Loaded for an unknown unit only: a register without faults starts without it.
        from loopdoc.register.unit_spellings import unknown_unit

        raise UnitError("; ".join(unknown_unit(symbol)))
    return found


def convert(value: float, source: Unit | str, target: Unit | str) -> float:
    """Convert a reading (a point on the scale) from one unit to another of the same kind."""
    source, target = _resolved(source), _resolved(target)
    if source.kind != target.kind:
        raise UnitError(_refusal(source, target))
    if source.symbol == target.symbol:
        return value
    shift, multiplier, divisor, constant = _point_terms(source.symbol, target.symbol)
    return (value + shift) * multiplier / divisor + constant


def convert_difference(value: float, source: Unit | str, target: Unit | str) -> float:
    """Convert a span, dead band or other difference of readings, for which zeros do not count."""
    source, target = _resolved(source), _resolved(target)
    if source.difference_kind != target.difference_kind:
        raise UnitError(_refusal(source, target))
    if source.symbol == target.symbol:
        return value
    multiplier, divisor = _difference_terms(source.symbol, target.symbol)
    return value * multiplier / divisor


def same_kind(first: Unit | str, second: Unit | str) -> bool:
    """Whether readings in the two units can be converted into each other."""
    return _resolved(first).kind == _resolved(second).kind


def same_difference(first: Unit | str, second: Unit | str) -> bool:
    """Whether differences of readings in the two units can be converted into each other."""
    return _resolved(first).difference_kind == _resolved(second).difference_kind


def difference_unit(own: Unit) -> Unit:
    """The unit in which a change of a reading is told: kelvin for degrees Celsius, bar for bar gauge."""
    if own.symbol == "degC":
        return UNITS["K"]
    plain = UNITS.get(own.symbol[:-1])
    return plain if plain is not None and plain.kind == own.difference_kind != own.kind else own


def rate_parts(symbol: str) -> tuple[Unit, Unit] | None:
    """Take a rate of change such as `%/min` apart into what changes and the time; None where it is none."""
    changed, _, per_time = symbol.rpartition("/")
    if changed in UNITS and per_time in UNITS and UNITS[per_time].kind == "time":
        return UNITS[changed], UNITS[per_time]
    return None


def _resolved(written: Unit | str) -> Unit:
    return unit(written) if isinstance(written, str) else written


@cache
def _difference_terms(source: str, target: str) -> tuple[float, float]:
    # The exact ratio as a multiplier and a divisor: 7400 kg/h become 7.4 t/h, not 7.4000000000000004.
    ratio = _EXACT[source][0] / _EXACT[target][0]
    if max(ratio.numerator, ratio.denominator) <= 2**53:
        return float(ratio.numerator), float(ratio.denominator)
    return float(ratio), 1.0


@cache
def _point_terms(source: str, target: str) -> tuple[float, float, float, float]:
    (source_factor, source_zero), (target_factor, target_zero) = _EXACT[source], _EXACT[target]
    constant = (source_zero - target_zero) / target_factor
    shift = constant * target_factor / source_factor
    multiplier, divisor = _difference_terms(source, target)
    # Add on the side where the zero is a plain decimal (32 degF, not 17.77... degC): 140 degF are 60 degC.
    if 10**6 % shift.denominator == 0:
        return float(shift), multiplier, divisor, 0.0
    return 0.0, multiplier, divisor, float(constant)


_UNSTATED = {
    frozenset(("gauge pressure", "absolute pressure")): "the barometric pressure is not a fact",
    frozenset(("mass flow", "volume flow")): "the density is not a fact",
    frozenset(("normal volume flow", "volume flow")): "the flowing pressure and temperature are not facts",
    frozenset(("standard volume flow", "volume flow")): "the flowing pressure and temperature are not facts",
    frozenset(("normal volume flow", "standard volume flow")): "the standard conditions are not facts",
    frozenset(("mass fraction", "mole fraction")): "the molar masses are not facts",
}


def _refusal(source: Unit, target: Unit) -> str:
    statement = f"`{source}` is a unit of {source.kind}, `{target}` of {target.kind}"
    kinds = {source.kind, target.kind}
    if source.difference_kind == target.difference_kind and "pressure difference" in kinds:
        bare = source if source.kind == "pressure difference" else target
        return f"{statement}: `{bare}` does not say gauge or absolute; write `{bare}g` or `{bare}a`"
    reason = _UNSTATED.get(frozenset(kinds))
    if reason is None:
        return f"{statement}; the two cannot be compared"
    return f"{statement}, and {reason} of the register; write both in one of them"
