"""From the bytes of a description to entries: TOML, known keys, kinds of values.

Each table is validated by itself and repaired by leaving out what is wrong, so
that one mistake does not hide the next.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, TypeVar

from pydantic import ValidationError
from pydantic_core import ErrorDetails

from platewatch.adapters import settings_schema_plate as plate_tables
from platewatch.adapters import settings_schema_run as run_tables
from platewatch.adapters.settings_lines import Where, key_lines
from platewatch.adapters.settings_schema import Entry, Mistake, suggest
from platewatch.adapters.settings_schema_sensor import SensorEntry
from platewatch.errors import SettingsError
from platewatch.units import TemperatureUnit

SINGLE: dict[str, type[Entry]] = {
    "plate": plate_tables.PlateEntry,
    "surface": plate_tables.SurfaceEntry,
    "uncertain": plate_tables.UncertainEntry,
    "estimator": run_tables.EstimatorEntry,
    "forecast": run_tables.ForecastEntry,
    "causes": run_tables.CausesEntry,
    "bus": run_tables.BusEntry,
    "store": run_tables.StoreEntry,
    "screen": run_tables.ScreenEntry,
}
MANY: dict[str, type[Entry]] = {
    "material": plate_tables.MaterialEntry,
    "layer": plate_tables.LayerEntry,
    "inset": plate_tables.InsetEntry,
    "edge": plate_tables.EdgeEntry,
    "clamp": plate_tables.ClampEntry,
    "contact": plate_tables.ContactEntry,
    "zone": plate_tables.ZoneEntry,
    "sensor": SensorEntry,
    "recipe": run_tables.RecipeEntry,
    "alarm_limit": run_tables.AlarmLimitEntry,
    "channel": run_tables.ChannelEntry,
}
# What stands in for a needed value that is missing or unreadable, so that the rest of
# its table is still checked; nothing is ever built from a draft with a mistake.
STAND_INS: dict[type[Entry], dict[str, Any]] = {
    plate_tables.PlateEntry: {"name": "plate", "thickness_mm": 1.0, "material": "mild-steel"},
    plate_tables.ZoneEntry: {"name": "zone", "watts": 1.0},
    SensorEntry: {"name": "sensor"},
}
SECTIONS = (*SINGLE, *MANY, "people")
REQUIRED = ("plate", "surface", "zone", "sensor")

E = TypeVar("E", bound=Entry)


@dataclass(frozen=True)
class Text:
    """A description as text, with what is needed to point into it."""

    path: Path
    content: str
    data: dict[str, Any]
    lines: dict[Where, int] = field(repr=False)

    def sentence(self, mistake: Mistake) -> tuple[int, str]:
        """(line, `file:line: key: reason; remedy`)."""
        line, key = self._point(mistake.where)
        label = f"{key}: " if key else ""
        return line, f"{self.path}:{line}: {label}{mistake.reason}; {mistake.remedy}"

    def _point(self, where: Where) -> tuple[int, str]:
        """Line and printed key; positions count from 1, a missing key has its table's line."""
        node: Any = self.data
        found: Where = ()
        key = ""
        for step in where:
            if isinstance(step, int):
                if not isinstance(node, list) or step >= len(node):
                    continue  # pydantic counts where the file has a single table
                key += f"[{step + 1}]"
            else:
                key += f".{_shown(step)}" if key else _shown(step)
            known = isinstance(node, list) or (isinstance(node, dict) and step in node)
            node = node[step] if known else None
            found = (*found, step) if known else found
        return self.lines.get(found, 1), key


def _shown(key: str) -> str:
    return key if re.fullmatch(r"[A-Za-z0-9_-]+", key) else f'"{key}"'


@dataclass(frozen=True)
class Draft:
    """Every entry that could be read, with its place; and the names that were meant."""

    data: dict[str, Any]
    unit: TemperatureUnit
    entries: tuple[tuple[Where, Entry], ...]

    def of(self, kind: type[E]) -> list[tuple[Where, E]]:
        return [(where, entry) for where, entry in self.entries if isinstance(entry, kind)]

    def one(self, kind: type[E]) -> E | None:
        return next((entry for _, entry in self.of(kind)), None)

    def names(self, section: str) -> list[str]:
        """The names in an array of tables, those of unreadable entries included."""
        items = self.data.get(section, [])
        names = [item.get("name") for item in items if isinstance(item, dict)]
        return [name for name in names if isinstance(name, str)]


