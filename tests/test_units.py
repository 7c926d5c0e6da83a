"""Units against pint and published conversions; what is not converted; what a wrong spelling is answered."""

import pickle
from itertools import combinations

import pint
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from loopdoc.register.unit_spellings import SPELLINGS
from loopdoc.register.units import (
    UNITS,
    UnitError,
    convert,
    convert_difference,
    rate_parts,
    same_difference,
    same_kind,
    unit,
)

# The same size in pint's words, unit by unit, since pint misreads the trade's symbols. Gauge and absolute
# pressures have the size of the pressure difference; normal and standard volumes that of the volume.
PRESSURES = {
    "Pa": "pascal",
    "kPa": "kilopascal",
    "MPa": "megapascal",
    "bar": "bar",
    "mbar": "millibar",
    "psi": "force_pound / inch ** 2",
    "inH2O": "inch_H2O",
    "mmH2O": "cm_H2O / 10",
    "inHg": "inch_Hg",
    "mmHg": "millimeter_Hg",
    "kgf/cm2": "kilogram_force / centimeter ** 2",
}
PINT = {
    **PRESSURES,
    **{f"{symbol}g": expression for symbol, expression in PRESSURES.items()},
    **{f"{symbol}a": expression for symbol, expression in PRESSURES.items()},
    "degC": "delta_degree_Celsius",
    "degF": "delta_degree_Fahrenheit",
    "K": "kelvin",
    "kg/s": "kilogram / second",
    "kg/min": "kilogram / minute",
    "kg/h": "kilogram / hour",
    "kg/d": "kilogram / day",
    "g/s": "gram / second",
    "g/min": "gram / minute",
    "g/h": "gram / hour",
    "t/h": "metric_ton / hour",
    "t/d": "metric_ton / day",
    "lb/s": "pound / second",
    "lb/min": "pound / minute",
    "lb/h": "pound / hour",
    "klb/h": "1000 * pound / hour",
    "m3/s": "meter ** 3 / second",
    "m3/min": "meter ** 3 / minute",
    "m3/h": "meter ** 3 / hour",
    "m3/d": "meter ** 3 / day",
    "l/s": "liter / second",
    "l/min": "liter / minute",
    "l/h": "liter / hour",
    "ml/min": "milliliter / minute",
    "gpm": "gallon / minute",
    "gph": "gallon / hour",
    "ft3/min": "foot ** 3 / minute",
    "ft3/h": "foot ** 3 / hour",
    "bbl/h": "oil_barrel / hour",
    "bbl/d": "oil_barrel / day",
    "Nm3/s": "meter ** 3 / second",
    "Nm3/min": "meter ** 3 / minute",
    "Nm3/h": "meter ** 3 / hour",
    "Nm3/d": "meter ** 3 / day",
    "kNm3/h": "1000 * meter ** 3 / hour",
    "Nl/min": "liter / minute",
    "Nl/h": "liter / hour",
    "Sm3/s": "meter ** 3 / second",
    "Sm3/min": "meter ** 3 / minute",
    "Sm3/h": "meter ** 3 / hour",
    "Sm3/d": "meter ** 3 / day",
    "kSm3/h": "1000 * meter ** 3 / hour",
    "kscmh": "1000 * meter ** 3 / hour",
    "Sl/min": "liter / minute",
    "scfm": "foot ** 3 / minute",
    "scfh": "foot ** 3 / hour",
    "kscfh": "1000 * foot ** 3 / hour",
    "MMscfd": "1000000 * foot ** 3 / day",
    "mol/s": "mole / second",
    "mol/h": "mole / hour",
    "kmol/h": "kilomole / hour",
    "lbmol/h": "mole * pound / gram / hour",
    "s": "second",
    "ms": "millisecond",
    "min": "minute",
    "h": "hour",
    "d": "day",
    "week": "week",
    "weeks": "week",
    "Hz": "1 / second",
    "kHz": "1000 / second",
    "1/s": "1 / second",
    "1/min": "1 / minute",
    "1/h": "1 / hour",
    "rpm": "count / minute",
    "fraction": "dimensionless",
    "%": "percent",
    "ppm": "ppm",
    "ppb": "0.001 * ppm",
    "mol%": "percent",
    "wt%": "percent",
    "ppmw": "ppm",
    "ppbw": "0.001 * ppm",
    "vol%": "percent",
    "ppmv": "ppm",
    "ppbv": "0.001 * ppm",
    "%LEL": "percent",
    "%RH": "percent",
    "m": "meter",
    "cm": "centimeter",
    "mm": "millimeter",
    "um": "micrometer",
    "km": "kilometer",
    "in": "inch",
    "ft": "foot",
    "m/s": "meter / second",
    "m/min": "meter / minute",
    "mm/s": "millimeter / second",
    "in/s": "inch / second",
    "ft/s": "foot / second",
    "ft/min": "foot / minute",
    "m/s2": "meter / second ** 2",
    "deg": "degree",
    "kg": "kilogram",
    "g": "gram",
    "mg": "milligram",
    "t": "metric_ton",
    "lb": "pound",
    "N": "newton",
    "kN": "kilonewton",
    "lbf": "force_pound",
    "m3": "meter ** 3",
    "l": "liter",
    "ml": "milliliter",
    "gal": "gallon",
    "bbl": "oil_barrel",
    "ft3": "foot ** 3",
    "kg/m3": "kilogram / meter ** 3",
    "g/m3": "gram / meter ** 3",
    "mg/m3": "milligram / meter ** 3",
    "kg/l": "kilogram / liter",
    "g/l": "gram / liter",
    "mg/l": "milligram / liter",
    "ug/l": "microgram / liter",
    "g/cm3": "gram / centimeter ** 3",
    "lb/ft3": "pound / foot ** 3",
    "mg/Nm3": "milligram / meter ** 3",
    "g/Nm3": "gram / meter ** 3",
    "mol/m3": "mole / meter ** 3",
    "mol/l": "mole / liter",
    "Pa.s": "pascal * second",
    "mPa.s": "millipascal * second",
    "cP": "poise / 100",
    "m2/s": "meter ** 2 / second",
    "mm2/s": "millimeter ** 2 / second",
    "cSt": "stokes / 100",
    "W": "watt",
    "kW": "kilowatt",
    "MW": "megawatt",
    "hp": "horsepower",
    "kJ/h": "kilojoule / hour",
    "MJ/h": "megajoule / hour",
    "GJ/h": "gigajoule / hour",
    "Btu/h": "Btu_it / hour",
    "MMBtu/h": "1000000 * Btu_it / hour",
    "J": "joule",
    "kJ": "kilojoule",
    "MJ": "megajoule",
    "GJ": "gigajoule",
    "kWh": "kilowatt * hour",
    "MWh": "megawatt * hour",
    "Btu": "Btu_it",
    "MMBtu": "1000000 * Btu_it",
    "A": "ampere",
    "mA": "milliampere",
    "uA": "microampere",
    "kA": "kiloampere",
    "V": "volt",
    "mV": "millivolt",
    "kV": "kilovolt",
    "ohm": "ohm",
    "kohm": "kiloohm",
    "Mohm": "megaohm",
    "S/m": "siemens / meter",
    "mS/m": "millisiemens / meter",
    "S/cm": "siemens / centimeter",
    "mS/cm": "millisiemens / centimeter",
    "uS/cm": "microsiemens / centimeter",
}
# The calendar's months differ and pint's month is a twelfth of 365.25 d. Reliability data count 8760 h a year
# and 730 h a month: IEC 61508-6, annex B, proof test intervals (from memory).
CALENDAR_H = {"month": 730, "months": 730, "year": 8760, "years": 8760}
# Alone in their kind, with nothing to be converted into.
ALONE = {"pH", "NTU"}

