"""The tables that describe the plate itself, as they stand in the file."""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from typing import Annotated, Any

from pydantic import BeforeValidator, Field, PlainValidator

from platewatch.adapters.settings_schema import (
    Entry,
    Mistake,
    OneOf,
    SurroundChannel,
    TopicName,
    Within,
    a_number,
)
from platewatch.thermal.plate import Correlation, DutyLaw, EdgeKind, LoopForm, Side
from platewatch.units import TemperatureUnit

Points = list[tuple[float, float]]

_SHAPE_KEYS = {
    "rectangle": ("width_mm", "height_mm"),
    "circle": ("diameter_mm",),
    "polygon": ("points_mm",),
}
_PLACE_KEYS = ("x_mm", "y_mm")
_FAR_MM = 1e5


def _pairs(value: Any, what: str, least: int) -> Points:
    if not isinstance(value, list) or len(value) < least:
        raise ValueError(f"expects at least {least} {what} pairs; write [[{what}], ...]")
    for number, pair in enumerate(value, start=1):
        if not isinstance(pair, list) or len(pair) != 2:
            raise ValueError(f"entry {number} is not a pair; write [{what}]")
    return [(a_number(first), a_number(second)) for first, second in value]


def _property(value: Any) -> float | Points:
    return _pairs(value, "temperature, value", 2) if isinstance(value, list) else a_number(value)


def _ambient(value: Any) -> float | str:
    return value if isinstance(value, str) else a_number(value)


Property = Annotated[float | Points, PlainValidator(_property)]
Place = Annotated[float | None, Within(-_FAR_MM, _FAR_MM, "give it in millimetres")]
Size = Annotated[float | None, Within(0, 2e4, "give a positive length in millimetres", above=True)]
AmbientValue = Annotated[float | str, PlainValidator(_ambient), SurroundChannel()]
AmbientOption = Annotated[float | str | None, PlainValidator(_ambient), SurroundChannel()]
_THICKNESS = Within(
    0, 500, "give the thickness in millimetres, above 0 and at most 500", above=True
)
Emissivity = Annotated[
    float | None, Within(0, 1, "an emissivity lies between 0 and 1 (0.1 bright, 0.9 painted)")
]
Coefficient = Annotated[
    float | None, Within(0, 1e5, "give W/m2K, at least 0; leave no loss out as 0")
]


class ShapeEntry(Entry):
    shape: Annotated[str, OneOf(tuple(_SHAPE_KEYS))]
    x_mm: Place = None
    y_mm: Place = None
    width_mm: Size = None
    height_mm: Size = None
    diameter_mm: Size = None
    points_mm: Annotated[Points | None, PlainValidator(lambda value: _pairs(value, "x, y", 3))] = (
        None
    )

    @property
    def complete(self) -> bool:
        needed = _SHAPE_KEYS.get(self.shape, ("shape",))
        sizes = [getattr(self, key) for key in needed if key != "points_mm"]
        known = all(getattr(self, key) is not None for key in needed)
        if self.shape not in _SHAPE_KEYS or not known:
            return False
        corners = [value for corner in self.points_mm or () for value in corner]
        places = (self.x_mm or 0.0, self.y_mm or 0.0, *corners)
        return all(0 < size < _FAR_MM for size in sizes) and all(
            abs(place) < _FAR_MM for place in places
        )

    def mistakes(self) -> Iterator[Mistake]:
        if self.shape not in _SHAPE_KEYS:
            return
        needed = _SHAPE_KEYS[self.shape]
        for key in needed:
            if getattr(self, key) is None:
                yield Mistake((key,), f"is missing for a {self.shape}", f"add {key} = ...")
        allowed = (*needed, *(() if self.shape == "polygon" else _PLACE_KEYS), "shape")
        for key in sorted(self.model_fields_set - set(allowed)):
            yield Mistake(
                (key,), f"says nothing about a {self.shape}", f"use {', '.join(allowed[:-1])}"
            )
        for number, corner in enumerate(self.points_mm or ()):
            before = (self.points_mm or ())[number - 1]
            if max(abs(corner[0]), abs(corner[1])) >= _FAR_MM:
                yield Mistake(
                    ("points_mm", number), f"corner {number + 1} is far away", "give millimetres"
                )
            if corner == before:
                yield Mistake(
                    ("points_mm", number),
                    f"corner {number + 1} repeats the corner before it (the last closes by itself)",
                    "leave it out",
                )


def _as_list(value: Any) -> Any:
    return [value] if isinstance(value, dict) else value


