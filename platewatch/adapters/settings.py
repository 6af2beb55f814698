"""A plate description: one TOML file, read, checked as a whole and converted.

Every mistake is reported at once, one line each, with file, line, key, reason
and remedy.  Positions in arrays count from 1, as people do: sensor[1] is the
first.  What `load` returns is valid by construction.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path

from platewatch.adapters import settings_places, settings_rules
from platewatch.adapters import settings_schema_plate as plate_tables
from platewatch.adapters import settings_schema_run as run_tables
from platewatch.adapters.settings_convert import Converter, cause_name, metres, shape
from platewatch.adapters.settings_draft import Draft, draft, parse, read_bytes
from platewatch.adapters.settings_schema import Mistake
from platewatch.adapters.settings_schema_sensor import SensorEntry
from platewatch.errors import SettingsError
from platewatch.monitor.limits import AlarmLimit
from platewatch.monitor.options import CauseOptions, EstimatorOptions, ForecastOptions
from platewatch.monitor.recipe import Recipe
from platewatch.thermal.materials import BUILT_IN
from platewatch.thermal.plate import Layer, Material, Plate, Uncertain
from platewatch.units import TemperatureUnit


@dataclass(frozen=True)
class BusSettings:
    """The broker; `publish` switches our own results on, below our own root only."""

    host: str = "127.0.0.1"
    port: int = 1883
    user: str = ""
    secret_file: str = ""
    ca_file: str = ""
    client_name: str = ""
    publish: bool = False
    keepalive_s: int = 30
    enabled: bool = True


class Payload(StrEnum):
    NUMBER = "number"
    JSON = "json"
    FLAT = "flat"
    SENML = "senml"


class TimeUnit(StrEnum):
    ISO = "iso"
    S = "s"
    MS = "ms"
    US = "us"


@dataclass(frozen=True)
class ChannelMap:
    """A plant's own topic: which channel it means and how its payload is read."""

    topic: str
    means: str
    payload: Payload = Payload.NUMBER
    value: str = ""
    time: str = ""
    time_unit: TimeUnit = TimeUnit.ISO


@dataclass(frozen=True)
class StoreSettings:
    """url: SQLAlchemy's; a relative SQLite file lies in the current directory."""

    url: str
    keep_days: int = 400
    keep_readings_days: int = 90


@dataclass(frozen=True)
class ScreenSettings:
    address: str = "127.0.0.1:8470"
    timezone: str = "UTC"


class PersonRole(StrEnum):
    VIEWER = "viewer"
    OPERATOR = "operator"
    TECHNICIAN = "technician"
    ENGINEER = "engineer"
    ADMINISTRATOR = "administrator"


@dataclass(frozen=True)
class Person:
    """A person or a station, by name."""

    name: str
    role: PersonRole


@dataclass(frozen=True)
class Description:
    """Everything one file says; sha256 is that of its bytes."""

    path: Path
    sha256: str
    unit: TemperatureUnit
    plate: Plate
    recipes: tuple[Recipe, ...]
    alarm_limits: tuple[AlarmLimit, ...]
    estimator: EstimatorOptions
    forecast: ForecastOptions
    causes: CauseOptions
    bus: BusSettings
    channels: tuple[ChannelMap, ...]
    store: StoreSettings
    screen: ScreenSettings
    people: tuple[Person, ...]


def load(path: Path) -> Description:
    """Read a plate description.

    Raises SettingsError whose text has one line for each mistake:
    `file:line: key: reason; remedy`, in the order of the file.
    """
    path = Path(path)
    content = read_bytes(path)
    text = parse(path, content)
    read, mistakes = draft(text)
    mistakes += [*settings_rules.mistakes(read), *settings_places.mistakes(read)]
    if mistakes:
        sentences = sorted({text.sentence(each) for each in _without_echoes(mistakes)})
        raise SettingsError("\n".join(sentence for _, sentence in sentences))
    return _description(path, hashlib.sha256(content).hexdigest(), read)


def _without_echoes(mistakes: list[Mistake]) -> list[Mistake]:
    """A key that is there but misspelt is not called missing, too."""
    meant = {(*each.where[:-1], each.remedy) for each in mistakes}
    return [
        each
        for each in mistakes
        if not each.reason.startswith("is missing")
        or (*each.where[:-1], f"did you mean {each.where[-1]!r}?") not in meant
    ]


def _description(path: Path, sha256: str, read: Draft) -> Description:
    zones = [zone for _, zone in read.of(plate_tables.ZoneEntry)]
    controlling = frozenset(zone.loop.sensor for zone in zones if zone.loop is not None)
    convert = Converter(read.unit, BUILT_IN, controlling)
    recipes = tuple(convert.recipe(entry) for _, entry in read.of(run_tables.RecipeEntry))
    plate = _plate(read, convert, recipes)
    limits = read.of(run_tables.AlarmLimitEntry)
    return Description(
        path=path,
        sha256=sha256,
        unit=read.unit,
        plate=plate,
        recipes=recipes,
        alarm_limits=tuple(convert.alarm_limit(entry) for _, entry in limits),
        estimator=_estimator(read),
        forecast=_forecast(read),
        causes=_causes(read),
        bus=_bus(read, plate.name),
        channels=tuple(_channel(entry) for _, entry in read.of(run_tables.ChannelEntry)),
        store=_store(read, plate.name),
        screen=_screen(read),
        people=tuple(
            Person(name, PersonRole(role)) for name, role in read.data.get("people", {}).items()
        ),
    )


