"""Values with units: what the register's form means, what other forms are answered, what documents print."""

import math
import pickle
from dataclasses import replace

import pint
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from loopdoc.register.quantity import (
    Gain,
    Quantity,
    QuantityError,
    Range,
    display_gain,
    display_number,
    display_quantity,
    display_range,
    parse_gain,
    parse_number_range,
    parse_quantity,
    parse_range,
)
from loopdoc.register.units import UNITS, UnitError, rate_parts, unit

NO_BREAK = "\u00a0"


def refusal(parse, text):
    with pytest.raises(QuantityError) as refused:
        parse(text)
    return refused.value


@pytest.mark.parametrize(
    ("text", "value", "symbol"),
    [
        ("84.5 degC", 84.5, "degC"),
        ("0 %", 0.0, "%"),
        ("-20 degC", -20.0, "degC"),
        ("+5 %", 5.0, "%"),
        ("1e-3 barg", 0.001, "barg"),
        ("-1.5E3 Pa", -1500.0, "Pa"),
        ("7.40 t/h", 7.4, "t/h"),
        ("0.11 1/min", 0.11, "1/min"),
        ("12 months", 12.0, "months"),
        ("2  s", 2.0, "s"),
    ],
)
def test_a_quantity_is_read(text, value, symbol):
    assert parse_quantity(text) == Quantity(value, unit(symbol))


@pytest.mark.parametrize(
    ("text", "low", "high", "symbol"),
    [
        ("60 to 120 degC", 60.0, 120.0, "degC"),
        ("0 to 2.5 barg", 0.0, 2.5, "barg"),
        ("-20 to -10 degC", -20.0, -10.0, "degC"),
        ("50 to 0 %", 50.0, 0.0, "%"),
        ("5 to 5 %", 5.0, 5.0, "%"),
        ("1e-3 to 1e3 uS/cm", 0.001, 1000.0, "uS/cm"),
    ],
)
def test_a_range_is_read(text, low, high, symbol):
    assert parse_range(text) == Range(low, high, unit(symbol))


def test_a_range_of_plain_numbers_is_read():
    assert parse_number_range("0.2 to 0.8") == (0.2, 0.8)
    assert parse_number_range("-1 to 1e1") == (-1.0, 10.0)


@pytest.mark.parametrize(
    ("text", "gain"),
    [
        ("5.5 degC per t/h", Gain(5.5, unit("degC"), None, unit("t/h"))),
        ("0.15 t/h per %", Gain(0.15, unit("t/h"), None, unit("%"))),
        ("-2.0 %/min per %", Gain(-2.0, unit("%"), unit("min"), unit("%"))),
        ("0.3 m/h per m3/h", Gain(0.3, unit("m"), unit("h"), unit("m3/h"))),
        ("1.2 degC/min per kW", Gain(1.2, unit("degC"), unit("min"), unit("kW"))),
        ("4 mm/s per %", Gain(4.0, unit("mm/s"), None, unit("%"))),
    ],
)
def test_a_gain_is_read(text, gain):
    assert parse_gain(text) == gain


