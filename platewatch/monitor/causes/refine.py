"""The second look: causes that survived the bank, fitted with all their freedom.

The bank tries one pattern, one shape and one onset at a time.  Here a cause gets all
the patterns near its place and all its shapes at once, with normal amplitudes
integrated out, so that contact, mass, size and place are read off, not gridded.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from platewatch.monitor.causes.catalogue import SOURCE_SHAPES, Cause, Family
from platewatch.monitor.causes.posterior import best_of
from platewatch.monitor.causes.signatures import Bank
from platewatch.types import Array

NEAR = 0.17  # patterns within this share of sqrt(plate area) belong to one source
NEAR_HEAT = 0.25  # heat between thermocouples is less well placed than a load on one
THIN_AFTER = 60  # beyond this many ticks only every THIN-th counts in the Gram matrix
THIN = 4
MISMATCH = 0.1  # share of a response that a right cause still gets wrong
FEATURE_TICKS = 15.0
SMOOTH_TICKS = 7
UNKNOWN_HEAT_SHARE = 0.2
MOST_MADE = 400
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class Fit:
    """One cause, or several together, fitted from its onset.

    columns (c,) of the bank;  age: ticks since the onset
    amplitude (c,), spread (c, k): posterior mean and a root of its covariance
    evidence: ln p(seen | cause) / p(seen | none);  log_prior: ln of the prior odds
    """

    parts: tuple[tuple[Cause, str], ...]
    columns: Ints
    age: int
    amplitude: Array
    spread: Array
    evidence: float
    log_prior: float
    x_m: float
    y_m: float

    @property
    def cause(self) -> Cause:
        return self.parts[0][0]

    @property
    def subject(self) -> str:
        return self.parts[0][1]


def columns_of(bank: Bank, cause: Cause, subject: str, x_m: float, y_m: float) -> Ints:
    """All columns that one cause at one place may use."""
    family, which = FAMILY_OF[cause], bank.column_pattern
    if family is Family.SOURCE:
        table = _source_places(bank)
        reach = NEAR_HEAT if cause is Cause.UNKNOWN_HEAT else NEAR
        near = np.hypot(table[:, 0] - x_m, table[:, 1] - y_m) <= reach * bank.scale_m
        return np.asarray(np.flatnonzero(near[which]), dtype=np.int64)
    key = ("columns", cause, subject)
    if key not in bank.made:
        kinds = KINDS.get(cause, ALL_KINDS)
        bank.made[key] = np.array(
            [
                column
                for column, p in enumerate(which)
                if bank.patterns[p].family is family
                and bank.patterns[p].subject == subject
                and bank.column_shape[column].kind in kinds
            ],
            dtype=np.int64,
        )
    found: Ints = bank.made[key]  # type: ignore[assignment]
    return found


def _source_places(bank: Bank) -> Array:
    """(P, 2) places of the sources, far away for all other patterns."""
    if "places" not in bank.made:
        bank.made["places"] = np.array(
            [
                (p.x_m, p.y_m) if p.family is Family.SOURCE else (np.inf, np.inf)
                for p in bank.patterns
            ]
        )
    found: Array = bank.made["places"]  # type: ignore[assignment]
    return found


FAMILY_OF = {
    Cause.COLD_LOAD: Family.SOURCE,
    Cause.UNKNOWN_HEAT: Family.SOURCE,
    Cause.ZONE_NOT_HEATING: Family.ZONE,
    Cause.ZONE_STAYS_ON: Family.ZONE,
    Cause.LOSS_CHANGED: Family.LOSS,
    Cause.SENSOR_STEP: Family.SENSOR,
    Cause.SENSOR_DRIFT: Family.SENSOR,
    Cause.SENSOR_LOOSE: Family.SENSOR,
    Cause.SENSOR_STUCK: Family.SENSOR,
    Cause.SENSOR_REVERSED: Family.SENSOR,
    Cause.SENSOR_NOISY: Family.SENSOR,
    Cause.JUNCTION_BLOCK: Family.BLOCK,
}


ALL_KINDS = ("step", "decay", "settle", "grow", "ramp")
KINDS = {
    Cause.SENSOR_STEP: ("step",),
    Cause.SENSOR_DRIFT: ("ramp",),
    Cause.SENSOR_LOOSE: ("settle", "ramp"),
}


def trust(bank: Bank, seen: Array) -> Array:
    """(ticks, m, m): turns whitened innovations into ones that may decide between causes.

    Where a thermocouple's response is large, even the right cause gets a share of it
    wrong, for FEATURE_TICKS on end: its variance grows by FEATURE_TICKS (MISMATCH
    response)^2.  So the others decide, not the shape of one overwhelming response.
    seen (ticks, m): whitened innovations
    """
    width = min(SMOOTH_TICKS, len(seen))
    kernel = np.ones(width) / width
    raw = seen @ bank.root.T
    padded = np.pad(raw, ((width // 2, width - 1 - width // 2), (0, 0)), mode="edge")
    smooth = np.apply_along_axis(np.convolve, 0, padded, kernel, mode="valid")
    S = bank.root @ bank.root.T
    response = np.maximum(smooth**2 - np.diag(S) / width, 0.0)
    total = np.repeat(S[None], len(seen), axis=0)
    index = np.arange(len(S))
    total[:, index, index] += FEATURE_TICKS * MISMATCH**2 * response
    return np.asarray(np.linalg.solve(np.linalg.cholesky(total), bank.root))


def gram(bank: Bank, columns: Ints, age: int, weigh: Array) -> Array:
    """Sum of s' w s over the ticks since the onset; thinned where it is long and smooth.

    weigh (age + 1, m, m) from `trust`
    """
    ticks = np.arange(age + 1)
    scale = np.ones(age + 1)
    if age + 1 > THIN_AFTER:
        ticks = np.concatenate((ticks[:THIN_AFTER], ticks[THIN_AFTER::THIN]))
        left = (age + 1 - THIN_AFTER) / (len(ticks) - THIN_AFTER)
        scale = np.where(ticks < THIN_AFTER, 1.0, np.sqrt(left))
    turned = (weigh[ticks] * scale[:, None, None]).astype(np.float32)
    rows = np.matmul(turned, bank.signature[ticks][:, columns].transpose(0, 2, 1))
    flat = rows.reshape(-1, columns.size)
    return np.asarray(flat.T @ flat, dtype=np.float64)


def correlation(bank: Bank, columns: Ints, age: int, weigh: Array, seen: Array) -> Array:
    """Sum of s' w v over the ticks since the onset.  seen (age + 1, m): whitened."""
    turned = np.einsum("aij,aik,ak->aj", weigh, weigh, seen, optimize=True)
    window = bank.signature[: age + 1, columns]
    return np.asarray(
        np.tensordot(window, turned.astype(np.float32), ((0, 2), (0, 1))), dtype=np.float64
    )


