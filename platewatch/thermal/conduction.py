"""A thin plate as C dT/dt = -K T + B u + offset, every conductance a plain W/K link.

K holds conduction, rim, clamps and the faces' losses, the latter linearised at a
reference temperature; `loss_watts` gives them exactly.  Heat that enters equals
heat stored plus heat lost, to rounding.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from enum import StrEnum
from functools import cached_property

import numpy as np
from scipy.sparse import coo_array, csc_array, csr_array, diags_array
from scipy.sparse.linalg import splu

from platewatch.errors import PlateError
from platewatch.thermal.faces import Face, Stack, build_stack
from platewatch.thermal.grid import Grid, footprint
from platewatch.thermal.plate import Ambient, Correlation, Plate
from platewatch.thermal.sides import SideLinks, ambient_name, side_links
from platewatch.thermal.stepping import integrate, lu
from platewatch.types import Array

NOMINAL_AMBIENT_DEGC = 22.0  # of a bus channel, where losses are linearised


class InputKind(StrEnum):
    POWER = "power"
    TEMPERATURE = "temperature"


@dataclass(frozen=True)
class Input:
    """One driving quantity: "zone/Z1" in W, "surround/ambient" or "const/22" in degC.

    value: of a constant, else None
    """

    kind: InputKind
    name: str
    value: float | None = None

    @property
    def nominal(self) -> float:
        """Where the model is linearised: 0 W, the constant, or 22 degC."""
        if self.kind is InputKind.POWER:
            return 0.0
        return NOMINAL_AMBIENT_DEGC if self.value is None else self.value


@dataclass(frozen=True, eq=False)
class ThermalModel:
    """C dT/dt = -K T + B u + offset.

    capacity (n,) J/K;  K (n, n) W/K, symmetric;  B (n, m) W per unit of input
    inputs: m of them;  offset (n,) W: the constant of the linearised losses
    stack, faces, sides: what it is made of, for the full equations
    """

    plate: Plate
    grid: Grid
    capacity: Array
    K: csr_array
    B: Array
    inputs: tuple[Input, ...]
    offset: Array
    reference_degC: float
    stack: Stack
    faces: tuple[Face, ...]
    sides: SideLinks

    @cached_property
    def has_loss(self) -> bool:
        """Whether heat can leave at all; without, K is singular."""
        return float(self.K.sum()) > 1e-12 * float(np.abs(self.K.diagonal()).sum())

    @cached_property
    def static(self) -> Callable[[Array], Array]:
        """Solves K w = q, q (n,) or (n, k); see `static_solver`."""
        return static_solver(self.K, self.capacity, self.has_loss)

    @cached_property
    def nominal(self) -> Array:
        """The inputs (m,) at which the model was linearised."""
        return np.array([each.nominal for each in self.inputs])

    def input_number(self, name: str) -> int:
        """Raises PlateError naming the inputs there are."""
        for number, each in enumerate(self.inputs):
            if each.name == name:
                return number
        raise PlateError(
            f"no input {name!r}; this plate has {', '.join(each.name for each in self.inputs)}"
        )


def static_solver(K: csr_array, capacity: Array, has_loss: bool) -> Callable[[Array], Array]:
    """Factor K once.  Without any loss, K w = q - C 1 (1'q)/(1'C 1) with w'C 1 = 0."""
    if has_loss:
        return lu(K)
    n, scale = capacity.size, float(np.abs(K.diagonal()).mean())
    border = (capacity * (scale / capacity.mean()))[:, None]
    bordered = np.arange(n), np.full(n, n)
    coo = K.tocoo()
    rows = np.concatenate((coo.row, *bordered))
    columns = np.concatenate((coo.col, *bordered[::-1]))
    values = np.concatenate((coo.data, border[:, 0], border[:, 0]))
    bordered_K = coo_array((values, (rows, columns)), shape=(n + 1, n + 1))
    solve = splu(csc_array(bordered_K)).solve  # not definite: pivoting is needed

    def solve_balanced(q: Array) -> Array:
        padded = np.concatenate((q, np.zeros_like(q[:1])))
        answer: Array = solve(padded)[:n]
        return answer

    return solve_balanced


