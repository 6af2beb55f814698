"""The bank against second routes: simulated innovations, brute-force probabilities."""

from __future__ import annotations

from functools import lru_cache
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import multivariate_normal

from platewatch.adapters.settings import load
from platewatch.compose import build_monitor
from platewatch.monitor.causes import layer
from platewatch.monitor.causes.catalogue import Cause, Family, Shape, cause_of, patterns
from platewatch.monitor.causes.evidence import (
    Watch,
    begin,
    findings,
    groups_of,
    log_evidence,
    observe,
)
from platewatch.monitor.causes.refine import Evidence, columns_of, fit, reads_low
from platewatch.monitor.causes.sentinel import Sentinel, build_sentinel, steady_prior
from platewatch.monitor.causes.signatures import Bank, build_bank, shaped
from platewatch.monitor.estimator import Quiet
from platewatch.monitor.options import CauseOptions
from platewatch.thermal.conduction import transient
from platewatch.thermal.grid import point_row
from platewatch.types import Array

CONFIG = Path(__file__).resolve().parents[4] / "config"
TICK_US = 2_000_000


@lru_cache(maxsize=1)
def _model() -> layer.Model:
    monitor = build_monitor(load(CONFIG / "demo-table.toml"))
    return layer.build_model(monitor.quiet, TICK_US, CauseOptions())


@lru_cache(maxsize=1)
def _parts() -> tuple[Quiet, Sentinel, Bank]:
    model = _model()
    sentinel, bank = model.of(tuple(range(9)))
    return model.quiet, sentinel, bank


def _column(bank: Bank, family: Family, subject: str, shape: Shape) -> int:
    return next(
        c
        for c, p in enumerate(bank.column_pattern)
        if bank.patterns[p].family is family
        and bank.patterns[p].subject == subject
        and bank.column_shape[c] == shape
    )


def test_the_observers_gain_is_the_settled_kalman_gain() -> None:
    """Doubling reaches the fixed point of the Riccati recursion."""
    rng = np.random.default_rng(4)
    F = np.diag([0.9, 0.7, 0.95]) + 0.02 * rng.standard_normal((3, 3))
    H = rng.standard_normal((2, 3))
    Q, R = 0.1 * np.eye(3), np.array([0.3, 0.5])
    P = steady_prior(F, H, Q, R)
    S = H @ P @ H.T + np.diag(R)
    after = F @ (P - P @ H.T @ np.linalg.solve(S, H @ P)) @ F.T + Q
    assert after == pytest.approx(P, rel=1e-10)


def test_a_signature_is_what_the_observer_really_shows() -> None:
    """A zone that delivers 200 W too much, simulated tick by tick in the observer's own
    linear world, gives 200 times the bank's signature."""
    _, sentinel, bank = _parts()
    column = _column(bank, Family.ZONE, "Z5", Shape("step"))
    n, watts, ticks = len(sentinel.F), 200.0, 60
    push = bank.push.state[:, bank.column_pattern[column]] * watts
    truth, watch = np.zeros(n), np.zeros(n)
    shown = []
    for _ in range(ticks):
        truth = sentinel.F @ truth + push
        expected = sentinel.F @ watch
        residual = sentinel.H @ (truth - expected)
        watch = expected + sentinel.K @ residual
        shown.append(sentinel.whiten @ residual)
    signature = bank.signature[:ticks, column] * watts
    # What the filter's modes miss of a declared heater is small beside what they show.
    assert np.array(shown) == pytest.approx(signature, abs=0.02 * float(np.abs(signature).max()))


def test_the_fuller_model_answers_an_undeclared_source_like_the_full_one() -> None:
    """1 kW on 250 x 250 mm under a thermocouple: within 2 % of the full model at 10 to 120 s,
    where the filter's own modes with one ramped correction are up to 24 % off."""
    quiet, _, _ = _parts()
    grid, model = quiet.grid, quiet.reduced.model
    heat = np.where((abs(grid.x - 0.6) < 0.125) & (abs(grid.y - 0.2) < 0.125), grid.area, 0.0)
    heat *= 1000 / heat.sum()
    times = np.array([10.0, 30.0, 60.0, 120.0])
    nothing = np.zeros(len(model.inputs))
    still = transient(model, np.zeros(grid.n), nothing, times)
    warm = transient(model, np.zeros(grid.n), nothing, times, extra=heat)
    at = point_row(grid, 0.6, 0.2)
    full = (np.asarray(warm) - np.asarray(still)) @ at
    fuller = _model().fuller
    gain = fuller.gain(heat[:, None])[:, 0]
    rise = -np.expm1(-fuller.rates * times[:, None]) / np.maximum(fuller.rates, 1e-12)
    assert (rise * gain) @ (at @ fuller.at_cells) == pytest.approx(full, rel=0.02)


@pytest.mark.parametrize(
    "shape", [Shape("step"), Shape("decay", 100.0), Shape("settle", 90.0), Shape("grow", 150.0)]
)
def test_a_shape_is_the_sum_of_its_pulses(shape: Shape) -> None:
    """Response to heat w_0, w_1, … is the sum of pulses, each as old as it is."""
    rng = np.random.default_rng(1)
    pulse, dt = rng.standard_normal((40, 2)), 2.0
    late = dt if shape.kind in ("settle", "ramp") else 0.0
    weight = shape.at(np.arange(40) * dt + late)
    direct = np.array([sum(weight[j] * pulse[k - j] for j in range(k + 1)) for k in range(40)])
    assert shaped(pulse, shape, dt) == pytest.approx(direct, rel=1e-9, abs=1e-9)


