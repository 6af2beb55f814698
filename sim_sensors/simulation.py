"""The whole plant: true plate, heaters, loops and thermometers, sample by sample."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from copy import copy
from dataclasses import dataclass, replace

import numpy as np

from platewatch.adapters.settings import Description
from platewatch.thermal.plate import Plate, Rectangle
from platewatch.types import Array
from platewatch.units import TemperatureUnit, from_degC
from sim_sensors.batches import Batch, batch
from sim_sensors.control import (
    CURE,
    AntiWindup,
    Heaters,
    LoopState,
    Programme,
    Stage,
    power_share,
    regulate,
)
from sim_sensors.faults import (
    Fault,
    HeatSpot,
    LoadPutOn,
    LossesChanged,
    SensorFault,
    Swapped,
    ZoneFault,
)
from sim_sensors.lattice import bounds
from sim_sensors.thermometers import as_signal, follow, rounded
from sim_sensors.truth import STATED_ERROR, ModelError, Truth

LONGEST_STEP_S = 2.0
ROOM_DEGC = 22.0
CABINET_WARMER_K = 4.0


@dataclass(frozen=True)
class Plant:
    """A plate with its programme, as the simulator runs it.

    unit: of set-points and surroundings on the bus
    """

    plate: Plate
    unit: str = "degC"
    stages: tuple[Stage, ...] = CURE

    @classmethod
    def of(cls, description: Description) -> Plant:
        """The described plate under its first recipe.

        The batches end in the last soak: it lasts as long as the simulation, and
        what comes after it is left out.
        """
        if not description.recipes:
            return cls(description.plate, description.unit)
        steps = description.recipes[0].steps
        soaks = [k for k, step in enumerate(steps) if step.do == "soak"]
        kept = steps[: soaks[-1]] if soaks else tuple(s for s in steps if s.do != "cool")
        stages = [
            Stage(
                step.do,
                to_degC=step.to_degC or 0.0,
                K_per_s=step.rate_K_per_s or np.inf,
                within_K=step.within_K or 0.0,
                longest_s=step.longest_s or np.inf,
                lasts_s=step.duration_s or 0.0,
            )
            for step in kept
        ]
        return cls(description.plate, description.unit, (*stages, Stage("soak")))


@dataclass(frozen=True)
class TrueState:
    """What no thermometer tells.

    field (n,) degC at the nodes of the lattice;  watts: mean over the sample per zone
    hottest: the highest reading of a sensor, degC
    """

    peak_degC: float
    peak_x_m: float
    peak_y_m: float
    watts: Mapping[str, float]
    hottest_sensor: str
    hottest_degC: float
    field: Array


@dataclass(frozen=True)
class Sample:
    """One line of the log; readings by bus name, NaN where there is none.

    events: objects for the batch topic, without their time
    """

    at_s: float
    readings: Mapping[str, float]
    events: tuple[Mapping[str, object], ...]
    truth: TrueState


class Simulation:
    """A running plant.  `copy()` gives an independent continuation."""

    def __init__(
        self,
        plant: Plant,
        faults: Sequence[Fault] = (),
        *,
        seed: int = 0,
        sample_s: float = 2.0,
        room_degC: float = ROOM_DEGC,
        surround_degC: Mapping[str, float] | None = None,
        spacing_m: float | None = None,
        model_error: ModelError = STATED_ERROR,
        bias_K: Mapping[str, float] | None = None,
        anti_windup: AntiWindup = AntiWindup.CLAMP,
        batch_name: str = "batch-1",
    ) -> None:
        plate = plant.plate
        self.plant, self.faults, self.sample_s = plant, tuple(faults), sample_s
        self.room_degC, self.batch_name = room_degC, batch_name
        self.anti_windup = anti_windup
        self.at_s = 0.0
        self._surround = surround_channels(plate, room_degC) | dict(surround_degC or {})
        self.truth = Truth(
            plate,
            self._surround,
            start_degC=room_degC,
            spacing_m=spacing_m or default_spacing(plate),
            model_error=model_error,
        )
        self._rng = np.random.default_rng(seed)
        self._bias = dict(bias_K or {})
        self._places = [self.truth.lattice.locate(s.x_m, s.y_m) for s in plate.sensors]
        self._shapes = np.array([self.truth.zone_shape(z) for z in plate.zones])
        self._watts = model_error.power * np.array([z.watts for z in plate.zones])
        nothing = np.zeros(len(plate.zones))
        self._heaters = Heaters(nothing, nothing, np.array([z.lag_s for z in plate.zones]))
        self._loops = tuple(LoopState() for _ in plate.zones)
        self._extra = np.zeros(self.truth.lattice.nodes)
        self._under = self._at_sensors()
        self._tips = self._under
        self._begun: tuple[Fault, ...] = ()
        self._held: dict[str, float] = {}
        self._programme = Programme(plant.stages, room_degC, room_degC)
        self._shown = self._read(self._noise())
        self._said: list[Mapping[str, object]] = [self._event("start", step=plant.stages[0].do)]

    def copy(self, *, seed: int | None = None) -> Simulation:
        """The same plant at the same moment; a new seed gives it its own noise."""
        twin = copy(self)
        twin.truth = self.truth.copy()
        twin._rng = np.random.default_rng(seed)
        if seed is None:
            twin._rng.bit_generator.state = self._rng.bit_generator.state
        twin._held = dict(self._held)
        twin._said = list(self._said)
        return twin

    def add(self, *faults: Fault) -> None:
        """Further faults; those of the past begin with the next sample."""
        self.faults = (*self.faults, *faults)

    def step(self) -> Sample:
        """Run to the next sample."""
        self._begin_faults()
        watts = self._heat()
        self.at_s += self.sample_s
        self._shown = self._read(self._noise())
        self._follow_programme()
        self._loops = self._regulate()
        events, self._said = tuple(self._said), []
        return Sample(self.at_s, self._bus_values(), events, self._true_state(watts))

    def _begin_faults(self) -> None:
        for fault in self.faults:
            if fault in self._begun or self.at_s < fault.at_s:
                continue
            self._begun = (*self._begun, fault)
            match fault:
                case LoadPutOn():
                    self.truth.put_on(fault.load)
                    self._tell_load("load-on", fault)
                case LossesChanged():
                    self.truth.scale_losses(fault.factor)
                case HeatSpot(x_m=x, y_m=y, width_m=w):
                    place = self.truth.lattice.spread(Rectangle(x - w / 2, y - w / 2, w, w))
                    self._extra = self._extra + fault.watts * place / place.sum()
                case SensorFault():
                    self._held[fault.sensor] = self._shown[fault.sensor]
        self._lift_loads()

    def _lift_loads(self) -> None:
        for fault in self._begun:
            match fault:
                case LoadPutOn(off_s=float(off_s)) if self.truth.loads and self.at_s >= off_s:
                    self.truth.take_off()
                    self._tell_load("load-off", fault)

    def _regulate(self) -> tuple[LoopState, ...]:
        """What each loop asks for from now on, given what its sensor shows."""
        states = []
        for zone, state in zip(self.plant.plate.zones, self._loops, strict=True):
            if zone.loop is not None:
                shown = self._shown[zone.loop.sensor]
                target = self._programme.set_point_degC
                state = regulate(zone.loop, state, target, shown, self.sample_s, self.anti_windup)
            states.append(state)
        return tuple(states)

    def _heat(self) -> Array:
        """Let the plate run over one sample; mean watts (z,) delivered."""
        zones = self.plant.plate.zones
        share = [power_share(z, s.duty) for z, s in zip(zones, self._loops, strict=True)]
        for fault in self._begun:
            if isinstance(fault, ZoneFault):
                number = [z.name for z in zones].index(fault.zone)
                share[number] = fault.drawn(share[number])
        self._heaters = replace(self._heaters, target=self._watts * np.array(share))
        mean = self._heaters.mean_over(self.sample_s)
        steps = max(1, int(np.ceil(self.sample_s / LONGEST_STEP_S - 1e-9)))
        for _ in range(steps):
            self._advance(self.sample_s / steps)
        return mean

    def _advance(self, step_s: float) -> None:
        heaters, shapes, extra = self._heaters, self._shapes, self._extra
        self.truth.advance(step_s, lambda after: heaters.after(after) @ shapes + extra)
        self._heaters = replace(heaters, flowing=heaters.after(step_s))
        before, now = self._under, self._at_sensors()
        tips = []
        for k, sensor in enumerate(self.plant.plate.sensors):
            lag, settle = sensor.lag_s, (before[k], now[k])
            for fault in self._sensor_faults(sensor.name):
                room = self._cold_junction(sensor.name)
                lag = fault.lag_s(lag)
                settle = (
                    fault.settles_at(settle[0], room),
                    fault.settles_at(settle[1], room),
                )
            tips.append(follow(self._tips[k], *settle, lag, step_s))
        self._under, self._tips = now, np.array(tips)

    def _read(self, noise: Array) -> dict[str, float]:
        """What each instrument shows, degC by sensor; the loops act on this."""
        shown: dict[str, float] = {}
        for k, sensor in enumerate(self.plant.plate.sensors):
            value, spread = float(self._tips[k]), sensor.noise_K
            for fault in self._sensor_faults(sensor.name):
                room = self._cold_junction(sensor.name)
                last = self._held.get(sensor.name, value)
                value = fault.shown(value, room, self.at_s - fault.at_s, last)
                spread *= fault.noise_factor
            value += spread * noise[k] + self._bias.get(sensor.name, 0.0) - sensor.correction_K
            shown[sensor.name] = rounded(value, sensor.quantum_K)
        for swap in self._begun:
            if isinstance(swap, Swapped):
                a, b = swap.first, swap.second
                shown[a], shown[b] = shown[b], shown[a]
        return shown

    def _follow_programme(self) -> None:
        zones = self.plant.plate.zones
        readings = [self._shown[z.loop.sensor] for z in zones if z.loop is not None]
        before = self._programme.number
        self._programme = self._programme.at(self.at_s, readings)
        if self._programme.number != before:
            self._said.append(self._event("step", step=self._programme.stage.do))

    def _bus_values(self) -> dict[str, float]:
        unit = TemperatureUnit(self.plant.unit)
        values: dict[str, float] = {}
        for sensor in self.plant.plate.sensors:
            shown = self._shown[sensor.name]
            values[f"sensor/{sensor.name}"] = as_signal(
                sensor, shown, self._cold_junction(sensor.name)
            )
        for zone, loop in zip(self.plant.plate.zones, self._loops, strict=True):
            set_point = from_degC(self._programme.set_point_degC, unit)
            values[f"zone/{zone.name}/duty"] = round(loop.duty * zone.duty_full, 6)
            values[f"zone/{zone.name}/setpoint"] = round(set_point, 3)
        for channel, degC in self._surround.items():
            values[channel] = round(from_degC(degC, unit), 2)
        return values

    def _true_state(self, watts: Array) -> TrueState:
        peak, x, y = self.truth.peak()
        shown = {name: v for name, v in self._shown.items() if not np.isnan(v)}
        hottest = max(shown, key=lambda name: shown[name], default="")
        names = [zone.name for zone in self.plant.plate.zones]
        return TrueState(
            peak_degC=peak,
            peak_x_m=x,
            peak_y_m=y,
            watts=dict(zip(names, watts.tolist(), strict=True)),
            hottest_sensor=hottest,
            hottest_degC=shown.get(hottest, float("nan")),
            field=self.truth.field,
        )

    def _sensor_faults(self, name: str) -> list[SensorFault]:
        return [f for f in self._begun if isinstance(f, SensorFault) and f.sensor == name]

    def _cold_junction(self, name: str) -> float:
        place = self.plant.plate.sensor(name).cold_junction
        if place is None:
            return self.room_degC
        return self._surround[place] if isinstance(place, str) else place

    def _at_sensors(self) -> Array:
        field = self.truth.field
        return np.array([weights @ field[nodes] for nodes, weights in self._places])

    def _noise(self) -> Array:
        return self._rng.standard_normal(len(self.plant.plate.sensors))

    def _event(self, event: str, **more: object) -> Mapping[str, object]:
        return {"event": event, "batch": self.batch_name, **more}

    def _tell_load(self, event: str, fault: LoadPutOn) -> None:
        if not fault.announced:
            return
        place = fault.load.footprint
        self._said.append(
            self._event(
                event,
                zone=fault.zone,
                x_mm=round(place.x_m * 1e3, 3),
                y_mm=round(place.y_m * 1e3, 3),
                width_mm=round(place.width_m * 1e3, 3),
                height_mm=round(place.height_m * 1e3, 3),
                mass_kg=round(fault.load.mass_kg, 3),
            )
        )


def simulate(
    plant: Plant,
    what: Batch | str,
    *,
    seed: int = 0,
    until_s: float | None = None,
    **settings: object,
) -> Iterator[Sample]:
    """All samples of a batch in order, the first after one sample time.

    what: a batch, or the name of a demonstration batch
    settings: keywords of `Simulation` (sample_s, model_error, room_degC, ...)
    """
    chosen = batch(what, plant.plate) if isinstance(what, str) else what
    run = Simulation(plant, chosen.faults, seed=seed, **settings)  # type: ignore[arg-type]
    end_s = chosen.lasts_s if until_s is None else until_s
    while run.at_s < end_s - 1e-9:
        yield run.step()


def surround_channels(plate: Plate, room_degC: float) -> dict[str, float]:
    """Every surround channel the plate names: the room, but cabinets are warmer."""
    rim = [ambient for edge in plate.edges for ambient in (edge.ambient, edge.held)]
    faces = [a for face in (plate.top, plate.bottom) for a in (face.ambient, face.surroundings)]
    rooms = [*faces, *rim, *(clamp.ambient for clamp in plate.clamps)]
    named = {name: room_degC for name in rooms if isinstance(name, str)}
    for sensor in plate.sensors:
        if isinstance(sensor.cold_junction, str):
            named.setdefault(sensor.cold_junction, room_degC + CABINET_WARMER_K)
    return named


def default_spacing(plate: Plate) -> float:
    """About 4300 elements: 15 mm on a table of 1.2 by 0.8 m."""
    x0, y0, x1, y1 = bounds(plate.outline)
    return float(np.sqrt((x1 - x0) * (y1 - y0) / 4267.0))