def build_model(plate: Plate, grid: Grid, reference_degC: float) -> ThermalModel:
    """Assemble a plate; losses linearised and properties taken at reference_degC.

    The linear loss of each face equals the true one at the reference and the nominal
    ambient (the constant, or 22 degC for a bus channel).  Raises PlateError for a zone
    or an edge that does not lie on the plate.
    """
    inputs = _inputs(plate)
    number = {each.name: i for i, each in enumerate(inputs)}
    stack = build_stack(plate, grid)
    B = np.zeros((grid.n, len(inputs)))
    for zone_no in range(len(plate.zones)):
        B[:, zone_no] = _zone_share(plate, grid, zone_no)
    sides = side_links(plate, grid, stack, number)
    link = sides.conductance(stack.conductivity(reference_degC)[sides.cell])
    diagonal, offset = np.zeros(grid.n), np.zeros(grid.n)
    np.add.at(diagonal, sides.cell, link)
    np.add.at(B, (sides.cell, sides.into), link)
    faces = _faces(plate, grid, number)
    reference = np.full(grid.n, reference_degC)
    nominal = np.array([each.nominal for each in inputs])
    for face in faces:
        by_T, by_amb, by_sur = face.slopes(reference, nominal)
        diagonal += grid.area * by_T
        B[:, face.ambient] -= grid.area * by_amb
        B[:, face.surroundings] -= grid.area * by_sur
        linear_part = by_T * reference_degC + by_amb * nominal[face.ambient]
        linear_part = linear_part + by_sur * nominal[face.surroundings]
        if not face.is_linear:
            offset -= grid.area * (face.flux(reference, nominal) - linear_part)
    K = conduction_matrix(grid, stack.sheet_conductance(reference_degC)) + diags_array(diagonal)
    return ThermalModel(
        plate,
        grid,
        grid.area * stack.heat_capacity(reference_degC),
        csr_array(K),
        B,
        inputs,
        offset,
        reference_degC,
        stack,
        faces,
        sides,
    )


def conduction_matrix(grid: Grid, sheet_conductance: Array) -> csr_array:
    """In-plane conduction (n, n) W/K: harmonic mean of k d (n,) across each open face."""
    links = grid.links
    a, b = sheet_conductance[links.i], sheet_conductance[links.j]
    g = 2 * a * b / (a + b) * links.length_m / links.distance_m
    rows = np.concatenate((links.i, links.j, links.i, links.j))
    columns = np.concatenate((links.j, links.i, links.i, links.j))
    values = np.concatenate((-g, -g, g, g))
    return csr_array(coo_array((values, (rows, columns)), shape=(grid.n, grid.n)))


def loss_watts(model: ThermalModel, T: Array, u: Array) -> Array:
    """What both faces really lose, (n,) W, at cell temperatures T (n,) and inputs u (m,)."""
    flux: Array = np.sum([face.flux(T, u) for face in model.faces], axis=0)
    return model.grid.area * flux


def linear_loss_watts(model: ThermalModel, T: Array, u: Array) -> Array:
    """What both faces lose in the linear model, (n,) W."""
    reference = np.full(model.grid.n, model.reference_degC)
    total = np.zeros(model.grid.n)
    for face in model.faces:
        by_T, by_amb, by_sur = face.slopes(reference, model.nominal)
        total += face.flux(reference, model.nominal) + by_T * (T - reference)
        total += by_amb * (u[face.ambient] - model.nominal[face.ambient])
        total += by_sur * (u[face.surroundings] - model.nominal[face.surroundings])
    return model.grid.area * total


def input_vector(
    model: ThermalModel,
    powers: dict[str, float] | None = None,
    surround: dict[str, float] | None = None,
) -> Array:
    """u (m,) from watts by zone and degC by channel; what is not named stays nominal.

    Names: "Z1" or "zone/Z1", "ambient" or "surround/ambient".  Raises PlateError for
    a zone that the plate does not have; a channel that it does not use is ignored.
    """
    u = model.nominal.copy()
    for name, watts in (powers or {}).items():
        u[model.input_number(name if name.startswith("zone/") else f"zone/{name}")] = watts
    names = [each.name for each in model.inputs]
    for name, degC in (surround or {}).items():
        full = name if name.startswith("surround/") else f"surround/{name}"
        if full in names:
            u[names.index(full)] = degC
    return u


