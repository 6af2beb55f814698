"""Inputs, losses and insets of a plate's equations."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from platewatch.errors import PlateError
from platewatch.thermal.conduction import (
    InputKind,
    build_model,
    input_vector,
    linear_loss_watts,
    loss_watts,
    steady,
)
from platewatch.thermal.grid import build_grid
from platewatch.thermal.plate import (
    Clamp,
    Correlation,
    Edge,
    EdgeKind,
    Inset,
    Layer,
    Material,
    Plate,
    Rectangle,
    Surface,
    Table,
    Zone,
)
from platewatch.thermal.reduction import (
    field_rows,
    flux_modes,
    point_rows,
    project,
    reconstruct,
    reduce,
    remainder,
)

STEEL = Material("steel", Table.constant(50.0), 7850.0, Table.constant(470.0), 0.7, "handbook")
COPPER = Material("copper", Table.constant(400.0), 8933.0, Table.constant(385.0), 0.1, "handbook")
FACE = Surface("surround/ambient", coefficient=8.0)
AIR_UP = Surface("surround/ambient", correlation=Correlation.NATURAL_UP)
AIR_DOWN = Surface(
    "surround/ambient", correlation=Correlation.NATURAL_DOWN, surroundings="surround/walls"
)
ZONE = Zone("Z1", (Rectangle(0.05, 0.05, 0.1, 0.1),), 400.0, 20.0, 1.0)


def plate(top=FACE, bottom=FACE, **more) -> Plate:
    return Plate("P1", Rectangle(0, 0, 0.4, 0.3), 0.02, STEEL, top, bottom, zones=(ZONE,), **more)


def model_of(described: Plate, reference_degC: float = 150.0):
    return build_model(described, build_grid(described, 0.02), reference_degC)


def test_every_zone_and_every_surrounding_is_one_input():
    """A channel named twice is one input; a fixed ambient carries its number."""
    edge = Edge(EdgeKind.CONVECTIVE, coefficient=8.0, ambient=18.0)
    model = model_of(plate(AIR_UP, AIR_DOWN, edges=(edge,), clamps=(Clamp(0, 0.1, 0.3),)))
    assert [i.name for i in model.inputs] == [
        "zone/Z1",
        "surround/ambient",
        "surround/walls",
        "const/18.0",
    ]
    assert model.inputs[0].kind is InputKind.POWER
    assert model.inputs[3].value == 18.0


def test_a_watt_of_a_zone_is_a_watt_on_the_plate():
    """Also when the zone does not follow the cells, or hangs over the edge."""
    odd = replace(ZONE, shapes=(Rectangle(-0.013, 0.021, 0.077, 0.093),))
    model = model_of(replace(plate(), zones=(odd,)))
    assert model.B[:, 0].sum() == pytest.approx(1.0, rel=1e-14)


def test_the_linear_loss_is_the_true_loss_at_the_reference():
    """Natural convection and radiation, nominal ambient 22 degC."""
    model = model_of(plate(AIR_UP, AIR_DOWN))
    T = np.full(model.grid.n, 150.0)
    u = input_vector(model)
    assert linear_loss_watts(model, T, u) == pytest.approx(loss_watts(model, T, u), rel=1e-9)
    warmer = linear_loss_watts(model, T + 1, u).sum() - loss_watts(model, T + 1, u).sum()
    assert abs(warmer) < 0.005 * loss_watts(model, T, u).sum()


def test_a_hotter_room_takes_less_heat():
    """The linear model knows the slope in the ambient too."""
    model = model_of(plate(AIR_UP, AIR_DOWN))
    T = np.full(model.grid.n, 150.0)
    for room in (20.0, 27.0):
        u = input_vector(model, {}, {"ambient": room, "walls": room})
        ours, true = linear_loss_watts(model, T, u).sum(), loss_watts(model, T, u).sum()
        assert ours == pytest.approx(true, rel=0.005)


def test_a_coefficient_is_the_whole_loss_of_a_face():
    """No radiation is added to it, whatever the material's emissivity."""
    model = model_of(plate())
    T = np.full(model.grid.n, 122.0)
    assert loss_watts(model, T, input_vector(model)).sum() == pytest.approx(16 * 0.12 * 100)