@pytest.mark.parametrize(
    ("text", "fault", "remedy"),
    [
        ("84.5 degc", "has the unknown unit `degc`", "write `84.5 degC`"),
        ("84.5 °C", "has the unknown unit `°C`", "write `84.5 degC`"),
        ("84.5 deg C", "has the unknown unit `deg C`", "write `84.5 degC`"),
        ("1.6 bar(g)", "has the unknown unit `bar(g)`", "write `1.6 barg`"),
        ("1.6 bar g", "has the unknown unit `bar g`", "write `1.6 barg`"),
        ("0.11 per min", "has the unknown unit `per min`", "write `0.11 1/min`"),
        ("84,5 degC", "has a decimal comma", "write `84.5 degC`"),
        ("84,5 °C", "has a decimal comma", "write `84.5 degC`"),
        ("0,123 m", "has a decimal comma", "write `0.123 m`"),
        (
            "1,500 kg/h",
            "has a comma that may mean thousands or decimals",
            "write `1500 kg/h` or `1.500 kg/h`",
        ),
        ("1 500 kg/h", "has a thousands separator", "write `1500 kg/h`"),
        ("1\u202f500 kg/h", "has a thousands separator", "write `1500 kg/h`"),
        ("1'500 kg/h", "has a thousands separator", "write `1500 kg/h`"),
        ("1_500 kg/h", "has a thousands separator", "write `1500 kg/h`"),
        ("1.500,5 kg/h", "has a thousands separator", "write `1500.5 kg/h`"),
        ("1,500.5 kg/h", "has a thousands separator", "write `1500.5 kg/h`"),
        ("1.500.000 kg/h", "has a thousands separator", "write `1500000 kg/h`"),
        ("-1 234,5 kg/h", "has a thousands separator", "write `-1234.5 kg/h`"),
        ("1.2.3 s", "has more than one number before its unit", "write one number with one decimal point"),
        ("\u221220 degC", "has a typographic minus sign", "write `-20 degC`"),
        ("- 20 degC", "needs one ordinary space between its parts", "write `-20 degC`"),
        (".5 barg", "has no digit before its decimal point", "write `0.5 barg`"),
        ("5. barg", "has no digit after its decimal point", "write `5 barg`"),
        ("007 s", "has a leading zero", "write `7 s`"),
        ("00 s", "has a leading zero", "write `0 s`"),
        ("84.5degC", "needs one ordinary space between its parts", "write `84.5 degC`"),
        ("84.5\u00a0degC", "needs one ordinary space between its parts", "write `84.5 degC`"),
        (" 84.5 degC", "needs one ordinary space between its parts", "write `84.5 degC`"),
        ("84.5", "has no unit", "write the unit after the number, such as `84.5 degC`"),
        ("degC", "has no number", "write the number before the unit, such as `84.5 degC`"),
        ("about five", "is not a number with a unit", "write a number and a unit, such as `84.5 degC`"),
        ("٣ barg", "is not a number with a unit", "write a number and a unit, such as `84.5 degC`"),
        ("60 to 120 degC", "is a range where one value is wanted", "write one value, such as `84.5 degC`"),
        ("60..120 degC", "is a range where one value is wanted", "write one value, such as `84.5 degC`"),
        ("5.5 degC per t/h", "is a gain where one value is wanted", "write one value, such as `84.5 degC`"),
        ("inf degC", "is not a finite number", "write a number with its unit, such as `84.5 degC`"),
        ("-.inf", "is not a finite number", "write a number with its unit, such as `84.5 degC`"),
        ("nan bar", "is not a finite number", "write a number with its unit, such as `84.5 degC`"),
    ],
)
def test_a_faulty_quantity_is_answered_with_what_to_write(text, fault, remedy):
    error = refusal(parse_quantity, text)
    assert (error.fault, error.remedy) == (f"`{text}` {fault}", remedy)
    assert str(error) == f"`{text}` {fault}; {remedy}"


