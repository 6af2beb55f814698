"""A plate as described, as one self-contained SVG picture seen as the operator stands."""

from __future__ import annotations

from html import escape

import numpy as np
import shapely

from platewatch.studies.picture_frame import (
    LETTER_PX,
    MARGIN_PX,
    Frame,
    clamps,
    drawing,
    label,
    sensors,
    text_at,
    zones,
)
from platewatch.thermal.grid import Grid
from platewatch.thermal.plate import EdgeKind, Plate, geometry
from platewatch.types import Array

AXIS_PX = 60.0  # room for the numbers along an axis
LINE_PX = 20.0
# Meaning never by colour alone: the edge kinds differ in weight and dashes.
EDGE_LOOK = {
    EdgeKind.INSULATED: 'stroke="#000" stroke-width="1"',
    EdgeKind.CONVECTIVE: 'stroke="#000" stroke-width="3.5"',
    EdgeKind.HELD: 'stroke="#000" stroke-width="8" stroke-dasharray="3 3"',
}
EDGE_WORDS = {
    EdgeKind.INSULATED: "insulated edge",
    EdgeKind.CONVECTIVE: "edge that loses heat to the air",
    EdgeKind.HELD: "edge held at a temperature",
}


def plate_picture(plate: Plate, grid: Grid) -> str:
    """Outline with its edges, holes, insets, zones, contacts, clamps, thermocouples, mm axes.

    grid: of this plate; its rim says which edge lies where.
    """
    frame = Frame(grid.domain.bounds, MARGIN_PX + AXIS_PX, 3 * MARGIN_PX)
    foot = frame.top + frame.height + AXIS_PX
    legend = _legend(plate, grid, frame.left, foot)
    title = f"Plate {plate.name}, as described; lengths in mm"
    notes = [_standpoint(plate), *_names(plate)]
    below = foot + LINE_PX * (len(legend) + 0.5)
    parts = [
        *_patterns(),
        text_at(MARGIN_PX, MARGIN_PX, title),
        f'<path d="{frame.path(grid.domain)}" fill="#f2f2ee" fill-rule="evenodd"/>',
        *_insets(plate, frame),
        *zones(plate, frame, "#00204d"),
        *_contacts(plate, frame),
        *_rim(plate, grid, frame),
        *clamps(plate, frame),
        *sensors(plate, frame),
        *_axes(grid, frame),
        *legend,
        *(text_at(frame.left, below + LINE_PX * n, note) for n, note in enumerate(notes)),
    ]
    longest = max(len(text) for text in (title, *notes, *EDGE_WORDS.values()))
    width = max(frame.left + frame.width + 3 * MARGIN_PX, frame.left + LETTER_PX * longest)
    return drawing(width + MARGIN_PX, below + LINE_PX * len(notes), title, parts)


def _standpoint(plate: Plate) -> str:
    axes = "x to the right, y up, as the operator sees it"
    if not plate.position_note:
        return f"{axes}; position_note in [plate] may say from where."
    return f"{axes}: {plate.position_note}."


def _names(plate: Plate) -> list[str]:
    """Where each zone and thermocouple hangs."""
    hung = [(zone.name, zone.where) for zone in plate.zones]
    hung += [(sensor.name, sensor.where) for sensor in plate.sensors]
    return [f"{name}: {where}" for name, where in hung if where]


def _patterns() -> list[str]:
    return [
        '<pattern id="inset" width="8" height="8" patternUnits="userSpaceOnUse">'
        '<path d="M0 8L8 0" stroke="#888" stroke-width="1"/></pattern>'
    ]


def _insets(plate: Plate, frame: Frame) -> list[str]:
    return [
        f'<path d="{frame.path(geometry(inset.shape))}" fill="url(#inset)" stroke="#888"/>'
        for inset in plate.insets
    ]


def _contacts(plate: Plate, frame: Frame) -> list[str]:
    """Dotted, the name at the lower left: the zones have theirs at the top."""
    parts = []
    for contact in plate.contacts:
        area = geometry(contact.shape)
        parts.append(
            f'<path d="{frame.path(area)}" fill="none" stroke="#000" stroke-width="2" '
            'stroke-dasharray="1 4" stroke-linecap="round"/>'
        )
        left, bottom, _, _ = area.bounds
        x, y = frame.xy(left, bottom)
        parts.append(label(x + 4, y - 5, f"load {contact.name}"))
    return parts


