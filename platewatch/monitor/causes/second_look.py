"""The causes that the bank suspects, looked at with all their freedom."""

from __future__ import annotations

import numpy as np

from platewatch.monitor.causes.bank_model import Model, State
from platewatch.monitor.causes.catalogue import Cause, Family, prior_rate
from platewatch.monitor.causes.evidence import (
    DAY_S,
    Finding,
    spacing_ticks,
)
from platewatch.monitor.causes.refine import (
    FAMILY_OF,
    NEAR,
    Evidence,
    Fit,
    columns_of,
    fit,
    reads_low,
)
from platewatch.monitor.causes.signatures import Bank
from platewatch.monitor.causes.weighing import SUSPECT_CAUSES

LOOKED_AT = 8  # findings of the bank that get a second look
# Two causes together are tried where the best single one leaves this much unexplained.
LEFT_SHARE = 0.03
LEFT_LEAST = 60.0
Parts = tuple[tuple[Cause, str], ...]


def second_look(model: Model, bank: Bank, found: list[Finding], state: State) -> list[Fit]:
    """The best fits of the leading findings, and of two causes together where one is not
    enough; at most one fit for each cause and subject.

    What was credible a moment ago is looked at again with its own onset, so that a cause
    does not come and go with the onsets that happen to be tried.
    """
    assert state.seen is not None
    seen = state.seen
    leading = _varied(sorted(found, key=lambda f: -f.log_odds))[:LOOKED_AT]
    top = leading[0]
    longest = min(len(seen), bank.ages) - 1
    fits: dict[Parts, Fit] = {}
    evidence = Evidence(bank, seen)

    def look(finding: Finding, age: int) -> None:
        if 0 <= age <= longest:
            columns = columns_of(bank, finding.cause, finding.subject, finding.x_m, finding.y_m)
            parts = [(finding.cause, finding.subject)]
            _keep(bank, fits, fit(evidence, parts, columns, age, _log_prior(model, finding.cause)))

    for finding in leading:
        look(finding, top.age)
    for finding in leading[:3]:
        if finding.age != top.age:
            look(finding, finding.age)
    for view in state.views:
        age = round((state.at_us - view.onset_us) / model.tick_us)
        if 0 <= age <= longest:
            columns = np.concatenate(
                [columns_of(bank, c, s, view.x_m, view.y_m) for c, s in view.parts]
            )
            prior = sum(_log_prior(model, c) for c, _ in view.parts)
            _keep(bank, fits, fit(evidence, list(view.parts), columns, age, prior))
    best = max(fits.values(), key=lambda f: f.evidence, default=None)
    if best is not None:
        spacing = spacing_ticks(model.tick_s)
        winner = next((f for f in leading if (f.cause, f.subject) == best.parts[0]), None)
        for age in (best.age - spacing, best.age + spacing):
            if winner is not None and len(best.parts) == 1:
                look(winner, age)
        _pairs(fits, max(fits.values(), key=lambda f: f.evidence), evidence)
    return list(fits.values())


def apart(fits: list[Fit], bank: Bank) -> list[Fit]:
    """Of several fits of one source at one place, or of one loose or drifting thermocouple,
    only the best."""
    kept: list[Fit] = []
    for f in sorted(fits, key=lambda f: -f.evidence):
        suspect = f.cause in SUSPECT_CAUSES and len(f.parts) == 1
        if suspect and any(g.cause in SUSPECT_CAUSES and g.subject == f.subject for g in kept):
            continue
        same = [
            g
            for g in kept
            if [c for c, _ in g.parts] == [c for c, _ in f.parts]
            and FAMILY_OF[f.cause] is Family.SOURCE
            and np.hypot(g.x_m - f.x_m, g.y_m - f.y_m) <= 2 * NEAR * bank.scale_m
        ]
        if not same:
            kept.append(f)
    return kept


def _varied(leading: list[Finding]) -> list[Finding]:
    """The leaders, but no more than two of one family at a time come first."""
    count: dict[Family, int] = {}
    first: list[Finding] = []
    later: list[Finding] = []
    for finding in leading:
        family = FAMILY_OF[finding.cause]
        count[family] = count.get(family, 0) + 1
        (first if count[family] <= 2 else later).append(finding)
    return first + later


def _keep(bank: Bank, fits: dict[Parts, Fit], new: Fit) -> None:
    if not reads_low(bank, new):
        return
    old = fits.get(new.parts)
    if old is None or new.evidence > old.evidence:
        fits[new.parts] = new


def _log_prior(model: Model, cause: Cause) -> float:
    """Per onset tried, for one subject of this cause."""
    plate = model.quiet.plate
    subjects = {
        Family.ZONE: len(plate.zones),
        Family.SENSOR: len(plate.sensors),
        Family.SOURCE: len(plate.zones) or 4,
        Family.LOSS: 5,
        Family.BLOCK: len({s.junction_block for s in plate.sensors}),
    }[FAMILY_OF[cause]]
    spacing_s = spacing_ticks(model.tick_s) * model.tick_s
    rate = prior_rate(model.options, cause)
    return float(np.log(max(rate, 1e-12) * spacing_s / DAY_S / max(subjects, 1)))


def _pairs(fits: dict[Parts, Fit], best: Fit, evidence: Evidence) -> None:
    """A sensor fault together with a physical cause, where one alone leaves too much."""
    left = evidence.available(best.age) - best.evidence
    if left < max(LEFT_LEAST, LEFT_SHARE * best.evidence):
        return
    single = sorted(fits.values(), key=lambda f: -f.evidence)
    sensors = [f for f in single if FAMILY_OF[f.cause] is Family.SENSOR and len(f.parts) == 1][:2]
    others = [f for f in single if FAMILY_OF[f.cause] is not Family.SENSOR and len(f.parts) == 1][
        :2
    ]
    for s in sensors:
        for o in others:
            columns = np.concatenate((o.columns, s.columns))
            prior = s.log_prior + o.log_prior
            both = fit(evidence, [*o.parts, *s.parts], columns, best.age, prior)
            _keep(evidence.bank, fits, both)
