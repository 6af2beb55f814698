"""Memory over a day of a plate's traffic, replayed through session and record.

Run: python -m tests.bench.bench_memory [TICKS] [--causes]     (43,200 ticks of 2 s are a day)

The demonstration table heats up once and then holds: readings of the simulated clean batch,
the hold repeated.  Resident memory is sampled every 500 ticks; after the warm-up it must stay
within 5 % of its mean.  Rows of a day go to a record in a temporary folder.
"""

from __future__ import annotations

import sys
import tempfile
import time
from collections.abc import Iterator
from itertools import chain, cycle, islice
from pathlib import Path

from platewatch import compose
from platewatch.types import Outcome, Reading
from sim_sensors.simulation import Plant, simulate

DEMO = Path(__file__).parents[2] / "config" / "demo-table.toml"
DAY, TICK_US, COMMIT_EVERY = 43_200, 2_000_000, 30
HEATED_S, PIECE_S = 3600.0, 1200.0  # of the clean batch: at temperature, and the repeated piece
SAMPLE_EVERY = 500
START_US = 1_772_352_000_000_000


def resident_MB() -> float:
    """What the process holds now (Linux)."""
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith("VmRSS"):
            return float(line.split()[1]) / 1024
    return float("nan")


def traffic(description: compose.Description, heated_s: float) -> Iterator[list[Reading]]:
    """The readings of each tick, without end."""
    samples = list(simulate(Plant(description.plate), "clean", until_s=heated_s + PIECE_S))
    hold = [s.readings for s in samples if s.at_s > heated_s]
    heat_up = [s.readings for s in samples if s.at_s <= heated_s]
    for n, values in enumerate(chain(heat_up, cycle(hold))):
        at_us = START_US + n * TICK_US
        yield [Reading(at_us, name, v, at_us) for name, v in values.items() if v == v]


def watch(ticks: int, *, causes: bool, heated_s: float = HEATED_S) -> list[float]:
    """MB resident, every SAMPLE_EVERY ticks."""
    description = compose.describe(DEMO)
    monitor = compose.build_monitor(description, causes=causes)
    units = compose.build_routes(description).units
    readings = traffic(description, heated_s)
    found: list[float] = []
    with tempfile.TemporaryDirectory() as folder, compose.open_store(f"{folder}/r.sqlite") as store:
        session = compose.Session(monitor)
        store.start_run("table-1", START_US, "bench", description.sha256)
        waiting: list[Reading] = []
        outcomes: list[Outcome] = []
        for n, row in enumerate(islice(readings, ticks), 1):
            waiting += [session.take(reading) for reading in row]
            outcomes += session.close()
            if n % COMMIT_EVERY == 0:
                store.write("table-1", outcomes, waiting, units)
                waiting, outcomes = [], []
            if n % SAMPLE_EVERY == 0:
                found.append(resident_MB())
    return found


def spread(found: list[float], warm: int) -> float:
    """Largest deviation from the mean after the first `warm` samples, as a share of it."""
    later = found[warm:]
    mean = sum(later) / len(later)
    return max(abs(value - mean) for value in later) / mean


def main() -> int:
    words = [word for word in sys.argv[1:] if word != "--causes"]
    ticks = int(words[0]) if words else DAY
    began = time.perf_counter()
    found = watch(ticks, causes="--causes" in sys.argv)
    took = time.perf_counter() - began
    warm = max(1, len(found) // 10)
    shown = [found[0], *found[warm :: max(1, len(found) // 8)], found[-1]]
    print(f"{ticks} ticks in {took:.0f} s; MB: {', '.join(f'{value:.1f}' for value in shown)}")
    share = spread(found, warm)
    print(f"after {warm * SAMPLE_EVERY} ticks within {100 * share:.1f} % of the mean, budget 5 %")
    return 0 if share <= 0.05 else 1


if __name__ == "__main__":
    sys.exit(main())