def test_layers_add_their_conductance_and_capacity():
    """20 mm steel with 5 mm copper on it: k d and rho cp d in sum."""
    model = model_of(plate(layers=(Layer(COPPER, 0.005),)))
    sheet = model.stack.sheet_conductance(100.0)
    assert sheet == pytest.approx(np.full(model.grid.n, 50 * 0.02 + 400 * 0.005))
    per_area = 7850 * 470 * 0.02 + 8933 * 385 * 0.005
    assert model.capacity.sum() == pytest.approx(per_area * 0.12)


def test_an_inset_replaces_the_plate_where_it_lies_and_the_later_one_wins():
    """Capacity to the last joule, although the insets cut through cells and each other."""
    first = Inset(Rectangle(0.051, 0.05, 0.1, 0.1), COPPER, 0.02)
    second = Inset(Rectangle(0.101, 0.05, 0.1, 0.1), None, 0.01)
    model = model_of(plate(insets=(first, second)))
    steel, copper = 7850 * 470, 8933 * 385
    expected = (0.12 - 0.005 - 0.01) * 0.02 * steel + 0.005 * 0.02 * copper + 0.01 * 0.01 * steel
    assert model.capacity.sum() == pytest.approx(expected, rel=1e-12)


def test_a_clamp_takes_its_watts_per_kelvin_at_its_place():
    """0.3 W/K in all, shared by the cells around it, towards the room."""
    with_clamp, without = model_of(plate(clamps=(Clamp(0.0, 0.15, 0.3),))), model_of(plate())
    extra = (with_clamp.K - without.K).sum(axis=1)
    assert extra.sum() == pytest.approx(0.3)
    assert with_clamp.grid.x[extra > 1e-9].max() < 0.03
    assert (with_clamp.B - without.B)[:, 1].sum() == pytest.approx(0.3)


def test_a_rim_given_per_metre_counts_its_length():
    """2 W/K per metre over 1.4 m of rim; what the half cell of metal adds is small."""
    rim = Edge(EdgeKind.CONVECTIVE, w_per_k_per_m=2.0)
    model, bare = model_of(plate(edges=(rim,))), model_of(plate())
    assert (model.K - bare.K).sum() == pytest.approx(2.8, rel=0.03)


def test_a_zone_off_the_plate_is_refused():
    """It names the zone."""
    lost = replace(ZONE, name="far", shapes=(Rectangle(2, 2, 0.1, 0.1),))
    with pytest.raises(PlateError, match="'far' does not lie on the plate"):
        model_of(replace(plate(), zones=(lost,)))


def test_an_unknown_zone_lists_the_known_inputs():
    """The message shows what there is."""
    with pytest.raises(PlateError, match="zone/Z1"):
        input_vector(model_of(plate()), {"Z9": 1.0})


def test_rows_of_the_reduced_model_give_cells_and_points():
    """field_rows, point_rows and flux_modes against the field itself."""
    model = model_of(plate())
    reduced = reduce(model)
    a = project(reduced, steady(model, input_vector(model, {"Z1": 300.0})))
    T = reconstruct(reduced, a)
    assert field_rows(reduced, np.array([0, 7])) @ a == pytest.approx(T[[0, 7]])
    middle = point_rows(reduced, np.array([[model.grid.x[33], model.grid.y[33]]]))
    assert middle @ a == pytest.approx(T[[33]])
    q = np.eye(model.grid.n)[:, :2]
    assert flux_modes(reduced, q) == pytest.approx(reduced.V[:2].T)


def test_a_linear_plate_has_no_remainder():
    """Coefficients are linear: nothing to correct."""
    reduced = reduce(model_of(plate()))
    assert not remainder(reduced, np.ones(reduced.order), np.zeros(2)).any()


def test_the_remainder_vanishes_at_the_reference():
    """There the linear losses are the true ones, but for the table's 1 K steps."""
    model = model_of(plate(AIR_UP, AIR_UP))
    reduced = reduce(model)
    u = input_vector(model)
    at_reference = project(reduced, np.full(model.grid.n, 150.0))
    off = remainder(reduced, at_reference, u)
    lost = reduced.V.T @ loss_watts(model, np.full(model.grid.n, 150.0), u)
    assert np.abs(off).max() < 1e-3 * np.abs(lost).max()


def test_an_order_too_low_for_the_inputs_is_refused():
    """It says how many modes this plate needs."""
    with pytest.raises(PlateError, match="needs"):
        reduce(model_of(plate()), order=1)
