"""All scenarios of one plant, watched one after the other."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tests.bench.accuracy.watching import Watch
from tests.bench.causes.scenarios import SCENARIOS, case_of
from tests.bench.causes.scoring import Score, Scored

AWAKE_S = 200.0  # causes listen so long before an incident
ONSETS_S = 60.0  # the incident begins at a time drawn from so long


@dataclass(frozen=True)
class Job:
    """All scenarios of one plant: those in soak share one heat-up."""

    plate: str
    seed: int
    scenarios: tuple[str, ...]


def score(job: Job) -> list[Scored]:
    """Watch one plant through each scenario, each from a copy of the same steady state."""
    case = case_of(job.plate)
    plate = case.description.plate
    found, warm = [], None
    for name in job.scenarios:
        scenario = SCENARIOS[name]
        rng = np.random.default_rng([job.seed, sum(map(ord, name))])
        if scenario.cold:
            watch, onset = Watch.begin(case.monitor, case.simulation(job.seed)), 0.0
        else:
            if warm is None:
                start = Watch.begin(case.monitor, case.simulation(job.seed))
                warm = start.follow(case.until_s - AWAKE_S).until(case.until_s)
            watch = warm.fork(job.seed)
            onset = case.until_s + 2.0 * np.floor(rng.uniform(0, ONSETS_S / 2))
        event = scenario.draw(plate, rng, onset)
        found.append(Score(watch, event, onset).run(job.plate, name, job.seed, scenario.watch_s))
    return found
