"""The reduced model against the full one, and its basis."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import thin_plates

from platewatch.thermal.conduction import (
    ThermalModel,
    build_model,
    input_vector,
    linear_loss_watts,
    loss_watts,
    steady,
    transient,
)
from platewatch.thermal.grid import build_grid, footprint
from platewatch.thermal.plate import (
    Circle,
    Correlation,
    Edge,
    EdgeKind,
    Material,
    Plate,
    Rectangle,
    Side,
    Surface,
    Table,
    Zone,
)
from platewatch.thermal.reduction import (
    ReducedModel,
    flux_modes,
    project,
    reconstruct,
    reduce,
    remainder,
    static_correction,
)
from platewatch.types import Array

FACE = Surface(22.0, coefficient=10.0)
TIMES_S = np.geomspace(1.0, 7200.0, 40)


def aluminium_plate() -> Plate:
    """600 x 400 x 20 mm, six zones of 500 W."""
    alloy = Material("6061", Table.constant(167.0), 2700.0, Table.constant(896.0), 0.1, "handbook")
    zones = tuple(
        Zone(
            f"Z{number}",
            (Rectangle(0.2 * (number % 3) + 0.02, 0.2 * (number // 3) + 0.02, 0.16, 0.16),),
            500.0,
            20.0,
            1.0,
        )
        for number in range(6)
    )
    return Plate("aluminium", Rectangle(0, 0, 0.6, 0.4), 0.02, alloy, FACE, FACE, zones=zones)


def round_plate() -> Plate:
    """Cast iron, 300 mm across, 20 mm thick: a middle zone and two pads."""
    iron = Material("iron", Table.constant(50.0), 7200.0, Table.constant(500.0), 0.7, "handbook")
    pads = Rectangle(-0.13, -0.03, 0.06, 0.06), Rectangle(0.07, -0.03, 0.06, 0.06)
    zones = (
        Zone("middle", (Circle(0, 0, 0.12),), 600.0, 20.0, 1.0),
        Zone("pads", pads, 600.0, 20.0, 1.0),
    )
    return Plate("round", Circle(0, 0, 0.3), 0.02, iron, FACE, FACE, zones=zones)


def model_of(plate: Plate) -> ThermalModel:
    return build_model(plate, build_grid(plate), 150.0)


def at_times(reduced: ReducedModel, a0: Array, drive: Array, times_s: Array) -> Array:
    """States (t, r) under a held drive (r,): the exact exponential of every mode."""
    decay = np.exp(-np.outer(times_s, reduced.rates))
    gained = -np.expm1(-np.outer(times_s, reduced.rates)) / np.maximum(reduced.rates, 1e-300)
    return decay * a0 + gained * drive


@pytest.mark.parametrize(
    ("plate", "tolerance_K"), [(aluminium_plate(), 0.15), (round_plate(), 0.4)], ids=["al", "iron"]
)
@pytest.mark.parametrize("uneven", [False, True])
def test_forty_modes_follow_the_full_model_through_a_heat_up(plate, tolerance_K, uneven):
    """At most 40 modes, every cell, from 1 s to 2 h, all zones and one alone."""
    model = model_of(plate)
    reduced = reduce(model, order=40)
    powers = {zone.name: zone.watts for zone in plate.zones[: 1 if uneven else None]}
    u = input_vector(model, powers)
    start = np.full(model.grid.n, 22.0)
    full = transient(model, start, u, TIMES_S, tolerance_K=1e-3)
    states = at_times(reduced, project(reduced, start), reduced.G @ u + reduced.g0, TIMES_S)
    assert reduced.order <= 40
    assert np.abs(states @ reduced.V.T - full).max() <= tolerance_K


def test_the_order_follows_from_the_tolerance_and_the_error_is_stated():
    """A tighter tolerance takes more modes; the stated error keeps it."""
    model = model_of(round_plate())
    rough, fine = reduce(model, tolerance_K=0.3), reduce(model, tolerance_K=0.02)
    assert rough.order < fine.order
    assert rough.error_K <= 0.3
    assert fine.error_K <= 0.02


PLACES = [(0.1, 0.1), (0.0, 0.0), (0.25, 0.15), (0.5, 0.0)]


@pytest.mark.parametrize("corner", PLACES)
def test_a_source_nobody_described_is_followed_by_the_ramped_correction(corner):
    """A 100 mm square as strong as the heaters (20 kW/m2), anywhere: 0.2 K at all times.
    Without the correction it errs by more than 1 K, with it unramped at its onset as well."""
    model = model_of(aluminium_plate())
    reduced = reduce(model)
    covered = footprint(model.grid, Rectangle(*corner, 0.1, 0.1))
    q = 200.0 * covered / covered.sum()
    nothing = np.zeros(len(model.inputs))
    full = transient(model, np.zeros(model.grid.n), nothing, TIMES_S, extra=q - model.offset)
    states = at_times(reduced, np.zeros(reduced.order), flux_modes(reduced, q), TIMES_S)
    w, tau_s = static_correction(reduced, q)
    bare = states @ reduced.V.T
    ramp = -np.expm1(-TIMES_S / tau_s)
    assert np.abs(bare - full).max() > 0.8
    assert np.abs(bare + w - full).max() > 0.8
    assert np.abs(bare + np.outer(ramp, w) - full).max() <= 0.2


def test_steady_states_of_the_described_inputs_are_exact():
    """Static responses are in the basis: reduced and full agree to 1e-6 K."""
    model = model_of(round_plate())
    reduced = reduce(model, order=30)
    u = input_vector(model, {"middle": 300.0, "pads": 100.0})
    a = (reduced.G @ u + reduced.g0) / reduced.rates
    assert np.abs(reconstruct(reduced, a) - steady(model, u)).max() < 1e-6


def test_an_even_plate_stays_exactly_even():
    """A constant field is in the basis: 1e-9 K at 100 degC, with and without any loss."""
    for face in (FACE, Surface(22.0, coefficient=0.0)):
        plate = round_plate()
        model = model_of(Plate(**{**plate.__dict__, "top": face, "bottom": face}))
        reduced = reduce(model)
        even = np.full(model.grid.n, 100.0)
        assert np.abs(reconstruct(reduced, project(reduced, even)) - even).max() < 1e-9
        assert reduced.rates[0] >= 0


def test_the_modes_are_orthonormal_in_heat_capacity_and_conduct_alone():
    """V'C V = 1 and V'K V = rates on the diagonal."""
    model = model_of(aluminium_plate())
    reduced = reduce(model)
    V = reduced.V
    assert np.abs(V.T @ (model.capacity[:, None] * V) - np.eye(reduced.order)).max() < 1e-9
    off = V.T @ (model.K @ V) - np.diag(reduced.rates)
    assert np.abs(off).max() < 1e-9 * reduced.rates.max()


def test_the_same_description_gives_the_same_basis():
    """Start vector and signs are fixed: bit for bit, and so is its hash."""
    first, second = reduce(model_of(round_plate())), reduce(model_of(round_plate()))
    assert np.array_equal(first.V, second.V)
    assert first.basis_hash == second.basis_hash


def bent_plate() -> Plate:
    """The aluminium plate with natural convection, radiation, k(T) and cp(T)."""
    plate = aluminium_plate()
    alloy = Material(
        "bent",
        Table((0.0, 300.0), (160.0, 180.0)),
        2700.0,
        Table((0.0, 300.0), (880.0, 1000.0)),
        0.8,
        "invented",
    )
    return Plate(
        **{
            **plate.__dict__,
            "material": alloy,
            "top": Surface("surround/ambient", correlation=Correlation.NATURAL_UP),
            "bottom": Surface("surround/ambient", correlation=Correlation.NATURAL_DOWN),
        }
    )


def test_the_remainder_makes_the_losses_true_again():
    """V'(linear - true loss) on 48 places against every cell: within 2 % of the difference
    on a plate with a slope of 60 K across it."""
    model = model_of(bent_plate())
    reduced = reduce(model)
    a = project(reduced, 60 + 100 * model.grid.x)
    T, u = reconstruct(reduced, a), input_vector(model, {}, {"ambient": 25.0})
    exact = reduced.V.T @ (linear_loss_watts(model, T, u) - loss_watts(model, T, u))
    found = remainder(reduced, a, u)
    assert np.linalg.norm(found - exact) < 0.02 * np.linalg.norm(exact)


def test_the_stated_error_counts_more_than_the_modes_left_out():
    """Losses, k(T) and cp(T) on a few places cost something too; error_K says so."""
    plain, bent = reduce(model_of(aluminium_plate())), reduce(model_of(bent_plate()))
    assert plain.error_K == plain.left_out_K
    assert bent.error_K > bent.left_out_K


def test_the_time_constants_of_the_main_plate_are_the_published_ones():
    """Mean 1451.52 s exactly, first x mode 202.137918 s, first y mode 121.079469 s
    (closed form); the grid's share of the modes is below 0.1 %."""
    found = 1 / reduce(thin_plates.model_of(thin_plates.main_plate(), 0.01, 150.0)).rates[:3]
    assert found[0] == pytest.approx(1451.52, rel=1e-9)
    assert found[1:] == pytest.approx((202.137918, 121.079469), rel=1e-3)


@pytest.mark.parametrize("held_degC", [22.0, 50.0, 90.0])
def test_a_held_edge_warmer_than_the_room_costs_no_accuracy(held_degC: float) -> None:
    """A cooled or heated frame is there before the heaters are: the plate starts at rest.

    Measured from an even start, the step of the edge alone asked for 57 modes and still
    was 2.6 K off.
    """
    edges = (Edge(EdgeKind.HELD, held=held_degC, side=Side.X_MAX),)
    reduced = reduce(model_of(replace(aluminium_plate(), edges=edges)))
    assert reduced.order <= 48
    assert reduced.error_K <= 0.15