@pytest.mark.parametrize(
    ("text", "fault", "remedy"),
    [
        ("60..120 degC", "joins its ends with `..`", "write `60 to 120 degC`"),
        ("60...120 degC", "joins its ends with `...`", "write `60 to 120 degC`"),
        ("60-120 degC", "joins its ends with `-`", "write `60 to 120 degC`"),
        ("60 - 120 °C", "joins its ends with `-`", "write `60 to 120 degC`"),
        ("60–120 degC", "joins its ends with `–`", "write `60 to 120 degC`"),
        ("-20--10 degC", "joins its ends with `-`", "write `-20 to -10 degC`"),
        ("0/100 %", "joins its ends with `/`", "write `0 to 100 %`"),
        ("0-100%", "joins its ends with `-`", "write `0 to 100 %`"),
        ("[0, 10] barg", "joins its ends with `,`", "write `0 to 10 barg`"),
        ("(0; 10) barg", "joins its ends with `;`", "write `0 to 10 barg`"),
        ("60 TO 120 degC", "joins its ends with `TO`", "write `60 to 120 degC`"),
        ("60 degC to 120 degC", "has its unit twice", "write `60 to 120 degC`"),
        ("0 m3/h to 12 m3/h", "has its unit twice", "write `0 to 12 m3/h`"),
        ("60 degC to 120", "has its unit before the high end", "write `60 to 120 degC`"),
        ("60,5 to 120,5 degC", "has a decimal comma", "write `60.5 to 120.5 degC`"),
        (
            "0 to 1,500 kg/h",
            "has a comma that may mean thousands or decimals",
            "write `0 to 1500 kg/h` or `0 to 1.500 kg/h`",
        ),
        (
            "1,000 to 1,500 kg/h",
            "has a comma that may mean thousands or decimals",
            "write `1000 to 1500 kg/h` or `1.000 to 1.500 kg/h`",
        ),
        ("0 to 10 bar(g)", "has the unknown unit `bar(g)`", "write `0 to 10 barg`"),
        ("0\u00a0to\u00a010 barg", "needs one ordinary space between its parts", "write `0 to 10 barg`"),
        ("60 to 120", "has no unit", "write the unit after the high end, such as `60 to 120 degC`"),
        ("0 degC to 50 degF", "has two units", "write both ends in one unit, such as `60 to 120 degC`"),
        (
            "84.5 degC",
            "is one value where a range is wanted",
            "write both ends, such as `60 to 120 degC`",
        ),
        ("1e-3 barg", "is one value where a range is wanted", "write both ends, such as `60 to 120 degC`"),
        (
            "wide",
            "is not a range",
            "write the low end, `to`, the high end and the unit, such as `60 to 120 degC`",
        ),
    ],
)
def test_a_faulty_range_is_answered_with_what_to_write(text, fault, remedy):
    error = refusal(parse_range, text)
    assert (error.fault, error.remedy) == (f"`{text}` {fault}", remedy)


@pytest.mark.parametrize(
    ("text", "fault", "remedy"),
    [
        ("5.5 degC/(t/h)", "is not written with one `per`", "write `5.5 degC per t/h`"),
        ("5.5 degC / t/h", "is not written with one `per`", "write `5.5 degC per t/h`"),
        ("0.15 t/h/%", "is not written with one `per`", "write `0.15 t/h per %`"),
        ("-2 %/min/%", "is not written with one `per`", "write `-2 %/min per %`"),
        ("2 % per min per %", "is not written with one `per`", "write `2 %/min per %`"),
        ("5.5 degC per t/h per min", "is not written with one `per`", "write `5.5 degC/min per t/h`"),
        ("5.5 degC PER t/h", "is not written with one `per`", "write `5.5 degC per t/h`"),
        ("5.5 °C per t/h", "has the unknown unit `°C`", "write `5.5 degC per t/h`"),
        ("5.5 degC per t/hr", "has the unknown unit `t/hr`", "write `5.5 degC per t/h`"),
        ("2 %/minute per %", "has the unknown unit `%/minute`", "write `2 %/min per %`"),
        ("5,5 degC per t/h", "has a decimal comma", "write `5.5 degC per t/h`"),
        ("5.5degC per t/h", "needs one ordinary space between its parts", "write `5.5 degC per t/h`"),
        ("5.5 per t/h", "has no unit before `per`", "write both units, such as `5.5 degC per t/h`"),
        ("5.5 degC per", "has no unit after `per`", "write both units, such as `5.5 degC per t/h`"),
        ("degC per t/h", "has no number", "write the number before the units, such as `5.5 degC per t/h`"),
        ("nan degC per %", "is not a finite number", "write a gain, such as `5.5 degC per t/h`"),
        *(
            (
                text,
                "does not say per what",
                "write the change of the measurement per change of what moves it, such as `5.5 degC per t/h`",
            )
            for text in ("5.5", "5.5 degC", "5.5 t/h", "5.5 %/min")
        ),
    ],
)
def test_a_faulty_gain_is_answered_with_what_to_write(text, fault, remedy):
    error = refusal(parse_gain, text)
    assert (error.fault, error.remedy) == (f"`{text}` {fault}", remedy)


