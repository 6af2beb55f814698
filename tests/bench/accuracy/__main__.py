"""Command line of the accuracy bench: prints markdown tables and how they were made."""

from __future__ import annotations

import argparse
import shlex
import sys
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from tests.bench.accuracy import tables
from tests.bench.accuracy.jobs import (
    FROM_THE_START,
    INCIDENTS,
    DrawnJob,
    FieldJob,
    IncidentJob,
    drawn_run,
    field_run,
    incident_runs,
    spread,
)
from tests.bench.accuracy.plants import (
    DEVELOPMENT,
    PLATES,
    REPORTING,
    drawn_case,
    field_case,
)

HEAT_UP_S = {"steel": 3000.0, "aluminium": 2400.0, "round": 1800.0}


@dataclass(frozen=True)
class Wanted:
    """What to run: plates, seeds and how long (short: few seeds, shortened batches)."""

    plates: tuple[str, ...]
    first_seed: int
    count: int | None
    short: bool
    processes: int

    def seeds(self, usual: int) -> range:
        count = self.count or (2 if self.short else usual)
        return range(self.first_seed, self.first_seed + count)


def field(wanted: Wanted) -> str:
    jobs = [FieldJob(p, s, _end(wanted, p)) for p in wanted.plates for s in wanted.seeds(20)]
    return tables.field_table(spread(field_run, jobs, wanted.processes))


def coverage(wanted: Wanted) -> str:
    jobs = [DrawnJob(p, s, False, _end(wanted, p)) for p in wanted.plates for s in wanted.seeds(20)]
    return tables.coverage_table(spread(drawn_run, jobs, wanted.processes))


def alarms(wanted: Wanted) -> str:
    """Heat-ups of drawn plants, and a load that was announced, with every alarm judged."""
    jobs = [DrawnJob(p, s, True, HEAT_UP_S[p]) for p in wanted.plates for s in wanted.seeds(50)]
    runs = spread(drawn_run, jobs, wanted.processes)
    if "steel" in wanted.plates:
        announced = [
            IncidentJob(case, s, ("announced-load",), 300.0 if wanted.short else None)
            for case, usual in ((field_case("steel"), 10), (drawn_case("steel"), 10))
            for s in wanted.seeds(usual)[:usual]
        ]
        runs += [run for some in spread(incident_runs, announced, wanted.processes) for run in some]
    return tables.alarm_table(runs)


def incidents(wanted: Wanted) -> str:
    names = ("zone-stays-on",) if wanted.short else (*INCIDENTS, *FROM_THE_START)
    jobs = [IncidentJob(field_case("steel"), s, names) for s in wanted.seeds(10)]
    runs = [run for some in spread(incident_runs, jobs, wanted.processes) for run in some]
    return tables.incident_table(runs)


def _end(wanted: Wanted, plate: str) -> float | None:
    return HEAT_UP_S[plate] + 600.0 if wanted.short else None


PARTS: dict[str, Callable[[Wanted], str]] = {
    "field": field,
    "coverage": coverage,
    "alarms": alarms,
    "incidents": incidents,
}


def parser() -> argparse.ArgumentParser:
    made = argparse.ArgumentParser(
        prog="python -m tests.bench.accuracy",
        description="Accuracy of the inferred field, its band and its alarms on simulated plants.",
        epilog="example: python -m tests.bench.accuracy field --plates aluminium --seeds 20",
    )
    made.add_argument("parts", nargs="*", metavar="PART", help=f"{', '.join(PARTS)}; default all")
    made.add_argument("--plates", nargs="+", choices=PLATES, default=list(PLATES))
    made.add_argument("--seeds", type=int, help="how many; default 20, 50 for alarms, 10 incidents")
    made.add_argument("--first-seed", type=int, help="instead of the reporting seeds from 1000")
    made.add_argument("--development", action="store_true", help="seeds from 0: for tuning only")
    made.add_argument("--short", action="store_true", help="two seeds, shortened batches")
    made.add_argument("--processes", type=int, default=2)
    return made


def main(arguments: Sequence[str]) -> int:
    made = parser()
    given = made.parse_args(arguments)
    unknown = [part for part in given.parts if part not in PARTS]
    if unknown:
        made.error(f"no part {', '.join(unknown)}; choose from {', '.join(PARTS)}")
    usual = DEVELOPMENT if given.development else REPORTING
    first = usual if given.first_seed is None else given.first_seed
    wanted = Wanted(tuple(given.plates), first, given.seeds, given.short, given.processes)
    print(f"Made by: {shlex.join(('python', '-m', 'tests.bench.accuracy', *arguments))}")
    kind = "development" if first < REPORTING else "reporting"
    print(f"First seed {first} ({kind} seeds).")
    for part in given.parts or PARTS:
        began = time.monotonic()
        print(f"\n### {part}\n\n{PARTS[part](wanted)}")
        print(f"\n({time.monotonic() - began:.0f} s)", flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
