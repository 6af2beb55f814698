"""The true plate: a heat balance on its own lattice, stepped in time.

C dT/dt = -A T + S(t) - losses(T), bilinear elements with lumped capacity.
Conduction, rim, clamps, plain coefficients and loads are implicit; the curved
losses explicit, in the two-stage scheme ARS(2,2,2) of Ascher, Ruuth & Spiteri
(1997): second order, L-stable, one factorisation, heat conserved to rounding.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from copy import copy
from dataclasses import dataclass
from typing import Protocol, TypeVar

import numpy as np
from scipy import sparse
from scipy.sparse.linalg import splu

from platewatch.thermal.plate import (
    Ambient,
    Edge,
    EdgeKind,
    Material,
    Plate,
    Rectangle,
    Side,
    Surface,
    Zone,
)
from platewatch.types import Array
from sim_sensors.lattice import (
    Ints,
    Lattice,
    RimPiece,
    bounds,
    build_lattice,
    outline_points,
    rim,
)
from sim_sensors.surfaces import correlated_loss

GAMMA = 1.0 - 1.0 / np.sqrt(2.0)
DELTA = 1.0 - 1.0 / (2.0 * GAMMA)
PROPERTY_REFRESH_K = 3.0  # tables of k and cp are read again after this much change
HELD_STIFFNESS = 50.0  # a held rim conducts like 1/50 of an element of plate

T = TypeVar("T")
Solver = Callable[[Array], Array]


class Source(Protocol):
    """Heat put in at a time within the step, W: (n,)."""

    def __call__(self, after_s: float) -> Array: ...


@dataclass(frozen=True)
class ModelError:
    """What the true plate has, as a multiple of what its description says."""

    k: float = 1.0
    power: float = 1.0
    cp: float = 1.0
    losses: float = 1.0
    emissivity: float = 1.0


AS_DESCRIBED = ModelError()
STATED_ERROR = ModelError(k=0.96, power=1.03, cp=0.98)
"""The demo's plate conducts 4 % worse, its heaters give 3 % more and it holds 2 %
less heat than the description says: each makes the true peak higher or earlier
than a reader of the description expects."""


@dataclass(frozen=True)
class Load:
    """Something lying on the plate, uniform in temperature.

    conductance: of the contact, W/m2K;  cp J/kgK;  start_degC when put on
    """

    footprint: Rectangle
    mass_kg: float
    conductance: float = 400.0
    cp: float = 490.0
    start_degC: float = 20.0


@dataclass(frozen=True)
class Balance:
    """Heat since the start, J, each kept by its own sum."""

    put_in: float = 0.0
    lost: float = 0.0


@dataclass(frozen=True)
class _Operator:
    """What one factorisation holds.  Unknowns: nodes, then loads.

    A T - forcing is the heat that leaves by implicit links, W
    at_degC: the field whose k and cp were used
    """

    capacity: Array
    A: sparse.csr_array
    forcing: Array
    outward: Array
    solve: Solver
    step_s: float
    at_degC: Array


class Truth:
    """State of the true plate.  `copy()` is cheap: the factorisation is shared.

    surround_degC: temperature by bus channel, used wherever an ambient names one
    """

    def __init__(
        self,
        plate: Plate,
        surround_degC: Mapping[str, float],
        *,
        start_degC: float = 22.0,
        spacing_m: float = 0.015,
        model_error: ModelError = AS_DESCRIBED,
    ) -> None:
        self.plate = plate
        self.error = model_error
        self.lattice = build_lattice(plate, spacing_m)
        self.loss_factor = model_error.losses
        self.loads: tuple[Load, ...] = ()
        self.balance = Balance()
        self._surround = dict(surround_degC)
        self._plies = _plies(plate, self.lattice)
        self._rim = [
            (piece, *self.lattice.locate(piece.x, piece.y))
            for piece in rim(plate, min(self.lattice.hx, self.lattice.hy) / 2)
        ]
        self._area = self.lattice.gather(self.lattice.element_area)
        self._covers = np.zeros((0, self.lattice.nodes))
        self._T = np.full(self.lattice.nodes, float(start_degC))
        self._operator: _Operator | None = None

    def copy(self) -> Truth:
        """An independent continuation of the same plate."""
        twin = copy(self)
        twin._T = self._T.copy()
        twin._surround = dict(self._surround)
        return twin

    @property
    def field(self) -> Array:
        """Temperature of the nodes (n,), degC."""
        return self._T[: self.lattice.nodes]

    @property
    def load_degC(self) -> Array:
        """Temperature of each load in the order they were put on."""
        return self._T[self.lattice.nodes :]

    def peak(self) -> tuple[float, float, float]:
        """Hottest place on the plate: degC, x, y."""
        inside = np.where(self.lattice.inside, self.field, -np.inf)
        node = int(np.argmax(inside))
        return float(inside[node]), float(self.lattice.x[node]), float(self.lattice.y[node])

    def zone_shape(self, zone: Zone) -> Array:
        """Share of the zone's watts that each node gets (n,); sums to 1."""
        weights = np.sum([self.lattice.spread(shape) for shape in zone.shapes], axis=0)
        return np.asarray(weights / weights.sum())

    def put_on(self, load: Load) -> None:
        """Lay a load on the plate; it stays until `take_off`."""
        self._covers = np.vstack((self._covers, self.lattice.spread(load.footprint)))
        self._T = np.append(self._T, load.start_degC)
        self.loads = (*self.loads, load)
        self._operator = None

    def take_off(self) -> None:
        """Lift all loads."""
        self._covers = np.zeros((0, self.lattice.nodes))
        self._T = self.field.copy()
        self.loads = ()
        self._operator = None

    def scale_losses(self, factor: float) -> None:
        """A draught or a lid: every convective loss times `factor` from now on."""
        self.loss_factor = self.error.losses * factor
        self._operator = None

    def set_surround(self, channel: str, degC: float) -> None:
        self._surround[channel] = degC
        self._operator = None

    def stored_J(self) -> float:
        """Heat above 0 degC at the present properties, loads included."""
        return float(self._capacity(self.field) @ self._T)

    def advance(self, step_s: float, source: Source) -> None:
        """One step of `step_s` with the heat `source` gives at times within it."""
        op = self._current(step_s)
        c_over_dt = op.capacity / step_s
        curved0 = self._curved_loss(self._T)
        s1 = self._padded(source(GAMMA * step_s)) + op.forcing
        s2 = self._padded(source(step_s)) + op.forcing
        Y1 = op.solve(c_over_dt * self._T + GAMMA * (s1 - curved0))
        curved1 = self._curved_loss(Y1)
        inner = s1 - op.A @ Y1
        curved = DELTA * curved0 + (1 - DELTA) * curved1
        Y2 = op.solve(c_over_dt * self._T - curved + (1 - GAMMA) * inner + GAMMA * s2)
        given = (1 - GAMMA) * s1 + GAMMA * s2 - op.forcing
        leaving = op.outward @ ((1 - GAMMA) * Y1 + GAMMA * Y2) - op.forcing.sum()
        self.balance = Balance(
            self.balance.put_in + step_s * float(given.sum()),
            self.balance.lost + step_s * float(leaving + curved.sum()),
        )
        self._T = Y2

    def _padded(self, nodal: Array) -> Array:
        return np.append(nodal, np.zeros(len(self.loads)))

    def _current(self, step_s: float) -> _Operator:
        """The factorisation in use, made anew when something changed."""
        op = self._operator
        stale = op is None or op.step_s != step_s
        if op is not None and not stale and not all(_is_constant(m) for m, _ in self._plies):
            moved = float(np.abs(self._T - op.at_degC).max())
            stale = moved > PROPERTY_REFRESH_K
        if op is None or stale:
            op = self._factorise(step_s)
            self._operator = op
        return op

    def _factorise(self, step_s: float) -> _Operator:
        at = self.field
        n, loads = self.lattice.nodes, len(self.loads)
        element_degC = at[self.lattice.corners].mean(axis=1)
        sheet = sum((m.k.at(element_degC) * d for m, d in self._plies), start=np.zeros(1))
        conduction = self.lattice.conduction(self.error.k * np.asarray(sheet))
        outward, forcing = self._links(np.asarray(sheet))
        A = sparse.csr_array(sparse.block_diag((conduction, sparse.csr_array((loads, loads)))))
        for k, load in enumerate(self.loads):
            A = A + _bond(n + loads, n + k, load.conductance * self._covers[k])
        A = sparse.csr_array(A + sparse.diags_array(outward))
        capacity = self._capacity(at)
        matrix = sparse.csc_array(sparse.diags_array(capacity / step_s) + GAMMA * A)
        factor = splu(matrix, permc_spec="MMD_AT_PLUS_A", options={"SymmetricMode": True})
        return _Operator(capacity, A, forcing, outward, factor.solve, step_s, self._T.copy())

    def _capacity(self, at_degC: Array) -> Array:
        element_degC = at_degC[self.lattice.corners].mean(axis=1)
        area = self.lattice.element_area
        per_element = sum(
            (m.rho * m.cp.at(element_degC) * d * area for m, d in self._plies),
            start=np.zeros(1),
        )
        nodal = self.error.cp * self.lattice.gather(np.asarray(per_element))
        return np.append(nodal, [load.mass_kg * load.cp for load in self.loads])

    def _links(self, sheet: Array) -> tuple[Array, Array]:
        """Plain W/K links to the surroundings: conductance and W at 0 degC, (n + loads,)."""
        outward = np.zeros(self.lattice.nodes + len(self.loads))
        forcing = np.zeros_like(outward)

        def link(w_per_k: Array, degC: float, nodes: Ints | slice = slice(None)) -> None:
            outward[nodes] += w_per_k
            forcing[nodes] += w_per_k * degC

        for surface, exposed in self._faces():
            if surface.coefficient is not None:
                h = self.loss_factor * surface.coefficient
                link(h * exposed, self._degC(surface.ambient))
        for piece, nodes, weights in self._rim:
            w_per_k, ambient = self._rim_link(piece, float(sheet.mean()))
            link(w_per_k * weights, self._degC(ambient), nodes)
        for clamp in self.plate.clamps:
            nodes, weights = self.lattice.locate(clamp.x_m, clamp.y_m)
            ambient = _else(clamp.ambient, self.plate.top.ambient)
            link(clamp.w_per_k * weights, self._degC(ambient), nodes)
        return outward, forcing

    def _faces(self) -> tuple[tuple[Surface, Array], ...]:
        """Each face with the area (n + loads,) it shows; a load covers the top."""
        covered = self._covers.sum(axis=0)
        top = np.append(self._area - covered, self._covers.sum(axis=1))
        return (self.plate.top, top), (self.plate.bottom, self._padded(self._area))

    def _curved_loss(self, T: Array) -> Array:
        """Losses by correlation and radiation, W: (n + loads,)."""
        total = np.zeros_like(T)
        lengths = _lengths(self.plate)
        for surface, exposed in self._faces():
            if surface.correlation is None:
                continue
            ambient = self._degC(surface.ambient)
            around = self._degC(_else(surface.surroundings, surface.ambient))
            emissivity = _else(surface.emissivity, self.plate.material.emissivity)
            flux = correlated_loss(
                surface,
                T,
                ambient,
                around,
                emissivity * self.error.emissivity,
                lengths,
                self.loss_factor,
            )
            total += exposed * flux
        return total

    def _rim_link(self, piece: RimPiece, sheet: float) -> tuple[float, Ambient]:
        """W/K of a piece of rim, and to what."""
        for edge in reversed(self.plate.edges):
            if not _covers(edge, piece, self.plate):
                continue
            ambient = _else(edge.ambient, self.plate.top.ambient)
            match edge.kind:
                case EdgeKind.INSULATED:
                    return 0.0, ambient
                case EdgeKind.HELD:
                    stiff = HELD_STIFFNESS * sheet * self.error.k / self.lattice.hx
                    return stiff * piece.length, _else(edge.held, ambient)
                case EdgeKind.CONVECTIVE:
                    thickness = _thickness(self.plate)
                    per_m = _else(edge.w_per_k_per_m, thickness * (edge.coefficient or 0.0))
                    return self.loss_factor * per_m * piece.length, ambient
        return 0.0, self.plate.top.ambient

    def _degC(self, ambient: Ambient) -> float:
        return self._surround[ambient] if isinstance(ambient, str) else ambient