@pytest.mark.parametrize(
    ("text", "fault", "remedy"),
    [
        ("0.2-0.8", "joins its ends with `-`", "write `0.2 to 0.8`"),
        ("0,2 to 0,8", "has a decimal comma", "write `0.2 to 0.8`"),
        ("0.2 to 0.8 %", "has a unit where plain numbers are wanted", "write `0.2 to 0.8`"),
        ("0.2  to\t0.8", "needs one ordinary space between its parts", "write `0.2 to 0.8`"),
        ("0.2", "is not a range of numbers", "write two numbers with `to`, such as `0.2 to 0.8`"),
    ],
)
def test_a_faulty_range_of_numbers_is_answered_with_what_to_write(text, fault, remedy):
    error = refusal(parse_number_range, text)
    assert (error.fault, error.remedy) == (f"`{text}` {fault}", remedy)


@pytest.mark.parametrize(
    ("parse", "text", "symbol"),
    [
        (parse_quantity, "5 furlong", "furlong"),
        (parse_range, "0 to 5 furlong", "furlong"),
        (parse_gain, "5 furlong per %", "furlong"),
        (parse_gain, "5 % per furlong", "furlong"),
    ],
)
def test_an_unknown_unit_is_named(parse, text, symbol):
    error = refusal(parse, text)
    assert error.fault == f"`{text}`: unknown unit `{symbol}`"
    assert error.remedy == "write a unit of the register's table"


def test_a_spelling_of_two_meanings_is_answered_with_both():
    assert refusal(parse_quantity, "4 min-1").remedy == "write `1/min` or `rpm`"
    assert refusal(parse_quantity, "4 cfm").remedy == "write `ft3/min` or `scfm`"


PARSERS = [parse_quantity, parse_range, parse_number_range, parse_gain]


@pytest.mark.parametrize("parse", PARSERS)
@pytest.mark.parametrize("text", ["", "   ", "\u00a0"])
def test_nothing_is_said_to_be_nothing(parse, text):
    assert refusal(parse, text).fault == "no value is written"


@pytest.mark.parametrize("parse", PARSERS)
def test_a_long_text_is_refused_and_not_repeated_in_full(parse):
    error = refusal(parse, "9" * 100_000 + " degC")
    assert error.fault.endswith("...` is too long")
    assert len(str(error)) < 200


@pytest.mark.parametrize(
    ("parse", "text"),
    [
        (parse_quantity, "1e999 barg"),
        (parse_range, "0 to 1e999 barg"),
        (parse_range, "-1e999 to 0 barg"),
        (parse_number_range, "0 to 1e999"),
        (parse_gain, "1e999 degC per %"),
    ],
)
def test_a_number_beyond_every_process_is_refused(parse, text):
    assert str(refusal(parse, text)).endswith("is too large to be a value of the process; check its exponent")


# Pieces of values as people write them, good and bad, so that many of the texts are nearly right.
NUMBER_PIECES = ["5", "0", "120", "1,5", ".5", "5.", "007", "1e3 ", "-", "+", "to", "..", "(", ")"]
UNIT_PIECES = ["degC", "°C", "bar(g)", "t/h", "%", "%/min", "m³/hr", "cfm", "min", "per", "/", "é", "inf", "nan"]
PIECES = st.sampled_from([*NUMBER_PIECES, *UNIT_PIECES, "1 500", "\u2212", " ", "\u00a0", "\x00"])
TEXTS = st.lists(PIECES, max_size=9).map(" ".join) | st.lists(PIECES, max_size=9).map("".join)


@settings(deadline=None, max_examples=500)
@given(st.sampled_from(PARSERS), TEXTS)
def test_any_text_is_read_or_answered_with_what_can_be_read(parse, text):
    try:
        parse(text)
        return
    except QuantityError as error:
        fault, remedy = error.fault, error.remedy
    assert fault
    assert remedy
    if remedy.startswith("write `") and not fault.startswith(f"`{text}`: unknown unit"):
        for answer in remedy.removeprefix("write ").split(" or "):
            parse(answer.strip("`"))


