"""Conversions used at the edge: inside everything is SI and degrees Celsius."""

from __future__ import annotations

from datetime import UTC, datetime
from enum import StrEnum

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
ABSOLUTE_ZERO_DEGC = -273.15


class TemperatureUnit(StrEnum):
    DEGC = "degC"
    DEGF = "degF"
    K = "K"


def to_degC(value: float, unit: TemperatureUnit) -> float:
    """A temperature in `unit` as degrees Celsius."""
    match unit:
        case TemperatureUnit.DEGC:
            return value
        case TemperatureUnit.DEGF:
            return (value - 32.0) / 1.8
        case TemperatureUnit.K:
            return value + ABSOLUTE_ZERO_DEGC


def from_degC(value_degC: float, unit: TemperatureUnit) -> float:
    """Degrees Celsius as a temperature in `unit`."""
    match unit:
        case TemperatureUnit.DEGC:
            return value_degC
        case TemperatureUnit.DEGF:
            return value_degC * 1.8 + 32.0
        case TemperatureUnit.K:
            return value_degC - ABSOLUTE_ZERO_DEGC


def difference_to_K(value: float, unit: TemperatureUnit) -> float:
    """A temperature difference in `unit` as kelvin: 18 degF of difference are 10 K."""
    return value / 1.8 if unit is TemperatureUnit.DEGF else value


def difference_from_K(value_K: float, unit: TemperatureUnit) -> float:
    """Kelvin of difference in `unit`."""
    return value_K * 1.8 if unit is TemperatureUnit.DEGF else value_K


SIGN = {TemperatureUnit.DEGC: "°C", TemperatureUnit.DEGF: "°F", TemperatureUnit.K: "K"}


def written(value_degC: float, unit: TemperatureUnit) -> str:
    """A temperature for a person, in the plate's own unit."""
    return f"{from_degC(value_degC, unit):.1f} {SIGN[unit]}"


def written_difference(value_K: float, unit: TemperatureUnit, digits: int = 1) -> str:
    """A difference for a person: degrees Fahrenheit of difference, else kelvin."""
    sign = SIGN[unit] if unit is TemperatureUnit.DEGF else "K"
    return f"{difference_from_K(value_K, unit):.{digits}f} {sign}"


def iso(at_us: int) -> str:
    """Integer microseconds UTC as ISO 8601 with a Z."""
    seconds, micros = divmod(at_us, 1_000_000)
    stamp = datetime.fromtimestamp(seconds, UTC)
    fraction = f".{micros:06d}".rstrip("0") if micros else ""
    return f"{stamp:%Y-%m-%dT%H:%M:%S}{fraction}Z"


def from_iso(text: str) -> int:
    """ISO 8601 with an offset as integer microseconds UTC.

    Raises ValueError where the text is no time or names no offset.
    """
    stamp = datetime.fromisoformat(text.strip())
    if stamp.tzinfo is None:
        raise ValueError(f"{text!r} has no offset; add Z or +hh:mm")
    delta = stamp - EPOCH
    return (delta.days * 86_400 + delta.seconds) * 1_000_000 + delta.microseconds


PLAUSIBLE: dict[str, tuple[float, float]] = {
    "degC": (ABSOLUTE_ZERO_DEGC, 3000.0),
    "degF": (-459.67, 5432.0),
    "K": (0.0, 3273.15),
    "mV": (-20.0, 100.0),  # wider than any thermocouple of IEC 60584-1
    "ohm": (0.0, 10_000.0),
    "mA": (-1.0, 30.0),
    "1": (-0.001, 1.001),  # duty; 45 on a 0..1 channel is a wrong scale, not a heater
    "%": (-0.1, 100.1),
}
"""What a channel of this unit can carry at all; anything outside is refused."""


def plausible(value: float, unit: str) -> bool:
    """False for what cannot be a value of this unit, NaN and the infinities included."""
    low, high = PLAUSIBLE.get(unit, (-1e300, 1e300))
    return low <= value <= high
