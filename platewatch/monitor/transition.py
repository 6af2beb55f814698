"""Exact time steps of the estimator's linear part, for any step length.

The state is x = [a, d, b, L, beta, theta]:

a      modal amplitudes of the field, T = V a (degC)
d      per zone, watts delivered beyond what was called for (Ornstein-Uhlenbeck)
b      coarse smooth unknown heat, W/m2 at the nodes of a coarse mesh (the same)
L      what each thermocouple's junction is at, first-order lag behind the plate (degC)
beta   what each thermocouple reads beyond its junction (K)
theta  relative errors of conductivity, losses and heat capacity

and is driven by e = [p, c, u, 1, m]: heater outputs p (W) that follow the called
watts c with the heater lag, temperatures u around the plate, and modal heat m
that is held over the step (remainder of the losses, effect of theta).
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from scipy.linalg import expm

from platewatch.monitor.kalman import Coupling
from platewatch.types import Array


@dataclass(frozen=True)
class Blocks:
    """Where each part of the state lies."""

    modes: int
    zones: int
    bumps: int
    sensors: int
    parameters: int
    size: int = field(init=False)
    a: slice = field(init=False, repr=False, compare=False)
    d: slice = field(init=False, repr=False, compare=False)
    b: slice = field(init=False, repr=False, compare=False)
    L: slice = field(init=False, repr=False, compare=False)
    beta: slice = field(init=False, repr=False, compare=False)
    theta: slice = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        sizes = (self.modes, self.zones, self.bumps, self.sensors, self.sensors, self.parameters)
        start = 0
        for name, count in zip(("a", "d", "b", "L", "beta", "theta"), sizes, strict=True):
            object.__setattr__(self, name, slice(start, start + count))
            start += count
        object.__setattr__(self, "size", start)


@dataclass(frozen=True)
class Noise:
    """Stationary standard deviation and correlation time of each random part."""

    power_W: Array  # (zones,)
    power_s: float
    bump_W_m2: float
    bump_s: float
    bias_K: Array  # (sensors,)
    bias_s: float
    theta: Array  # (parameters,)
    theta_s: float


@dataclass(frozen=True)
class Continuous:
    """The continuous-time system.

    rates (r,) 1/s;  heat_zone (r, nz), heat_bump (r, nb), heat_around (r, nu) modal
    heat per W, W/m2, K;  constant (r,);  sensors (ns, r) field at the sensors
    sensor_lag_s (ns,), heater_lag_s (nz,)
    """

    blocks: Blocks
    rates: Array
    heat_zone: Array
    heat_bump: Array
    heat_around: Array
    constant: Array
    sensors: Array
    sensor_lag_s: Array
    heater_lag_s: Array
    noise: Noise


@dataclass(frozen=True)
class Step:
    """x' = F x + E e (+ noise of covariance Q);  p' = decay p + (1 - decay) c.

    F = diag(keep) + couplings.  E is split by what drives: heater (n, nz) from p,
    called (n, nz) from c, around (n, nu), constant (n,), modal (n, r).
    """

    F: Array
    keep: Array
    couplings: tuple[Coupling, ...]
    Q: Array
    heater: Array
    called: Array
    around: Array
    constant: Array
    modal: Array
    decay: Array


def _correlation_rates(system: Continuous, hold: bool) -> Array:
    """Relaxation rates of every state that has one of its own (0: held)."""
    k, noise = system.blocks, system.noise
    rate = np.zeros(k.size)
    if not hold:
        rate[k.d] = 1 / noise.power_s
        rate[k.b] = 1 / noise.bump_s
        rate[k.beta] = 1 / noise.bias_s
        rate[k.theta] = 1 / noise.theta_s
    return rate


def _intensities(system: Continuous) -> Array:
    """White-noise intensities (n,) that keep each random part at its stationary spread."""
    k, noise = system.blocks, system.noise
    q = np.zeros(k.size)
    q[k.d] = 2 * noise.power_W**2 / noise.power_s
    q[k.b] = 2 * noise.bump_W_m2**2 / noise.bump_s
    q[k.beta] = 2 * noise.bias_K**2 / noise.bias_s
    q[k.theta] = 2 * noise.theta**2 / noise.theta_s
    return q


def _generator(system: Continuous, hold: bool) -> Array:
    """dx/dt = A x, (n, n)."""
    k = system.blocks
    A = np.diag(-_correlation_rates(system, hold))
    A[k.a, k.a] = np.diag(-system.rates)
    A[k.a, k.d] = system.heat_zone
    A[k.a, k.b] = system.heat_bump
    A[k.L, k.a] = system.sensors / system.sensor_lag_s[:, None]
    A[k.L, k.L] = np.diag(-1 / system.sensor_lag_s)
    return A


def exact_step(system: Continuous, dt_s: float, hold: bool = False) -> Step:
    """The exact step of length dt_s.

    hold: disturbances stay as they are (the forecast); else they relax to nothing.
    Source: C. F. Van Loan, Computing integrals involving the matrix exponential,
    IEEE Trans. Automatic Control 23 (1978) 395.
    """
    k = system.blocks
    n, r, nz, nu = k.size, k.modes, k.zones, system.heat_around.shape[1]
    A = _generator(system, hold)
    drives = 2 * nz + nu + 1 + r
    big = np.zeros((n + drives, n + drives))
    big[:n, :n] = A
    p, c = slice(n, n + nz), slice(n + nz, n + 2 * nz)
    u, one = slice(n + 2 * nz, n + 2 * nz + nu), n + 2 * nz + nu
    m = slice(one + 1, one + 1 + r)
    big[k.a, p] = system.heat_zone
    big[p, p] = np.diag(-1 / system.heater_lag_s)
    big[p, c] = np.diag(1 / system.heater_lag_s)
    big[k.a, u] = system.heat_around
    big[k.a, one] = system.constant
    big[k.a, m] = np.eye(r)
    E = expm(big * dt_s)[:n]
    F = np.ascontiguousarray(E[:, :n])
    return Step(
        F=F,
        keep=np.diag(F).copy(),
        couplings=_couplings(k, F),
        Q=_van_loan(A, _intensities(system), dt_s),
        heater=np.ascontiguousarray(E[:, p]),
        called=np.ascontiguousarray(E[:, c]),
        around=np.ascontiguousarray(E[:, u]),
        constant=np.ascontiguousarray(E[:, one]),
        modal=np.ascontiguousarray(E[:, m]),
        decay=np.exp(-dt_s / system.heater_lag_s),
    )


def _couplings(k: Blocks, F: Array) -> tuple[Coupling, ...]:
    """What of F is not diagonal: disturbances heat the field, the field warms junctions."""
    disturbed = slice(k.d.start, k.b.stop)
    warming = slice(k.a.start, k.b.stop)
    return tuple(
        Coupling(rows, columns, np.ascontiguousarray(F[rows, columns]))
        for rows, columns in ((k.a, disturbed), (k.L, warming))
    )


# Above this product of fastest rate and step, e^{-At} overflows the arithmetic
# of the block exponential; the step is halved and doubled instead.
STIFF = 8.0


def _van_loan(A: Array, q: Array, dt_s: float) -> Array:
    """Covariance gathered over dt_s by dx = A x dt + noise of intensity diag(q).

    Q(2t) = F(t) Q(t) F(t)' + Q(t) doubles a short step that is exact by Van Loan.
    """
    n = q.size
    fastest = float(np.abs(np.diag(A)).max())
    halvings = max(0, int(np.ceil(np.log2(max(fastest * dt_s / STIFF, 1.0)))))
    short = dt_s / 2**halvings
    block = np.zeros((2 * n, 2 * n))
    block[:n, :n] = -A
    block[:n, n:] = np.diag(q)
    block[n:, n:] = A.T
    M = expm(block * short)
    F = M[n:, n:].T
    Q = F @ M[:n, n:]
    for _ in range(halvings):
        Q = F @ Q @ F.T + Q
        F = F @ F
    return np.asarray((Q + Q.T) / 2)


MOST_STEPS = 12  # lengths kept: the ticks, the forecast's, and what silences leave over


@dataclass(frozen=True)
class Steps:
    """Exact steps by length; those used last are kept."""

    system: Continuous
    _known: dict[tuple[int, bool], Step] = field(default_factory=dict)

    def of(self, dt_us: int, hold: bool = False) -> Step:
        key = (dt_us, hold)
        step = self._known.pop(key, None)
        if step is None:
            step = exact_step(self.system, dt_us / 1e6, hold)
        self._known[key] = step  # now the last of the dictionary
        if len(self._known) > MOST_STEPS:
            del self._known[next(iter(self._known))]
        return step
