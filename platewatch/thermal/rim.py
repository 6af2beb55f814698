"""The rim of a plate in pieces, each inside one cell and with its described edge."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely
from numpy.typing import NDArray

from platewatch.errors import PlateError
from platewatch.thermal.plate import Edge, Plate, Polygon, Side
from platewatch.types import Array

Ints = NDArray[np.int64]
Frame = tuple[float, float, float, float]  # x0, y0, hx, hy
NUDGE = 1e-5  # of a cell: a rim piece on a grid line belongs to the cell inside


@dataclass(frozen=True, eq=False)
class Rim:
    """Pieces of outline and holes, each inside one cell.

    cell (p,);  length_m (p,)
    s_m (p,): distance from the cell's centre to the piece, negative where the centre is outside
    edge (p,): index into plate.edges, -1 where none is described (insulated)
    ends_m (p, 2, 2): start and end of each piece, x and y
    """

    cell: Ints
    length_m: Array
    s_m: Array
    edge: Ints
    ends_m: Array


def find_rim(
    plate: Plate,
    domain: shapely.Polygon,
    index: Ints,
    x: Array,
    y: Array,
    frame: Frame,
) -> Rim:
    """Cut outline and holes at the grid lines and give each piece to the cell inside."""
    oriented = shapely.geometry.polygon.orient(domain)
    cells, lengths, distances, edges, ends = [], [], [], [], []
    for ring, is_hole in [(oriented.exterior, False), *((r, True) for r in oriented.interiors)]:
        a, b = _pieces(np.asarray(ring.coords), frame)
        length = np.hypot(*(b - a).T)
        inward = np.column_stack((a[:, 1] - b[:, 1], b[:, 0] - a[:, 0])) / length[:, None]
        middle = (a + b) / 2
        cell = _cell_of(middle, inward, index, x, y, frame)
        centre = np.column_stack((x[cell], y[cell]))
        cells.append(cell)
        lengths.append(length)
        distances.append(np.einsum("pi,pi->p", centre - middle, inward))
        edges.append(_edge_of(plate, middle, -inward, is_hole, domain.bounds))
        ends.append(np.stack((a, b), axis=1))
    return Rim(*(np.concatenate(part) for part in (cells, lengths, distances, edges, ends)))


def _pieces(corners: Array, frame: Frame) -> tuple[Array, Array]:
    """Start and end points (p, 2) of a ring's segments cut at the grid lines."""
    x0, y0, hx, hy = frame
    scaled = (corners - (x0, y0)) / (hx, hy)
    starts, ends = [], []
    for p, q, real_p, real_q in zip(
        scaled[:-1], scaled[1:], corners[:-1], corners[1:], strict=True
    ):
        cuts = [np.array([0.0, 1.0])]
        for axis in (0, 1):
            low, high = sorted((p[axis], q[axis]))
            lines = np.arange(np.floor(low) + 1, np.ceil(high))
            if lines.size:
                cuts.append((lines - p[axis]) / (q[axis] - p[axis]))
        t = np.unique(np.concatenate(cuts))[:, None]
        points = (1 - t) * real_p + t * real_q
        starts.append(points[:-1])
        ends.append(points[1:])
    a, b = np.concatenate(starts), np.concatenate(ends)
    long_enough = np.hypot(*(b - a).T) > 1e-12
    return a[long_enough], b[long_enough]


def _cell_of(
    middle: Array,
    inward: Array,
    index: Ints,
    x: Array,
    y: Array,
    frame: Frame,
) -> Ints:
    x0, y0, hx, hy = frame
    inside = (middle + NUDGE * min(hx, hy) * inward - (x0, y0)) / (hx, hy)
    column = np.clip(np.floor(inside[:, 0]).astype(int), 0, index.shape[1] - 1)
    row = np.clip(np.floor(inside[:, 1]).astype(int), 0, index.shape[0] - 1)
    cell: Ints = index[row, column]
    for lost in np.flatnonzero(cell < 0):  # its sliver was dropped: the nearest cell takes it
        cell[lost] = np.argmin(np.hypot(x - middle[lost, 0], y - middle[lost, 1]))
    return cell


def _edge_of(
    plate: Plate,
    middle: Array,
    outward: Array,
    is_hole: bool,
    bounds: tuple[float, float, float, float],
) -> Ints:
    """Which described edge each rim piece belongs to; later entries win."""
    edge = np.full(middle.shape[0], -1, dtype=np.int64)
    for number, described in enumerate(plate.edges):
        edge[_covers(plate, described, middle, outward, is_hole, bounds)] = number
    return edge


SIDE_NORMAL = {
    Side.X_MIN: (-1.0, 0.0),
    Side.X_MAX: (1.0, 0.0),
    Side.Y_MIN: (0.0, -1.0),
    Side.Y_MAX: (0.0, 1.0),
}


def _covers(
    plate: Plate,
    edge: Edge,
    middle: Array,
    outward: Array,
    is_hole: bool,
    bounds: tuple[float, float, float, float],
) -> NDArray[np.bool_]:
    everywhere = np.ones(middle.shape[0], dtype=bool)
    if edge.side is None and edge.segment is None:
        return everywhere
    if is_hole:
        return ~everywhere
    if edge.side is not None:
        # A side is the rim that faces that way more than any other.
        facing = outward @ np.asarray(SIDE_NORMAL[edge.side])
        faces_it: NDArray[np.bool_] = facing > np.sqrt(0.5) + 1e-9
        return faces_it
    if not isinstance(plate.outline, Polygon):
        raise PlateError("edge: only a polygon has segments; name a side, or leave both out")
    points = np.asarray(plate.outline.points_m)
    assert edge.segment is not None
    if not 1 <= edge.segment <= len(points):
        raise PlateError(f"edge: segment {edge.segment} does not exist (1..{len(points)})")
    a, b = points[edge.segment - 1], points[edge.segment % len(points)]
    along = (b - a) / np.hypot(*(b - a))
    offset = middle - a
    position = offset @ along
    off_line = np.abs(offset[:, 0] * along[1] - offset[:, 1] * along[0])
    size = max(bounds[2] - bounds[0], bounds[3] - bounds[1])
    inside: NDArray[np.bool_] = (
        (off_line < 1e-9 * size) & (position >= 0) & (position <= np.hypot(*(b - a)))
    )
    return inside
