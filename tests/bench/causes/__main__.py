"""Command line of the scoring program: prints markdown tables and how they were made."""

from __future__ import annotations

import argparse
import pickle
import shlex
import sys
import time
from collections.abc import Sequence
from pathlib import Path

from tests.bench.accuracy.jobs import spread
from tests.bench.accuracy.plants import DEVELOPMENT, PLATES, REPORTING
from tests.bench.causes import tables
from tests.bench.causes.jobs import Job, score
from tests.bench.causes.scenarios import SCENARIOS

SHORT = ("none", "hot-spot", "cold-load", "fast-runaway", "stuck")


def parser() -> argparse.ArgumentParser:
    made = argparse.ArgumentParser(
        prog="python -m tests.bench.causes",
        description="Scores of the named causes on simulated plants with drawn errors.",
        epilog="example: python -m tests.bench.causes --seeds 30 --processes 2",
    )
    made.add_argument("--scenarios", nargs="+", choices=list(SCENARIOS), metavar="NAME")
    made.add_argument("--plates", nargs="+", choices=PLATES, default=list(PLATES))
    made.add_argument("--seeds", type=int, help="how many; default 30, with --short 1")
    made.add_argument("--first-seed", type=int, help="instead of the reporting seeds from 1000")
    made.add_argument("--development", action="store_true", help="seeds from 0: for tuning only")
    made.add_argument("--short", action="store_true", help=f"one seed of {', '.join(SHORT)}")
    made.add_argument("--processes", type=int, default=2)
    made.add_argument("--keep", type=Path, help="file that the scored runs are written to")
    return made


def main(arguments: Sequence[str]) -> int:
    given = parser().parse_args(arguments)
    first = DEVELOPMENT if given.development else REPORTING
    first = first if given.first_seed is None else given.first_seed
    names = tuple(given.scenarios or (SHORT if given.short else SCENARIOS))
    count = given.seeds or (1 if given.short else 30)
    jobs = [Job(p, s, names) for s in range(first, first + count) for p in given.plates]
    began = time.monotonic()
    runs = [run for some in spread(score, jobs, given.processes) for run in some]
    if given.keep is not None:
        given.keep.write_bytes(pickle.dumps(runs))
    print(f"Made by: {shlex.join(('python', '-m', 'tests.bench.causes', *arguments))}")
    kind = "development" if first < REPORTING else "reporting"
    print(f"First seed {first} ({kind} seeds), {count} a plate.")
    print(f"{len(runs)} runs in {time.monotonic() - began:.0f} s.\n")
    for title, made in (
        ("Field, K RMS", tables.field_table(runs)),
        ("Hottest place, K RMS", tables.peak_table(runs)),
        ("Causes", tables.cause_table(runs)),
        ("Lead of peak-coming", tables.lead_table(runs)),
        ("All runs", tables.summary(runs)),
    ):
        print(f"### {title}\n\n{made}\n")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
