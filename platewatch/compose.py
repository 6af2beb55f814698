"""Where adapters meet the core: everything is built from settings here."""

from __future__ import annotations

from pathlib import Path

from platewatch.adapters.settings import Description, load
from platewatch.monitor.estimator import build_quiet
from platewatch.monitor.loops import build_loops
from platewatch.monitor.peak import places, standard_draws
from platewatch.monitor.pipeline import Monitor
from platewatch.thermal.conduction import build_model
from platewatch.thermal.grid import build_grid
from platewatch.thermal.reduction import reduce
from platewatch.units import TemperatureUnit

REFERENCE_DEGC = 100.0  # where losses are linearised when no recipe names a set-point


def describe(path: Path) -> Description:
    """Read and check one plate description."""
    return load(path)


def build_monitor(description: Description) -> Monitor:
    """The estimator, forecast and alarms of one plate."""
    plate = description.plate
    reference = plate.reference_degC if plate.reference_degC is not None else REFERENCE_DEGC
    reduced = reduce(build_model(plate, build_grid(plate), reference))
    quiet = build_quiet(plate, reduced, reference)
    limits = description.alarm_limits
    zones = tuple({limit.zone for limit in limits if limit.zone})
    return Monitor(
        quiet=quiet,
        loops=build_loops(plate),
        where=places(quiet, tuple(sorted(zones))),
        draws=standard_draws(quiet.blocks.size),
        limits=limits,
        recipes=description.recipes,
        estimator=description.estimator,
        forecast=description.forecast,
        unit=TemperatureUnit(description.unit),
    )
