"""A calculated field as one self-contained SVG picture, seen as the operator stands."""

from __future__ import annotations

import base64
import struct
import zlib
from html import escape

import numpy as np
import shapely
from numpy.typing import NDArray

from platewatch.studies.whatif import CAUTION, WhatIf
from platewatch.thermal.plate import Shape, geometry
from platewatch.types import Array

# Cividis (Nunez, Anderton & Renslow 2018), ten even steps, from memory: perceptually even,
# the same to colour-blind readers and in grey.
CIVIDIS = np.array(
    [
        [0x00, 0x20, 0x4D],
        [0x00, 0x33, 0x6F],
        [0x39, 0x48, 0x6B],
        [0x57, 0x5C, 0x6D],
        [0x70, 0x71, 0x73],
        [0x8A, 0x87, 0x79],
        [0xA6, 0x9D, 0x75],
        [0xC4, 0xB5, 0x6C],
        [0xE4, 0xCF, 0x5B],
        [0xFF, 0xEA, 0x46],
    ]
)
WIDTH_PX = 720.0  # of the plate
MARGIN_PX = 24.0
BAR_PX = 150.0  # room for the scale


def svg_picture(result: WhatIf, lowest: float | None = None, highest: float | None = None) -> str:
    """Plate, zones, thermocouples, hottest place, scale with numbers and the caution.

    lowest, highest: ends of the scale, degC; else those of the field.
    """
    low = result.coldest_degC if lowest is None else lowest
    high = max(result.hottest_degC if highest is None else highest, low + 1e-3)
    left, bottom, right, top = result.grid.domain.bounds
    scale = WIDTH_PX / max(right - left, top - bottom)
    frame = _Frame(left, top, scale)
    height = scale * (top - bottom)
    total = (scale * (right - left) + BAR_PX + 2 * MARGIN_PX, height + 5 * MARGIN_PX)
    parts = [
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {total[0]:.0f} {total[1]:.0f}" '
        'font-family="sans-serif" font-size="14" role="img">',
        f"<title>{escape(_title(result))}</title>",
        f'<rect width="{total[0]:.0f}" height="{total[1]:.0f}" fill="#fff"/>',
        f'<text x="{MARGIN_PX}" y="{MARGIN_PX - 6}">{escape(_title(result))}</text>',
        f'<clipPath id="plate"><path clip-rule="evenodd" d="{frame.path(result.grid.domain)}"/>'
        "</clipPath>",
        _field(result, frame, low, high),
        f'<path d="{frame.path(result.grid.domain)}" fill="none" stroke="#000" stroke-width="2"/>',
        *_zones(result, frame),
        *_sensors(result, frame),
        _hottest(result, frame),
        *_scale_bar(scale * (right - left) + 2 * MARGIN_PX, height, low, high),
        *_caution(height + 3 * MARGIN_PX),
        "</svg>",
    ]
    return "\n".join(parts)


class _Frame:
    """From metres on the plate to pixels; y turns round."""

    def __init__(self, left_m: float, top_m: float, scale: float) -> None:
        self.left_m, self.top_m, self.scale = left_m, top_m, scale

    def xy(self, x_m: float, y_m: float) -> tuple[float, float]:
        return (
            MARGIN_PX + self.scale * (x_m - self.left_m),
            1.5 * MARGIN_PX + self.scale * (self.top_m - y_m),
        )

    def path(self, shape: shapely.Polygon) -> str:
        rings = [shape.exterior, *shape.interiors]
        return " ".join(self._ring(np.asarray(ring.coords)) for ring in rings)

    def _ring(self, corners: Array) -> str:
        pixels = [self.xy(float(x), float(y)) for x, y in corners[:-1]]
        return "M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in pixels) + "Z"


def _title(result: WhatIf) -> str:
    when = "steady" if result.after_s is None else f"after {result.after_s:g} s"
    return (
        f"{result.plate.name}, {when}: hottest {result.hottest_degC:.1f} °C at "
        f"{1e3 * result.hottest_x_m:.0f}, {1e3 * result.hottest_y_m:.0f} mm, "
        f"mean {result.mean_degC:.1f} °C (calculated)"
    )


def _field(result: WhatIf, frame: _Frame, low: float, high: float) -> str:
    grid = result.grid
    values = np.full(grid.index.shape, np.nan)
    values[grid.rows, grid.columns] = result.T
    x, y = frame.xy(grid.x0, grid.y0 + grid.ny * grid.hy)
    image = base64.b64encode(_png(_colours(values[::-1], low, high))).decode()
    return (
        f'<image clip-path="url(#plate)" x="{x:.1f}" y="{y:.1f}" '
        f'width="{frame.scale * grid.nx * grid.hx:.1f}" '
        f'height="{frame.scale * grid.ny * grid.hy:.1f}" preserveAspectRatio="none" '
        f'style="image-rendering:pixelated" href="data:image/png;base64,{image}"/>'
    )


