"""Figures of many runs as markdown tables."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import numpy as np

from tests.bench.accuracy.jobs import PEAK_LIMIT_DEGC, Run
from tests.bench.accuracy.watching import OURS, Look

PHASES = ("heat-up", "settling", "hold")


def table(head: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    lines = [f"| {' | '.join(head)} |", f"|{'---|' * len(head)}"]
    lines += [f"| {' | '.join(row)} |" for row in rows]
    return "\n".join(lines)


def looks_of(runs: Iterable[Run], phase: str) -> list[Look]:
    return [look for run in runs for look in run.trace.looks if look.phase == phase]


def rms(values: Iterable[float]) -> float:
    return float(np.sqrt(np.mean(np.square(list(values)))))


def by_case(runs: Sequence[Run]) -> dict[str, list[Run]]:
    names = dict.fromkeys(run.case for run in runs)
    return {name: [run for run in runs if run.case == name] for name in names}


def field_table(runs: Sequence[Run]) -> str:
    """RMS error of the field and mean and worst error of the hottest place, by method."""
    rows = []
    for name, chosen in by_case(runs).items():
        for phase in PHASES:
            looks = looks_of(chosen, phase)
            for method in looks[0].field_K if looks else ():
                peaks = np.array([look.peak_K[method] for look in looks])
                rows.append(
                    (
                        name,
                        phase,
                        method,
                        f"{rms(look.field_K[method] for look in looks):.2f}",
                        f"{max(look.field_K[method] for look in looks):.2f}",
                        f"{max(look.worst_K for look in looks):.2f}" if method == OURS else "",
                        f"{peaks.mean():+.2f}",
                        f"{np.abs(peaks).max():.2f}",
                    )
                )
    head = (
        "plate",
        "phase",
        "method",
        "field RMSE K",
        "at its worst",
        "worst cell K",
        "peak error, mean K",
        "largest",
    )
    return table(head, rows)


def coverage_table(runs: Sequence[Run]) -> str:
    """How often the truth lies in the 95 % band, pooled over plants, cells and times."""
    rows = []
    for name, chosen in by_case(runs).items():
        for phase in PHASES:
            looks = looks_of(chosen, phase)
            if not looks:
                continue
            of_each = [
                float(np.mean([look.covered for look in run.trace.looks if look.phase == phase]))
                for run in chosen
            ]
            peaks = np.array([look.peak_K[OURS] for look in looks])
            rows.append(
                (
                    name,
                    phase,
                    str(len(chosen)),
                    f"{100 * np.mean([look.covered for look in looks]):.1f} %",
                    f"{100 * np.nanmin(of_each):.0f} %",
                    f"{100 * np.mean([look.peak_covered for look in looks]):.1f} %",
                    f"{rms(look.field_K[OURS] for look in looks):.2f}",
                    f"{np.mean([look.mean_sd_K for look in looks]):.2f}",
                    f"{peaks.mean():+.2f}",
                    f"{np.median([look.nees for look in looks]):.1f}",
                    f"{np.median([look.nees_tolerant for look in looks]):.2f}",
                )
            )
    head = (
        "plants",
        "phase",
        "n",
        "field covered",
        "least of a plant",
        "peak covered",
        "RMSE K",
        "mean sd K",
        "peak error K",
        "NEES/n",
        "with model tolerance",
    )
    return table(head, rows)


def incident_table(runs: Sequence[Run]) -> str:
    """Times after the incident, s; lead is over the true crossing of the limit."""
    rows = []
    for name in dict.fromkeys(run.batch for run in runs):
        chosen = [run for run in runs if run.batch == name]
        leads = [lead for run in chosen if (lead := lead_s(run)) is not None]
        crossed = [_since(run, run.trace.crossed_s(PEAK_LIMIT_DEGC)) for run in chosen]
        rows.append(
            (
                name,
                str(len(chosen)),
                _times(crossed),
                _times([_since(run, run.trace.first_s("peak-coming")) for run in chosen]),
                _times([_since(run, run.trace.first_s("peak-now", "product")) for run in chosen]),
                _times(
                    [_since(run, run.trace.sensor_crossed_s(PEAK_LIMIT_DEGC)) for run in chosen]
                ),
                _leads(leads),
                f"{max(len(run.trace.raised) for run in chosen)}",
                f"{max((look.field_K[OURS] for look in _all(chosen)), default=0.0):.1f}",
                f"{max((look.worst_K for look in _all(chosen)), default=0.0):.1f}",
            )
        )
    head = (
        "batch",
        "n",
        "truth crosses",
        "peak-coming",
        "peak-now",
        "a thermocouple crosses",
        "lead, least / median s",
        "most alarms",
        "worst field RMSE K",
        "worst cell K",
    )
    return table(head, rows)


def alarm_table(runs: Sequence[Run]) -> str:
    """Annunciations in batches in which nothing is wrong."""
    rows = []
    for name, chosen in by_case(runs).items():
        for what in dict.fromkeys(run.batch for run in chosen):
            of_batch = [run for run in chosen if run.batch == what]
            alarms = [f"{r.alarm}/{r.subject}" for run in of_batch for r in run.trace.raised]
            counts = ", ".join(f"{alarms.count(a)} {a}" for a in dict.fromkeys(alarms))
            with_any = sum(bool(run.trace.raised) for run in of_batch)
            rows.append((name, what, str(len(of_batch)), str(with_any), counts or "none"))
    return table(("plants", "batch", "n", "with an alarm", "alarms"), rows)


def lead_s(run: Run) -> float | None:
    """From the first `peak-coming` of the incident to the true crossing."""
    crossed, coming = run.trace.crossed_s(PEAK_LIMIT_DEGC), run.trace.first_s("peak-coming")
    if crossed is None:
        return None
    return crossed - coming if coming is not None else float("-inf")


def _leads(leads: Sequence[float]) -> str:
    """Least and median; a crossing that nothing announced counts as missed."""
    known = [lead for lead in leads if np.isfinite(lead)]
    missed = f"{len(leads) - len(known)} missed" if len(known) < len(leads) else ""
    figures = f"{min(known):.0f} / {np.median(known):.0f}" if known else ""
    return ", ".join(text for text in (figures, missed) if text)


def _all(runs: Iterable[Run]) -> list[Look]:
    """Looks from the incident on."""
    return [
        look
        for run in runs
        for look in run.trace.looks
        if run.incident_s is None or look.at_s >= run.incident_s
    ]


def _since(run: Run, at_s: float | None) -> float | None:
    return None if at_s is None else at_s - (run.incident_s or 0.0)


def _times(times: Sequence[float | None]) -> str:
    """Median and span of those that happened, and how many did."""
    known = sorted(t for t in times if t is not None)
    if not known:
        return "never"
    text = f"{np.median(known):.0f} ({known[0]:.0f}..{known[-1]:.0f})"
    return text if len(known) == len(times) else f"{text}, {len(known)} of {len(times)}"