def _plate(read: Draft, convert: Converter, recipes: tuple[Recipe, ...]) -> Plate:
    entry = read.one(plate_tables.PlateEntry)
    surface = read.one(plate_tables.SurfaceEntry)
    assert entry is not None, "a missing plate was reported before"
    assert surface is not None, "a missing surface was reported before"
    materials = _materials(read, convert)
    uncertain = read.one(plate_tables.UncertainEntry) or plate_tables.UncertainEntry()
    set_points = [degC for recipe in recipes for degC in recipe.set_points_degC]
    return Plate(
        name=entry.name,
        outline=shape(entry.outline, outline=True),
        thickness_m=metres(entry.thickness_mm),
        material=materials[entry.material],
        top=convert.surface(surface.top),
        bottom=convert.surface(surface.bottom),
        holes=tuple(shape(hole) for hole in entry.holes),
        cell_m=None if entry.cell_mm is None else metres(entry.cell_mm),
        working_margin_m=metres(entry.working_margin_mm),
        position_note=entry.position_note,
        layers=tuple(
            Layer(materials[layer.material], metres(layer.thickness_mm))
            for _, layer in read.of(plate_tables.LayerEntry)
        ),
        insets=tuple(convert.inset(e, materials) for _, e in read.of(plate_tables.InsetEntry)),
        edges=tuple(convert.edge(e) for _, e in read.of(plate_tables.EdgeEntry)),
        clamps=tuple(convert.clamp(e) for _, e in read.of(plate_tables.ClampEntry)),
        contacts=tuple(convert.contact(e) for _, e in read.of(plate_tables.ContactEntry)),
        zones=tuple(convert.zone(e) for _, e in read.of(plate_tables.ZoneEntry)),
        sensors=tuple(convert.sensor(e) for _, e in read.of(SensorEntry)),
        uncertain=Uncertain(**uncertain.model_dump()),
        reference_degC=sum(set_points) / len(set_points) if set_points else None,
    )


def _materials(read: Draft, convert: Converter) -> dict[str, Material]:
    """Built-in ones and those of the file, which go first."""
    own = (convert.material(entry) for _, entry in read.of(plate_tables.MaterialEntry))
    return {**convert.built_in, **{material.name: material for material in own}}


def _estimator(read: Draft) -> EstimatorOptions:
    entry = read.one(run_tables.EstimatorEntry) or run_tables.EstimatorEntry()
    return EstimatorOptions(tick_s=entry.tick_s, late_s=entry.late_s)


def _forecast(read: Draft) -> ForecastOptions:
    entry = read.one(run_tables.ForecastEntry) or run_tables.ForecastEntry()
    return ForecastOptions(
        horizon_s=60.0 * entry.horizon_min, step_s=entry.step_s, every_s=entry.every_s
    )


def _causes(read: Draft) -> CauseOptions:
    entry = read.one(run_tables.CausesEntry) or run_tables.CausesEntry()
    return CauseOptions(
        off=tuple(cause_name(name) for name in entry.off),
        prior=tuple((cause_name(name), rate) for name, rate in entry.prior.items()),
    )


def _bus(read: Draft, plate: str) -> BusSettings:
    entry = read.one(run_tables.BusEntry) or run_tables.BusEntry()
    return BusSettings(
        host=entry.host,
        port=entry.port or (8883 if entry.ca_file else 1883),
        user=entry.user,
        secret_file=entry.secret_file,
        ca_file=entry.ca_file,
        client_name=entry.client_name or f"platewatch-{plate}",
        publish=entry.publish,
        keepalive_s=entry.keepalive_s,
        enabled=entry.enabled,
    )


def _channel(entry: run_tables.ChannelEntry) -> ChannelMap:
    return ChannelMap(
        topic=entry.topic,
        means=entry.means,
        payload=Payload(entry.payload),
        value=entry.value,
        time=entry.time,
        time_unit=TimeUnit(entry.time_unit or TimeUnit.ISO),
    )


def _store(read: Draft, plate: str) -> StoreSettings:
    entry = read.one(run_tables.StoreEntry) or run_tables.StoreEntry()
    url = entry.url or f"sqlite:///{plate}.sqlite"
    return StoreSettings(url, entry.keep_days, entry.keep_readings_days)


def _screen(read: Draft) -> ScreenSettings:
    entry = read.one(run_tables.ScreenEntry) or run_tables.ScreenEntry()
    return ScreenSettings(address=entry.address, timezone=entry.timezone)