# Both this table and pint round to double precision in a different order: a few parts in 1e16 each.
ROUNDING = 1e-14


@pytest.fixture(scope="module")
def pint_units():
    return pint.UnitRegistry()


def pairs_of_a_kind():
    kinds = {}
    for known in UNITS.values():
        kinds.setdefault(known.difference_kind, []).append(known.symbol)
    return [pair for symbols in kinds.values() for pair in combinations(symbols, 2)]


def test_every_unit_has_an_independent_reference():
    assert set(UNITS) == PINT.keys() | CALENDAR_H.keys() | ALONE


def test_every_difference_agrees_with_pint(pint_units):
    sizes = {
        symbol: pint_units.Quantity(1.0) * pint_units.parse_expression(expression)
        for symbol, expression in PINT.items()
    }
    for source, target in pairs_of_a_kind():
        if source in PINT and target in PINT:
            expected = (sizes[source] / sizes[target]).to("dimensionless").magnitude
            assert convert_difference(1.0, source, target) == pytest.approx(expected, rel=ROUNDING), (
                source,
                target,
            )
            assert convert_difference(1.0, target, source) == pytest.approx(1 / expected, rel=ROUNDING)


@pytest.mark.parametrize("value", [-40.0, 0.0, 25.0, 84.5, 212.0, 1768.0])
@pytest.mark.parametrize(("source", "target"), [(a, b) for a in ("degC", "degF", "K") for b in ("degC", "degF", "K")])
def test_every_temperature_agrees_with_pint(pint_units, value, source, target):
    names = {"degC": "degree_Celsius", "degF": "degree_Fahrenheit", "K": "kelvin"}
    expected = pint_units.Quantity(value, names[source]).to(names[target]).magnitude
    # Zeros of up to 459.67 are added and taken away again: rounding in the thirteenth decimal.
    assert convert(value, source, target) == pytest.approx(expected, abs=1e-12)


