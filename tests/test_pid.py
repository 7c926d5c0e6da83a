"""Forms and units of PID settings, and the scanned algorithm, against published values and other methods."""

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy.signal import lfilter

from loopdoc.engineering.pid import (
    Controller,
    ParallelSettings,
    SeriesSettings,
    StandardSettings,
    gain_from_proportional_band,
    on_secondary_range,
    parallel_from_standard,
    proportional_band_from_gain,
    repeats_from_reset,
    reset_from_repeats,
    scan_coefficients,
    series_from_standard,
    standard_from_parallel,
    standard_from_series,
)
from loopdoc.engineering.scanning import CONTROLLER, MEMORY, Records, scan, track

# --- forms ---------------------------------------------------------------------------------------

# Series and standard settings (gain, reset, rate) by F = 1 + Td'/Ti', Skogestad 2003 eq. 36 (number from
# memory); the parallel triple by Kp = K, Ki = K/Ti, Kd = K Td.
SERIES_AND_STANDARD = [
    ((2.0, 8.0, 2.0), (2.5, 10.0, 1.6)),
    ((0.5, 1.0, 1.0), (1.0, 2.0, 0.5)),
    ((10.0, 0.4, 0.2), (15.0, 0.6, 0.133333)),
    ((1.0, 5.0, 5.0), (2.0, 10.0, 2.5)),
]


@pytest.mark.parametrize(("series", "standard"), SERIES_AND_STANDARD)
def test_standard_from_series(series: tuple[float, ...], standard: tuple[float, ...]) -> None:
    found = standard_from_series(SeriesSettings(*series))
    # The references carry six decimals.
    assert (found.gain, found.reset_s, found.rate_s) == pytest.approx(standard, abs=1e-6)


@pytest.mark.parametrize(("series", "standard"), [SERIES_AND_STANDARD[0], SERIES_AND_STANDARD[3]])
def test_series_from_standard(series: tuple[float, ...], standard: tuple[float, ...]) -> None:
    found = series_from_standard(StandardSettings(*standard))
    # A double root in the limit Ti = 4 Td halves the digits.
    assert (found.gain, found.reset_s, found.rate_s) == pytest.approx(series, rel=1e-7)


def test_no_series_form_above_a_quarter() -> None:
    with pytest.raises(ValueError, match="rate time is above a quarter of the reset time"):
        series_from_standard(StandardSettings(2.0, 10.0, 3.0))


def test_parallel_from_standard() -> None:
    assert parallel_from_standard(StandardSettings(2.5, 10.0, 1.6)) == ParallelSettings(2.5, 0.25, 4.0)


@pytest.mark.parametrize(
    "settings", [ParallelSettings(0.0, 0.1), ParallelSettings(2.0, -0.1), ParallelSettings(-2.0, -0.1, 1.0)]
)
def test_parallel_settings_without_standard_form(settings: ParallelSettings) -> None:
    with pytest.raises(ValueError, match="no standard form"):
        standard_from_parallel(settings)


times = st.floats(0.01, 1e4)


@given(
    gain=st.floats(0.01, 100.0),
    reset=times | st.just(math.inf),
    rate=st.just(0.0) | times,
    sign=st.sampled_from([1, -1]),
)
def test_forms_keep_the_same_frequency_response(gain: float, reset: float, rate: float, sign: int) -> None:
    standard = StandardSettings(sign * gain, reset, rate)
    w = 1j * np.logspace(-5.0, 3.0, 20)
    response = standard.gain * (1.0 + (1.0 / reset) / w + rate * w)
    parallel = parallel_from_standard(standard)
    direct = parallel.proportional + parallel.integral_per_s / w + parallel.derivative_s * w
    # Only rounding separates the forms.
    np.testing.assert_allclose(direct, response, rtol=1e-12)
    back = standard_from_parallel(parallel)
    assert (back.gain, back.reset_s, back.rate_s) == pytest.approx((standard.gain, reset, rate), rel=1e-12)
    assume(rate <= 0.249 * reset)
    series = series_from_standard(standard)
    product = series.gain * (1.0 + (1.0 / series.reset_s) / w) * (1.0 + series.rate_s * w)
    # Near Ti = 4 Td the square root loses half of the digits.
    np.testing.assert_allclose(product, response, rtol=1e-9)


