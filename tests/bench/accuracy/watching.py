"""One simulated plant watched through `pipeline.step`, and scored against its truth."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from platewatch.monitor import pipeline
from platewatch.monitor.estimator import advance, first_state
from platewatch.monitor.inputs import take_in
from platewatch.monitor.peak import WHOLE_PLATE, hottest_now
from platewatch.monitor.pipeline import Monitor, State
from platewatch.types import AlarmState, Array, Reading, Tick
from sim_sensors.simulation import Sample, Simulation
from tests.bench.accuracy.full_order import FullOrder, node_weights
from tests.bench.accuracy.interpolation import Interpolator, interpolators
from tests.bench.accuracy.plants import extent_m

START_US = 1_800_000_000_000_000
SAMPLE_US = 2_000_000  # the simulation's own sample time
ANNUNCIATED = (AlarmState.UNACKNOWLEDGED, AlarmState.LATCHED_UNACKNOWLEDGED)
LOOK_EVERY_S = 60.0
FIRST_LOOK_S = 300.0  # the filter has then been running for five minutes
SETTLING_S = 900.0  # hold counts from so long after the soak began
Z95 = 1.959964
MODEL_TOLERANCE_K = 0.1  # of the reduced model, when it is built
OURS = "platewatch"
FULL = "full-order Kalman"


@dataclass(frozen=True)
class Look:
    """The scores of one instant.

    phase: heat-up, settling or hold;  field_K, peak_K: RMS error of the field and error
    of the hottest place, by method;  worst_K: of our field;  covered: share of cells in
    our 95 % band;  peak_covered: truth in the 95 % band of the peak
    nees: of the modal amplitudes over their number;  nees_tolerant: the same with the
    tolerance to which the reduced model is built added to their covariance
    """

    at_s: float
    phase: str
    field_K: dict[str, float]
    peak_K: dict[str, float]
    worst_K: float
    mean_sd_K: float
    covered: float
    peak_covered: bool
    nees: float
    nees_tolerant: float


@dataclass(frozen=True)
class Raised:
    at_s: float
    alarm: str
    subject: str


@dataclass(frozen=True)
class Trace:
    """looks and annunciations in order;  peaks (n, 2): time and true peak."""

    looks: tuple[Look, ...]
    raised: tuple[Raised, ...]
    peaks: Array
    sensors: Array

    def crossed_s(self, limit_degC: float) -> float | None:
        """When the true peak first passed the limit."""
        return _first(self.peaks, limit_degC)

    def sensor_crossed_s(self, limit_degC: float) -> float | None:
        """When the hottest thermocouple first showed more than the limit."""
        return _first(self.sensors, limit_degC)

    def first_s(self, alarm: str, subject: str = "") -> float | None:
        return next(
            (r.at_s for r in self.raised if r.alarm == alarm and subject in ("", r.subject)), None
        )


def _first(series: Array, limit: float) -> float | None:
    over = np.flatnonzero(series[:, 1] > limit) if series.size else np.zeros(0)
    return float(series[over[0], 0]) if over.size else None


@dataclass
class Watch:
    """A plant and its monitor at one moment; `fork` gives an independent continuation."""

    monitor: Monitor
    run: Simulation
    state: State
    full: FullOrder | None = None
    soak_s: float = np.inf
    looks: list[Look] = field(default_factory=list)
    raised: list[Raised] = field(default_factory=list)
    peaks: list[tuple[float, float]] = field(default_factory=list)
    sensors: list[tuple[float, float]] = field(default_factory=list)
    compare: dict[str, Interpolator] = field(default_factory=dict)
    _to_cells: Array | None = None
    _full_to_cells: Array | None = None

    @classmethod
    def begin(cls, monitor: Monitor, run: Simulation, *, compared: bool = False) -> Watch:
        """compared: also score interpolation and the full-order filter."""
        watch = cls(monitor, run, pipeline.first(monitor))
        watch._to_cells = node_weights(run.truth, places(monitor))
        if compared:
            sensors = np.array([(s.x_m, s.y_m) for s in run.plant.plate.sensors])
            watch.full = FullOrder(run)
            watch._full_to_cells = watch.full.at(places(monitor))
            watch.compare = interpolators(
                sensors, places(monitor), extent_m(run.plant.plate), monitor.quiet.noise_var
            )
        return watch

    def fork(self, seed: int | None = None) -> Watch:
        """The same moment with empty records; a seed gives the plant its own noise."""
        twin = replace(self, run=self.run.copy(seed=seed), full=None, compare={})
        twin.looks, twin.raised, twin.peaks, twin.sensors = [], [], [], []
        return twin

    def until(self, end_s: float) -> Watch:
        """Run on through the whole pipeline."""
        while self.run.at_s < end_s - 1e-9:
            sample = self.run.step()
            self.state, outcome = pipeline.step(self.monitor, self.state, _tick_of(sample))
            self.raised += [
                Raised(sample.at_s, event.alarm, event.subject)
                for event in outcome.alarm_events
                if event.to_state in ANNUNCIATED
            ]
            self._note(sample)
        return self

    def follow(self, end_s: float) -> Watch:
        """Run on with the quiet filter alone: the field without forecast and alarms."""
        quiet = self.monitor.quiet
        while self.run.at_s < end_s - 1e-9:
            sample = self.run.step()
            tick = _tick_of(sample)
            heard, seen = take_in(quiet, self.state.heard, tick, self.monitor.unit)
            picture = self.state.picture
            if picture is None:
                picture = first_state(quiet, tick.at_us, seen)
            else:
                picture, _ = advance(quiet, picture, tick.dt_us, seen)
            began = self.state.started_us or tick.at_us
            self.state = replace(
                self.state,
                heard=heard,
                picture=picture,
                started_us=began,
                silent_since_us=tick.at_us,
            )
            self._note(sample)
        return self

    def _note(self, sample: Sample) -> None:
        if any(event.get("step") == "soak" for event in sample.events):
            self.soak_s = min(self.soak_s, sample.at_s)
        self.peaks.append((sample.at_s, sample.truth.peak_degC))
        self.sensors.append((sample.at_s, sample.truth.hottest_degC))
        if self.full is not None:
            watts = np.array([sample.truth.watts[z.name] for z in self.run.plant.plate.zones])
            self.full.step(self.state.heard.degC, watts)
        if sample.at_s >= FIRST_LOOK_S and sample.at_s % LOOK_EVERY_S < 1e-9:
            self.looks.append(self._look(sample))

    def _look(self, sample: Sample) -> Look:
        q, picture = self.monitor.quiet, self.state.picture
        assert picture is not None
        assert self._to_cells is not None
        a, V = q.blocks.a, q.reduced.V
        true = self._to_cells @ sample.truth.field
        P = picture.belief.cov[a, a]
        sd = np.sqrt(np.einsum("ij,jk,ik->i", V, P, V))
        error = V @ picture.belief.mean[a] - true
        now = hottest_now(q, self.monitor.where, picture.belief, self.monitor.draws, WHOLE_PLATE)
        top = sample.truth.peak_degC
        fields = {name: f(self.state.heard.degC) for name, f in self.compare.items()}
        if self.full is not None and self._full_to_cells is not None:
            fields[FULL] = self._full_to_cells @ self.full.truth.field
        off = q.reduced.V.T @ (q.reduced.model.capacity * error)
        return Look(
            at_s=sample.at_s,
            phase=self._phase(sample.at_s),
            field_K={OURS: _rms(error)} | {n: _rms(f - true) for n, f in fields.items()},
            peak_K={OURS: now.degC - top} | {n: float(f.max()) - top for n, f in fields.items()},
            worst_K=float(np.abs(error).max()),
            mean_sd_K=float(sd.mean()),
            covered=float((np.abs(error) < Z95 * sd).mean()),
            peak_covered=now.quantile(0.025) <= top <= now.quantile(0.975),
            nees=_nees(off, P),
            nees_tolerant=_nees(off, P + self._tolerance * np.eye(off.size)),
        )

    @property
    def _tolerance(self) -> float:
        """MODEL_TOLERANCE_K over the plate, as a variance of each modal amplitude."""
        q = self.monitor.quiet
        heat = MODEL_TOLERANCE_K**2 * float(q.reduced.model.capacity.sum())
        return heat / q.blocks.modes

    def _phase(self, at_s: float) -> str:
        if at_s < self.soak_s:
            return "heat-up"
        return "hold" if at_s >= self.soak_s + SETTLING_S else "settling"

    @property
    def trace(self) -> Trace:
        return Trace(
            tuple(self.looks), tuple(self.raised), np.array(self.peaks), np.array(self.sensors)
        )


def _tick_of(sample: Sample) -> Tick:
    at_us = START_US + round(sample.at_s * 1e6)
    readings = tuple(
        Reading(at_us, channel, value, at_us)
        for channel, value in sorted(sample.readings.items())
        if not np.isnan(value)
    )
    return Tick(at_us, SAMPLE_US, readings)


def places(monitor: Monitor) -> Array:
    """Centres (n, 2) of the estimator's cells, m."""
    grid = monitor.quiet.grid
    return np.column_stack((grid.x, grid.y))


def _nees(error: Array, P: Array) -> float:
    return float(error @ np.linalg.solve(P, error)) / error.size


def _rms(error: Array) -> float:
    return float(np.sqrt(np.mean(error**2)))
