"""Time steps of any length are exact."""

import numpy as np
import pytest
from scipy.linalg import expm

from platewatch.monitor.transition import (
    MOST_STEPS,
    Blocks,
    Continuous,
    Noise,
    Steps,
    exact_step,
)

POWER_S, BUMP_S = 900.0, 3600.0
LENGTHS_S = (0.1, 2.0, 60.0, 600.0)


def plate_of_few_modes(rates=(0.0, 1 / 900.0, 1 / BUMP_S, 0.02, 0.3), bias_s=1e5):
    """A made-up reduced plate; its first mode loses nothing, the next ones relax exactly as
    fast as the disturbances do."""
    rng = np.random.default_rng(5)
    r = len(rates)
    return Continuous(
        blocks=Blocks(r, 2, 3, 2, 3),
        rates=np.array(rates),
        heat_zone=rng.normal(0, 1e-3, (r, 2)),
        heat_bump=rng.normal(0, 1e-3, (r, 3)),
        heat_around=rng.normal(0, 1e-3, (r, 1)),
        constant=rng.normal(0, 1e-2, r),
        sensors=rng.normal(0, 1, (2, r)),
        sensor_lag_s=np.array([8.0, 0.5]),
        heater_lag_s=np.array([30.0, 45.0]),
        noise=Noise(
            np.array([55.0, 40.0]),
            POWER_S,
            12.0,
            BUMP_S,
            np.array([0.75, 0.3]),
            bias_s,
            np.array([0.05, 0.15, 0.02]),
            1e6,
        ),
    )


def rates_and_noise(system):
    """A (n, n) and white-noise intensities (n,), written out element by element."""
    k, noise = system.blocks, system.noise
    A, q = np.zeros((k.size, k.size)), np.zeros(k.size)
    for i, rate in enumerate(system.rates):
        A[i, i] = -rate
    relax = [
        (k.d, noise.power_s, noise.power_W),
        (k.b, noise.bump_s, np.full(k.bumps, noise.bump_W_m2)),
        (k.beta, noise.bias_s, noise.bias_K),
        (k.theta, noise.theta_s, noise.theta),
    ]
    for part, memory, sd in relax:
        for j, i in enumerate(range(part.start, part.stop)):
            A[i, i] = -1 / memory
            q[i] = 2 * sd[j] ** 2 / memory
    A[k.a, k.d], A[k.a, k.b] = system.heat_zone, system.heat_bump
    for s, lag in enumerate(system.sensor_lag_s):
        A[k.L.start + s, k.a] = system.sensors[s] / lag
        A[k.L.start + s, k.L.start + s] = -1 / lag
    return A, q


def near(found, expected, rel=1e-9):
    """Equal to `rel` of the largest element of each row and column pair, or to the rounding
    of the largest of all: a lag long gone leaves exp(-1200), which an exponential by
    repeated squaring reaches only to eps times 1200."""
    largest = np.abs(expected)
    size = np.sqrt(np.outer(largest.max(axis=1), largest.max(axis=0)))
    return bool((np.abs(found - expected) <= rel * size + 3e-13 * largest.max()).all())


@pytest.mark.parametrize("length_s", LENGTHS_S)
def test_a_step_is_the_matrix_exponential_of_the_rates(length_s):
    """F = exp(A dt), with A written out independently."""
    system = plate_of_few_modes()
    A, _ = rates_and_noise(system)
    assert near(exact_step(system, length_s).F, expm(A * length_s))


@pytest.mark.parametrize("length_s", LENGTHS_S)
def test_two_half_steps_are_one_whole_step(length_s):
    """F(t) = F(h) F(h); Q(t) = F(h) Q(h) F(h)' + Q(h); the same for every drive."""
    system = plate_of_few_modes()
    half, whole = exact_step(system, length_s / 2), exact_step(system, length_s)
    assert near(whole.F, half.F @ half.F)
    assert near(whole.Q, half.F @ half.Q @ half.F.T + half.Q)
    for drive in ("around", "modal"):
        one, two = getattr(half, drive), getattr(whole, drive)
        assert near(two, half.F @ one + one)
    assert whole.constant == pytest.approx(half.F @ half.constant + half.constant, rel=1e-9)
    assert whole.decay == pytest.approx(half.decay**2, rel=1e-12)
    assert near(whole.heater, half.F @ half.heater + half.heater * half.decay)
    later = half.called + half.heater * (1 - half.decay)
    assert near(whole.called, half.F @ half.called + later)


