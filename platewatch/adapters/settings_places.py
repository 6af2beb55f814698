"""What must fit together on the plate: outline, holes, zones, sensors, clamps, rim."""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import dataclass

from platewatch.adapters import settings_schema_plate as tables
from platewatch.adapters.settings_convert import metres, shape
from platewatch.adapters.settings_draft import Draft
from platewatch.adapters.settings_lines import Where
from platewatch.adapters.settings_schema import Mistake
from platewatch.adapters.settings_schema_sensor import SensorEntry
from platewatch.thermal.plate import Area, Rectangle, geometry

TOUCH_M = 1e-6  # closer than this counts as touching, not as crossing
CLAMP_REACH_M = 1e-3
SLIVER = 1e-3  # share of a shape that may lie outside or overlap: rounding, never a design
MOST_CELLS = 200_000
FEWEST_ACROSS = 10
MOST_W_PER_M2 = 1e6


def mistakes(read: Draft) -> Iterator[Mistake]:
    """Everything that lies where it cannot lie."""
    yield from _single_shapes(read)
    plate = read.one(tables.PlateEntry)
    if plate is None or not plate.outline.complete:
        return
    outline = geometry(shape(plate.outline, outline=True))
    if not outline.is_valid:
        return
    yield from _holes(plate, outline)
    ground = Ground(plate, outline, _valid(plate.holes))
    yield from _sizes(ground)
    yield from _zones(read, ground)
    yield from _sensors(read, ground)
    yield from _swapped_controls(read, ground)
    yield from _clamps(read, ground)
    yield from _loads_and_insets(read, ground)
    yield from _edges(read, plate.outline)


@dataclass(frozen=True)
class Ground:
    """Where things may stand."""

    plate: tables.PlateEntry
    outline: Area
    holes: tuple[Area, ...]

    @property
    def size_mm(self) -> tuple[float, float]:
        x_min, y_min, x_max, y_max = self.outline.bounds
        return 1000 * (x_max - x_min), 1000 * (y_max - y_min)

    def carries(self, x_mm: float, y_mm: float) -> bool:
        """On the plate, rim included, and in no hole."""
        place = _spot(x_mm, y_mm)
        on = self.outline.buffer(TOUCH_M).covers(place)
        return on and not any(hole.contains(place) for hole in self.holes)


def _spot(x_mm: float, y_mm: float) -> Area:
    """A tiny square around a point."""
    r = TOUCH_M / 10
    return geometry(Rectangle(metres(x_mm) - r, metres(y_mm) - r, 2 * r, 2 * r))


def _valid(entries: list[tables.ShapeEntry]) -> tuple[Area, ...]:
    found = (geometry(shape(entry)) for entry in entries if entry.complete)
    return tuple(polygon for polygon in found if polygon.is_valid)


def _single_shapes(read: Draft) -> Iterator[Mistake]:
    for where, entry in _shapes(read):
        if where[-1] != "outline" and entry.shape in ("rectangle", "circle"):
            for key in ("x_mm", "y_mm"):
                if getattr(entry, key) is None:
                    yield Mistake((*where, key), "is missing", f"add {key} = ... in millimetres")
        if entry.complete and not geometry(shape(entry)).is_valid:
            yield Mistake(
                where,
                "the polygon crosses or touches itself",
                "list its corners in order around the area",
            )


def _shapes(read: Draft) -> Iterator[tuple[Where, tables.ShapeEntry]]:
    for where, plate in read.of(tables.PlateEntry):
        yield (*where, "outline"), plate.outline
        yield from (((*where, "holes", n), hole) for n, hole in enumerate(plate.holes))
    for where, zone in read.of(tables.ZoneEntry):
        yield from (((*where, "shape", n), part) for n, part in enumerate(zone.shape))
    for where, inset in read.of(tables.InsetEntry):
        yield (*where, "shape"), inset.shape
    for where, contact in read.of(tables.ContactEntry):
        yield (*where, "shape"), contact.shape


def _holes(plate: tables.PlateEntry, outline: Area) -> Iterator[Mistake]:
    inside = outline.buffer(-TOUCH_M)
    earlier: list[Area] = []
    for number, entry in enumerate(plate.holes):
        where: Where = ("plate", "holes", number)
        for hole in _valid([entry]):
            if not outline.intersects(hole):
                yield Mistake(where, "the hole lies outside the outline", "correct its place")
            elif not inside.covers(hole):
                yield Mistake(
                    where,
                    "the hole crosses the rim of the plate",
                    "move it inwards, or describe a notch by a polygon outline",
                )
            if any(hole.intersects(other) for other in earlier):
                yield Mistake(where, "two holes touch", "describe them as one polygon")
            earlier.append(hole)


