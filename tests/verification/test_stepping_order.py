"""The time step itself: third order, and quiet where cells are far quicker than the step."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.sparse import csr_array

from platewatch.thermal.stepping import factor, one_step

ONE = np.ones(1)


def marched(steps: int) -> float:
    """T at 1 s of dT/dt = cos(t) - T^2 / 4 from 1, the slope taken anew at every step."""
    dt, t, T = 1.0 / steps, 0.0, ONE.copy()
    for _ in range(steps):
        factored = factor(ONE, csr_array([[float(T[0]) / 2]]), dt)
        T = one_step(ONE, lambda t, T: np.cos(t) - T * T / 4, factored, t, T)[0]
        t += dt
    return float(T[0])


def test_a_step_is_third_order_with_bent_losses_and_a_moving_input():
    """Rodas3 (Sandu et al. 1997) is of order 3: each halving divides the error by about 8."""
    finest = marched(2048)
    errors = [abs(marched(steps) - finest) for steps in (8, 16, 32, 64)]
    assert np.log2(np.divide(errors[:-1], errors[1:])) == pytest.approx([3, 3, 3], abs=0.2)


@pytest.mark.parametrize("rate_per_s", [1e3, 1e6, 1e9])
def test_a_cell_far_quicker_than_the_step_is_settled_after_it(rate_per_s):
    """L-stable: what is left after one step goes to zero as rate x step grows."""
    factored = factor(ONE, csr_array([[rate_per_s]]), 1.0)
    T = one_step(ONE, lambda _t, T: -rate_per_s * T, factored, 0.0, 100.0 * ONE)[0]
    assert abs(T[0]) < 10 * 100.0 / rate_per_s
