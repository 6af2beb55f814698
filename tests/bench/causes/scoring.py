"""One incident watched through the whole pipeline, and what became of it."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field, replace

import numpy as np

from platewatch.monitor import pipeline
from platewatch.monitor.causes.catalogue import Cause
from platewatch.monitor.causes.settled import missed_now
from platewatch.monitor.estimator import advance
from platewatch.monitor.inputs import take_in
from platewatch.monitor.outlook import Prospect, now_of, present
from platewatch.monitor.peak import WHOLE_PLATE, hottest_now
from platewatch.monitor.pipeline import Monitor, State
from platewatch.types import Array, Tick
from sim_sensors.simulation import TrueState
from tests.bench.accuracy.interpolation import Interpolator, interpolators
from tests.bench.accuracy.plants import extent_m
from tests.bench.accuracy.watching import ANNUNCIATED, Watch, _tick_of, places
from tests.bench.causes.scenarios import READING, Event

LOOK_EVERY_S = 20.0
ASKED_S = (60.0, 120.0, 300.0)
SURE, LIKELY = 0.9, 0.5
OURS, QUIET = "with causes", "quiet"


@dataclass(frozen=True)
class Glance:
    """One instant: RMS field error and error of the hottest place by method, K.

    p_true: of the true cause at the true subject;  covered: by width of the interval, %
    place_m: of the leading source from the true place, nan where there is none
    """

    since_s: float
    field_K: dict[str, float]
    peak_K: dict[str, float]
    covered: dict[int, bool]
    p_true: float
    place_m: float


@dataclass(frozen=True)
class Scored:
    """One run.  Times are after the onset, None where it never came to that.

    named_s: the true cause first likelier than not;  suspected_s: anything but none
    false: wrong (cause, subject) that was ever very likely;  alarms: annunciated
    """

    plate: str
    scenario: str
    seed: int
    source: bool
    glances: tuple[Glance, ...]
    named_s: float | None
    suspected_s: float | None
    false: frozenset[tuple[str, str]]
    alarms: tuple[str, ...]
    coming_s: float | None
    crossed_s: float | None
    sensor_crossed_s: float | None
    watched_s: float

    @property
    def blamed_reading(self) -> bool:
        """Was a real source said to be a thermocouple fault, very likely?"""
        names = {cause.value for cause in READING}
        return self.source and any(set(c.split(" + ")) <= names for c, _ in self.false)


@dataclass
class Score:
    """A fork of a watched plate, with its incident."""

    watch: Watch
    event: Event
    onset_s: float
    glances: list[Glance] = field(default_factory=list)
    false: set[tuple[str, str]] = field(default_factory=set)
    named_s: float | None = None
    suspected_s: float | None = None
    quiet: State | None = None

    def run(self, plate: str, scenario: str, seed: int, watch_s: float) -> Scored:
        watch, monitor = self.watch, self.watch.monitor
        sensors = np.array([(s.x_m, s.y_m) for s in watch.run.plant.plate.sensors])
        extent = extent_m(watch.run.plant.plate)
        compare = interpolators(sensors, places(monitor), extent, monitor.quiet.noise_var)
        watch.run.add(*self.event.faults)
        limit = monitor.shown_limit
        value = np.inf if limit is None else limit.value
        alarms: list[str] = []
        times: dict[str, float | None] = dict.fromkeys(("coming", "truth", "sensor"))
        while watch.run.at_s < self.onset_s + watch_s - 1e-9:
            sample = watch.run.step()
            tick = _tick_of(sample)
            watch.state, outcome = pipeline.step(monitor, watch.state, tick)
            self._follow_quietly(tick)
            since = sample.at_s - self.onset_s
            for e in outcome.alarm_events:
                if e.to_state in ANNUNCIATED:
                    alarms.append(f"{e.alarm}/{e.subject}")
            came = {
                "coming": any(a.startswith("peak-coming") for a in alarms),
                "truth": sample.truth.peak_degC > value,
                "sensor": sample.truth.hottest_degC > value,
            }
            for what, happened in came.items():
                if happened and times[what] is None:
                    times[what] = since
            self._listen(since)
            if since > 0 and since % LOOK_EVERY_S < 1e-9:
                self.glances.append(self._glance(sample.truth, since, compare))
        return Scored(
            plate,
            scenario,
            seed,
            self.event.source and bool(self.event.faults),
            tuple(self.glances),
            self.named_s,
            self.suspected_s,
            frozenset(self.false),
            tuple(alarms),
            times["coming"],
            times["truth"],
            times["sensor"],
            watch_s,
        )

    def _follow_quietly(self, tick: Tick) -> None:
        """The quiet filter by itself: it believes every reading and knows no cause."""
        monitor = self.watch.monitor
        before = self.quiet or self.watch.state
        heard, seen = take_in(monitor.quiet, before.heard, tick, monitor.unit)
        picture = before.picture
        assert picture is not None
        if self.quiet is not None:
            picture, _ = advance(monitor.quiet, picture, tick.dt_us, seen)
        self.quiet = replace(before, heard=heard, picture=picture)

    def _prospects(self) -> tuple[Prospect, ...]:
        state = self.watch.state
        assert state.ahead is not None
        return (*state.ahead.prospects, *pipeline._settled(state))

    def _listen(self, since: float) -> None:
        """Note who is blamed, and when."""
        for p in self._prospects():
            if p.view is None:
                continue
            right = self._is_right(p)
            if right and p.probability >= LIKELY and self.named_s is None:
                self.named_s = since
            if p.probability >= LIKELY and self.suspected_s is None:
                self.suspected_s = since
            if not right and p.probability >= SURE:
                self.false.add((p.name, p.subjects))

    def _is_right(self, p: Prospect) -> bool:
        if p.view is None:
            return Cause.NONE in self.event.causes
        wanted, subjects = self.event.causes, self.event.subjects
        return any(c in wanted and (not subjects or s in subjects) for c, s in p.view.parts)

    def _glance(self, truth: TrueState, since: float, compare: dict[str, Interpolator]) -> Glance:
        watch, state = self.watch, self.watch.state
        monitor = watch.monitor
        assert watch._to_cells is not None
        assert state.ahead is not None
        assert state.picture is not None
        true = watch._to_cells @ truth.field
        top = truth.peak_degC
        q, belief = monitor.quiet, state.picture.belief
        assert self.quiet is not None
        assert self.quiet.picture is not None
        by_itself = self.quiet.picture.belief
        plain = q.reduced.V @ by_itself.mean[q.blocks.a]
        fields = {OURS: mean_field(monitor, state), QUIET: plain}
        fields |= {name: f(state.heard.degC) for name, f in compare.items()}
        fresh = present(monitor.means, belief, _missed(state))
        now = now_of(state.ahead, fresh)[WHOLE_PLATE]
        quiet = hottest_now(q, monitor.where, by_itself, monitor.draws, WHOLE_PLATE)
        peaks = {n: float(np.nanmax(f)) - top for n, f in fields.items()}
        peaks |= {OURS: now.degC - top, QUIET: quiet.degC - top}
        covered = {w: _within(now.samples, top, w / 100) for w in (90, 95)}
        right = [p.probability for p in self._prospects() if self._is_right(p)]
        return Glance(
            since,
            {n: float(np.sqrt(np.mean((f - true) ** 2))) for n, f in fields.items()},
            peaks,
            covered,
            min(1.0, sum(right)),
            self._place_error(),
        )

    def _place_error(self) -> float:
        for p in self._prospects():
            if p.view is not None and self._is_right(p):
                return float(np.hypot(p.view.x_m - self.event.x_m, p.view.y_m - self.event.y_m))
        return float("nan")


def mean_field(monitor: Monitor, state: State) -> Array:
    """(cells,) averaged over the causes by their probability."""
    q = monitor.quiet
    assert state.ahead is not None
    assert state.picture is not None
    parts = state.ahead.prospects
    total = sum(p.probability for p in parts)
    field_of_all = np.zeros(q.grid.n)
    for p in parts:
        belief = state.picture.belief if p.view is None else p.view.belief
        one = q.reduced.V @ belief.mean[q.blocks.a]
        if p.view is not None:
            one = one + p.view.missed
        field_of_all += p.probability / total * one
    left = _missed(state)
    return field_of_all if left is None else field_of_all + left


def _missed(state: State) -> Array | None:
    if state.causes is None or state.picture is None:
        return None
    return missed_now(state.causes.settled, state.picture.at_us)


def _within(samples: Array, value: float, share: float) -> bool:
    low, high = np.quantile(samples, ((1 - share) / 2, (1 + share) / 2))
    return bool(low <= value <= high)


def rms(values: Iterable[float]) -> float:
    found = np.array([v for v in values if np.isfinite(v)])
    return float(np.sqrt(np.mean(found**2))) if found.size else float("nan")
