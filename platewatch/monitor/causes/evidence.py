"""How well each hypothesis explains what was seen, and how probable each cause is.

Per hypothesis and onset two sums suffice: b = sum s'v and J = sum s's over the
whitened innovations v since the onset.  With a normal amplitude of standard
deviation sd integrated out, ln(p(v | cause) / p(v | none)) is
b^2 / (2 (J + sd^-2)) - ln(1 + sd^2 J) / 2.
Sources: Willsky & Jones, IEEE Trans. Automatic Control 21 (1976) 108 (generalised
likelihood ratio); Hoeting et al., Statistical Science 14 (1999) 382 (model averaging).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import log_ndtr

from platewatch.monitor.causes.catalogue import Cause, cause_of, prior_rate
from platewatch.monitor.causes.sentinel import Sentinel
from platewatch.monitor.causes.signatures import Bank, Float32
from platewatch.monitor.options import CauseOptions
from platewatch.types import Array

SPAWN_S = 10.0  # onsets are tried this far apart
DAY_S = 86400.0
PLACED_BY = 40  # hypotheses that a cause's place is averaged over


@dataclass(frozen=True)
class Watch:
    """The observer's state and the sums of every hypothesis.

    mean (n,): the observer;  b (onsets, M): row j began `age + j * spacing` ticks ago
    rows: how many rows are in use;  age: ticks since the newest onset
    """

    mean: Array
    b: Float32
    rows: int = 0
    age: int = 0


def spacing_ticks(tick_s: float) -> int:
    """Ticks between onsets."""
    return max(1, round(SPAWN_S / tick_s))


def begin(bank: Bank, mean: Array, tick_s: float) -> Watch:
    """No onset yet."""
    onsets = bank.ages // spacing_ticks(tick_s)
    return Watch(mean, np.zeros((onsets, bank.signature.shape[1]), dtype=np.float32))


def observe(
    sentinel: Sentinel, bank: Bank, watch: Watch, push: Array, residual_of: Array, tick_s: float
) -> tuple[Watch, Array]:
    """One tick: move the observer by push (n,), take in readings (m,), nan where missing.

    Returns the whitened innovations (m,), too.
    """
    prior = sentinel.F @ watch.mean + push
    residual = residual_of - sentinel.H @ prior
    residual = np.where(np.isfinite(residual), residual, 0.0)
    v = sentinel.whiten @ residual
    spacing = spacing_ticks(tick_s)
    b, rows, age = watch.b, watch.rows, watch.age + 1
    if rows == 0 or age >= spacing:
        b = np.roll(b, 1, axis=0)
        b[0] = 0.0
        rows, age = min(rows + 1, len(b)), 0
    else:
        b = b.copy()
    signature = bank.signature[age::spacing][:rows]
    b[: len(signature)] += np.matmul(signature, v.astype(np.float32))
    return Watch(prior + sentinel.K @ residual, b, min(rows, len(signature)), age), v


@dataclass(frozen=True)
class Finding:
    """One cause at one place with its probability.

    column, age: its best hypothesis and how many ticks ago that began
    amplitude, sd: of that hypothesis
    x_m, y_m: posterior mean place (sources), else the pattern's own
    """

    cause: Cause
    subject: str
    probability: float
    column: int
    age: int
    amplitude: float
    sd: float
    x_m: float
    y_m: float
    log_odds: float


def strongest(bank: Bank, watch: Watch, tick_s: float) -> float:
    """The largest b^2 / (2 J) of all hypotheses: a cheap bound on every evidence."""
    J = bank.energy[watch.age :: spacing_ticks(tick_s)][: watch.rows]
    b = watch.b[: watch.rows]
    return float((b * b / (2 * J + 1e-6)).max(initial=0.0))


def log_evidence(bank: Bank, watch: Watch, tick_s: float) -> tuple[Array, Array, Array]:
    """(onsets, M) each: of a negative and of a positive amplitude, and J."""
    spacing = spacing_ticks(tick_s)
    J = bank.energy[watch.age :: spacing][: watch.rows].astype(np.float64)
    b = watch.b[: watch.rows].astype(np.float64)
    low = np.full(b.shape, -np.inf)
    high = np.full(b.shape, -np.inf)
    sds = np.array([p.sd + (p.sd[-1],) * (2 - len(p.sd)) for p in bank.patterns])
    for k in range(2):
        precision = sds[bank.column_pattern, k] ** -2.0
        total = J + precision
        fit = b**2 / (2 * total) + 0.5 * np.log(precision / total) - np.log(2)
        side = b / np.sqrt(total)
        low = np.logaddexp(low, fit + log_ndtr(-side))
        high = np.logaddexp(high, fit + log_ndtr(side))
    return low + np.log(2), high + np.log(2), J


Groups = dict[tuple[Cause, str], tuple[Array, Array, float]]


def findings(
    bank: Bank, watch: Watch, groups: Groups, tick_s: float
) -> tuple[list[Finding], float]:
    """Every cause with its probability, most probable first, and that of none."""
    if watch.rows == 0:
        return [], 1.0
    low, high, J = log_evidence(bank, watch, tick_s)
    spacing = spacing_ticks(tick_s)
    onset_prior = np.log(spacing * tick_s / DAY_S)
    found: list[tuple[Cause, str, float, list[tuple[float, int, int]]]] = []
    for (cause, subject), (columns, positives, log_prior) in groups.items():
        evidence = np.where(positives, high[:, columns], low[:, columns])
        weight = (evidence + (log_prior + onset_prior)).ravel()
        top = float(weight.max())
        total = top + float(np.log(np.exp(weight - top).sum()))
        count = min(PLACED_BY, weight.size)
        order = np.argpartition(-weight, count - 1)[:count]
        order = order[np.argsort(-weight[order], kind="stable")]
        best = [
            (float(weight[i]), int(columns[i % columns.size]), int(i // columns.size))
            for i in order
        ]
        found.append((cause, subject, total, best))
    logs = np.array([f[2] for f in found] + [0.0])
    shift = logs.max()
    p = np.exp(logs - shift)
    p /= p.sum()
    result = [
        _finding(bank, watch, J, f, float(q), spacing) for f, q in zip(found, p[:-1], strict=True)
    ]
    result.sort(key=lambda f: -f.probability)
    return result, float(p[-1])


def _finding(
    bank: Bank,
    watch: Watch,
    J: Array,
    found: tuple[Cause, str, float, list[tuple[float, int, int]]],
    probability: float,
    spacing: int,
) -> Finding:
    cause, subject, log_odds, best = found
    _, column, row = best[0]
    pattern = bank.patterns[bank.column_pattern[column]]
    precision = pattern.sd[-1] ** -2.0
    total = J[row, column] + precision
    shares = np.exp(np.array([w for w, _, _ in best]) - best[0][0])
    places = np.array(
        [
            (bank.patterns[bank.column_pattern[c]].x_m, bank.patterns[bank.column_pattern[c]].y_m)
            for _, c, _ in best
        ]
    )
    x, y = shares @ places / shares.sum()
    return Finding(
        cause,
        subject,
        probability,
        column,
        watch.age + row * spacing,
        float(watch.b[row, column] / total),
        float(total**-0.5),
        float(x),
        float(y),
        log_odds,
    )


def groups_of(bank: Bank, options: CauseOptions) -> Groups:
    """Columns, signs and log prior rate of each (cause, subject)."""
    members: dict[tuple[Cause, str], list[tuple[int, bool]]] = {}
    for column, (p, shape) in enumerate(zip(bank.column_pattern, bank.column_shape, strict=True)):
        pattern = bank.patterns[p]
        for positive in (False, True):
            cause = cause_of(pattern.family, shape, positive)
            if cause is not None and prior_rate(options, cause) > 0:
                members.setdefault((cause, pattern.subject), []).append((column, positive))
    totals: dict[Cause, int] = {}
    for (cause, _), hypotheses in members.items():
        totals[cause] = totals.get(cause, 0) + len(hypotheses)
    return {
        key: (
            np.array([c for c, _ in hypotheses]),
            np.array([s for _, s in hypotheses]),
            float(np.log(prior_rate(options, key[0]) / totals[key[0]])),
        )
        for key, hypotheses in members.items()
    }
