"""Observed orders on rectangles and the balance of heat, both from theory."""

from __future__ import annotations

import numpy as np
import pytest
from thin_plates import convective, held, material, model_of, plate, slopes

from platewatch.thermal.conduction import (
    ThermalModel,
    build_model,
    input_vector,
    linear_loss_watts,
    steady,
)
from platewatch.thermal.full import FullEquations
from platewatch.thermal.grid import build_grid
from platewatch.thermal.plate import Clamp, Inset, Rectangle
from platewatch.types import Array

A, B, K, D, LOSS = 0.4, 0.3, 50.0, 0.02, 30.0


def l2_error(model: ThermalModel, T: Array, exact: Array) -> float:
    return float(np.sqrt(np.average((T - exact) ** 2, weights=model.grid.area)))


def test_conduction_is_second_order_in_cell_size():
    """T = cos(pi x/a) cos(pi y/b), insulated edges, face loss: halving h quarters the error."""
    errors = []
    for n in (16, 32, 64):
        model = model_of(plate((A, B), material(K), D, LOSS), A / n)
        x, y, area = model.grid.x, model.grid.y, model.grid.area
        exact = np.cos(np.pi * x / A) * np.cos(np.pi * y / B)
        density = (K * D * ((np.pi / A) ** 2 + (np.pi / B) ** 2) + LOSS) * exact
        errors.append(l2_error(model, steady(model, model.nominal, density * area), exact))
    assert slopes(errors) == pytest.approx([2, 2], abs=0.05)


@pytest.mark.parametrize("h", [15.0, 400.0])
def test_a_convective_edge_keeps_second_order(h):
    """T = cos(m x) with the rim law at x = a and loss to 0 degC; m tan(m a) = h/k."""
    m = 1.2 / A
    k = h / (m * np.tan(1.2))
    errors = []
    for n in (16, 32, 64):
        strip = plate((A, A / 8), material(k), D, LOSS, edges=[convective("x-max", h)])
        model = model_of(strip, A / n)
        exact = np.cos(m * model.grid.x)
        density = (k * D * m * m + LOSS) * exact
        field = steady(model, model.nominal, density * model.grid.area)
        errors.append(l2_error(model, field, exact))
    assert slopes(errors) == pytest.approx([2, 2], abs=0.05)


def test_a_held_edge_keeps_second_order():
    """T = sin(pi x/a), both ends held at 0 degC."""
    errors = []
    for n in (16, 32, 64):
        edges = [held("x-min", 0.0), held("x-max", 0.0)]
        model = model_of(plate((A, A / 8), material(K), D, LOSS, edges=edges), A / n)
        exact = np.sin(np.pi * model.grid.x / A)
        density = (K * D * (np.pi / A) ** 2 + LOSS) * exact
        field = steady(model, model.nominal, density * model.grid.area)
        errors.append(l2_error(model, field, exact))
    assert slopes(errors) == pytest.approx([2, 2], abs=0.05)


def test_an_inset_between_cells_conducts_in_series():
    """Left half 100 W/mK, right half 20: a steady flow of heat q meets a/2k1 + a/2k2."""
    other = Inset(Rectangle(0.2, 0, 0.2, 0.1), material(20.0))
    edges = [held("x-min", 100.0), held("x-max", 0.0)]
    model = model_of(plate((0.4, 0.1), material(100.0), edges=edges, insets=(other,)), 0.01)
    T = steady(model, model.nominal)
    sides, u = model.sides, model.nominal
    flow = sides.conductance(model.stack.conductivity(0.0)[sides.cell]) * (
        u[sides.into] - T[sides.cell]
    )
    entering = flow[flow > 0].sum()
    assert entering == pytest.approx(100 * 0.1 / (0.2 / 100 + 0.2 / 20), rel=1e-10)


def test_heat_is_conserved_to_rounding_whatever_the_field():
    """Heater watts = stored + lost, for any temperatures at all: faces, rim, clamps."""
    edges = [convective("all", 40.0, 15.0)]
    described = plate(
        (A, B), material(K), D, LOSS, 20.0, edges=edges, clamps=(Clamp(0.1, 0.0, 0.4),)
    )
    grid = build_grid(described, 0.017)
    model = build_model(described, grid, 100.0)
    T = 100 + 50 * np.random.default_rng(3).standard_normal(grid.n)
    u = input_vector(model)
    extra = np.abs(T) / 100
    stored = (model.B @ u + model.offset + extra - model.K @ T).sum()
    sides = FullEquations(model).side_loss(T, u)
    lost = linear_loss_watts(model, T, u).sum() + sides.sum()
    assert stored + lost == pytest.approx(extra.sum(), rel=1e-10)
