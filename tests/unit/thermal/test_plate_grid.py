"""The cells of a described plate, its rim and its mistakes."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from platewatch.errors import PlateError
from platewatch.thermal.grid import build_grid, footprint, on_plate, point_row
from platewatch.thermal.plate import (
    Circle,
    Edge,
    EdgeKind,
    Material,
    Plate,
    Polygon,
    Rectangle,
    Side,
    Surface,
    Table,
)

STEEL = Material("steel", Table.constant(50.0), 7850.0, Table.constant(470.0), 0.7, "handbook")
FACE = Surface(22.0, coefficient=8.0)


def plate(outline, **more) -> Plate:
    return Plate("P1", outline, 0.02, STEEL, FACE, FACE, **more)


def test_a_rectangle_is_fitted_exactly_by_its_cells():
    """120 x 80 cm in cells of about 7 mm: whole cells, the last at the edge."""
    grid = build_grid(plate(Rectangle(0, 0, 1.2, 0.8)), 0.007)
    assert grid.hx * grid.nx == pytest.approx(1.2)
    assert grid.hy * grid.ny == pytest.approx(0.8)
    assert grid.n == grid.nx * grid.ny
    assert grid.area == pytest.approx(np.full(grid.n, grid.hx * grid.hy))


def test_a_plate_without_a_cell_size_gets_about_2500_cells():
    """For a rectangle and a disc alike, within 10 %."""
    for outline in (Rectangle(0, 0, 0.6, 0.4), Circle(0.1, 0.1, 0.3)):
        assert build_grid(plate(outline)).n == pytest.approx(2500, rel=0.1)


def test_the_plates_own_cell_size_counts_when_none_is_asked_for():
    """`cell_mm` of the description."""
    grid = build_grid(plate(Rectangle(0, 0, 0.6, 0.4), cell_m=0.02))
    assert (grid.nx, grid.ny) == (30, 20)


def test_a_rectangle_cut_by_a_hole_keeps_the_hole_out():
    """Area and rim of hole and outline together; its middle is not on the plate."""
    grid = build_grid(plate(Rectangle(0, 0, 0.4, 0.3), holes=(Circle(0.2, 0.15, 0.1),)), 0.01)
    assert grid.area.sum() == pytest.approx(0.12 - np.pi * 0.05**2, rel=1e-9)
    assert grid.rim.length_m.sum() == pytest.approx(1.4 + np.pi * 0.1, rel=1e-4)
    assert not on_plate(grid, 0.2, 0.15)
    assert on_plate(grid, 0.0, 0.0)


def test_a_side_names_the_rim_that_faces_it():
    """x-min of a rectangle: its left edge, 0.3 m, and nothing else."""
    edge = Edge(EdgeKind.HELD, held=20.0, side=Side.X_MIN)
    grid = build_grid(plate(Rectangle(0, 0, 0.4, 0.3), edges=(edge,)), 0.01)
    named = grid.rim.edge == 0
    assert grid.rim.length_m[named].sum() == pytest.approx(0.3)
    assert grid.x[grid.rim.cell[named]].max() == pytest.approx(0.005)


def test_a_segment_names_one_side_of_a_polygon_and_later_edges_win():
    """Segment 2 runs from corner 2 to corner 3; the whole rim before it keeps the rest."""
    corners = ((0.0, 0.0), (0.4, 0.0), (0.4, 0.2), (0.3, 0.3), (0.0, 0.3))
    edges = (
        Edge(EdgeKind.CONVECTIVE, coefficient=8.0),
        Edge(EdgeKind.HELD, held=20.0, segment=2),
    )
    grid = build_grid(plate(Polygon(corners), edges=edges), 0.01)
    assert grid.rim.length_m[grid.rim.edge == 1].sum() == pytest.approx(0.2)
    assert (grid.rim.edge >= 0).all()


def test_holes_belong_to_the_whole_rim_only():
    """A side or a segment never names the rim of a hole."""
    edge = Edge(EdgeKind.CONVECTIVE, coefficient=8.0, side=Side.X_MIN)
    holed = plate(Rectangle(0, 0, 0.4, 0.3), holes=(Circle(0.2, 0.15, 0.1),), edges=(edge,))
    assert build_grid(holed, 0.01).rim.length_m[build_grid(holed, 0.01).rim.edge == 0].sum() == (
        pytest.approx(0.3)
    )
    everywhere = replace(holed, edges=(Edge(EdgeKind.CONVECTIVE, coefficient=8.0),))
    assert (build_grid(everywhere, 0.01).rim.edge == 0).all()


def test_a_cut_cell_knows_on_which_side_of_the_rim_its_centre_lies():
    """Signed distances: negative for centres outside the disc, none beyond a diagonal."""
    grid = build_grid(plate(Circle(0, 0, 0.3)), 0.01)
    outside = np.hypot(grid.x, grid.y)[grid.rim.cell] > 0.1502
    assert (grid.rim.s_m[outside] < 0).all()
    assert np.abs(grid.rim.s_m).max() < 0.01


def test_heat_laid_over_the_edge_counts_only_on_the_plate():
    """A footprint that hangs over is cut by outline and hole."""
    grid = build_grid(plate(Rectangle(0, 0, 0.4, 0.3), holes=(Circle(0.2, 0.15, 0.1),)), 0.01)
    assert footprint(grid, Rectangle(-0.1, -0.1, 0.2, 0.2)).sum() == pytest.approx(0.01)
    assert footprint(grid, Circle(0.2, 0.15, 0.1)).sum() == pytest.approx(0, abs=1e-12)


def test_a_thermocouple_in_the_corner_reads_a_curved_field():
    """Quadratic weights: exact for a quadratic field, inside and half a cell beyond."""
    grid = build_grid(plate(Rectangle(0, 0, 0.4, 0.3)), 0.01)
    field = 5 + grid.x**2 - 3 * grid.y**2 + grid.x * grid.y
    for x, y in ((0.0, 0.0), (0.137, 0.082), (0.4, 0.3)):
        assert point_row(grid, x, y) @ field == pytest.approx(5 + x * x - 3 * y * y + x * y)


@pytest.mark.parametrize(
    ("described", "words"),
    [
        (plate(Polygon(((0, 0), (1, 1), (1, 0), (0, 1)))), "crosses itself"),
        (plate(Rectangle(0, 0, 0.2, 0.2), holes=(Rectangle(-1, -1, 3, 3),)), "leave nothing"),
        (plate(Rectangle(0, 0, 0.2, 0.2), holes=(Rectangle(0.05, -1, 0.1, 3),)), "pieces"),
        (plate(Rectangle(0, 0, 2.0, 2.0), cell_m=0.001), "choose a cell of"),
        (
            plate(Rectangle(0, 0, 0.2, 0.2), edges=(Edge(EdgeKind.HELD, held=1.0, segment=1),)),
            "only a polygon has segments",
        ),
    ],
)
def test_a_plate_that_cannot_be_built_says_why(described, words):
    """One clear error with the remedy, no traceback."""
    with pytest.raises(PlateError, match=words):
        build_grid(described)
