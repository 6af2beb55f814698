"""The two faces and the layers of a plate: what they lose, conduct and store."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from shapely.geometry.base import BaseGeometry

from platewatch.thermal.grid import Grid, footprint
from platewatch.thermal.losses import (
    forced,
    natural_down,
    natural_up,
    radiation_flux,
    radiation_slope,
)
from platewatch.thermal.plate import Correlation, Material, Plate, Surface, Table, geometry
from platewatch.types import Array

LEAST_SLOPE = 0.1  # W/m2K


@dataclass(frozen=True, eq=False)
class Face:
    """One side of the plate.

    ambient, surroundings: numbers of inputs;  length_m: of the correlation
    emissivity: 0 where the coefficient is the whole loss
    """

    surface: Surface
    ambient: int
    surroundings: int
    emissivity: float
    length_m: float

    @property
    def is_linear(self) -> bool:
        return self.surface.correlation is None and self.emissivity == 0

    def convection(self, T: Array, T_amb: float) -> Array:
        """W/m2 at the temperatures T, degC."""
        surface = self.surface
        match surface.correlation:
            case None:
                h: Array | float = surface.coefficient or 0.0
            case Correlation.NATURAL_UP:
                h = natural_up(T, T_amb, self.length_m)
            case Correlation.NATURAL_DOWN:
                h = natural_down(T, T_amb, self.length_m)
            case Correlation.FORCED:
                h = forced(surface.speed_m_s or 0.0, T, T_amb, self.length_m)
        return h * (T - T_amb)

    def flux(self, T: Array, u: Array) -> Array:
        """Loss, W/m2, at the temperatures T of any places and the inputs u (m,)."""
        lost = self.convection(T, float(u[self.ambient]))
        if self.is_linear:
            return lost
        return lost + radiation_flux(self.emissivity, T, float(u[self.surroundings]))

    def slopes(self, T: Array, u: Array) -> tuple[Array, Array, float]:
        """Derivatives of the flux by T, ambient and surroundings, W/m2K.

        Natural convection has no slope at ambient; a small one keeps K regular there.
        """
        if self.surface.correlation is None:
            h = np.full_like(T, self.surface.coefficient or 0.0)
            return self._with_radiation(h, -h, T, u)
        step, T_amb = 1e-3, float(u[self.ambient])
        by_T = (self.convection(T + step, T_amb) - self.convection(T - step, T_amb)) / (2 * step)
        by_amb = (self.convection(T, T_amb + step) - self.convection(T, T_amb - step)) / (2 * step)
        return self._with_radiation(np.maximum(by_T, LEAST_SLOPE), by_amb, T, u)

    def _with_radiation(
        self, by_T: Array, by_amb: Array, T: Array, u: Array
    ) -> tuple[Array, Array, float]:
        by_sur = -float(radiation_slope(self.emissivity, float(u[self.surroundings])))
        return by_T + radiation_slope(self.emissivity, T), by_amb, by_sur


@dataclass(frozen=True, eq=False)
class Stack:
    """What lies under each cell, through all layers.

    parts: material and its volume per area of the cell (n,) m;  thickness_m (n,)
    """

    parts: tuple[tuple[Material, Array], ...]
    thickness_m: Array

    def sheet_conductance(self, T: Array | float) -> Array:
        """k d, W/K, at the temperatures T (n,) degC."""
        total: Array = np.sum([m.k.at(T) * depth for m, depth in self.parts], axis=0)
        return total

    def conductivity(self, T: Array | float) -> Array:
        """k, W/mK, averaged over the thickness."""
        return self.sheet_conductance(T) / self.thickness_m

    def heat_capacity(self, T: Array | float) -> Array:
        """rho cp d, J/m2K, at the temperatures T (n,) degC."""
        total: Array = np.sum([m.rho * m.cp.at(T) * depth for m, depth in self.parts], axis=0)
        return total

    def heat_content(self, T: Array) -> Array:
        """J/m2 from 0 degC up to the temperatures T (n,) degC."""
        total: Array = np.sum([m.rho * _integral(m.cp, T) * d for m, d in self.parts], axis=0)
        return total

    @property
    def is_constant(self) -> bool:
        return all(m.k.is_constant and m.cp.is_constant for m, _ in self.parts)


def build_stack(plate: Plate, grid: Grid) -> Stack:
    """Insets replace the base plate where they lie; later ones win; layers lie everywhere."""
    base = np.ones(grid.n)
    parts: list[tuple[Material, Array]] = []
    for number, inset in enumerate(plate.insets):
        region: BaseGeometry = geometry(inset.shape)
        for later in plate.insets[number + 1 :]:
            region = region.difference(geometry(later.shape))
        share = footprint(grid, region) / grid.area
        base = base - share
        parts.append(
            (inset.material or plate.material, share * (inset.thickness_m or plate.thickness_m))
        )
    parts.insert(0, (plate.material, np.clip(base, 0, 1) * plate.thickness_m))
    parts += [(layer.material, np.full(grid.n, layer.thickness_m)) for layer in plate.layers]
    thickness: Array = np.sum([depth for _, depth in parts], axis=0)
    return Stack(tuple(parts), thickness)


def _integral(table: Table, T: Array) -> Array:
    """Integral of a table from 0 degC to the temperatures T, exact between its points."""
    knots = np.union1d(np.asarray(table.degC), (-1e4, 0.0, 1e4))
    value = table.at(knots)
    area = np.concatenate(((0.0,), np.cumsum(np.diff(knots) * (value[1:] + value[:-1]) / 2)))
    area -= area[np.searchsorted(knots, 0.0)]
    below = np.clip(np.searchsorted(knots, T, side="right") - 1, 0, knots.size - 2)
    part: Array = area[below] + (T - knots[below]) * (value[below] + table.at(T)) / 2
    return part