# NIST Special Publication 811 (2008), appendix B.8, printed to seven figures (from memory); Sm3 and scf:
# norskpetroleum.no, "About the calculator" (1 Sm3 = 35.315 scf); fixed points of water and -40: any textbook.
@pytest.mark.parametrize(
    ("value", "source", "target", "published", "figures"),
    [
        (1, "psi", "Pa", 6.894757e3, 7),
        (1, "inH2O", "Pa", 2.490889e2, 7),
        (1, "mmH2O", "Pa", 9.80665, 7),
        (1, "inHg", "Pa", 3.386389e3, 7),
        (1, "mmHg", "Pa", 1.333224e2, 7),
        (1, "kgf/cm2", "Pa", 9.80665e4, 7),
        (1, "lb/h", "kg/s", 1.259979e-4, 7),
        (1, "gpm", "m3/s", 6.309020e-5, 7),
        (1, "bbl", "m3", 1.589873e-1, 7),
        (1, "ft3/min", "m3/s", 4.719474e-4, 7),
        (1, "lb/ft3", "kg/m3", 1.601846e1, 7),
        (1, "lbf", "N", 4.448222, 7),
        (1, "hp", "W", 7.456999e2, 7),
        (1, "Btu", "J", 1.055056e3, 7),
        (1, "Btu/h", "W", 2.930711e-1, 7),
        (1, "Sm3/h", "scfh", 35.315, 5),
        (1, "kscmh", "kscfh", 35.315, 5),
        (1, "kscmh", "Sm3/h", 1000, 7),
        (12, "months", "years", 1, 7),
        (1, "year", "h", 8760, 7),
        (1, "month", "h", 730, 7),
    ],
)
def test_published_conversions(value, source, target, published, figures):
    assert float(f"{convert(value, source, target):.{figures - 1}e}") == published


@pytest.mark.parametrize(
    ("value", "source", "target", "expected"),
    [
        (32.0, "degF", "degC", 0.0),
        (140.0, "degF", "degC", 60.0),
        (212.0, "degF", "degC", 100.0),
        (100.0, "degC", "degF", 212.0),
        (-40.0, "degC", "degF", -40.0),
        (0.0, "degC", "K", 273.15),
        (7400.0, "kg/h", "t/h", 7.4),
        (12.0, "t/h", "kg/h", 12000.0),
        (1.6, "barg", "kPag", 160.0),
        (55.6, "%", "fraction", 0.556),
        (9.0, "min", "s", 540.0),
        (0.11, "1/min", "1/h", 6.6),
    ],
)
def test_a_plain_decimal_stays_one(value, source, target, expected):
    assert convert(value, source, target) == expected


@pytest.mark.parametrize(
    ("source", "target", "said"),
    [
        ("barg", "bara", "the barometric pressure is not a fact of the register"),
        ("psig", "kPaa", "the barometric pressure is not a fact of the register"),
        ("bar", "barg", "`bar` does not say gauge or absolute; write `barg` or `bara`"),
        ("psia", "kPa", "`kPa` does not say gauge or absolute; write `kPag` or `kPaa`"),
        ("t/h", "m3/h", "the density is not a fact of the register"),
        ("m3/h", "Nm3/h", "the flowing pressure and temperature are not facts of the register"),
        ("scfh", "ft3/h", "the flowing pressure and temperature are not facts of the register"),
        ("Nm3/h", "kscmh", "the standard conditions are not facts of the register"),
        ("mol%", "wt%", "the molar masses are not facts of the register"),
        ("degC", "t/h", "`degC` is a unit of temperature, `t/h` of mass flow; the two cannot be compared"),
        ("mA", "%", "`mA` is a unit of electric current, `%` of fraction"),
    ],
)
def test_readings_of_two_kinds_are_not_converted(source, target, said):
    assert not same_kind(source, target)
    with pytest.raises(UnitError) as refused:
        convert(1.0, source, target)
    assert said in str(refused.value)
    with pytest.raises(UnitError):
        convert(1.0, target, source)


