"""Temperatures at the edge: what a person reads is in the unit of the plate."""

from __future__ import annotations

import pytest

from platewatch.units import TemperatureUnit, written, written_difference


@pytest.mark.parametrize(
    ("unit", "temperature", "band"),
    [("degC", "100.0 °C", "10.0 K"), ("degF", "212.0 °F", "18.0 °F"), ("K", "373.1 K", "10.0 K")],
)
def test_a_temperature_and_its_band_are_written_in_one_unit(
    unit: str, temperature: str, band: str
) -> None:
    """A replay of a plate in degrees Fahrenheit once ended with degrees Celsius and kelvin.

    100 degC are 212 degF and 373.15 K by definition; 10 K of difference are 18 degF.
    """
    assert written(100.0, TemperatureUnit(unit)) == temperature
    assert written_difference(10.0, TemperatureUnit(unit)) == band
