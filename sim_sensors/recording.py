"""A simulated batch as files: the wide log, the truth beside it, fields on request."""

from __future__ import annotations

import csv
import json
from collections.abc import Iterable, Iterator
from contextlib import ExitStack
from pathlib import Path

import numpy as np

from platewatch.errors import StorageError
from platewatch.units import iso
from sim_sensors.lattice import Lattice
from sim_sensors.simulation import Sample


def stamp_us(start_us: int, at_s: float) -> int:
    return start_us + round(at_s * 1e6)


def record(
    samples: Iterable[Sample],
    log: Path,
    *,
    start_us: int,
    truth: Path | None = None,
    fields: tuple[Path, float, Lattice] | None = None,
) -> int:
    """Write a batch; how many samples it had.

    log: first column `at`, then the names as on the bus, `batch` last; empty is missing
    fields: file (npz), seconds between two fields, lattice that gives them their places

    Raises StorageError where a file cannot be written.
    """
    kept: list[tuple[float, object]] = []
    count = 0
    try:
        with ExitStack() as stack:
            lines = csv.writer(stack.enter_context(log.open("w", newline="", encoding="utf-8")))
            true_lines = (
                csv.writer(stack.enter_context(truth.open("w", newline="", encoding="utf-8")))
                if truth
                else None
            )
            for sample in samples:
                if not count:
                    lines.writerow(["at", *sample.readings, "batch"])
                at = iso(stamp_us(start_us, sample.at_s))
                for row in _log_rows(at, sample):
                    lines.writerow(row)
                if true_lines is not None:
                    if not count:
                        true_lines.writerow(_truth_header(sample))
                    true_lines.writerow(_truth_row(at, sample))
                if fields and (not kept or sample.at_s >= kept[-1][0] + fields[1] - 1e-9):
                    kept.append((sample.at_s, sample.truth.field))
                count += 1
        if fields:
            _write_fields(fields[0], fields[2], kept, start_us)
    except OSError as error:
        raise StorageError(
            f"{error.filename or log}: cannot be written ({error.strerror}); "
            "choose a folder that exists and that you may write to"
        ) from None
    return count


def batch_objects(at: str, sample: Sample) -> Iterator[str]:
    """The sample's batch events as JSON objects with their time."""
    for event in sample.events:
        yield json.dumps({"at": at, **event})


def _log_rows(at: str, sample: Sample) -> Iterator[list[object]]:
    """One row; a second event at the same instant gets a row of its own."""
    values = ["" if np.isnan(v) else f"{v:.10g}" for v in sample.readings.values()]
    events = list(batch_objects(at, sample)) or [""]
    yield [at, *values, events[0]]
    for event in events[1:]:
        yield [at, *([""] * len(values)), event]


def _truth_header(sample: Sample) -> list[str]:
    watts = [f"zone/{zone}/W" for zone in sample.truth.watts]
    return ["at", "peak_degC", "x_mm", "y_mm", *watts, "hottest_sensor", "hottest_degC"]


def _truth_row(at: str, sample: Sample) -> list[object]:
    true = sample.truth
    place = f"{true.peak_x_m * 1e3:.1f}", f"{true.peak_y_m * 1e3:.1f}"
    watts = [f"{w:.3f}" for w in true.watts.values()]
    hottest = true.hottest_sensor, f"{true.hottest_degC:.3f}"
    return [at, f"{true.peak_degC:.4f}", *place, *watts, *hottest]


def _write_fields(
    path: Path, lattice: Lattice, kept: list[tuple[float, object]], start_us: int
) -> None:
    """x_m, y_m (n,), on_plate (n,), at_s (k,), at_us (k,), degC (k, n)."""
    with path.open("wb") as out:
        np.savez_compressed(
            out,
            x_m=lattice.x,
            y_m=lattice.y,
            on_plate=lattice.inside,
            at_s=np.array([at for at, _ in kept]),
            at_us=np.array([stamp_us(start_us, at) for at, _ in kept]),
            degC=np.array([field for _, field in kept], dtype=np.float32),
        )