@given(gain=st.floats(0.01, 100.0), reset=times | st.just(math.inf), rate=st.just(0.0) | times)
def test_series_to_standard_and_back_is_the_identity(gain: float, reset: float, rate: float) -> None:
    """Where the reset is the longer of the two times, as every series controller is written."""
    # At equal times the square root of 1 - 4 Td/Ti is zero and has lost its digits.
    assume(rate <= 0.99 * reset)
    back = series_from_standard(standard_from_series(SeriesSettings(gain, reset, rate)))
    assert back.gain == pytest.approx(gain, rel=1e-9)
    assert back.reset_s == pytest.approx(reset, rel=1e-9)
    # A rate far below the reset comes out of a difference of numbers of the size of the reset.
    assert back.rate_s == pytest.approx(rate, rel=1e-9, abs=1e-13 * reset if math.isfinite(reset) else 0.0)


# --- units ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(("gain", "band"), [(2.0, 50.0), (0.5, 200.0), (4.0, 25.0), (-2.0, -50.0)])
def test_proportional_band(gain: float, band: float) -> None:
    # "A proportional band of 50 % is equivalent to a proportional gain of 2", a vendor's knowledge article.
    assert proportional_band_from_gain(gain) == band
    assert gain_from_proportional_band(band) == gain


@pytest.mark.parametrize(("reset_s", "per_minute"), [(300.0, 0.2), (30.0, 2.0), (120.0, 0.5)])
def test_repeats(reset_s: float, per_minute: float) -> None:
    # Definition: repeats per minute = 60/Ti.
    assert 60.0 * repeats_from_reset(reset_s) == pytest.approx(per_minute, rel=1e-15)
    assert reset_from_repeats(per_minute / 60.0) == pytest.approx(reset_s, rel=1e-15)


def test_no_integral_action_is_no_repeats() -> None:
    assert repeats_from_reset(math.inf) == 0.0
    assert reset_from_repeats(0.0) == math.inf


@pytest.mark.parametrize(
    ("convert", "value"),
    [
        (gain_from_proportional_band, 0.0),
        (proportional_band_from_gain, math.nan),
        (reset_from_repeats, -1.0),
        (repeats_from_reset, 0.0),
    ],
)
def test_meaningless_settings_are_refused(convert: object, value: float) -> None:
    with pytest.raises(ValueError, match="must be"):
        convert(value)  # type: ignore[operator]


@pytest.mark.parametrize(
    ("field", "value"),
    [
        ("gain", 0.0),
        ("gain", math.inf),
        ("reset_s", 0.0),
        ("rate_s", -1.0),
        ("derivative_filter", 0.0),
        ("setpoint_weight", math.nan),
        ("interval_s", -1.0),
        ("measurement_filter_s", math.inf),
        ("output_low_pct", 100.0),
        ("setpoint_high_pct", -1.0),
    ],
)
def test_a_controller_that_cannot_be_is_refused(field: str, value: float) -> None:
    with pytest.raises(ValueError, match=r"must be|weights"):
        Controller(**({"gain": 1.0} | {field: value}))


def test_output_span_narrower_than_the_secondary_range() -> None:
    # Output 0 to 12 t/h on a range of 0 to 15 t/h, limits 2 and 10.5 t/h: by hand 1.8*12/15, 2/15, 10.5/15.
    primary = Controller(1.8, output_low_pct=100.0 * 2.0 / 12.0, output_high_pct=100.0 * 10.5 / 12.0)
    converted = on_secondary_range(primary, span_low_pct=0.0, span_high_pct=80.0)
    assert converted.gain == pytest.approx(1.44, rel=1e-12)
    assert converted.output_low_pct == pytest.approx(100.0 * 2.0 / 15.0, rel=1e-12)
    assert converted.output_high_pct == pytest.approx(70.0, rel=1e-12)