def _colours(values: Array, low: float, high: float) -> NDArray[np.uint8]:
    """(rows, columns, 4) RGBA; clear where there is no plate."""
    place = np.clip((np.nan_to_num(values, nan=low) - low) / (high - low), 0, 1)
    steps = np.linspace(0, 1, len(CIVIDIS))
    rgb = [np.interp(place, steps, CIVIDIS[:, channel]) for channel in range(3)]
    alpha = np.where(np.isnan(values), 0, 255)
    return np.stack((*rgb, alpha), axis=-1).round().astype(np.uint8)


def _png(rgba: NDArray[np.uint8]) -> bytes:
    """Portable Network Graphics, ISO/IEC 15948: header, one deflated block, end."""
    height, width = rgba.shape[:2]
    rows = b"".join(b"\0" + row.tobytes() for row in rgba)
    header = struct.pack(">IIBBBBB", width, height, 8, 6, 0, 0, 0)
    chunks = (b"IHDR", header), (b"IDAT", zlib.compress(rows, 9)), (b"IEND", b"")
    return b"\x89PNG\r\n\x1a\n" + b"".join(
        struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))
        for kind, data in chunks
    )


def _zones(result: WhatIf, frame: _Frame) -> list[str]:
    parts = []
    for zone in result.plate.zones:
        for shape in zone.shapes:
            parts.append(
                f'<path d="{_outline(frame, shape)}" fill="none" stroke="#fff" '
                'stroke-width="1.5" stroke-dasharray="6 4"/>'
            )
        left, _, _, top = geometry(zone.shapes[0]).bounds
        parts.append(_label(*frame.xy(left, top), zone.name, 4, 16))
    return parts


def _outline(frame: _Frame, shape: Shape) -> str:
    return frame.path(geometry(shape))


def _sensors(result: WhatIf, frame: _Frame) -> list[str]:
    parts = []
    for sensor in result.plate.sensors:
        x, y = frame.xy(sensor.x_m, sensor.y_m)
        parts.append(f'<circle cx="{x:.1f}" cy="{y:.1f}" r="4" fill="#fff" stroke="#000"/>')
        parts.append(_label(x, y, sensor.name, 7, 5))
    return parts


def _hottest(result: WhatIf, frame: _Frame) -> str:
    x, y = frame.xy(result.hottest_x_m, result.hottest_y_m)
    cross = f"M{x - 9:.1f} {y:.1f}h18M{x:.1f} {y - 9:.1f}v18"
    return (
        f'<path d="{cross}" stroke="#fff" stroke-width="5"/>'
        f'<path d="{cross}" stroke="#000" stroke-width="2"/>'
    )


def _label(x: float, y: float, text: str, right: float, down: float) -> str:
    """Black on a white rim: legible on every colour of the scale."""
    return (
        f'<text x="{x + right:.1f}" y="{y + down:.1f}" stroke="#fff" stroke-width="3" '
        f'paint-order="stroke" fill="#000">{escape(text)}</text>'
    )


def _scale_bar(x: float, height: float, low: float, high: float) -> list[str]:
    top = 1.5 * MARGIN_PX
    stops = "".join(
        f'<stop offset="{1 - i / (len(CIVIDIS) - 1):.3f}" stop-color="rgb({r},{g},{b})"/>'
        for i, (r, g, b) in reversed(list(enumerate(CIVIDIS.tolist())))
    )
    parts = [
        f'<linearGradient id="scale" x1="0" y1="0" x2="0" y2="1">{stops}</linearGradient>',
        f'<rect x="{x:.1f}" y="{top:.1f}" width="22" height="{height:.1f}" '
        'fill="url(#scale)" stroke="#000"/>',
    ]
    for part in np.linspace(0, 1, 6):
        y = top + (1 - part) * height
        parts.append(f'<path d="M{x + 22:.1f} {y:.1f}h6" stroke="#000"/>')
        parts.append(
            f'<text x="{x + 32:.1f}" y="{y + 5:.1f}">{low + part * (high - low):.1f} °C</text>'
        )
    return parts


def _caution(y: float) -> list[str]:
    """In two lines, so that a narrow plate shows all of it."""
    first, second = CAUTION.split(". ", 1)
    return [
        f'<text x="{MARGIN_PX}" y="{y:.1f}">{escape(first)}.</text>',
        f'<text x="{MARGIN_PX}" y="{y + 20:.1f}">{escape(second)}</text>',
    ]
