"""One watched plate: what never changes, and what is carried from tick to tick."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

from platewatch.monitor import conditions as ask
from platewatch.monitor.alarms import Alarm
from platewatch.monitor.causes import layer
from platewatch.monitor.causes.plain import Plain
from platewatch.monitor.conditions import Words
from platewatch.monitor.estimator import FieldState, Quiet
from platewatch.monitor.inputs import Heard, nothing_heard
from platewatch.monitor.limits import AlarmLimit, LimitKind
from platewatch.monitor.loops import Loops
from platewatch.monitor.options import EstimatorOptions, ForecastOptions
from platewatch.monitor.outlook import Ahead, Means
from platewatch.monitor.peak import Places
from platewatch.monitor.recipe import Recipe
from platewatch.monitor.shots import field_of
from platewatch.types import AlarmState, Array, FieldShot
from platewatch.units import TemperatureUnit


@dataclass(frozen=True)
class Monitor:
    """Everything about one plate that does not change from tick to tick."""

    quiet: Quiet
    loops: Loops
    where: Places
    draws: Array
    limits: tuple[AlarmLimit, ...]
    recipes: tuple[Recipe, ...]
    estimator: EstimatorOptions
    forecast: ForecastOptions
    unit: TemperatureUnit
    causes: layer.Model | None = None

    @property
    def words(self) -> Words:
        return Words(self.quiet.plate, self.unit)

    @property
    def means(self) -> Means:
        """What looking ahead needs."""
        return Means(
            self.quiet, self.loops, self.where, self.draws, self.peak_limits, self.forecast
        )

    @property
    def peak_limits(self) -> tuple[AlarmLimit, ...]:
        return ask.enabled(self.limits, LimitKind.PEAK)

    @property
    def shown_limit(self) -> AlarmLimit | None:
        """The lowest enabled peak limit, which peak rows refer to."""
        alarming = [limit for limit in self.peak_limits if not limit.record_only]
        return min(alarming or self.peak_limits, key=lambda limit: limit.value, default=None)


@dataclass(frozen=True)
class State:
    """What one plate carries from tick to tick.  `picture` is None before the first reading."""

    heard: Heard
    picture: FieldState | None = None
    ahead: Ahead | None = None
    alarms: Mapping[tuple[str, str], Alarm] = field(default_factory=dict)
    started_us: int = 0
    settled: bool = False
    silent_since_us: int = 0
    blind: bool = False
    shot_us: int = 0
    power_us: int = 0
    integral: Array | None = None  # (nz,) of the controllers, nan where not known
    causes: layer.State | None = None
    causes_us: int = 0
    question: str = ""
    plain: Plain | None = None


def first(monitor: Monitor) -> State:
    """Before anything was heard."""
    return State(nothing_heard(monitor.quiet))


def resume(
    monitor: Monitor, shot: FieldShot | None, alarms: Mapping[tuple[str, str], AlarmState]
) -> State:
    """After a restart: the last stored field, if it fits the description, and the alarms."""
    state = replace(first(monitor), alarms={key: Alarm(s) for key, s in alarms.items()})
    kept = field_of(monitor.quiet, shot)
    if kept is None:
        return state
    picture, duty = kept
    return replace(
        state,
        picture=picture,
        heard=replace(state.heard, around=picture.around, duty=duty),
        started_us=picture.at_us,
        silent_since_us=picture.at_us,
        settled=True,
    )
