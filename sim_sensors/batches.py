"""The demonstration batches: one heat-up and soak, each with its incident."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from platewatch.errors import SettingsError
from platewatch.thermal.plate import Plate, Rectangle, Sensor, Zone
from sim_sensors.faults import Fault, LoadPutOn, Loose, Reversed, ZoneNotHeating, ZoneStaysOn
from sim_sensors.lattice import bounds
from sim_sensors.truth import Load

INCIDENT_S = 5400.0
BATCH_S = 9600.0
STEEL_KG_M3 = 7850.0
MOULD_THICKNESS_M = 0.03
MOULD_SIDE_M = 0.25


@dataclass(frozen=True)
class Batch:
    """What happens on the plate, and when it ends."""

    name: str
    faults: tuple[Fault, ...] = ()
    lasts_s: float = BATCH_S

    @property
    def incident_s(self) -> float | None:
        return min((fault.at_s for fault in self.faults), default=None)


@dataclass(frozen=True)
class Wish:
    """What the caller wants otherwise than the demonstration has it.

    x_m, y_m: middle of the load;  conductance W/m2K;  part, slow_s of a loose sensor
    """

    incident_s: float | None = None
    zone: str = ""
    sensor: str = ""
    x_m: float | None = None
    y_m: float | None = None
    width_m: float | None = None
    height_m: float | None = None
    mass_kg: float | None = None
    conductance: float = 400.0
    cp: float = 490.0
    load_degC: float = 20.0
    part: float = 0.8
    slow_s: float = 90.0


def batch(name: str, plate: Plate, **changes: object) -> Batch:
    """The demonstration batch by name or number, with any field of `Wish` changed."""
    chosen = ALIASES.get(name, name)
    if chosen not in BATCHES:
        raise SettingsError(f"no batch {name!r}; choose one of {', '.join(BATCHES)}")
    unknown = set(changes) - set(Wish.__dataclass_fields__)
    if unknown:
        raise SettingsError(f"a batch has no setting {', '.join(sorted(unknown))}")
    wish = Wish(**changes)  # type: ignore[arg-type]
    return Batch(chosen, tuple(BATCHES[chosen](plate, wish)))


def _clean(plate: Plate, wish: Wish) -> list[Fault]:
    return []


def _announced(plate: Plate, wish: Wish) -> list[Fault]:
    return [_load(plate, wish, announced=True)]


def _cold_load(plate: Plate, wish: Wish) -> list[Fault]:
    return [_load(plate, wish, announced=False)]


def _stays_on(plate: Plate, wish: Wish) -> list[Fault]:
    return [ZoneStaysOn(at_s=_at(wish), zone=_zone(plate, wish, 4).name)]


def _not_heating(plate: Plate, wish: Wish) -> list[Fault]:
    return [ZoneNotHeating(at_s=_at(wish), zone=_zone(plate, wish, 1).name)]


def _loose(plate: Plate, wish: Wish) -> list[Fault]:
    sensor = _sensor(plate, wish, 3).name
    return [Loose(at_s=_at(wish), sensor=sensor, part=wish.part, slow_s=wish.slow_s)]


def _reversed(plate: Plate, wish: Wish) -> list[Fault]:
    at_s = 0.0 if wish.incident_s is None else wish.incident_s
    return [Reversed(at_s=at_s, sensor=_sensor(plate, wish, 0).name)]


BATCHES: dict[str, Callable[[Plate, Wish], list[Fault]]] = {
    "clean": _clean,
    "announced-load": _announced,
    "cold-load": _cold_load,
    "zone-stays-on": _stays_on,
    "zone-not-heating": _not_heating,
    "loose-sensor": _loose,
    "reversed-sensor": _reversed,
}
ALIASES = {
    "1": "clean",
    "1b": "announced-load",
    "2": "cold-load",
    "3": "zone-stays-on",
    "4": "zone-not-heating",
    "5": "loose-sensor",
    "7": "reversed-sensor",
}


def _at(wish: Wish) -> float:
    return INCIDENT_S if wish.incident_s is None else wish.incident_s


def _zone(plate: Plate, wish: Wish, number: int) -> Zone:
    """The zone asked for, else the plate's zone by number, counted round."""
    names = [zone.name for zone in plate.zones]
    if not names:
        raise SettingsError(f"plate {plate.name!r} has no zone; a batch needs a heater")
    if wish.zone and wish.zone not in names:
        raise SettingsError(f"plate {plate.name!r} has no zone {wish.zone!r}: {', '.join(names)}")
    return plate.zone(wish.zone or names[number % len(names)])


def _sensor(plate: Plate, wish: Wish, number: int) -> Sensor:
    """The sensor asked for, else the one that controls the zone."""
    names = [sensor.name for sensor in plate.sensors]
    if not names:
        raise SettingsError(f"plate {plate.name!r} has no sensor to go wrong")
    if wish.sensor and wish.sensor not in names:
        raise SettingsError(
            f"plate {plate.name!r} has no sensor {wish.sensor!r}: {', '.join(names)}"
        )
    loop = _zone(plate, wish, number).loop
    return plate.sensor(wish.sensor or (loop.sensor if loop else names[number % len(names)]))


def _load(plate: Plate, wish: Wish, *, announced: bool) -> LoadPutOn:
    """A cold steel mould on the zone's control thermocouple, cut to fit a small zone."""
    zone, under = _zone(plate, wish, 1), _sensor(plate, wish, 1)
    x0, y0, x1, y1 = bounds(zone.shapes[0])
    side = min(MOULD_SIDE_M, 0.7 * min(x1 - x0, y1 - y0))
    width, height = wish.width_m or side, wish.height_m or side
    x = under.x_m if wish.x_m is None else wish.x_m
    y = under.y_m if wish.y_m is None else wish.y_m
    mass = wish.mass_kg or STEEL_KG_M3 * MOULD_THICKNESS_M * width * height
    footprint = Rectangle(x - width / 2, y - height / 2, width, height)
    load = Load(footprint, mass, wish.conductance, wish.cp, wish.load_degC)
    return LoadPutOn(at_s=_at(wish), load=load, announced=announced, zone=zone.name)
