"""Open measured records through the real pipeline: replay, a plain fit, 60 s ahead.

The records are not part of the project.  PLATEWATCH_DATA names the folder that holds
them; tests that need one are skipped without it.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import least_squares

from platewatch import compose
from platewatch.compose_plate import reference_degC
from platewatch.monitor.estimator import Quiet, forecast_step
from platewatch.monitor.loops import delivered_share
from platewatch.monitor.pipeline import State, first, step
from platewatch.monitor.ticks import Ticker
from platewatch.thermal.conduction import build_model
from platewatch.thermal.grid import build_grid
from platewatch.thermal.plate import Zone
from platewatch.thermal.reduction import point_rows, project, reduce, remainder
from platewatch.types import Array, Tick
from platewatch.units import from_iso

AHEAD_S = 60.0


def recorded(name: str) -> Path:
    """The measured file, or the test is skipped."""
    folder = os.environ.get("PLATEWATCH_DATA")
    if not folder:
        pytest.skip("needs the open measured data; set PLATEWATCH_DATA to their folder")
    path = Path(folder) / name
    if not path.is_file():
        pytest.skip(f"PLATEWATCH_DATA holds no {name}")
    return path


def described(folder: Path, text: str) -> compose.Description:
    path = folder / "plate.toml"
    path.write_text(text, encoding="utf-8")
    return compose.describe(path)


def states_of(monitor: compose.Monitor, reader: compose.LogReader) -> list[State]:
    """The pipeline's state after every tick of a log, as a replay steps through it."""
    options = monitor.estimator
    ticker, state, states = Ticker(options.tick_us, options.late_us), first(monitor), []

    def run(ticks: Iterable[Tick]) -> None:
        nonlocal state
        for tick in ticks:
            state, _ = step(monitor, state, tick)
            states.append(state)

    for row in reader:
        for reading in row.readings:
            ticker.add(reading)
        run(ticker.close())
    run(ticker.finish())
    return states


def watts_of(zones: Sequence[Zone], duty: Array) -> Array:
    """Watts called for (t, nz) at duties (t, nz) of 0..1."""
    called = [z.watts * delivered_share(z, d) for z, d in zip(zones, duty.T, strict=True)]
    return np.array(called).reshape(len(zones), duty.shape[0]).T


def carried(quiet: Quiet, state: State, tick_s: float, called_W: Array) -> Array:
    """What each thermocouple will read (ns,) after the watts (steps, nz) of as many ticks."""
    picture = state.picture
    assert picture is not None
    dt_us = round(tick_s * 1e6)
    for called in called_W:
        belief, heater_W = forecast_step(quiet, picture, dt_us, called, picture.around)
        picture = replace(
            picture,
            at_us=picture.at_us + dt_us,
            belief=belief,
            heater_W=heater_W,
            called_W=called,
        )
    return np.asarray(quiet.H @ picture.belief.mean)


@dataclass(frozen=True)
class Score:
    """Root mean square errors 60 s ahead, K: recorded input given, input held, last value."""

    given: float
    held: float
    last: float
    count: int

    @property
    def better(self) -> float:
        """How many times smaller than of `hold the last value`."""
        return self.last / self.given

    def __str__(self) -> str:
        return (
            f"60 s ahead, {self.count} predictions, rms: {self.given:.2f} K with the recorded "
            f"input given, {self.held:.2f} K with the input held, {self.last:.2f} K by holding "
            f"the last value; {self.better:.1f} times better"
        )


def score(
    monitor: compose.Monitor, states: Sequence[State], seen: Array, duty: Array, ticks: range
) -> Score:
    """Predict from every tick number in `ticks`.

    seen (t, ns) degC and duty (t, nz) of 0..1 at each tick; a duty holds to the next one
    """
    quiet, tick_s = monitor.quiet, monitor.estimator.tick_s
    steps = round(AHEAD_S / tick_s)
    watts = watts_of(quiet.plate.zones, duty)
    given, held, last = [], [], []
    for i in ticks:
        goal = seen[i + steps]
        given.append(carried(quiet, states[i], tick_s, watts[i : i + steps]) - goal)
        held.append(carried(quiet, states[i], tick_s, watts[[i] * steps]) - goal)
        last.append(seen[i] - goal)
    return Score(rms(given), rms(held), rms(last), len(ticks))


def on_ticks(
    states: Sequence[State], origin: str, at_s: Array, duty: Array, seen: Array
) -> tuple[Array, Array, Array]:
    """Times (t,) of the ticks, the duties (t, nz) that hold there and the readings (t, ns)
    between their stamps, of a record whose stamps lie beside the ticks."""
    pictures = [state.picture for state in states]
    stamps = [picture.at_us - from_iso(origin) for picture in pictures if picture is not None]
    times = np.array(stamps) / 1e6
    holding = np.maximum(np.searchsorted(at_s, times, side="right") - 1, 0)
    readings = np.column_stack([np.interp(times, at_s, column) for column in seen.T])
    return times, duty[holding], readings


def rms(errors: Sequence[Array]) -> float:
    return float(np.sqrt(np.mean(np.square(errors))))


def simulated(
    description: compose.Description,
    times_s: Array,
    duty: Array,
    start_degC: float,
    steady: bool = False,
) -> Array:
    """Readings (t, ns) that the reduced model gives for duties (t, nz), without any filter.

    It starts evenly warm at start_degC or, if `steady`, settled at the first duty.
    """
    plate = description.plate
    grid = build_grid(plate)
    reduced = reduce(build_model(plate, grid, reference_degC(description)))
    zones, sensors = plate.zones, plate.sensors
    rows = point_rows(reduced, np.array([(s.x_m, s.y_m) for s in sensors]))
    heater_lag = np.array([max(z.lag_s, 0.5) for z in zones])
    sensor_lag = np.array([max(s.lag_s, 0.5) for s in sensors])
    watts, nz = watts_of(zones, duty), len(zones)
    rates = np.maximum(reduced.rates, 1e-12)
    u = reduced.model.nominal.copy()

    def moved(a: Array, power: Array, dt: float) -> Array:
        u[:nz] = power
        heat = reduced.G @ u + reduced.g0 + remainder(reduced, a, u)
        fade = np.exp(-rates * dt)
        return np.asarray(fade * a + (1 - fade) / rates * heat)

    a, power = project(reduced, np.full(grid.n, start_degC)), watts[0]
    for _ in range(150 if steady else 0):
        a = moved(a, power, 20.0)
    junction = rows @ a
    readings = [junction]
    for i, dt in enumerate(np.diff(times_s)):
        called, fade = watts[i], np.exp(-dt / heater_lag)
        mean = called + (power - called) * (1 - fade) * heater_lag / dt
        after = moved(a, mean, float(dt))
        power = called + (power - called) * fade
        keep = np.exp(-dt / sensor_lag)
        junction = keep * junction + (1 - keep) * (rows @ (a + after) / 2)
        a = after
        readings.append(junction)
    return np.array(readings)


def fitted(
    readings: Callable[[Array], Array], seen: Array, start: Sequence[float], upper: Sequence[float]
) -> Array:
    """Positive parameters by plain least squares on their logarithms.

    readings: parameters (p,) to what would be read, of the shape of `seen`
    """

    def misses(logs: Array) -> Array:
        return np.asarray((readings(np.exp(logs)) - seen).ravel())

    found = least_squares(
        misses,
        np.log(start),
        bounds=(-12.0, np.log(upper)),
        diff_step=[1e-3] * len(start),
        xtol=1e-4,
        ftol=1e-5,
        max_nfev=40,
    )
    return np.asarray(np.exp(found.x))
