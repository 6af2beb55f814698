"""A calculated field as one self-contained SVG picture, seen as the operator stands."""

from __future__ import annotations

import base64
import struct
import zlib

import numpy as np
from numpy.typing import NDArray

from platewatch.studies.picture_frame import (
    LETTER_PX,
    MARGIN_PX,
    Frame,
    clamps,
    drawing,
    sensors,
    text_at,
    zones,
)
from platewatch.studies.whatif import CAUTION, WhatIf
from platewatch.types import Array
from platewatch.units import TemperatureUnit, written

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
BAR_PX = 150.0  # room for the scale


def svg_picture(
    result: WhatIf,
    unit: TemperatureUnit = TemperatureUnit.DEGC,
    lowest: float | None = None,
    highest: float | None = None,
) -> str:
    """Plate, zones, thermocouples, clamps, hottest place, scale with numbers and the caution.

    unit: of the numbers written;  lowest, highest: ends of the scale, degC; else the field's
    """
    low = result.coldest_degC if lowest is None else lowest
    high = max(result.hottest_degC if highest is None else highest, low + 1e-3)
    frame = Frame(result.grid.domain.bounds, MARGIN_PX, 1.5 * MARGIN_PX)
    title, outline = _title(result, unit), frame.path(result.grid.domain)
    notes = [*CAUTION.replace(". ", ".\n", 1).split("\n"), *_standpoint(result)]
    foot = frame.top + frame.height + 1.5 * MARGIN_PX
    parts = [
        text_at(MARGIN_PX, MARGIN_PX - 6, title),
        f'<clipPath id="plate"><path clip-rule="evenodd" d="{outline}"/></clipPath>',
        _field(result, frame, low, high),
        f'<path d="{outline}" fill="none" stroke="#000" stroke-width="2"/>',
        *zones(result.plate, frame, "#fff"),
        *clamps(result.plate, frame),
        *sensors(result.plate, frame),
        _hottest(result, frame),
        *_scale_bar(frame.left + frame.width + MARGIN_PX, frame, low, high, unit),
        *(text_at(MARGIN_PX, foot + 20 * n, note) for n, note in enumerate(notes)),
    ]
    width = max(frame.width + BAR_PX + 2 * MARGIN_PX, LETTER_PX * len(title) + 2 * MARGIN_PX)
    return drawing(width, foot + 20 * len(notes), title, parts)


def _standpoint(result: WhatIf) -> list[str]:
    note = result.plate.position_note
    return [f"Operator's standpoint: {note}."] if note else []


def _title(result: WhatIf, unit: TemperatureUnit) -> str:
    when = "steady" if result.after_s is None else f"after {result.after_s:g} s"
    return (
        f"{result.plate.name}, {when}: hottest {written(result.hottest_degC, unit)} at "
        f"{1e3 * result.hottest_x_m:.0f}, {1e3 * result.hottest_y_m:.0f} mm, "
        f"mean {written(result.mean_degC, unit)} (calculated)"
    )


def _field(result: WhatIf, frame: Frame, low: float, high: float) -> str:
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


def _hottest(result: WhatIf, frame: Frame) -> str:
    x, y = frame.xy(result.hottest_x_m, result.hottest_y_m)
    cross = f"M{x - 9:.1f} {y:.1f}h18M{x:.1f} {y - 9:.1f}v18"
    return (
        f'<path d="{cross}" stroke="#fff" stroke-width="5"/>'
        f'<path d="{cross}" stroke="#000" stroke-width="2"/>'
    )


def _scale_bar(x: float, frame: Frame, low: float, high: float, unit: TemperatureUnit) -> list[str]:
    stops = "".join(
        f'<stop offset="{1 - i / (len(CIVIDIS) - 1):.3f}" stop-color="rgb({r},{g},{b})"/>'
        for i, (r, g, b) in reversed(list(enumerate(CIVIDIS.tolist())))
    )
    parts = [
        f'<linearGradient id="scale" x1="0" y1="0" x2="0" y2="1">{stops}</linearGradient>',
        f'<rect x="{x:.1f}" y="{frame.top:.1f}" width="22" height="{frame.height:.1f}" '
        'fill="url(#scale)" stroke="#000"/>',
    ]
    for part in np.linspace(0, 1, 6):
        y = frame.top + float(1 - part) * frame.height
        parts.append(f'<path d="M{x + 22:.1f} {y:.1f}h6" stroke="#000"/>')
        parts.append(text_at(x + 32, y + 5, written(float(low + part * (high - low)), unit)))
    return parts
