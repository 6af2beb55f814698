"""A few modes instead of thousands of cells: T = V a, with da/dt = -rates a + G u + g0.

Ritz modes: the constant field, the static response to every input, the early response
to every zone (Laplace variable s > 0, as in moment matching at two points) and the
slowest eigenmodes, made orthonormal in C and turned to principal axes.  Steady states
of the described inputs are exact; what is left out is fast.
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
from platewatch.thermal.conduction import Input, ThermalModel
from platewatch.thermal.grid import footprint, point_row
from platewatch.thermal.heatup import bend, heat_up, missed
from platewatch.thermal.properties import Properties, build_properties
from platewatch.thermal.quadrature import Quadrature, build_quadrature
from platewatch.thermal.rim import Ints
from platewatch.thermal.stepping import lu
from platewatch.types import Array

MOST_EIGENMODES = 48
LEAST_EIGENMODES = 27  # they carry what no description names: loads, faults
GROWTH = (40.0, 10.0)  # of the early fields, in diffusivity / area of a zone


@dataclass(frozen=True, eq=False)
class ReducedModel:
    """da/dt = -rates a + G u + g0 + V' q_extra;  T = V a.

    V (n, r) with V'C V = 1;  rates (r,) 1/s;  G (r, m);  g0 (r,)
    error_K: largest difference to the full model over a heat-up, measured when built
    left_out_K: the part of it that the left-out modes cause; the rest is the coarse
        places of the losses, of k(T) and of cp(T)
    basis_hash: gives a stored state its meaning
    """

    V: Array
    rates: Array
    G: Array
    g0: Array
    model: ThermalModel
    error_K: float
    left_out_K: float
    basis_hash: str
    quadrature: Quadrature | None = field(repr=False)
    properties: Properties | None = field(repr=False)

    @property
    def order(self) -> int:
        return self.rates.size

    @property
    def inputs(self) -> tuple[Input, ...]:
        return self.model.inputs


def reduce(model: ThermalModel, order: int | None = None, tolerance_K: float = 0.1) -> ReducedModel:
    """The reduced model of a plate; the same description gives the same basis.

    order: number of modes; else the fewest whose error over a heat-up is below
    tolerance_K, as far as 48 eigenmodes lead.  Raises PlateError for an order that
    cannot hold the static responses.
    """
    first, second = (_early_fields(model, growth) for growth in GROWTH)
    fixed = np.column_stack((_static_fields(model), first))
    modes = _slowest_modes(model, MOST_EIGENMODES if order is None else order)
    columns = (fixed, modes[:, :LEAST_EIGENMODES], second, modes[:, LEAST_EIGENMODES:])
    basis = _orthonormal(np.column_stack(columns), model.capacity)
    least = min(basis.shape[1], _rank(fixed, model.capacity))
    if order is not None:
        if order < least:
            raise PlateError(f"a reduced order of {order} is too low; this plate needs {least}")
        candidates = [min(order, basis.shape[1])]
    else:
        candidates = [*range(least + LEAST_EIGENMODES, basis.shape[1], 4), basis.shape[1]]
    full = heat_up(model)
    for r in candidates:
        V, rates = _principal(model, basis[:, :r])
        left_out = missed(model, V, rates, full)
        if left_out <= tolerance_K:
            break
    quadrature, properties = build_quadrature(model, V), build_properties(model, V, rates)
    error = left_out
    if quadrature is not None or not model.stack.is_constant:
        error += bend(model, V, rates, quadrature, properties, full)
    return _finished(model, V, rates, quadrature, properties, error, left_out)


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
    if reduced.quadrature is None:
        return np.zeros(reduced.order)
    return reduced.quadrature.excess(a, u)


def property_remainder(
    reduced: ReducedModel, a: Array, u: Array, adot: Array, held_s: float = 0.0
) -> Array:
    """What k(T) and cp(T) add to adot (r,) 1/s, the da/dt that includes `remainder`.

    held_s: how long it will be held, see `Properties.warming`
    """
    if reduced.properties is None:
        return np.zeros(reduced.order)
    heat = (adot - reduced.properties.conducted(a, u))[:, None]
    return reduced.properties.warming(a, heat, held_s)[:, 0] - adot


def radiated(reduced: ReducedModel, a: Array, u: Array) -> Array:
    """V'(net radiation) (r,): the part of the losses that emissivity scales."""
    if reduced.quadrature is None:
        return np.zeros(reduced.order)
    return reduced.quadrature.radiated(a, u)


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
    """(n, k): constant, then the settled response to every input, load place and the offset."""
    places = [footprint(model.grid, contact.shape) for contact in model.plate.contacts]
    heat = np.column_stack((model.B, model.offset, *places))
    heat = heat[:, np.abs(heat).max(axis=0) > 0]
    answers = model.static(heat) if heat.size else np.empty((model.grid.n, 0))
    return np.column_stack((np.ones(model.grid.n), answers))


def _early_fields(model: ThermalModel, growth: float) -> Array:
    """(n, zones): response to heat that grows as exp(s t), s = growth x diffusivity / area
    of a zone: what the zones do shortly after a step."""
    zones = model.B[:, : len(model.plate.zones)]
    if not zones.size:
        return zones
    sheet = float(np.mean(model.stack.sheet_conductance(model.reference_degC)))
    diffusivity = sheet * float(model.grid.area.sum() / model.capacity.sum())
    s = growth * diffusivity * zones.shape[1] / float(model.grid.area.sum())
    return lu(model.K + diags_array(s * model.capacity))(zones)


def _slowest_modes(model: ThermalModel, count: int) -> Array:
    """(n, count) eigenmodes of K v = rate C v with the lowest rates, by shift and invert."""
    n = model.grid.n
    count = max(1, min(count, n - 2))
    if model.has_loss:
        solve: Callable[[Array], Array] = model.static
    else:
        # Any small shift makes K regular; the modes do not depend on it.
        shift = 1e-3 * float(model.K.diagonal().sum() / model.capacity.sum()) / n
        solve = lu(model.K + diags_array(shift * model.capacity))
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
    return int(_orthonormal(fixed, capacity).shape[1])


def _principal(model: ThermalModel, basis: Array) -> tuple[Array, Array]:
    """V (n, r) and rates (r,) that make the reduced K diagonal; signs fixed."""
    small = basis.T @ (model.K @ basis)
    rates, turn = eigh((small + small.T) / 2)
    V = basis @ turn
    largest = np.argmax(np.abs(np.round(V / np.abs(V).max(axis=0), 6)), axis=0)
    V = V * np.sign(V[largest, np.arange(V.shape[1])])
    return np.ascontiguousarray(V), np.maximum(rates, 0.0)


def _finished(
    model: ThermalModel,
    V: Array,
    rates: Array,
    quadrature: Quadrature | None,
    properties: Properties | None,
    error_K: float,
    left_out_K: float,
) -> ReducedModel:
    digest = hashlib.sha256(V.tobytes())
    digest.update(rates.tobytes())
    G, g0 = V.T @ model.B, V.T @ model.offset
    errors = error_K, left_out_K
    return ReducedModel(V, rates, G, g0, model, *errors, digest.hexdigest(), quadrature, properties)
