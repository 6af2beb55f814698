"""A short record of the demo table, made once by a replay."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from platewatch.cli import main

PLATE = Path(__file__).resolve().parents[3] / "config" / "demo-table.toml"
START_US = 1_772_352_000_000_000  # 2026-03-01T08:00:00Z
SENSORS = [f"sensor/T{n}" for n in range(1, 10)]
DUTIES = [f"zone/Z{n}/duty" for n in range(1, 7)]


def write_log(path: Path, rows: int, hottest_degC: float = 120.0) -> Path:
    """A wide log, a row every 2 s; T5 rises slowly from 120 degC to its hottest."""
    lines = [",".join(["at_us", *SENSORS, *DUTIES])]
    for row in range(rows):
        rise = (hottest_degC - 120.0) * row / max(rows - 1, 1)
        ripple = 0.1 * round(math.sin(row))
        readings = [120.0 + ripple + (rise if name == "sensor/T5" else 0.0) for name in SENSORS]
        cells = [str(START_US + 2_000_000 * row), *(f"{r:.1f}" for r in readings)]
        lines.append(",".join([*cells, *["0.25"] * len(DUTIES)]))
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


@pytest.fixture(scope="session")
def plate() -> str:
    return str(PLATE)


@pytest.fixture(scope="session")
def hot_record(tmp_path_factory: pytest.TempPathFactory) -> str:
    """A record in which T5 passed the alarm limit of 135 degC."""
    folder = tmp_path_factory.mktemp("record")
    log = write_log(folder / "hot.csv", 90, hottest_degC=139.0)
    record = folder / "hot.sqlite"
    assert main(["replay", str(PLATE), str(log), "--db", str(record)]) == 1
    return str(record)
