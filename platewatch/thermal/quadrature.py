"""What the linearised losses leave out, on a few places: quick enough for every tick."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from platewatch.thermal.conduction import ThermalModel
from platewatch.thermal.faces import Face
from platewatch.thermal.losses import STEFAN_BOLTZMANN, ZERO_DEGC_K
from platewatch.types import Array

PLACES = 48
DIFFERENCES_K = np.arange(-200.0, 1200.0, 1.0)  # plate over ambient
AMBIENTS_DEGC = np.arange(-40.0, 401.0, 20.0)


@dataclass(frozen=True, eq=False)
class LossTable:
    """Convection of one face, W/m2: flux (k, d) over AMBIENTS_DEGC and DIFFERENCES_K.

    Kept over the difference because the correlations have their kink where it is zero.
    """

    face: Face
    flux: Array

    def at(self, T: Array, u: Array) -> Array:
        """Convection and radiation, W/m2, at the temperatures T (p,) degC."""
        T_amb, T_sur = float(u[self.face.ambient]), float(u[self.face.surroundings])
        position = (T_amb - AMBIENTS_DEGC[0]) / (AMBIENTS_DEGC[1] - AMBIENTS_DEGC[0])
        position = min(max(position, 0.0), AMBIENTS_DEGC.size - 1.001)
        lower = int(position)
        part = position - lower
        row = (1 - part) * self.flux[lower] + part * self.flux[lower + 1]
        square = (T + ZERO_DEGC_K) ** 2
        radiation = square * square - (T_sur + ZERO_DEGC_K) ** 4
        grey = self.face.emissivity * STEFAN_BOLTZMANN
        convection: Array = np.interp(T - T_amb, DIFFERENCES_K, row)
        return convection + grey * radiation


@dataclass(frozen=True, eq=False)
class Quadrature:
    """rows (p, r): temperature of the places;  spread (r, p): W/m2 there to modal watts.

    slope, constant, by_input (m,): the linear loss of these faces, W/m2
    """

    rows: Array
    spread: Array
    slope: float
    constant: float
    by_input: Array
    tables: tuple[LossTable, ...]

    def excess(self, a: Array, u: Array) -> Array:
        """V'(linear loss - true loss) (r,) of the state a (r,) and inputs u (m,)."""
        T = self.rows @ a
        linear = self.slope * T + (self.constant + float(self.by_input @ u))
        for table in self.tables:
            linear -= table.at(T, u)
        return self.spread @ linear

    def radiated(self, a: Array, u: Array) -> Array:
        """V'(net radiation) (r,) of the state a (r,) and inputs u (m,), in modal watts."""
        square = (self.rows @ a + ZERO_DEGC_K) ** 2
        fourth = square * square
        flux = np.zeros_like(fourth)
        for table in self.tables:
            grey = table.face.emissivity * STEFAN_BOLTZMANN
            T_sur = float(u[table.face.surroundings])
            flux += grey * (fourth - (T_sur + ZERO_DEGC_K) ** 4)
        return self.spread @ flux


def build_quadrature(model: ThermalModel, V: Array) -> Quadrature | None:
    """About 48 places, each the mean of a block of cells; None if every loss is linear."""
    bent = [face for face in model.faces if not face.is_linear]
    if not bent:
        return None
    member, area = _blocks(model)
    rows = (member * model.grid.area) @ V / area[:, None]
    reference, nominal = np.array([model.reference_degC]), model.nominal
    slope, constant, by_input = 0.0, 0.0, np.zeros(nominal.size)
    for face in bent:
        by_T, by_amb, by_sur = face.slopes(reference, nominal)
        slope += float(by_T[0])
        constant += float(face.flux(reference, nominal)[0] - by_T[0] * model.reference_degC)
        by_input[face.ambient] += by_amb[0]
        by_input[face.surroundings] += by_sur
    constant -= float(by_input @ nominal)
    tables = tuple(_table(face) for face in bent)
    return Quadrature(rows, rows.T * area, slope, constant, by_input, tables)


def _blocks(model: ThermalModel) -> tuple[Array, Array]:
    """Membership (p, n) of cells in about square blocks, and the blocks' areas (p,)."""
    grid = model.grid
    wide, high = grid.nx * grid.hx, grid.ny * grid.hy
    across = max(1, round(float(np.sqrt(PLACES * wide / high))))
    upward = max(1, round(PLACES / across))
    column = np.minimum(grid.columns * across // grid.nx, across - 1)
    row = np.minimum(grid.rows * upward // grid.ny, upward - 1)
    labels, number = np.unique(row * across + column, return_inverse=True)
    member = (number[None, :] == np.arange(labels.size)[:, None]).astype(np.float64)
    return member, member @ grid.area


def _table(face: Face) -> LossTable:
    rows = []
    for ambient in AMBIENTS_DEGC:
        above_zero = np.maximum(DIFFERENCES_K, 10.0 - ZERO_DEGC_K - ambient)
        rows.append(face.convection(ambient + above_zero, float(ambient)))
    return LossTable(face, np.array(rows))
