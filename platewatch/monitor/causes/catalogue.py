"""The causes that are modelled: what each is, where it can be, and how it unfolds.

A hypothesis is one pattern of heat or of reading error with one time shape; its
size and sign are unknown and integrated out elsewhere.  Several hypotheses make
up one cause at one place.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import shapely

from platewatch.monitor.estimator import Quiet
from platewatch.monitor.options import CauseOptions
from platewatch.thermal.conduction import linear_loss_watts
from platewatch.thermal.grid import Grid
from platewatch.types import Array


class Cause(StrEnum):
    NONE = "none"
    ZONE_NOT_HEATING = "zone not heating"
    ZONE_STAYS_ON = "zone stays on"
    COLD_LOAD = "cold load"
    UNKNOWN_HEAT = "unknown heat"
    LOSS_CHANGED = "loss changed"
    SENSOR_STEP = "sensor step"
    SENSOR_DRIFT = "sensor drift"
    SENSOR_STUCK = "sensor stuck"
    SENSOR_LOOSE = "sensor loose"
    SENSOR_REVERSED = "sensor reversed"
    SENSOR_WRONG_TYPE = "sensor wrong type"
    SENSOR_LAG = "sensor lag changed"
    SENSOR_NOISY = "sensor noisy"
    JUNCTION_BLOCK = "junction block shift"
    SWAPPED_PAIR = "swapped pair"


class Family(StrEnum):
    """What carries a hypothesis."""

    SOURCE = "source"
    ZONE = "zone"
    LOSS = "loss"
    SENSOR = "sensor"
    BLOCK = "block"


@dataclass(frozen=True)
class Shape:
    """How the heat or error unfolds from its onset: 1, exp(-t/s), 1 - exp(-t/s), 1 + t/s, t/s."""

    kind: str
    s: float = 1.0

    def at(self, t_s: Array) -> Array:
        """Value at ages t_s >= 0."""
        match self.kind:
            case "step":
                return np.ones_like(t_s)
            case "decay":
                return np.exp(-t_s / self.s)
            case "settle":
                return 1 - np.exp(-t_s / self.s)
            case "grow":
                return 1 + t_s / self.s
            case _:
                return t_s / self.s


STEP = Shape("step")
SOURCE_SHAPES = (STEP, Shape("decay", 100.0), Shape("decay", 300.0), Shape("decay", 1000.0))
ZONE_SHAPES = (STEP, Shape("grow", 150.0), Shape("grow", 600.0), Shape("decay", 600.0))
LOSS_SHAPES = (STEP, Shape("settle", 300.0))
SENSOR_SHAPES = (
    STEP,
    Shape("ramp", 60.0),
    Shape("settle", 30.0),
    Shape("settle", 90.0),
    Shape("settle", 200.0),
)
BLOCK_SHAPES = (STEP, Shape("settle", 300.0))

# Side lengths of unknown sources and their spacing, as shares of sqrt(plate area).
SOURCE_SIZES = ((0.06, 0.085), (0.15, 0.12), (0.26, 0.15))

# Share of the default 0.1 causes per plate-day.
DEFAULT_RATE = 0.1
SHARES: dict[Cause, float] = {
    Cause.ZONE_NOT_HEATING: 0.12,
    Cause.ZONE_STAYS_ON: 0.12,
    Cause.COLD_LOAD: 0.24,
    Cause.UNKNOWN_HEAT: 0.08,
    Cause.LOSS_CHANGED: 0.08,
    Cause.SENSOR_STEP: 0.08,
    Cause.SENSOR_DRIFT: 0.06,
    Cause.SENSOR_LOOSE: 0.14,
    Cause.JUNCTION_BLOCK: 0.04,
}


@dataclass(frozen=True)
class Pattern:
    """One spatial pattern of a family.

    heat (cells,): W per unit amplitude, or None for an error of readings
    error (ns,): K per unit amplitude, or None
    sd: prior standard deviations of the amplitude, equally likely
    subject: zone, sensor or block; for a source the zone it lies in
    """

    family: Family
    subject: str
    x_m: float
    y_m: float
    size_m: float
    heat: Array | None
    error: Array | None
    sd: tuple[float, ...]
    shapes: tuple[Shape, ...]
    spacing_m: float = 0.0


def prior_rate(options: CauseOptions, cause: Cause) -> float:
    """Expected number per plate-day."""
    if cause.value in options.off:
        return 0.0
    return dict(options.prior).get(cause.value, DEFAULT_RATE * SHARES.get(cause, 0.0))


def sources(quiet: Quiet) -> list[Pattern]:
    """Unknown heat or loads: squares of three sizes all over the plate."""
    grid, plate = quiet.grid, quiet.plate
    area = float(grid.area.sum())
    scale = np.sqrt(area)
    watts = sum(zone.watts for zone in plate.zones) or 1000.0
    found = []
    for share, spacing in SOURCE_SIZES:
        side = share * scale
        for x, y in _lattice(grid, spacing * scale):
            heat = _square(grid, x, y, side)
            if heat.sum() < 0.3 * side**2:
                continue
            near = int(np.argmin((grid.x - x) ** 2 + (grid.y - y) ** 2))
            found.append(
                Pattern(
                    Family.SOURCE,
                    quiet.cell_zone[near],
                    x,
                    y,
                    side,
                    heat / heat.sum(),
                    None,
                    (0.03 * watts, 0.3 * watts),
                    SOURCE_SHAPES,
                    spacing * scale,
                )
            )
    return found


def _lattice(grid: Grid, spacing: float) -> list[tuple[float, float]]:
    """Even points over the bounding box, half a spacing from its rim."""
    x0, y0, x1, y1 = grid.domain.bounds
    nx, ny = max(1, round((x1 - x0) / spacing)), max(1, round((y1 - y0) / spacing))
    xs = x0 + (np.arange(nx) + 0.5) * (x1 - x0) / nx
    ys = y0 + (np.arange(ny) + 0.5) * (y1 - y0) / ny
    return [(float(x), float(y)) for y in ys for x in xs]


def _square(grid: Grid, x: float, y: float, side: float) -> Array:
    """Covered area of each cell, m2; exact for full cells, close enough at a cut rim."""
    across = _overlap(grid.x, grid.hx, x, side)
    along = _overlap(grid.y, grid.hy, y, side)
    return np.asarray(across * along / (grid.hx * grid.hy) * grid.area)


def _overlap(centre: Array, width: float, at: float, side: float) -> Array:
    low = np.maximum(centre - width / 2, at - side / 2)
    high = np.minimum(centre + width / 2, at + side / 2)
    return np.asarray(np.clip(high - low, 0.0, None))


def zones(quiet: Quiet) -> list[Pattern]:
    """Each heater delivering other than it is asked for."""
    model = quiet.reduced.model
    found = []
    for number, zone in zip(quiet.zone_u, quiet.plate.zones, strict=True):
        heat = model.B[:, number]
        x, y = float(heat @ model.grid.x), float(heat @ model.grid.y)
        found.append(
            Pattern(
                Family.ZONE,
                zone.name,
                x,
                y,
                0.0,
                heat,
                None,
                (0.1 * zone.watts, 0.5 * zone.watts),
                ZONE_SHAPES,
            )
        )
    return found


def losses(quiet: Quiet) -> list[Pattern]:
    """The loss to the surroundings changed: all over, or on one half."""
    model, grid = quiet.reduced.model, quiet.grid
    u = np.array([i.nominal for i in model.inputs])
    lost = linear_loss_watts(model, np.full(grid.n, model.reference_degC), u)
    x, y = grid.domain.centroid.x, grid.domain.centroid.y
    halves = {
        "whole plate": np.ones(grid.n, dtype=bool),
        "left half": grid.x < x,
        "right half": grid.x > x,
        "lower half": grid.y < y,
        "upper half": grid.y > y,
    }
    return [
        Pattern(
            Family.LOSS,
            name,
            float(grid.x[part].mean()),
            float(grid.y[part].mean()),
            0.0,
            -lost * part,
            None,
            (0.15, 0.6),
            LOSS_SHAPES,
        )
        for name, part in halves.items()
    ]


def sensor_errors(quiet: Quiet) -> list[Pattern]:
    """Each thermocouple reading other than its junction is."""
    plate = quiet.plate
    found = []
    for i, sensor in enumerate(plate.sensors):
        error = np.zeros(len(plate.sensors))
        error[i] = 1.0
        found.append(
            Pattern(
                Family.SENSOR,
                sensor.name,
                sensor.x_m,
                sensor.y_m,
                0.0,
                None,
                error,
                (3.0, 20.0),
                SENSOR_SHAPES,
            )
        )
    return found


def blocks(quiet: Quiet) -> list[Pattern]:
    """Thermocouples that share a cold junction, all shifted by the same amount."""
    plate = quiet.plate
    names = sorted({s.junction_block for s in plate.sensors if s.junction_block})
    found = []
    for name in names:
        error = np.array([float(s.junction_block == name) for s in plate.sensors])
        if error.sum() > 1:
            found.append(
                Pattern(Family.BLOCK, name, 0.0, 0.0, 0.0, None, error, (3.0,), BLOCK_SHAPES)
            )
    return found


def patterns(quiet: Quiet) -> list[Pattern]:
    """All of them, in a fixed order."""
    return [*sources(quiet), *zones(quiet), *losses(quiet), *sensor_errors(quiet), *blocks(quiet)]


def covers(grid: Grid, x_m: float, y_m: float) -> bool:
    """Does this point lie on the plate?"""
    return bool(shapely.contains_xy(grid.domain, x_m, y_m))


def cause_of(family: Family, shape: Shape, positive: bool) -> Cause | None:
    """What a hypothesis is called, by its family, shape and sign; None: not allowed.

    A drift is only allowed towards low readings: a high reading is never explained away.
    """
    match family:
        case Family.SOURCE:
            return Cause.UNKNOWN_HEAT if positive else Cause.COLD_LOAD
        case Family.ZONE:
            return Cause.ZONE_STAYS_ON if positive else Cause.ZONE_NOT_HEATING
        case Family.LOSS:
            return Cause.LOSS_CHANGED
        case Family.BLOCK:
            return Cause.JUNCTION_BLOCK
        case Family.SENSOR:
            if shape.kind == "step":
                return Cause.SENSOR_STEP
            if positive:
                return None
            return Cause.SENSOR_DRIFT if shape.kind == "ramp" else Cause.SENSOR_LOOSE
