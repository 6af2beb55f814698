"""k(T) and cp(T) in the reduced model and the filter, against the full equations."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.sparse import diags_array

from platewatch.adapters.settings import load
from platewatch.monitor.estimator import FieldState, build_quiet, forecast_step
from platewatch.thermal.conduction import ThermalModel, build_model, input_vector
from platewatch.thermal.full import FullEquations
from platewatch.thermal.grid import build_grid
from platewatch.thermal.heatup import inputs_at
from platewatch.thermal.materials import BUILT_IN
from platewatch.thermal.plate import (
    Correlation,
    Edge,
    EdgeKind,
    Inset,
    Layer,
    Material,
    Plate,
    Rectangle,
    Sensor,
    Side,
    Surface,
    Table,
    Zone,
)
from platewatch.thermal.reduction import (
    ReducedModel,
    project,
    property_remainder,
    reconstruct,
    reduce,
    remainder,
)
from platewatch.types import Array, Gaussian

CONFIG = Path(__file__).parents[2] / "config"
ROOM_DEGC = 20.0
# 60 to 48 W/mK and 434 to 560 J/kgK: carbon steel between 20 and about 330 degC
# (Incropera Table A.1, from memory), here squeezed into 20..200 degC to be harder.
STRONG = Material(
    "strong", Table((20.0, 200.0), (60.0, 48.0)), 7854.0, Table((20.0, 200.0), (434.0, 560.0)),
    0.8, "squeezed from Table A.1",
)  # fmt: skip
TICK_S = 2.0


def strong_plate(**more: object) -> Plate:
    """400 x 300 x 12 mm, three heaters, one end twice as strong as the other."""
    zones = (
        Zone("L", (Rectangle(0.02, 0.02, 0.11, 0.26),), 1000.0, 20.0, 1.0),
        Zone("M", (Rectangle(0.145, 0.02, 0.11, 0.26),), 700.0, 20.0, 1.0),
        Zone("R", (Rectangle(0.27, 0.02, 0.11, 0.26),), 500.0, 20.0, 1.0),
    )
    described = Plate(
        "strong",
        Rectangle(0, 0, 0.4, 0.3),
        0.012,
        STRONG,
        Surface("surround/ambient", correlation=Correlation.NATURAL_UP),
        Surface("surround/ambient", coefficient=3.0),
        cell_m=0.0125,
        zones=zones,
        sensors=(Sensor("A", 0.1, 0.1), Sensor("B", 0.3, 0.2)),
        reference_degC=200.0,
    )
    return replace(described, **more)  # type: ignore[arg-type]


def mixed_plate() -> Plate:
    """Copper let in, stainless steel on top, the cold end held at the room's temperature."""
    return strong_plate(
        insets=(Inset(Rectangle(0.17, 0.1, 0.08, 0.1), BUILT_IN["copper"]),),
        layers=(Layer(BUILT_IN["stainless-304"], 0.002),),
        edges=(Edge(EdgeKind.HELD, held="surround/beam", side=Side.X_MAX),),
    )


def model_of(plate: Plate) -> ThermalModel:
    return build_model(plate, build_grid(plate), plate.reference_degC or 200.0)


def drive(model: ThermalModel) -> tuple[Array, Array]:
    """Inputs (m,) once reached, with every heater on, and the lag of each."""
    zones = model.plate.zones
    around = {"ambient": ROOM_DEGC, "beam": ROOM_DEGC}
    u = input_vector(model, {zone.name: zone.watts for zone in zones}, around)
    lag_s = np.zeros(u.size)
    lag_s[: len(zones)] = [zone.lag_s for zone in zones]
    return u, lag_s


def full_heat_up(model: ThermalModel, times_s: Array) -> Array:
    """(t, n) by the full equations in every cell and SciPy's BDF: none of our stepping."""
    equations = FullEquations(model)
    u, lag_s = drive(model)

    def rate(t: float, T: Array) -> Array:
        return equations.rate(T, inputs_at(u, lag_s, t)) / equations.capacity(T)

    def jacobian(t: float, T: Array) -> object:
        K = equations.jacobian(T, inputs_at(u, lag_s, t))
        return (-diags_array(1 / equations.capacity(T)) @ K).tocsc()

    start, span = np.full(model.grid.n, ROOM_DEGC), (0.0, float(times_s[-1]))
    options = {"method": "BDF", "jac": jacobian, "rtol": 1e-6, "atol": 1e-3}
    answer: Array = solve_ivp(rate, span, start, t_eval=times_s, **options).y.T
    return answer


def ticked(reduced: ReducedModel, times_s: Array, changing: bool) -> Array:
    """(t, n) by exact steps of one tick; remainders as at its start, held over it."""
    u, lag_s = drive(reduced.model)
    a = project(reduced, np.full(reduced.model.grid.n, ROOM_DEGC))
    decay = np.exp(-reduced.rates * TICK_S)
    gain = (1 - decay) / reduced.rates
    fields = []
    for number in range(round(float(times_s[-1]) / TICK_S)):
        now = inputs_at(u, lag_s, number * TICK_S)
        middle = inputs_at(u, lag_s, (number + 0.5) * TICK_S)
        rest = remainder(reduced, a, now)
        if changing:
            adot = reduced.G @ now + reduced.g0 - reduced.rates * a + rest
            rest = rest + property_remainder(reduced, a, now, adot, TICK_S)
        a = decay * a + gain * (reduced.G @ middle + reduced.g0 + rest)
        fields.append(reconstruct(reduced, a))
    return np.array(fields)[np.round(times_s / TICK_S).astype(int) - 1]


TIMES_S = np.arange(60.0, 481.0, 60.0)


