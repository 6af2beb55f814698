"""Platinum thermometers."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from platewatch.monitor import pt100

# IEC 60751, table of resistances, two decimals, from memory.
TABLE = {-200: 18.52, -100: 60.26, 0: 100.0, 100: 138.51, 200: 175.86, 400: 247.09, 850: 390.48}


def test_the_resistance_is_that_of_the_standard():
    """IEC 60751, from memory; half the last digit."""
    degC, ohm = np.array(list(TABLE.items())).T
    assert pt100.resistance_ohm(degC) == pytest.approx(ohm, abs=0.0051)


def test_the_mean_coefficient_to_100_degC_is_0_00385():
    """IEC 60751, from memory: alpha = 3.851e-3 per kelvin."""
    ice, steam = pt100.resistance_ohm(np.array([0.0, 100.0]))
    assert (steam - ice) / (100.0 * ice) == pytest.approx(3.851e-3, abs=1e-6)


@given(st.floats(-200.0, 850.0))
def test_a_temperature_comes_back_from_its_own_resistance(degC):
    """The inverse is exact on either side of the ice point."""
    assert pt100.temperature_degC(pt100.resistance_ohm(degC)) == pytest.approx(degC, abs=1e-8)


def test_a_broken_or_shorted_element_gives_no_temperature():
    """0 ohm, an open circuit and a missing value are outcomes, not exceptions."""
    answer = pt100.temperature_degC(np.array([0.0, 1e6, np.nan, np.inf, 110.0]))
    assert np.isnan(answer).tolist() == [True, True, True, True, False]
    assert np.isnan(pt100.resistance_ohm(851.0))
