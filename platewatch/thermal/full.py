"""The plate without linearisation: k(T), cp(T), true losses, loads as extra nodes."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.sparse import coo_array, csr_array

from platewatch.thermal.conduction import InputKind, ThermalModel, loss_watts
from platewatch.thermal.grid import footprint
from platewatch.thermal.plate import Contact
from platewatch.thermal.rim import Ints
from platewatch.types import Array

SLOPE_STEP_K = 1e-3


@dataclass(frozen=True, eq=False)
class FullEquations:
    """capacity(T) dT/dt = rate(T, u); T (n + loads,): the cells, then one node a load.

    The face under a load keeps its loss, as if the load's own surface lost it.
    """

    model: ThermalModel
    loads: tuple[Contact, ...] = ()

    @property
    def size(self) -> int:
        return self.model.grid.n + len(self.loads)

    @cached_property
    def heat(self) -> Array:
        """Watts (n, zones) per watt of each zone."""
        powers = [i.kind is InputKind.POWER for i in self.model.inputs]
        return self.model.B[:, powers]

    @cached_property
    def contacts(self) -> Array:
        """(loads, n) W/K between each load and each cell."""
        grid = self.model.grid
        rows = [load.conductance * footprint(grid, load.shape) for load in self.loads]
        return np.array(rows).reshape(len(rows), grid.n)

    def capacity(self, T: Array) -> Array:
        """(n + loads,) J/K at the temperatures T."""
        cells = self.model.grid.area * self.model.stack.heat_capacity(T[: self.model.grid.n])
        return np.concatenate((cells, [load.heat_capacity for load in self.loads]))

    def heat_content(self, T: Array) -> float:
        """J above 0 degC in plate and loads."""
        n = self.model.grid.n
        plate = self.model.grid.area @ self.model.stack.heat_content(T[:n])
        return float(
            plate + sum(c.heat_capacity * t for c, t in zip(self.loads, T[n:], strict=True))
        )

    def rate(self, T: Array, u: Array) -> Array:
        """Net heat (n + loads,) W into every node."""
        cells, above = T[: self.model.grid.n], T[self.model.grid.n :]
        q = self.power(u) - loss_watts(self.model, cells, u) - self.side_loss(cells, u)
        links = self.model.grid.links
        flow = self._conductance(cells) * (cells[links.i] - cells[links.j])
        q += _gathered(links.j, flow, q.size) - _gathered(links.i, flow, q.size)
        q += self.contacts.T @ above - self.contacts.sum(axis=0) * cells
        return np.concatenate((q, self.contacts @ cells - self.contacts.sum(axis=1) * above))

    def power(self, u: Array) -> Array:
        """Heaters' watts (n,)."""
        return self.heat @ u[: self.heat.shape[1]]

    def lost(self, T: Array, u: Array) -> float:
        """Watts that leave through faces, rim and clamps."""
        cells = T[: self.model.grid.n]
        return float(loss_watts(self.model, cells, u).sum() + self.side_loss(cells, u).sum())

    def side_loss(self, cells: Array, u: Array) -> Array:
        """Watts (n,) that leave through rim and clamps."""
        sides = self.model.sides
        if not sides.cell.size:
            return np.zeros(cells.size)
        flow = self._side_conductance(cells, u) * (cells[sides.cell] - u[sides.into])
        return _gathered(sides.cell, flow, cells.size)

    def jacobian(self, T: Array, u: Array) -> csr_array:
        """-d rate / dT, sparse (n + loads, n + loads) W/K."""
        model, n = self.model, self.model.grid.n
        cells, links, sides = T[:n], model.grid.links, model.sides
        by_i, by_j = self._flow_slopes(cells)
        diagonal = np.zeros(n)
        for face in model.faces:
            diagonal += model.grid.area * face.slopes(cells, u)[0]
        if sides.cell.size:
            diagonal += _gathered(sides.cell, self._side_slopes(cells, u), n)
        diagonal += self.contacts.sum(axis=0)
        rows = [np.arange(n), links.i, links.i, links.j, links.j]
        columns = [np.arange(n), links.i, links.j, links.i, links.j]
        values = [diagonal, by_i, by_j, -by_i, -by_j]
        for number, contact in enumerate(self.contacts):
            touched = np.flatnonzero(contact)
            node = np.full(touched.size, n + number)
            rows += [touched, node, np.array([n + number])]
            columns += [node, touched, np.array([n + number])]
            values += [-contact[touched], -contact[touched], np.array([contact.sum()])]
        entries = np.concatenate(values), (np.concatenate(rows), np.concatenate(columns))
        return csr_array(coo_array(entries, shape=(self.size, self.size)))

    def _conductance(self, cells: Array) -> Array:
        """W/K across each face: harmonic mean of k d."""
        links = self.model.grid.links
        sheet = self.model.stack.sheet_conductance(cells)
        a, b = sheet[links.i], sheet[links.j]
        mean: Array = 2 * a * b / (a + b) * links.length_m / links.distance_m
        return mean

    def _flow_slopes(self, cells: Array) -> tuple[Array, Array]:
        """Derivatives of the heat flow i -> j by T_i and by T_j, W/K."""
        links, stack = self.model.grid.links, self.model.stack
        sheet = stack.sheet_conductance(cells)
        a, b = sheet[links.i], sheet[links.j]
        shape = links.length_m / links.distance_m
        mean = 2 * a * b / (a + b) * shape
        if stack.is_constant:
            return mean, -mean
        slope = stack.sheet_conductance(cells + SLOPE_STEP_K) - sheet
        slope = slope / SLOPE_STEP_K
        difference = cells[links.i] - cells[links.j]
        weight = 2 * shape * difference / (a + b) ** 2
        return mean + weight * b * b * slope[links.i], -mean + weight * a * a * slope[links.j]

    def _side_conductance(self, cells: Array, u: Array) -> Array:
        """W/K of rim and clamps, k midway between the cell and what it is held at."""
        sides = self.model.sides
        here = cells[sides.cell]
        held = sides.film == 0
        halfway = here + 0.5 * held * (u[sides.into] - here)
        return sides.conductance(self._conductivity_at(sides.cell, halfway))

    def _conductivity_at(self, cell: Ints, T: Array) -> Array:
        parts = self.model.stack.parts
        sheet: Array = np.sum([m.k.at(T) * depth[cell] for m, depth in parts], axis=0)
        return sheet / self.model.stack.thickness_m[cell]

    def _side_slopes(self, cells: Array, u: Array) -> Array:
        sides = self.model.sides

        def flow(T: Array) -> Array:
            return self._side_conductance(T, u) * (T[sides.cell] - u[sides.into])

        slope: Array = (flow(cells + SLOPE_STEP_K) - flow(cells)) / SLOPE_STEP_K
        return slope


def _gathered(cell: Ints, watts: Array, n: int) -> Array:
    """Sum of the watts (p,) that belong to each of n cells."""
    return np.bincount(cell, watts, n).astype(np.float64)
