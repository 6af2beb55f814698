"""Where the simulated plate is cut: square elements with nodes at their corners.

Nodes lie on the rim of a rectangle.  An element that the outline cuts counts
with the part of it that is plate, found by sampling, so a disc keeps its area
(finite-cell method: Parvizian, Duester & Rank 2007).  Metres throughout.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from platewatch.errors import PlateError
from platewatch.thermal.plate import Circle, Plate, Polygon, Rectangle, Shape
from platewatch.types import Array

Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

SAMPLES = 8  # per element side: a heater edge is placed to 1/16 of an element
LEAST_PART = 0.02  # elements with less plate than this are left out
CIRCLE_PIECES = 720


@dataclass(frozen=True)
class RimPiece:
    """A short straight piece of the outline or of a hole, by its middle.

    segment: side of the outline it lies on, counted from 1; 0 for a hole
    """

    x: float
    y: float
    length: float
    segment: int


@dataclass(frozen=True)
class Lattice:
    """Nodes x, y (n,); elements as corner indices (e, 4) with their plate part (e,).

    corners run lower left, lower right, upper left, upper right
    left, bottom (e,): the lower left corner of each element
    """

    plate: Plate
    hx: float
    hy: float
    x: Array
    y: Array
    corners: Ints
    part: Array
    left: Array
    bottom: Array
    inside: Bools  # nodes on the plate itself; cut elements have a few outside

    @property
    def nodes(self) -> int:
        return int(self.x.size)

    def gather(self, per_element: Array) -> Array:
        """A quantity per element (e,), a quarter to each of its corners: (n,)."""
        share = np.repeat(per_element / 4.0, 4)
        return np.asarray(
            np.bincount(self.corners.ravel(), weights=share, minlength=self.nodes), dtype=float
        )

    @property
    def element_area(self) -> Array:
        return self.hx * self.hy * self.part

    def covered(self, shape: Shape) -> Array:
        """Part of each element's plate (e,) that lies under the shape."""
        return np.asarray(
            self._plate_samples(shape).mean(axis=1) / np.maximum(self.part, LEAST_PART)
        )

    def spread(self, shape: Shape) -> Array:
        """Area (n,) m2 that each node represents of the plate under the shape.

        The weights are the integrals of the bilinear node functions.
        """
        hit = self._plate_samples(shape) * (self.hx * self.hy / SAMPLES**2)
        u, v = _sample_grid()
        corner = np.stack(((1 - u) * (1 - v), u * (1 - v), (1 - u) * v, u * v), axis=1)
        return np.asarray(
            np.bincount(self.corners.ravel(), weights=(hit @ corner).ravel(), minlength=self.nodes),
            dtype=float,
        )

    def locate(self, x: float, y: float) -> tuple[Ints, Array]:
        """Four nodes around a point and the weights that interpolate there."""
        off = np.maximum(np.abs(x - self.left - self.hx / 2) / self.hx, 0.5)
        up = np.maximum(np.abs(y - self.bottom - self.hy / 2) / self.hy, 0.5)
        element = int(np.argmin(off + up))
        u = float(np.clip((x - self.left[element]) / self.hx, 0.0, 1.0))
        v = float(np.clip((y - self.bottom[element]) / self.hy, 0.0, 1.0))
        weights = np.array([(1 - u) * (1 - v), u * (1 - v), (1 - u) * v, u * v])
        return self.corners[element], weights

    def conduction(self, sheet: Array) -> sparse.csr_array:
        """Conduction matrix (n, n) W/K for k*d per element (e,) W/K, bilinear elements."""
        along = np.kron([[2.0, 1.0], [1.0, 2.0]], [[1.0, -1.0], [-1.0, 1.0]]) / 6.0
        across = np.kron([[1.0, -1.0], [-1.0, 1.0]], [[2.0, 1.0], [1.0, 2.0]]) / 6.0
        unit = along * (self.hy / self.hx) + across * (self.hx / self.hy)
        values = (sheet * self.part)[:, None, None] * unit
        rows = np.repeat(self.corners, 4, axis=1).ravel()
        columns = np.tile(self.corners, (1, 4)).ravel()
        shape = (self.nodes, self.nodes)
        return sparse.csr_array(sparse.coo_array((values.ravel(), (rows, columns)), shape=shape))

    def _plate_samples(self, shape: Shape) -> Array:
        """1.0 where a sample point (e, SAMPLES**2) is plate and under the shape."""
        u, v = _sample_grid()
        x = self.left[:, None] + u * self.hx
        y = self.bottom[:, None] + v * self.hy
        return np.asarray(_on_plate(self.plate, x, y) & contains(shape, x, y), dtype=float)


