"""From the readings of a tick to what the estimator takes in, and what is remembered."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from platewatch.monitor.estimator import Observed, Quiet
from platewatch.monitor.loops import delivered_share
from platewatch.monitor.signals import to_degC
from platewatch.thermal.plate import Zone
from platewatch.types import Array, Reading, Tick
from platewatch.units import TemperatureUnit
from platewatch.units import to_degC as unit_to_degC

SLOPE_SPAN_US = 60_000_000  # set-points of the last minute give their slope
SLOPE_LEAST_US = 20_000_000
POINT_SPACING_US = 1_000_000  # of set-points that come faster, one a second is kept
DUTY_SLACK = 1.02  # a duty up to 2 % beyond full scale is rounding, not a mistake


@dataclass(frozen=True)
class Heard:
    """The last that each channel said.

    degC (ns,), sensor_us (ns,): last reading and its stamp, nan and 0 before the first
    interval_us (ns,): running mean of the time between readings
    duty (nz,): 0..1, nan before the first;  set_points: recent (at_us, degC) by zone
    around (nu,) degC;  junctions: terminal blocks by channel, degC
    raw_trouble: why a sensor's last value was no temperature
    """

    degC: Array
    sensor_us: tuple[int, ...]
    interval_us: tuple[int, ...]
    duty: Array
    set_points: tuple[tuple[tuple[int, float], ...], ...]
    around: Array
    raw_trouble: tuple[str, ...]
    junctions: Mapping[str, float] = field(default_factory=dict)

    @property
    def set_point(self) -> Array:
        """(nz,) degC, nan where none is known."""
        return np.array([s[-1][1] if s else np.nan for s in self.set_points])

    @property
    def set_point_slope(self) -> Array:
        """(nz,) K/s over the last minute."""
        return np.array([_slope(s) for s in self.set_points])


def _slope(points: tuple[tuple[int, float], ...]) -> float:
    if not points or points[-1][0] - points[0][0] < SLOPE_LEAST_US:
        return 0.0
    return (points[-1][1] - points[0][1]) / ((points[-1][0] - points[0][0]) / 1e6)


def nothing_heard(quiet: Quiet) -> Heard:
    """Before the first reading."""
    ns, nz = len(quiet.plate.sensors), len(quiet.plate.zones)
    return Heard(
        degC=np.full(ns, np.nan),
        sensor_us=(0,) * ns,
        interval_us=(0,) * ns,
        duty=np.full(nz, np.nan),
        set_points=((),) * nz,
        around=quiet.around_default.copy(),
        raw_trouble=("",) * ns,
    )


def take_in(
    quiet: Quiet, heard: Heard, tick: Tick, unit: TemperatureUnit
) -> tuple[Heard, Observed]:
    """Sort a tick's usable readings by channel; the refused ones are only remembered."""
    by_channel: dict[str, list[Reading]] = {}
    for reading in tick.readings:
        if reading.usable:
            by_channel.setdefault(reading.channel, []).append(reading)
    around, junctions = _surroundings(quiet, heard, by_channel, unit)
    last, sensors = _sensors(quiet, heard, tick, by_channel, junctions)
    duty, called, called_end = _duties(quiet, heard, tick, by_channel)
    heard = Heard(
        degC=last.degC,
        sensor_us=tuple(last.sensor_us),
        interval_us=tuple(last.interval_us),
        duty=duty,
        set_points=_set_points(quiet, heard, by_channel, unit),
        around=around,
        raw_trouble=tuple(last.trouble),
        junctions=junctions,
    )
    return heard, Observed(
        sensors=tuple(s[0] for s in sensors),
        degC=np.array([s[1] for s in sensors]),
        count=np.array([s[2] for s in sensors], dtype=np.float64),
        share=np.array([s[3] for s in sensors]),
        called_W=called,
        called_end_W=called_end,
        around=around,
        duty_heard=not bool(np.isnan(duty).any()),
    )


def _share_of_watts(zone: Zone, duty: float) -> float:
    """Watts called for at a duty of 0..1; none where the duty was never heard."""
    return 0.0 if duty != duty else float(zone.watts * delivered_share(zone, duty))


