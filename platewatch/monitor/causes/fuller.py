"""What the few modes of the filter miss of a heat source that nobody declared.

A second, richer Galerkin model of the same plate: bilinear hats on a mesh of a few
hundred nodes, turned to its own modes.  Its answer to a source less that of the
filter's modes is added to signatures and fields.  One ramped static correction is
not enough where heat spreads slowly: on a steel table it is a quarter too strong
for the first minute.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import eigh

from platewatch.monitor.estimator import Quiet
from platewatch.thermal.grid import hats
from platewatch.types import Array

NODES = 600


@dataclass(frozen=True)
class Fuller:
    """rates (K,) 1/s;  at_cells (cells, K);  at_sensors (ns, K)."""

    rates: Array
    at_cells: Array
    at_sensors: Array

    def gain(self, heat: Array) -> Array:
        """Modal watts (K, p) of heat (cells, p) in W."""
        return np.asarray(self.at_cells.T @ heat)


def build_fuller(quiet: Quiet, sensor_rows: Array) -> Fuller:
    """sensor_rows (ns, cells): interpolation weights of the thermocouples."""
    model = quiet.reduced.model
    # On few cells the hats would depend on each other; the cells themselves are as quick.
    few = model.grid.n <= NODES
    P = np.eye(model.grid.n) if few else hats(quiet.grid, NODES)
    C = P.T @ (model.capacity[:, None] * P)
    carried = np.diag(C) > 1e-6 * np.diag(C).max()
    P, C = P[:, carried], C[np.ix_(carried, carried)]
    rates, turn = eigh(P.T @ (model.K @ P), C)
    at_cells = P @ turn
    return Fuller(np.maximum(rates, 0.0), at_cells, sensor_rows @ at_cells)


def held(rates: Array, dt_s: float) -> tuple[Array, Array]:
    """Decay over one tick, and the gain of heat held over it: (1 - exp(-r t)) / r."""
    return np.exp(-rates * dt_s), -np.expm1(-rates * dt_s) / np.maximum(rates, 1e-12)
