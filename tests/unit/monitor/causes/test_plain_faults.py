"""Thermocouples that stand still or read like a mirror, told by their readings alone."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from platewatch.monitor.causes.catalogue import Cause
from platewatch.monitor.causes.frozen import flicker, frozen, listen, nothing_still
from platewatch.monitor.causes.jumped import compare, largest_bend_K, no_levels
from platewatch.monitor.causes.mirrored import from_neighbours, look, mirrored, no_mirrors
from platewatch.monitor.causes.noisy import follow, no_jumps
from platewatch.monitor.causes.plain import begin, watch
from platewatch.monitor.estimator import Quiet
from platewatch.types import Array
from tests.unit.monitor import watched_plate

T0, TICK_US, ROOM = watched_plate.T0, watched_plate.TICK_US, np.array([22.0])


@cache
def _quiet() -> Quiet:
    return watched_plate.quiet()


def _readings(ticks: int, slope: float, rng: np.random.Generator) -> Array:
    """(ticks, 3) readings of 0.1 K steps with 0.1 K noise about a plate at 60 degC and up."""
    true = 60.0 + slope * 2.0 * np.arange(ticks)[:, None]
    return np.asarray(np.round((true + 0.1 * rng.standard_normal((ticks, 3))) / 0.1) * 0.1)


def _found_after(quiet: Quiet, readings: Array, expected: Array) -> dict[int, int]:
    """Ticks after which each thermocouple is said to stand still."""
    still, found = nothing_still(quiet), {}
    for k, row in enumerate(readings):
        at_us = T0 + k * TICK_US
        still = listen(quiet, still, at_us, row, expected[k])
        for sensor in frozen(quiet, still, at_us, expected[k]):
            found.setdefault(sensor, k)
    return found


def test_the_chance_of_a_repeated_reading_follows_from_noise_and_quantum() -> None:
    """Against counted repetitions of a million rounded normal values."""
    rng = np.random.default_rng(5)
    values = np.round(0.1 * rng.standard_normal(1_000_000) / 0.1)
    counted = float((values[1:] == values[:-1]).mean())
    assert flicker(_quiet())[0] == pytest.approx(counted, abs=0.005)


def test_a_reading_that_stands_still_in_soak_is_found_within_five_minutes() -> None:
    """The no-change test knows the quantum; the plate need not move (design, never-mask 4)."""
    readings = _readings(450, 0.0, np.random.default_rng(1))
    readings[200:, 1] = readings[200, 1]
    found = _found_after(_quiet(), readings, np.full((450, 3), 60.0))
    assert list(found) == [1]
    assert (found[1] - 200) * 2.0 <= 300.0


def test_a_reading_that_stands_still_in_a_ramp_is_found_within_a_minute() -> None:
    """3 K/min under a thermocouple described without noise: its stillness alone says little,
    the movement that the field expects says it."""
    quiet = _quiet()
    smooth = tuple(replace(s, noise_K=0.0) for s in quiet.plate.sensors)
    quiet = replace(quiet, plate=replace(quiet.plate, sensors=smooth))
    true = 60.0 + 0.05 * 2.0 * np.arange(100)
    readings = np.round(np.repeat(true[:, None], 3, axis=1), 1)
    readings[40:, 0] = readings[40, 0]
    found = _found_after(quiet, readings, np.repeat(true[:, None], 3, axis=1))
    assert list(found) == [0]
    assert (found[0] - 40) * 2.0 <= 60.0


def test_a_healthy_thermocouple_in_a_day_of_soak_is_never_called_stuck() -> None:
    """43 200 readings of three thermocouples on a plate that does not move."""
    readings = _readings(43_200, 0.0, np.random.default_rng(2))
    assert _found_after(_quiet(), readings, np.full((43_200, 3), 60.0)) == {}


def test_a_gateway_that_repeats_values_is_learned() -> None:
    """Each value sent five times: once learned, a run of fifteen is nothing strange."""
    quiet = _quiet()
    slow = np.repeat(_readings(200, 0.0, np.random.default_rng(3)), 5, axis=0)
    expected = np.full((len(slow), 3), 60.0)
    still = nothing_still(quiet)
    for k, row in enumerate(slow):
        still = listen(quiet, still, T0 + k * TICK_US, row, expected[k])
    assert (still.repeats > 0.7).all()


def test_silence_is_no_stillness() -> None:
    """A thermocouple that sends nothing is not stuck, it is silent."""
    readings = np.full((300, 3), np.nan)
    readings[:20] = _readings(20, 0.0, np.random.default_rng(4))
    assert _found_after(_quiet(), readings, np.full((300, 3), 60.0)) == {}


def _mirror_after(rows: Array) -> dict[int, float]:
    """Seconds after which each thermocouple is said to be a mirror image."""
    quiet, mirrors, found = _quiet(), no_mirrors(_quiet()), {}
    for k, row in enumerate(rows):
        at_us = T0 + k * TICK_US
        mirrors = look(quiet, mirrors, at_us, row, ROOM, {}, frozenset())
        for sensor in mirrored(mirrors, at_us):
            found.setdefault(sensor, 2.0 * k)
    return found


def _heat_up(ticks: int) -> Array:
    """(ticks, 3): 22 degC, then 3 K/min after a minute."""
    rise = np.maximum(np.arange(ticks) * 2.0 - 60.0, 0.0) * 0.05
    return np.asarray(22.0 + rise[:, None] * np.array([1.0, 1.0, 0.9]))


def test_exchanged_wires_are_found_in_the_first_minutes_of_heat_up() -> None:
    """A falls while its neighbours rise: within 150 s of ramp (demonstration batch 7)."""
    rows = _heat_up(120)
    rows[:, 0] = 44.0 - rows[:, 0]
    found = _mirror_after(rows)
    assert list(found) == [0]
    assert found[0] - 60.0 <= 150.0


def test_exchanged_wires_are_found_on_a_plate_found_hot() -> None:
    """120 degC shown as -76 degC is a mirror image about the terminals at 22 degC."""
    rows = np.full((10, 3), 120.0)
    rows[:, 2] = -76.0
    assert list(_mirror_after(rows)) == [2]


def test_a_cold_load_in_heat_up_is_no_mirror_image() -> None:
    """A cools from 60 to 40 degC while the others warm: it stays above the room."""
    rows = 60.0 + (_heat_up(200) - 22.0)
    rows[50:, 0] = np.maximum(rows[50, 0] - 0.2 * np.arange(150), 40.0)
    assert _mirror_after(rows) == {}


def test_a_thermocouple_that_always_reads_low_is_no_mirror_image() -> None:
    """1.5 K low, the limit of class 1 (IEC 60584-1), through a heat-up."""
    rows = _heat_up(300)
    rows[:, 1] -= 1.5
    assert _mirror_after(rows) == {}


def test_neighbours_are_asked_by_distance_and_liars_are_not_asked() -> None:
    """C lies as far from A as from B; without A it has only B to go by."""
    quiet = _quiet()
    both = from_neighbours(quiet, np.array([10.0, 20.0, np.nan]), frozenset())
    assert both[2] == pytest.approx(15.0)
    one = from_neighbours(quiet, np.array([10.0, 20.0, np.nan]), frozenset({0}))
    assert one[2] == pytest.approx(20.0)


def test_a_cause_that_is_switched_off_is_not_looked_for() -> None:
    """[causes] off = ["sensor reversed"]."""
    quiet = _quiet()
    seen = watched_plate.observed(quiet, np.array([120.0, 120.0, -76.0]))
    found = {}
    for off in ((), (Cause.SENSOR_REVERSED.value,)):
        plain = begin(quiet)
        for k in range(10):
            plain = watch(quiet, plain, T0 + k * TICK_US, TICK_US, seen, None, {}, off)
        found[off] = set(plain.found.values())
    assert found == {(): {Cause.SENSOR_REVERSED}, (Cause.SENSOR_REVERSED.value,): set()}


def _noisy_after(readings: Array) -> dict[int, int]:
    """Ticks after which each thermocouple is said to jump about."""
    quiet, found = _quiet(), {}
    jumps = no_jumps(quiet)
    for k, row in enumerate(readings):
        jumps = follow(quiet, jumps, row)
        for sensor in jumps.noisy:
            found.setdefault(sensor, k)
    return found


def test_ten_times_the_noise_is_found_within_two_minutes() -> None:
    """Bad ground or a loose terminal: target 2 min."""
    rng = np.random.default_rng(6)
    readings = _readings(200, 0.05, rng)
    readings[100:, 2] += 1.0 * rng.standard_normal(100)
    found = _noisy_after(readings)
    assert list(found) == [2]
    assert (found[2] - 100) * 2.0 <= 120.0


def test_steps_and_steep_ramps_are_no_noise() -> None:
    """A thermocouple that jumps by 20 K once, one that climbs 2 K/s, and a day of soak."""
    readings = _readings(43_200, 0.0, np.random.default_rng(7))
    readings[500:, 0] += 20.0
    readings[600:700, 1] += 4.0 * np.arange(100)
    readings[700:, 1] += 400.0
    assert _noisy_after(readings) == {}


def _jumped_after(readings: Array) -> dict[int, int]:
    """Ticks after which each thermocouple is said to have jumped."""
    quiet, found = _quiet(), {}
    levels = no_levels(quiet)
    for k, row in enumerate(readings):
        levels = compare(quiet, levels, row, 2.0)
        for sensor in levels.jumped:
            found.setdefault(sensor, k)
    return found


@pytest.mark.parametrize("step_K", [-20.0, -5.0, 5.0, 20.0])
def test_a_step_of_five_kelvin_is_found_within_ten_seconds(step_K: float) -> None:
    """Both ways, in a ramp."""
    readings = _readings(200, 0.05, np.random.default_rng(8))
    readings[100:, 1] += step_K
    found = _jumped_after(readings)
    assert list(found) == [1]
    assert (found[1] - 100) * 2.0 <= 10.0


def test_a_single_spike_is_no_step() -> None:
    """One reading 30 K off, then as before."""
    readings = _readings(200, 0.0, np.random.default_rng(9))
    readings[100, 2] -= 30.0
    assert _jumped_after(readings) == {}


def test_the_hardest_cold_load_is_no_step() -> None:
    """The plate under the thermocouple falls by 2 K/s from one instant on, seen through its
    lag of 5 s; and a day of soak."""
    rng = np.random.default_rng(10)
    t = np.arange(43_200) * 2.0 - 200.0
    lagged = np.where(t > 0, t - 5.0 * -np.expm1(-np.maximum(t, 0.0) / 5.0), 0.0)
    since = np.maximum(t - 20.0, 0.0)
    stopped = np.where(since > 0, since - 5.0 * -np.expm1(-since / 5.0), 0.0)
    fallen = 2.0 * (lagged - stopped)
    readings = _readings(43_200, 0.0, rng)
    readings[:, 0] -= fallen
    assert _jumped_after(readings) == {}


def test_the_largest_bend_grows_with_the_tick_and_shrinks_with_the_lag() -> None:
    """2 K/s for 2 s through 5 s of lag: 1.5 * 4 (1 - exp(-0.4)) = 1.98 K."""
    assert largest_bend_K(_quiet(), 2.0) == pytest.approx(6.0 * (1 - np.exp(-0.4)))
