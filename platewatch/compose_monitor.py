"""The estimator, forecast, causes and alarms of one plate, built from its description."""

from __future__ import annotations

from platewatch.compose_plate import Description, build_filter
from platewatch.monitor.causes.layer import build_model
from platewatch.monitor.loops import build_loops
from platewatch.monitor.options import CAUSE_NAMES
from platewatch.monitor.peak import places, standard_draws
from platewatch.monitor.pipeline import Monitor
from platewatch.units import TemperatureUnit

__all__ = ["Monitor", "build_monitor"]


def build_monitor(description: Description, *, causes: bool = True) -> Monitor:
    """Everything that watches one plate; without `causes`, the filter alone.

    So, too, where the description turns every cause off.
    """
    causes = causes and not set(CAUSE_NAMES) <= set(description.causes.off)
    quiet = build_filter(description)
    limits = description.alarm_limits
    zones = tuple({limit.zone for limit in limits if limit.zone})
    return Monitor(
        quiet=quiet,
        loops=build_loops(description.plate),
        where=places(quiet, tuple(sorted(zones))),
        draws=standard_draws(quiet.blocks.size),
        limits=limits,
        recipes=description.recipes,
        estimator=description.estimator,
        forecast=description.forecast,
        unit=TemperatureUnit(description.unit),
        causes=build_model(quiet, description.estimator.tick_us, description.causes)
        if causes
        else None,
    )