def test_differences_of_gauge_and_absolute_pressures_are_one_kind():
    assert same_difference("barg", "bara")
    assert same_difference("mbar", "psig")
    assert convert_difference(0.5, "barg", "kPaa") == 50.0


def test_differences_of_two_kinds_are_not_converted():
    assert not same_difference("degC", "barg")
    with pytest.raises(UnitError, match="`degC` is a unit of temperature, `barg` of gauge pressure"):
        convert_difference(1.0, "degC", "barg")


def test_a_temperature_difference_takes_no_zero_with_it():
    assert convert_difference(0.5, "degC", "degF") == 0.9
    assert convert_difference(18.0, "degF", "K") == 10.0
    assert convert_difference(7.0, "K", "degC") == 7.0


def test_a_unit_may_be_given_itself_or_by_its_symbol():
    assert convert(1.0, unit("t/h"), "kg/h") == convert(1.0, "t/h", unit("kg/h")) == 1000.0


# Nothing below 1e-12: no reading is so small, and near 1e-308 double precision itself gives way.
VALUES = st.floats(min_value=-1e9, max_value=1e9).map(lambda value: value if abs(value) > 1e-12 else 0.0)
PAIRS = st.sampled_from(pairs_of_a_kind())


@settings(deadline=None, max_examples=300)
@given(VALUES, PAIRS)
def test_there_and_back_is_identity(value, pair):
    source, target = pair
    back = convert_difference(convert_difference(value, source, target), target, source)
    # Four roundings of one part in 2**53.
    assert back == pytest.approx(value, rel=1e-15)
    if same_kind(source, target):
        # A zero of up to 459.67 may be added and taken away: rounding of that size.
        assert convert(convert(value, source, target), target, source) == pytest.approx(value, rel=1e-15, abs=1e-12)


@settings(deadline=None, max_examples=300)
@given(VALUES, VALUES, PAIRS)
def test_a_difference_is_linear_and_free_of_offset(first, second, pair):
    source, target = pair
    parts = convert_difference(first, source, target) + convert_difference(second, source, target)
    size = abs(convert_difference(abs(first) + abs(second), source, target))
    # Each term is rounded in proportion to its own size, which the sum may cancel.
    assert convert_difference(first + second, source, target) == pytest.approx(parts, abs=1e-15 * size)
    assert convert_difference(0.0, source, target) == 0.0


@settings(deadline=None, max_examples=300)
@given(VALUES, VALUES, PAIRS.filter(lambda pair: same_kind(*pair)))
def test_a_difference_is_the_difference_of_two_readings(first, second, pair):
    source, target = pair
    readings = convert(first, source, target) - convert(second, source, target)
    size = abs(convert_difference(abs(first) + abs(second) + 1000, source, target))
    # The readings are rounded in proportion to their size and their zero's, the difference may be smaller.
    assert convert_difference(first - second, source, target) == pytest.approx(readings, abs=1e-15 * size)


@pytest.mark.parametrize(
    ("written", "answer"),
    [
        ("degc", "degC"),
        ("C", "degC"),
        ("°C", "degC"),
        ("º C", "degC"),
        ("deg C", "degC"),
        ("Deg.C", "degC"),
        ("℃", "degC"),
        ("F", "degF"),
        ("bar(g)", "barg"),
        ("bar (a)", "bara"),
        ("bar abs", "bara"),
        ("Bar g", "barg"),
        ("bar-g", "barg"),
        ("kPa(abs)", "kPaa"),
        ("psi gauge", "psig"),
        ("PSIG", "psig"),
        ("kpa", "kPa"),
        ("m³/h", "m3/h"),
        ("m^3/hr", "m3/h"),
        ("m**3/hour", "m3/h"),
        ("Nm³/hr", "Nm3/h"),
        ("Nm3", "Nm3/h"),
        ("KG/HR", "kg/h"),
        ("kg/sec", "kg/s"),
        ("ton/h", "t/h"),
        ("tonnes/h", "t/h"),
        ("tph", "t/h"),
        ("t/day", "t/d"),
        ("L/min", "l/min"),
        ("lpm", "l/min"),
        ("USgpm", "gpm"),
        ("SCFM", "scfm"),
        ("sec", "s"),
        ("mins", "min"),
        ("hrs.", "h"),
        ("days", "d"),
        ("percent", "%"),
        ("mol %", "mol%"),
        ("% LEL", "%LEL"),
        ("µS/cm", "uS/cm"),
        ("μm", "um"),
        ("Ω", "ohm"),
        ("kΩ", "kohm"),
        ("ma", "mA"),
        ("mA DC", "mA"),
        ("ph", "pH"),
        ("rev/min", "rpm"),
        ("/min", "1/min"),
        ("mm WC", "mmH2O` or `mmH2Og"),
        ("cfm", "ft3/min` or `scfm"),
        ("min-1", "1/min` or `rpm"),
    ],
)
def test_another_spelling_is_answered_with_the_symbol(written, answer):
    with pytest.raises(UnitError) as refused:
        unit(written)
    assert str(refused.value) == f"unknown unit `{written}`; write `{answer}`"


