"""The field that given powers and surroundings would produce, by the full equations.

k(T), cp(T), true convection and T^4; a load is a node of its own.  Calculated from the
description: confirm by measurement.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.sparse import csr_array, diags_array

from platewatch.errors import PlateError
from platewatch.thermal.conduction import (
    InputKind,
    ThermalModel,
    build_model,
    check_balanced,
    input_vector,
    static_solver,
)
from platewatch.thermal.full import FullEquations
from platewatch.thermal.grid import Grid, build_grid, footprint, on_plate, point_row
from platewatch.thermal.plate import Contact, Plate
from platewatch.thermal.stepping import integrate, lu
from platewatch.types import Array

CAUTION = (
    "Calculated from the description you gave. "
    "Confirm by measurement before changing a recipe, limit or sensor."
)
COLDEST_DEGC, HOTTEST_DEGC = -250.0, 3000.0  # beyond these no plate is looked for
LUMPED_K = 1e-3
MOST_NEWTON = 40
SETTLED_K = 1e-8
STEP_TOLERANCE_K = 1e-3


@dataclass(frozen=True)
class Energy:
    """What entered, stayed and left: W of a steady field (stored 0), J after a time."""

    entered: float
    stored: float
    lost: float


@dataclass(frozen=True, eq=False)
class WhatIf:
    """A calculated field.

    T (n,) degC by cell;  load_degC by load;  after_s: None when steady
    hottest: refined below the cell;  mean_degC: over the area
    """

    plate: Plate
    grid: Grid
    T: Array
    load_degC: Mapping[str, float]
    after_s: float | None
    hottest_degC: float
    hottest_x_m: float
    hottest_y_m: float
    coldest_degC: float
    mean_degC: float
    energy: Energy

    def at(self, x_m: float, y_m: float) -> float:
        """Temperature, degC, at a place.  Raises PlateError off the plate."""
        if not on_plate(self.grid, x_m, y_m):
            raise PlateError(
                f"({1e3 * x_m:g}, {1e3 * y_m:g}) mm is not on the plate; choose a place inside "
                "the outline and outside its holes"
            )
        return float(point_row(self.grid, x_m, y_m) @ self.T)


def whatif_steady(
    plate: Plate,
    powers: Mapping[str, float],
    surround: Mapping[str, float] | None = None,
    loads: Sequence[str] = (),
    cell_m: float | None = None,
) -> WhatIf:
    """The final field for watts by zone and degC by channel.

    surround: channels not named count as 22 degC;  loads: names of plate.contacts lying on
    Raises PlateError for unknown names, and on a plate that loses no heat unless the
    powers sum to zero (its mean is then 22 degC).
    """
    grid = build_grid(plate, cell_m)
    contacts = _contacts(plate, grid, loads)
    model = build_model(plate, grid, plate.reference_degC or 100.0)
    u = _inputs(model, powers, surround or {})
    model = build_model(plate, grid, _lumped_degC(model, u))
    equations = FullEquations(model, contacts)
    T = _newton(equations, u, _first_guess(equations, u))
    entered = float(equations.power(u).sum())
    return _result(equations, T, None, Energy(entered, 0.0, equations.lost(T, u)))


def whatif_transient(
    plate: Plate,
    powers: Mapping[str, float],
    surround: Mapping[str, float] | None = None,
    loads: Sequence[str] = (),
    cell_m: float | None = None,
    after_s: float = 600.0,
    initial_degC: float | Array = 22.0,
    load_degC: float = 22.0,
    tolerance_K: float = STEP_TOLERANCE_K,
) -> WhatIf:
    """The field `after_s` seconds after these powers were switched on.

    initial_degC: the plate's, one number or by cell (n,);  load_degC: the loads'
    tolerance_K: error allowed in each time step.  Raises PlateError as `whatif_steady`.
    """
    if not after_s > 0:
        raise PlateError(f"a time of {after_s:g} s leads nowhere; give a time above zero")
    grid = build_grid(plate, cell_m)
    contacts = _contacts(plate, grid, loads)
    start = np.broadcast_to(np.asarray(initial_degC, dtype=np.float64), (grid.n,))
    model = build_model(plate, grid, float(start.mean()))
    u = _inputs(model, powers, surround or {})
    equations = FullEquations(model, contacts)
    initial = np.concatenate((start, np.full(len(contacts), load_degC)))
    lost = _Account(equations, u)
    T = _march(equations, u, initial, after_s, tolerance_K, lost)
    stored = equations.heat_content(T) - equations.heat_content(initial)
    entered = float(equations.power(u).sum()) * after_s
    return _result(equations, T, after_s, Energy(entered, stored, lost.joules))


def hottest_place(grid: Grid, T: Array) -> tuple[float, float, float]:
    """Highest temperature and its place (degC, x m, y m), refined below the cell.

    The stationary point of the quadratic through the hottest cell and its eight
    neighbours; the cell's own value and centre where the rim leaves fewer.
    """
    hot = int(np.argmax(T))
    row, column = int(grid.rows[hot]), int(grid.columns[hot])
    value, x, y = float(T[hot]), float(grid.x[hot]), float(grid.y[hot])
    around = grid.index[max(row - 1, 0) : row + 2, max(column - 1, 0) : column + 2]
    if around.shape != (3, 3) or (around < 0).any():
        return value, x, y
    t = T[around]
    slope = np.array([t[1, 2] - t[1, 0], t[2, 1] - t[0, 1]]) / 2
    cross = (t[2, 2] - t[2, 0] - t[0, 2] + t[0, 0]) / 4
    bend = np.array(
        [
            [t[1, 2] - 2 * value + t[1, 0], cross],
            [cross, t[2, 1] - 2 * value + t[0, 1]],
        ]
    )
    if np.linalg.eigvalsh(bend)[1] >= -1e-12 * max(1.0, abs(value)):
        return value, x, y
    shift = np.clip(-np.linalg.solve(bend, slope), -0.5, 0.5)
    refined = value + float(slope @ shift + shift @ bend @ shift / 2)
    return max(refined, value), x + float(shift[0]) * grid.hx, y + float(shift[1]) * grid.hy


class _Account:
    """Integrates the lost heat along the steps: Simpson, the middle by cubic Hermite."""

    def __init__(self, equations: FullEquations, u: Array) -> None:
        self.equations, self.u, self.joules = equations, u, 0.0

    def __call__(self, t0: float, T0: Array, t1: float, T1: Array) -> None:
        eq, u, dt = self.equations, self.u, t1 - t0
        slope0, slope1 = eq.rate(T0, u) / eq.capacity(T0), eq.rate(T1, u) / eq.capacity(T1)
        middle = (T0 + T1) / 2 + dt / 8 * (slope0 - slope1)
        self.joules += float(dt) / 6 * (eq.lost(T0, u) + 4 * eq.lost(middle, u) + eq.lost(T1, u))


def _contacts(plate: Plate, grid: Grid, names: Sequence[str]) -> tuple[Contact, ...]:
    known = {contact.name: contact for contact in plate.contacts}
    for name in names:
        if name not in known:
            raise PlateError(
                f"no load {name!r}; this plate knows "
                + (", ".join(known) or "none: describe it as a [[contact]]")
            )
        if footprint(grid, known[name].shape).sum() <= 0 or known[name].conductance <= 0:
            raise PlateError(f"load {name!r} does not touch the plate; correct its shape")
    return tuple(known[name] for name in names)


def _inputs(
    model: ThermalModel, powers: Mapping[str, float], surround: Mapping[str, float]
) -> Array:
    channels = [i.name for i in model.inputs if i.kind is InputKind.TEMPERATURE and i.value is None]
    for name in surround:
        full = name if name.startswith("surround/") else f"surround/{name}"
        if full not in channels:
            raise PlateError(
                f"the plate has no surrounding {full!r}; "
                + (f"it has {', '.join(channels)}" if channels else "all of its are fixed numbers")
            )
    return input_vector(model, dict(powers), dict(surround))


def _lumped_degC(model: ThermalModel, u: Array) -> float:
    """The temperature at which a plate without differences would lose what enters."""
    equations = FullEquations(model)
    entered = float(equations.power(u).sum())
    if not model.has_loss:
        check_balanced(equations.power(u))
        return float(model.nominal[-1]) if model.nominal.size else 22.0

    def surplus(T: float) -> float:
        return entered - equations.lost(np.full(model.grid.n, T), u)

    if surplus(COLDEST_DEGC) <= 0 or surplus(HOTTEST_DEGC) >= 0:
        raise PlateError(
            f"{entered:.4g} W would bring this plate beyond "
            f"{COLDEST_DEGC:g}..{HOTTEST_DEGC:g} degC; "
            "look for a loss that is missing or a power that is wrong"
        )
    # Halved by hand: scipy.optimize alone would take a fifth of the time `check` may have.
    low, high = COLDEST_DEGC, HOTTEST_DEGC
    while high - low > LUMPED_K:
        middle = (low + high) / 2
        low, high = (middle, high) if surplus(middle) > 0 else (low, middle)
    return (low + high) / 2


def _first_guess(equations: FullEquations, u: Array) -> Array:
    model = equations.model
    q = model.B @ u + model.offset
    cells = model.static(q) + (0.0 if model.has_loss else 22.0)
    cells = np.clip(cells, COLDEST_DEGC, HOTTEST_DEGC)
    if not equations.loads:
        return cells
    weights = equations.contacts / equations.contacts.sum(axis=1, keepdims=True)
    return np.concatenate((cells, weights @ cells))


def _newton(equations: FullEquations, u: Array, T: Array) -> Array:
    """Solve rate(T) = 0; each step is halved until the imbalance falls."""
    off = equations.rate(T, u)
    for _ in range(MOST_NEWTON):
        change = _solver(equations, equations.jacobian(T, u), T)(off)
        part, size = 1.0, float(np.abs(off).sum())
        while True:
            tried = np.maximum(T + part * change, COLDEST_DEGC)
            after = equations.rate(tried, u)
            if float(np.abs(after).sum()) < size or part < 1e-3:
                break
            part /= 2
        T, off = tried, after
        if float(np.abs(change).max()) < SETTLED_K:
            return T
    if float(np.abs(change).max()) < 1e-4:
        return T
    raise PlateError(
        f"no steady field was found: the last step still moved {np.abs(change).max():.3g} K; "
        "look for a property table or loss that changes abruptly"
    )


def _solver(equations: FullEquations, K: csr_array, T: Array) -> Callable[[Array], Array]:
    if equations.model.has_loss:
        return lu(K)
    return static_solver(K, equations.capacity(T), False)


def _march(
    equations: FullEquations,
    u: Array,
    initial: Array,
    after_s: float,
    tolerance_K: float,
    watch: _Account,
) -> Array:
    """cp(T) varies: the equations are divided by it and multiplied by its starting value."""
    fixed = equations.capacity(initial)
    constant = equations.model.stack.is_constant

    def rate(_t: float, T: Array) -> Array:
        heat = equations.rate(T, u)
        scaled: Array = heat if constant else heat * fixed / equations.capacity(T)
        return scaled

    def stiffness(_t: float, T: Array) -> csr_array:
        K = equations.jacobian(T, u)
        if constant:
            return K
        now = equations.capacity(T)
        bend = (equations.capacity(T + 1e-3) - now) / 1e-3
        turned = equations.rate(T, u) * bend / now
        return csr_array(diags_array(fixed / now) @ (K + diags_array(turned)))

    linear = constant and all(face.is_linear for face in equations.model.faces)
    times = np.array([after_s])
    fields = integrate(fixed, rate, stiffness, initial, times, tolerance_K, linear, watch)
    final: Array = fields[0]
    return final


def _result(equations: FullEquations, T: Array, after_s: float | None, energy: Energy) -> WhatIf:
    grid = equations.model.grid
    cells = T[: grid.n]
    value, x, y = hottest_place(grid, cells)
    above = {load.name: float(t) for load, t in zip(equations.loads, T[grid.n :], strict=True)}
    return WhatIf(
        equations.model.plate,
        grid,
        cells,
        above,
        after_s,
        value,
        x,
        y,
        float(cells.min()),
        float(np.average(cells, weights=grid.area)),
        energy,
    )