def reads_low(bank: Bank, found: Fit) -> bool:
    """Is every loose or drifting thermocouple of the fit reading low at the latest tick?

    A loose one lags behind a plate that warms and cools, so its shapes have no one
    sign; their sum has: a high reading is never explained away.
    """
    t = np.array([found.age * bank.push.tick_s])
    for cause, subject in found.parts:
        if cause in (Cause.SENSOR_LOOSE, Cause.SENSOR_DRIFT):
            error = sum(
                float(amount * bank.column_shape[c].at(t)[0])
                for c, amount in zip(found.columns, found.amplitude, strict=True)
                if bank.patterns[bank.column_pattern[c]].family is Family.SENSOR
                and bank.patterns[bank.column_pattern[c]].subject == subject
            )
            if error > 0:
                return False
    return True


class Evidence:
    """What was seen, weighed once for each onset.  seen (ticks, m): whitened, newest last."""

    def __init__(self, bank: Bank, seen: Array) -> None:
        self.bank, self._seen = bank, seen
        self._weights: dict[int, Array] = {}

    def window(self, age: int) -> Array:
        """Innovations (age + 1, m) since the onset."""
        return self._seen[-age - 1 :]

    def weigh(self, age: int) -> Array:
        """`trust` since the onset."""
        if age not in self._weights:
            self._weights[age] = trust(self.bank, self.window(age))
        return self._weights[age]

    def available(self, age: int) -> float:
        """Evidence that a cause could have at most, by explaining everything."""
        turned = np.einsum("aij,aj->ai", self.weigh(age), self.window(age))
        return 0.5 * float(np.square(turned).sum() - turned.size)


