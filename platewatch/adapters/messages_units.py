"""The unit of every channel of a plate, and SenML values in it."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

from platewatch import units
from platewatch.adapters.messages_decode import Reason, Sample, Unreadable


def channel_units(
    sensors: Mapping[str, str],
    zones: Mapping[str, float],
    surrounds: Iterable[str],
    unit: str,
) -> dict[str, str]:
    """Every channel of a plate and its unit, as the `channel` table stores it."""
    found = {f"sensor/{name}": signal for name, signal in sensors.items()}
    for name, full in zones.items():
        found[f"zone/{name}/duty"] = "1" if full == 1 else "%"
        found[f"zone/{name}/setpoint"] = unit
    found.update(dict.fromkeys(surrounds, unit))
    return found


_TEMPERATURES = frozenset(str(unit) for unit in units.TemperatureUnit)
_DUTY_OF = {"/": 1.0, "%": 0.01}


def in_unit(sample: Sample, unit: str) -> float:
    """A SenML value in the unit of its channel."""
    if unit in _TEMPERATURES and sample.unit in ("Cel", "K"):
        given = units.TemperatureUnit("degC" if sample.unit == "Cel" else "K")
        if given == unit:
            return sample.value
        celsius = units.to_degC(sample.value, given)
        return units.from_degC(celsius, units.TemperatureUnit(unit))
    if unit in ("1", "%") and sample.unit in _DUTY_OF:
        if (unit == "%") == (sample.unit == "%"):
            return sample.value
        return sample.value * 100 if unit == "%" else sample.value / 100
    if unit == "mV" and sample.unit == "V":
        return sample.value * 1000
    if (unit, sample.unit) == ("ohm", "Ohm"):
        return sample.value
    if (unit, sample.unit) == ("mA", "A"):
        return sample.value * 1000
    raise Unreadable(
        Reason.WRONG_UNIT, f"{sample.name} is in {unit}, the record says {sample.unit!r}"
    )
