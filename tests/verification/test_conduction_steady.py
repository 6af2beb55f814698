"""Steady fields against exact solutions.

Of the NAFEMS thermal set, T2 (a bar that radiates from its end face) is not covered: edges
of a thin plate never radiate here; its faces do, see the radiating fin.  T1 of that set is
a thermal stress.  T3 is transient, see test_conduction_transient.py.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.integrate import solve_bvp
from scipy.sparse.linalg import spsolve
from scipy.special import k0
from thin_plates import (
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

from platewatch.errors import PlateError
from platewatch.studies.whatif import whatif_steady
from platewatch.thermal.conduction import conduction_matrix, input_vector, steady
from platewatch.thermal.grid import build_grid
from platewatch.thermal.plate import Circle, Correlation, Surface, Table, Zone

COLD_SIDES = ("x-min", "x-max", "y-min")


def one_hot_edge(cells: int) -> list[float]:
    edges = [held(side, 0.0) for side in COLD_SIDES] + [held("y-max", 1.0)]
    model = model_of(plate((1.0, 1.0), material(1.0), edges=edges), 1 / cells)
    T = steady(model, model.nominal)
    points = (0.5, 0.5), (0.25, 0.25), (0.5, 0.75), (0.25, 0.75), (0.1, 0.3)
    return [value(model, T, x, y) for x, y in points]


EXACT_HOT_EDGE = [0.25, 0.06797166811, 0.5405292183, 0.4320283319, 0.03754937708]


def test_a_square_with_one_hot_edge_takes_the_series_values():
    """Incropera & DeWitt, 7th ed., eq. 4.19; Carslaw & Jaeger sec. 5.3 (from memory):
    2e-3 on a 40 x 40 five-point grid, and better on a finer one."""
    coarse, fine = one_hot_edge(40), one_hot_edge(80)
    assert coarse == pytest.approx(EXACT_HOT_EDGE, abs=2e-3)
    worst = [np.abs(np.subtract(each, EXACT_HOT_EDGE)).max() for each in (coarse, fine)]
    assert worst[1] < worst[0] / 3


def test_incropera_problem_4_2_comes_out_at_94_5_degrees():
    """Incropera & DeWitt, 7th ed., problem 4.2 (from memory): book 94.5; series 94.51151003."""
    edges = [held(side, 50.0) for side in COLD_SIDES] + [held("y-max", 150.0)]
    model = model_of(plate((2.0, 1.0), material(1.0), edges=edges), 1 / 60)
    T = steady(model, model.nominal)
    assert value(model, T, 1.0, 0.5) == pytest.approx(94.51151003, abs=0.01)


def evenly_heated_square(cells: int) -> tuple[float, float, float]:
    zone = heater("all", 0, 0, 1, 1)
    edges = [held("everywhere", 0.0)]
    model = model_of(plate((1.0, 1.0), material(1.0), edges=edges, zones=[zone]), 1 / cells)
    T = steady(model, input_vector(model, {"all": 1.0}))
    mean = float(np.average(T, weights=model.grid.area))
    return value(model, T, 0.5, 0.5), value(model, T, 0.25, 0.25), mean


EXACT_EVENLY_HEATED = (0.07367135328151, 0.04528615810947, 0.03514425373904)


def test_an_evenly_heated_square_with_cold_edges_follows_the_torsion_numbers():
    """Timoshenko & Goodier, Theory of Elasticity, sec. 109 (from memory); series by mpmath.
    The error falls with the square of the cell."""
    errors = [
        np.abs(np.subtract(evenly_heated_square(n), EXACT_EVENLY_HEATED)).max()
        for n in (16, 32, 64)
    ]
    assert slopes(errors) == pytest.approx([2, 2], abs=0.1)
    assert errors[-1] < 2e-3 * EXACT_EVENLY_HEATED[0]


def test_a_saddle_of_temperature_is_exact_on_the_grid():
    """T0 + a((x - xc)^2 - (y - yc)^2) is harmonic; five-point differences reproduce it to
    round-off (textbook fact): below 1e-9 K."""
    grid = build_grid(plate((0.4, 0.3), material(167.0)), 0.01)
    saddle = 100 + 500 * ((grid.x - 0.2) ** 2 - (grid.y - 0.15) ** 2)
    K = conduction_matrix(grid, np.full(grid.n, 167 * 0.012))
    rim = np.zeros(grid.n, dtype=bool)
    rim[grid.rim.cell] = True
    inner, known = np.flatnonzero(~rim), np.flatnonzero(rim)
    T = spsolve(K.tocsc()[inner][:, inner], -K.tocsc()[inner][:, known] @ saddle[known])
    assert np.abs(T - saddle[inner]).max() < 1e-9


@pytest.mark.parametrize(("cells", "tolerance"), [(40, 0.05), (120, 0.005)])
def test_nafems_t4_gives_18_25_degrees_at_point_e(cells, tolerance):
    """NAFEMS T4 (Cameron, Casey & Simpson 1986; title from memory): reference 18.25 degC;
    eigen-series 18.25375654 and further points."""
    edges = [held("y-min", 100.0), convective("x-max", 750.0), convective("y-max", 750.0)]
    model = model_of(plate((0.6, 1.0), material(52.0), edges=edges), 1 / cells)
    T = steady(model, model.nominal)
    points = {(0, 0.2): 70.060663, (0.3, 0.5): 28.319960, (0.6, 0.2): 18.25375654}
    found = [value(model, T, *place) for place in points]
    assert found == pytest.approx(list(points.values()), abs=tolerance)


def main_case(powers: dict[str, float], cell_m: float):
    return whatif_steady(main_plate(), powers, cell_m=cell_m)


MAIN_EXACT = {
    "A": (188.780384, 149.810810, 130.962592, 180.747036, 125.388834, 129.210194, 154.151775),
    "A+B": (241.761680, 212.216215, 212.852784, 230.941453, 203.262352, 192.964583, 206.900556),
}


@pytest.mark.parametrize(
    ("case", "powers", "mean"),
    [("A", {"A": 300.0}, 150.0), ("A+B", {"A": 300.0, "B": 150.0}, 212.5)],
)
def test_the_main_heated_plate_takes_its_series_values(case, powers, mean):
    """Double cosine series, N = 3000: 0.1 degC on 40 x 30 cells (0.15 at a heater's centre,
    where an independent finite-volume code has 0.13), mean to 1e-6 by energy balance."""
    result = main_case(powers, 0.01)
    found = [result.at(x, y) for x, y in MAIN_POINTS]
    assert found == pytest.approx(MAIN_EXACT[case], abs=0.15)
    assert found[1:] == pytest.approx(MAIN_EXACT[case][1:], abs=0.1)
    assert result.mean_degC == pytest.approx(mean, abs=1e-6)


def test_the_main_plate_error_falls_with_the_grid():
    """The same case at 5 and 2.5 mm: each at least 3.5 times better than the one before."""
    errors = []
    for cell in (0.01, 0.005, 0.0025):
        result = main_case({"A": 300.0, "B": 150.0}, cell)
        found = [result.at(x, y) for x, y in MAIN_POINTS]
        errors.append(np.abs(np.subtract(found, MAIN_EXACT["A+B"])).max())
    assert errors[1] < errors[0] / 3.5
    assert errors[2] < errors[1] / 3.5


def test_the_hottest_place_is_found_between_the_cells():
    """242.626685 degC at (0.0876359, 0.0883789) m by the series: not at a heater's centre."""
    result = main_case({"A": 300.0, "B": 150.0}, 0.005)
    assert result.hottest_degC == pytest.approx(242.626685, abs=0.1)
    assert result.hottest_x_m == pytest.approx(0.0876359, abs=0.0005)
    assert result.hottest_y_m == pytest.approx(0.0883789, abs=0.0005)