def read_bytes(path: Path) -> bytes:
    """The file's bytes; SettingsError in one line where there are none to be had."""
    try:
        return path.read_bytes()
    except FileNotFoundError:
        reason = "there is no such file; check the name, or the folder you are in"
    except IsADirectoryError:
        reason = "this is a folder; name the .toml file in it"
    except PermissionError:
        reason = "this account may not read the file; change its rights (chmod u+r)"
    except OSError as error:
        reason = f"the file cannot be read ({error.strerror}); check the disk and the name"
    raise SettingsError(f"{path}: {reason}")


def parse(path: Path, content: bytes) -> Text:
    """TOML with the line of every key; SettingsError in one line where it is none."""
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise SettingsError(
            f"{path}:{line}: the file is not UTF-8 text; save it as UTF-8 (not ANSI or UTF-16)"
        ) from None
    try:
        data = tomllib.loads(text)
        return Text(path, text, data, key_lines(text))
    except tomllib.TOMLDecodeError as error:
        raise SettingsError(_syntax(path, text, str(error))) from None
    except RecursionError:
        raise SettingsError(f"{path}:1: brackets are nested too deeply; write it flat") from None


def _syntax(path: Path, text: str, message: str) -> str:
    lines = text.splitlines() or [""]
    place = re.search(r"\(at line (\d+), column \d+\)", message)
    number = min(int(place.group(1)), len(lines)) if place else len(lines)
    reason = re.sub(r" \(at .*\)$", "", message)
    line = lines[number - 1]
    remedy = "correct this line: one `key = value` a line, text in quotes, brackets closed"
    if re.search(r"=\s*[-+]?\d+,\d", line):
        remedy = "write decimals with a point: 12.5"
    elif "overwrite" in reason or "declare" in reason or "mutate" in reason:
        remedy = "this key or table stands here for the second time; keep one"
    return f"{path}:{number}: not valid TOML: {reason}; {remedy}"


def draft(text: Text) -> tuple[Draft, list[Mistake]]:
    """All entries that can be read, and what is wrong with the kinds of values and keys."""
    entries: list[tuple[Where, Entry]] = []
    mistakes = list(_section_mistakes(text.data))
    for where, kind, table in _tables(text.data):
        entry, wrong = _entry(kind, table)
        mistakes += [mistake.below(where) for mistake in wrong]
        if entry is not None:
            entries.append((where, entry))
    plate = text.data.get("plate")
    word = plate.get("unit", "degC") if isinstance(plate, dict) else "degC"
    unit = TemperatureUnit(word) if word in tuple(TemperatureUnit) else TemperatureUnit.DEGC
    return Draft(text.data, unit, tuple(entries)), mistakes


def _tables(data: dict[str, Any]) -> Iterator[tuple[Where, type[Entry], dict[str, Any]]]:
    for section, kind in SINGLE.items():
        if isinstance(table := data.get(section), dict):
            yield (section,), kind, table
    for section, kind in MANY.items():
        items = data.get(section)
        for position, item in enumerate(items if isinstance(items, list) else ()):
            if isinstance(item, dict):
                yield (section, position), kind, item


def _section_mistakes(data: dict[str, Any]) -> Iterator[Mistake]:
    for section, value in data.items():
        if section not in SECTIONS:
            remedy = suggest(section, SECTIONS, f"known are {', '.join(SECTIONS)}")
            yield Mistake((section,), "no such section", remedy)
        elif section in MANY and not (
            isinstance(value, list) and all(isinstance(item, dict) for item in value)
        ):
            yield Mistake((section,), "several may follow", f"write [[{section}]]")
        elif section not in MANY and not isinstance(value, dict):
            remedy = f"write [{section}] once, in single brackets"
            yield Mistake((section,), "there is one such table", remedy)
    near = {suggest(section, REQUIRED, "") for section in data if section not in SECTIONS}
    for section in REQUIRED:
        if section not in data and f"did you mean {section!r}?" not in near:
            brackets = f"[[{section}]]" if section in MANY else f"[{section}]"
            shown = "[surface.top] and [surface.bottom]" if section == "surface" else brackets
            yield Mistake((section,), "is missing", f"add {shown}")


