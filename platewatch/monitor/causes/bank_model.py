"""The bank's constants by set of thermocouples, and what it carries from tick to tick."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from platewatch.monitor.causes.catalogue import patterns, sources
from platewatch.monitor.causes.deaf import (
    Past,
)
from platewatch.monitor.causes.evidence import (
    Groups,
    Watch,
    groups_of,
)
from platewatch.monitor.causes.fuller import Fuller, build_fuller
from platewatch.monitor.causes.refine import (
    NEAR,
)
from platewatch.monitor.causes.sentinel import Sentinel, build_sentinel
from platewatch.monitor.causes.settled import Settled
from platewatch.monitor.causes.signatures import Bank, build_bank
from platewatch.monitor.causes.views import View
from platewatch.monitor.estimator import Quiet
from platewatch.monitor.options import CauseOptions
from platewatch.thermal.grid import point_row
from platewatch.types import Array


@dataclass(frozen=True)
class Model:
    """What never changes: the observer and the bank by set of sensors."""

    quiet: Quiet
    tick_us: int
    options: CauseOptions
    fuller: Fuller
    _built: dict[tuple[int, ...], tuple[Sentinel, Bank]] = field(default_factory=dict)
    _groups: dict[tuple[int, ...], Groups] = field(default_factory=dict)
    _deaf: dict[tuple[int, ...], tuple[Sentinel, Bank]] = field(default_factory=dict)

    @property
    def tick_s(self) -> float:
        return self.tick_us / 1e6

    def of(self, sensors: tuple[int, ...]) -> tuple[Sentinel, Bank]:
        """Observer and bank of one set of sensors, built once."""
        if sensors not in self._built:
            sentinel = build_sentinel(self.quiet, self.tick_us, sensors)
            bank = build_bank(self.quiet, sentinel, self.fuller, patterns(self.quiet), self.tick_us)
            self._built[sensors] = (sentinel, bank)
        return self._built[sensors]

    def prepare(self) -> None:
        """Build what the first tick with all thermocouples would wait for."""
        everyone = tuple(range(len(self.quiet.plate.sensors)))
        self.of(everyone)
        self.groups(everyone)

    def groups(self, sensors: tuple[int, ...]) -> Groups:
        """Hypotheses by cause and subject, with their priors."""
        if sensors not in self._groups:
            self._groups[sensors] = groups_of(self.of(sensors)[1], self.options)
        return self._groups[sensors]

    def without(self, sensors: tuple[int, ...], sensor: int) -> tuple[Sentinel, Bank]:
        """Observer that does not listen to `sensor`, with a bank of sources near it."""
        rest = tuple(i for i in sensors if i != sensor)
        key = (*rest, -1 - sensor)
        if key not in self._deaf:
            at, scale = self.quiet.plate.sensors[sensor], float(np.sqrt(self.quiet.grid.area.sum()))
            near = [
                p
                for p in sources(self.quiet)
                if np.hypot(p.x_m - at.x_m, p.y_m - at.y_m) <= 2.5 * NEAR * scale
            ]
            sentinel = build_sentinel(self.quiet, self.tick_us, rest)
            bank = build_bank(self.quiet, sentinel, self.fuller, near, self.tick_us)
            self._deaf[key] = (sentinel, bank)
        return self._deaf[key]


def build_model(quiet: Quiet, tick_us: int, options: CauseOptions) -> Model:
    """The layer of one plate; observer and bank are built when first asked for."""
    rows = np.array([point_row(quiet.grid, s.x_m, s.y_m) for s in quiet.plate.sensors])
    return Model(quiet, tick_us, options, build_fuller(quiet, rows))


@dataclass(frozen=True)
class State:
    """What the bank carries along.

    sensors: those it listens to;  seen (ticks, m): whitened innovations, newest last
    p_none: probability that nothing is the matter;  views: every credible cause
    settled: causes that are part of the picture;  idle_until_us: not watching before that
    answer: +1 a load was put on, -1 none was, 0 nobody said
    """

    sensors: tuple[int, ...]
    watch: Watch | None = None
    seen: Array | None = None
    past: tuple[Past, ...] = ()
    p_none: float = 1.0
    views: tuple[View, ...] = ()
    answer: float = 0.0
    at_us: int = 0
    settled: tuple[Settled, ...] = ()
    idle_until_us: int = 0
