"""From the tables of the file to the dataclasses: millimetres to metres, the
file's unit to degrees Celsius, minutes to seconds."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TypeVar

from platewatch.adapters import settings_schema_plate as plate_tables
from platewatch.adapters import settings_schema_run as run_tables
from platewatch.adapters.settings_schema_sensor import SensorEntry
from platewatch.monitor.limits import AlarmLimit, LimitKind, Priority
from platewatch.monitor.options import CAUSE_NAMES
from platewatch.monitor.recipe import Do, Recipe, Step
from platewatch.thermal.plate import (
    Ambient,
    Circle,
    Clamp,
    Contact,
    Correlation,
    DutyLaw,
    Edge,
    EdgeKind,
    Inset,
    Loop,
    LoopForm,
    Material,
    Polygon,
    Rectangle,
    Role,
    Sensor,
    Shape,
    Side,
    Surface,
    Table,
    Zone,
)
from platewatch.units import TemperatureUnit, difference_to_K, to_degC

A = TypeVar("A")
B = TypeVar("B")

DEFAULT_DEADBAND_K = 2.0
DEFAULT_NOISE_K = 0.2


def metres(mm: float) -> float:
    return mm / 1000.0


def cause_name(word: str) -> str:
    """The catalogue's name: `zone-not-heating` and `loose` are understood, too."""
    name = word.strip().lower().replace("-", " ").replace("_", " ")
    return f"sensor {name}" if f"sensor {name}" in CAUSE_NAMES else name


def shape(entry: plate_tables.ShapeEntry, *, outline: bool = False) -> Shape:
    """A complete shape entry in metres.

    An outline without a place lies in the positive quadrant, touching both axes.
    """
    x, y = entry.x_mm or 0.0, entry.y_mm or 0.0
    if entry.diameter_mm is not None:
        if outline:
            x = entry.diameter_mm / 2 if entry.x_mm is None else entry.x_mm
            y = entry.diameter_mm / 2 if entry.y_mm is None else entry.y_mm
        return Circle(metres(x), metres(y), metres(entry.diameter_mm))
    if entry.points_mm is not None:
        return Polygon(tuple((metres(px), metres(py)) for px, py in entry.points_mm))
    assert entry.width_mm is not None, "a shape without size was reported before"
    assert entry.height_mm is not None, "a shape without size was reported before"
    return Rectangle(metres(x), metres(y), metres(entry.width_mm), metres(entry.height_mm))