def test_the_evidence_is_the_ratio_of_two_normal_densities() -> None:
    """ln p(v | cause) / p(v | none) with the amplitude integrated out, against scipy."""
    _, sentinel, bank = _parts()
    column = _column(bank, Family.SENSOR, "T4", Shape("step"))
    rng = np.random.default_rng(2)
    ticks, m = 12, len(sentinel.sensors)
    v = rng.standard_normal((ticks, m)) + 0.5 * bank.signature[:ticks, column]
    b = np.einsum("acm,am->c", bank.signature[:ticks], v)
    watch = Watch(np.zeros(len(sentinel.F)), b[None].astype(np.float32), rows=1, age=ticks - 1)
    low, high, _ = log_evidence(bank, watch, 2.0)
    s = bank.signature[:ticks, column].reshape(-1).astype(float)
    flat, none = v.reshape(-1), -0.5 * float((v**2).sum()) - 0.5 * v.size * np.log(2 * np.pi)
    direct = [
        multivariate_normal(cov=np.eye(s.size) + sd**2 * np.outer(s, s)).logpdf(flat) - none
        for sd in bank.patterns[bank.column_pattern[column]].sd
    ]
    # The two priors are equally likely, and so are both signs of the amplitude.
    both = np.logaddexp(low[0, column], high[0, column]) - np.log(2)
    assert both == pytest.approx(np.logaddexp(*direct) - np.log(2), abs=1e-3)


def test_nothing_found_on_noise_alone() -> None:
    """White innovations for a quarter of an hour name no cause."""
    _, sentinel, bank = _parts()
    rng = np.random.default_rng(3)
    mean = np.zeros(len(sentinel.F))
    watch = begin(bank, mean, 2.0)
    seen = []
    root = np.linalg.inv(sentinel.whiten)
    for _ in range(450):
        z = sentinel.H @ (sentinel.F @ watch.mean) + root @ rng.standard_normal(9)
        watch, v = observe(sentinel, bank, watch, np.zeros(len(mean)), z, 2.0)
        seen.append(v)
    found, p_none = findings(bank, watch, groups_of(bank, CauseOptions()), 2.0)
    assert p_none > 0.99
    assert max(f.probability for f in found) < 0.01


def test_a_high_reading_is_never_called_a_drift() -> None:
    """Drift and looseness explain low readings only; a step may be high, heat may be real."""
    for shape in (Shape("ramp", 60.0), Shape("settle", 90.0)):
        assert cause_of(Family.SENSOR, shape, positive=True) is None
        assert cause_of(Family.SENSOR, shape, positive=False) is not None
    assert cause_of(Family.SENSOR, Shape("step"), positive=True) is Cause.SENSOR_STEP


def test_a_fitted_loose_thermocouple_must_read_low() -> None:
    """The same in the second look: a fit whose error is above zero is thrown away."""
    _, _, bank = _parts()
    columns = columns_of(bank, Cause.SENSOR_LOOSE, "T4", 0.2, 0.6)
    column = _column(bank, Family.SENSOR, "T4", Shape("settle", 90.0))
    for sign, expected in ((-1.0, True), (1.0, False)):
        seen = sign * 8.0 * bank.signature[:40, column].astype(float)
        found = fit(Evidence(bank, seen), [(Cause.SENSOR_LOOSE, "T4")], columns, 39, 0.0)
        assert reads_low(bank, found) is expected


def _explained(bank: Bank, column: int, amplitude: float, ticks: int) -> Array:
    return amplitude * bank.signature[:ticks, column].astype(float)


def test_a_stuck_zone_is_read_off_in_watts() -> None:
    """600 W too much on Z5, no noise: the second look gives 600 W within 2 %."""
    _, _, bank = _parts()
    column = _column(bank, Family.ZONE, "Z5", Shape("step"))
    evidence = Evidence(bank, _explained(bank, column, 600.0, 60))
    columns = columns_of(bank, Cause.ZONE_STAYS_ON, "Z5", 0.6, 0.6)
    found = fit(evidence, [(Cause.ZONE_STAYS_ON, "Z5")], columns, 59, 0.0)
    t = np.array([59 * 2.0])
    watts = sum(
        a * bank.column_shape[c].at(t)[0]
        for c, a in zip(found.columns, found.amplitude, strict=True)
    )
    assert watts == pytest.approx(600.0, rel=0.02)


def test_every_place_of_a_plate_with_a_hole_lies_on_it() -> None:
    """Sources are only looked for where there is plate."""
    monitor = build_monitor(load(CONFIG / "notched-plate.toml"))
    found = [p for p in patterns(monitor.quiet) if p.family is Family.SOURCE]
    assert len(found) > 50
    for pattern in found:
        assert pattern.heat is not None
        assert pattern.heat.sum() == pytest.approx(1.0)


def test_observer_and_bank_fit_any_subset_of_thermocouples() -> None:
    """With T4 out, the bank is built for the other eight."""
    model = _model()
    sensors = (0, 1, 2, 4, 5, 6, 7, 8)
    sentinel = build_sentinel(model.quiet, TICK_US, sensors)
    bank = build_bank(model.quiet, sentinel, model.fuller, patterns(model.quiet)[-20:], TICK_US)
    assert bank.signature.shape[2] == 8
    assert np.isfinite(bank.signature).all()
