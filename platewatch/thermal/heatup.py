"""How far a reduced model is from the full one, measured over a heat-up of the plate."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial

import numpy as np

from platewatch.thermal.conduction import InputKind, ThermalModel, input_vector, steady
from platewatch.thermal.full import FullEquations
from platewatch.thermal.quadrature import Quadrature
from platewatch.thermal.stepping import GAMMA, Factored, factor, one_step
from platewatch.types import Array

DOUBLINGS = 7
STEPS = 4  # of each size


@dataclass(frozen=True, eq=False)
class HeatUp:
    """All zones fully on at inputs u (m,), q (n,) W, from initial (n,) degC.

    dt (s,) steps and T (s, n) what the full linear model makes of them.
    """

    u: Array
    q: Array
    initial: Array
    dt: Array
    T: Array


def heat_up(model: ThermalModel) -> HeatUp:
    """From the mean ambient until the plate has taken up the heat of its reference."""
    ambients = [i.nominal for i in model.inputs if i.kind is InputKind.TEMPERATURE]
    ambient = float(np.mean(ambients)) if ambients else 22.0
    u = input_vector(model, {zone.name: zone.watts for zone in model.plate.zones})
    q = model.B @ u + model.offset
    initial = np.full(model.grid.n, ambient)
    shortest = _end_s(model, u, initial) / (STEPS * (2**DOUBLINGS - 1))
    T, fields, steps = initial, [], []
    for doubling in range(DOUBLINGS):
        factored = factor(model.capacity, model.K, shortest * 2**doubling)
        for _ in range(STEPS):
            T = one_step(model.capacity, lambda _t, v: q - model.K @ v, factored, 0.0, T)[0]
            fields.append(T)
            steps.append(factored.dt)
    return HeatUp(u, q, initial, np.array(steps), np.array(fields))


def missed(model: ThermalModel, V: Array, rates: Array, full: HeatUp) -> float:
    """Largest difference, K, that leaving modes out makes; same steps, linear losses."""
    drive = V.T @ full.q
    a = V.T @ (model.capacity * full.initial)
    states = _stepped(rates, full.dt, a, lambda v: drive - rates * v)
    return float(np.abs(states @ V.T - full.T).max())


def bend(
    model: ThermalModel, V: Array, rates: Array, quadrature: Quadrature | None, full: HeatUp
) -> float:
    """Largest difference, K, that fixed properties and the coarse loss make.

    The same modes are driven by the full equations (k and cp at every cell's own
    temperature, exact losses) and by the reduced ones.
    """
    equations = FullEquations(model)
    a = V.T @ (model.capacity * full.initial)
    drive = V.T @ full.q

    def by_full(v: Array) -> Array:
        T = V @ v
        capacity = equations.capacity(T)
        heat = equations.rate(T, full.u)
        mass = V.T @ (capacity[:, None] * V)
        return np.asarray(np.linalg.solve(mass, V.T @ heat), dtype=np.float64)

    def by_reduced(v: Array) -> Array:
        extra = 0.0 if quadrature is None else quadrature.excess(v, full.u)
        reduced: Array = drive - rates * v + extra
        return reduced

    true = _stepped(rates, full.dt, a, by_full)
    ours = _stepped(rates, full.dt, a, by_reduced)
    return float(np.abs((true - ours) @ V.T).max())


def _stepped(rates: Array, dt: Array, a: Array, slope: Callable[[Array], Array]) -> Array:
    """States (s, r) after each step."""
    states = []
    ones = np.ones(rates.size)
    for each in dt:
        factored = Factored(float(each), partial(np.multiply, 1 / (1 / (GAMMA * each) + rates)))
        a = one_step(ones, lambda _t, v: slope(v), factored, 0.0, a)[0]
        states.append(a)
    return np.array(states)


def _end_s(model: ThermalModel, u: Array, initial: Array) -> float:
    total_C = float(model.capacity.sum())
    heat = float((model.B @ u + model.offset - model.K @ initial).sum())
    rise = max(model.reference_degC - float(initial[0]), 1.0)
    if heat <= 0:
        return 3600.0
    end_s = total_C * rise / heat
    if model.has_loss:
        settled = float(np.average(steady(model, u), weights=model.capacity)) - float(initial[0])
        end_s = min(end_s, 3 * total_C * max(settled, 1e-3) / heat)
    return end_s
