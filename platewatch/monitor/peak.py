"""The hottest place: its distribution from fixed draws of the field.

The maximum of the mean field misleads: where the top is flat, the true maximum
lies above it.  So the largest cell value of each of a fixed set of draws is
taken; the same standard-normal vectors serve at every tick, so nothing flickers
and a replay is exact.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cholesky
from scipy.special import ndtr

from platewatch.monitor.estimator import Quiet
from platewatch.types import Array, Gaussian

DRAWS = 256
SEED = 18_221_807  # any constant: the draws must never change
BLOCK_CELLS = 4  # candidates are the hottest cell of each 4 x 4 block
MARGIN_SD = 6.0
WHOLE_PLATE = ""

NDArrayInt = NDArray[np.int64]
NDArrayBool = NDArray[np.bool_]


def standard_draws(size: int, count: int = DRAWS) -> Array:
    """(size, count) standard normals, each with its mirror image, always the same."""
    half = np.random.default_rng(SEED).standard_normal((count // 2, size)).T
    return np.concatenate((half, -half), axis=1)


def square_root(cov: Array) -> Array:
    """Lower Cholesky factor of a covariance that may be singular to rounding."""
    scale = float(np.mean(np.diag(cov))) or 1.0
    for jitter in (1e-13, 1e-11, 1e-9, 1e-7):
        try:
            return np.asarray(
                cholesky(cov + jitter * scale * np.eye(len(cov)), lower=True, check_finite=False)
            )
        except np.linalg.LinAlgError:
            continue
    raise np.linalg.LinAlgError("the covariance of the state is not positive definite")


@dataclass(frozen=True)
class Places:
    """Where on the plate maxima are looked for.

    blocks (nb, 16): cells of each block, padded by repeating its first
    regions: zone name (or WHOLE_PLATE) to a mask over cells
    """

    blocks: NDArrayInt
    regions: dict[str, NDArrayBool]


def places(quiet: Quiet, zones: tuple[str, ...] = ()) -> Places:
    """The blocks of candidate cells, and a mask for each zone that a limit names."""
    grid = quiet.grid
    column = np.floor((grid.x - grid.x.min()) / grid.hx + 1e-6).astype(np.int64) // BLOCK_CELLS
    row = np.floor((grid.y - grid.y.min()) / grid.hy + 1e-6).astype(np.int64) // BLOCK_CELLS
    key = row * (column.max() + 1) + column
    groups = [np.flatnonzero(key == value) for value in np.unique(key)]
    most = max(group.size for group in groups)
    blocks = np.array([np.pad(g, (0, most - g.size), mode="edge") for g in groups])
    names = np.array(quiet.cell_zone)
    regions = {WHOLE_PLATE: np.ones(names.size, dtype=np.bool_)}
    regions |= {zone: names == zone for zone in zones}
    return Places(blocks, regions)


def candidates(where: Places, mean_field: Array, margin_K: float, region: str) -> NDArrayInt:
    """Cells that may hold the maximum: the hottest of each block, within the margin."""
    inside = np.where(where.regions[region], mean_field, -np.inf)
    values = inside[where.blocks]
    best = values.argmax(axis=1)
    hottest = values[np.arange(len(best)), best]
    keep = hottest >= hottest.max() - margin_K
    return np.asarray(where.blocks[np.arange(len(best)), best][keep])


@dataclass(frozen=True)
class Hottest:
    """The distribution of a maximum.

    samples (draws,): the maximum in each draw, degC
    cell: the cell most often largest;  at_s: when, median over the draws
    """

    samples: Array
    cell: int
    at_s: float = 0.0

    @property
    def degC(self) -> float:
        return float(self.samples.mean())

    @property
    def sd_K(self) -> float:
        return float(self.samples.std())

    def quantile(self, p: float) -> float:
        return float(np.quantile(self.samples, p))


def most_common(cells: NDArrayInt) -> int:
    """The cell that occurs most often; the lower number where two tie."""
    values, counts = np.unique(cells, return_counts=True)
    return int(values[counts.argmax()])


def hottest_now(quiet: Quiet, where: Places, belief: Gaussian, Z: Array, region: str) -> Hottest:
    """The present maximum of a region.  Z (n, draws) from `standard_draws`."""
    a = quiet.blocks.a
    V = quiet.reduced.V
    spread = square_root(belief.cov[a, a]) @ Z[a]
    mean_field = V @ belief.mean[a]
    inside = np.where(where.regions[region], mean_field, -np.inf)
    top = int(inside.argmax())
    margin = MARGIN_SD * float((V[top] @ spread).std()) + 0.1
    cells = candidates(where, mean_field, margin, region)
    values = mean_field[cells][:, None] + V[cells] @ spread
    return Hottest(values.max(axis=0), most_common(cells[values.argmax(axis=0)]))


def probability_over(samples: Array, limit: float) -> float:
    """Share of the draws above a limit, each smeared so that the share moves smoothly.

    Kernel width 1.06 s n^(-1/5): Silverman, Density Estimation (1986), eq. 3.28.
    """
    width = 1.06 * float(samples.std()) * samples.size ** (-0.2)
    if width <= 0:
        return float(np.mean(samples > limit))
    return float(np.mean(ndtr((samples - limit) / width)))
