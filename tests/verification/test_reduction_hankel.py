"""Hankel singular values of the plate matrices: what any reduced order can at best do."""

from __future__ import annotations

import numpy as np
import pytest
from pymor.models.iosys import LTIModel
from scipy.linalg import solve_continuous_lyapunov
from thin_plates import main_plate, model_of

from platewatch.thermal.conduction import ThermalModel
from platewatch.types import Array


def hankel(A: Array, B: Array, C: Array) -> Array:
    """Singular values from the two Gramians (Antoulas, Approximation of Large-Scale
    Dynamical Systems, sec. 5.4, from memory)."""
    P = solve_continuous_lyapunov(A, -B @ B.T)
    Q = solve_continuous_lyapunov(A.T, -C.T @ C)
    return np.sqrt(np.sort(np.abs(np.linalg.eigvals(P @ Q).real))[::-1])


def coarse_plate() -> tuple[ThermalModel, Array, Array, Array]:
    """12 x 9 cells of the main plate; heaters by the nine cells whose centre they cover;
    five thermocouples at cell centres."""
    model = model_of(main_plate(), 0.4 / 12)
    A = -model.K.toarray() / model.capacity[:, None]
    B = np.zeros((108, 2))
    for column, cells in enumerate(((26, 27, 28), (55, 56, 57))):
        chosen = np.concatenate([np.array(cells) + 12 * row for row in range(3)])
        B[chosen, column] = 1 / 9 / model.capacity[chosen]
    C = np.zeros((5, 108))
    C[range(5), [13, 22, 85, 94, 54]] = 1
    return model, A, B, C


def test_two_coupled_poles_have_the_closed_form_values():
    """G(s) = 1/(s+1) + 1/(s+2): eigenvalues of [[1/2, 1/3], [1/3, 1/4]] = .73100016,
    .01899984 (closed form)."""
    A, B = np.diag([-1.0, -2.0]), np.ones((2, 1))
    assert hankel(A, B, B.T) == pytest.approx([0.73100016, 0.01899984], abs=1e-8)
    assert LTIModel.from_matrices(A, B, B.T).hsv() == pytest.approx(
        [0.73100016, 0.01899984], abs=1e-8
    )


EXACT = [
    0.657914836,
    0.0892546751,
    0.0238067367,
    0.0103919016,
    0.00482444025,
    0.00363550979,
    0.00187462851,
    6.54560792e-4,
    1.60103791e-4,
    9.80473546e-5,
]


def test_our_matrices_of_the_main_plate_have_the_published_hankel_values():
    """Calculated four ways outside (own Lyapunov, pymor, control, slycot ab09ad); trace of
    A -24.30431547619, steady gain .48863680491908, mean rise .41666667 K/W = 1/(H area)."""
    model, A, B, C = coarse_plate()
    assert np.trace(A) == pytest.approx(-24.30431547619, rel=1e-10)
    gain = np.linalg.solve(-A, B)
    assert (C @ gain)[0, 0] == pytest.approx(0.48863680491908, rel=1e-10)
    means = np.average(gain, axis=0, weights=model.grid.area)
    assert means == pytest.approx([0.41666667] * 2, abs=1e-8)
    assert hankel(A, B, C)[:10] == pytest.approx(EXACT, rel=1e-5)


def test_pymor_finds_the_same_hankel_values_in_our_matrices():
    """Second route: pymor's Gramian factors."""
    _, A, B, C = coarse_plate()
    assert LTIModel.from_matrices(A, B, C).hsv()[:8] == pytest.approx(EXACT[:8], rel=1e-5)