@dataclass(frozen=True)
class Converter:
    """Knows the unit of the file and the materials it may name."""

    unit: TemperatureUnit
    built_in: Mapping[str, Material]
    controlling: frozenset[str] = frozenset()  # sensors that a loop names

    def degC(self, value: float) -> float:
        return to_degC(value, self.unit)

    def kelvins(self, difference: float) -> float:
        return difference_to_K(difference, self.unit)

    def ambient(self, value: float | str) -> Ambient:
        return value if isinstance(value, str) else self.degC(value)

    def _ambient(self, value: float | str | None) -> Ambient | None:
        return None if value is None else self.ambient(value)

    def table(self, value: float | plate_tables.Points) -> Table:
        if isinstance(value, float):
            return Table.constant(value)
        degC, values = zip(*value, strict=True)
        return Table(tuple(self.degC(t) for t in degC), tuple(values))

    def material(self, entry: plate_tables.MaterialEntry) -> Material:
        return Material(
            name=entry.name,
            k=self.table(entry.k),
            rho=entry.rho,
            cp=self.table(entry.cp),
            emissivity=entry.emissivity or 0.0,
            source=entry.source,
        )

    def surface(self, entry: plate_tables.FaceEntry) -> Surface:
        return Surface(
            ambient=self.ambient(entry.ambient),
            coefficient=entry.coefficient,
            correlation=_maybe(Correlation, entry.correlation),
            speed_m_s=entry.speed_m_s,
            emissivity=entry.emissivity,
            surroundings=self._ambient(entry.surroundings),
        )

    def edge(self, entry: plate_tables.EdgeEntry) -> Edge:
        return Edge(
            kind=EdgeKind(entry.kind),
            coefficient=entry.coefficient,
            w_per_k_per_m=entry.w_per_k_per_m,
            held=self._ambient(entry.temperature),
            ambient=self._ambient(entry.ambient),
            side=_maybe(Side, entry.side),
            segment=entry.segment,
        )

    def clamp(self, entry: plate_tables.ClampEntry) -> Clamp:
        ambient = self._ambient(entry.ambient)
        return Clamp(metres(entry.x_mm), metres(entry.y_mm), entry.w_per_k, ambient)

    def contact(self, entry: plate_tables.ContactEntry) -> Contact:
        return Contact(entry.name, shape(entry.shape), entry.conductance, entry.heat_capacity)

    def inset(self, entry: plate_tables.InsetEntry, materials: Mapping[str, Material]) -> Inset:
        return Inset(
            shape=shape(entry.shape),
            material=_maybe(materials.__getitem__, entry.material),
            thickness_m=_maybe(metres, entry.thickness_mm),
        )

    def zone(self, entry: plate_tables.ZoneEntry) -> Zone:
        return Zone(
            name=entry.name,
            shapes=tuple(shape(part) for part in entry.shape),
            watts=entry.watts,
            lag_s=entry.lag_s,
            duty_full=100.0 if entry.duty == "0..100" else 1.0,
            duty_law=DutyLaw(entry.duty_law),
            duty_exponent=1.0 if entry.duty_exponent is None else entry.duty_exponent,
            loop=_maybe(_loop, entry.loop),
            where=entry.where,
        )

    def sensor(self, entry: SensorEntry) -> Sensor:
        span = entry.span
        return Sensor(
            name=entry.name,
            x_m=metres(entry.x_mm),
            y_m=metres(entry.y_mm),
            element=entry.element or "K",
            signal=entry.signal,
            span_degC=None if span is None else (self.degC(span[0]), self.degC(span[1])),
            tolerance_class=entry.tolerance_class,
            lag_s=entry.lag_s,
            noise_K=DEFAULT_NOISE_K if entry.noise is None else self.kelvins(entry.noise),
            quantum_K=self.kelvins(entry.quantum),
            cold_junction=self._ambient(entry.cold_junction),
            junction_block=entry.junction_block,
            correction_K=self.kelvins(entry.correction),
            calibrated_on=entry.calibrated_on,
            due_on=entry.due_on,
            certificate=entry.certificate,
            role=self._role(entry),
            where=entry.where,
        )

    def _role(self, entry: SensorEntry) -> Role:
        if entry.role is not None:
            return Role(entry.role)
        return Role.CONTROL if entry.name in self.controlling else Role.MONITOR

    def recipe(self, entry: run_tables.RecipeEntry) -> Recipe:
        return Recipe(entry.name, tuple(self._step(step) for step in entry.steps))

    def _step(self, entry: run_tables.StepEntry) -> Step:
        return Step(
            do=Do(entry.do),
            to_degC=_maybe(self.degC, entry.to),
            rate_K_per_s=_maybe(lambda rate: self.kelvins(rate) / 60.0, entry.rate_per_min),
            duration_s=_maybe(_seconds, entry.minutes),
            within_K=_maybe(self.kelvins, entry.within),
            longest_s=_maybe(_seconds, entry.longest_min),
            spread_limit_K=_maybe(self.kelvins, entry.spread_limit),
        )

    def alarm_limit(self, entry: run_tables.AlarmLimitEntry) -> AlarmLimit:
        kind = LimitKind(entry.kind)
        return AlarmLimit(
            name=entry.name,
            kind=kind,
            value=self._limit_value(kind, entry.value),
            priority=Priority(entry.priority or Priority.LOW),
            deadband=self._deadband(kind, entry.deadband),
            zone=entry.zone,
            sensor=entry.sensor,
            steps=tuple(entry.steps),
            record_only=entry.record_only,
            enabled=entry.enabled,
            cause=entry.cause,
            consequence=entry.consequence,
            response=entry.response,
            time_to_respond_min=entry.time_to_respond_min,
            on_delay_s=entry.on_delay_s,
            off_delay_s=entry.off_delay_s,
        )

    def _limit_value(self, kind: LimitKind, value: float) -> float:
        match kind:
            case LimitKind.READY:
                return value
            case LimitKind.SPREAD:
                return self.kelvins(value)
            case _:
                return self.degC(value)

    def _deadband(self, kind: LimitKind, value: float | None) -> float:
        if kind is LimitKind.READY:
            return value or 0.0
        return DEFAULT_DEADBAND_K if value is None else self.kelvins(value)


def _loop(entry: plate_tables.LoopEntry) -> Loop:
    return Loop(
        sensor=entry.sensor,
        gain_per_K=entry.gain,
        integral_s=entry.integral_s,
        derivative_s=entry.derivative_s,
        form=LoopForm(entry.form),
        low=entry.low,
        high=entry.high,
    )


def _seconds(minutes: float) -> float:
    return minutes * 60.0


def _maybe(convert: Callable[[A], B], value: A | None) -> B | None:
    return None if value is None else convert(value)
