"""The plate as described: shapes, material, surfaces, heaters, thermocouples.

Everything here is SI (metres, watts) and degrees Celsius; `adapters.settings`
converts from the file.  x points right, y points up, as seen by the operator.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import StrEnum

import numpy as np
import shapely

from platewatch.types import Array


@dataclass(frozen=True)
class Rectangle:
    """Lower left corner and size."""

    x_m: float
    y_m: float
    width_m: float
    height_m: float


@dataclass(frozen=True)
class Circle:
    """Centre and diameter."""

    x_m: float
    y_m: float
    diameter_m: float


@dataclass(frozen=True)
class Polygon:
    """Corners in order; segment N runs from corner N to corner N + 1, counted from 1."""

    points_m: tuple[tuple[float, float], ...]


Shape = Rectangle | Circle | Polygon
Area = shapely.Polygon  # what `geometry` makes of a shape


def geometry(shape: Shape) -> shapely.Polygon:
    """The shape as a shapely polygon, metres.

    A circle becomes a regular polygon of 720 corners with the circle's own area.
    """
    match shape:
        case Rectangle(x, y, width, height):
            return shapely.box(x, y, x + width, y + height)
        case Circle(x, y, diameter):
            corners = 720
            turn = 2 * np.pi / corners
            radius = diameter / 2 * np.sqrt(turn / np.sin(turn))
            angle = turn * np.arange(corners)
            return shapely.Polygon(
                np.column_stack((x + radius * np.cos(angle), y + radius * np.sin(angle)))
            )
        case Polygon(points):
            return shapely.Polygon(points)


@dataclass(frozen=True)
class Table:
    """A property over temperature: linear between points, constant beyond the ends."""

    degC: tuple[float, ...]
    value: tuple[float, ...]

    @classmethod
    def constant(cls, value: float) -> Table:
        return cls((0.0,), (value,))

    @property
    def is_constant(self) -> bool:
        return len(set(self.value)) == 1

    def at(self, temperature_degC: Array | float) -> Array:
        return np.asarray(np.interp(temperature_degC, self.degC, self.value), dtype=np.float64)


@dataclass(frozen=True)
class Material:
    """k W/mK, rho kg/m3, cp J/kgK, emissivity of its bare surface."""

    name: str
    k: Table
    rho: float
    cp: Table
    emissivity: float
    source: str


Ambient = float | str  # degC, or the name of a bus channel such as "surround/ambient"


class Correlation(StrEnum):
    NATURAL_UP = "natural-up"
    NATURAL_DOWN = "natural-down"
    FORCED = "forced"


@dataclass(frozen=True)
class Surface:
    """One face.  `coefficient` is the whole loss, W/m2K, radiation included;
    `correlation` is convection only, radiation is added with `emissivity`
    (else the material's) towards `surroundings` (else `ambient`)."""

    ambient: Ambient
    coefficient: float | None = None
    correlation: Correlation | None = None
    speed_m_s: float | None = None
    emissivity: float | None = None
    surroundings: Ambient | None = None


class EdgeKind(StrEnum):
    INSULATED = "insulated"
    CONVECTIVE = "convective"
    HELD = "held"


class Side(StrEnum):
    X_MIN = "x-min"
    X_MAX = "x-max"
    Y_MIN = "y-min"
    Y_MAX = "y-max"


@dataclass(frozen=True)
class Edge:
    """A part of the rim: a side, a segment of a polygon (from 1), or all of it.

    Later entries win where two cover the same piece.  Holes belong to "all".
    coefficient: W/m2K over thickness x length;  w_per_k_per_m: W/K per metre of rim
    """

    kind: EdgeKind
    coefficient: float | None = None
    w_per_k_per_m: float | None = None
    held: Ambient | None = None
    ambient: Ambient | None = None  # else that of the top face
    side: Side | None = None
    segment: int | None = None


@dataclass(frozen=True)
class Clamp:
    x_m: float
    y_m: float
    w_per_k: float
    ambient: Ambient | None = None  # else that of the top face


@dataclass(frozen=True)
class Contact:
    """A load that the plant knows; it lies on the plate only when told so."""

    name: str
    shape: Shape
    conductance: float  # W/m2K
    heat_capacity: float  # J/K


@dataclass(frozen=True)
class Layer:
    material: Material
    thickness_m: float


@dataclass(frozen=True)
class Inset:
    """A region of other thickness or material."""

    shape: Shape
    material: Material | None = None
    thickness_m: float | None = None


class DutyLaw(StrEnum):
    LINEAR = "linear"
    BURST = "burst"
    PHASE_ANGLE = "phase-angle"
    VOLTAGE_SQUARED = "voltage-squared"
    POWER = "power"


class LoopForm(StrEnum):
    IDEAL = "ideal"
    SERIES = "series"


@dataclass(frozen=True)
class Loop:
    """A PI or PID controller: duty (0..1) from the error of one sensor."""

    sensor: str
    gain_per_K: float
    integral_s: float | None = None
    derivative_s: float = 0.0
    form: LoopForm = LoopForm.IDEAL
    low: float = 0.0
    high: float = 1.0


@dataclass(frozen=True)
class Zone:
    """A heater.  Its watts spread evenly over its shapes."""

    name: str
    shapes: tuple[Shape, ...]
    watts: float
    lag_s: float
    duty_full: float  # the duty value on the bus that means "all of the time": 1 or 100
    duty_law: DutyLaw = DutyLaw.LINEAR
    duty_exponent: float = 1.0
    loop: Loop | None = None
    where: str = ""


class Role(StrEnum):
    CONTROL = "control"
    MONITOR = "monitor"


@dataclass(frozen=True)
class Sensor:
    """A thermocouple or Pt100.

    noise_K: standard deviation;  quantum_K: rounding step
    signal: degC, degF, K, mV, ohm or mA; low_mA.. are the span of a mA signal
    """

    name: str
    x_m: float
    y_m: float
    element: str = "K"
    signal: str = "degC"
    span_degC: tuple[float, float] | None = None  # of 4..20 mA
    tolerance_class: str | None = None
    lag_s: float = 0.0
    noise_K: float = 0.2
    quantum_K: float = 0.0
    cold_junction: Ambient | None = None
    junction_block: str = ""
    correction_K: float = 0.0
    calibrated_on: str = ""
    due_on: str = ""
    certificate: str = ""
    role: Role = Role.MONITOR
    where: str = ""


@dataclass(frozen=True)
class Uncertain:
    """Relative standard deviations of what the description claims."""

    k: float = 0.05
    cp: float = 0.02
    losses: float = 0.15
    power: float = 0.05
    emissivity: float = 0.15


@dataclass(frozen=True)
class Plate:
    """A plate, valid by construction once it comes out of `adapters.settings`."""

    name: str
    outline: Shape
    thickness_m: float
    material: Material
    top: Surface
    bottom: Surface
    holes: tuple[Shape, ...] = ()
    cell_m: float | None = None
    working_margin_m: float = 0.0
    position_note: str = ""
    layers: tuple[Layer, ...] = ()
    insets: tuple[Inset, ...] = ()
    edges: tuple[Edge, ...] = ()
    clamps: tuple[Clamp, ...] = ()
    contacts: tuple[Contact, ...] = ()
    zones: tuple[Zone, ...] = ()
    sensors: tuple[Sensor, ...] = ()
    uncertain: Uncertain = field(default_factory=Uncertain)
    reference_degC: float | None = None  # where losses are linearised; mean of the set-points

    def zone(self, name: str) -> Zone:
        return next(zone for zone in self.zones if zone.name == name)

    def sensor(self, name: str) -> Sensor:
        return next(sensor for sensor in self.sensors if sensor.name == name)
