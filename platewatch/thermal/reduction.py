"""A few modes instead of thousands of cells: T = V a, with da/dt = -rates a + G u + g0.

Ritz modes: the constant field, the static response to every input and the slowest
eigenmodes of the plate, made orthonormal in C and turned to principal axes.  Steady
states of the described inputs are exact; what is left out is fast.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from scipy.linalg import eigh
from scipy.sparse import diags_array
from scipy.sparse.linalg import LinearOperator, eigsh

from platewatch.errors import PlateError
from platewatch.thermal.conduction import Face, ThermalModel, input_vector, static_solver, steady
from platewatch.thermal.grid import Ints, point_row
from platewatch.thermal.stepping import GAMMA, Factored, factor, one_step
from platewatch.types import Array

MOST_EIGENMODES = 48
START_ORDERS = 8
HEATUP_DOUBLINGS = 7
HEATUP_STEPS = 4  # of each size
QUADRATURE = 48  # places where the reduced model sees the true loss


@dataclass(frozen=True, eq=False)
class LossTable:
    """Convection of one face, W/m2, over plate temperature and ambient.

    degC: even steps;  ambient_degC (k,);  flux (k, degC.size)
    rows (p,): emissivity at the quadrature places
    """

    face: Face
    degC: Array
    ambient_degC: Array
    flux: Array
    emissivity: Array

    def at(self, T: Array, u: Array) -> Array:
        """W/m2 at the quadrature places' temperatures T (p,)."""
        T_amb, T_sur = float(u[self.face.ambient]), float(u[self.face.surroundings])
        step = self.ambient_degC[1] - self.ambient_degC[0]
        place = min(max((T_amb - self.ambient_degC[0]) / step, 0.0), self.flux.shape[0] - 1.001)
        lower = int(place)
        part = place - lower
        # The tables are over T - T_amb, where the correlations have their kink.
        row = (1 - part) * self.flux[lower] + part * self.flux[lower + 1]
        convection = np.interp(T - T_amb, self.degC, row)
        square = (T + 273.15) ** 2
        return convection + self.emissivity * (square * square - (T_sur + 273.15) ** 4)


@dataclass(frozen=True, eq=False)
class Quadrature:
    """The nonlinear part of the losses on a few places.

    rows (p, r): their temperature from a;  spread (r, p): W/m2 there to modal watts
    slope (p,), constant (p,), by_input (p, m): the linear loss W/m2 there
    """

    rows: Array
    spread: Array
    slope: Array
    constant: Array
    by_input: Array
    tables: tuple[LossTable, ...]


@dataclass(frozen=True, eq=False)
class ReducedModel:
    """da/dt = -rates a + G u + g0 + V' q_extra;  T = V a.

    V (n, r) with V'C V = 1;  rates (r,) 1/s;  G (r, m);  g0 (r,)
    error_K: largest difference to the full model over a heat-up, measured when built
    basis_hash: gives a stored state its meaning
    """

    V: Array
    rates: Array
    G: Array
    g0: Array
    model: ThermalModel
    error_K: float
    basis_hash: str
    quadrature: Quadrature | None = field(repr=False)

    @property
    def order(self) -> int:
        return self.rates.size

    @property
    def inputs(self) -> tuple[object, ...]:
        return self.model.inputs


def reduce(model: ThermalModel, order: int | None = None, tolerance_K: float = 0.1) -> ReducedModel:
    """The reduced model of a plate; the same description gives the same basis.

    order: number of modes; else the fewest whose error over a heat-up is below
    tolerance_K, as far as 48 eigenmodes lead.  Raises PlateError for an order that
    cannot hold the static responses.
    """
    fixed = _static_fields(model)
    modes = _slowest_modes(model, MOST_EIGENMODES if order is None else order)
    basis = _orthonormal(np.column_stack((fixed, modes)), model.capacity)
    least = min(basis.shape[1], _rank(fixed, model.capacity))
    reference = _heat_up(model)
    if order is not None:
        if order < least:
            raise PlateError(f"a reduced order of {order} is too low; this plate needs {least}")
        candidates = [min(order, basis.shape[1])]
    else:
        candidates = [*range(least + START_ORDERS, basis.shape[1], 4), basis.shape[1]]
    for r in candidates:
        V, rates = _principal(model, basis[:, :r])
        error = _heat_up_error(model, V, rates, reference)
        if error <= tolerance_K:
            break
    return _finished(model, V, rates, error)


def project(reduced: ReducedModel, T: Array) -> Array:
    """a (r,) of a field T (n,) degC: the nearest in heat content."""
    return reduced.V.T @ (reduced.model.capacity * T)


def reconstruct(reduced: ReducedModel, a: Array) -> Array:
    """T (n,) degC."""
    return reduced.V @ a


def field_rows(reduced: ReducedModel, cells: Ints) -> Array:
    """(k, r): the temperatures of some cells from a."""
    return reduced.V[cells]