def _kinds(plate: Plate, grid: Grid) -> dict[EdgeKind, Array]:
    """The rim's pieces by kind of edge: each (p, 2, 2), start and end, metres."""
    rim = grid.rim
    described = [edge.kind for edge in plate.edges] + [EdgeKind.INSULATED]  # -1: none
    kind = np.array([described[number] for number in rim.edge])
    return {each: rim.ends_m[kind == each] for each in EdgeKind if (kind == each).any()}


def _rim(plate: Plate, grid: Grid, frame: Frame) -> list[str]:
    """Neighbouring pieces of one kind are joined, so that dashes run through."""
    parts = []
    for kind, ends in _kinds(plate, grid).items():
        pieces = [shapely.LineString(each) for each in ends.round(9)]
        lines = shapely.line_merge(shapely.MultiLineString(pieces))
        for line in shapely.get_parts(lines):
            corners = (frame.xy(float(x), float(y)) for x, y in line.coords)
            d = "M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in corners)
            parts.append(f'<path d="{d}" fill="none" {EDGE_LOOK[kind]}/>')
    return parts


def _axes(grid: Grid, frame: Frame) -> list[str]:
    """Numbers in mm at even steps below and left of the plate."""
    left, bottom, right, top = (1e3 * value for value in grid.domain.bounds)
    step = _step_mm(max(right - left, top - bottom))
    parts = []
    base = frame.top + frame.height
    for mm in _marks(left, right, step):
        x, _ = frame.xy(mm / 1e3, 0.0)
        parts.append(f'<path d="M{x:.1f} {base + 8:.1f}v6" stroke="#000"/>')
        parts.append(text_at(x, base + 29, f"{mm:g}", "middle"))
    for mm in _marks(bottom, top, step):
        _, y = frame.xy(0.0, mm / 1e3)
        parts.append(f'<path d="M{frame.left - 8:.1f} {y:.1f}h-6" stroke="#000"/>')
        parts.append(text_at(frame.left - 18, y + 5, f"{mm:g}", "end"))
    return [
        *parts,
        text_at(frame.left + frame.width + 26, base + 29, "x →"),
        text_at(frame.left - 18, frame.top - 16, "y ↑", "end"),
    ]


def _marks(low: float, high: float, step: float) -> list[float]:
    first, last = int(np.ceil(low / step - 1e-9)), int(np.floor(high / step + 1e-9))
    return [number * step for number in range(first, last + 1)]


def _step_mm(size: float) -> float:
    """1, 2 or 5 times a power of ten, for five to twelve marks."""
    power = 10.0 ** np.floor(np.log10(size / 5))
    return float(power * max(step for step in (1, 2, 5) if step * power <= size / 5))


def _legend(plate: Plate, grid: Grid, x: float, y: float) -> list[str]:
    """One line for each kind of mark that the picture holds."""
    held = _kinds(plate, grid)
    marks = [
        (f'<path d="M0 -5h40" {EDGE_LOOK[kind]}/>', EDGE_WORDS[kind])
        for kind in EdgeKind
        if kind in held
    ]
    if plate.zones:
        look = 'stroke="#00204d" stroke-width="1.5" stroke-dasharray="6 4"'
        marks.append((f'<path d="M0 -5h40" {look}/>', "heater zone"))
    if plate.sensors:
        look = 'cx="20" cy="-5" r="4" fill="#fff" stroke="#000"'
        marks.append((f"<circle {look}/>", "thermocouple or Pt100"))
    if plate.clamps:
        look = 'd="M20 -11l6 11h-12Z" fill="#fff" stroke="#000" stroke-width="1.5"'
        marks.append((f"<path {look}/>", "clamp"))
    if plate.contacts:
        look = 'stroke="#000" stroke-width="2" stroke-dasharray="1 4" stroke-linecap="round"'
        marks.append((f'<path d="M0 -5h40" {look}/>', "place of a load that the plant knows"))
    if plate.insets:
        look = 'x="0" y="-12" width="40" height="14" fill="url(#inset)" stroke="#888"'
        marks.append((f"<rect {look}/>", "inset: other material or thickness"))
    return [
        f'<g transform="translate({x:.1f} {y + LINE_PX * number:.1f})">{mark}'
        f'<text x="52" y="0">{escape(words)}</text></g>'
        for number, (mark, words) in enumerate(marks)
    ]
