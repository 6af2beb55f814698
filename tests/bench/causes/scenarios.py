"""What goes wrong in the runs of the bench: place, size and onset drawn by seed.

Ranges are uniform: hot spot 200 to 400 W on 40 to 80 mm, more than 70 mm from every
thermocouple; cooling 50 to 150 W/m2K on 80 to 150 mm; load 5 to 20 kg with contact 200
to 600 W/m2K; thermocouple step 2 to 20 K, drift 0.02 to 0.2 K/s towards low readings,
loose by 0.7 to 0.9 of the rise with 60 to 120 s.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from platewatch.monitor.causes.catalogue import Cause
from platewatch.thermal.plate import Plate, Rectangle, Uncertain
from sim_sensors.faults import (
    Fault,
    HeatSpot,
    LoadPutOn,
    Loose,
    Noisy,
    Offset,
    Reversed,
    Slow,
    Stuck,
    Swapped,
    ZoneFault,
    ZoneNotHeating,
    ZoneStaysOn,
)
from sim_sensors.lattice import bounds
from sim_sensors.truth import Load, ModelError
from tests.bench.accuracy.plants import Case, Drawn

AWAY_M = 0.07  # of a hot spot from every thermocouple
ENDLESS_KG = 1e6  # a load that never warms is a place cooled for good
ROOM_DEGC = 22.0
OBLONG = 0.45  # largest side of a load as a share of the plate's shorter side
WATCHED_S = {"steel": 4500.0, "aluminium": 3000.0, "round": 2700.0}  # soaked through by then
SPACING = 0.9  # of the truth's lattice: another one than usual, and never the estimator's


@dataclass(frozen=True)
class Event:
    """One incident.  causes: names that count as right;  subjects: theirs, empty for any

    x_m, y_m: where it is, nan where it has no place;  source: physical, not a reading
    """

    faults: tuple[Fault, ...]
    causes: frozenset[Cause]
    subjects: frozenset[str] = frozenset()
    x_m: float = float("nan")
    y_m: float = float("nan")
    source: bool = True


Draw = Callable[[Plate, np.random.Generator, float], Event]


@dataclass(frozen=True)
class Scenario:
    """watch_s: after the onset;  cold: from a cold plate, else from soak"""

    name: str
    draw: Draw
    watch_s: float
    cold: bool = False


@dataclass(frozen=True, kw_only=True)
class PartlyOn(ZoneFault):
    """A leaking switch: `extra` of the full power beyond what is called for."""

    extra: float

    def drawn(self, share: float) -> float:
        return min(1.0, share + self.extra)


def wrong_plant(plate: Plate, seed: int) -> Drawn:
    """Losses and heater power up to 15 %, k up to 5 %, emissivity up to 30 % wrong."""
    rng = np.random.default_rng([seed, 3])
    k, losses, power, emissivity = 1 + np.array([0.05, 0.15, 0.15, 0.30]) * rng.uniform(-1, 1, 4)
    return Drawn(ModelError(k=k, losses=losses, power=power, emissivity=emissivity), {})


def case_of(plate: str) -> Case:
    uncertain = Uncertain(k=0.05, losses=0.10, power=0.09, emissivity=0.17)
    return Case(plate, plate, wrong_plant, WATCHED_S[plate], uncertain=uncertain, spacing=SPACING)


def _inside(plate: Plate, rng: np.random.Generator, margin_m: float) -> tuple[float, float]:
    """A place on the plate, so far from the rim of its bounding box; circles by their radius."""
    x0, y0, x1, y1 = bounds(plate.outline)
    x, y = rng.uniform((x0 + margin_m, y0 + margin_m), (x1 - margin_m, y1 - margin_m))
    if isinstance(plate.outline, Rectangle):
        return float(x), float(y)
    radius = (x1 - x0) / 2
    r, angle = (radius - margin_m) * np.sqrt(rng.uniform()), rng.uniform(0, 2 * np.pi)
    return float(x0 + radius + r * np.cos(angle)), float(y0 + radius + r * np.sin(angle))


def _side(plate: Plate, wanted_m: float) -> float:
    x0, y0, x1, y1 = bounds(plate.outline)
    return min(wanted_m, OBLONG * min(x1 - x0, y1 - y0))


def none(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    return Event((), frozenset({Cause.NONE}))


def hot_spot(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    width, watts = float(rng.uniform(0.04, 0.08)), float(rng.uniform(200, 400))
    away = AWAY_M
    while True:
        for _ in range(200):
            x, y = _inside(plate, rng, width / 2)
            if min(np.hypot(s.x_m - x, s.y_m - y) for s in plate.sensors) > away:
                spot = HeatSpot(at_s=at_s, x_m=x, y_m=y, width_m=width, watts=watts)
                return Event((spot,), frozenset({Cause.UNKNOWN_HEAT}), x_m=x, y_m=y)
        away *= 0.9  # a small plate has no such place


def _laid_on(
    plate: Plate, rng: np.random.Generator, at_s: float, side: float, load: tuple[float, float]
) -> Event:
    x, y = _inside(plate, rng, side / 2)
    kg, contact = load
    what = Load(Rectangle(x - side / 2, y - side / 2, side, side), kg, contact, 490.0, ROOM_DEGC)
    fault = LoadPutOn(at_s=at_s, load=what)
    return Event((fault,), frozenset({Cause.COLD_LOAD}), x_m=x, y_m=y)


def cooling(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    side = _side(plate, float(rng.uniform(0.08, 0.15)))
    return _laid_on(plate, rng, at_s, side, (ENDLESS_KG, float(rng.uniform(50, 150))))


def cold_load(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    side = _side(plate, float(rng.uniform(0.15, 0.25)))
    kg, contact = float(rng.uniform(5, 20)), float(rng.uniform(200, 600))
    return _laid_on(plate, rng, at_s, side, (kg, contact))


def _zone(plate: Plate, rng: np.random.Generator) -> str:
    return plate.zones[int(rng.integers(len(plate.zones)))].name


def fast_runaway(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    zone = _zone(plate, rng)
    fault = ZoneStaysOn(at_s=at_s, zone=zone)
    return Event((fault,), frozenset({Cause.ZONE_STAYS_ON}), frozenset({zone}))


def slow_runaway(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    zone = _zone(plate, rng)
    fault = PartlyOn(at_s=at_s, zone=zone, extra=float(rng.uniform(0.1, 0.3)))
    return Event((fault,), frozenset({Cause.ZONE_STAYS_ON}), frozenset({zone}))


def not_heating(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    zone = _zone(plate, rng)
    fault = ZoneNotHeating(at_s=at_s, zone=zone)
    return Event((fault,), frozenset({Cause.ZONE_NOT_HEATING}), frozenset({zone}))


READING = frozenset(
    {
        Cause.SENSOR_STEP,
        Cause.SENSOR_DRIFT,
        Cause.SENSOR_LOOSE,
        Cause.SENSOR_STUCK,
        Cause.SENSOR_REVERSED,
        Cause.SENSOR_WRONG_TYPE,
        Cause.SENSOR_LAG,
        Cause.SENSOR_NOISY,
    }
)


def _faulty(plate: Plate, fault: Fault, *sensors: str) -> Event:
    """Any verdict on that thermocouple counts: which fault it has is the technician's to find."""
    names = frozenset(sensors)
    causes = READING | {Cause.SWAPPED_PAIR}
    if len(sensors) > 1:
        return Event((fault,), causes, names, source=False)
    sensor = plate.sensor(sensors[0])
    return Event((fault,), causes, names, sensor.x_m, sensor.y_m, source=False)


