"""The demonstration, as a visitor starts it."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest
from live_plate import count

pytest.importorskip("iotcore", reason="needs the extra platewatch[demo]")


def test_the_demo_tells_truth_and_alarm_and_ends_by_itself(tmp_path: Path) -> None:
    """Three times the usual speed: the incident, the alarm before the truth passes, a record."""
    done = subprocess.run(
        [
            *(sys.executable, "-m", "platewatch", "demo", "zone-stays-on"),
            *("--speed", "30", "--no-screen", "--data", str(tmp_path / "data")),
        ],
        capture_output=True,
        text=True,
        timeout=110,
        env={**os.environ, "PYTHONUNBUFFERED": "1"},
    )
    assert done.returncode == 0, done.stderr
    told = done.stdout
    assert "truth: zone Z5 stays on at full power" in told
    assert told.index(" peak-coming product: ") < told.index("truth: true peak passes")
    assert "before the truth passed it" in told
    assert "Traceback" not in told + done.stderr
    (record,) = (tmp_path / "data").glob("*.sqlite")
    assert count(record, "peak") > 500
