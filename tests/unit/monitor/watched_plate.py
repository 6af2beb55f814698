"""A small invented plate under watch, and what its thermocouples would say."""

from dataclasses import replace
from functools import cache

import numpy as np

from platewatch.monitor.estimator import Observed, build_quiet
from platewatch.monitor.limits import AlarmLimit, LimitKind, Priority
from platewatch.monitor.loops import build_loops
from platewatch.monitor.options import EstimatorOptions, ForecastOptions
from platewatch.monitor.peak import places, standard_draws
from platewatch.monitor.pipeline import Monitor
from platewatch.monitor.recipe import Do, Recipe, Step
from platewatch.thermal.conduction import build_model
from platewatch.thermal.grid import build_grid
from platewatch.thermal.plate import (
    Correlation,
    Loop,
    Material,
    Plate,
    Rectangle,
    Sensor,
    Surface,
    Table,
    Zone,
)
from platewatch.thermal.reduction import reduce
from platewatch.types import Reading, Tick
from platewatch.units import TemperatureUnit

ROOM = "surround/ambient"
T0 = 1_800_000_000_000_000  # source time at which every tale here begins, us
TICK_US = 2_000_000
STEEL = Material("steel", Table.constant(48.0), 7850.0, Table.constant(490.0), 0.8, "invented")
RECIPE = Recipe(
    "cure",
    (
        Step(Do.RAMP, to_degC=120.0, rate_K_per_s=0.05),
        Step(Do.WAIT, within_K=2.0, longest_s=1800.0),
        Step(Do.SOAK, duration_s=3600.0),
    ),
)
PRODUCT = AlarmLimit(
    "product", LimitKind.PEAK, 135.0, Priority.MEDIUM, 2.0, time_to_respond_min=5.0
)


def plate(straight: bool = False) -> Plate:
    """0.40 x 0.20 m of 10 mm steel, two zones, three thermocouples.

    straight: with losses that are linear in temperature
    """
    zones = tuple(
        Zone(
            name,
            (Rectangle(x + 0.01, 0.01, 0.18, 0.18),),
            500.0,
            20.0,
            1.0,
            loop=Loop(sensor, 0.05, 400.0),
            where=f"breaker {name}1",
        )
        for name, sensor, x in (("L", "A", 0.0), ("R", "B", 0.2))
    )
    sensors = tuple(
        Sensor(name, x, y, tolerance_class="1", lag_s=5.0, noise_K=0.1, quantum_K=0.1)
        for name, x, y in (("A", 0.1, 0.1), ("B", 0.3, 0.1), ("C", 0.2, 0.05))
    )
    bent = Surface(ambient=ROOM, correlation=Correlation.NATURAL_UP, emissivity=0.8)
    return Plate(
        "small",
        Rectangle(0.0, 0.0, 0.4, 0.2),
        0.01,
        STEEL,
        top=Surface(ambient=ROOM, coefficient=14.0) if straight else bent,
        bottom=Surface(ambient=ROOM, coefficient=2.0),
        cell_m=0.01,
        zones=zones,
        sensors=sensors,
        reference_degC=120.0,
    )


@cache
def quiet(straight: bool = False):
    """The quiet filter of the small plate."""
    description = plate(straight)
    model = build_model(description, build_grid(description), 120.0)
    return build_quiet(description, reduce(model), 120.0)


@cache
def monitor(straight: bool = False) -> Monitor:
    """Everything that watches the small plate."""
    q = quiet(straight)
    return Monitor(
        quiet=q,
        loops=build_loops(q.plate),
        where=places(q, ("L",)),
        draws=standard_draws(q.blocks.size),
        limits=(PRODUCT, replace(PRODUCT, name="left", zone="L", value=140.0, record_only=True)),
        recipes=(RECIPE,),
        estimator=EstimatorOptions(),
        forecast=ForecastOptions(),
        unit=TemperatureUnit.DEGC,
    )


def observed(q, degC, called_W=(0.0, 0.0), room=22.0, share=1.0, count=1.0) -> Observed:
    """What one tick told: readings in the order of the sensors, nan where there was none."""
    degC = np.asarray(degC, dtype=np.float64)
    there = np.flatnonzero(~np.isnan(degC))
    called = np.asarray(called_W, dtype=np.float64)
    return Observed(
        sensors=tuple(int(i) for i in there),
        degC=degC[there],
        count=np.full(there.size, count),
        share=np.full(there.size, share),
        called_W=called,
        called_end_W=called,
        around=np.full(len(q.around_u), room),
    )


def tick(at_us, values, dt_us=TICK_US, **more) -> Tick:
    """One tick whose readings all carry its own stamp."""
    readings = tuple(Reading(at_us, name, v, at_us) for name, v in sorted(values.items()))
    return Tick(at_us, dt_us, readings, **more)


def ticks_of(samples, dt_us=TICK_US, t0=T0):
    """A simulated batch as ticks of one sample each; nan is no reading."""
    for sample in samples:
        said = {k: v for k, v in sample.readings.items() if v == v}
        yield tick(t0 + round(sample.at_s * 1e6), said, dt_us)
