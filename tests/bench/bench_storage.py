"""Writer against raw sqlite3 executemany, side by side in one run.

Run: python tests/bench/bench_storage.py
Budget: at 120 rows a commit or more, at least 0.9 of the rate of raw sqlite3.
Both write the same rows with the same settings (WAL, synchronous FULL), one commit a batch,
in turns, so that a busy machine slows both. The raw side gets finished tuples; the writer
starts from `Reading` values and looks up channel numbers.
"""

from __future__ import annotations

import sqlite3
import statistics
import sys
import tempfile
import time
from pathlib import Path

from platewatch.adapters.storage import Store
from platewatch.adapters.storage_tables import insert_sql, reading
from platewatch.types import Reading

BUDGET = 0.9
ROUNDS = 200


def batch(n: int, rows: int) -> list[Reading]:
    per_tick = 12
    at = [(n * rows + i) // per_tick * 2_000_000 for i in range(rows)]
    return [Reading(at[i], f"sensor/T{i % per_tick}", 20.0 + i, at[i]) for i in range(rows)]


def raw_database(path: Path) -> sqlite3.Connection:
    Store.open(str(path)).close()
    connection = sqlite3.connect(path, isolation_level=None)
    connection.execute("PRAGMA synchronous=FULL")
    return connection


def tuples_of(readings: list[Reading]) -> list[tuple[object, ...]]:
    return [(r.at_us, i % 12 + 1, r.value, 0, r.seen_us) for i, r in enumerate(readings)]


def write_raw(connection: sqlite3.Connection, readings: list[Reading]) -> tuple[float, float]:
    """Seconds without and with making the tuples, which a program has to do somewhere."""
    began = time.perf_counter()
    rows = tuples_of(readings)
    started = time.perf_counter()
    connection.execute("BEGIN IMMEDIATE")
    connection.executemany(insert_sql(reading), rows)
    connection.execute("COMMIT")
    ended = time.perf_counter()
    return ended - started, ended - began


def write_store(store: Store, readings: list[Reading]) -> float:
    started = time.perf_counter()
    store.write("table", [], readings, {})
    return time.perf_counter() - started


def ratio(rows: int) -> float:
    """Rate of the writer over the rate of raw sqlite3, medians of one run."""
    with tempfile.TemporaryDirectory() as folder:
        raw = raw_database(Path(folder) / "raw.sqlite")
        with Store.open(f"{folder}/store.sqlite") as store:
            times = [both(raw, store, batch(n, rows), n % 2 == 0) for n in range(ROUNDS)]
        raw.close()
    raw_s, built_s, store_s = (statistics.median(column) for column in zip(*times[3:], strict=True))
    print(
        f"{rows:6d} rows a commit: raw {raw_s * 1e3:6.2f} ms, with its tuples "
        f"{built_s * 1e3:6.2f} ms, writer {store_s * 1e3:6.2f} ms; "
        f"ratio {raw_s / store_s:.2f} and {built_s / store_s:.2f}"
    )
    return raw_s / store_s


def both(
    raw: sqlite3.Connection, store: Store, readings: list[Reading], store_first: bool
) -> tuple[float, float, float]:
    if store_first:
        store_s = write_store(store, readings)
        return (*write_raw(raw, readings), store_s)
    return (*write_raw(raw, readings), write_store(store, readings))


def main() -> int:
    worst = min(ratio(rows) for rows in (120, 600, 3000))
    print(f"worst {worst:.2f}, budget {BUDGET}")
    return 0 if worst >= BUDGET else 1


if __name__ == "__main__":
    sys.exit(main())
