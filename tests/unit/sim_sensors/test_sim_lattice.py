"""Where the simulated plate is cut, and what its nodes stand for."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from platewatch.errors import PlateError
from platewatch.thermal.plate import Circle, Plate, Polygon, Rectangle, Shape
from sim_sensors.lattice import build_lattice, rim

L_SHAPE = Polygon(((0.0, 0.0), (0.4, 0.0), (0.4, 0.1), (0.2, 0.1), (0.2, 0.2), (0.0, 0.2)))


@pytest.mark.parametrize(
    ("outline", "area"),
    [
        (Rectangle(0.0, 0.0, 0.4, 0.2), 0.08),
        (Circle(0.1, 0.1, 0.3), np.pi * 0.15**2),
        (L_SHAPE, 0.06),
    ],
)
def test_the_elements_of_any_outline_add_up_to_its_area(
    small_plate: Plate, outline: Shape, area: float
) -> None:
    """Sampling 1/8 of a 5 mm element: about 1e-3 of the area at the worst."""
    lattice = build_lattice(replace(small_plate, outline=outline), 0.005)
    assert lattice.element_area.sum() == pytest.approx(area, rel=2e-3)


def test_a_hole_takes_its_area_away(small_plate: Plate) -> None:
    """A bolt hole holds no heat and lets none through."""
    plate = replace(small_plate, holes=(Circle(0.1, 0.1, 0.06),))
    lattice = build_lattice(plate, 0.004)
    missing = 0.08 - lattice.element_area.sum()
    assert missing == pytest.approx(np.pi * 0.03**2, rel=0.02)
    distance = np.hypot(lattice.x[lattice.inside] - 0.1, lattice.y[lattice.inside] - 0.1)
    assert distance.min() >= 0.03 - 1e-9


def test_a_linear_field_conducts_what_fourier_says(small_plate: Plate) -> None:
    """k d times slope times width, exact for bilinear elements; inner nodes balance."""
    lattice = build_lattice(small_plate, 0.02)
    sheet = np.full(lattice.part.size, 1.7)  # k*d of 170 W/mK and 10 mm
    flow = lattice.conduction(sheet) @ (100.0 * lattice.x)
    right = lattice.x > 0.4 - 1e-9
    assert flow[right].sum() == pytest.approx(1.7 * 100.0 * 0.2, rel=1e-12)
    assert np.abs(flow[(lattice.x > 1e-9) & ~right]).max() < 1e-10


def test_a_point_is_interpolated_exactly_in_a_linear_field(small_plate: Plate) -> None:
    """Bilinear weights reproduce 3x - 2y + 1, on nodes, inside and on the rim."""
    lattice = build_lattice(small_plate, 0.017)
    field = 3.0 * lattice.x - 2.0 * lattice.y + 1.0
    for x, y in ((0.1, 0.1), (0.0, 0.0), (0.4, 0.2), (0.333, 0.019), (0.4, 0.07)):
        nodes, weights = lattice.locate(x, y)
        assert weights @ field[nodes] == pytest.approx(3.0 * x - 2.0 * y + 1.0, abs=1e-12)


def test_the_rim_of_a_disc_has_its_true_length(small_plate: Plate) -> None:
    """A staircase would be 4/pi too long; a polygon of 720 is 3e-6 too short."""
    plate = replace(small_plate, outline=Circle(0.0, 0.0, 0.3), holes=(Circle(0.0, 0.0, 0.1),))
    length = sum(piece.length for piece in rim(plate, 0.005))
    assert length == pytest.approx(np.pi * 0.4, rel=1e-5)


def test_a_plate_that_its_hole_eats_up_is_refused(small_plate: Plate) -> None:
    """One clear error instead of an empty simulation."""
    plate = replace(small_plate, holes=(Rectangle(-0.1, -0.1, 0.6, 0.4),))
    with pytest.raises(PlateError, match="no area left"):
        build_lattice(plate, 0.01)