def test_conductivity_that_doubles_follows_arpaci_example_3_8():
    """Arpaci, Conduction Heat Transfer (1966) p. 130: T(0) = 87.08286933869707; 1e-6 by
    extrapolating two second-order grids."""
    k = Table((-50.0, 400.0), (1.0, 10.0))  # 2 (1 + 0.01 T)

    def at_zero(cells: int) -> float:
        cell = 10 / cells
        zone = heater("source", 0, 0, 10, 2 * cell)
        strip = plate((10.0, 2 * cell), material(k), edges=[held("x-max", 0.0)], zones=[zone])
        return whatif_steady(strip, {"source": 5 * 10 * 2 * cell}, cell_m=cell).at(0, cell)

    grids = [at_zero(cells) for cells in (200, 400, 800)]
    exact = 87.08286933869707
    assert slopes(np.abs(np.subtract(grids, exact))) == pytest.approx([2, 2], abs=0.05)
    assert grids[2] + (grids[2] - grids[1]) / 3 == pytest.approx(exact, abs=1e-5)


RADIATING = Surface(25.0, correlation=Correlation.FORCED, speed_m_s=0.0, emissivity=1.6)


def test_a_radiating_fin_has_the_exact_tip_temperature():
    """6 mm fin, h = 10 and eps = 0.8 on both faces, base 400 degC: tip 206.584154, middle
    247.139586 degC, base heat 2445.699 W/m (calculated; solve_bvp here as second route)."""
    strip = plate((0.2, 0.002), material(167.0), 0.006, 20.0, 25.0, [held("x-min", 400.0)])
    result = whatif_steady(replace(strip, bottom=RADIATING), {}, cell_m=0.001)
    assert result.at(0.2, 0.001) == pytest.approx(206.584154, abs=0.05)
    assert result.at(0.1, 0.001) == pytest.approx(247.139586, abs=0.05)
    # The account counts the rim at 400 degC among the losses: it cancels to nothing.
    assert result.energy.lost == pytest.approx(0.0, abs=1e-6)

    def slope(x, y):
        T = y[0] + 273.15
        loss = 20 * (y[0] - 25) + 1.6 * 5.670374419e-8 * (T**4 - 298.15**4)
        return np.vstack((y[1], loss / (167 * 0.006)))

    x = np.linspace(0, 0.2, 41)
    guess = np.vstack((np.linspace(400, 200, 41), np.full(41, -1000.0)))
    other = solve_bvp(slope, lambda a, b: np.array([a[0] - 400, b[1]]), x, guess, tol=1e-8)
    ours = [result.at(place, 0.001) for place in x[1:]]
    assert ours == pytest.approx(other.sol(x[1:])[0], abs=0.05)