@pytest.mark.parametrize("plate", [strong_plate(), mixed_plate()], ids=["one", "mixed"])
def test_strong_tables_are_followed_through_a_heat_up_within_half_a_kelvin(plate):
    """Every cell, room to beyond 200 degC, ticks of 2 s; with the properties of the
    reference alone the same modes are off by more than 3 K."""
    model = model_of(plate)
    reduced, full = reduce(model), full_heat_up(model, TIMES_S)
    assert full.max() > 200.0
    assert np.abs(ticked(reduced, TIMES_S, True) - full).max() < 0.5
    assert np.abs(ticked(reduced, TIMES_S, False) - full).max() > 3.0


def test_the_filter_left_alone_follows_the_full_plate_through_a_heat_up():
    """The estimator's own step, no readings, theta zero: within 0.5 K of every cell."""
    plate = strong_plate()
    model = model_of(plate)
    quiet = build_quiet(plate, reduce(model), 200.0)
    watts = np.array([zone.watts for zone in plate.zones])
    k = quiet.blocks
    mean = np.zeros(k.size)
    mean[k.a] = project(quiet.reduced, np.full(model.grid.n, ROOM_DEGC))
    mean[k.L] = ROOM_DEGC
    around = np.full(len(quiet.around_u), ROOM_DEGC)
    belief = Gaussian(mean, np.eye(k.size) * 1e-6)
    state = FieldState(0, belief, np.zeros(3), watts, around)
    for _ in range(round(float(TIMES_S[-1]) / TICK_S)):
        belief, heater_W = forecast_step(quiet, state, round(TICK_S * 1e6), watts, around)
        state = replace(state, belief=belief, heater_W=heater_W)
    field = reconstruct(quiet.reduced, state.belief.mean[k.a])
    assert np.abs(field - full_heat_up(model, TIMES_S)[-1]).max() < 0.5


@pytest.mark.parametrize("degC", [30.0, 110.0, 200.0])
def test_an_evenly_warm_plate_takes_up_heat_by_its_own_heat_capacity(degC):
    """Exact: da/dt is that of the reference times c_ref / c(T), and nothing is conducted."""
    model = model_of(strong_plate())
    reduced = reduce(model)
    a = project(reduced, np.full(model.grid.n, degC))
    adot = reduced.G @ drive(model)[0]
    found = property_remainder(reduced, a, model.nominal, adot)
    expected = (STRONG.cp.at(200.0) / STRONG.cp.at(degC) - 1) * adot
    assert np.abs(found - expected).max() < 1e-9 * np.abs(adot).max()


def test_changed_conduction_moves_heat_and_makes_none():
    """The even field feels nothing of k(T): to rounding, on a plate 120 K hotter at one end."""
    model = model_of(strong_plate())
    reduced = reduce(model)
    a = project(reduced, 60.0 + 300.0 * model.grid.x)
    assert reduced.properties is not None
    taken = reduced.properties.conducted(a, model.nominal)
    even = project(reduced, np.ones(model.grid.n))
    assert np.linalg.norm(taken) > 0
    assert abs(even @ taken) < 1e-9 * np.linalg.norm(even) * np.linalg.norm(taken)


def test_constant_properties_cost_nothing():
    """Without tables there is no such part at all."""
    steel = Material("s", Table.constant(50.0), 7800.0, Table.constant(480.0), 0.8, "invented")
    reduced = reduce(model_of(strong_plate(material=steel)))
    assert reduced.properties is None
    assert not property_remainder(reduced, np.ones(reduced.order), np.zeros(3), np.ones(1)).any()


@pytest.mark.parametrize("name", sorted(p.stem for p in CONFIG.glob("*.toml")))
def test_every_delivered_plate_is_within_half_a_kelvin_of_its_full_model(name):
    """The error that `check` states: modes, losses and changing properties together."""
    assert reduce(model_of(load(CONFIG / f"{name}.toml").plate)).error_K < 0.5


@pytest.mark.parametrize("name", ["mild-steel", "aluminium-pure", "aluminium-2024", "copper"])
def test_plates_of_built_in_materials_are_within_half_a_kelvin_of_their_full_model(name):
    """Their tables from the room to 200 degC."""
    assert reduce(model_of(strong_plate(material=BUILT_IN[name]))).error_K < 0.5


def test_an_idle_ceramic_plate_keeps_still_far_below_its_reference():
    """Alumina at 20 degC spreads heat three times as fast as at its reference of 300 degC.
    A ripple of 5 K dies out step by step, at a tick, a forecast's refresh, after an outage."""
    plate = strong_plate(material=BUILT_IN["alumina"], reference_degC=300.0)
    model = model_of(plate)
    quiet = build_quiet(plate, reduce(model), 300.0)
    k, cold = quiet.blocks, np.full(model.grid.n, ROOM_DEGC)
    ripple = 5 * np.cos(12 * np.pi * model.grid.x / 0.4) * np.cos(9 * np.pi * model.grid.y / 0.3)
    around = np.full(len(quiet.around_u), ROOM_DEGC)
    for held_s in (2.0, 20.0, 120.0):
        mean = np.zeros(k.size)
        mean[k.a] = project(quiet.reduced, cold + ripple)
        belief = Gaussian(mean, np.eye(k.size) * 1e-6)
        state = FieldState(0, belief, np.zeros(3), np.zeros(3), around)
        for _ in range(60):
            belief, _ = forecast_step(quiet, state, round(held_s * 1e6), np.zeros(3), around)
            state = replace(state, belief=belief)
        field = reconstruct(quiet.reduced, state.belief.mean[k.a])
        assert np.abs(field - ROOM_DEGC).max() < 1.0
