"""Cells of a plate: area and open face length of every cut cell, and its rim.

A rectangular grid covers the outline; a cell on the rim keeps the part of it
that is plate, and its unknown stays at the centre of the whole cell, even when
that centre lies outside.  Cells are never merged.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from shapely.geometry.base import BaseGeometry

from platewatch.errors import PlateError
from platewatch.thermal.plate import Plate, Rectangle, Shape, geometry
from platewatch.thermal.rim import Ints, Rim, find_rim
from platewatch.types import Array

USUAL_CELLS = 2500
MOST_CELLS = 250_000
SMALLEST_FRACTION = 1e-6  # of a full cell; less than that is dropped


@dataclass(frozen=True, eq=False)
class Links:
    """Faces between two cells: i, j (f,);  length_m open length;  distance_m of the centres."""

    i: Ints
    j: Ints
    length_m: Array
    distance_m: Array


@dataclass(frozen=True, eq=False)
class Grid:
    """hx, hy m;  index (ny, nx), -1 where there is no plate;  x, y (n,) centres;  area (n,) m2.

    x0, y0: lower left corner;  domain: the outline without its holes.
    """

    hx: float
    hy: float
    nx: int
    ny: int
    x0: float
    y0: float
    index: Ints
    x: Array
    y: Array
    area: Array
    links: Links
    rim: Rim
    domain: shapely.Polygon

    @property
    def n(self) -> int:
        return self.x.size

    @property
    def columns(self) -> Ints:
        """Grid column of each cell (n,)."""
        return np.nonzero(self.index >= 0)[1]

    @property
    def rows(self) -> Ints:
        """Grid row of each cell (n,)."""
        return np.nonzero(self.index >= 0)[0]


def build_grid(plate: Plate, cell_m: float | None = None) -> Grid:
    """The cells of a plate, fitted to its bounding box.

    cell_m: wanted cell size; else the plate's own, else about 2,500 cells.
    Raises PlateError when nothing is left of the plate, when it falls into
    pieces, or when the cells would be too many.
    """
    domain = _domain(plate)
    wanted = cell_m or plate.cell_m or float(np.sqrt(domain.area / USUAL_CELLS))
    x0, y0, x1, y1 = domain.bounds
    nx, ny = max(2, round((x1 - x0) / wanted)), max(2, round((y1 - y0) / wanted))
    if nx * ny > MOST_CELLS:
        raise PlateError(
            f"cells of {1e3 * wanted:.3g} mm make {nx} x {ny} of them, more than {MOST_CELLS}; "
            f"choose a cell of {1e3 * np.sqrt(domain.area / USUAL_CELLS):.2g} mm or so"
        )
    hx, hy = (x1 - x0) / nx, (y1 - y0) / ny
    if isinstance(plate.outline, Rectangle) and not plate.holes:
        fraction, east, north = _full_faces(nx, ny)
    else:
        fraction, east, north = _cut_faces(domain, x0, y0, hx, hy, nx, ny)
    index = _numbered(fraction, east, north)
    rows, columns = np.nonzero(index >= 0)
    x: Array = np.asarray(x0 + (columns + 0.5) * hx, dtype=np.float64)
    y: Array = np.asarray(y0 + (rows + 0.5) * hy, dtype=np.float64)
    return Grid(
        hx,
        hy,
        nx,
        ny,
        x0,
        y0,
        index,
        x,
        y,
        fraction[rows, columns] * hx * hy,
        _links(index, east, north, hx, hy),
        find_rim(plate, domain, index, x, y, (x0, y0, hx, hy)),
        domain,
    )


def footprint(grid: Grid, shape: Shape | BaseGeometry) -> Array:
    """Area (n,) m2 that a shape covers in each cell; parts beyond the plate do not count."""
    full = grid.area > (1 - 1e-12) * grid.hx * grid.hy
    if isinstance(shape, Rectangle):
        left, low = grid.x - grid.hx / 2, grid.y - grid.hy / 2
        right_most, top_most = shape.x_m + shape.width_m, shape.y_m + shape.height_m
        wide = np.minimum(left + grid.hx, right_most) - np.maximum(left, shape.x_m)
        high = np.minimum(low + grid.hy, top_most) - np.maximum(low, shape.y_m)
        covered = np.maximum(wide, 0) * np.maximum(high, 0)
        open_cells = np.flatnonzero(~full & (covered > 0))
        region: BaseGeometry = shapely.box(shape.x_m, shape.y_m, right_most, top_most)
    else:
        region = _valid(shape if isinstance(shape, BaseGeometry) else geometry(shape))
        covered = np.zeros(grid.n)
        open_cells = np.arange(grid.n)
    if open_cells.size:
        covered[open_cells] = _overlap(grid, region.intersection(grid.domain), open_cells)
    return np.asarray(covered, dtype=np.float64)


def on_plate(grid: Grid, x: float, y: float) -> bool:
    """Whether a point, metres, lies on the plate; its rim counts."""
    return bool(grid.domain.distance(shapely.Point(x, y)) <= 1e-9)


def hats(grid: Grid, nodes: int) -> Array:
    """Bilinear hat functions of a coarse mesh over the plate's bounding box: (cells, nodes).

    They sum to 1 in every cell.
    """
    width, height = np.ptp(grid.x) + grid.hx, np.ptp(grid.y) + grid.hy
    across = int(np.clip(round(np.sqrt(nodes * width / height)), 2, nodes // 2))
    along = max(2, round(nodes / across))
    u = (grid.x - grid.x.min() + grid.hx / 2) / width * (across - 1)
    v = (grid.y - grid.y.min() + grid.hy / 2) / height * (along - 1)
    hats_x = np.clip(1 - np.abs(u[:, None] - np.arange(across)), 0, None)
    hats_y = np.clip(1 - np.abs(v[:, None] - np.arange(along)), 0, None)
    return np.asarray((hats_x[:, :, None] * hats_y[:, None, :]).reshape(grid.x.size, -1))


def point_row(grid: Grid, x: float, y: float) -> Array:
    """Weights (n,) that give the temperature at a point; they sum to 1.

    Quadratic in x and y over the nearest nine cells (exact for quadratic fields);
    where the rim leaves fewer, the straight-line fit through the cells around.
    """
    weights = np.zeros(grid.n)
    column = int(np.clip(np.floor((x - grid.x0) / grid.hx), 1, max(1, grid.nx - 2)))
    row = int(np.clip(np.floor((y - grid.y0) / grid.hy), 1, max(1, grid.ny - 2)))
    around = grid.index[row - 1 : row + 2, column - 1 : column + 2]
    if around.shape == (3, 3) and (around >= 0).all():
        across = _lagrange((x - grid.x0) / grid.hx - column - 0.5)
        upward = _lagrange((y - grid.y0) / grid.hy - row - 0.5)
        weights[around] = np.outer(upward, across)
        return weights
    away = np.hypot((grid.x - x) / grid.hx, (grid.y - y) / grid.hy)
    near = np.argsort(away, kind="stable")[:9]
    scale = np.exp(-((away[near] / 1.5) ** 2)) + 1e-9
    design = np.column_stack((np.ones(near.size), grid.x[near] - x, grid.y[near] - y))
    design[:, 1:] /= grid.hx
    weights[near] = (np.linalg.pinv(design * scale[:, None]) * scale)[0]
    return weights


def _domain(plate: Plate) -> shapely.Polygon:
    domain = _valid(geometry(plate.outline))
    if plate.holes:
        domain = domain.difference(
            shapely.union_all([_valid(geometry(hole)) for hole in plate.holes])
        )
    if not isinstance(domain, shapely.Polygon) or domain.area <= 0:
        raise PlateError(
            f"plate {plate.name!r}: its holes leave nothing, or separate pieces; "
            "correct the holes, or describe each piece as a plate of its own"
        )
    return domain


def _valid(shape: BaseGeometry) -> BaseGeometry:
    if not shape.is_valid:
        raise PlateError(
            f"a shape crosses itself ({shapely.is_valid_reason(shape)}, metres); "
            "put its corners in order"
        )
    return shape


def _full_faces(nx: int, ny: int) -> tuple[Array, Array, Array]:
    return np.ones((ny, nx)), np.ones((ny, nx - 1)), np.ones((ny - 1, nx))


def _cut_faces(
    domain: shapely.Polygon, x0: float, y0: float, hx: float, hy: float, nx: int, ny: int
) -> tuple[Array, Array, Array]:
    """Fractions 0..1: of area (ny, nx), of the faces to the east and to the north."""
    shapely.prepare(domain)
    left, low = np.meshgrid(x0 + hx * np.arange(nx), y0 + hy * np.arange(ny))
    boxes = shapely.box(left, low, left + hx, low + hy)
    fraction: Array = shapely.covers(domain, boxes).astype(np.float64)
    cut = (fraction == 0) & shapely.intersects(domain, boxes)
    fraction[cut] = np.asarray(shapely.area(shapely.intersection(domain, boxes[cut]))) / (hx * hy)
    east = np.minimum(fraction[:, :-1], fraction[:, 1:])
    cut = (east > 0) & (east < 1)
    right, bottom = left[:, :-1][cut] + hx, low[:, :-1][cut]
    east[cut] = _open_lengths(domain, right, bottom, right, bottom + hy) / hy
    north = np.minimum(fraction[:-1], fraction[1:])
    cut = (north > 0) & (north < 1)
    start, top = left[:-1][cut], low[:-1][cut] + hy
    north[cut] = _open_lengths(domain, start, top, start + hx, top) / hx
    return fraction, east, north


def _open_lengths(domain: shapely.Polygon, x0: Array, y0: Array, x1: Array, y1: Array) -> Array:
    ends = np.stack((np.column_stack((x0, y0)), np.column_stack((x1, y1))), axis=1)
    cut = shapely.intersection(domain, shapely.linestrings(ends))
    return np.asarray(shapely.length(cut), dtype=np.float64)


def _numbered(fraction: Array, east: Array, north: Array) -> Ints:
    """Number the cells row by row, leaving out slivers and specks cut off from the plate."""
    keep = fraction >= SMALLEST_FRACTION
    serial = np.arange(fraction.size).reshape(fraction.shape)
    i = np.concatenate((serial[:, :-1][east > 0], serial[:-1][north > 0]))
    j = np.concatenate((serial[:, 1:][east > 0], serial[1:][north > 0]))
    both = keep.ravel()[i] & keep.ravel()[j]
    graph = coo_array((np.ones(both.sum()), (i[both], j[both])), shape=2 * (fraction.size,))
    label = connected_components(graph, directed=False)[1].reshape(fraction.shape)
    sizes = np.bincount(label.ravel(), weights=np.where(keep, fraction, 0).ravel())
    main = int(np.argmax(sizes))
    if sizes.sum() - sizes[main] > 0.01:
        raise PlateError(
            "at this cell size the plate falls into pieces that no cell face joins; "
            "choose a smaller cell, at most half of the narrowest bridge"
        )
    keep &= label == main
    index = np.full(fraction.shape, -1, dtype=np.int64)
    index[keep] = np.arange(keep.sum())
    return index


def _links(index: Ints, east: Array, north: Array, hx: float, hy: float) -> Links:
    parts = []
    for a, b, opened, length, distance in (
        (index[:, :-1], index[:, 1:], east, hy, hx),
        (index[:-1], index[1:], north, hx, hy),
    ):
        joined = (a >= 0) & (b >= 0) & (opened > 0)
        parts.append((a[joined], b[joined], opened[joined] * length, distance))
    return Links(
        np.concatenate([p[0] for p in parts]),
        np.concatenate([p[1] for p in parts]),
        np.concatenate([p[2] for p in parts]),
        np.concatenate([np.full(p[0].size, p[3]) for p in parts]),
    )


def _overlap(grid: Grid, region: BaseGeometry, cells: Ints) -> Array:
    left, low = grid.x[cells] - grid.hx / 2, grid.y[cells] - grid.hy / 2
    boxes = shapely.box(left, low, left + grid.hx, low + grid.hy)
    shapely.prepare(region)
    area: Array = np.where(shapely.covers(region, boxes), grid.hx * grid.hy, 0.0)
    cut = (area == 0) & shapely.intersects(region, boxes)
    area[cut] = np.asarray(shapely.area(shapely.intersection(region, boxes[cut])))
    return area


def _lagrange(t: float) -> Array:
    """Weights of values at -1, 0, 1 for the place t."""
    return np.array([t * (t - 1) / 2, 1 - t * t, t * (t + 1) / 2])
