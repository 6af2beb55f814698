"""A plate watched for weeks must not need more memory than one watched for an hour."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.bench.bench_memory import SAMPLE_EVERY, spread, watch


@pytest.mark.timeout(120)
@pytest.mark.skipif(not Path("/proc/self/status").exists(), reason="needs Linux's /proc")
def test_memory_is_flat_while_a_plate_is_watched() -> None:
    """Design, section 10a: resident memory flat; within 5 % after warm-up, 3,000 ticks of 2 s
    through estimator, forecast and record (`bench_memory.py` runs the whole day)."""
    found = watch(3000, causes=False, heated_s=600.0)
    assert len(found) == 3000 // SAMPLE_EVERY
    assert spread(found, warm=2) <= 0.05


def test_a_leak_would_be_seen() -> None:
    """The measure itself: 20 % more memory over the run is no flat line."""
    leaking = [200.0 + 40.0 * n / 10 for n in range(11)]
    assert spread(leaking, warm=1) > 0.05
