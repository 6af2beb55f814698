"""Rules that keep a real overheating from being explained away."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from platewatch.monitor import pipeline
from platewatch.monitor.alarms import Verdict
from platewatch.monitor.causes import layer
from platewatch.monitor.causes.catalogue import SENSOR_SHAPES, Cause, Family, cause_of
from platewatch.monitor.causes.plain import verdict
from platewatch.monitor.causes.refine import Fit
from platewatch.monitor.causes.weighing import OPEN_FLOOR, RELIABILITY, weigh
from platewatch.monitor.estimator import first_state
from platewatch.monitor.limits import AlarmLimit, LimitKind, Priority
from platewatch.monitor.options import CauseOptions
from platewatch.monitor.outlook import CREDIBLE, Prospect, worst_of
from platewatch.monitor.verdicts import SURE, sensor_alarms
from platewatch.thermal.plate import Role
from platewatch.types import AlarmState
from tests.unit.monitor import watched_plate


def _prospect(probability: float, passing: float, median_s: float | None = None) -> Prospect:
    times = (median_s, median_s, median_s)
    return Prospect(None, probability, {}, {}, {"product": (passing, times)})


def test_the_alarm_follows_the_worst_cause_above_one_per_cent() -> None:
    """97 % nothing, 2 % a stuck zone that passes the limit: the alarm follows the 2 %
    (design, never-mask 3)."""
    harmless, bad = _prospect(0.97, 0.0), _prospect(0.02, 0.9, 200.0)
    assert worst_of((harmless, bad), "product") is bad


def test_a_cause_below_one_per_cent_does_not_alarm_by_itself() -> None:
    """The alarm floor has two sides."""
    harmless, doubtful = _prospect(0.995, 0.0), _prospect(CREDIBLE / 2, 0.9, 200.0)
    assert worst_of((harmless, doubtful), "product") is harmless


def test_of_two_causes_that_pass_the_limit_the_sooner_counts() -> None:
    """Both pass surely; one in 2 min, one in 10."""
    late, soon = _prospect(0.6, 1.0, 600.0), _prospect(0.4, 1.0, 120.0)
    assert worst_of((late, soon), "product") is soon


@pytest.mark.parametrize("shape", [s for s in SENSOR_SHAPES if s.kind != "step"])
def test_a_rising_reading_is_never_a_drift_or_a_loose_junction(shape) -> None:
    """Only low readings may drift away (design, never-mask 2)."""
    assert cause_of(Family.SENSOR, shape, positive=True) is None
    assert cause_of(Family.SENSOR, shape, positive=False) in (
        Cause.SENSOR_DRIFT,
        Cause.SENSOR_LOOSE,
    )


def _fit(cause: Cause, subject: str, evidence: float) -> Fit:
    nothing = np.zeros(0)
    return Fit(
        ((cause, subject),), nothing.astype(np.int64), 10, nothing, nothing, evidence, 0.0, 0, 0
    )


@pytest.mark.parametrize("odds", [-1e6, -20.0, 0.0, 20.0, 1e6])
def test_neither_half_of_an_open_pair_falls_below_the_alarm_floor(odds: float) -> None:
    """Whatever the others and an answer say, both stay above it until it is settled
    (design, never-mask 5)."""
    pair = [_fit(Cause.COLD_LOAD, "Z2", 400.0), _fit(Cause.SENSOR_LOOSE, "T2", 300.0)]
    for answer in (-1.0, 0.0, 1.0):
        said = answer * np.log(RELIABILITY / (1 - RELIABILITY)) / 2
        fits = [
            replace(pair[0], log_prior=pair[0].log_prior + said),
            replace(pair[1], log_prior=pair[1].log_prior - said),
        ]
        probabilities, p_none = weigh(fits, [(0, 1, odds)])
        assert probabilities.min() >= 0.99 * OPEN_FLOOR > CREDIBLE
        assert probabilities.sum() + p_none == pytest.approx(1.0)


def test_a_control_thermocouple_is_not_condemned_while_a_load_explains_as_well() -> None:
    """However strong its own residual: with the pair open, "very likely" is out of reach,
    and only that raises `sensor-bad` (design, never-mask 1)."""
    pair = [_fit(Cause.COLD_LOAD, "Z2", 5000.0), _fit(Cause.SENSOR_LOOSE, "T2", 9000.0)]
    probabilities, _ = weigh(pair, [(0, 1, 0.0)])
    assert probabilities[1] < SURE


@cache
def _limited():
    """The small plate with a limit on each thermocouple."""
    raw = AlarmLimit("raw", LimitKind.SENSOR, 130.0, Priority.HIGH, 2.0, time_to_respond_min=5.0)
    monitor = watched_plate.monitor()
    return replace(monitor, limits=(*monitor.limits, raw))


def test_the_raw_high_limit_of_a_thermocouple_that_nobody_believes_stays() -> None:
    """A reading that stands still at 140 degC is left out of the field; its own limit of
    130 degC alarms all the same (design, never-mask 2)."""
    monitor = _limited()
    model = layer.build_model(monitor.quiet, watched_plate.TICK_US, CauseOptions())
    monitor, state = replace(monitor, causes=model), pipeline.first(monitor)
    rng = np.random.default_rng(1)
    for k in range(60):
        hot = 120.0 if k < 20 else 140.0
        A, C = (np.round(120 + 0.1 * rng.standard_normal(), 1) for _ in range(2))
        values = {"sensor/A": float(A), "sensor/B": hot, "sensor/C": float(C)}
        values |= {"zone/L/duty": 0.1, "zone/R/duty": 0.1, "surround/ambient": 22.0}
        at_us = watched_plate.T0 + k * watched_plate.TICK_US
        state, _ = pipeline.step(monitor, state, watched_plate.tick(at_us, values))
    assert state.causes is not None
    assert [s.sensor for s in state.causes.settled] == ["B"]
    assert state.alarms["peak-now", "B"].state is AlarmState.UNACKNOWLEDGED


def test_a_control_thermocouple_left_out_is_said_to_be_bad() -> None:
    """A settled finding keeps `sensor-bad` standing and says why."""
    quiet = watched_plate.quiet()
    sensors = tuple(replace(s, role=Role.CONTROL) for s in quiet.plate.sensors)
    words = replace(watched_plate.monitor().words, plate=replace(quiet.plate, sensors=sensors))
    seen = watched_plate.observed(quiet, [120.0, 120.0, 120.0])
    field = first_state(quiet, watched_plate.T0, seen)
    settled = verdict(quiet, field, Cause.SENSOR_STUCK, 1, 0)
    (condition,) = sensor_alarms(words, (Prospect(settled.view, 1.0, {}, {}, {}),), frozenset())
    assert (condition.subject, condition.verdict) == ("B", Verdict.ON)
    assert "stands still" in condition.message