def test_an_answer_given_can_be_written():
    for parse, text in (
        (parse_quantity, "1 234,5 Nm³/hr"),
        (parse_range, "–20…+40 °C"),
        (parse_gain, "5,5 °C/(t/h)"),
    ):
        answer = refusal(parse, text).remedy.removeprefix("write `").removesuffix("`")
        assert str(parse(answer)) == answer


NUMBERS = st.floats(allow_nan=False, allow_infinity=False)
SYMBOLS = st.sampled_from(sorted(UNITS))


@settings(deadline=None, max_examples=300)
@given(NUMBERS, SYMBOLS)
def test_a_quantity_reads_back_as_itself(value, symbol):
    quantity = Quantity(value, unit(symbol))
    assert parse_quantity(str(quantity)) == quantity


@settings(deadline=None, max_examples=300)
@given(NUMBERS, NUMBERS, SYMBOLS)
def test_a_range_reads_back_as_itself(low, high, symbol):
    written = Range(low, high, unit(symbol))
    assert parse_range(str(written)) == written


TIMES = st.sampled_from(["s", "min", "h", "d"])
RATES = st.one_of(SYMBOLS, st.builds("{}/{}".format, SYMBOLS, TIMES))


@settings(deadline=None, max_examples=300)
@given(NUMBERS, RATES, SYMBOLS)
def test_a_gain_reads_back_as_itself(value, numerator, denominator):
    if numerator not in UNITS and rate_parts(numerator) is None:
        numerator = numerator.rpartition("/")[0]
    gain = parse_gain(f"{value!r} {numerator} per {denominator}")
    assert parse_gain(str(gain)) == gain
    assert gain.value == value


@pytest.mark.parametrize("text", ["7.40 t/h", "84.50 degC", "-0.0 %", "1.0e3 Pa", "+5 %", "120.000 m3/h"])
def test_the_digits_stay_as_written(text):
    assert str(parse_quantity(text)) == text


def test_the_digits_do_not_count_in_comparisons():
    assert parse_quantity("7.40 t/h") == parse_quantity("7.4 t/h")
    assert hash(parse_quantity("7.40 t/h")) == hash(parse_quantity("7.4 t/h"))
    assert parse_range("0.0 to 10.0 barg") == parse_range("0 to 10 barg")
    assert parse_gain("5.50 degC per %") == parse_gain("5.5 degC per %")


def test_a_changed_value_drops_the_digits_of_the_old_one():
    assert str(replace(parse_quantity("7.40 t/h"), value=8.0)) == "8 t/h"
    assert display_quantity(replace(parse_quantity("7.40 t/h"), value=8.0)) == f"8{NO_BREAK}t/h"


@pytest.mark.parametrize(
    ("value", "text"),
    [(8.0, "8 t/h"), (0.1, "0.1 t/h"), (-0.0, "0 t/h"), (1e-6, "0.000001 t/h"), (1e17, f"1{'0' * 17} t/h")],
)
def test_a_calculated_quantity_is_written_in_plain_digits(value, text):
    assert str(Quantity(value, unit("t/h"))) == text


def test_a_quantity_is_converted_as_a_reading_and_as_a_difference():
    assert parse_quantity("212 degF").to("degC") == 100.0
    assert parse_quantity("1.6 barg").to("kPag") == 160.0
    assert parse_quantity("0.5 degC").difference_in("degF") == 0.9
    assert parse_quantity("0.5 barg").difference_in("kPaa") == 50.0
    with pytest.raises(UnitError, match="barometric pressure"):
        parse_quantity("1.6 barg").to("bara")


def test_a_range_is_converted_end_by_end():
    assert parse_range("32 to 212 degF").to("degC") == Range(0.0, 100.0, unit("degC"))
    assert parse_range("0 to 12 t/h").to("kg/h") == Range(0.0, 12000.0, unit("kg/h"))
    assert str(parse_range("0.0 to 12.0 t/h").to("t/h")) == "0.0 to 12.0 t/h"
    with pytest.raises(UnitError, match="density"):
        parse_range("0 to 12 t/h").to("m3/h")


