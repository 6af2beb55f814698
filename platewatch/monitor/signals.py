"""From a sensor's own signal to degrees Celsius, or to the reason why not.

Milliampere signals follow NAMUR NE 43: measurement 3.8 to 20.5 mA, failure at or below
3.6 mA and at or above 21 mA, no verdict between.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum

from platewatch.monitor import pt100, thermocouple
from platewatch.thermal.plate import Sensor
from platewatch.units import TemperatureUnit
from platewatch.units import to_degC as unit_to_degC

PT100 = "pt100"


class CurrentState(StrEnum):
    MEASUREMENT = "measurement"
    FAILURE = "failure"
    BETWEEN = "between"


class Trouble(StrEnum):
    """Why a value gives no temperature."""

    NONE = "none"
    NOT_FINITE = "not finite"
    OUT_OF_RANGE = "out of range"
    CURRENT_FAILURE = "current failure"
    CURRENT_BETWEEN = "current between bands"
    NO_COLD_JUNCTION = "no cold junction"
    DESCRIPTION = "description"  # the sensor is described with a signal it cannot give


@dataclass(frozen=True, slots=True)
class Signal:
    """degC: corrected temperature, None where there is trouble; reason: in plain words."""

    degC: float | None
    reason: str = ""
    trouble: Trouble = Trouble.NONE


def current_state(mA: float) -> CurrentState:
    """What a 4..20 mA signal says about itself; no number at all counts as failure."""
    if 3.8 <= mA <= 20.5:
        return CurrentState.MEASUREMENT
    if 3.6 < mA < 21.0:
        return CurrentState.BETWEEN
    return CurrentState.FAILURE


def current_to_degC(mA: float, span_degC: tuple[float, float]) -> float:
    """Linear: 4 mA is the low end of the span, 20 mA the high end."""
    low, high = span_degC
    return low + (mA - 4.0) / 16.0 * (high - low)


def element_range_degC(element: str) -> tuple[float, float]:
    """Where the element's standard defines it; raises SettingsError for an unknown element."""
    return pt100.RANGE_degC if element == PT100 else thermocouple.range_degC(element)


def to_degC(sensor: Sensor, value: float, cold_junction_degC: float | None = None) -> Signal:
    """One value of a sensor in its own signal as a corrected temperature.

    cold_junction_degC: measured at the terminals, used by a mV signal only; a number in
    the description stands in where none is given.
    """
    if not math.isfinite(value):
        return Signal(None, f"{value} is not a number", Trouble.NOT_FINITE)
    match sensor.signal:
        case "mV":
            raw = _from_mV(sensor, value, cold_junction_degC)
        case "ohm":
            raw = _from_ohm(sensor, value)
        case "mA":
            raw = _from_mA(sensor, value)
        case "degC" | "degF" | "K":
            raw = Signal(unit_to_degC(value, TemperatureUnit(sensor.signal)))
        case _:
            raw = _misdescribed(f"signal {sensor.signal!r} is unknown")
    return raw if raw.degC is None else _within_range(sensor, raw.degC)


def _within_range(sensor: Sensor, degC: float) -> Signal:
    low, high = element_range_degC(sensor.element)
    if not low <= degC <= high:
        reason = f"{degC:.1f} degC is outside element {sensor.element} ({low:g} to {high:g} degC)"
        return Signal(None, reason, Trouble.OUT_OF_RANGE)
    return Signal(degC + sensor.correction_K)


def _from_mV(sensor: Sensor, mV: float, cold_junction_degC: float | None) -> Signal:
    if sensor.element == PT100:
        return _misdescribed("a pt100 has no mV signal; describe it as ohm or degC")
    terminals = cold_junction_degC
    if terminals is None and isinstance(sensor.cold_junction, (int, float)):
        terminals = float(sensor.cold_junction)
    if terminals is None or not math.isfinite(terminals):
        reason = "the temperature of the cold junction is not known"
        return Signal(None, reason, Trouble.NO_COLD_JUNCTION)
    degC = float(thermocouple.temperature_degC(sensor.element, mV, terminals))
    if math.isnan(degC):
        reason = thermocouple.why_not(sensor.element, mV, terminals)
        return Signal(None, reason, Trouble.OUT_OF_RANGE)
    return Signal(degC)


def _from_ohm(sensor: Sensor, ohm: float) -> Signal:
    if sensor.element != PT100:
        return _misdescribed(f"element {sensor.element} has no ohm signal; only a pt100 has")
    degC = float(pt100.temperature_degC(ohm))
    if math.isnan(degC):
        low, high = pt100.RANGE_degC
        reason = f"{ohm:.2f} ohm is outside a pt100 ({low:g} to {high:g} degC)"
        return Signal(None, reason, Trouble.OUT_OF_RANGE)
    return Signal(degC)


def _from_mA(sensor: Sensor, mA: float) -> Signal:
    if sensor.span_degC is None:
        return _misdescribed("a mA signal needs the temperatures at 4 and 20 mA")
    match current_state(mA):
        case CurrentState.FAILURE:
            reason = f"{mA:.2f} mA signals a failure (NE 43: at or below 3.6, at or above 21 mA)"
            return Signal(None, reason, Trouble.CURRENT_FAILURE)
        case CurrentState.BETWEEN:
            reason = f"{mA:.2f} mA lies between measurement and failure (NE 43)"
            return Signal(None, reason, Trouble.CURRENT_BETWEEN)
        case CurrentState.MEASUREMENT:
            return Signal(current_to_degC(mA, sensor.span_degC))


def _misdescribed(what: str) -> Signal:
    return Signal(None, f"{what}; correct the plate description", Trouble.DESCRIPTION)
