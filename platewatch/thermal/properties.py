"""k(T) and cp(T) in the modes: what the plate conducts and stores beyond its reference.

Each property's excess over its value at the reference temperature is taken at the
nodes of a coarse mesh and is bilinear between them, so that an evenly warm plate is
exact.  With it V'C(T)V da/dt = heat - (V'K(T)V - V'KV) a.  Convective rims keep the
k of the reference: their films resist far more than the half cell behind them.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.linalg.blas import dspmv
from scipy.linalg.lapack import dppsv

from platewatch.thermal.conduction import ThermalModel
from platewatch.thermal.faces import Stack
from platewatch.thermal.grid import Grid, hats
from platewatch.thermal.plate import Material, Table
from platewatch.thermal.rim import Ints
from platewatch.types import Array

NODES = 30
# A region whose property never changes by more than this share is taken as constant.
LEAST_CHANGE = 2e-3
DRAWN = 0.01
# Held over a step, the warming of quick modes overshoots for ever where heat spreads twice
# as fast as at the reference; from this ratio on the step is told how long it is held.
STEADY_RATIO = 1.5


@dataclass(frozen=True, eq=False)
class Curve:
    """Relative excess (t,) of a property over its value at the reference, at degC (t,)."""

    degC: Array
    excess: Array

    def at(self, T: Array) -> Array:
        return np.interp(T, self.degC, self.excess)


@dataclass(frozen=True, eq=False)
class Excess:
    """One property of one region: plate or inset, with the layers on it.

    rows (p, r): temperature of the region at each node
    shape (p, r (r + 1) / 2): what an excess of 1 about each node adds to the modal
        matrix, lower triangle row by row
    """

    rows: Array
    curve: Curve
    shape: Array

    def at(self, a: Array) -> Array:
        """(p,) the excess at the nodes in the state a (r,)."""
        return self.curve.at(self.rows @ a)

    def matrix(self, a: Array) -> Array:
        """(r (r + 1) / 2,) what it adds at the state a (r,)."""
        return np.asarray(self.at(a) @ self.shape)


@dataclass(frozen=True, eq=False)
class HeldRim:
    """Links to held edges, whose k is that midway between cell and edge.

    rows (p, r): temperatures of the cells;  into (p,): inputs;  conductance (p,) W/K
    curves: one a region, with its share (p,) of the links
    """

    rows: Array
    into: Ints
    conductance: Array
    curves: tuple[tuple[Curve, Array], ...]

    def heat(self, a: Array, u: Array) -> Array:
        """(r,) modal heat that flows out beyond what the linear model says."""
        cell, edge = self.rows @ a, u[self.into]
        halfway, excess = 0.5 * (cell + edge), np.zeros(edge.size)
        for curve, share in self.curves:
            excess += share * curve.at(halfway)
        return np.asarray((excess * self.conductance * (cell - edge)) @ self.rows)


@dataclass(frozen=True, eq=False)
class Properties:
    """The changing properties of one plate.

    rates (r,) 1/s at the reference;  None where heat never spreads so much faster that a
        held step must be shortened
    """

    conducts: tuple[Excess, ...]
    stores: tuple[Excess, ...]
    rim: HeldRim | None
    rates: Array | None

    def conducted(self, a: Array, u: Array) -> Array:
        """(r,) modal heat that conduction takes beyond what it takes at the reference."""
        taken = self.rim.heat(a, u) if self.rim else np.zeros(a.size)
        for excess in self.conducts:
            taken += dspmv(a.size, 1.0, excess.matrix(a), a)
        return taken

    def warming(self, a: Array, heat: Array, held_s: float = 0.0) -> Array:
        """da/dt (r, k) that modal heat (r, k) makes at the plate's own heat capacity.

        held_s: where heat spreads much faster than at the reference, it is weakened so
        that quick modes settle when the step at the reference's rates holds it so long
        """
        warming = self._stored(a, heat) if self.stores else heat
        if self.rates is None or held_s == 0:
            return warming
        return warming * self._settling(a, self.rates * held_s)[:, None]

    def _stored(self, a: Array, heat: Array) -> Array:
        C = self.stores[0].matrix(a)
        for excess in self.stores[1:]:
            C += excess.matrix(a)
        number = np.arange(a.size)
        C[number * (number + 3) // 2] += 1.0
        return np.asarray(dppsv(a.size, C, heat)[0])

    def _settling(self, a: Array, turns: Array) -> Array:
        """(r,) (1 - exp(-x s)) / (x (1 - exp(-s))) for s = rate x time (r,), x the largest
        ratio of diffusivities on the plate; exact where it is the same all over."""
        k = 1 + max((float(e.at(a).max()) for e in self.conducts), default=0.0)
        c = 1 + min((float(e.at(a).min()) for e in self.stores), default=0.0)
        faster = max(k / c, 1.0)
        s = np.maximum(turns, 1e-9)
        return np.asarray(np.expm1(-faster * s) / (faster * np.expm1(-s)))


def build_properties(model: ThermalModel, V: Array, rates: Array) -> Properties | None:
    """None where every property is constant, or as good as constant."""
    if model.stack.is_constant:
        return None
    reference, links, weight = model.reference_degC, model.grid.links, hats(model.grid, NODES)
    sheet = model.stack.sheet_conductance(reference)
    a, b = sheet[links.i], sheet[links.j]
    link = 2 * a * b / (a + b) ** 2 * links.length_m / links.distance_m
    across = V[links.i] - V[links.j]
    conducts, stores = [], []
    for curve, share in _regions(model, _conductivity):
        # The harmonic mean of two cells changes by b/(a+b) and a/(a+b) of their changes.
        w = share[:, None] * weight
        by = link[:, None] * (b[:, None] * w[links.i] + a[:, None] * w[links.j])
        conducts.append(Excess(_nodal(V, weight, share, model.grid), curve, _shape(across, by, w)))
    for curve, share in _regions(model, _volume_heat):
        w = share[:, None] * weight
        by = model.capacity[:, None] * w
        stores.append(Excess(_nodal(V, weight, share, model.grid), curve, _shape(V, by, w)))
    rim = _held_rim(model, V)
    if not (conducts or stores or rim):
        return None
    most = 1 + max((float(e.curve.excess.max()) for e in conducts), default=0.0)
    least = 1 + min((float(e.curve.excess.min()) for e in stores), default=0.0)
    told = rates if most / least > STEADY_RATIO else None
    return Properties(tuple(conducts), tuple(stores), rim, told)


def _conductivity(material: Material) -> Table:
    return material.k


def _volume_heat(material: Material) -> Table:
    return Table(material.cp.degC, tuple(material.rho * cp for cp in material.cp.value))


def _regions(model: ThermalModel, of: Callable[[Material], Table]) -> list[tuple[Curve, Array]]:
    """Plate and insets, each with all layers, where the property changes.

    The share (n,) of each region in the property of each cell at the reference.
    """
    plate, parts, reference = model.plate, model.stack.parts, model.reference_degC
    depths = [plate.thickness_m, *(i.thickness_m or plate.thickness_m for i in plate.insets)]
    layers = [(of(layer.material), layer.thickness_m) for layer in plate.layers]
    total = _total(model.stack, of, reference)
    found = []
    for (material, depth), full in zip(parts, depths, strict=False):
        tables = [(of(material), full), *layers]
        degC = np.unique(np.concatenate([table.degC for table, _ in tables]))
        here = sum(table.at(reference) * d for table, d in tables)
        values: Array = np.sum([table.at(degC) * d for table, d in tables], axis=0)
        if np.ptp(values) > LEAST_CHANGE * float(np.min(values)):
            found.append((Curve(degC, values / here - 1), depth / full * here / total))
    return found


def _total(stack: Stack, of: Callable[[Material], Table], T: float) -> Array:
    total: Array = np.sum([of(m).at(T) * depth for m, depth in stack.parts], axis=0)
    return total


def _nodal(V: Array, hat: Array, share: Array, grid: Grid) -> Array:
    """(p, r) values at the nodes that fit the modes best in the region.

    Nodes with little of it about them are drawn to the mean there.
    """
    there = hat * (share * grid.area)[:, None]
    carried = there.any(axis=0)
    there, hat = there[:, carried], hat[:, carried]
    about = np.diag(there.sum(axis=0))
    mean = (there.T @ V) / np.diag(about)[:, None]
    fitted = np.linalg.solve(there.T @ hat + DRAWN * about, there.T @ V + DRAWN * about @ mean)
    return np.ascontiguousarray(fitted)


def _shape(modes: Array, by: Array, weight: Array) -> Array:
    """modes (q, r) at cells or across links, each adding by (q, p) of the nodes' excess."""
    lower = np.tril_indices(modes.shape[1])
    shape = []
    for column in by[:, weight.any(axis=0)].T:
        there = np.flatnonzero(column)
        near = modes[there]
        shape.append((near.T @ (column[there, None] * near))[lower])
    return np.array(shape)


def _held_rim(model: ThermalModel, V: Array) -> HeldRim | None:
    sides = model.sides
    held = sides.film == 0
    regions = _regions(model, _conductivity) if held.any() else []
    if not regions:
        return None
    cell = sides.cell[held]
    k = model.stack.conductivity(model.reference_degC)
    conductance = sides.conductance(k[sides.cell])[held]
    curves = tuple((curve, share[cell]) for curve, share in regions)
    return HeldRim(np.ascontiguousarray(V[cell]), sides.into[held], conductance, curves)
