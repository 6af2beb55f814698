"""The clocks that are passed in."""

from __future__ import annotations

import time

import pytest

from platewatch.clock import ScaledClock, SystemClock

AT = 1_772_352_000_000_000


def test_the_demonstration_runs_faster_than_the_wall() -> None:
    """At speed 60 a minute of plate time passes in a second, in both of its readings."""
    clock = ScaledClock(AT, time.monotonic() - 1.0, 60.0)
    begin = time.monotonic()
    utc_us, monotonic = clock.utc_us(), clock.monotonic()
    slack = 60 * (time.monotonic() - begin) + 1e-3
    assert (utc_us - AT) / 1e6 == pytest.approx(60.0, abs=slack + 60 * 0.05)
    assert monotonic - clock.origin_monotonic == pytest.approx((utc_us - AT) / 1e6, abs=slack)


def test_two_processes_with_the_same_three_numbers_read_the_same_time() -> None:
    """The simulated plate and the daemon of the demonstration share one clock."""
    origin = time.monotonic()
    first, second = ScaledClock(AT, origin, 10.0), ScaledClock(AT, origin, 10.0)
    before, between, after = first.utc_us(), second.utc_us(), first.utc_us()
    assert before <= between <= after


def test_the_system_clock_counts_microseconds_utc() -> None:
    """Records are integer microseconds UTC."""
    assert abs(SystemClock().utc_us() - time.time() * 1e6) < 1e6
    assert type(SystemClock().utc_us()) is int