def _sizes(ground: Ground) -> Iterator[Mistake]:
    plate, smaller = ground.plate, min(ground.size_mm)
    if plate.thickness_mm > smaller / 2:
        yield Mistake(
            ("plate", "thickness_mm"),
            f"{plate.thickness_mm:g} is no thin plate beside {smaller:g} mm of width",
            "give the thickness in millimetres",
        )
    margin = plate.working_margin_mm
    if margin > 0 and ground.outline.buffer(-metres(margin)).is_empty:
        yield Mistake(
            ("plate", "working_margin_mm"),
            f"a rim of {margin:g} mm leaves nothing of the plate",
            f"give less than half the smaller side, {smaller / 2:g} mm",
        )
    if plate.cell_mm is not None and 0 < plate.cell_mm < 1e5:
        yield from _cells(ground, plate.cell_mm)


def _cells(ground: Ground, cell_mm: float) -> Iterator[Mistake]:
    count = ground.outline.area / metres(cell_mm) ** 2
    if count > MOST_CELLS:
        yield Mistake(
            ("plate", "cell_mm"),
            f"cells of {cell_mm:g} mm make {count:,.0f} of them, more than {MOST_CELLS:,}",
            "give a larger cell, or leave it out",
        )
    if min(ground.size_mm) / cell_mm < FEWEST_ACROSS - 1e-9:
        yield Mistake(
            ("plate", "cell_mm"),
            f"cells of {cell_mm:g} mm leave fewer than {FEWEST_ACROSS} across the plate",
            f"give at most {min(ground.size_mm) / FEWEST_ACROSS:g}, or leave it out",
        )


def _zones(read: Draft, ground: Ground) -> Iterator[Mistake]:
    parts: list[tuple[Where, str, Area]] = []
    for where, zone in read.of(tables.ZoneEntry):
        area = 0.0
        for number, entry in enumerate(zone.shape):
            for part in _valid([entry]):
                here = (*where, "shape", number)
                yield from _beyond(here, f"zone {zone.name}", part, ground)
                parts.append((here, zone.name, part))
                area += part.area
        if area > 0 and zone.watts / area > MOST_W_PER_M2:
            yield Mistake(
                (*where, "watts"),
                f"{zone.watts:g} W on {1e4 * area:.3g} cm2 is more than any heater gives",
                "correct the watts or the shape",
            )
    for (_, name, one), (here, other_name, other) in itertools.combinations(parts, 2):
        if one.intersection(other).area > SLIVER * min(one.area, other.area):
            yield Mistake(
                here,
                f"zone {other_name} overlaps zone {name}",
                "correct the shapes so that no place belongs to two",
            )


def _beyond(where: Where, what: str, part: Area, ground: Ground) -> Iterator[Mistake]:
    outside = part.difference(ground.outline).area / part.area
    if outside > SLIVER:
        yield Mistake(
            where,
            f"{what} lies outside the outline with {100 * outside:.2g} % of its area",
            f"correct the shape; the outline is {_extent(ground)}",
        )
    lost = sum(part.intersection(hole).area for hole in ground.holes) / part.area
    if lost > 0.5:
        yield Mistake(where, f"{what} lies in a hole for the greater part", "correct the shape")


def _extent(ground: Ground) -> str:
    x_min, y_min, x_max, y_max = (round(1000 * bound, 6) for bound in ground.outline.bounds)
    return f"x {x_min:g}..{x_max:g}, y {y_min:g}..{y_max:g}"


def _sensors(read: Draft, ground: Ground) -> Iterator[Mistake]:
    sensors = read.of(SensorEntry)
    for where, sensor in sensors:
        yield from _misplaced(where, f"sensor {sensor.name}", sensor.x_mm, sensor.y_mm, ground)
    for (_, one), (where, other) in itertools.combinations(sensors, 2):
        if abs(one.x_mm - other.x_mm) < 1 and abs(one.y_mm - other.y_mm) < 1:
            yield Mistake(
                (*where, "x_mm"),
                f"sensors {one.name} and {other.name} stand at the same place",
                "correct one of them; two beads in one bore are at least 1 mm apart",
            )