def steady(
    model: ThermalModel, u: Array, extra: Array | None = None, mean_degC: float = 0.0
) -> Array:
    """Final temperatures (n,) of the linear model for inputs u (m,) and extra heat (n,) W.

    On a plate without any loss the heat must sum to zero; mean_degC then fixes the mean.
    Raises PlateError when it does not.
    """
    q = model.B @ u + model.offset + (0.0 if extra is None else extra)
    if model.has_loss:
        settled: Array = model.static(q)
        return settled
    check_balanced(q)
    return model.static(q) + mean_degC


def check_balanced(q: Array) -> None:
    """Raises PlateError unless the heat q (n,) W of a plate without loss sums to zero."""
    total, size = float(q.sum()), float(np.abs(q).sum())
    if abs(total) > 1e-9 * max(size, 1e-9):
        raise PlateError(
            f"this plate loses no heat at all, so {total:.4g} W has no final temperature; "
            "describe its surfaces or edges, or ask for a time (--after)"
        )


def transient(
    model: ThermalModel,
    initial: Array,
    u: Array | Callable[[float], Array],
    times_s: Array,
    extra: Array | None = None,
    tolerance_K: float = 1e-3,
) -> Array:
    """Temperatures (t, n) of the linear model at times_s (t,), from `initial` (n,) at 0 s.

    u: inputs (m,), or a function of the time in seconds;  extra: heat (n,) W
    """
    added = model.offset + (0.0 if extra is None else extra)

    def rate(t: float, T: Array) -> Array:
        drive: Array = u(t) if callable(u) else u
        q: Array = model.B @ drive + added - model.K @ T
        return q

    return integrate(
        model.capacity, rate, lambda _t, _T: model.K, initial, times_s, tolerance_K, linear=True
    )


def _inputs(plate: Plate) -> tuple[Input, ...]:
    inputs = [Input(InputKind.POWER, f"zone/{zone.name}") for zone in plate.zones]
    asked: list[Ambient | None] = [plate.top.ambient, plate.bottom.ambient]
    asked += [plate.top.surroundings, plate.bottom.surroundings]
    asked += [edge.ambient for edge in plate.edges] + [edge.held for edge in plate.edges]
    asked += [clamp.ambient for clamp in plate.clamps]
    for ambient in asked:
        if ambient is None:
            continue
        each = Input(InputKind.TEMPERATURE, ambient_name(ambient), _constant(ambient))
        if each not in inputs:
            inputs.append(each)
    return tuple(inputs)


def _constant(ambient: Ambient) -> float | None:
    return None if isinstance(ambient, str) else float(ambient)


def _zone_share(plate: Plate, grid: Grid, zone_no: int) -> Array:
    zone = plate.zones[zone_no]
    covered: Array = np.sum([footprint(grid, shape) for shape in zone.shapes], axis=0)
    if covered.sum() <= 0:
        raise PlateError(f"zone {zone.name!r} does not lie on the plate; correct its shape")
    share: Array = covered / covered.sum()
    return share


def _faces(plate: Plate, grid: Grid, number: dict[str, int]) -> tuple[Face, ...]:
    domain = grid.domain
    faces = []
    for surface in (plate.top, plate.bottom):
        whole = surface.coefficient is not None
        grey = plate.material.emissivity if surface.emissivity is None else surface.emissivity
        if surface.correlation is Correlation.FORCED:
            length = float(np.sqrt(domain.area))
        else:
            length = domain.area / domain.exterior.length
        beyond = surface.ambient if surface.surroundings is None else surface.surroundings
        faces.append(
            Face(
                surface,
                number[ambient_name(surface.ambient)],
                number[ambient_name(beyond)],
                0.0 if whole else grey,
                length,
            )
        )
    return tuple(faces)
