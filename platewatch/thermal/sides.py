"""Heat that leaves sideways: rim pieces that are not insulated, and clamps."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from platewatch.errors import PlateError
from platewatch.thermal.faces import Stack
from platewatch.thermal.grid import Grid
from platewatch.thermal.plate import Ambient, Edge, EdgeKind, Plate
from platewatch.thermal.rim import Ints
from platewatch.types import Array

CLOSEST_RIM = 0.1  # cells: the least distance between a cell's centre and a held rim


@dataclass(frozen=True, eq=False)
class SideLinks:
    """Links of cells to temperature inputs: rim pieces, then clamps.

    cell, into (p,): which cell, which input
    section_m2 (p,): rim length x thickness;  film (p,): 1/h m2K/W;  s_m (p,)
    fixed (p,) W/K: of a clamp, 0 for a rim piece
    """

    cell: Ints
    into: Ints
    section_m2: Array
    film: Array
    s_m: Array
    closest_m: float
    fixed: Array

    def conductance(self, k: Array) -> Array:
        """W/K of each link at the conductivity k (p,) W/mK between cell and rim.

        The signed distance makes a disc converge at second order; with plain h L it
        would be first order, see verification/test_cut_cells.py.
        """
        resistance = np.maximum(self.film + self.s_m / k, self.closest_m / k)
        return self.fixed + self.section_m2 / resistance


def side_links(plate: Plate, grid: Grid, stack: Stack, number: dict[str, int]) -> SideLinks:
    """The rim that is not insulated, and the clamps."""
    rim = grid.rim
    active = np.array([e.kind is not EdgeKind.INSULATED for e in plate.edges] + [False])[rim.edge]
    edges = [plate.edges[k] for k in rim.edge[active]]
    d = stack.thickness_m[rim.cell[active]]
    h = np.array([_edge_coefficient(e, depth) for e, depth in zip(edges, d, strict=True)])
    with np.errstate(divide="ignore", over="ignore"):
        film = np.where(h > 0, 1 / h, np.inf)
    into = [number[ambient_name(_edge_ambient(plate, e))] for e in edges]
    cells, fixed, clamp_into = _clamps(plate, grid, number)
    none = np.zeros(len(cells))
    return SideLinks(
        np.concatenate((rim.cell[active], np.array(cells, dtype=np.int64))),
        np.array(into + clamp_into, dtype=np.int64),
        np.concatenate((rim.length_m[active] * d, none)),
        np.concatenate((film, none + 1)),
        np.concatenate((rim.s_m[active], none)),
        CLOSEST_RIM * min(grid.hx, grid.hy),
        np.concatenate((np.zeros(d.size), fixed)),
    )


def _edge_coefficient(edge: Edge, thickness_m: float) -> float:
    """W/m2K over the edge's thickness; infinite where it is held."""
    if edge.kind is EdgeKind.HELD:
        return np.inf
    return (edge.coefficient or 0.0) + (edge.w_per_k_per_m or 0.0) / thickness_m


def _edge_ambient(plate: Plate, edge: Edge) -> Ambient:
    if edge.kind is EdgeKind.HELD:
        if edge.held is None:
            raise PlateError("edge: a held edge needs the temperature it is held at")
        return edge.held
    return plate.top.ambient if edge.ambient is None else edge.ambient


def _clamps(
    plate: Plate, grid: Grid, number: dict[str, int]
) -> tuple[list[int], list[float], list[int]]:
    """Cells, W/K and input of every clamp, shared by distance among up to four cells."""
    cells: list[int] = []
    links: list[float] = []
    into: list[int] = []
    for clamp in plate.clamps:
        away_x, away_y = np.abs(grid.x - clamp.x_m) / grid.hx, np.abs(grid.y - clamp.y_m) / grid.hy
        share = np.maximum(1 - away_x, 0) * np.maximum(1 - away_y, 0)
        if share.sum() <= 0:
            share[np.argmin(np.hypot(away_x, away_y))] = 1.0
        touched = np.flatnonzero(share)
        ambient = plate.top.ambient if clamp.ambient is None else clamp.ambient
        cells += touched.tolist()
        links += (clamp.w_per_k * share[touched] / share.sum()).tolist()
        into += [number[ambient_name(ambient)]] * touched.size
    return cells, links, into


def ambient_name(ambient: Ambient) -> str:
    return ambient if isinstance(ambient, str) else f"const/{float(ambient)}"
