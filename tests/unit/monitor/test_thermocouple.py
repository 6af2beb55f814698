"""Thermocouples at the border of what they can say."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from platewatch.errors import SettingsError
from platewatch.monitor import thermocouple


@given(st.sampled_from(thermocouple.TYPES), st.floats(0.0, 1.0))
def test_a_temperature_comes_back_from_its_own_voltage(letter, share):
    """To 1e-6 K wherever the wire gives a nanovolt per millikelvin, else to 1e-9 mV."""
    low, high = thermocouple.readable_range_degC(letter)
    degC = low + share * (high - low)
    emf = thermocouple.emf_mV(letter, degC)
    back = thermocouple.temperature_degC(letter, emf)
    assert thermocouple.emf_mV(letter, back) == pytest.approx(float(emf), abs=1e-9)
    if thermocouple.seebeck_uV_K(letter, degC) > 1.0:
        assert back == pytest.approx(degC, abs=1e-6)


@pytest.mark.parametrize("letter", thermocouple.TYPES)
def test_a_hotter_junction_gives_more_voltage(letter):
    """Every voltage in the readable range has one temperature."""
    degC = np.linspace(*thermocouple.readable_range_degC(letter), 5000)
    assert (np.diff(thermocouple.emf_mV(letter, degC)) > 0.0).all()


def test_one_impossible_voltage_does_not_spoil_its_neighbours():
    """Outside the range the answer is no number; the others stand."""
    answer = thermocouple.temperature_degC("K", np.array([5.0, 80.0, np.nan, -9.0, 10.0]))
    assert np.isnan(answer).tolist() == [False, True, True, True, False]


@pytest.mark.parametrize(
    ("letter", "mV", "terminals", "words"),
    [
        ("K", 80.0, 20.0, "more than the 54.886 mV of type K at 1372 degC"),
        ("K", -9.0, 20.0, "less than the -6.458 mV of type K at -270 degC"),
        ("B", 0.0, 20.0, "less than the 0.002 mV of type B at 50 degC"),
        ("B", 0.5, -5.0, "the cold junction at -5 degC is outside type B"),
        ("J", float("nan"), 20.0, "not a number"),
    ],
)
def test_no_temperature_comes_with_a_reason(letter, mV, terminals, words):
    """A technician reads what is wrong, with the value and the range."""
    assert np.isnan(thermocouple.temperature_degC(letter, mV, terminals))
    assert words in thermocouple.why_not(letter, mV, terminals)


def test_a_good_voltage_needs_no_excuse():
    """why_not is empty exactly where a temperature exists."""
    assert thermocouple.why_not("K", 4.0, 25.0) == ""


def test_each_reading_may_have_its_own_cold_junction():
    """Voltages and terminal temperatures are arrays of one shape."""
    answer = thermocouple.temperature_degC("K", np.array([1.0, 1.0]), np.array([20.0, 30.0]))
    assert answer[1] - answer[0] == pytest.approx(10.0, abs=0.3)  # the wire is nearly straight


def test_an_unknown_letter_names_the_known_ones():
    """The mistake is the description's, so it says what to write instead."""
    with pytest.raises(SettingsError, match="K J T N E S R B"):
        thermocouple.emf_mV("X", 20.0)
