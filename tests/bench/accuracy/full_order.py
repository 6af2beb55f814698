"""A full-order Kalman filter that knows the true plant: the limit of the information.

Parameters and delivered watts are the true ones; unknown are the field at the start and
a small heat at every place.  The covariance has a state at every node of a coarse
lattice; the mean follows the truth's own equations on a finer one, which is still not
the truth's.  What it misses is what the thermocouples cannot tell.
"""

from __future__ import annotations

import numpy as np

from platewatch.thermal.plate import Plate
from platewatch.types import Array
from sim_sensors.lattice import bounds
from sim_sensors.simulation import Simulation
from sim_sensors.truth import Truth

MOST_STATES = 420  # of the covariance
FINER = 1.37  # lattice of the mean, as a multiple of the truth's
SLOW_S = 20.0  # the covariance moves this often
START_SD_K = 2.0
UNKNOWN_SHARE = 0.01  # of a typical loss, unknown at each node
UNKNOWN_S = 900.0  # and for about as long
TYPICAL_W_M2K = 10.0


class FullOrder:
    """The mean follows the truth's own equations on the coarse lattice."""

    def __init__(self, run: Simulation) -> None:
        self.sample_s = run.sample_s
        self.truth = relaid(run, FINER * run.truth.lattice.hx)
        coarse = relaid(run, coarse_spacing(run))
        plate: Plate = run.plant.plate
        n = coarse.lattice.nodes
        self.shapes = np.array([self.truth.zone_shape(z) for z in plate.zones])
        sensors = np.array([(s.x_m, s.y_m) for s in plate.sensors])
        self.rows = node_weights(self.truth, sensors)
        self.H = node_weights(coarse, sensors)
        mine = self.truth.lattice
        self.to_fine = node_weights(coarse, np.column_stack((mine.x, mine.y)))
        self.lag_s = np.array([max(s.lag_s, 0.5) for s in plate.sensors])
        self.noise_var = np.array([s.noise_K**2 + s.quantum_K**2 / 12 for s in plate.sensors])
        self.bias = np.array([run._bias.get(s.name, 0.0) for s in plate.sensors])
        self.tips = self.rows @ self.truth.field
        self.P = START_SD_K**2 * np.ones((n, n)) + 0.01 * np.eye(n)
        self.F, self.Q = self._transition(plate, coarse)
        self.mean_of = (np.zeros(len(plate.sensors)), 0)

    def _transition(self, plate: Plate, truth: Truth) -> tuple[Array, Array]:
        """Implicit Euler over SLOW_S of the linear part with radiation as a plain link."""
        op = truth._current(self.sample_s)
        area = truth.lattice.gather(truth.lattice.element_area)
        free = plate.top.coefficient is None
        A = op.A.toarray() + np.diag(TYPICAL_W_M2K * area * free)
        F = np.linalg.inv(np.eye(area.size) + SLOW_S * A / op.capacity[:, None])
        rise = (plate.reference_degC or 100.0) - 22.0
        watts = UNKNOWN_SHARE * TYPICAL_W_M2K * rise * area
        q = (watts / op.capacity) ** 2 * UNKNOWN_S * SLOW_S
        return np.asarray(F, dtype=np.float64), np.diag(q)

    def step(self, degC: Array, watts: Array) -> None:
        """One sample: mean watts (nz,) delivered during it, readings (ns,) at its end."""
        before = self.rows @ self.truth.field
        heat = watts @ self.shapes
        self.truth.advance(self.sample_s, lambda _after: heat)
        now = self.rows @ self.truth.field
        left = np.exp(-self.sample_s / self.lag_s)
        slope = (now - before) / self.sample_s
        offset = slope * self.lag_s
        self.tips = now - offset + (self.tips - before + offset) * left
        total, count = self.mean_of
        self.mean_of = total + (degC - self.bias - self.tips), count + 1
        if (count + 1) * self.sample_s >= SLOW_S - 1e-9:
            self._correct()

    def _correct(self) -> None:
        """The mean residual since the last time; a junction's lag only delays it."""
        total, count = self.mean_of
        usable = np.isfinite(total)
        H, residual = self.H[usable], (total / count)[usable]
        P = self.F @ self.P @ self.F.T + self.Q
        S = H @ P @ H.T + np.diag(self.noise_var[usable] / count)
        K = np.linalg.solve(S, H @ P).T
        shift = self.to_fine @ (K @ residual)
        self.truth._T = self.truth._T + shift
        self.tips = self.tips + self.rows @ shift
        P = P - K @ (H @ P)
        self.P = (P + P.T) / 2
        self.mean_of = np.zeros_like(total), 0

    def at(self, places: Array) -> Array:
        """Weights (m, n) of the coarse nodes at places (m, 2)."""
        return node_weights(self.truth, places)


def node_weights(truth: Truth, places: Array) -> Array:
    """(m, nodes) interpolation weights of a truth's lattice at places (m, 2) m."""
    weights = np.zeros((len(places), truth.lattice.nodes))
    for row, (x, y) in zip(weights, places, strict=True):
        nodes, part = truth.lattice.locate(float(x), float(y))
        row[nodes] = part
    return weights


def coarse_spacing(run: Simulation) -> float:
    """At most about MOST_STATES nodes."""
    x0, y0, x1, y1 = bounds(run.plant.plate.outline)
    return float(np.sqrt((x1 - x0) * (y1 - y0) / (0.9 * MOST_STATES)))


def relaid(run: Simulation, spacing_m: float) -> Truth:
    """The same true plate, cold, on another lattice."""
    return Truth(
        run.plant.plate,
        run._surround,
        start_degC=run.room_degC,
        spacing_m=spacing_m,
        model_error=run.truth.error,
    )
