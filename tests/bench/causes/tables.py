"""Figures of many runs as markdown tables."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence

import numpy as np

from tests.bench.accuracy.tables import table
from tests.bench.causes.scoring import ASKED_S, OURS, QUIET, Glance, Scored, rms

DAY_S = 86400.0


def _groups(runs: Sequence[Scored]) -> dict[tuple[str, str], list[Scored]]:
    found: dict[tuple[str, str], list[Scored]] = {}
    for run in runs:
        found.setdefault((run.scenario, run.plate), []).append(run)
    return dict(sorted(found.items(), key=lambda item: (_order(runs, item[0][0]), item[0][1])))


def _order(runs: Sequence[Scored], scenario: str) -> int:
    return list(dict.fromkeys(run.scenario for run in runs)).index(scenario)


def field_table(runs: Sequence[Scored]) -> str:
    """RMS field error over all looks, by method, and its ratios."""
    head = ["scenario", "plate", "n", OURS, QUIET, "ratio", "best interpolator", "ratio"]
    rows = []
    for (scenario, plate), some in _groups(runs).items():
        looks = [g for r in some for g in r.glances]
        if not looks:
            continue
        by = {m: rms(g.field_K[m] for g in looks) for m in looks[0].field_K}
        others = {m: v for m, v in by.items() if m not in (OURS, QUIET)}
        best = min(others, key=lambda m: others[m])
        rows.append(
            [
                scenario,
                plate,
                f"{len(some)}",
                f"{by[OURS]:.2f}",
                f"{by[QUIET]:.2f}",
                f"{by[OURS] / by[QUIET]:.2f}",
                f"{best} {by[best]:.2f}",
                f"{by[OURS] / by[best]:.2f}",
            ]
        )
    return table(head, rows)


def _at(run: Scored, since_s: float) -> Glance | None:
    return next((g for g in run.glances if abs(g.since_s - since_s) < 1e-6), None)


def _median(values: Sequence[float | None]) -> str:
    """Of those that happened, with their number."""
    found = [v for v in values if v is not None and np.isfinite(v)]
    if not found:
        return "–"
    return f"{np.median(found):.0f} ({len(found)}/{len(values)})"


def peak_table(runs: Sequence[Scored]) -> str:
    """Error of the hottest place at 60 s and over all looks, place, coverage."""
    head = ["scenario", "plate", f"peak at 60 s {OURS}", QUIET, "all looks", QUIET]
    head += ["place, mm (median)", "in 90 %", "in 95 %"]
    rows = []
    for (scenario, plate), some in _groups(runs).items():
        looks = [g for r in some for g in r.glances]
        early = [g for r in some if (g := _at(r, 60.0)) is not None]
        last = [r.glances[-1].place_m * 1e3 for r in some if r.glances]
        rows.append(
            [scenario, plate]
            + [f"{rms(g.peak_K[m] for g in early):.1f}" for m in (OURS, QUIET)]
            + [f"{rms(g.peak_K[m] for g in looks):.1f}" for m in (OURS, QUIET)]
            + [_median(last)]
            + [f"{np.mean([g.covered[w] for g in looks]):.0%}" for w in (90, 95)]
        )
    rows.append(["all", "", "", "", "", "", "", *_pooled(runs)])
    return table(head, rows)


def _pooled(runs: Sequence[Scored]) -> list[str]:
    """Coverage by runs: each counts with the share of its looks."""
    found = []
    for width in (90, 95):
        shares = [np.mean([g.covered[width] for g in r.glances]) for r in runs if r.glances]
        found.append(f"{np.mean(shares):.0%}")
    return found


def cause_table(runs: Sequence[Scored]) -> str:
    """When the true cause was named, how probable it was, who was blamed wrongly."""
    head = ["scenario", "plate", "n", "suspected, s", "named, s"]
    head += [f"P(true) at {t:.0f} s" for t in ASKED_S]
    head += ["wrong and very likely", "alarms"]
    rows = []
    for (scenario, plate), some in _groups(runs).items():
        chances = []
        for t in ASKED_S:
            looks = [g.p_true for r in some if (g := _at(r, t)) is not None]
            chances.append(f"{np.mean(looks):.2f}" if looks else "–")
        wrong = Counter(cause for r in some for cause in {c for c, _ in r.false})
        raised = Counter(a for r in some for a in set(r.alarms))
        rows.append(
            [
                scenario,
                plate,
                f"{len(some)}",
                _median([r.suspected_s for r in some]),
                _median([r.named_s for r in some]),
                *chances,
                ", ".join(f"{c} x{n}" for c, n in wrong.items()) or "none",
                f"{sum(raised.values()) / len(some):.1f} a run",
            ]
        )
    return table(head, rows)


def lead_table(runs: Sequence[Scored]) -> str:
    """From the first `peak-coming` to the true crossing, and to a thermocouple's."""
    head = ["scenario", "plate", "crossed", "announced", "lead over truth, s", "least"]
    head += ["lead over first thermocouple, s"]
    rows = []
    for (scenario, plate), some in _groups(runs).items():
        crossed = [r for r in some if r.crossed_s is not None]
        if not crossed:
            continue
        lead = [r.crossed_s - r.coming_s for r in crossed if r.crossed_s and r.coming_s is not None]
        over = [
            r.sensor_crossed_s - r.coming_s
            for r in crossed
            if r.sensor_crossed_s is not None and r.coming_s is not None
        ]
        announced = sum(v > 0 for v in lead)
        rows.append(
            [
                scenario,
                plate,
                f"{len(crossed)}",
                f"{announced}",
                _median(lead),
                f"{min(lead):.0f}" if lead else "–",
                _median(over),
            ]
        )
    return table(head, rows)


def summary(runs: Sequence[Scored]) -> str:
    """Figures over all runs."""
    sources = [r for r in runs if r.source]
    clean = [r for r in runs if r.scenario in ("none", "heat-up")]
    days = sum(r.watched_s for r in clean) / DAY_S
    false = sum(len(r.false) for r in clean)
    alarms = sum(len(set(r.alarms)) for r in clean)
    blamed = sum(r.blamed_reading for r in sources)
    return "\n".join(
        (
            f"- real sources called a thermocouple fault (very likely): {blamed} of {len(sources)}",
            f"- clean production: {days:.2f} plate-days, {false} false findings, {alarms} alarms",
        )
    )
