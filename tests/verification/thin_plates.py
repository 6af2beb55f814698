"""Plates of the textbook cases, in a few words each."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from platewatch.thermal.conduction import ThermalModel, build_model
from platewatch.thermal.grid import build_grid, point_row
from platewatch.thermal.plate import (
    Edge,
    EdgeKind,
    Material,
    Plate,
    Rectangle,
    Shape,
    Side,
    Surface,
    Table,
    Zone,
)
from platewatch.types import Array

SIDES = {"x-min": Side.X_MIN, "x-max": Side.X_MAX, "y-min": Side.Y_MIN, "y-max": Side.Y_MAX}
AL6061 = (167.0, 2700.0, 896.0)  # k, rho, cp: ASM, from memory


def material(k: float | Table, rho: float = 1.0, cp: float | Table = 1.0) -> Material:
    as_table = [v if isinstance(v, Table) else Table.constant(v) for v in (k, cp)]
    return Material("textbook", as_table[0], rho, as_table[1], 0.0, "the case's own data")


def held(side: str, degC: float | str) -> Edge:
    return Edge(EdgeKind.HELD, held=degC, side=SIDES.get(side))


def convective(side: str, h: float, ambient: float | str = 0.0) -> Edge:
    return Edge(EdgeKind.CONVECTIVE, coefficient=h, ambient=ambient, side=SIDES.get(side))


def heater(name: str, x: float, y: float, width: float, height: float) -> Zone:
    return Zone(name, (Rectangle(x, y, width, height),), 1.0, 0.0, 1.0)


def plate(
    outline: Shape | tuple[float, float],
    of: Material,
    thickness_m: float = 1.0,
    loss: float = 0.0,
    ambient: float = 0.0,
    edges: Sequence[Edge] = (),
    zones: Sequence[Zone] = (),
    **more: object,
) -> Plate:
    """loss: W/m2K, both faces together."""
    shape = Rectangle(0, 0, *outline) if isinstance(outline, tuple) else outline
    return Plate(
        "textbook",
        shape,
        thickness_m,
        of,
        Surface(ambient, coefficient=loss),
        Surface(ambient, coefficient=0.0),
        edges=tuple(edges),
        zones=tuple(zones),
        **more,  # type: ignore[arg-type]
    )


def model_of(described: Plate, cell_m: float, reference_degC: float = 0.0) -> ThermalModel:
    return build_model(described, build_grid(described, cell_m), reference_degC)


def value(model: ThermalModel, T: Array, x: float, y: float) -> float:
    return float(point_row(model.grid, x, y) @ T)


def slopes(errors: Sequence[float]) -> Array:
    """Observed orders where each grid halves the cell."""
    return np.log2(np.divide(errors[:-1], errors[1:]))


def mean_slope(cells: Sequence[float], errors: Sequence[float]) -> float:
    """Order fitted over all the grids, for cut outlines where single steps scatter."""
    return float(np.polyfit(np.log(cells), np.log(errors), 1)[0])


# The heated plate of the main case: 0.40 x 0.30 m, 12 mm, 6061, 20 W/m2K to 25 degC.
MAIN_POINTS = ((0.1, 0.1), (0.2, 0.15), (0.3, 0.2), (0, 0), (0.4, 0.3), (0.4, 0), (0.05, 0.25))


def main_plate() -> Plate:
    zones = (heater("A", 0.05, 0.05, 0.1, 0.1), heater("B", 0.25, 0.15, 0.1, 0.1))
    return plate((0.4, 0.3), material(*AL6061), 0.012, 20.0, 25.0, zones=zones)
