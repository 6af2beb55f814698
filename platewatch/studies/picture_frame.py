"""What every picture of a plate shares: pixels from metres, labels, the plate's parts."""

from __future__ import annotations

from html import escape

import numpy as np
import shapely

from platewatch.thermal.plate import Plate, geometry
from platewatch.types import Array

WIDTH_PX = 720.0  # of the longer side of the plate
MARGIN_PX = 24.0
LETTER_PX = 7.2  # of a letter of 14 px, on average


class Frame:
    """From metres on the plate to pixels, the drawing's origin top left; y turns round."""

    def __init__(self, bounds: tuple[float, float, float, float], left: float, top: float) -> None:
        self.left_m, bottom_m, right_m, self.top_m = bounds
        self.left, self.top = left, top
        self.scale = WIDTH_PX / max(right_m - self.left_m, self.top_m - bottom_m)
        self.width = self.scale * (right_m - self.left_m)
        self.height = self.scale * (self.top_m - bottom_m)

    def xy(self, x_m: float, y_m: float) -> tuple[float, float]:
        return (
            self.left + self.scale * (x_m - self.left_m),
            self.top + self.scale * (self.top_m - y_m),
        )

    def path(self, shape: shapely.Polygon) -> str:
        rings = [shape.exterior, *shape.interiors]
        return " ".join(self._ring(np.asarray(ring.coords)) for ring in rings)

    def _ring(self, corners: Array) -> str:
        pixels = [self.xy(float(x), float(y)) for x, y in corners[:-1]]
        return "M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in pixels) + "Z"


def drawing(width: float, height: float, title: str, parts: list[str]) -> str:
    """One self-contained SVG on white."""
    return "\n".join(
        (
            f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width:.0f} {height:.0f}" '
            'font-family="sans-serif" font-size="14" role="img">',
            f"<title>{escape(title)}</title>",
            f'<rect width="{width:.0f}" height="{height:.0f}" fill="#fff"/>',
            *parts,
            "</svg>",
        )
    )


def text_at(x: float, y: float, text: str, anchor: str = "start") -> str:
    return f'<text x="{x:.1f}" y="{y:.1f}" text-anchor="{anchor}">{escape(text)}</text>'


def label(x: float, y: float, text: str) -> str:
    """Black on a white rim: legible on every colour of the scale."""
    return (
        f'<text x="{x:.1f}" y="{y:.1f}" stroke="#fff" stroke-width="3" '
        f'paint-order="stroke" fill="#000">{escape(text)}</text>'
    )


def zones(plate: Plate, frame: Frame, colour: str) -> list[str]:
    """Dashed outlines, the zone's name at the upper left in each of its shapes."""
    parts = []
    for zone in plate.zones:
        for shape in zone.shapes:
            parts.append(
                f'<path d="{frame.path(geometry(shape))}" fill="none" stroke="{colour}" '
                'stroke-width="1.5" stroke-dasharray="6 4"/>'
            )
            x, y = frame.xy(*_upper_left(geometry(shape), 16 / frame.scale))
            parts.append(label(x + 4, y, zone.name))
    return parts


def _upper_left(area: shapely.Polygon, below_m: float) -> tuple[float, float]:
    """Left end of the widest chord `below_m` under the top, so that a name stays inside."""
    left, bottom, right, top = area.bounds
    y = max(top - below_m, (top + bottom) / 2)
    chords = shapely.get_parts(area.intersection(shapely.LineString([(left, y), (right, y)])))
    widest = max(chords, key=lambda chord: float(chord.length))
    return float(widest.bounds[0]), y


def sensors(plate: Plate, frame: Frame) -> list[str]:
    """A small circle where each thermocouple sits, its name beside it."""
    parts = []
    for sensor in plate.sensors:
        x, y = frame.xy(sensor.x_m, sensor.y_m)
        parts.append(f'<circle cx="{x:.1f}" cy="{y:.1f}" r="4" fill="#fff" stroke="#000"/>')
        parts.append(label(x + 7, y + 5, sensor.name))
    return parts


def clamps(plate: Plate, frame: Frame) -> list[str]:
    """A triangle at each clamp."""
    parts = []
    for clamp in plate.clamps:
        x, y = frame.xy(clamp.x_m, clamp.y_m)
        parts.append(
            f'<path d="M{x:.1f} {y - 6:.1f}l6 11h-12Z" fill="#fff" stroke="#000" '
            'stroke-width="1.5"/>'
        )
    return parts