def _plies(plate: Plate, lattice: Lattice) -> list[tuple[Material, Array]]:
    """Materials with their thickness per element (e,): base, insets, layers."""
    base = np.full(lattice.part.size, plate.thickness_m)
    insets: list[tuple[Material, Array]] = []
    for inset in plate.insets:
        part = lattice.covered(inset.shape)
        base = base * (1.0 - part)
        insets = [(m, d * (1.0 - part)) for m, d in insets]
        insets.append(
            (inset.material or plate.material, part * _else(inset.thickness_m, plate.thickness_m))
        )
    layers = [(y.material, np.full(base.size, y.thickness_m)) for y in plate.layers]
    return [(plate.material, base), *insets, *layers]


def _thickness(plate: Plate) -> float:
    return plate.thickness_m + sum(layer.thickness_m for layer in plate.layers)


def _covers(edge: Edge, piece: RimPiece, plate: Plate) -> bool:
    if edge.side is None and edge.segment is None:
        return True
    if edge.segment is not None:
        return piece.segment == edge.segment
    sides = {1: Side.Y_MIN, 2: Side.X_MAX, 3: Side.Y_MAX, 4: Side.X_MIN}
    return isinstance(plate.outline, Rectangle) and sides.get(piece.segment) is edge.side


def _bond(size: int, load: int, w_per_k: Array) -> sparse.csr_array:
    """Links of one load to the nodes under it, as a symmetric matrix (size, size)."""
    nodes = np.flatnonzero(w_per_k)
    w = w_per_k[nodes]
    other = np.full(nodes.size, load)
    rows = np.concatenate((nodes, other, nodes, other))
    columns = np.concatenate((nodes, other, other, nodes))
    values = np.concatenate((w, w, -w, -w))
    return sparse.csr_array(sparse.coo_array((values, (rows, columns)), shape=(size, size)))


def _lengths(plate: Plate) -> tuple[float, float]:
    """Area / perimeter of the outline, and its extent along x, m."""
    corners = np.array(outline_points(plate.outline))
    following = np.roll(corners, -1, axis=0)
    cross = corners[:, 0] * following[:, 1] - following[:, 0] * corners[:, 1]
    perimeter = np.hypot(*(following - corners).T).sum()
    x0, _, x1, _ = bounds(plate.outline)
    return float(abs(cross.sum()) / 2 / perimeter), x1 - x0


def _is_constant(material: Material) -> bool:
    return material.k.is_constant and material.cp.is_constant


def _else(value: T | None, otherwise: T) -> T:
    return otherwise if value is None else value
