"""The hottest place: its distribution from fixed draws of the field.

The maximum of the mean field misleads: where the top is flat, the true maximum
lies above it.  So the largest cell value of each of a fixed set of draws is
taken; the same standard-normal vectors serve at every tick, so nothing flickers
and a replay is exact.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.linalg.lapack import dpotrf
from scipy.special import ndtr

from platewatch.errors import PlateError
from platewatch.monitor.estimator import Quiet
from platewatch.thermal.grid import Grid
from platewatch.types import Array, Gaussian

DRAWS = 256
SEED = 18_221_807  # any constant: the draws must never change
BLOCK_CELLS = 4  # candidates are the hottest cell of each 4 x 4 block
MARGIN_SD = 6.0
TIE_K = 1e-4
WHOLE_PLATE = ""

NDArrayInt = NDArray[np.int64]
Short = NDArray[np.float32]


def standard_draws(size: int, count: int = DRAWS) -> Array:
    """(size, count) standard normals, each with its mirror image, always the same."""
    half = np.random.default_rng(SEED).standard_normal((count // 2, size)).T
    return np.concatenate((half, -half), axis=1)


def square_root(cov: Array) -> Array:
    """Lower Cholesky factor of a covariance that may be singular to rounding."""
    n = len(cov)
    diagonal = cov.ravel()[:: n + 1] if cov.flags.c_contiguous else np.diag(cov)
    scale = float(diagonal.sum()) / n or 1.0
    for jitter in (1e-13, 1e-11, 1e-9, 1e-7):
        shifted = cov.copy()
        shifted.ravel()[:: n + 1] += jitter * scale
        factor, failed = dpotrf(shifted.T, lower=1, clean=1)
        if not failed:
            return np.asarray(factor)
    raise np.linalg.LinAlgError("the covariance of the state is not positive definite")


@dataclass(frozen=True)
class Region:
    """Part of the plate in which a maximum is looked for, cut into blocks of cells.

    cells (m,): its cells, block after block;  rows (m, r): their temperatures from modes
    short_rows: the same in single precision
    starts, sizes (nb,): where each block begins, and how many cells it has
    """

    cells: NDArrayInt
    rows: Array
    short_rows: Short
    starts: NDArrayInt
    sizes: NDArrayInt


@dataclass(frozen=True)
class Places:
    """Where on the plate maxima are looked for: by zone name, or WHOLE_PLATE."""

    regions: dict[str, Region]


def places(quiet: Quiet, zones: tuple[str, ...] = ()) -> Places:
    """The whole plate, and each zone that a limit names.

    Raises PlateError for a zone too small to hold a cell.
    """
    names = np.array(quiet.cell_zone)
    key = _block_of(quiet.grid)
    regions = {WHOLE_PLATE: _region(quiet, key, np.arange(names.size))}
    for zone in zones:
        cells = np.flatnonzero(names == zone)
        if not cells.size:
            raise PlateError(f"zone {zone!r} is nearest to no cell; choose a smaller cell_mm")
        regions[zone] = _region(quiet, key, cells)
    return Places(regions)


def _block_of(grid: Grid) -> NDArrayInt:
    """Number of the block that each cell lies in."""
    column = np.floor((grid.x - grid.x.min()) / grid.hx + 1e-6).astype(np.int64) // BLOCK_CELLS
    row = np.floor((grid.y - grid.y.min()) / grid.hy + 1e-6).astype(np.int64) // BLOCK_CELLS
    return np.asarray(row * (column.max() + 1) + column)


def _region(quiet: Quiet, key: NDArrayInt, members: NDArrayInt) -> Region:
    cells = members[np.argsort(key[members], kind="stable")]
    _, starts, sizes = np.unique(key[cells], return_index=True, return_counts=True)
    rows = np.ascontiguousarray(quiet.reduced.V[cells])
    return Region(cells, rows, rows.astype(np.float32), starts, sizes)


def candidates(region: Region, fields: Short, margin_K: Array) -> NDArrayInt:
    """Positions in `region.cells` of what may hold the maximum of some field: the hottest
    cell of each block, where it comes within the margin of the hottest of all.

    fields (looks, m): mean temperatures of the region's cells;  margin_K (looks,)
    Cells as hot as the hottest of their block to TIE_K all count, so that rounding does
    not choose between them.
    """
    hottest = np.maximum.reduceat(fields, region.starts, axis=1)
    least = (hottest.max(axis=1) - margin_K)[:, None]
    bar = np.where(hottest >= least, hottest - TIE_K, np.inf).astype(np.float32)
    found = (fields >= np.repeat(bar, region.sizes, axis=1)).any(axis=0)
    return np.flatnonzero(found)


def values_of(
    region: Region, found: NDArrayInt, fields: Array, spread: Short
) -> tuple[float, Short]:
    """Temperatures of some cells in every draw: a base, and (looks, draws, cells) above it.

    fields (looks, cells): their mean temperatures;  spread (looks, draws, r): modes
    beyond their mean, draws in rows so that maxima are sought along memory
    Single precision serves for differences to the hottest: near it they round to 1e-6 K.
    """
    base = float(fields.max())
    values = np.matmul(spread, np.ascontiguousarray(region.short_rows[found].T))
    values += (fields - base).astype(np.float32)[:, None, :]
    return base, values


@dataclass(frozen=True)
class Hottest:
    """The distribution of a maximum.

    samples (draws,): the maximum in each draw, degC
    cell: the cell most often largest;  at_s: when, median over the draws
    """

    samples: Array
    cell: int
    at_s: float = 0.0

    @cached_property
    def degC(self) -> float:
        return float(self.samples.mean())

    @cached_property
    def sd_K(self) -> float:
        return float(self.samples.std())

    @cached_property
    def ordered(self) -> Array:
        return np.sort(self.samples)

    def quantile(self, p: float) -> float:
        """Linear between the ordered samples."""
        position = p * (self.ordered.size - 1)
        below = min(int(position), self.ordered.size - 2)
        low, high = self.ordered[below], self.ordered[below + 1]
        return float(low + (position - below) * (high - low))


def most_common(cells: NDArrayInt) -> int:
    """The cell that occurs most often; the lower number where two tie."""
    return int(np.bincount(cells).argmax())


def hottest_now(
    quiet: Quiet,
    where: Places,
    belief: Gaussian,
    Z: Array,
    region: str,
    missed: Array | None = None,
) -> Hottest:
    """The present maximum of a region.  Z (n, draws) from `standard_draws`.

    missed (cells,): K to add to the field, what its modes cannot show
    """
    k, place = quiet.blocks.a, where.regions[region]
    root = square_root(belief.cov[k, k]).astype(np.float32)
    spread = Z[k].T.astype(np.float32) @ root.T
    mean = belief.mean[k]
    field = place.short_rows @ mean.astype(np.float32)
    if missed is not None:
        field += missed[place.cells].astype(np.float32)
    margin = MARGIN_SD * float((spread @ place.short_rows[field.argmax()]).std()) + 0.1
    found = candidates(place, field[None], np.array([margin]))
    exact = place.rows[found] @ mean
    if missed is not None:
        exact += missed[place.cells[found]]
    base, values = values_of(place, found, exact[None], spread[None])
    best = values[0].argmax(axis=1)
    samples = base + values[0, np.arange(best.size), best].astype(np.float64)
    return Hottest(samples, most_common(place.cells[found[best]]))


def probability_over(samples: Array, limit: float) -> float:
    """Share of the draws above a limit, each smeared so that the share moves smoothly.

    Kernel width 1.06 s n^(-1/5): Silverman, Density Estimation (1986), eq. 3.28.
    """
    width = 1.06 * float(samples.std()) * samples.size ** (-0.2)
    if width <= 0:
        return float(np.mean(samples > limit))
    return float(np.mean(ndtr((samples - limit) / width)))