def test_heat_from_one_point_spreads_like_the_bessel_function():
    """Line source, Q = 50 W, k = 167, d = 6 mm, h = 20 on one face (Carslaw & Jaeger sec.
    10.7 form, from memory): rise 13.08451976 K at 50 mm and 8.09321312 K at 100 mm.  A
    quarter of a large plate; 0.5 %, the grid's share near the source."""
    m = np.sqrt(20 / (167 * 0.006))
    assert 50 / (2 * np.pi * 167 * 0.006) * k0(m * 0.05) == pytest.approx(13.08451976, rel=1e-8)
    corner = Zone("Q", (Circle(0, 0, 0.02),), 1.0, 0.0, 1.0)
    quarter = plate((1.2, 1.2), material(167.0), 0.006, 20.0, 0.0, zones=[corner])
    result = whatif_steady(quarter, {"Q": 12.5}, cell_m=0.008)
    assert result.at(0.05, 0.0) == pytest.approx(13.08451976, rel=5e-3)
    assert result.at(0.1, 0.0) == pytest.approx(8.09321312, rel=5e-3)


def test_heat_in_equals_heat_out_to_rounding():
    """Every conductance is a plain link: 450 W in, 450 W out, whatever the grid."""
    result = main_case({"A": 300.0, "B": 150.0}, 0.007)
    assert result.energy.lost == pytest.approx(result.energy.entered, rel=1e-11)


def test_a_plate_without_any_loss_has_no_steady_field():
    """It says so, and what to do, unless the powers sum to zero."""
    lossless = replace(main_plate(), top=Surface(25.0, coefficient=0.0))
    with pytest.raises(PlateError, match="loses no heat"):
        whatif_steady(lossless, {"A": 300.0})
    balanced = whatif_steady(lossless, {"A": 100.0, "B": -100.0}, cell_m=0.01)
    assert balanced.at(0.1, 0.1) > balanced.at(0.3, 0.2) + 10