Shapes = Annotated[list[ShapeEntry], BeforeValidator(_as_list)]


class PlateEntry(Entry):
    name: Annotated[str, TopicName()]
    unit: Annotated[str, OneOf(tuple(TemperatureUnit))] = "degC"
    outline: ShapeEntry
    holes: list[ShapeEntry] = Field(default_factory=list)
    thickness_mm: Annotated[float, _THICKNESS]
    material: str
    cell_mm: Size = None
    working_margin_mm: Annotated[
        float, Within(0, 1e4, "give the rim left out of uniformity figures, in mm, 0 or more")
    ] = 0.0
    position_note: str = ""


class MaterialEntry(Entry):
    name: str
    k: Property
    rho: Annotated[float, Within(1, 25_000, "give the density in kg/m3 (steel 7850)")]
    cp: Property
    emissivity: Emissivity = None
    source: str = ""

    def mistakes(self) -> Iterator[Mistake]:
        yield from _property_mistakes("k", self.k, 0.005, 3000, "W/mK (mild steel about 48)")
        yield from _property_mistakes("cp", self.cp, 50, 10_000, "J/kgK (mild steel about 490)")


def _property_mistakes(
    key: str, value: float | Points, low: float, high: float, unit: str
) -> Iterator[Mistake]:
    values = [value] if isinstance(value, float) else [second for _, second in value]
    for number in values:
        if not low <= number <= high:
            reason = f"{number:g} is not plausible, expected {low:g} to {high:g}"
            yield Mistake((key,), reason, f"give {unit}")
    if isinstance(value, list):
        at = [first for first, _ in value]
        for before, after in itertools.pairwise(at):
            if after <= before:
                reason = f"the table's temperatures do not increase ({before:g}, then {after:g})"
                yield Mistake((key,), reason, "sort the pairs by temperature, each once")


class FaceEntry(Entry):
    ambient: AmbientValue
    coefficient: Coefficient = None
    correlation: Annotated[str | None, OneOf(tuple(Correlation))] = None
    speed_m_s: Annotated[
        float | None, Within(0, 100, "give the air speed in m/s, above 0", above=True)
    ] = None
    emissivity: Emissivity = None
    surroundings: AmbientOption = None

    def mistakes(self) -> Iterator[Mistake]:
        if self.coefficient is None and self.correlation is None:
            yield Mistake(
                (),
                "says neither coefficient nor correlation",
                'give coefficient = ... (W/m2K, the whole loss) or correlation = "natural-up"',
            )
        if self.coefficient is not None and self.correlation is not None:
            yield Mistake(
                ("coefficient",),
                "stands beside a correlation",
                "keep one: a coefficient is the whole loss, a correlation convection only",
            )
        if self.correlation == Correlation.FORCED and self.speed_m_s is None:
            yield Mistake(
                ("speed_m_s",), "is missing for forced convection", "add the air speed in m/s"
            )
        if self.correlation != Correlation.FORCED and self.speed_m_s is not None:
            yield Mistake(
                ("speed_m_s",),
                "has no meaning without forced convection",
                'write correlation = "forced" or leave it out',
            )
        if self.correlation is None and self.surroundings is not None:
            yield Mistake(
                ("surroundings",),
                "has no meaning beside a coefficient, which is the whole loss",
                "use a correlation, or leave it out",
            )


class SurfaceEntry(Entry):
    top: FaceEntry
    bottom: FaceEntry


class EdgeEntry(Entry):
    kind: Annotated[str, OneOf(tuple(EdgeKind))]
    coefficient: Coefficient = None
    w_per_k_per_m: Annotated[float | None, Within(0, 1e4, "give W/K per metre of rim")] = None
    temperature: AmbientOption = None
    ambient: AmbientOption = None
    side: Annotated[str | None, OneOf(tuple(Side))] = None
    segment: int | None = None

    def mistakes(self) -> Iterator[Mistake]:
        losses = [k for k in ("coefficient", "w_per_k_per_m") if getattr(self, k) is not None]
        if self.kind == EdgeKind.CONVECTIVE and len(losses) != 1:
            yield Mistake(
                tuple(losses[:1]),
                "a convective edge needs one of coefficient and w_per_k_per_m",
                "give W/m2K over thickness x length, or W/K per metre, not both",
            )
        if self.kind == EdgeKind.HELD and self.temperature is None:
            yield Mistake(
                ("temperature",),
                "is missing for a held edge",
                'add temperature = a number or a channel such as "surround/frame"',
            )
        allowed = {
            EdgeKind.INSULATED: (),
            EdgeKind.CONVECTIVE: ("coefficient", "w_per_k_per_m", "ambient"),
            EdgeKind.HELD: ("temperature",),
        }
        if self.kind in allowed:
            for key in ("coefficient", "w_per_k_per_m", "temperature", "ambient"):
                if getattr(self, key) is not None and key not in allowed[EdgeKind(self.kind)]:
                    yield Mistake((key,), f"says nothing about a {self.kind} edge", "leave it out")
        if self.side is not None and self.segment is not None:
            yield Mistake(("segment",), "stands beside side", "name one part of the rim, not two")


