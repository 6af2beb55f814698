"""What follows from a plate description, before any reading: the figures of `check`."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely

from platewatch.errors import PlateError
from platewatch.monitor.estimator import FieldState, Observed, Quiet, advance, first_state
from platewatch.studies.whatif import whatif_steady
from platewatch.thermal.conduction import ThermalModel
from platewatch.thermal.plate import Plate, Zone, geometry
from platewatch.types import Array

COARSE_K = 0.5  # above, what the reduced model leaves out is worth a warning
THIN_BIOT = 0.1  # above, a plate is not of one temperature through its thickness
SETTLING_TICKS = 60
SETTLING_TICK_US = 20_000_000
READINGS_A_TICK = 10.0
NEGLIGIBLE_RATE = 1e-9  # of the fastest: no loss at all


@dataclass(frozen=True)
class ZoneSupport:
    """How well thermocouples speak for a zone.

    sensors: those within one spread length of it
    sd_K: standard uncertainty of its hottest cell after 20 min of readings every 2 s
    """

    zone: str
    sensors: tuple[str, ...]
    sd_K: float


@dataclass(frozen=True)
class Facts:
    """h_W_m2K: of both faces at the reference temperature;  h_largest: where a load lies, too
    spread_m: sqrt(k d / h), how far heat spreads in the plate before it is lost
    slow_s, even_s: time constants of the plate as a whole (None: it loses no heat) and of
    its slowest difference from place to place
    full_power_degC: hottest and mean at full power, or why there is none
    """

    plate: str
    cells: int
    cell_m: float
    reference_degC: float
    h_W_m2K: float
    h_largest_W_m2K: float
    biot: float
    spread_m: float | None
    slow_s: float | None
    even_s: float
    order: int
    error_K: float
    watts: float
    full_power_degC: tuple[float, float] | str
    support: tuple[ZoneSupport, ...]

    @property
    def is_thin(self) -> bool:
        return self.biot <= THIN_BIOT

    @property
    def warnings(self) -> tuple[str, ...]:
        """What a person should know before trusting the picture."""
        found = []
        if not self.is_thin:
            found.append(
                f"Biot number {self.biot:.2f} is above {THIN_BIOT:g}: the faces and the core of "
                "this plate differ in temperature, which platewatch does not see; "
                "its band is too narrow there"
            )
        if self.error_K > COARSE_K:
            found.append(
                f"the reduced model is up to {self.error_K:.2g} K off the full one, which the band "
                "does not hold; look for a property or loss that changes abruptly"
            )
        found += [
            f"zone {each.zone}: no thermocouple within one spread length; its temperature is "
            "inferred from afar"
            for each in self.support
            if not each.sensors
        ]
        return tuple(found)


def derive(quiet: Quiet, reference_degC: float) -> Facts:
    """The figures of one plate, from its built filter."""
    plate, reduced = quiet.plate, quiet.reduced
    model = reduced.model
    h = face_coefficient(model, reference_degC)
    largest = max((h, *(contact.conductance for contact in plate.contacts)))
    thickness = model.stack.thickness_m
    resistance = thickness**2 / model.stack.sheet_conductance(reference_degC)
    sheet = float(np.mean(model.stack.sheet_conductance(reference_degC)))
    spread = float(np.sqrt(sheet / h)) if h > 0 else None
    slow, even = _time_constants(reduced.rates)
    return Facts(
        plate=plate.name,
        cells=model.grid.n,
        cell_m=float(np.sqrt(model.grid.hx * model.grid.hy)),
        reference_degC=reference_degC,
        h_W_m2K=h,
        h_largest_W_m2K=largest,
        biot=float(largest * resistance.max()),
        spread_m=spread,
        slow_s=slow,
        even_s=even,
        order=reduced.order,
        error_K=reduced.error_K,
        watts=sum(zone.watts for zone in plate.zones),
        full_power_degC=_full_power(plate),
        support=_support(quiet, reference_degC, spread),
    )


def face_coefficient(model: ThermalModel, reference_degC: float) -> float:
    """Heat lost by both faces over the difference to their ambient, W/m2K."""
    T = np.array([reference_degC])
    total = 0.0
    for face in model.faces:
        difference = reference_degC - float(model.nominal[face.ambient])
        if abs(difference) < 1.0:
            T, difference = T + 10.0, difference + 10.0
        total += float(face.flux(T, model.nominal)[0]) / difference
    return total


def _time_constants(rates: Array) -> tuple[float | None, float]:
    ordered = np.sort(rates)
    negligible = ordered[0] <= NEGLIGIBLE_RATE * ordered[-1]
    return None if negligible else float(1 / ordered[0]), float(1 / ordered[1])


def _full_power(plate: Plate) -> tuple[float, float] | str:
    try:
        found = whatif_steady(plate, {zone.name: zone.watts for zone in plate.zones})
    except PlateError as error:
        return str(error)
    return found.hottest_degC, found.mean_degC


def _support(
    quiet: Quiet, reference_degC: float, spread_m: float | None
) -> tuple[ZoneSupport, ...]:
    settled = _settled(quiet, reference_degC)
    V, modes = quiet.reduced.V, quiet.blocks.a
    field = V @ settled.belief.mean[modes]
    cov = settled.belief.cov[modes, modes]
    zone_of = np.array(quiet.cell_zone)
    found = []
    for zone in quiet.plate.zones:
        inside = np.where(zone_of == zone.name, field, -np.inf)
        row = V[int(inside.argmax())]
        near = _near(quiet.plate, zone, spread_m)
        found.append(ZoneSupport(zone.name, near, float(np.sqrt(row @ cov @ row))))
    return tuple(found)


def _near(plate: Plate, zone: Zone, spread_m: float | None) -> tuple[str, ...]:
    film = shapely.union_all([geometry(shape) for shape in zone.shapes])
    reach = np.inf if spread_m is None else spread_m
    return tuple(
        sensor.name
        for sensor in plate.sensors
        if shapely.distance(film, shapely.Point(sensor.x_m, sensor.y_m)) <= reach
    )


def _settled(quiet: Quiet, reference_degC: float) -> FieldState:
    """The filter after 20 min on a plate held at the reference temperature."""
    plate = quiet.plate
    lost = max(_holding_W(quiet, reference_degC), 0.0)
    watts = np.array([zone.watts for zone in plate.zones])
    called = watts * min(1.0, lost / watts.sum()) if watts.sum() > 0 else watts
    count = len(plate.sensors)
    seen = Observed(
        sensors=tuple(range(count)),
        degC=np.full(count, reference_degC),
        count=np.full(count, READINGS_A_TICK),
        share=np.ones(count),
        called_W=called,
        called_end_W=called,
        around=quiet.around_default,
    )
    state = first_state(quiet, 0, seen)
    for _ in range(SETTLING_TICKS):
        state, _ = advance(quiet, state, SETTLING_TICK_US, seen)
    return state


def _holding_W(quiet: Quiet, reference_degC: float) -> float:
    """Watts that hold the plate at the reference temperature, linear model."""
    model = quiet.reduced.model
    u = quiet.inputs(np.zeros(len(quiet.zone_u)), quiet.around_default)
    T = np.full(model.grid.n, reference_degC)
    return float((model.K @ T - model.B @ u - model.offset).sum())
