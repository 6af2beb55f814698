"""Plates whose outline cuts through the cells: second order, rim included."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import i0, i1, k0, k1
from skfem import (
    Basis,
    BilinearForm,
    ElementQuad2,
    FacetBasis,
    LinearForm,
    MeshQuad,
    solve,
)
from thin_plates import convective, held, material, mean_slope, model_of, plate, value

from platewatch.thermal.conduction import ThermalModel, input_vector, steady, transient
from platewatch.thermal.plate import Circle, Edge, EdgeKind, Polygon, Zone, geometry
from platewatch.thermal.reduction import reduce
from platewatch.types import Array

FIVE_GRIDS = (10, 20, 40, 80, 160)  # cells across
RADIUS = 0.15


def l2_error(model: ThermalModel, T: Array, exact: Array) -> float:
    return float(np.sqrt(np.average((T - exact) ** 2, weights=model.grid.area)))


def heated_disc(cells: int, rim_h: float) -> float:
    """Error on a disc with face loss, a concentric heater and a rim of rim_h W/m2K."""
    k, d, loss, heater_radius, watts = 50.0, 0.02, 30.0, 0.06, 400.0
    zone = Zone("middle", (Circle(0, 0, 2 * heater_radius),), 1.0, 0.0, 1.0)
    edges = [convective("all", rim_h)] if rim_h else []
    disc = plate(Circle(0, 0, 2 * RADIUS), material(k), d, loss, edges=edges, zones=[zone])
    model = model_of(disc, 2 * RADIUS / cells)
    T = steady(model, input_vector(model, {"middle": watts}))
    m, q = np.sqrt(loss / (k * d)), watts / (np.pi * heater_radius**2) / loss
    a, R = heater_radius, RADIUS
    # Inside q + A I0, outside B I0 + C K0; value and slope meet at a, the rim law at R.
    equations = [
        [i0(m * a), -i0(m * a), -k0(m * a)],
        [i1(m * a), -i1(m * a), k1(m * a)],
        [
            0,
            k * m * i1(m * R) + rim_h * i0(m * R),
            -k * m * k1(m * R) + rim_h * k0(m * R),
        ],
    ]
    A, B, C = np.linalg.solve(equations, [-q, 0, 0])
    r = np.maximum(np.hypot(model.grid.x, model.grid.y), 1e-9)
    exact = np.where(r < a, q + A * i0(m * r), B * i0(m * r) + C * k0(m * r))
    return l2_error(model, T, exact)


@pytest.mark.parametrize("rim_h", [0.0, 25.0, 2000.0], ids=["insulated", "convective", "strong"])
def test_a_disc_converges_at_second_order_on_square_cells(rim_h):
    """Disc with face loss and a concentric heater, exact in I0 and K0 (Carslaw & Jaeger
    ch. 13, from memory): at least 1.8 over five grids, insulated rim and convective."""
    errors = [heated_disc(cells, rim_h) for cells in FIVE_GRIDS]
    assert mean_slope(1 / np.array(FIVE_GRIDS), errors) >= 1.8


def held_disc(cells: int) -> float:
    """Uniform source in a disc held at 0 degC: T = q (R^2 - r^2) / 4."""
    zone = Zone("all", (Circle(0, 0, 2.0),), 1.0, 0.0, 1.0)
    disc = plate(Circle(0, 0, 2.0), material(1.0), edges=[held("all", 0.0)], zones=[zone])
    model = model_of(disc, 2.0 / cells)
    T = steady(model, input_vector(model, {"all": np.pi}))
    return l2_error(model, T, (1 - model.grid.x**2 - model.grid.y**2) / 4)


def test_a_disc_held_at_its_rim_converges():
    """A held rim keeps at least a tenth of a cell to the nearest centre, so that every link
    stays positive: first order where it cuts the cells, 1 % of the rise on 40 across."""
    errors = [held_disc(cells) for cells in FIVE_GRIDS]
    assert mean_slope(1 / np.array(FIVE_GRIDS), errors) >= 0.85
    assert errors[2] < 0.01 * 0.25


def half_hot_disc(cells: int) -> tuple[ThermalModel, Array]:
    corners = 180
    angle = 2 * np.pi / corners * np.arange(corners)
    outline = Polygon(tuple(zip(np.cos(angle).tolist(), np.sin(angle).tolist(), strict=True)))
    edges = [Edge(EdgeKind.HELD, held=0.0)] + [
        Edge(EdgeKind.HELD, held=1.0, segment=n + 1) for n in range(corners // 2)
    ]
    model = model_of(plate(outline, material(1.0), edges=edges), 2 / cells)
    return model, steady(model, model.nominal)


def test_a_disc_with_half_of_its_rim_hot_follows_the_poisson_kernel():
    """T = 1/2 + atan2(2 r sin th, 1 - r^2) / pi (textbook; from memory); mean over any
    concentric circle 0.5."""
    model, T = half_hot_disc(80)
    exact = {
        (0.0, 0.0): 0.5,
        (0.0, 0.5): 0.7951672353,
        (0.0, -0.5): 0.2048327647,
        (0.8 * np.cos(np.pi / 6), 0.4): 0.8654014149,
    }
    found = [value(model, T, *place) for place in exact]
    assert found == pytest.approx(list(exact.values()), abs=2e-3)
    turn = np.linspace(0, 2 * np.pi, 72, endpoint=False)
    ring = [value(model, T, 0.6 * np.cos(t), 0.6 * np.sin(t)) for t in turn]
    assert np.mean(ring) == pytest.approx(0.5, abs=1e-3)


@pytest.mark.parametrize(
    ("Bi", "zeta", "C1"),
    [(0.1, 0.44168, 1.02458), (1.0, 1.25578, 1.20709), (10.0, 2.17950, 1.56769)],
)
def test_a_disc_cools_with_the_tabulated_first_eigenvalue(Bi, zeta, C1):
    """Infinite cylinder, zeta J1 = Bi J0 (Incropera & DeWitt, 7th ed., Table 5.1, from
    memory): 1e-3 on 60 cells across."""
    model = model_of(plate(Circle(0, 0, 2), material(1.0), edges=[convective("all", Bi)]), 2 / 60)
    reduced = reduce(model, order=12)
    assert np.sqrt(reduced.rates[0]) == pytest.approx(zeta, rel=1e-3)
    middle = value(model, reduced.V[:, 0], 0, 0)
    assert middle * (reduced.V[:, 0] @ model.capacity) == pytest.approx(C1, rel=1e-3)


def test_a_disc_with_a_cold_rim_cools_as_the_bessel_series():
    """Radius 1, Fo = 0.1: centre 0.8483551133, r = 0.5 0.6102467865 (Carslaw & Jaeger sec.
    7.6, from memory); 5e-3 on 60 cells across and a smaller error on 120."""
    worst = []
    for cells in (60, 120):
        disc = plate(Circle(0, 0, 2), material(1.0), edges=[held("all", 0.0)])
        model = model_of(disc, 2 / cells)
        start, times = np.ones(model.grid.n), np.array([0.1])
        T = transient(model, start, model.nominal, times, tolerance_K=1e-4)[0]
        off = value(model, T, 0, 0) - 0.8483551133, value(model, T, 0.3, 0.4) - 0.6102467865
        worst.append(np.abs(off).max())
    assert worst[0] < 5e-3
    assert worst[1] < 0.7 * worst[0]


OUTLINE = ((0.0, 0.0), (0.4, 0.0), (0.4, 0.2), (0.3, 0.3), (0.0, 0.3))
CENTRE, HOLE_RADIUS = (0.18, 0.14), 0.04


def finite_elements() -> tuple[Basis, Array]:
    """The same plate on a curved mesh of Q2 elements around the hole."""
    around, across = 240, 24
    corner_angles = [np.arctan2(y - CENTRE[1], x - CENTRE[0]) for x, y in OUTLINE]
    turn = np.sort(np.concatenate((np.linspace(-np.pi, np.pi, around + 1)[:-1], corner_angles)))
    turn = turn[np.concatenate((np.diff(turn) > 1e-6, [True]))]
    rays = np.column_stack((np.cos(turn), np.sin(turn)))
    reach = np.array([_reach(ray) for ray in rays])
    radius = HOLE_RADIUS + np.linspace(0, 1, across + 1)[:, None] * (reach - HOLE_RADIUS)
    x, y = CENTRE[0] + radius * rays[:, 0], CENTRE[1] + radius * rays[:, 1]
    number = np.arange(x.size).reshape(x.shape)
    after = np.roll(number, -1, axis=1)
    cells = np.stack((number[:-1], number[1:], after[1:], after[:-1])).reshape(4, -1)
    basis = Basis(MeshQuad(np.vstack((x.ravel(), y.ravel())), cells), ElementQuad2(), intorder=6)
    rim = FacetBasis(
        basis.mesh,
        ElementQuad2(),
        facets=basis.mesh.facets_satisfying(
            lambda p: np.hypot(p[0] - CENTRE[0], p[1] - CENTRE[1]) > HOLE_RADIUS * 1.02,
            boundaries_only=True,
        ),
        intorder=6,
    )
    k, d, loss, rim_h = 50.0, 0.015, 20.0, 80.0

    @BilinearForm
    def stiffness(u, v, _w):
        return k * d * (u.grad[0] * v.grad[0] + u.grad[1] * v.grad[1]) + loss * u * v

    @BilinearForm
    def rim_loss(u, v, _w):
        return rim_h * d * u * v

    @LinearForm
    def source(v, w):
        return 4e4 * np.exp(-((w.x[0] - 0.3) ** 2 + (w.x[1] - 0.1) ** 2) / 0.06**2) * v

    T = solve(stiffness.assemble(basis) + rim_loss.assemble(rim), source.assemble(basis))
    return basis, T


def _reach(ray: Array) -> float:
    """Distance from the hole's centre to the outline along a ray."""
    nearest = np.inf
    for (ax, ay), (bx, by) in zip(OUTLINE, OUTLINE[1:] + OUTLINE[:1], strict=True):
        edge = np.array([bx - ax, by - ay])
        t, s = np.linalg.solve(np.column_stack((ray, -edge)) + 1e-15, np.array([ax, ay]) - CENTRE)
        if t > 0 and -1e-9 <= s <= 1 + 1e-9:
            nearest = min(nearest, float(t))
    return nearest