def _misplaced(
    where: Where, what: str, x_mm: float, y_mm: float, ground: Ground
) -> Iterator[Mistake]:
    if ground.carries(x_mm, y_mm):
        return
    place = _spot(x_mm, y_mm)
    for number, hole in enumerate(ground.holes, start=1):
        if hole.contains(place):
            yield Mistake(
                (*where, "x_mm"),
                f"{what} at ({x_mm:g}, {y_mm:g}) lies in hole {number}",
                "correct its place or the hole",
            )
            return
    remedy = f"move the {what.split()[0]} or correct the outline"
    if ground.carries(y_mm, x_mm):
        remedy = "x and y look swapped: exchange them"
    x_min, y_min, x_max, y_max = (round(1000 * bound, 6) for bound in ground.outline.bounds)
    within = True
    for key, value, low, high in (("x_mm", x_mm, x_min, x_max), ("y_mm", y_mm, y_min, y_max)):
        if not low <= value <= high:
            within = False
            reason = f"{value:g} lies outside the outline ({low:g}..{high:g})"
            yield Mistake((*where, key), reason, remedy)
    if within:
        reason = f"{what} at ({x_mm:g}, {y_mm:g}) lies outside the outline"
        yield Mistake((*where, "x_mm"), reason, remedy)


def _swapped_controls(read: Draft, ground: Ground) -> Iterator[Mistake]:
    """A control sensor that would lie in its own zone with x and y exchanged, and
    lies in another zone as it stands."""
    zones = {zone.name: zone for _, zone in read.of(tables.ZoneEntry)}
    areas = {name: _valid(zone.shape) for name, zone in zones.items()}
    for where, sensor in read.of(SensorEntry):
        own = [
            z.name for z in zones.values() if z.loop is not None and z.loop.sensor == sensor.name
        ]
        inside = _zones_at(areas, sensor.x_mm, sensor.y_mm)
        exchanged = _zones_at(areas, sensor.y_mm, sensor.x_mm)
        if own and inside and not inside & set(own) and exchanged & set(own):
            yield Mistake(
                (*where, "x_mm"),
                f"sensor {sensor.name} controls zone {own[0]} but lies in {min(inside)}",
                "x and y look swapped: exchange them",
            )


def _zones_at(areas: dict[str, tuple[Area, ...]], x_mm: float, y_mm: float) -> set[str]:
    place = _spot(x_mm, y_mm)
    return {name for name, parts in areas.items() if any(p.covers(place) for p in parts)}


def _clamps(read: Draft, ground: Ground) -> Iterator[Mistake]:
    for where, clamp in read.of(tables.ClampEntry):
        if ground.outline.distance(_spot(clamp.x_mm, clamp.y_mm)) > CLAMP_REACH_M:
            yield from _misplaced(where, "clamp", clamp.x_mm, clamp.y_mm, ground)


def _loads_and_insets(read: Draft, ground: Ground) -> Iterator[Mistake]:
    for where, contact in read.of(tables.ContactEntry):
        for part in _valid([contact.shape]):
            if part.intersection(ground.outline).area <= SLIVER * part.area:
                yield Mistake(
                    (*where, "shape"),
                    f"load {contact.name} lies outside the outline",
                    f"correct its place; the outline is {_extent(ground)}",
                )
    for where, inset in read.of(tables.InsetEntry):
        for part in _valid([inset.shape]):
            yield from _beyond((*where, "shape"), "the inset", part, ground)


def _edges(read: Draft, outline: tables.ShapeEntry) -> Iterator[Mistake]:
    for where, edge in read.of(tables.EdgeEntry):
        corners = len(outline.points_mm or ())
        if edge.segment is not None and not corners:
            yield Mistake(
                (*where, "segment"),
                f"a {outline.shape} has no numbered segments",
                'write side = "x-min" ... for a rectangle, or leave it out',
            )
        elif edge.segment is not None and not 1 <= edge.segment <= corners:
            yield Mistake(
                (*where, "segment"),
                f"there is no segment {edge.segment}",
                f"give 1 to {corners}; segment N runs from corner N to the next",
            )
        if edge.side is not None and outline.shape == "circle":
            yield Mistake((*where, "side"), "a circle has no sides", "leave it out: the whole rim")
