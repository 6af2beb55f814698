"""The frame of a description's tables: strict entries, and what a value may be.

pydantic checks the kind of every value; the rules here (attached to a field by
`Annotated`) check what it says, so that one bad number does not hide others.
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any

from pydantic import BaseModel, ConfigDict

from platewatch.adapters.settings_lines import Where
from platewatch.units import ABSOLUTE_ZERO_DEGC, TemperatureUnit, to_degC


@dataclass(frozen=True)
class Mistake:
    """One thing wrong in the file: where, why, and what to do about it."""

    where: Where
    reason: str
    remedy: str

    def below(self, parent: Where) -> Mistake:
        return Mistake((*parent, *self.where), self.reason, self.remedy)


class Entry(BaseModel):
    """One table of the file."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True, allow_inf_nan=False)

    def mistakes(self) -> Iterator[Mistake]:
        """What is wrong within this table alone, paths relative to it."""
        return iter(())


class Rule:
    """What a single value may be."""

    def mistake(self, value: Any, unit: TemperatureUnit) -> tuple[str, str] | None:
        """(reason, remedy), or None where the value is right."""
        raise NotImplementedError


@dataclass(frozen=True)
class Within(Rule):
    """A number that is possible and plausible; `above`: low itself is excluded."""

    low: float
    high: float
    remedy: str
    above: bool = False

    def mistake(self, value: Any, unit: TemperatureUnit) -> tuple[str, str] | None:
        if self.low < value <= self.high or (value == self.low and not self.above):
            return None
        if value <= self.low and (self.above or self.low == 0):
            reason = f"{value:g} is not {'above' if self.above else 'at least'} {self.low:g}"
        else:
            reason = f"{value:g} is not plausible, expected {self.low:g} to {self.high:g}"
        return reason, self.remedy


@dataclass(frozen=True)
class OneOf(Rule):
    """A word out of a list; `because` explains words that people try."""

    words: tuple[str, ...]
    because: Mapping[str, tuple[str, str]] = field(default_factory=dict)

    def mistake(self, value: Any, unit: TemperatureUnit) -> tuple[str, str] | None:
        if value in self.words:
            return None
        if value in self.because:
            return self.because[value]
        return f"{value!r} is not one of {', '.join(self.words)}", suggest(value, self.words)


@dataclass(frozen=True)
class TopicName(Rule):
    """A name that becomes one level of a bus topic."""

    def mistake(self, value: Any, unit: TemperatureUnit) -> tuple[str, str] | None:
        remedy = "use letters, digits, '-', '_' and '.'"
        if not value.strip() or value != value.strip():
            return f"the name {value!r} is empty or has spaces at its ends", remedy
        bad = sorted({c for c in value if c in "/+#" or ord(c) < 32 or ord(c) == 127})
        if value.startswith("$"):
            bad.append("$")
        if bad:
            return f"{value!r} cannot stand in a bus topic because of {bad[0]!r}", remedy
        if len(value) > 64:
            return f"a name of {len(value)} characters is too long for a screen", "use at most 64"
        return None


@dataclass(frozen=True)
class Temperature(Rule):
    """A temperature in the unit of the file."""

    def mistake(self, value: Any, unit: TemperatureUnit) -> tuple[str, str] | None:
        if isinstance(value, str):
            return None
        degC = to_degC(value, unit)
        if ABSOLUTE_ZERO_DEGC <= degC <= 3000.0:
            return None
        return (
            f"{value:g} {unit} is no temperature a plate can have",
            f"give it in the unit of [plate], {unit}",
        )


@dataclass(frozen=True)
class SurroundChannel(Rule):
    """A number, or a channel of the surroundings."""

    def mistake(self, value: Any, unit: TemperatureUnit) -> tuple[str, str] | None:
        if not isinstance(value, str):
            return Temperature().mistake(value, unit)
        head, _, name = value.partition("/")
        if head == "surround" and TopicName().mistake(name, unit) is None:
            return None
        return (
            f"{value!r} is neither a temperature nor a channel of the surroundings",
            'write a number, or a channel such as "surround/ambient"',
        )


def value_mistakes(entry: Entry, unit: TemperatureUnit) -> Iterator[Mistake]:
    """Everything wrong inside one table and the tables within it."""
    yield from entry.mistakes()
    for key, info in type(entry).model_fields.items():
        value = getattr(entry, key)
        rules = [rule for rule in info.metadata if isinstance(rule, Rule)]
        for where, item in _items(key, value):
            if isinstance(item, Entry):
                for mistake in value_mistakes(item, unit):
                    yield mistake.below(where)
                continue
            for rule in rules:
                if found := rule.mistake(item, unit):
                    yield Mistake(where, *found)


def _items(key: str, value: Any) -> Iterator[tuple[Where, Any]]:
    if isinstance(value, list):
        yield from (((key, position), item) for position, item in enumerate(value))
    elif value is not None:
        yield (key,), value


def suggest(word: str, known: Iterable[str], otherwise: str = "write one of them") -> str:
    """'did you mean ...?' for a near miss, else what else to do."""
    choices = {name.lower(): str(name) for name in known}
    near = difflib.get_close_matches(str(word).lower(), choices, n=1, cutoff=0.55)
    return f"did you mean {choices[near[0]]!r}?" if near else otherwise


def a_number(value: Any) -> float:
    """value as a finite float; ValueError says what it is instead."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise ValueError(f"{value!r} is not a number; write it without quotes, with a point")
    if not math.isfinite(value):
        raise ValueError(f"{value} is not a finite number; write the real value")
    return float(value)
