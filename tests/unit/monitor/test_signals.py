"""From the signal on the bus to degrees, or to a reason."""

import math

import pytest

from platewatch.monitor import signals
from platewatch.monitor.signals import CurrentState, Trouble, to_degC
from platewatch.thermal.plate import Sensor


def sensor(**keys):
    return Sensor("T1", 0.1, 0.1, **keys)


@pytest.mark.parametrize(
    ("mA", "state"),
    [
        (0.0, "failure"),
        (3.5, "failure"),
        (3.6, "failure"),
        (3.7, "between"),
        (3.8, "measurement"),
        (12.0, "measurement"),
        (20.5, "measurement"),
        (20.8, "between"),
        (21.0, "failure"),
        (math.nan, "failure"),
    ],
)
def test_a_current_says_whether_it_is_a_measurement(mA, state):
    """NAMUR NE 43: 3.8 to 20.5 mA measurement, <= 3.6 or >= 21 mA failure."""
    assert signals.current_state(mA) is CurrentState(state)


@pytest.mark.parametrize(("mA", "degC"), [(3.8, -5.0), (4.0, 0.0), (12.0, 200.0), (20.5, 412.5)])
def test_a_current_is_scaled_over_its_whole_measuring_band(mA, degC):
    """NAMUR NE 43 on a scale of 0 to 400 degC."""
    loop = sensor(signal="mA", span_degC=(0.0, 400.0))
    assert to_degC(loop, mA).degC == pytest.approx(degC)


@pytest.mark.parametrize(
    ("mA", "trouble"),
    [
        (3.5, Trouble.CURRENT_FAILURE),
        (3.7, Trouble.CURRENT_BETWEEN),
        (20.8, Trouble.CURRENT_BETWEEN),
        (21.0, Trouble.CURRENT_FAILURE),
    ],
)
def test_a_failed_transmitter_is_never_taken_for_a_cold_plate(mA, trouble):
    """NAMUR NE 43: no temperature, and the reason names the current."""
    answer = to_degC(sensor(signal="mA", span_degC=(0.0, 400.0)), mA)
    assert answer.degC is None
    assert answer.trouble is trouble
    assert f"{mA:.2f} mA" in answer.reason


@pytest.mark.parametrize(
    ("signal", "value"), [("degC", 200.0), ("degF", 392.0), ("K", 473.15), ("mV", 8.138473)]
)
def test_every_signal_of_one_thermocouple_means_the_same_temperature(signal, value):
    """Type K at 200 degC; the voltage is that of NIST Monograph 175 against 0 degC."""
    answer = to_degC(sensor(signal=signal), value, 0.0)
    assert answer.degC == pytest.approx(200.0, abs=0.001)
    assert answer.trouble is Trouble.NONE


def test_a_thermocouple_voltage_is_completed_at_the_terminals():
    """Type K, 7.138 mV, terminals at 25 degC: 199.99422 degC (Monograph 175)."""
    answer = to_degC(sensor(signal="mV", cold_junction="surround/cabinet"), 7.138, 25.0)
    assert answer.degC == pytest.approx(199.99422, abs=0.001)


def test_a_fixed_cold_junction_of_the_description_is_used():
    """A box held at 50 degC needs no channel."""
    fixed = to_degC(sensor(signal="mV", cold_junction=50.0), 4.0)
    assert fixed.degC == to_degC(sensor(signal="mV"), 4.0, 50.0).degC


@pytest.mark.parametrize("cold_junction", [None, math.nan])
def test_without_a_cold_junction_there_is_no_temperature(cold_junction):
    """A gap is never filled silently, not even with a likely room temperature."""
    answer = to_degC(sensor(signal="mV", cold_junction="surround/cabinet"), 4.0, cold_junction)
    assert answer.degC is None
    assert answer.trouble is Trouble.NO_COLD_JUNCTION


def test_a_platinum_resistance_is_read_in_ohm():
    """IEC 60751: 138.5055 ohm at 100 degC (from memory)."""
    platinum = sensor(element="pt100", signal="ohm")
    assert to_degC(platinum, 138.5055).degC == pytest.approx(100.0, abs=0.001)
    assert "0.00 ohm" in to_degC(platinum, 0.0).reason


def test_the_calibration_correction_is_added_to_the_reading():
    """In kelvin, after the conversion from the sensor's own unit."""
    assert to_degC(sensor(signal="degF", correction_K=-0.5), 212.0).degC == pytest.approx(99.5)


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
@pytest.mark.parametrize("signal", ["degC", "mV", "ohm", "mA"])
def test_a_value_that_is_no_number_is_refused(signal, value):
    """Whatever the signal, nothing infinite reaches the estimator."""
    answer = to_degC(sensor(signal=signal, span_degC=(0.0, 400.0)), value, 20.0)
    assert answer.degC is None
    assert answer.trouble is Trouble.NOT_FINITE


@pytest.mark.parametrize(
    ("element", "degC"), [("K", 1372.5), ("K", -271.0), ("T", 400.5), ("pt100", 851.0)]
)
def test_a_temperature_that_the_element_cannot_have_is_refused(element, degC):
    """Ranges of IEC 60584-1 and IEC 60751; the reason names them."""
    answer = to_degC(sensor(element=element), degC)
    assert answer.trouble is Trouble.OUT_OF_RANGE
    assert f"outside element {element}" in answer.reason


def test_an_impossible_thermocouple_voltage_is_refused_with_its_range():
    """An open input that drives to the rail is not a hot plate."""
    answer = to_degC(sensor(signal="mV"), 80.0, 25.0)
    assert answer.trouble is Trouble.OUT_OF_RANGE
    assert "1372" in answer.reason


@pytest.mark.parametrize(
    ("keys", "value"),
    [
        ({"element": "pt100", "signal": "mV"}, 4.0),
        ({"element": "K", "signal": "ohm"}, 110.0),
        ({"element": "K", "signal": "mA"}, 12.0),
        ({"element": "K", "signal": "volt"}, 1.0),
    ],
)
def test_a_signal_that_the_element_cannot_give_points_to_the_description(keys, value):
    """An outcome, not an exception, so that the other sensors go on."""
    answer = to_degC(sensor(**keys), value, 25.0)
    assert answer.degC is None
    assert answer.trouble is Trouble.DESCRIPTION