def test_the_span_is_the_difference_of_the_ends():
    assert parse_range("60 to 120 degC").span == 60.0
    assert parse_range("-20 to 40 degC").span == 60.0
    assert parse_range("50 to 0 %").span == -50.0


@pytest.mark.parametrize("text", ["0 to 50 %", "50 to 0 %"])
@pytest.mark.parametrize(("value", "inside"), [(-0.1, False), (0.0, True), (20.0, True), (50.0, True), (50.1, False)])
def test_a_range_contains_its_ends_and_what_lies_between(text, value, inside):
    assert parse_range(text).contains(value) is inside


@pytest.mark.parametrize(
    ("text", "numerator", "denominator", "in_pint"),
    [
        ("5.5 degC per t/h", "degF", "kg/h", ("delta_degC / (metric_ton/hour)", "delta_degF / (kg/hour)")),
        ("0.15 t/h per %", "kg/s", "fraction", ("metric_ton/hour / percent", "kg/second")),
        ("3.2 psig per gpm", "bara", "m3/h", ("psi / (gallon/minute)", "bar / (meter**3/hour)")),
        ("-2.0 %/min per %", "%", "%", ("1 / minute", "1 / second")),
        ("0.3 m/h per m3/h", "mm", "l/s", ("meter/hour / (meter**3/hour)", "mm/second / (liter/second)")),
        ("4 mm/s per %", "m", "%", ("mm/second / percent", "meter/second / percent")),
        ("4 mm/s per %", "m/s", "%", ("mm/second / percent", "meter/second / percent")),
        ("1.2 t/h per %", "kg", "%", ("metric_ton/hour / percent", "kg/second / percent")),
        ("1.2 t/h per %", "kg/h", "%", ("metric_ton/hour / percent", "kg/hour / percent")),
    ],
)
def test_gains_agree_with_pint(text, numerator, denominator, in_pint):
    units = pint.get_application_registry()
    gain = parse_gain(text)
    expected = units.Quantity(gain.value, in_pint[0]).to(in_pint[1]).magnitude
    # A handful of roundings in double precision on either side.
    assert gain.in_units(numerator, denominator) == pytest.approx(expected, rel=1e-14)


def test_a_gain_of_other_kinds_is_refused():
    with pytest.raises(UnitError, match="`degC` is a unit of temperature"):
        parse_gain("5.5 degC per t/h").in_units("barg", "t/h")
    with pytest.raises(UnitError, match="density"):
        parse_gain("5.5 degC per t/h").in_units("degC", "m3/h")


@pytest.mark.parametrize(
    ("text", "measurement", "integrates"),
    [
        ("-2.0 %/min per %", "%", True),
        ("0.15 t/h per %", "t/h", False),
        ("0.15 t/h per %", "kg", True),
        ("4 mm/s per %", "mm/s", False),
        ("4 mm/s per %", "mm", True),
        ("5.5 degC per t/h", "degC", False),
    ],
)
def test_the_measurement_tells_whether_a_gain_integrates(text, measurement, integrates):
    assert parse_gain(text).integrates(measurement) is integrates


@pytest.mark.parametrize("text", ["84.5 degC", "60 to 120 degC", "5.5 degC per t/h"])
def test_a_text_read_before_is_not_read_again(text):
    parse = {"84.5 degC": parse_quantity, "60 to 120 degC": parse_range}.get(text, parse_gain)
    assert parse(text) is parse(text)


def test_values_survive_a_cache_on_disk():
    for value in (parse_quantity("7.40 t/h"), parse_range("0.0 to 10 barg"), parse_gain("-2.0 %/min per %")):
        again = pickle.loads(pickle.dumps(value))
        assert again == value
        assert str(again) == str(value)
    error = pickle.loads(pickle.dumps(refusal(parse_quantity, "84,5 degC")))
    assert str(error) == "`84,5 degC` has a decimal comma; write `84.5 degC`"


