"""Probabilities of the causes that remain, and of the pair that stays open."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from platewatch.monitor.causes.catalogue import Cause, Family
from platewatch.monitor.causes.refine import (
    FAMILY_OF,
    NEAR,
    Fit,
)
from platewatch.monitor.causes.signatures import Bank
from platewatch.types import Array

DOUBTFUL_PAIR = 10.0
DOUBTFUL = 100.0  # nats of evidence above which misfit, not noise, decides between causes
OPEN_FLOOR = 0.1
# A steady drift has no load's course: a load that explains this much less of the evidence
# does not explain it as well, and the pair is less open, though never closed.
DRIFT_AHEAD = 0.2
DRIFT_FLOOR = 0.03
RELIABILITY = 0.95  # of an answer
SUSPECT_CAUSES = (Cause.SENSOR_LOOSE, Cause.SENSOR_DRIFT)


def weigh(fits: list[Fit], pairs: Sequence[tuple[int, int, float]] = ()) -> tuple[Array, float]:
    """Probabilities of the fits and of none.

    That something is the matter follows from the evidence as it is; which cause it is,
    from its differences, divided by 1 + evidence / DOUBTFUL: where the response is huge, a
    misfit that all share says little about which.  pairs: load, loose thermocouple and
    the odds between them by the other thermocouples; neither falls below OPEN_FLOOR.
    """
    if not fits:
        return np.zeros(0), 1.0
    evidence = np.array([f.evidence for f in fits])
    prior = np.array([f.log_prior for f in fits])
    any_cause = 1 / (1 + np.exp(-np.clip((evidence + prior).max(), -50, 50)))
    shared = evidence.max()
    doubt = 1 + max(float(shared), 0.0) / DOUBTFUL
    among = np.exp((evidence - shared) / doubt + prior - prior.max())
    among /= among.sum()
    for load, loose, odds in pairs:
        both = among[load] + among[loose]
        lean = odds / (1 + abs(odds) / DOUBTFUL_PAIR) + prior[load] - prior[loose]
        floor = OPEN_FLOOR
        if fits[loose].cause is Cause.SENSOR_DRIFT:
            ahead = evidence[loose] - evidence[load]
            if ahead > DRIFT_AHEAD * evidence[loose]:
                lean, floor = lean - ahead / doubt, DRIFT_FLOOR
        share = np.clip(1 / (1 + np.exp(-np.clip(lean, -50, 50))), floor, 1 - OPEN_FLOOR)
        among[load], among[loose] = both * share, both * (1 - share)
    return np.asarray(any_cause * among), float(1 - any_cause)


def open_pairs(fits: list[Fit], bank: Bank) -> list[tuple[int, int]]:
    """A load near a thermocouple and that thermocouple loose: not to be told apart early."""
    found: list[tuple[int, int]] = []
    for i, load in enumerate(fits):
        for j, loose in enumerate(fits):
            if load.parts[0][0] is not Cause.COLD_LOAD or len(load.parts) > 1:
                continue
            if loose.parts[0][0] not in SUSPECT_CAUSES or len(loose.parts) > 1:
                continue
            if any(j == other for _, other in found) or any(i == other for other, _ in found):
                continue
            at = bank.patterns[bank.column_pattern[loose.columns[0]]]
            near = np.hypot(at.x_m - load.x_m, at.y_m - load.y_m) <= 2 * NEAR * bank.scale_m
            if near:
                found.append((i, j))
    return found


def says_load(f: Fit) -> float:
    """+1 for a load alone, -1 for a thermocouple fault alone, else 0."""
    if len(f.parts) > 1:
        return 0.0
    if f.cause is Cause.COLD_LOAD:
        return 1.0
    return -1.0 if FAMILY_OF[f.cause] is Family.SENSOR else 0.0
