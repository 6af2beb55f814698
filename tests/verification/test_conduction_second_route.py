"""The main heated plate by finite elements (scikit-fem) beside ours."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.sparse.linalg import splu
from skfem import Basis, BilinearForm, ElementQuad2, LinearForm, MeshQuad
from thin_plates import MAIN_POINTS, main_plate, model_of, value

from platewatch.thermal.conduction import input_vector, steady, transient

K_D, LOSS, AMBIENT = 167.0 * 0.012, 20.0, 25.0
STORED = 2700.0 * 896.0 * 0.012


@BilinearForm
def stiffness(u, v, _w):
    return K_D * (u.grad[0] * v.grad[0] + u.grad[1] * v.grad[1]) + LOSS * u * v


@BilinearForm
def capacity(u, v, _w):
    return STORED * u * v


@LinearForm
def heaters(v, w):
    x, y = w.x
    a = (abs(x - 0.1) < 0.05) & (abs(y - 0.1) < 0.05)
    b = (abs(x - 0.3) < 0.05) & (abs(y - 0.2) < 0.05)
    return (300 / 0.01 * a + 150 / 0.01 * b) * v


@pytest.fixture(scope="module")
def elements():
    mesh = MeshQuad.init_tensor(np.linspace(0, 0.4, 41), np.linspace(0, 0.3, 31))
    return Basis(mesh, ElementQuad2())


def test_the_steady_main_plate_agrees_with_finite_elements(elements):
    """Q2 elements on 40 x 30; our 80 x 60 cells within 0.05 K everywhere asked."""
    T = AMBIENT + splu(stiffness.assemble(elements).tocsc()).solve(heaters.assemble(elements))
    reference = elements.probes(np.array(MAIN_POINTS, dtype=float).T) @ T
    model = model_of(main_plate(), 0.005)
    field = steady(model, input_vector(model, {"A": 300.0, "B": 150.0}))
    found = [value(model, field, x, y) for x, y in MAIN_POINTS]
    assert found == pytest.approx(reference, abs=0.05)


def test_the_warming_main_plate_agrees_with_finite_elements(elements):
    """The same after 120 s, the elements stepped by Crank and Nicolson in 1 s steps."""
    A, M, f = (form.assemble(elements) for form in (stiffness, capacity, heaters))
    half = splu((M + 0.5 * A).tocsc())
    rise = np.zeros(f.size)
    for _ in range(120):
        rise = half.solve(M @ rise - 0.5 * (A @ rise) + f)
    reference = AMBIENT + elements.probes(np.array(MAIN_POINTS, dtype=float).T) @ rise
    model = model_of(main_plate(), 0.005)
    u = input_vector(model, {"A": 300.0, "B": 150.0})
    field = transient(model, np.full(model.grid.n, AMBIENT), u, np.array([120.0]))[0]
    found = [value(model, field, x, y) for x, y in MAIN_POINTS]
    assert found == pytest.approx(reference, abs=0.05)
