"""From the plate's temperature to what the bus shows."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import thermocouple_its90

from platewatch.errors import SettingsError
from platewatch.thermal.plate import Sensor
from sim_sensors.thermometers import as_signal, follow, rounded
from sim_sensors.wires import MILLIVOLT, voltage_mV

SENSOR = Sensor("T1", 0.1, 0.1)


def test_a_sensor_dipped_into_heat_shows_63_percent_after_one_lag() -> None:
    """First-order step response, at any step length."""
    for step_s in (0.5, 2.0, 8.0):
        tip = 20.0
        for _ in range(round(8.0 / step_s)):
            tip = follow(tip, 120.0, 120.0, 8.0, step_s)
        assert tip == pytest.approx(120.0 - 100.0 * np.exp(-1), abs=1e-9)


def test_a_sensor_in_a_ramp_trails_by_slope_times_lag() -> None:
    """0.05 K/s and 8 s: 0.4 K behind once settled."""
    tip, under = 20.0, 20.0
    for _ in range(100):
        tip, under = follow(tip, under, under + 0.1, 8.0, 2.0), under + 0.1
    assert under - tip == pytest.approx(0.4, abs=1e-6)


def test_readings_come_in_whole_quanta() -> None:
    """0.1 K of rounding; no binary tails in the log."""
    assert rounded(119.97, 0.1) == 120.0
    assert rounded(119.94, 0.1) == 119.9
    assert rounded(119.94, 0.0) == 119.94


@pytest.mark.parametrize(
    ("signal", "value"),
    [("degC", 100.0), ("degF", 212.0), ("K", 373.15), ("mA", 12.0), ("ohm", 138.5055)],
)
def test_the_bus_carries_the_signal_that_the_description_declares(
    signal: str, value: float
) -> None:
    """Pt100 at 100 degC: 138.5055 ohm (IEC 60751)."""
    sensor = replace(SENSOR, element="pt100", signal=signal, span_degC=(0.0, 200.0))
    assert as_signal(sensor, 100.0, 22.0) == pytest.approx(value, abs=1e-4)


@pytest.mark.parametrize("element", list(MILLIVOLT))
def test_thermocouple_voltages_are_good_to_a_third_of_a_kelvin(element: str) -> None:
    """Against an independent package of the NIST reference functions, terminals at 25 degC."""
    outside = thermocouple_its90.get(element)
    for degC in (22.0, 60.0, 120.0, 150.0, 180.0, 250.0, 350.0):
        emf = voltage_mV(element, degC, 25.0)
        assert outside.temperature(emf, reference=25.0) == pytest.approx(degC, abs=0.35)


def test_a_signal_that_cannot_be_made_is_named_with_its_sensor() -> None:
    """A foreseeable mistake in the description, one line."""
    with pytest.raises(SettingsError, match=r"sensor T1: .*'bar'"):
        as_signal(replace(SENSOR, signal="bar"), 20.0, 22.0)
