"""How far a reduced model is from the full one, measured over a heat-up of the plate."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial

import numpy as np

from platewatch.thermal.conduction import InputKind, ThermalModel, input_vector, steady
from platewatch.thermal.full import FullEquations
from platewatch.thermal.properties import Properties
from platewatch.thermal.quadrature import Quadrature
from platewatch.thermal.stepping import GAMMA, Factored, factor, one_step
from platewatch.types import Array

DOUBLINGS = 7
STEPS = 4  # of each size


@dataclass(frozen=True, eq=False)
class HeatUp:
    """All zones switched on at once, each reaching its watts with its own lag.

    u (m,): final inputs;  lag_s (m,): 0 for a temperature;  initial (n,) degC
    dt (s,) steps and T (s, n) what the full linear model makes of them.
    """

    u: Array
    lag_s: Array
    initial: Array
    dt: Array
    T: Array

    def at(self, t: float) -> Array:
        """Inputs (m,) at the time t, s."""
        return inputs_at(self.u, self.lag_s, t)


def inputs_at(u: Array, lag_s: Array, t: float) -> Array:
    """Final inputs u (m,), those with a lag on their way to it at the time t."""
    slow = lag_s > 0
    reached = u.copy()
    reached[slow] *= -np.expm1(-t / lag_s[slow])
    return reached


def heat_up(model: ThermalModel) -> HeatUp:
    """From the plate at rest until it has taken up the heat of its reference."""
    zones = model.plate.zones
    u = input_vector(model, {zone.name: zone.watts for zone in zones})
    lag_s = np.zeros(u.size)
    lag_s[: len(zones)] = [zone.lag_s for zone in zones]
    initial = _at_rest(model)
    dt = _end_s(model, u, initial) / (STEPS * (2**DOUBLINGS - 1))
    t, T, fields, steps = 0.0, initial, [], []

    def rate(t: float, T: Array) -> Array:
        heat: Array = model.B @ inputs_at(u, lag_s, t) + model.offset - model.K @ T
        return heat

    for _ in range(DOUBLINGS):
        factored = factor(model.capacity, model.K, dt)
        for _ in range(STEPS):
            T = one_step(model.capacity, rate, factored, t, T)[0]
            t += dt
            fields.append(T)
            steps.append(dt)
        dt *= 2
    return HeatUp(u, lag_s, initial, np.array(steps), np.array(fields))


def missed(model: ThermalModel, V: Array, rates: Array, full: HeatUp) -> float:
    """Largest difference, K, that leaving modes out makes; same steps, linear losses."""
    G, g0 = V.T @ model.B, V.T @ model.offset
    a = V.T @ (model.capacity * full.initial)
    states = _stepped(rates, full.dt, a, lambda t, v: G @ full.at(t) + g0 - rates * v)
    return float(np.abs(states @ V.T - full.T).max())


def bend(
    model: ThermalModel,
    V: Array,
    rates: Array,
    quadrature: Quadrature | None,
    properties: Properties | None,
    full: HeatUp,
) -> float:
    """Largest difference, K, that properties and losses on a few places make.

    The same modes are driven by the full equations (k and cp at every cell's own
    temperature, exact losses) and by the reduced ones.
    """
    equations = FullEquations(model)
    a = V.T @ (model.capacity * full.initial)
    G, g0 = V.T @ model.B, V.T @ model.offset

    def by_full(t: float, v: Array) -> Array:
        T = V @ v
        capacity = equations.capacity(T)
        heat = equations.rate(T, full.at(t))
        mass = V.T @ (capacity[:, None] * V)
        return np.asarray(np.linalg.solve(mass, V.T @ heat), dtype=np.float64)

    def by_reduced(t: float, v: Array) -> Array:
        u = full.at(t)
        extra = 0.0 if quadrature is None else quadrature.excess(v, u)
        heat: Array = G @ u + g0 - rates * v + extra
        if properties is None:
            return heat
        return properties.warming(v, (heat - properties.conducted(v, u))[:, None])[:, 0]

    true = _stepped(rates, full.dt, a, by_full)
    ours = _stepped(rates, full.dt, a, by_reduced)
    return float(np.abs((true - ours) @ V.T).max())


def _at_rest(model: ThermalModel) -> Array:
    """The unheated plate between its surroundings, (n,) degC.

    A held edge is no step there: nobody sets a warm frame to a cold plate in an instant.
    """
    ambients = {i.nominal for i in model.inputs if i.kind is InputKind.TEMPERATURE}
    if model.has_loss and len(ambients) > 1:
        return steady(model, input_vector(model, {}))
    return np.full(model.grid.n, ambients.pop() if ambients else 22.0)


def _stepped(rates: Array, dt: Array, a: Array, slope: Callable[[float, Array], Array]) -> Array:
    """States (s, r) after each step."""
    states, t = [], 0.0
    ones = np.ones(rates.size)
    for each in dt.tolist():
        factored = Factored(each, partial(np.multiply, 1 / (1 / (GAMMA * each) + rates)))
        a = one_step(ones, slope, factored, t, a)[0]
        t += each
        states.append(a)
    return np.array(states)


def _end_s(model: ThermalModel, u: Array, initial: Array) -> float:
    total_C = float(model.capacity.sum())
    heat = float((model.B @ u + model.offset - model.K @ initial).sum())
    start = float(np.average(initial, weights=model.capacity))
    rise = max(model.reference_degC - start, 1.0)
    if heat <= 0:
        return 3600.0
    end_s = total_C * rise / heat
    if model.has_loss:
        settled = float(np.average(steady(model, u), weights=model.capacity)) - start
        end_s = min(end_s, 3 * total_C * max(settled, 1e-3) / heat)
    return end_s