def build_lattice(plate: Plate, spacing_m: float) -> Lattice:
    """Elements of about `spacing_m`, fitted to the outline's bounding box."""
    x0, y0, x1, y1 = bounds(plate.outline)
    nx, ny = (max(2, round((hi - lo) / spacing_m)) for lo, hi in ((x0, x1), (y0, y1)))
    hx, hy = (x1 - x0) / nx, (y1 - y0) / ny
    column, line = (a.ravel() for a in np.meshgrid(np.arange(nx), np.arange(ny)))
    left, bottom = x0 + column * hx, y0 + line * hy
    u, v = _sample_grid()
    part = _on_plate(plate, left[:, None] + u * hx, bottom[:, None] + v * hy).mean(axis=1)
    kept = part > LEAST_PART
    if not kept.any():
        raise PlateError(f"plate {plate.name!r} has no area left; correct outline and holes")
    first = (line * (nx + 1) + column)[kept]
    numbers = np.stack((first, first + 1, first + nx + 1, first + nx + 2), axis=1)
    used, corners = np.unique(numbers.ravel(), return_inverse=True)
    x, y = x0 + (used % (nx + 1)) * hx, y0 + (used // (nx + 1)) * hy
    return Lattice(
        plate=plate,
        hx=hx,
        hy=hy,
        x=x,
        y=y,
        corners=corners.reshape(-1, 4),
        part=part[kept],
        left=left[kept],
        bottom=bottom[kept],
        inside=_on_plate(plate, x, y, slack=1e-9),
    )


def rim(plate: Plate, piece_m: float) -> Iterator[RimPiece]:
    """The outline and the holes in pieces no longer than `piece_m`."""
    for shape in (plate.outline, *plate.holes):
        corners = np.array(outline_points(shape))
        for number, (a, b) in enumerate(
            zip(corners, np.roll(corners, -1, axis=0), strict=True), start=1
        ):
            length = float(np.hypot(*(b - a)))
            count = max(1, int(np.ceil(length / piece_m)))
            for k in range(count):
                x, y = a + (b - a) * (k + 0.5) / count
                segment = number if shape is plate.outline else 0
                yield RimPiece(float(x), float(y), length / count, segment)


def bounds(shape: Shape) -> tuple[float, float, float, float]:
    """x-min, y-min, x-max, y-max."""
    match shape:
        case Rectangle(x, y, width, height):
            return x, y, x + width, y + height
        case Circle(x, y, diameter):
            r = diameter / 2
            return x - r, y - r, x + r, y + r
        case Polygon(points):
            xs, ys = zip(*points, strict=True)
            return min(xs), min(ys), max(xs), max(ys)


def outline_points(shape: Shape) -> list[tuple[float, float]]:
    """Corners of the shape in order; a circle as a polygon of many."""
    match shape:
        case Rectangle():
            x0, y0, x1, y1 = bounds(shape)
            return [(x0, y0), (x1, y0), (x1, y1), (x0, y1)]
        case Circle(x, y, diameter):
            turn = 2 * np.pi * np.arange(CIRCLE_PIECES) / CIRCLE_PIECES
            return [
                (x + diameter / 2 * np.cos(angle), y + diameter / 2 * np.sin(angle))
                for angle in turn
            ]
        case Polygon(points):
            return list(points)


def contains(shape: Shape, x: Array, y: Array, slack: float = 0.0) -> Bools:
    """Which points lie in the shape; `slack` (m) takes in those just outside."""
    match shape:
        case Rectangle():
            x0, y0, x1, y1 = bounds(shape)
            in_x = (x >= x0 - slack) & (x <= x1 + slack)
            return np.asarray(in_x & (y >= y0 - slack) & (y <= y1 + slack))
        case Circle(cx, cy, diameter):
            return np.asarray(np.hypot(x - cx, y - cy) <= diameter / 2 + slack)
        case Polygon(points):
            return _in_polygon(points, x, y)


def _in_polygon(points: tuple[tuple[float, float], ...], x: Array, y: Array) -> Bools:
    """Even-odd rule."""
    odd = np.zeros(np.shape(x), dtype=bool)
    for (xa, ya), (xb, yb) in zip(points, (*points[1:], points[0]), strict=True):
        if ya != yb:
            crossing = xa + (y - ya) * (xb - xa) / (yb - ya)
            odd ^= ((ya > y) != (yb > y)) & (x < crossing)
    return odd


def _on_plate(plate: Plate, x: Array, y: Array, slack: float = 0.0) -> Bools:
    on = contains(plate.outline, x, y, slack)
    for hole in plate.holes:
        on &= ~contains(hole, x, y, -slack)
    return on


def _sample_grid() -> tuple[Array, Array]:
    """Middles of SAMPLES x SAMPLES sub-squares of the unit square."""
    middle = (np.arange(SAMPLES) + 0.5) / SAMPLES
    u, v = np.meshgrid(middle, middle)
    return u.ravel(), v.ravel()
