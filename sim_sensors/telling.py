"""In plain words, what is really happening to the plate."""

from __future__ import annotations

from collections.abc import Callable, Iterable

from sim_sensors.faults import (
    Fault,
    HeatSpot,
    LoadPutOn,
    LossesChanged,
    SensorFault,
    Swapped,
    ZoneFault,
)
from sim_sensors.simulation import Sample


def describe(fault: Fault) -> str:
    """What begins, one sentence."""
    match fault:
        case LoadPutOn(load=load, announced=announced):
            told = "announced" if announced else "nobody says so"
            middle = load.footprint.x_m + load.footprint.width_m / 2
            height = load.footprint.y_m + load.footprint.height_m / 2
            return (
                f"a load of {load.mass_kg:.1f} kg at {load.start_degC:.0f} degC is put on "
                f"x {middle * 1e3:.0f} mm, y {height * 1e3:.0f} mm ({told})"
            )
        case ZoneFault(zone=zone):
            kind = "stays on at full power" if fault.drawn(0.0) > 0 else "loses its heat"
            return f"zone {zone} {kind}"
        case SensorFault(sensor=sensor):
            return f"sensor {sensor}: {type(fault).__name__.lower()} from now on"
        case LossesChanged(factor=factor):
            return f"every loss to the room is {factor:.2f} times what it was"
        case HeatSpot(x_m=x, y_m=y, watts=watts):
            return f"{watts:.0f} W of other heat at x {x * 1e3:.0f} mm, y {y * 1e3:.0f} mm"
        case Swapped(first=first, second=second):
            return f"sensors {first} and {second} are on each other's terminals"
    return type(fault).__name__


class Teller:
    """Tells each thing once: faults, steps, limits passed by the true peak or a sensor."""

    def __init__(
        self,
        say: Callable[[str], None],
        faults: Iterable[Fault],
        limits_degC: Iterable[float],
    ) -> None:
        self._say = say
        self._faults = sorted(faults, key=lambda fault: fault.at_s)
        self._limits = sorted(set(limits_degC))
        self._over: set[tuple[str, float]] = set()
        self._incident_s: float | None = None

    def __call__(self, sample: Sample) -> None:
        while self._faults and self._faults[0].at_s < sample.at_s:
            fault = self._faults.pop(0)
            if self._incident_s is None:
                self._incident_s = fault.at_s
            self._say(f"truth: at {fault.at_s:.0f} s {describe(fault)}")
        for event in sample.events:
            detail = event.get("step") or event.get("zone") or ""
            self._say(f"batch: at {sample.at_s:.0f} s {event['event']} {detail}".rstrip())
        true = sample.truth
        place = f"at x {true.peak_x_m * 1e3:.0f} mm, y {true.peak_y_m * 1e3:.0f} mm"
        self._crossings("true peak", true.peak_degC, sample.at_s, place)
        self._crossings("hottest reading", true.hottest_degC, sample.at_s, true.hottest_sensor)

    def _crossings(self, what: str, degC: float, at_s: float, place: str) -> None:
        for limit in self._limits:
            was_over = (what, limit) in self._over
            if degC >= limit and not was_over:
                self._over.add((what, limit))
                self._say(f"truth: {what} passes {limit:.1f} degC {self._when(at_s)}, {place}")
            elif degC < limit - 1.0 and was_over:
                self._over.remove((what, limit))
                self._say(f"truth: {what} is below {limit:.1f} degC again {self._when(at_s)}")

    def _when(self, at_s: float) -> str:
        if self._incident_s is None:
            return f"at {at_s:.0f} s"
        return f"at {at_s:.0f} s, {at_s - self._incident_s:+.0f} s after the incident"
