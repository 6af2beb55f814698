"""The plates of the bench and the true plants drawn for them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path

import numpy as np

from platewatch.compose import Description, Monitor, build_monitor, describe
from platewatch.monitor.tolerance import tolerance_K
from platewatch.thermal.plate import Plate, Uncertain
from sim_sensors.lattice import bounds
from sim_sensors.simulation import Plant, Simulation, default_spacing
from sim_sensors.truth import STATED_ERROR, ModelError

CONFIG = Path(__file__).parents[3] / "config"
DEVELOPMENT = 0  # seeds 0..99 may be looked at while constants are chosen
REPORTING = 1000  # seeds from here on are for figures only
PLATES = ("steel", "aluminium", "round")
FILES = {
    "steel": "demo-table.toml",
    "aluminium": "aluminium-plate.toml",
    "round": "round-bake-plate.toml",
}
HOLD_S = {"steel": 4200.0, "aluminium": 3600.0, "round": 3000.0}
WRONG = Uncertain(k=0.05, losses=0.15, power=0.15, emissivity=0.30)
LEAST_FACTOR = 0.3  # a drawn factor is never below this


@dataclass(frozen=True)
class Drawn:
    """What the true plant has and the description does not say."""

    error: ModelError
    bias_K: dict[str, float]


Draw = Callable[[Plate, int], Drawn]


@dataclass(frozen=True)
class Case:
    """A described plate and the plants that stand for it.

    until_s: where a clean run ends;  spacing: of the truth, as a multiple of the usual
    """

    name: str
    plate: str
    draw: Draw
    until_s: float
    classless: bool = False
    uncertain: Uncertain | None = None
    spacing: float = 1.0

    @property
    def description(self) -> Description:
        return described(self.plate, self.classless, self.uncertain)

    @property
    def monitor(self) -> Monitor:
        return built(self.plate, self.classless, self.uncertain)

    def simulation(self, seed: int) -> Simulation:
        """The plant of one seed, cold, before its first sample."""
        plate = self.description.plate
        drawn = self.draw(plate, seed)
        return Simulation(
            Plant.of(self.description),
            seed=seed,
            model_error=drawn.error,
            bias_K=drawn.bias_K,
            spacing_m=self.spacing * default_spacing(plate),
        )


@cache
def described(plate: str, classless: bool, uncertain: Uncertain | None) -> Description:
    """A description of config/, by the bench's name of it."""
    description = describe(CONFIG / FILES[plate])
    changed = description.plate
    if classless:
        bare = tuple(replace(s, tolerance_class=None) for s in changed.sensors)
        changed = replace(changed, sensors=bare)
    if uncertain is not None:
        changed = replace(changed, uncertain=uncertain)
    return replace(description, plate=changed)


@cache
def built(plate: str, classless: bool, uncertain: Uncertain | None) -> Monitor:
    return build_monitor(described(plate, classless, uncertain))


def demo_error(plate: Plate, seed: int) -> Drawn:
    """The model errors that the demonstration states; thermocouples without bias."""
    return Drawn(STATED_ERROR, {})


def wrong_by_one_sd(plate: Plate, seed: int) -> Drawn:
    """Every parameter wrong by its stated standard deviation, the signs drawn."""
    rng = np.random.default_rng([seed, 1])
    sd = plate.uncertain
    k, losses, power, emissivity, cp = rng.choice((-1.0, 1.0), size=5)
    return Drawn(
        ModelError(
            k=1 + k * sd.k,
            losses=1 + losses * sd.losses,
            power=1 + power * sd.power,
            emissivity=1 + emissivity * sd.emissivity,
            cp=1 + cp * sd.cp,
        ),
        {},
    )


def drawn_plant(plate: Plate, seed: int) -> Drawn:
    """A plant of the description's [uncertain], thermocouples of their tolerance class.

    Parameters are normal.  A thermocouple's bias is anywhere within the limit of its class
    with equal probability, for the class says no more (JCGM 100:2008, 4.3.7).
    """
    rng = np.random.default_rng([seed, 2])
    sd = plate.uncertain

    def factor(spread: float) -> float:
        return max(LEAST_FACTOR, 1 + spread * float(rng.standard_normal()))

    error = ModelError(
        k=factor(sd.k),
        power=factor(sd.power),
        cp=factor(sd.cp),
        losses=factor(sd.losses),
        emissivity=factor(sd.emissivity),
    )
    at_degC = plate.reference_degC or 100.0
    bias = {}
    for sensor in plate.sensors:
        if sensor.tolerance_class is None:
            continue
        limit = tolerance_K(sensor.element, sensor.tolerance_class, at_degC) or 0.0
        bias[sensor.name] = limit * float(rng.uniform(-1, 1))
    return Drawn(error, bias)


def field_case(plate: str) -> Case:
    """The case whose field errors are reported: model errors stated, sensors as they are."""
    if plate == "steel":
        return Case("steel, demo errors", plate, demo_error, HOLD_S[plate])
    if plate == "aluminium":
        return Case(
            "aluminium, wrong by 1 sd",
            plate,
            wrong_by_one_sd,
            HOLD_S[plate],
            classless=True,
            uncertain=WRONG,
            spacing=0.8,
        )
    return Case(f"{plate}, wrong by 1 sd", plate, wrong_by_one_sd, HOLD_S[plate])


def drawn_case(plate: str) -> Case:
    """The case whose coverage is reported: plants of [uncertain], biases of the class."""
    return Case(f"{plate}, drawn", plate, drawn_plant, HOLD_S[plate])


def extent_m(plate: Plate) -> float:
    """The longer side of the plate's bounding box."""
    x0, y0, x1, y1 = bounds(plate.outline)
    return max(x1 - x0, y1 - y0)