@pytest.mark.parametrize(
    ("text", "printed"),
    [
        ("84.5 degC", "84.5\u00a0°C"),
        ("7.40 t/h", "7.40\u00a0t/h"),
        ("-20 degC", "\u221220\u00a0°C"),
        ("+5 %", "5\u00a0%"),
        ("1e3 kg/h", "1000\u00a0kg/h"),
        ("1.50e3 kg/h", "1500\u00a0kg/h"),
        ("2e-6 m", "0.000002\u00a0m"),
        ("2e-7 m", "2\u00a0×\u00a010⁻⁷\u00a0m"),
        ("-1.50e12 J", "\u22121.50\u00a0×\u00a010¹²\u00a0J"),
        ("1.6 barg", "1.6\u00a0bar(g)"),
        ("12 months", "12\u00a0months"),
        ("90 deg", "90°"),
        ("0.35 fraction", "0.35"),
        ("-0.0 %", "0.0\u00a0%"),
    ],
)
def test_a_quantity_is_printed_with_the_digits_as_written(text, printed):
    assert display_quantity(parse_quantity(text)) == printed


def test_a_calculated_quantity_is_printed_without_binary_noise():
    assert display_quantity(Quantity(0.1 + 0.2, unit("barg"))) == "0.3\u00a0bar(g)"


@pytest.mark.parametrize(
    ("text", "printed"),
    [
        ("60 to 120 degC", "60 to 120\u00a0°C"),
        ("-20.0 to 40 degC", "\u221220.0 to 40\u00a0°C"),
        ("50 to 0 %", "50 to 0\u00a0%"),
        ("0.2 to 0.8 fraction", "0.2 to 0.8"),
        ("0 to 12e3 Nm3/h", "0 to 12000\u00a0Nm³/h"),
    ],
)
def test_a_range_is_printed_with_its_unit_once(text, printed):
    assert display_range(parse_range(text)) == printed


def test_a_gain_is_printed_as_it_reads():
    assert display_gain(parse_gain("5.50 degC per t/h")) == "5.50\u00a0°C per t/h"
    assert display_gain(parse_gain("-2.0 %/min per %")) == "\u22122.0\u00a0%/min per %"
    assert display_gain(parse_gain("12 t/h per fraction")) == "12\u00a0t/h per fraction"


@pytest.mark.parametrize(
    ("value", "significant", "printed"),
    [
        (0.1 + 0.2, 6, "0.3"),
        (7400 * 0.001, 6, "7.4"),
        (1000.0, 6, "1000"),
        (1e6, 6, "1000000"),
        (2.5, 3, "2.5"),
        (2.3456, 3, "2.35"),
        (2.345, 3, "2.35"),
        (0.00012345678, 3, "0.000123"),
        (9.9996, 4, "10"),
        (12345.6, 3, "12346"),
        (123456789.5, 3, "123456790"),
        (-84.5, 6, "\u221284.5"),
        (-0.0, 6, "0"),
        (-1e-9, 3, "\u22121\u00a0×\u00a010⁻⁹"),
        (1.2345e15, 3, "1.23\u00a0×\u00a010¹⁵"),
        (math.inf, 3, "∞"),
        (-math.inf, 3, "\u2212∞"),
        (5, 3, "5"),
    ],
)
def test_a_number_is_printed_for_a_reader(value, significant, printed):
    assert display_number(value, significant) == printed


def test_what_is_no_number_is_not_printed():
    with pytest.raises(ValueError, match="not a number"):
        display_number(math.nan)


@settings(deadline=None, max_examples=300)
@given(st.floats(min_value=-1e11, max_value=1e11, allow_nan=False), st.integers(min_value=1, max_value=12))
def test_a_printed_number_is_true_to_its_digits(value, significant):
    printed = display_number(value, significant)
    assert "e" not in printed
    if "×" not in printed:
        shown = float(printed.replace("\u2212", "-"))
        # Half a unit of the last digit kept, relative to the value; digits before the point are always kept.
        assert abs(shown - value) <= min(5 * 10.0**-significant * abs(value), 0.5) * (1 + 1e-9)
