"""Cost of one plate by its number of cells: grid, model, modes, what-if.

Run `python tests/bench/bench_cells.py` with OPENBLAS_NUM_THREADS=1; times are CPU
milliseconds, the best of three.  Fails when a budget is passed: 0.5 s for the modes of
2,500 cells, 2 s for a steady what-if of 10,000 cells, 60 us for the remainder
of losses, k(T) and cp(T).
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable

import numpy as np

from platewatch.studies.whatif import whatif_steady, whatif_transient
from platewatch.thermal.conduction import build_model, input_vector
from platewatch.thermal.grid import build_grid
from platewatch.thermal.plate import (
    Circle,
    Correlation,
    Material,
    Plate,
    Rectangle,
    Shape,
    Surface,
    Table,
    Zone,
)
from platewatch.thermal.reduction import project, property_remainder, reduce, remainder

CELLS = (1_000, 2_500, 5_000, 10_000, 20_000, 40_000)


def best_ms(work: Callable[[], object], repeat: int = 3) -> float:
    spent = []
    for _ in range(repeat):
        start = time.process_time()
        work()
        spent.append(time.process_time() - start)
    return 1e3 * min(spent)


def described(outline: Shape) -> Plate:
    """Natural convection and radiation on both faces, k(T), cp(T), six zones."""
    iron = Material(
        "iron",
        Table((20.0, 200.0), (53.0, 49.0)),
        7150.0,
        Table((20.0, 300.0), (460.0, 560.0)),
        0.7,
        "-",
    )
    zones = tuple(
        Zone(
            f"Z{i}",
            (Rectangle(0.2 * (i % 3) + 0.02, 0.2 * (i // 3) + 0.02, 0.16, 0.16),),
            500.0,
            20.0,
            1.0,
        )
        for i in range(6)
    )
    up = Surface("surround/ambient", correlation=Correlation.NATURAL_UP)
    down = Surface("surround/ambient", correlation=Correlation.NATURAL_DOWN)
    return Plate("bench", outline, 0.02, iron, up, down, zones=zones, reference_degC=150.0)


def row(plate: Plate, cells: int, area_m2: float) -> dict[str, float]:
    cell = float(np.sqrt(area_m2 / cells))
    powers = {zone.name: 250.0 for zone in plate.zones}
    grid = build_grid(plate, cell)
    model = build_model(plate, grid, 150.0)
    reduced = reduce(model)
    a, u = project(reduced, np.full(grid.n, 140.0)), input_vector(model, powers)
    adot = reduced.G @ u

    def remainders() -> None:
        for _ in range(1000):
            property_remainder(reduced, a, u, adot + remainder(reduced, a, u))

    return {
        "cells": grid.n,
        "grid": best_ms(lambda: build_grid(plate, cell)),
        "model": best_ms(lambda: build_model(plate, grid, 150.0)),
        "modes": best_ms(lambda: reduce(build_model(plate, grid, 150.0))),
        "order": reduced.order,
        "error_K": reduced.error_K,
        "remainder_us": best_ms(remainders),
        "steady": best_ms(lambda: whatif_steady(plate, powers, cell_m=cell), 2),
        "600 s": best_ms(lambda: whatif_transient(plate, powers, cell_m=cell, after_s=600.0), 1),
    }


def main() -> int:
    over = []
    for name, outline, area in (
        ("rectangle", Rectangle(0, 0, 0.6, 0.4), 0.24),
        ("disc", Circle(0.3, 0.2, 0.72), np.pi * 0.36**2),
    ):
        for cells in CELLS:
            result = row(described(outline), cells, area)
            print(
                name, "  ".join(f"{key} {value:.4g}" for key, value in result.items()), flush=True
            )
            if cells == 2_500 and result["modes"] > 500:
                over.append(f"{name}: modes of 2,500 cells")
            if cells == 10_000 and result["steady"] > 2000:
                over.append(f"{name}: steady what-if of 10,000 cells")
            if result["remainder_us"] > 60:
                over.append(f"{name}: remainder at {cells} cells")
    print("over budget: " + ", ".join(over) if over else "all within budget")
    return 1 if over else 0


if __name__ == "__main__":
    sys.exit(main())
