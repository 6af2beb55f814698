"""A small invented plate: two zones side by side, three thermocouples."""

from __future__ import annotations

import pytest

from platewatch.thermal.plate import (
    Correlation,
    Edge,
    EdgeKind,
    Loop,
    Material,
    Plate,
    Rectangle,
    Sensor,
    Surface,
    Table,
    Zone,
)
from sim_sensors.control import Stage
from sim_sensors.simulation import Plant

ROOM = "surround/ambient"


@pytest.fixture
def small_plate() -> Plate:
    """0.40 x 0.20 m of 10 mm aluminium."""
    aluminium = Material(
        "aluminium", Table.constant(170.0), 2700.0, Table.constant(900.0), 0.6, "invented"
    )
    zones = tuple(
        Zone(name, (Rectangle(x, 0.0, 0.2, 0.2),), 400.0, 10.0, 1.0, loop=Loop(sensor, 0.05, 300.0))
        for name, sensor, x in (("L", "A", 0.0), ("R", "B", 0.2))
    )
    sensors = (
        Sensor("A", 0.1, 0.1, lag_s=4.0, noise_K=0.1, quantum_K=0.1),
        Sensor("B", 0.3, 0.1, lag_s=4.0, noise_K=0.1, quantum_K=0.1),
        Sensor("C", 0.2, 0.1, lag_s=4.0, noise_K=0.1, quantum_K=0.1),
    )
    return Plate(
        name="small",
        outline=Rectangle(0.0, 0.0, 0.4, 0.2),
        thickness_m=0.01,
        material=aluminium,
        top=Surface(ROOM, correlation=Correlation.NATURAL_UP),
        bottom=Surface(ROOM, coefficient=2.0),
        edges=(Edge(EdgeKind.CONVECTIVE, coefficient=8.0),),
        zones=zones,
        sensors=sensors,
    )


@pytest.fixture
def small_plant(small_plate: Plate) -> Plant:
    """Ramp to 90 degC at 6 K/min, then soak."""
    return Plant(small_plate, stages=(Stage("ramp", to_degC=90.0, K_per_s=0.1), Stage("soak")))