def _sensor(plate: Plate, rng: np.random.Generator) -> str:
    return plate.sensors[int(rng.integers(len(plate.sensors)))].name


def step(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    name, shift = _sensor(plate, rng), float(rng.uniform(2, 20) * rng.choice((-1, 1)))
    return _faulty(plate, Offset(at_s=at_s, sensor=name, shift_K=shift), name)


def drift(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    name, rate = _sensor(plate, rng), float(rng.uniform(0.02, 0.2))
    return _faulty(plate, Offset(at_s=at_s, sensor=name, K_per_h=-3600 * rate), name)


def loose(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    name = _sensor(plate, rng)
    part, slow_s = float(rng.uniform(0.7, 0.9)), float(rng.uniform(60, 120))
    return _faulty(plate, Loose(at_s=at_s, sensor=name, part=part, slow_s=slow_s), name)


def stuck(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    name = _sensor(plate, rng)
    return _faulty(plate, Stuck(at_s=at_s, sensor=name), name)


def wired_in_reverse(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    name = _sensor(plate, rng)
    return _faulty(plate, Reversed(at_s=at_s, sensor=name), name)


def noisy(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    name = _sensor(plate, rng)
    return _faulty(plate, Noisy(at_s=at_s, sensor=name), name)


def slow(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    name = _sensor(plate, rng)
    return _faulty(plate, Slow(at_s=at_s, sensor=name), name)


def swapped(plate: Plate, rng: np.random.Generator, at_s: float) -> Event:
    first, second = rng.choice(len(plate.sensors), size=2, replace=False)
    names = plate.sensors[first].name, plate.sensors[second].name
    return _faulty(plate, Swapped(at_s=at_s, first=names[0], second=names[1]), *names)


SCENARIOS = {
    s.name: s
    for s in (
        Scenario("none", none, 600.0),
        Scenario("heat-up", none, 900.0, cold=True),
        Scenario("hot-spot", hot_spot, 300.0),
        Scenario("cooling", cooling, 300.0),
        Scenario("cold-load", cold_load, 480.0),
        Scenario("fast-runaway", fast_runaway, 240.0),
        Scenario("slow-runaway", slow_runaway, 420.0),
        Scenario("not-heating", not_heating, 300.0),
        Scenario("step", step, 60.0),
        Scenario("drift", drift, 120.0),
        Scenario("loose", loose, 300.0),
        Scenario("stuck", stuck, 120.0),
        Scenario("reversed", wired_in_reverse, 420.0, cold=True),
        Scenario("noisy", noisy, 120.0),
        Scenario("slow-sensor", slow, 120.0, cold=False),
        Scenario("swapped", swapped, 420.0, cold=True),
    )
}
