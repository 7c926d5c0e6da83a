"""Scaling, square root extraction and sensor signals against published tables."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from loopdoc.engineering import scaling
from loopdoc.engineering.thermocouple import thermocouple_emf_mv, thermocouple_signal_mv

finite = st.floats(-1e6, 1e6)


@pytest.mark.parametrize(
    ("percent", "current_ma"), [(0.0, 4.0), (25.0, 8.0), (50.0, 12.0), (75.0, 16.0), (100.0, 20.0)]
)
def test_five_points_of_the_4_to_20_ma_signal(percent: float, current_ma: float) -> None:
    # IEC 60381-1: linear between the live zero of 4 mA and the full scale of 20 mA; exact in binary.
    assert scaling.milliampere_from_percent(percent) == current_ma
    assert scaling.percent_from_milliampere(current_ma) == percent


@pytest.mark.parametrize(
    ("low", "high", "value", "current_ma"),
    [
        (0.0, 150.0, 75.0, 12.0),
        (-50.0, 400.0, 100.0, 9.333333),
        (20.0, 80.0, 35.0, 8.0),
        (200.0, 0.0, 50.0, 16.0),
    ],
)
def test_signal_of_a_value(low: float, high: float, value: float, current_ma: float) -> None:
    # mA = 4 + 16 (v - lo)/(hi - lo), computed by hand; the last range falls. Six printed decimals.
    percent = scaling.percent_from_value(value, low=low, high=high)
    assert scaling.milliampere_from_percent(percent) == pytest.approx(current_ma, abs=1e-6)


@given(value=finite, low=finite, span=st.floats(1e-3, 1e6))
def test_percent_and_value_are_inverse(value: float, low: float, span: float) -> None:
    percent = scaling.percent_from_value(value, low=low, high=low + span)
    back = scaling.value_from_percent(percent, low=low, high=low + span)
    # Rounding of the range ends, at most 1e6, against the smallest span.
    assert back == pytest.approx(value, abs=1e-6)


@pytest.mark.parametrize("convert", [scaling.percent_from_value, scaling.value_from_percent])
def test_a_range_without_width_is_refused(convert: object) -> None:
    with pytest.raises(ValueError, match="two different ends"):
        convert(1.0, low=5.0, high=5.0)  # type: ignore[operator]


# sensorsone.com, "Converting 4 to 20mA Linear Signal to and from Square Root Extraction Signal", mA to mA.
SQUARE_ROOT_TABLE = (
    (4, 4.0),
    (5, 8.0),
    (6, 9.66),
    (7, 10.93),
    (8, 12.0),
    (9, 12.94),
    (10, 13.8),
    (11, 14.58),
    (12, 15.31),
    (13, 16.0),
    (14, 16.65),
    (15, 17.27),
    (16, 17.86),
    (17, 18.42),
    (18, 18.97),
    (19, 19.49),
    (20, 20.0),
)


@pytest.mark.parametrize(("linear_ma", "root_ma"), SQUARE_ROOT_TABLE)
def test_square_root_extraction_table(linear_ma: float, root_ma: float) -> None:
    flow = scaling.flow_from_dp_fraction(scaling.percent_from_milliampere(linear_ma) / 100.0)
    # The table prints two decimals.
    assert scaling.milliampere_from_percent(100.0 * flow) == pytest.approx(root_ma, abs=0.0051)
    assert scaling.dp_from_flow_fraction(flow) == pytest.approx((linear_ma - 4.0) / 16.0, abs=1e-12)


def test_reversed_flow_is_refused() -> None:
    with pytest.raises(ValueError, match="below zero"):
        scaling.flow_from_dp_fraction(-0.01)
    with pytest.raises(ValueError, match="below zero"):
        scaling.dp_from_flow_fraction(-0.01)


def test_check_points_of_a_square_root_flow() -> None:
    points = scaling.check_points(low=0.0, high=15.0, square_root=True)
    # Key pairs of the square root table: 25 % dp is 50 % flow, 50 % is 70.71 %, 75 % is 86.60 %.
    assert [p.current_ma for p in points] == [4.0, 8.0, 12.0, 16.0, 20.0]
    assert [p.measurement_pct for p in points] == pytest.approx(
        [0.0, 50.0, 70.7107, 86.6025, 100.0], abs=5e-5
    )
    assert [p.value for p in points] == pytest.approx([0.0, 7.5, 10.6066, 12.9904, 15.0], abs=5e-5)


def test_check_points_of_a_linear_range() -> None:
    points = scaling.check_points(low=60.0, high=120.0)
    assert [p.value for p in points] == [60.0, 75.0, 90.0, 105.0, 120.0]
    assert [p.measurement_pct for p in points] == [p.signal_pct for p in points]


@pytest.mark.parametrize(
    ("current_ma", "percent", "state"),
    [
        (3.6, -2.5, "failure low"),
        (3.7, -1.875, "undefined"),
        (3.8, -1.25, "measurement"),
        (20.5, 103.125, "measurement"),
        (20.7, 104.375, "undefined"),
        (21.0, 106.25, "failure high"),
    ],
)
def test_ne_43_limits(current_ma: float, percent: float, state: str) -> None:
    # NAMUR NE 43 (2003, 2021): 3.8 to 20.5 mA measures, 3.6 mA and less or 21 mA and more is a failure.
    assert scaling.signal_state(current_ma) == state
    assert scaling.percent_from_milliampere(current_ma) == pytest.approx(percent, abs=1e-12)


# DIN EN 60751:1996 table (ohm) as reprinted at sensorsci.com, "Reference Table for Pt RTD Elements".
PT100_TABLE = (
    (-200, 18.52),
    (-100, 60.26),
    (-50, 80.31),
    (-40, 84.27),
    (-30, 88.22),
    (-20, 92.16),
    (-10, 96.09),
    (0, 100.0),
    (10, 103.9),
    (20, 107.79),
    (30, 111.67),
    (40, 115.54),
    (50, 119.4),
    (60, 123.24),
    (70, 127.08),
    (80, 130.9),
    (90, 134.71),
    (100, 138.51),
    (110, 142.29),
    (120, 146.07),
    (130, 149.83),
    (140, 153.58),
    (150, 157.33),
    (160, 161.05),
    (170, 164.77),
    (180, 168.48),
    (190, 172.17),
    (200, 175.86),
    (210, 179.53),
    (220, 183.19),
    (230, 186.84),
    (240, 190.47),
    (250, 194.1),
    (260, 197.71),
    (270, 201.31),
    (280, 204.9),
    (290, 208.48),
    (300, 212.05),
    (310, 215.61),
    (320, 219.15),
    (330, 222.68),
    (340, 226.21),
    (350, 229.72),
    (360, 233.21),
    (370, 236.7),
    (380, 240.18),
    (390, 243.64),
    (400, 247.09),
    (500, 280.98),
    (600, 313.71),
)


@pytest.mark.parametrize(("temperature", "resistance"), PT100_TABLE)
def test_pt100_table(temperature: float, resistance: float) -> None:
    # The table prints two decimals.
    assert scaling.pt100_resistance_ohm(temperature) == pytest.approx(resistance, abs=0.0051)


def test_pt100_fundamental_interval() -> None:
    # IEC 60751: alpha = 3.851e-3 1/degC, from the constants 3.85055e-3.
    interval = scaling.pt100_resistance_ohm(100.0) - scaling.pt100_resistance_ohm(0.0)
    assert interval == pytest.approx(38.5055, abs=1e-9)


@pytest.mark.parametrize("temperature", [-200.1, 850.1, math.nan])
def test_pt100_outside_its_range_is_refused(temperature: float) -> None:
    with pytest.raises(ValueError, match="-200 to 850 degC"):
        scaling.pt100_resistance_ohm(temperature)


@pytest.mark.parametrize(
    ("tolerance_class", "temperature", "tolerance"),
    [
        ("A", 0.0, 0.15),
        ("A", 100.0, 0.35),
        ("A", -200.0, 0.55),
        ("B", 0.0, 0.3),
        ("B", 100.0, 0.8),
        ("B", 200.0, 1.3),
    ],
)
def test_pt100_tolerance(tolerance_class: str, temperature: float, tolerance: float) -> None:
    # IEC 60751:2008, classes A and B as quoted in public data sheets.
    assert scaling.pt100_tolerance_degc(temperature, tolerance_class) == pytest.approx(tolerance, abs=1e-12)


def test_unknown_pt100_class_is_refused() -> None:
    with pytest.raises(ValueError, match="AA, A, B and C"):
        scaling.pt100_tolerance_degc(0.0, "D")


# NIST ITS-90 Thermocouple Database (SRD 60), printed tables (degC, mV); the functions of IEC 60584-1.
THERMOCOUPLE_TABLES = {
    "K": (
        (-200, -5.891),
        (-100, -3.554),
        (-50, -1.889),
        (-20, -0.778),
        (0, 0.0),
        (10, 0.397),
        (20, 0.798),
        (25, 1.0),
        (50, 2.023),
        (100, 4.096),
        (150, 6.138),
        (200, 8.138),
        (250, 10.153),
        (300, 12.209),
        (400, 16.397),
        (500, 20.644),
        (600, 24.905),
        (700, 29.129),
        (800, 33.275),
        (900, 37.326),
        (1000, 41.276),
        (1100, 45.119),
        (1200, 48.838),
        (1372, 54.886),
    ),
    "J": (
        (-200, -7.89),
        (-100, -4.633),
        (-50, -2.431),
        (0, 0.0),
        (10, 0.507),
        (20, 1.019),
        (25, 1.277),
        (50, 2.585),
        (100, 5.269),
        (150, 8.01),
        (200, 10.779),
        (250, 13.555),
        (300, 16.327),
        (400, 21.848),
        (500, 27.393),
        (600, 33.102),
        (700, 39.132),
        (760, 42.919),
        (1000, 57.953),
        (1200, 69.553),
    ),
    "T": (
        (-200, -5.603),
        (-100, -3.379),
        (-50, -1.819),
        (0, 0.0),
        (10, 0.391),
        (20, 0.79),
        (25, 0.992),
        (50, 2.036),
        (100, 4.279),
        (150, 6.704),
        (200, 9.288),
        (250, 12.013),
        (300, 14.862),
        (350, 17.819),
        (400, 20.872),
    ),
    "E": (
        (-200, -8.825),
        (-100, -5.237),
        (0, 0.0),
        (20, 1.192),
        (25, 1.495),
        (50, 3.048),
        (100, 6.319),
        (200, 13.421),
        (300, 21.036),
        (400, 28.946),
        (500, 37.005),
        (600, 45.093),
        (800, 61.017),
        (1000, 76.373),
    ),
    "N": (
        (-200, -3.99),
        (-100, -2.407),
        (0, 0.0),
        (20, 0.525),
        (25, 0.659),
        (50, 1.34),
        (100, 2.774),
        (200, 5.913),
        (300, 9.341),
        (400, 12.974),
        (500, 16.748),
        (600, 20.613),
        (800, 28.455),
        (1000, 36.256),
        (1200, 43.846),
        (1300, 47.513),
    ),
    "S": (
        (-50, -0.236),
        (0, 0.0),
        (20, 0.113),
        (25, 0.143),
        (50, 0.299),
        (100, 0.646),
        (200, 1.441),
        (300, 2.323),
        (400, 3.259),
        (500, 4.233),
        (600, 5.239),
        (800, 7.345),
        (1000, 9.587),
        (1200, 11.951),
        (1400, 14.373),
        (1600, 16.777),
        (1768, 18.693),
    ),
    "R": (
        (0, 0.0),
        (25, 0.141),
        (100, 0.647),
        (500, 4.471),
        (1000, 10.506),
        (1500, 17.451),
    ),
    "B": (
        (0, 0.0),
        (25, -0.002),
        (42, 0.0),
        (100, 0.033),
        (600, 1.792),
        (1000, 4.834),
        (1500, 10.099),
        (1800, 13.591),
    ),
}
THERMOCOUPLE_POINTS = [
    (kind, temperature, emf) for kind, rows in THERMOCOUPLE_TABLES.items() for temperature, emf in rows
]


@pytest.mark.parametrize(("kind", "temperature", "emf"), THERMOCOUPLE_POINTS)
def test_thermocouple_tables(kind: str, temperature: float, emf: float) -> None:
    # The tables print three decimals.
    assert thermocouple_emf_mv(kind, temperature) == pytest.approx(emf, abs=0.00051)


@pytest.mark.parametrize(
    ("kind", "hot", "cold", "emf"),
    [("K", 200.0, 25.0, 7.138), ("J", 300.0, 20.0, 15.308), ("T", 100.0, 20.0, 3.489)],
)
def test_cold_junction(kind: str, hot: float, cold: float, emf: float) -> None:
    # E(hot) - E(cold) from the same printed tables; the difference of two rounded values is good to 0.001.
    signal = thermocouple_signal_mv(kind, measuring_degc=hot, reference_degc=cold)
    assert signal == pytest.approx(emf, abs=0.0011)


@pytest.mark.parametrize(("kind", "temperature"), [("K", 1373.0), ("T", 401.0), ("B", -1.0), ("S", -51.0)])
def test_thermocouple_outside_its_range_is_refused(kind: str, temperature: float) -> None:
    with pytest.raises(ValueError, match=f"type {kind} thermocouple is defined from"):
        thermocouple_emf_mv(kind, temperature)


def test_unknown_thermocouple_type_is_refused() -> None:
    with pytest.raises(ValueError, match="no thermocouple type X"):
        thermocouple_emf_mv("X", 20.0)
