"""Fields in time against exact solutions."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from thin_plates import (
    AL6061,
    MAIN_POINTS,
    convective,
    heater,
    held,
    main_plate,
    material,
    model_of,
    plate,
    slopes,
    value,
)

from platewatch.studies.whatif import whatif_steady, whatif_transient
from platewatch.thermal.conduction import input_vector, transient
from platewatch.thermal.full import FullEquations
from platewatch.thermal.plate import Correlation, Plate, Surface, Table
from platewatch.thermal.reduction import reduce
from platewatch.thermal.stepping import integrate
from platewatch.types import Array

SIGMA = 5.670374419e-8


def test_nafems_t3_gives_36_60_degrees_at_32_seconds():
    """NAFEMS T3: one face follows 100 sin(pi t / 40), the other stays at 0; target 36.60
    degC at 0.02 m from the hot face (from memory), eigen-series 36.60311595; 0.05 degC."""
    edges = [held("x-min", 0.0), held("x-max", "surround/hot")]
    strip = plate((0.1, 0.002), material(35.0, 7200.0, 440.5), edges=edges)
    model = model_of(strip, 0.001)
    hot = model.input_number("surround/hot")

    def drive(t: float) -> Array:
        u = np.zeros(len(model.inputs))
        u[hot] = 100 * np.sin(np.pi * t / 40)
        return u

    T = transient(model, np.zeros(model.grid.n), drive, np.array([32.0]))[0]
    assert value(model, T, 0.08, 0.001) == pytest.approx(36.60311595, abs=0.05)


@pytest.mark.parametrize(
    ("Bi", "zeta", "C1"),
    [(0.1, 0.31105, 1.01609), (1.0, 0.86033, 1.11913), (10.0, 1.42887, 1.26196)],
)
def test_a_wall_cools_with_the_tabulated_first_eigenvalue(Bi, zeta, C1):
    """Incropera & DeWitt, 7th ed., Table 5.1 (from memory), zeta tan zeta = Bi; 1e-5."""
    strip = plate((1.0, 0.005), material(1.0), edges=[convective("x-max", Bi)])
    model = model_of(strip, 0.0025)
    reduced = reduce(model, order=12)
    assert np.sqrt(reduced.rates[0]) == pytest.approx(zeta, abs=1.5e-5)
    amplitude = reduced.V[:, 0] @ model.capacity
    middle = value(model, reduced.V[:, 0], 0.0, 0.0025)
    assert amplitude * middle == pytest.approx(C1, abs=2e-5)


def quarter_square(cells: int, edges, t: float, size=(1.0, 1.0)):
    model = model_of(plate(size, material(1.0), edges=edges), 1 / cells)
    T = transient(model, np.ones(model.grid.n), model.nominal, np.array([t]), tolerance_K=1e-5)
    return model, T[0]


def test_a_square_with_convective_edges_cools_as_the_product_solution():
    """Half-width 1, Bi = 1, Fo = 0.2 (Incropera sec. 5.8 supplement; Carslaw & Jaeger sec.
    5.6, from memory); 1e-4."""
    edges = [convective("x-max", 1.0), convective("y-max", 1.0)]
    model, T = quarter_square(60, edges, 0.2)
    exact = {
        (0, 0): 0.9037197910,
        (1, 0): 0.6116341596,
        (1, 1): 0.4139517016,
        (0.5, 0.25): 0.8206923009,
    }
    assert [value(model, T, *p) for p in exact] == pytest.approx(list(exact.values()), abs=1e-4)


def test_plates_with_cold_edges_cool_as_the_product_solution():
    """Square half-width 1, rectangle 1 x 0.5, Fo = 0.1 (Carslaw & Jaeger sec. 5.6, from
    memory); 2e-3 on 40 cells, less than a third of that error on 80."""
    edges = [held("x-max", 0.0), held("y-max", 0.0)]
    errors = []
    for cells in (40, 80):
        model, T = quarter_square(cells, edges, 0.1)
        flat, F = quarter_square(cells, edges, 0.1, (1.0, 0.5))
        found = [value(model, T, 0, 0), value(model, T, 0.5, 0.25), value(flat, F, 0, 0)]
        errors.append(np.abs(np.subtract(found, (0.9011806716, 0.6630269939, 0.4504334907))).max())
    assert errors[0] < 2e-3
    assert errors[1] < errors[0] / 3


def test_a_hot_corner_spreads_and_no_heat_is_lost():
    """0.40 x 0.30 m of 6061 without loss, 100 degC in one corner of 25: exact cosine series
    at 60 s, 0.05 degC on 80 x 60 cells; the mean stays 31.25 exactly."""
    model = model_of(plate((0.4, 0.3), material(*AL6061), 0.012, 0.0), 0.005)
    grid = model.grid
    initial = np.where((grid.x < 0.1) & (grid.y < 0.1), 100.0, 25.0)
    T = transient(model, initial, model.nominal, np.array([60.0]))[0]
    exact = {
        (0.05, 0.05): 57.56641465,
        (0.2, 0.15): 27.93020119,
        (0.35, 0.25): 25.01211006,
        (0, 0): 64.76079124,
        (0.4, 0.3): 25.00205664,
    }
    assert [value(model, T, *p) for p in exact] == pytest.approx(list(exact.values()), abs=0.05)
    assert np.average(T, weights=grid.area) == pytest.approx(31.25, abs=1e-10)


MAIN_IN_TIME = {
    30: (43.337864, 27.573003, 34.178000, 27.315322, 26.157664, 25.024306, 25.304093, 28.835476),
    120: (62.399291, 39.510484, 44.738295, 46.949871, 36.152723, 28.185046, 32.229431, 39.877542),
    600: (117.288570, 88.199165, 89.286537, 106.265447, 79.889389, 69.536341, 82.350306, 88.48295),
    3600: (
        226.062317,
        196.516852,
        197.153422,
        215.242090,
        187.562990,
        177.265221,
        191.201193,
        196.800637,
    ),
}


def test_the_main_heated_plate_warms_along_its_series():
    """Double cosine series at 30, 120, 600 and 3600 s: 0.1 degC on 40 x 30 cells (0.15 at
    the heaters' centres), mean to 1e-6."""
    model = model_of(main_plate(), 0.01)
    u = input_vector(model, {"A": 300.0, "B": 150.0})
    times = np.array(list(MAIN_IN_TIME), dtype=float)
    start = np.full(model.grid.n, 25.0)
    fields = transient(model, start, u, times, tolerance_K=3e-6)
    for T, exact in zip(fields, MAIN_IN_TIME.values(), strict=True):
        found = [value(model, T, x, y) for x, y in MAIN_POINTS]
        assert found == pytest.approx(exact[:7], abs=0.15)
        others = [k for k in range(7) if k not in (0, 2)]
        assert np.take(found, others) == pytest.approx(np.take(exact, others), abs=0.1)
        assert np.average(T, weights=model.grid.area) == pytest.approx(exact[7], abs=2e-6)


def bent_square(cells: int, after_s: float):
    """[0,3]^2: T = 1 on the far sides, unit flux into the near ones, k = rho c = 1 + T/2."""
    table = Table((-1.0, 9.0), (0.5, 5.5))
    cell = 3 / cells
    zones = [heater("west", 0, 0, cell, 3), heater("south", 0, 0, 3, cell)]
    edges = [held("x-max", 1.0), held("y-max", 1.0)]
    square = plate((3.0, 3.0), material(table, 1.0, table), edges=edges, zones=zones)
    return whatif_transient(
        square,
        {"west": 3.0, "south": 3.0},
        cell_m=cell,
        after_s=after_s,
        initial_degC=0.0,
        tolerance_K=1e-4,
    )


def test_conductivity_and_heat_capacity_that_grow_follow_the_kirchhoff_solution():
    """Problem of Wilson, Rydin & Orivuori (1988), Nuclear Technology 82:94; exact through
    phi = T + T^2/4, which is linear: T(0,0) at 1, 5 and 17.25, quadrant means; 1e-3."""
    for after_s, exact in ((1.0, 1.68795472), (5.0, 2.88738357)):
        assert bent_square(60, after_s).at(0, 0) == pytest.approx(exact, abs=1e-3)
    late = bent_square(60, 17.25)
    assert late.at(0, 0) == pytest.approx(3.02054994, abs=1e-3)
    x, y = late.grid.x < 1.5, late.grid.y < 1.5
    means = [float(late.T[part].mean()) for part in (x & y, ~x & ~y, ~x & y)]
    assert means == pytest.approx([2.379555, 1.196889, 1.585319], abs=1e-3)


def radiating_sheet(convection: float) -> Plate:
    """10 mm 6061, both faces eps = 0.8 to 25 degC (doubled on one), both faces h."""
    sheet = plate((0.1, 0.1), material(*AL6061), 0.01, 2 * convection, 25.0)
    grey = Surface(25.0, correlation=Correlation.FORCED, speed_m_s=0.0, emissivity=1.6)
    return replace(sheet, bottom=grey)


@pytest.mark.parametrize(("seconds", "degC"), [(605.935, 200.0), (1825.152, 100.0)])
def test_a_radiating_plate_cools_in_the_closed_form_time(seconds, degC):
    """Incropera eq. 5.18 form (from memory): from 400 degC, radiation only."""
    result = whatif_transient(
        radiating_sheet(0.0), {}, cell_m=0.02, after_s=seconds, initial_degC=400.0
    )
    assert result.mean_degC == pytest.approx(degC, abs=0.05)
    # The account is integrated on its own: it closes as well as the steps are accurate.
    assert result.energy.stored == pytest.approx(-result.energy.lost, rel=1e-4)


def test_a_radiating_plate_warms_as_calculated():
    """6000 W/m2 into the plate, h = 8 and eps = 0.8 on both faces (calculated)."""
    heated = replace(radiating_sheet(8.0), zones=(heater("q", 0, 0, 0.1, 0.1),))
    for seconds, degC in ((600, 129.730417), (1800, 183.014999), (3600, 188.004104)):
        result = whatif_transient(
            heated, {"q": 60.0}, cell_m=0.02, after_s=seconds, initial_degC=25.0
        )
        assert result.mean_degC == pytest.approx(degC, abs=0.02)
    assert whatif_steady(heated, {"q": 60.0}).mean_degC == pytest.approx(188.114905, abs=1e-5)


def test_a_steady_flux_warms_a_deep_body_as_the_error_function():
    """Carslaw & Jaeger sec. 2.9; Incropera eq. 5.59 (from memory): 1e4 W/m2 into 6061 for
    60 s: 4.348470839 K at the surface, 1.994617592 K at 50 mm."""
    cell = 0.001
    zone = heater("q", 0, 0, cell, 2 * cell)
    model = model_of(plate((0.6, 2 * cell), material(*AL6061), zones=[zone]), cell)
    u = input_vector(model, {"q": 1e4 * 2 * cell})
    T = transient(model, np.zeros(model.grid.n), u, np.array([60.0]), tolerance_K=1e-5)[0]
    found = [value(model, T, x, cell) for x in (0.0, 0.05)]
    assert found == pytest.approx([4.348470839, 1.994617592], abs=2e-3)


class Manufactured:
    """T = 300 + 50 cos(pi x/.4) cos(pi y/.3)(1 + .2 sin(2 pi t/600)) K with its source."""

    a, b, d, period = 0.4, 0.3, 0.012, 600.0

    def __init__(self, x: Array, y: Array) -> None:
        p, q = np.pi / self.a, np.pi / self.b
        self.shape = np.cos(p * x) * np.cos(q * y)
        self.dx = -p * np.sin(p * x) * np.cos(q * y)
        self.dy = -q * np.cos(p * x) * np.sin(q * y)
        self.lap = -(p * p + q * q) * self.shape

    def kelvin(self, t: float) -> Array:
        return 300 + self._swing(t) * self.shape

    def source(self, t: float) -> Array:
        """W/m2 that makes it so: k = 150(1 + 5e-4(T - 300)), losses convective and T^4."""
        T, swing = self.kelvin(t), self._swing(t)
        w = 2 * np.pi / self.period
        stored = 2700 * 896 * self.d * 50 * 0.2 * w * np.cos(w * t) * self.shape
        k = 150 * (1 + 5e-4 * (T - 300))
        bend = 150 * 5e-4 * swing**2 * (self.dx**2 + self.dy**2)
        lost = 20 * (T - 298) + 1.6 * SIGMA * (T**4 - 298.0**4)
        return stored - self.d * (k * swing * self.lap + bend) + lost

    def _swing(self, t: float) -> float:
        return 50 * (1 + 0.2 * np.sin(2 * np.pi * t / self.period))


def test_the_manufactured_source_agrees_with_computer_algebra():
    """By sympy: at (.1, .1, 100 s) 7548.5677 W/m2, at (.3, .05, 450 s) -8158.0431 W/m2."""
    for x, y, t, T, S in (
        (0.1, 0.1, 100.0, 320.739532, 7548.5677),
        (0.3, 0.05, 450.0, 275.505103, -8158.0431),
    ):
        case = Manufactured(np.array(x), np.array(y))
        assert float(case.kelvin(t)) == pytest.approx(T, abs=1e-6)
        assert float(case.source(t)) == pytest.approx(S, abs=1e-3)


def manufactured_error(cells: int) -> float:
    k = Table((-200.0, 400.0), tuple(150 * (1 + 5e-4 * (T + 273.15 - 300)) for T in (-200, 400)))
    ambient = 298.0 - 273.15
    described = plate((0.4, 0.3), material(k, 2700.0, 896.0), 0.012, 20.0, ambient)
    grey = Surface(ambient, correlation=Correlation.FORCED, speed_m_s=0.0, emissivity=1.6)
    model = model_of(replace(described, bottom=grey), 0.4 / cells, ambient)
    equations, case = FullEquations(model), Manufactured(model.grid.x, model.grid.y)
    u = model.nominal
    T = integrate(
        model.capacity,
        lambda t, T: equations.rate(T, u) + model.grid.area * case.source(t),
        lambda _t, T: equations.jacobian(T, u),
        case.kelvin(0.0) - 273.15,
        np.array([100.0]),
        tolerance_K=1e-5,
    )[0]
    off = T + 273.15 - case.kelvin(100.0)
    return float(np.sqrt(np.average(off**2, weights=model.grid.area)))


def test_k_of_t_and_t4_together_converge_at_second_order():
    """Manufactured solution; adiabatic edges are exact: order 2 +- 0.05 in the cell size."""
    errors = [manufactured_error(cells) for cells in (16, 32, 64)]
    assert slopes(errors) == pytest.approx([2, 2], abs=0.05)


def test_a_bowl_of_temperature_warms_evenly():
    """T = a (x^2 + y^2) has the constant Laplacian 4a: away from the rim every cell warms
    at 4 alpha a (textbook fact), to rounding."""
    model = model_of(plate((0.4, 0.3), material(*AL6061), 0.012), 0.01)
    grid, a, alpha = model.grid, 500.0, AL6061[0] / (AL6061[1] * AL6061[2])
    warming = -(model.K @ (a * (grid.x**2 + grid.y**2))) / model.capacity
    inner = np.setdiff1d(np.arange(grid.n), grid.rim.cell)
    assert warming[inner] == pytest.approx(4 * alpha * a, rel=1e-9)
