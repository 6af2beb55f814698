"""What is built from a description alone: no bus, record or causes, so that it loads quickly."""

from __future__ import annotations

import hashlib
from dataclasses import replace
from pathlib import Path

from platewatch.adapters.settings import Description, load
from platewatch.errors import SettingsError
from platewatch.monitor.estimator import Quiet, build_quiet
from platewatch.thermal.conduction import build_model as build_thermal
from platewatch.thermal.grid import build_grid
from platewatch.thermal.reduction import reduce

__all__ = [
    "Description",
    "build_filter",
    "describe",
    "reference_degC",
    "surround_channels",
    "thermal_channels",
    "with_broker",
    "with_limits",
    "with_patience",
]

REFERENCE_DEGC = 100.0  # where losses are linearised when no recipe names a set-point


def describe(path: Path) -> Description:
    """Read and check one plate description."""
    return load(path)


def reference_degC(description: Description) -> float:
    """Where the losses of a plate are linearised."""
    reference = description.plate.reference_degC
    return REFERENCE_DEGC if reference is None else reference


def build_filter(description: Description) -> Quiet:
    """The plate's reduced model and quiet filter."""
    plate, reference = description.plate, reference_degC(description)
    reduced = reduce(build_thermal(plate, build_grid(plate), reference))
    return build_quiet(plate, reduced, reference)


def surround_channels(description: Description) -> tuple[str, ...]:
    """Bus channels that the plate's surfaces, edges, clamps and cold junctions name."""
    junctions = [s.cold_junction for s in description.plate.sensors]
    named = [*thermal_channels(description), *(j for j in junctions if isinstance(j, str))]
    return tuple(dict.fromkeys(named))


def thermal_channels(description: Description) -> tuple[str, ...]:
    """Those whose temperature the plate feels."""
    plate = description.plate
    named: list[object] = []
    for surface in (plate.top, plate.bottom):
        named += [surface.ambient, surface.surroundings]
    for edge in plate.edges:
        named += [edge.ambient, edge.held]
    named += [clamp.ambient for clamp in plate.clamps]
    return tuple(dict.fromkeys(name for name in named if isinstance(name, str)))


def with_broker(description: Description, broker: str) -> Description:
    """The description with another broker, HOST:PORT; raises SettingsError if it is none."""
    host, separator, port = broker.rpartition(":")
    if not separator:
        host, port = broker, str(description.bus.port)
    if not host or not port.isdecimal() or not 1 <= int(port) <= 65_535:
        raise SettingsError(f"--broker {broker!r} is not HOST:PORT; write 127.0.0.1:1883")
    bus = replace(description.bus, host=host.strip("[]"), port=int(port))
    return replace(description, bus=bus)


def with_patience(description: Description, late_s: float) -> Description:
    """Ticks wait at least this long for stragglers."""
    estimator = description.estimator
    patient = replace(estimator, late_s=max(estimator.late_s, late_s))
    return replace(description, estimator=patient)


def with_limits(description: Description, other: Description) -> Description:
    """The description with the alarm limits of another one of the same plate."""
    if other.plate.name != description.plate.name:
        raise SettingsError(
            f"{other.path}: describes plate {other.plate.name!r}, not {description.plate.name!r}"
        )
    both = hashlib.sha256((description.sha256 + other.sha256).encode())
    return replace(description, alarm_limits=other.alarm_limits, sha256=both.hexdigest())