def test_a_reversed_output_span_turns_gain_and_limits() -> None:
    converted = on_secondary_range(
        Controller(2.0, output_high_pct=90.0), span_low_pct=100.0, span_high_pct=0.0
    )
    assert (converted.gain, converted.output_low_pct, converted.output_high_pct) == (-2.0, 10.0, 100.0)


def test_an_output_span_without_width_is_refused() -> None:
    with pytest.raises(ValueError, match="no width"):
        on_secondary_range(Controller(2.0), span_low_pct=40.0, span_high_pct=40.0)


# --- the scanned algorithm -----------------------------------------------------------------------


def scanned(controller: Controller, interval_s: float) -> tuple[Records, Records]:
    """A controller and its memory as the simulation has them."""
    records, memory = np.zeros(1, CONTROLLER), np.zeros(1, MEMORY)
    for name, value in scan_coefficients([controller], np.array([interval_s]))._asdict().items():
        records[name] = value
    return records, memory


def test_scans_equal_the_transfer_functions_of_their_parts() -> None:
    """P, I, D and the measurement filter by scipy's recursive filters, added up independently."""
    k, ti, td, n, b, c, tf, h = 1.7, 8.0, 3.0, 6.0, 0.7, 0.3, 2.0, 0.5
    controller = Controller(k, ti, td, n, b, c, measurement_filter_s=tf)
    rng = np.random.default_rng(7)
    setpoint, measurement = rng.normal(size=200), rng.normal(size=200)

    share = 1.0 - math.exp(-h / tf)
    filtered = lfilter([share], [1.0, share - 1.0], measurement)
    integral = lfilter([k * h / ti], [1.0, -1.0], setpoint - filtered)
    lag = td / n
    derivative = lfilter(
        [k * td / (lag + h), -k * td / (lag + h)], [1.0, -lag / (lag + h)], c * setpoint - filtered
    )
    expected = k * (b * setpoint - filtered) + integral + derivative

    controllers, memories = scanned(controller, h)
    found = [scan(controllers[0], memories[0], *at) for at in zip(setpoint, measurement, strict=True)]
    # The same sums in another order.
    np.testing.assert_allclose(found, expected, rtol=1e-9, atol=1e-9)


def test_direct_action_mirrors_reverse_action() -> None:
    parts = [scanned(Controller(gain, 10.0, 1.0), 1.0) for gain in (2.0, -2.0)]
    for _ in range(5):
        output = [scan(controllers[0], memories[0], 0.0, 1.0) for controllers, memories in parts]
    # error = setpoint - measurement: with reverse action the output falls as the measurement rises.
    assert output[0] < 0.0
    assert output[1] == -output[0]


@pytest.mark.parametrize("rate_s", [0.0, 4.0])
def test_tracking_holds_the_integral_at_a_limit(rate_s: float) -> None:
    """Held at its limit by a lasting error, the output leaves it in the scan in which the error turns."""
    k, ti, h, limit = 2.0, 20.0, 1.0, 10.0
    controllers, memories = scanned(Controller(k, ti, rate_s), h)
    error = 4.0
    for _ in range(500):
        computed = scan(controllers[0], memories[0], error, 0.0)
        track(controllers[0], memories[0], min(computed, limit))
    # At rest the tracking takes back what the integral adds: excess = K e (h/Ti)/(h/Tt).
    tracking_s = math.sqrt(ti * rate_s) if rate_s else ti
    assert computed - limit == pytest.approx(k * error * tracking_s / ti, rel=1e-9)
    if not rate_s:
        # With Tt = Ti this is external reset: with the next error added, the integral stands at the limit.
        assert memories[0]["integral"] + k * error * h / ti == pytest.approx(limit, rel=1e-9)
        assert scan(controllers[0], memories[0], -0.1, 0.0) < limit


def test_an_interval_of_zero_cannot_be_scanned() -> None:
    with pytest.raises(ValueError, match="interval above zero"):
        scan_coefficients([Controller(1.0)], np.zeros(1))
