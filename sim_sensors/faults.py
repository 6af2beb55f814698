"""What can go wrong with the simulated plant, each from a given moment on.

Sensor faults act at two places: on what the junction settles to and how fast,
and on what the instrument makes of the junction's temperature.
"""

from __future__ import annotations

from dataclasses import dataclass

from sim_sensors.truth import Load


@dataclass(frozen=True, kw_only=True)
class Fault:
    at_s: float


@dataclass(frozen=True, kw_only=True)
class ZoneFault(Fault):
    """The controller's duty is not what reaches the heater."""

    zone: str

    def drawn(self, share: float) -> float:
        """Part of the zone's watts drawn when `share` is called for."""
        raise NotImplementedError


@dataclass(frozen=True, kw_only=True)
class ZoneStaysOn(ZoneFault):
    """A welded contactor or a shorted solid-state relay."""

    def drawn(self, share: float) -> float:
        return 1.0


@dataclass(frozen=True, kw_only=True)
class ZoneNotHeating(ZoneFault):
    """An open heater or a tripped breaker; `left` of its power remains."""

    left: float = 0.0

    def drawn(self, share: float) -> float:
        return self.left * share


@dataclass(frozen=True, kw_only=True)
class LoadPutOn(Fault):
    """Something laid on the plate; announced loads are told to the bus."""

    load: Load
    announced: bool = False
    zone: str = ""
    off_s: float | None = None


@dataclass(frozen=True, kw_only=True)
class LossesChanged(Fault):
    """A draught, a fan or a lid: every loss coefficient times `factor`."""

    factor: float


@dataclass(frozen=True, kw_only=True)
class HeatSpot(Fault):
    """Heat from elsewhere (negative: a sink), spread over a square."""

    x_m: float
    y_m: float
    width_m: float
    watts: float


@dataclass(frozen=True, kw_only=True)
class SensorFault(Fault):
    sensor: str

    def settles_at(self, plate_degC: float, room_degC: float) -> float:
        """What the junction would reach in the end."""
        return plate_degC

    def lag_s(self, own_s: float) -> float:
        return own_s

    def shown(self, tip_degC: float, room_degC: float, since_s: float, last: float) -> float:
        """What the instrument makes of the junction; `last` is the last good value."""
        return tip_degC

    @property
    def noise_factor(self) -> float:
        return 1.0


@dataclass(frozen=True, kw_only=True)
class Loose(SensorFault):
    """Poor contact: only `part` of the rise above the room, and late."""

    part: float = 0.8
    slow_s: float = 90.0

    def settles_at(self, plate_degC: float, room_degC: float) -> float:
        return room_degC + self.part * (plate_degC - room_degC)

    def lag_s(self, own_s: float) -> float:
        return max(own_s, self.slow_s)


@dataclass(frozen=True, kw_only=True)
class Reversed(SensorFault):
    """Wires exchanged: the rise above the cold junction is shown as a fall."""

    def shown(self, tip_degC: float, room_degC: float, since_s: float, last: float) -> float:
        return 2.0 * room_degC - tip_degC


@dataclass(frozen=True, kw_only=True)
class Stuck(SensorFault):
    """The value stands still, noise and all."""

    def shown(self, tip_degC: float, room_degC: float, since_s: float, last: float) -> float:
        return last

    @property
    def noise_factor(self) -> float:
        return 0.0


@dataclass(frozen=True, kw_only=True)
class Open(SensorFault):
    """Broken wire, reported as no value."""

    def shown(self, tip_degC: float, room_degC: float, since_s: float, last: float) -> float:
        return float("nan")


@dataclass(frozen=True, kw_only=True)
class Offset(SensorFault):
    """A step of `shift_K`, and `K_per_h` of drift on top of it."""

    shift_K: float = 0.0
    K_per_h: float = 0.0

    def shown(self, tip_degC: float, room_degC: float, since_s: float, last: float) -> float:
        return tip_degC + self.shift_K + self.K_per_h * since_s / 3600.0


@dataclass(frozen=True, kw_only=True)
class WrongScale(SensorFault):
    """A wrong type setting: the rise above the cold junction times `factor`."""

    factor: float

    def shown(self, tip_degC: float, room_degC: float, since_s: float, last: float) -> float:
        return room_degC + self.factor * (tip_degC - room_degC)


@dataclass(frozen=True, kw_only=True)
class Noisy(SensorFault):
    factor: float = 10.0

    @property
    def noise_factor(self) -> float:
        return self.factor


@dataclass(frozen=True, kw_only=True)
class Slow(SensorFault):
    """Heat paste lost: the lag grows to `slow_s`."""

    slow_s: float = 60.0

    def lag_s(self, own_s: float) -> float:
        return self.slow_s


@dataclass(frozen=True, kw_only=True)
class Swapped(Fault):
    """Two thermocouples on each other's terminals."""

    first: str
    second: str