def point_rows(reduced: ReducedModel, xy: Array) -> Array:
    """(k, r): the temperatures at points xy (k, 2) m from a."""
    weights = np.array([point_row(reduced.model.grid, x, y) for x, y in xy])
    return weights.reshape(-1, reduced.model.grid.n) @ reduced.V


def flux_modes(reduced: ReducedModel, q: Array) -> Array:
    """(r, k): what heat q (n, k) W adds to da/dt."""
    return reduced.V.T @ q


def remainder(reduced: ReducedModel, a: Array, u: Array) -> Array:
    """V'(linear loss - true loss) (r,): add it to da/dt.  On a coarse quadrature."""
    quadrature = reduced.quadrature
    if quadrature is None:
        return np.zeros(reduced.order)
    T = quadrature.rows @ a
    excess = quadrature.slope * T + quadrature.constant + quadrature.by_input @ u
    for table in quadrature.tables:
        excess -= table.at(T, u)
    return quadrature.spread @ excess


def static_correction(reduced: ReducedModel, q: Array) -> tuple[Array, float]:
    """What the modes miss of the response to heat q (n,) W that is no described input.

    w (n,) K: the missing part once settled;  tau_s: it appears as w (1 - exp(-t / tau_s)).
    tau_s is the Rayleigh quotient w'Cw / w'Kw of the missing part.
    """
    model = reduced.model
    slow = reduced.rates > 1e-9 * reduced.rates.max()
    reached = reduced.V.T @ q
    settled = np.where(slow, reached / np.where(slow, reduced.rates, 1.0), 0.0)
    full = model.static(q)
    w = full - reduced.V @ settled
    w = w - reduced.V @ (reduced.V.T @ (model.capacity * w)) if not model.has_loss else w
    energy = float(w @ (model.K @ w))
    tau_s = float(w @ (model.capacity * w)) / energy if energy > 0 else 0.0
    return w, tau_s


def _static_fields(model: ThermalModel) -> Array:
    """(n, k): constant, then the settled response to every input and to the offset."""
    heat = np.column_stack((model.B, model.offset))
    heat = heat[:, np.abs(heat).max(axis=0) > 0]
    answers = model.static(heat) if heat.size else np.empty((model.grid.n, 0))
    return np.column_stack((np.ones(model.grid.n), answers))


def _slowest_modes(model: ThermalModel, count: int) -> Array:
    """(n, count) eigenmodes of K v = rate C v with the lowest rates, by shift and invert."""
    n = model.grid.n
    count = max(1, min(count, n - 2))
    if model.has_loss:
        solve: Callable[[Array], Array] = model.static
    else:
        # Any small shift makes K regular; the modes do not depend on it.
        shift = 1e-3 * float(model.K.diagonal().sum() / model.capacity.sum()) / n
        solve = static_solver(model.K + diags_array(shift * model.capacity), model.capacity, True)
    root = np.sqrt(model.capacity)
    inverse = LinearOperator(
        (n, n), matvec=lambda v: root * solve(root * np.ravel(v)), dtype=np.float64
    )
    start = root * (1 + 0.5 * np.sin(np.arange(n)))
    values, vectors = eigsh(inverse, k=count, which="LA", v0=start)
    modes: Array = vectors[:, np.argsort(-values)] / root[:, None]
    return modes


def _orthonormal(columns: Array, capacity: Array) -> Array:
    """Gram-Schmidt in C, in the given order; what the former already hold is left out."""
    root = np.sqrt(capacity)
    kept: list[Array] = []
    for column in (columns * root[:, None]).T:
        size = np.linalg.norm(column)
        v = column / size
        for _ in range(2):
            if kept:
                basis = np.array(kept)
                v = v - basis.T @ (basis @ v)
        if np.linalg.norm(v) > 1e-7:
            kept.append(v / np.linalg.norm(v))
    return np.array(kept).T / root[:, None]


def _rank(fixed: Array, capacity: Array) -> int:
    return _orthonormal(fixed, capacity).shape[1]


def _principal(model: ThermalModel, basis: Array) -> tuple[Array, Array]:
    """V (n, r) and rates (r,) that make the reduced K diagonal; signs fixed."""
    small = basis.T @ (model.K @ basis)
    rates, turn = eigh((small + small.T) / 2)
    V = basis @ turn
    largest = np.argmax(np.abs(np.round(V / np.abs(V).max(axis=0), 6)), axis=0)
    V = V * np.sign(V[largest, np.arange(V.shape[1])])
    return np.ascontiguousarray(V), np.maximum(rates, 0.0)


@dataclass(frozen=True, eq=False)
class HeatUp:
    """Heat q (n,) W from `initial` (n,) degC; steps dt (s,) and what they lead to (s, n)."""

    q: Array
    initial: Array
    dt: Array
    T: Array