def _entry(kind: type[Entry], table: dict[str, Any]) -> tuple[Entry | None, list[Mistake]]:
    """The entry without what is wrong in it; None where something needed is wrong."""
    try:
        return kind.model_validate(table), []
    except ValidationError as error:
        details = error.errors(include_url=False)
    guessed = {_near_miss(kind, detail) for detail in details}
    mistakes = [
        _worded(kind, detail)
        for detail in details
        if not (detail["type"] == "missing" and detail["loc"] in guessed)
    ]
    repaired: Any = table
    for detail in details:
        repaired = _without(repaired, detail["loc"])
    try:
        return kind.model_validate({**STAND_INS.get(kind, {}), **repaired}), mistakes
    except ValidationError:
        return None, mistakes


def _without(node: Any, loc: Where) -> Any:
    """A copy of nested tables with one key left out."""
    if not loc:
        return node
    step, *rest = loc
    if isinstance(node, dict) and step in node:
        if not rest:
            return {key: value for key, value in node.items() if key != step}
        return {**node, step: _without(node[step], tuple(rest))}
    if isinstance(node, dict) and isinstance(step, int):
        return _without(node, tuple(rest))
    if isinstance(node, list) and isinstance(step, int) and step < len(node):
        return [_without(item, tuple(rest)) if at == step else item for at, item in enumerate(node)]
    return node


def _near_miss(kind: type[Entry], detail: ErrorDetails) -> Where | None:
    """Where the misspelt key of an `extra` error should have stood."""
    if detail["type"] != "extra_forbidden":
        return None
    *parent, key = detail["loc"]
    found = re.fullmatch(r"did you mean '(.*)'\?", suggest(str(key), _known(kind, parent), ""))
    return (*parent, found.group(1)) if found else None


def _known(kind: type[Entry], parent: list[str | int]) -> list[str]:
    """The keys of the table at `parent` inside an entry of this kind."""
    for step in parent:
        if isinstance(step, str):
            kind = _nested(kind, step)
    return [key for key in kind.model_fields if key != "password"]


def _nested(kind: type[Entry], key: str) -> type[Entry]:
    pending: list[Any] = [kind.model_fields[key].annotation]
    while pending:
        annotation = pending.pop()
        if isinstance(annotation, type) and issubclass(annotation, Entry):
            return annotation
        pending += getattr(annotation, "__args__", ())
    raise AssertionError(f"{kind.__name__}.{key} holds no table")


_EXPECTED = {
    "float_type": "a number; write it without quotes, with a point",
    "int_type": "a whole number; write it without quotes",
    "int_from_float": "a whole number; leave out the fraction",
    "string_type": 'a text; put it in quotes, as in "A1"',
    "bool_type": "true or false; write it without quotes",
    "list_type": "a list; write it in square brackets",
    "dict_type": "a table; write { key = value }",
    "model_type": "a table; write { key = value }",
}


def _worded(kind: type[Entry], detail: ErrorDetails) -> Mistake:
    where, value = detail["loc"], detail["input"]
    match detail["type"]:
        case "missing":
            return Mistake(where, "is missing", f"add {where[-1]} = ...")
        case "extra_forbidden":
            known = _known(kind, list(where[:-1]))
            remedy = suggest(str(where[-1]), known, f"known here are {', '.join(known)}")
            return Mistake(where, "no such key here", remedy)
        case "finite_number":
            return Mistake(where, f"{value} is not a finite number", "write the real value")
        case "value_error":
            reason, _, remedy = str(detail["ctx"]["error"]).partition("; ")
            return Mistake(where, reason, remedy)
        case known_type if known_type in _EXPECTED:
            expected, _, remedy = _EXPECTED[known_type].partition("; ")
            return Mistake(where, f"{_short(value)} is not {expected}", remedy)
        case _:
            return Mistake(where, detail["msg"], f"correct {_short(value)}")


def _short(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 60 else f"{text[:57]}..."
