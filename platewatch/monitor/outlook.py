"""What each credible cause means for the plate: the peak now, the coming peak, the limits.

With no cause in sight there is one prospect, that nothing is the matter.  Figures are
averaged over the prospects by their probability; alarms follow the worst of them.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from platewatch.monitor.causes.views import View
from platewatch.monitor.estimator import FieldState, Quiet
from platewatch.monitor.forecast import (
    carry,
    crossing_times,
    hottest_ahead,
    quantile_times,
    state_draws,
)
from platewatch.monitor.limits import AlarmLimit
from platewatch.monitor.loops import Loops, LoopStart
from platewatch.monitor.options import ForecastOptions
from platewatch.monitor.peak import Hottest, Places, hottest_now, probability_over
from platewatch.types import Array, Gaussian

CREDIBLE = 0.01  # the alarm floor
COLDER_K = 40.0  # a load from the cold store, hardly more
HOTTEST_DEGC = 1400.0
Times = tuple[float | None, float | None, float | None]


@dataclass(frozen=True)
class Prospect:
    """One cause.  view: None where nothing is the matter.

    now, ahead: by region;  passing: by limit, probability within the horizon and times
    """

    view: View | None
    probability: float
    now: Mapping[str, Hottest]
    ahead: Mapping[str, Hottest]
    passing: Mapping[str, tuple[float, Times]]

    @property
    def name(self) -> str:
        """The cause's name, or several joined."""
        if self.view is None:
            return "none"
        return " + ".join(cause.value for cause, _ in self.view.parts)

    @property
    def subjects(self) -> str:
        """What it is about: zones, thermocouples."""
        return "" if self.view is None else ", ".join(s for _, s in self.view.parts)


@dataclass(frozen=True)
class Ahead:
    """The last forecast.  hottest and passing are averaged over the prospects."""

    at_us: int
    hottest: Mapping[str, Hottest]
    passing: Mapping[str, tuple[float, Times]]
    prospects: tuple[Prospect, ...]

    @property
    def leading(self) -> Prospect:
        """The most probable one."""
        return self.prospects[0]


@dataclass(frozen=True)
class Means:
    """What looking ahead needs beside the field: constants of the plate."""

    quiet: Quiet
    loops: Loops
    where: Places
    draws: Array
    limits: tuple[AlarmLimit, ...]
    options: ForecastOptions


def look_ahead(
    means: Means,
    field: FieldState,
    start: LoopStart,
    views: Sequence[View],
    p_none: float,
    missed: Array | None = None,
    error: Array | None = None,
) -> Ahead:
    """Every credible prospect, and their average.

    missed (cells,): K to add to the field whatever the cause
    error (ns,): K by which thermocouples that nobody believes read off; loops follow them
    """
    prospects = [
        _prospect(means, replace_belief(field, v), start, v, v.probability, missed, error)
        for v in views
        if is_possible(means.quiet, field, v)
    ]
    if p_none >= CREDIBLE or not prospects:
        rest = p_none if prospects else 1.0
        prospects.append(_prospect(means, field, start, None, rest, missed, error))
    prospects.sort(key=lambda p: -p.probability)
    regions = {
        r: mixed([(p.probability, p.ahead[r]) for p in prospects]) for r in means.where.regions
    }
    passing = {limit.name: _passing_of_all(prospects, limit.name) for limit in means.limits}
    return Ahead(field.at_us, regions, passing, tuple(prospects))


def is_possible(quiet: Quiet, field: FieldState, view: View) -> bool:
    """Can a plate be like that?  Nothing on it is far colder than its surroundings, and
    nothing is so hot that no table of losses reaches there."""
    T = quiet.reduced.V @ view.belief.mean[quiet.blocks.a] + view.missed
    coldest = float(field.around.min(initial=0.0)) - COLDER_K
    return bool(coldest <= T.min() and T.max() <= HOTTEST_DEGC)


def replace_belief(field: FieldState, view: View) -> FieldState:
    """The field as a cause sees it, with what its thermocouples will read."""
    return replace(field, belief=view.belief)


def _prospect(
    means: Means,
    field: FieldState,
    start: LoopStart,
    view: View | None,
    probability: float,
    missed: Array | None,
    error: Array | None,
) -> Prospect:
    quiet, where = means.quiet, means.where
    if view is not None:
        missed = view.missed if missed is None else view.missed + missed
    X = state_draws(field, means.draws)
    if view is not None:
        X[quiet.blocks.beta] += view.reading_error[:, None]
    if error is not None:
        X[quiet.blocks.beta] += error[:, None]
    heat = None if view is None else view.heat_ahead
    path = carry(quiet, field, means.loops, start, X, means.options, heat)
    regions = {r: hottest_ahead(quiet, where, path, r, missed) for r in where.regions}
    passing = {}
    for limit in means.limits:
        hottest, tops = regions[limit.zone]
        times = crossing_times(path.times_s, tops, limit.value)
        passing[limit.name] = (
            probability_over(hottest.samples, limit.value),
            quantile_times(times),
        )
    return Prospect(
        view=view,
        probability=probability,
        now=present(means, field.belief, missed),
        ahead={r: h for r, (h, _) in regions.items()},
        passing=passing,
    )


def present(means: Means, belief: Gaussian, missed: Array | None = None) -> dict[str, Hottest]:
    """The present peak of each region."""
    quiet, where, draws = means.quiet, means.where, means.draws
    return {r: hottest_now(quiet, where, belief, draws, r, missed) for r in where.regions}


def mixed(parts: Sequence[tuple[float, Hottest]]) -> Hottest:
    """The distribution over several causes: each gives draws in proportion to its probability."""
    if len(parts) == 1:
        return parts[0][1]
    total = sum(p for p, _ in parts)
    size = parts[0][1].samples.size
    taken = []
    for p, hottest in parts:
        count = round(size * p / total)
        if count:
            chosen = np.floor((np.arange(count) + 0.5) * size / count).astype(np.int64)
            taken.append(hottest.ordered[chosen])
    leading = max(parts, key=lambda part: part[0])[1]
    return Hottest(np.concatenate(taken), leading.cell, leading.at_s)


def _passing_of_all(prospects: Sequence[Prospect], limit: str) -> tuple[float, Times]:
    """Averaged probability; times of the prospect that passes most probably."""
    total = sum(p.probability for p in prospects)
    averaged = sum(p.probability * p.passing[limit][0] for p in prospects) / total
    worst = max(prospects, key=lambda p: p.probability * p.passing[limit][0])
    return averaged, worst.passing[limit][1]


def worst_of(prospects: Sequence[Prospect], limit: str) -> Prospect:
    """The credible prospect that most surely passes a limit, the sooner the worse."""

    def badness(p: Prospect) -> tuple[float, float]:
        chance, (_, median, _) = p.passing[limit]
        return round(chance, 2), -median if median is not None else -np.inf

    credible = [p for p in prospects if p.probability >= CREDIBLE]
    return max(credible or list(prospects), key=badness)


def now_of(ahead: Ahead, fresh: Mapping[str, Hottest] | None) -> dict[str, Hottest]:
    """The present peak by region over all prospects; `fresh`: that of no cause, this tick's."""
    regions = ahead.prospects[0].now
    found = {}
    for region in regions:
        parts = []
        for p in ahead.prospects:
            hottest = p.now[region] if p.view is not None or fresh is None else fresh[region]
            parts.append((p.probability, hottest))
        found[region] = mixed(parts)
    return found