def test_a_near_miss_is_answered_with_the_nearest():
    with pytest.raises(UnitError, match="unknown unit `degCC`; near it are `degC`, "):
        unit("degCC")


@pytest.mark.parametrize("written", ["", " ", "furlong", "bar\x00", "\u202ebarg"])
def test_what_is_near_nothing_is_still_refused(written):
    with pytest.raises(UnitError, match="unknown unit"):
        unit(written)


def test_a_long_unit_is_refused_without_being_repeated_in_full():
    with pytest.raises(UnitError) as refused:
        unit("x" * 100_000)
    assert len(str(refused.value)) < 120


def test_every_spelling_leads_to_units_of_the_table():
    answers = {answer for answers in SPELLINGS for answer in answers.split()}
    assert answers <= UNITS.keys()
    spellings = [spelling for spellings in SPELLINGS.values() for spelling in spellings.split()]
    assert len(set(spellings)) == len(spellings)
    assert not set(spellings) & UNITS.keys()


@pytest.mark.parametrize(
    ("symbol", "printed"),
    [
        ("degC", "°C"),
        ("degF", "°F"),
        ("K", "K"),
        ("barg", "bar(g)"),
        ("kPaa", "kPa(a)"),
        ("bar", "bar"),
        ("psig", "psig"),
        ("inH2O", "inH₂O"),
        ("mmH2Og", "mmH₂O(g)"),
        ("kgf/cm2g", "kgf/cm²(g)"),
        ("m3/h", "m³/h"),
        ("Nm3/h", "Nm³/h"),
        ("ft3/min", "ft³/min"),
        ("mg/Nm3", "mg/Nm³"),
        ("uS/cm", "µS/cm"),
        ("um", "µm"),
        ("ug/l", "µg/l"),
        ("m/s2", "m/s²"),
        ("mm2/s", "mm²/s"),
        ("mPa.s", "mPa·s"),
        ("ohm", "Ω"),
        ("kscmh", "kscmh"),
        ("mol%", "mol%"),
        ("fraction", ""),
        ("1/min", "1/min"),
        ("t/h", "t/h"),
    ],
)
def test_units_are_printed_as_engineers_print_them(symbol, printed):
    assert unit(symbol).display == printed


def test_no_two_units_are_printed_alike():
    assert len({known.display for known in UNITS.values()}) == len(UNITS)


def test_symbols_can_be_typed_and_told_from_numbers():
    for symbol in UNITS:
        assert symbol.isascii()
        assert symbol.isprintable()
        assert " " not in symbol


def test_factor_and_offset_lead_to_the_base_unit():
    assert (unit("barg").factor, unit("barg").offset) == (100_000.0, 0.0)
    assert (unit("degC").factor, unit("degC").offset) == (1.0, 273.15)
    # 0 degF is 255.372 K: NIST SP 811, B.8, (t + 459.67)/1.8.
    assert unit("degF").offset == pytest.approx(459.67 / 1.8, rel=ROUNDING)
    assert unit("degF").factor == pytest.approx(1 / 1.8, rel=ROUNDING)


def test_differences_have_their_own_kind_where_a_reading_has_a_zero():
    assert unit("degC").difference_kind == "temperature difference"
    assert unit("barg").difference_kind == unit("bara").difference_kind == "pressure difference"
    assert unit("bar").kind == unit("bar").difference_kind == "pressure difference"
    assert unit("t/h").difference_kind == unit("t/h").kind == "mass flow"


def test_a_rate_is_taken_apart_into_what_changes_and_the_time():
    assert rate_parts("%/min") == (unit("%"), unit("min"))
    assert rate_parts("m/h") == (unit("m"), unit("h"))
    assert rate_parts("t/h") == (unit("t"), unit("h"))
    assert rate_parts("kg/m3") is None
    assert rate_parts("1/min") is None
    assert rate_parts("degC") is None


def test_a_unit_survives_a_cache_on_disk():
    assert pickle.loads(pickle.dumps(unit("barg"))) == unit("barg")
    assert str(unit("barg")) == "barg"