def fit(
    seen: Evidence,
    parts: Sequence[tuple[Cause, str]],
    columns: Ints,
    age: int,
    log_prior: float,
) -> Fit:
    """Fit a cause, or several together: evidence, amplitudes and where the heat lies.

    A source is tried at every place near (also between the bank's places) and in every
    size, each time with all its shapes; the rest has all its shapes at once.  Amplitudes
    A ~ N(0, diag(sd^2)): ln odds = b' M^-1 b / 2 - ln det(M) / 2 with M = 1 + sd G sd.
    Places and sizes are averaged over; innovations count by `trust`.
    Source: Rasmussen & Williams, Gaussian Processes for Machine Learning (2006),
    sec. 2.2 (Bayesian linear model).
    """
    bank = seen.bank
    which = bank.column_pattern[columns]
    cause_of_family = {FAMILY_OF[cause]: cause for cause, _ in parts}
    sd = np.array([_sd(bank, p, cause_of_family) for p in which])
    weigh, window = seen.weigh(age), seen.window(age)
    G = sd[:, None] * gram(bank, columns, age, weigh) * sd
    b = sd * correlation(bank, columns, age, weigh, window)
    tried, count = best_of(G, b, *_variants(bank, parts, columns))
    evidence = np.array([t.evidence for t in tried])
    best = float(evidence.max())
    chance = np.exp(evidence - best)
    total = best + float(np.log(chance.sum() / count))
    chance /= chance.sum()
    keep = np.flatnonzero(chance > 1e-3)
    amplitude = np.einsum("v,vc->c", chance[keep], np.array([tried[v].z for v in keep]))
    spread = np.column_stack(
        [np.sqrt(chance[v]) * tried[v].root for v in keep]
        + [np.sqrt(chance[v]) * (tried[v].z - amplitude)[:, None] for v in keep]
    )
    share = np.abs(sd * amplitude) + 1e-12
    x = np.array([bank.patterns[p].x_m for p in which])
    y = np.array([bank.patterns[p].y_m for p in which])
    return Fit(
        tuple(parts),
        columns,
        age,
        sd * amplitude,
        sd[:, None] * spread,
        total,
        log_prior,
        float(share @ x / share.sum()),
        float(share @ y / share.sum()),
    )


def _sd(bank: Bank, p: int, cause_of_family: dict[Family, Cause]) -> float:
    """Prior spread of an amplitude; heat that nobody called for is never as strong as what
    a cold load takes."""
    pattern = bank.patterns[p]
    unknown = cause_of_family[pattern.family] is Cause.UNKNOWN_HEAT
    return UNKNOWN_HEAT_SHARE * pattern.sd[-1] if unknown else pattern.sd[-1]


def _variants(bank: Bank, parts: Sequence[tuple[Cause, str]], columns: Ints) -> tuple[Array, Array]:
    """Ways to combine the columns (v, c, k), and the sign (k,) each combination must have."""
    key = ("variants", tuple(cause for cause, _ in parts), columns.tobytes())
    if key not in bank.made:
        if len(bank.made) > MOST_MADE:
            bank.made.clear()
        bank.made[key] = _made_variants(bank, parts, columns)
    found: tuple[Array, Array] = bank.made[key]  # type: ignore[assignment]
    return found


def _made_variants(
    bank: Bank, parts: Sequence[tuple[Cause, str]], columns: Ints
) -> tuple[Array, Array]:
    which = bank.column_pattern[columns]
    families = [bank.patterns[p].family for p in which]
    cause_of = {FAMILY_OF[cause]: cause for cause, _ in parts}
    other = [i for i, f in enumerate(families) if f is not Family.SOURCE]
    rest = np.zeros((columns.size, len(other)))
    rest[other, np.arange(len(other))] = 1.0
    other_signs = np.array([SIGN.get(cause_of[families[i]], 0.0) for i in other])
    source = cause_of.get(Family.SOURCE)
    if source is None:
        return rest[None], other_signs
    places = _places(bank, which)
    T = np.zeros((len(places), columns.size, len(SOURCE_SHAPES) + len(other)))
    T[:, :, len(SOURCE_SHAPES) :] = rest
    for v, members in enumerate(places):
        for p in members:
            for i in np.flatnonzero(which == p):
                T[v, i, SOURCE_SHAPES.index(bank.column_shape[columns[i]])] = 1 / len(members)
    return T, np.append(np.full(len(SOURCE_SHAPES), SIGN[source]), other_signs)


def _places(bank: Bank, which: Ints) -> list[tuple[int, ...]]:
    """Single source patterns, and pairs of neighbours of one size: places in between."""
    single = [int(p) for p in np.unique(which) if bank.patterns[p].family is Family.SOURCE]
    found: list[tuple[int, ...]] = [(p,) for p in single]
    for i, p in enumerate(single):
        for q in single[i + 1 :]:
            one, two = bank.patterns[p], bank.patterns[q]
            apart = np.hypot(one.x_m - two.x_m, one.y_m - two.y_m)
            if one.size_m == two.size_m and apart <= 1.5 * one.spacing_m:
                found.append((p, q))
    return found


SIGN = {
    Cause.COLD_LOAD: -1.0,
    Cause.ZONE_NOT_HEATING: -1.0,
    Cause.SENSOR_DRIFT: -1.0,
    Cause.UNKNOWN_HEAT: 1.0,
    Cause.ZONE_STAYS_ON: 1.0,
}
