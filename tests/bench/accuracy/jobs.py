"""The runs of the bench, one per seed, spread over processes."""

from __future__ import annotations

import multiprocessing
import os
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import TypeVar

from sim_sensors.batches import Batch, batch
from tests.bench.accuracy.plants import Case, drawn_case, field_case
from tests.bench.accuracy.watching import Trace, Watch

PEAK_LIMIT_DEGC = 135.0  # alarm limit of the steel table
HOT_START_S = 5400.0
AWAKE_S = 300.0  # causes and forecast run so long before an incident
INCIDENTS = {  # seconds after the incident until a batch has told all
    "cold-load": 1500.0,
    "zone-stays-on": 900.0,
    "zone-not-heating": 1500.0,
    "loose-sensor": 1200.0,
}
FROM_THE_START = {"reversed-sensor": 2700.0}
QUIET_AFTER_S = 2400.0  # an announced load is watched for so long

Argument = TypeVar("Argument")
Result = TypeVar("Result")


@dataclass(frozen=True)
class Run:
    """Any seed of any case: what was seen, and of which batch."""

    case: str
    batch: str
    seed: int
    trace: Trace
    incident_s: float | None = None


@dataclass(frozen=True)
class FieldJob:
    plate: str
    seed: int
    end_s: float | None = None


def field_run(job: FieldJob) -> Run:
    """A clean batch beside interpolation and the full-order filter; no forecast."""
    case = field_case(job.plate)
    watch = Watch.begin(case.monitor, case.simulation(job.seed), compared=True)
    watch.follow(job.end_s or case.until_s)
    return Run(case.name, "clean", job.seed, watch.trace)


@dataclass(frozen=True)
class DrawnJob:
    plate: str
    seed: int
    alarms: bool
    end_s: float | None = None


def drawn_run(job: DrawnJob) -> Run:
    """A clean batch on a drawn plant; through the whole pipeline its alarms count."""
    case = drawn_case(job.plate)
    watch = Watch.begin(case.monitor, case.simulation(job.seed))
    run = watch.until if job.alarms else watch.follow
    run(job.end_s or case.until_s)
    return Run(case.name, "clean", job.seed, watch.trace)


@dataclass(frozen=True)
class IncidentJob:
    """Incidents that share one hot start, all of one seed."""

    case: Case
    seed: int
    batches: tuple[str, ...]
    after_s: float | None = None


def incident_runs(job: IncidentJob) -> list[Run]:
    hot = [name for name in job.batches if name not in FROM_THE_START]
    runs = [_from_the_start(job, name) for name in job.batches if name in FROM_THE_START]
    if hot:
        start = hot_start(job.case, job.seed, HOT_START_S)
        runs += [_incident(job, start, name) for name in hot]
    return runs


def hot_start(case: Case, seed: int, at_s: float) -> Watch:
    """A clean batch up to a moment: the quiet filter alone, then the pipeline for a while."""
    watch = Watch.begin(case.monitor, case.simulation(seed)).follow(at_s - AWAKE_S)
    return watch.until(at_s)


def _incident(job: IncidentJob, start: Watch, name: str) -> Run:
    watch = start.fork()
    what: Batch = batch(name, watch.run.plant.plate)
    watch.run.add(*what.faults)
    assert what.incident_s is not None
    after = job.after_s or INCIDENTS.get(name, QUIET_AFTER_S)
    watch.until(what.incident_s + after)
    return Run(job.case.name, name, job.seed, watch.trace, what.incident_s)


def _from_the_start(job: IncidentJob, name: str) -> Run:
    watch = Watch.begin(job.case.monitor, job.case.simulation(job.seed))
    what: Batch = batch(name, watch.run.plant.plate)
    watch.run.add(*what.faults)
    watch.until(FROM_THE_START[name])
    return Run(job.case.name, name, job.seed, watch.trace, what.incident_s)


def spread(
    work: Callable[[Argument], Result], jobs: Iterable[Argument], processes: int
) -> list[Result]:
    """All results in the order of the jobs."""
    jobs = list(jobs)
    if processes <= 1 or len(jobs) <= 1:
        return [work(job) for job in jobs]
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    context = multiprocessing.get_context("spawn")
    with context.Pool(min(processes, len(jobs))) as pool:
        return pool.map(work, jobs, chunksize=1)
