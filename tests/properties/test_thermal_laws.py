"""Laws of conduction that hold for any plate."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, reject, settings
from hypothesis import strategies as st

from platewatch.errors import PlateError
from platewatch.thermal.conduction import (
    ThermalModel,
    build_model,
    input_vector,
    steady,
    transient,
)
from platewatch.thermal.grid import build_grid, footprint, on_plate, point_row
from platewatch.thermal.plate import (
    Circle,
    Clamp,
    Edge,
    EdgeKind,
    Inset,
    Material,
    Plate,
    Polygon,
    Rectangle,
    Shape,
    Surface,
    Table,
    Zone,
    geometry,
)

SIZES = st.floats(0.1, 0.8)
LOSSES = st.floats(0.5, 60.0)


def metal(k: float, rho: float, cp: float) -> Material:
    return Material("any", Table.constant(k), rho, Table.constant(cp), 0.5, "drawn")


METALS = st.builds(metal, st.floats(10, 400), st.floats(2000, 9000), st.floats(350, 1000))


@st.composite
def outlines(draw: st.DrawFn) -> Shape:
    kind = draw(st.sampled_from(["rectangle", "circle", "polygon"]))
    if kind == "rectangle":
        return Rectangle(0, 0, draw(SIZES), draw(SIZES))
    if kind == "circle":
        return Circle(0, 0, draw(SIZES))
    corners = draw(st.integers(3, 9))
    turn = 2 * np.pi * np.arange(corners) / corners
    reach = np.array(draw(st.lists(st.floats(0.15, 0.5), min_size=corners, max_size=corners)))
    points = np.column_stack((reach * np.cos(turn), reach * np.sin(turn)))
    return Polygon(tuple(map(tuple, points.tolist())))


@st.composite
def plates(draw: st.DrawFn) -> Plate:
    """Any outline, perhaps a hole, an inset, rim, clamp; one heater in the middle."""
    outline = draw(outlines())
    middle = geometry(outline).representative_point()
    room = geometry(outline).exterior.distance(middle)
    hole = Circle(middle.x, middle.y, room * draw(st.floats(0.2, 0.9)))
    inset = Inset(Rectangle(middle.x, middle.y, 2 * room, 2 * room), draw(METALS), 0.03)
    rim = Edge(EdgeKind.CONVECTIVE, coefficient=draw(st.floats(0, 500)))
    heater = Rectangle(middle.x - room, middle.y - room, 2 * room, 2 * room)
    return Plate(
        "any",
        outline,
        draw(st.floats(0.004, 0.05)),
        draw(METALS),
        Surface(20.0, coefficient=draw(LOSSES)),
        Surface(20.0, coefficient=draw(LOSSES)),
        holes=(hole,) if draw(st.booleans()) else (),
        insets=(inset,) if draw(st.booleans()) else (),
        edges=(rim,) if draw(st.booleans()) else (),
        clamps=(Clamp(middle.x, middle.y, 0.5),) if draw(st.booleans()) else (),
        zones=(Zone("Z", (heater,), 500.0, 0.0, 1.0),),
    )


CELLS = st.integers(6, 24)


def fine(plate: Plate, across: int) -> float:
    left, bottom, right, top = geometry(plate.outline).bounds
    return max(right - left, top - bottom) / across


def model_of(plate: Plate, cell_m: float) -> ThermalModel:
    """A plate with a bridge narrower than its cells is refused, and not counted here."""
    try:
        return build_model(plate, build_grid(plate, cell_m), 100.0)
    except PlateError:
        reject()


@settings(max_examples=40, deadline=None)
@given(plates(), CELLS, st.integers(2, 3))
def test_splitting_the_cells_keeps_area_and_heat(plate, across, split):
    """Finer cells hold the same area, rim, heat capacity and heater watts."""
    cell = fine(plate, across)
    models = [model_of(plate, cell), model_of(plate, cell / split)]
    for total in (
        lambda m: m.grid.area.sum(),
        lambda m: m.grid.rim.length_m.sum(),
        lambda m: m.capacity.sum(),
        lambda m: footprint(m.grid, plate.zones[0].shapes[0]).sum(),
    ):
        assert total(models[0]) == pytest.approx(total(models[1]), rel=1e-4)
    for model in models:
        assert model.B[:, 0].sum() == pytest.approx(1.0, rel=1e-12)


@settings(max_examples=40, deadline=None)
@given(plates(), CELLS)
def test_conductances_are_symmetric_and_never_negative(plate, across):
    """K is symmetric, its links are positive, and each row's excess is its loss."""
    model = model_of(plate, fine(plate, across))
    K = model.K.toarray()
    assert np.array_equal(K, K.T)
    off = K - np.diag(K.diagonal())
    assert off.max() <= 0
    assert (K.diagonal() + off.sum(axis=1)).min() >= -1e-9 * np.abs(K).max()
    assert model.capacity.min() > 0


@settings(max_examples=40, deadline=None)
@given(plates(), CELLS, st.floats(0, 2000))
def test_no_place_is_colder_than_the_room_when_only_heaters_work(plate, across, watts):
    """Maximum principle: the coldest place is at or above ambient, the hottest in the heater
    unless nothing is on; what enters leaves."""
    model = model_of(plate, fine(plate, across))
    u = input_vector(model, {"Z": watts})
    T = steady(model, u)
    assert T.min() >= 20 - 1e-6
    heated = model.B[:, 0] > 0
    assert T.max() <= T[heated].max() + 1e-6
    balance = model.B @ u - model.K @ T
    assert abs(balance.sum()) <= 1e-9 * (watts + model.B[:, 1:].sum() * 20 + 1)


@settings(max_examples=15, deadline=None)
@given(plates(), st.integers(0, 2**31))
def test_without_heat_the_extremes_only_shrink(plate, seed):
    """An unheated plate stays between its first extremes and the room."""
    model = model_of(plate, fine(plate, 12))
    start = np.random.default_rng(seed).uniform(20.0, 200.0, model.grid.n)
    fields = transient(model, start, model.nominal, np.array([5.0, 50.0, 500.0]))
    assert fields.min() >= 20 - 0.02
    tops = np.concatenate(([start.max()], fields.max(axis=1)))
    assert (np.diff(tops) <= 0.02).all()


@settings(max_examples=40, deadline=None)
@given(plates(), CELLS, st.floats(0, 1), st.floats(0, 1), st.floats(-300, 300))
def test_a_thermocouple_reads_a_sloping_field_exactly(plate, across, right, up, slope):
    """Weights sum to 1 and reproduce a linear field at any place on the plate."""
    grid = model_of(plate, fine(plate, across)).grid
    x = grid.x0 + right * grid.nx * grid.hx
    y = grid.y0 + up * grid.ny * grid.hy
    if not on_plate(grid, x, y):
        return
    weights = point_row(grid, x, y)
    assert weights.sum() == pytest.approx(1.0, abs=1e-9)
    field = 100 + slope * grid.x - 2 * slope * grid.y
    assert weights @ field == pytest.approx(100 + slope * x - 2 * slope * y, abs=1e-6)