class ClampEntry(Entry):
    x_mm: float
    y_mm: float
    w_per_k: Annotated[float, Within(0, 1000, "give the clamp's conductance in W/K, 0 or more")]
    ambient: AmbientOption = None


class ContactEntry(Entry):
    name: Annotated[str, TopicName()]
    shape: ShapeEntry
    conductance: Annotated[
        float, Within(0, 1e5, "give the contact conductance in W/m2K (dry 200 to 1000)", above=True)
    ]
    heat_capacity: Annotated[
        float, Within(0, 1e8, "give mass times specific heat, J/K, above 0", above=True)
    ]


class LayerEntry(Entry):
    material: str
    thickness_mm: Annotated[float, _THICKNESS]


class InsetEntry(Entry):
    shape: ShapeEntry
    material: str | None = None
    thickness_mm: Annotated[float | None, _THICKNESS] = None

    def mistakes(self) -> Iterator[Mistake]:
        if self.material is None and self.thickness_mm is None:
            yield Mistake((), "changes nothing", "give material or thickness_mm, or both")


class LoopEntry(Entry):
    sensor: str
    gain: Annotated[
        float, Within(0, 10, "give the gain as duty (0..1) per kelvin, above 0", above=True)
    ]
    integral_s: Annotated[
        float | None, Within(0, 1e6, "give the integral time in s, or leave it out", above=True)
    ] = None
    derivative_s: Annotated[float, Within(0, 1e5, "give the derivative time in s, 0 or more")] = 0.0
    form: Annotated[str, OneOf(tuple(LoopForm))] = "ideal"
    low: Annotated[float, Within(0, 1, "output limits are duties, 0..1")] = 0.0
    high: Annotated[float, Within(0, 1, "output limits are duties, 0..1")] = 1.0

    def mistakes(self) -> Iterator[Mistake]:
        if self.low >= self.high:
            yield Mistake(
                ("low",),
                f"the lower output limit {self.low:g} is not below the upper {self.high:g}",
                "give 0 <= low < high <= 1",
            )


class ZoneEntry(Entry):
    name: Annotated[str, TopicName()]
    shape: Shapes
    watts: Annotated[
        float, Within(0, 1e6, "give the zone's rated power in watts, above 0", above=True)
    ]
    lag_s: Annotated[float, Within(0, 7200, "give the heater's lag in s, 0 or more")] = 0.0
    duty: Annotated[str | None, OneOf(("0..1", "0..100"))] = None
    duty_law: Annotated[str, OneOf(tuple(DutyLaw))] = "linear"
    duty_exponent: Annotated[
        float | None, Within(0, 10, "give the n of power = duty^n, above 0", above=True)
    ] = None
    loop: LoopEntry | None = None
    where: str = ""

    def mistakes(self) -> Iterator[Mistake]:
        if not self.shape:
            yield Mistake(("shape",), "the zone covers nothing", "give at least one shape")
        if self.duty is None:
            yield Mistake(
                ("duty",),
                "is missing: the scale of the duty is asked, never guessed",
                'add duty = "0..1" or duty = "0..100", as the controller sends it',
            )
        if (self.duty_law == DutyLaw.POWER) != (self.duty_exponent is not None):
            yield Mistake(
                ("duty_exponent",),
                'belongs to duty_law "power" and only to it',
                'write duty_law = "power" and duty_exponent = n together',
            )


class UncertainEntry(Entry):
    k: Annotated[float, Within(0, 1, "give a relative standard deviation, 0..1")] = 0.05
    cp: Annotated[float, Within(0, 1, "give a relative standard deviation, 0..1")] = 0.02
    losses: Annotated[float, Within(0, 1, "give a relative standard deviation, 0..1")] = 0.15
    power: Annotated[float, Within(0, 1, "give a relative standard deviation, 0..1")] = 0.05
    emissivity: Annotated[float, Within(0, 1, "give a relative standard deviation, 0..1")] = 0.15