def _heat_up(model: ThermalModel) -> HeatUp:
    """All zones on, towards a mean at the reference, in steps that double."""
    ambient = float(np.mean([i.nominal for i in model.inputs if i.kind == "temperature"] or [22.0]))
    u = input_vector(model, {zone.name: zone.watts for zone in model.plate.zones})
    q = model.B @ u + model.offset
    initial = np.full(model.grid.n, ambient)
    total = max(float((q - model.K @ initial).sum()), 1e-9)
    rise = max(model.reference_degC - ambient, 1.0)
    end_s = float(model.capacity.sum()) * rise / total
    if model.has_loss:
        final = float(np.average(steady(model, u), weights=model.capacity)) - ambient
        end_s = min(end_s, 3 * float(model.capacity.sum()) * max(final, 1e-3) / total)
    shortest = end_s / (HEATUP_STEPS * (2**HEATUP_DOUBLINGS - 1))
    T, fields, steps = initial, [], []
    for doubling in range(HEATUP_DOUBLINGS):
        factored = factor(model.capacity, model.K, shortest * 2**doubling)
        for _ in range(HEATUP_STEPS):
            T = one_step(model.capacity, lambda _t, v: q - model.K @ v, factored, 0.0, T)[0]
            fields.append(T)
            steps.append(factored.dt)
    return HeatUp(q, initial, np.array(steps), np.array(fields))


def _heat_up_error(model: ThermalModel, V: Array, rates: Array, full: HeatUp) -> float:
    """Largest difference K to the reduced model stepped by the same scheme."""
    a = V.T @ (model.capacity * full.initial)
    drive = V.T @ full.q
    states = []
    ones = np.ones(rates.size)
    for dt in full.dt:
        factored = _factor_diagonal(rates, float(dt))
        a = one_step(ones, lambda _t, v: drive - rates * v, factored, 0.0, a)[0]
        states.append(a)
    return float(np.abs(np.array(states) @ V.T - full.T).max())


def _factor_diagonal(rates: Array, dt: float) -> Factored:
    pivot = 1 / (GAMMA * dt) + rates
    return Factored(dt, lambda q: q / pivot)


def _finished(model: ThermalModel, V: Array, rates: Array, error_K: float) -> ReducedModel:
    digest = hashlib.sha256(V.tobytes())
    digest.update(rates.tobytes())
    return ReducedModel(
        V,
        rates,
        V.T @ model.B,
        V.T @ model.offset,
        model,
        error_K,
        digest.hexdigest(),
        _quadrature(model, V),
    )


def _quadrature(model: ThermalModel, V: Array) -> Quadrature | None:
    bent = [face for face in model.faces if not face.is_linear]
    if not bent:
        return None
    block, area = _blocks(model)
    rows = (block * model.grid.area) @ V / area[:, None]
    reference = np.full(model.grid.n, model.reference_degC)
    places = area.size
    slope, constant = np.zeros(places), np.zeros(places)
    by_input = np.zeros((places, len(model.inputs)))
    tables = []
    for face in bent:
        by_T, by_amb, by_sur = (
            np.broadcast_to(s, (model.grid.n,))[:1].repeat(places)
            for s in face.slopes(reference, model.nominal)
        )
        flux = np.broadcast_to(face.flux(reference, model.nominal), (model.grid.n,))[:1]
        slope += by_T
        by_input[:, face.ambient] += by_amb
        by_input[:, face.surroundings] += by_sur
        constant += flux - by_T * model.reference_degC
        constant -= by_amb * model.nominal[face.ambient]
        constant -= by_sur * model.nominal[face.surroundings]
        tables.append(_table(face, places))
    return Quadrature(rows, rows.T * area, slope, constant, by_input, tuple(tables))


def _blocks(model: ThermalModel) -> tuple[Array, Array]:
    """Membership (p, n) of cells in about square blocks, and the blocks' areas (p,)."""
    grid = model.grid
    wide, high = grid.nx * grid.hx, grid.ny * grid.hy
    across = max(1, round(float(np.sqrt(QUADRATURE * wide / high))))
    upward = max(1, round(QUADRATURE / across))
    column = np.minimum(grid.columns * across // grid.nx, across - 1)
    row = np.minimum(grid.rows * upward // grid.ny, upward - 1)
    labels, number = np.unique(row * across + column, return_inverse=True)
    member = (number[None, :] == np.arange(labels.size)[:, None]).astype(float)
    return member, member @ grid.area


def _table(face: Face, places: int) -> LossTable:
    difference = np.arange(-100.0, 900.0, 1.0)
    ambients = np.arange(-40.0, 401.0, 20.0)
    flux = np.array([face.convection(difference + each, float(each)) for each in ambients])
    grey = float(face.emissivity[0]) * 5.670374419e-8
    return LossTable(face, difference, ambients, flux, np.full(places, grey))
