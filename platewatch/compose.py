"""Where adapters meet the core: everything is built from settings here."""

from __future__ import annotations

import queue
import tempfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from platewatch.adapters.broker import EmbeddedBroker
from platewatch.adapters.bus import Arrival, Bus, BusEvent, Token
from platewatch.adapters.logs import LogReader, LogReport, load_columns, read_log
from platewatch.adapters.logs_write import wide_rows, write_wide_log
from platewatch.adapters.messages import Decoded, Refusal, Routes
from platewatch.adapters.messages_send import (
    alarm_message,
    alarm_topic,
    alive_message,
    peak_message,
    topic_of,
)
from platewatch.adapters.storage import AlarmRow, DiskFullError, Run, Signs, Sizes, Store
from platewatch.adapters.tables_out import write_table
from platewatch.clock import Clock
from platewatch.compose_monitor import Monitor, build_monitor
from platewatch.compose_plate import (
    Description,
    describe,
    surround_channels,
    with_broker,
    with_limits,
    with_patience,
)
from platewatch.errors import NoDataError, SettingsError
from platewatch.session import Session
from platewatch.types import Array
from platewatch.units import iso

__all__ = [
    "AlarmRow",
    "Arrival",
    "Bus",
    "BusEvent",
    "Decoded",
    "Description",
    "DiskFullError",
    "EmbeddedBroker",
    "Field",
    "LogReader",
    "LogReport",
    "Monitor",
    "Refusal",
    "Routes",
    "Run",
    "Session",
    "Signs",
    "Sizes",
    "Store",
    "Token",
    "alarm_message",
    "alarm_topic",
    "alive_message",
    "build_bus",
    "build_monitor",
    "build_routes",
    "describe",
    "field_at",
    "load_columns",
    "open_store",
    "peak_message",
    "read_log",
    "resume_session",
    "topic_of",
    "wide_rows",
    "with_broker",
    "with_limits",
    "with_patience",
    "write_table",
    "write_wide_log",
]

LONGEST_QUEUE = 20_000  # messages between the network and the estimator


def build_routes(description: Description) -> Routes:
    """Every topic and channel of one plate."""
    plate = description.plate
    return Routes(
        plate.name,
        sensors={sensor.name: sensor.signal for sensor in plate.sensors},
        zones={zone.name: zone.duty_full for zone in plate.zones},
        surrounds=surround_channels(description),
        unit=str(description.unit),
        maps=description.channels,
    )


def build_bus(
    description: Description,
    routes: Routes,
    sink: queue.Queue[Arrival],
    clock: Clock,
    run: int,
    *,
    expects_session: bool = False,
) -> Bus:
    """The connection of one plate; it connects when started."""
    bus = description.bus
    return Bus(
        description.plate.name,
        routes.topics,
        sink,
        clock,
        host=bus.host,
        port=bus.port,
        client_name=bus.client_name,
        user=bus.user,
        secret_file=bus.secret_file,
        ca_file=bus.ca_file,
        publish=bus.publish,
        will=alive_message("lost", clock.utc_us(), run),
        keepalive_s=bus.keepalive_s,
        expects_session=expects_session,
    )


def open_store(url: str, *, create: bool = True, read_only: bool = False) -> Store:
    """The record at a database URL or a plain path."""
    return Store.open(url, create=create, read_only=read_only)


def resume_session(monitor: Monitor, store: Store, plate: str, closed_us: int | None) -> Session:
    """A run that begins where the record ends."""
    alarms = {(event.alarm, event.subject): event.to_state for event in store.alarm_states(plate)}
    return Session(monitor, closed_us=closed_us, shot=store.last_shot(plate), alarms=alarms)


@dataclass(frozen=True)
class Field:
    """The inferred field of one tick: (n,) each, one entry a cell."""

    at_us: int
    x_mm: Array
    y_mm: Array
    degC: Array
    sd_K: Array


def field_at(store: Store, plate: str, at_us: int, description: Path | None = None) -> Field:
    """The field at the last tick up to a moment, from the last stored state before it.

    description: else the one that the record keeps for that state.  Raises NoDataError
    for a moment outside the record, SettingsError where the description does not fit it.
    """
    shot = store.shot_before(plate, at_us)
    ends_us = max((run.last_tick_us or 0 for run in store.runs(plate)), default=0)
    if shot is None:
        raise NoDataError(f"no field of plate {plate!r} is known at {iso(at_us)} or before")
    if at_us > ends_us:
        raise NoDataError(f"{iso(at_us)} is after the last tick on record, {iso(ends_us)}")
    monitor = build_monitor(_described(store, shot.basis, description))
    if monitor.quiet.reduced.basis_hash != shot.basis:
        raise SettingsError(
            "the description does not fit the stored field; give the one it was recorded with "
            "as --description PLATE.toml, and use the platewatch that recorded it"
        )
    session = Session(monitor, closed_us=shot.at_us, shot=shot)
    for reading in store.read_readings(plate, shot.at_us + 1, at_us + 1):
        session.take(reading)
    tick_us = monitor.estimator.tick_us
    session.finish(at_us // tick_us * tick_us)
    picture = session.state.picture
    assert picture is not None, "a stored state is a picture"
    V, modes = monitor.quiet.reduced.V, monitor.quiet.blocks.a
    cov = picture.belief.cov[modes, modes]
    grid = monitor.quiet.grid
    return Field(
        at_us=picture.at_us,
        x_mm=grid.x * 1e3,
        y_mm=grid.y * 1e3,
        degC=V @ picture.belief.mean[modes],
        sd_K=np.sqrt(np.einsum("ij,ij->i", V @ cov, V)),
    )


def _described(store: Store, basis: str, given: Path | None) -> Description:
    """The description given, else the one stored beside the basis."""
    if given is not None:
        return describe(given)
    sha256 = store.description_of_basis(basis)
    content = store.description_of(sha256) if sha256 else None
    if content is None:
        raise SettingsError(
            "the record does not keep its plate description; give it: --description PLATE.toml"
        )
    with tempfile.NamedTemporaryFile(suffix=".toml") as file:
        file.write(content)
        file.flush()
        return describe(Path(file.name))