@pytest.mark.parametrize("length_s", LENGTHS_S)
def test_the_gathered_noise_is_the_integral_of_its_spreading(length_s):
    """Q = integral of exp(A s) diag(q) exp(A s)' ds, by Gauss-Legendre on short pieces.

    A piece of one lag of the fastest thermocouple with 12 nodes integrates products of
    exponentials to rounding.
    """
    system = plate_of_few_modes()
    A, q = rates_and_noise(system)
    pieces = max(1, int(np.ceil(length_s / system.sensor_lag_s.min())))
    nodes, weights = np.polynomial.legendre.leggauss(12)
    width = length_s / pieces
    inside = [expm(A * (width * (node + 1) / 2)) for node in nodes]
    piece = sum(w * width / 2 * (f * q) @ f.T for w, f in zip(weights, inside, strict=True))
    across, total = expm(A * width), np.zeros_like(A)
    for _ in range(pieces):
        total = across @ total @ across.T + piece
    assert near(exact_step(system, length_s).Q, total, rel=1e-8)


def test_a_mode_as_slow_as_the_disturbance_is_ordinary():
    """G = b (exp(-mu t) - exp(-lambda t)) / (lambda - mu) has the limit b t exp(-lambda t)."""
    system, t = plate_of_few_modes(), 60.0
    k, step = system.blocks, exact_step(system, t)
    same = system.heat_zone[1] * t * np.exp(-t / POWER_S)
    assert step.F[1, k.d] == pytest.approx(same, rel=1e-10)
    lossless = system.heat_zone[0] * POWER_S * -np.expm1(-t / POWER_S)
    assert step.F[0, k.d] == pytest.approx(lossless, rel=1e-10)
    rate = system.rates[3]
    apart = (np.exp(-t / POWER_S) - np.exp(-rate * t)) / (rate - 1 / POWER_S)
    assert step.F[3, k.d] == pytest.approx(system.heat_zone[3] * apart, rel=1e-10)


def test_a_mode_nearly_as_slow_as_the_disturbance_differs_nearly_nothing():
    """The step is continuous where rates meet."""
    met = exact_step(plate_of_few_modes(), 60.0)
    apart = exact_step(plate_of_few_modes((1e-12, 1 / 900.0 + 1e-12, 1 / BUMP_S, 0.02, 0.3)), 60.0)
    assert near(met.F, apart.F, rel=1e-8)
    assert near(met.Q, apart.Q, rel=1e-8)


@pytest.mark.parametrize("length_s", LENGTHS_S)
def test_disturbances_keep_their_spread_when_nothing_is_read(length_s):
    """P = F P F' + Q with the stationary spread of every random part of its own."""
    system = plate_of_few_modes()
    k, noise, step = system.blocks, system.noise, exact_step(system, length_s)
    spread = [(k.d, noise.power_W), (k.beta, noise.bias_K), (k.theta, noise.theta)]
    for part, sd in spread:
        kept = step.F[part, part] @ np.diag(sd**2) @ step.F[part, part].T + step.Q[part, part]
        assert np.diag(kept) == pytest.approx(sd**2, rel=1e-9)


def test_held_disturbances_stay_as_they_are():
    """The forecast holds what disturbs the plate: nothing relaxes but the plate itself."""
    system = plate_of_few_modes()
    k, step = system.blocks, exact_step(system, 10.0, hold=True)
    for part in (k.d, k.b, k.beta, k.theta):
        assert step.F[part, part] == pytest.approx(np.eye(part.stop - part.start))
    assert step.F[0, k.d] == pytest.approx(system.heat_zone[0] * 10.0, rel=1e-12)


def test_heater_output_follows_the_call_with_its_lag():
    """One zone at constant call from cold: energy = W (t - lag (1 - exp(-t / lag))) into a
    mode that loses nothing."""
    system, t = plate_of_few_modes(), 60.0
    step = exact_step(system, t)
    lag = system.heater_lag_s
    gathered = t - lag * -np.expm1(-t / lag)
    assert step.called[0] == pytest.approx(system.heat_zone[0] * gathered, rel=1e-10)
    assert step.heater[0] == pytest.approx(system.heat_zone[0] * (t - gathered), rel=1e-10)


def test_a_length_is_worked_out_once():
    """Steps are remembered by their length in microseconds."""
    steps = Steps(plate_of_few_modes())
    assert steps.of(2_000_000) is steps.of(2_000_000)
    assert steps.of(2_000_000) is not steps.of(2_000_000, hold=True)


def test_silences_of_every_length_do_not_fill_the_memory():
    """A hundred odd lengths between ticks: few are kept, the ticks' own among them."""
    steps = Steps(plate_of_few_modes())
    tick = steps.of(2_000_000)
    for k in range(100):
        steps.of(100_000 * (k + 21))
        assert steps.of(2_000_000) is tick
    assert len(steps._known) <= MOST_STEPS