def _surroundings(
    quiet: Quiet, heard: Heard, readings: dict[str, list[Reading]], unit: TemperatureUnit
) -> tuple[Array, Mapping[str, float]]:
    """Room and terminal blocks: each holds until it is heard again."""
    new = {
        name: unit_to_degC(rows[-1].value, unit)
        for name, rows in readings.items()
        if name.startswith("surround/")
    }
    if not new:
        return heard.around, heard.junctions
    around = [new.get(n, old) for n, old in zip(quiet.around_names, heard.around, strict=True)]
    return np.array(around), {**heard.junctions, **new}


@dataclass
class _Last:
    """What the thermocouples said last, while a tick is gone through."""

    degC: Array
    sensor_us: list[int]
    interval_us: list[int]
    trouble: list[str]


def _sensors(
    quiet: Quiet,
    heard: Heard,
    tick: Tick,
    readings: dict[str, list[Reading]],
    junctions: Mapping[str, float],
) -> tuple[_Last, list[tuple[int, float, int, float]]]:
    """(sensor, mean degC, how many, share of the tick) for each sensor that spoke."""
    last = _Last(
        heard.degC.copy(),
        list(heard.sensor_us),
        list(heard.interval_us),
        list(heard.raw_trouble),
    )
    found = []
    for i, sensor in enumerate(quiet.plate.sensors):
        values, stamps = [], []
        junction = sensor.cold_junction
        terminals = junctions.get(junction) if isinstance(junction, str) else None
        for r in readings.get(f"sensor/{sensor.name}", ()):
            signal = to_degC(sensor, r.value, terminals)
            last.trouble[i] = signal.reason
            if signal.degC is not None:
                values.append(signal.degC)
                stamps.append(r.at_us)
        if not values:
            continue
        if last.sensor_us[i]:
            spacing = (stamps[-1] - last.sensor_us[i]) // len(stamps)
            last.interval_us[i] = _interval_us(last.interval_us[i], spacing)
        last.degC[i], last.sensor_us[i] = values[-1], stamps[-1]
        middle = sum(s - tick.at_us for s in stamps) / len(stamps)
        share = min(max(1 + middle / tick.dt_us, 0.0), 1.0)
        found.append((i, sum(values) / len(values), len(values), share))
    return last, found


def _interval_us(before: int, spacing: int) -> int:
    """Running mean of the time between readings; an outage is no sample time."""
    if not before:
        return spacing
    return (7 * before + min(spacing, 2 * before)) // 8


def _duties(
    quiet: Quiet, heard: Heard, tick: Tick, readings: dict[str, list[Reading]]
) -> tuple[Array, Array, Array]:
    """Last duties, mean watts called for over the tick and watts called for at its end; a
    duty holds from its stamp to the next."""
    duty: list[float] = heard.duty.tolist()
    mean, end = [], []
    for i, zone in enumerate(quiet.plate.zones):
        since, spent = tick.at_us - tick.dt_us, 0.0
        watts = _share_of_watts(zone, duty[i])
        for r in readings.get(f"zone/{zone.name}/duty", ()):
            value = r.value / zone.duty_full
            if not 0.0 <= value <= DUTY_SLACK:
                continue
            spent += watts * (r.at_us - since)
            since, duty[i] = r.at_us, min(value, 1.0)
            watts = _share_of_watts(zone, duty[i])
        mean.append((spent + watts * (tick.at_us - since)) / tick.dt_us)
        end.append(watts)
    return np.array(duty), np.array(mean), np.array(end)


def _set_points(
    quiet: Quiet, heard: Heard, readings: dict[str, list[Reading]], unit: TemperatureUnit
) -> tuple[tuple[tuple[int, float], ...], ...]:
    kept = []
    for zone, points in zip(quiet.plate.zones, heard.set_points, strict=True):
        for r in readings.get(f"zone/{zone.name}/setpoint", ()):
            if len(points) >= 2 and r.at_us - points[-2][0] < POINT_SPACING_US:
                points = points[:-1]
            points = (*points, (r.at_us, unit_to_degC(r.value, unit)))
        old = 0
        while points and points[-1][0] - points[old][0] > SLOPE_SPAN_US:
            old += 1
        kept.append(points[old:])
    return tuple(kept)