def test_a_polygon_with_a_hole_agrees_with_finite_elements():
    """Second route: scikit-fem, Q2 elements fitted to outline and hole.  0.3 K of some 60 K
    on 8 mm cells, and at most a third of that difference on 4 mm."""
    basis, T = finite_elements()
    places = np.array(
        [(0.3, 0.1), (0.05, 0.05), (0.18, 0.2), (0.33, 0.22), (0.24, 0.14), (0.39, 0.02)]
    )
    reference = basis.probes(places.T) @ T
    worst = []
    for cell in (0.008, 0.004):
        hole = Circle(*CENTRE, 2 * HOLE_RADIUS)
        rim_edges = [
            Edge(EdgeKind.CONVECTIVE, coefficient=80.0, ambient=0.0, segment=n)
            for n in range(1, len(OUTLINE) + 1)
        ]
        described = plate(
            Polygon(OUTLINE), material(50.0), 0.015, 20.0, edges=rim_edges, holes=(hole,)
        )
        model = model_of(described, cell)
        grid = model.grid
        q = 4e4 * np.exp(-((grid.x - 0.3) ** 2 + (grid.y - 0.1) ** 2) / 0.06**2) * grid.area
        field = steady(model, model.nominal, q)
        found = [value(model, field, x, y) for x, y in places]
        worst.append(np.abs(np.subtract(found, reference)).max())
    assert reference.max() > 40
    assert worst[0] < 0.3
    assert worst[1] < worst[0] / 3


def test_the_cells_carry_all_of_the_area_and_all_of_the_rim():
    """No merging, nothing lost: to 1e-9 of the plate."""
    hole = Circle(*CENTRE, 2 * HOLE_RADIUS)
    described = plate(Polygon(OUTLINE), material(50.0), holes=(hole,))
    for cell in (0.003, 0.0071, 0.019):
        grid = model_of(described, cell).grid
        whole = geometry(described.outline).difference(geometry(hole))
        assert grid.area.sum() == pytest.approx(whole.area, rel=1e-6)
        assert grid.rim.length_m.sum() == pytest.approx(whole.length, rel=1e-9)
