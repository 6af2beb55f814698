"""The table of a thermocouple or Pt100, as it stands in the file."""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterator
from typing import Annotated, Any

from pydantic import BeforeValidator, PlainValidator

from platewatch.adapters.settings_schema import (
    Entry,
    Mistake,
    OneOf,
    Temperature,
    TopicName,
    Within,
)
from platewatch.adapters.settings_schema_plate import AmbientOption
from platewatch.thermal.plate import Role

THERMOCOUPLES = ("K", "J", "T", "N", "E", "S", "R", "B")
SIGNALS = ("degC", "degF", "K", "mV", "ohm", "mA")
TOLERANCE_CLASSES = {
    # IEC 60584-1:2013, table of tolerance classes; IEC 60751:2022 for pt100.
    **dict.fromkeys(("K", "N", "E", "T"), ("1", "2", "3")),
    "J": ("1", "2"),
    **dict.fromkeys(("R", "S"), ("1", "2")),
    "B": ("2", "3"),
    "pt100": ("AA", "A", "B", "C"),
}
_SAFETY = (
    "platewatch is no safety function and must not stand in for one",
    'write "control" or "monitor"; a limiter has its own sensor and its own cut-off',
)


def _class_word(value: Any) -> Any:
    return str(value) if isinstance(value, int) and not isinstance(value, bool) else value


def _date(value: Any) -> str:
    if isinstance(value, dt.date) and not isinstance(value, dt.datetime):
        return value.isoformat()
    try:
        return dt.date.fromisoformat(value).isoformat()
    except (TypeError, ValueError):
        raise ValueError(f"{value!s} is not a date; write 2026-03-31") from None


DateText = Annotated[str, PlainValidator(_date)]


class SensorEntry(Entry):
    name: Annotated[str, TopicName()]
    x_mm: float
    y_mm: float
    element: Annotated[str | None, OneOf((*THERMOCOUPLES, "pt100"))] = None
    signal: Annotated[str, OneOf(SIGNALS)] = "degC"
    span: Annotated[list[float] | None, Temperature()] = None
    tolerance_class: Annotated[str | None, BeforeValidator(_class_word)] = None
    lag_s: Annotated[float, Within(0, 3600, "give the sensor's lag in s, 0 or more")] = 0.0
    noise: Annotated[
        float | None,
        Within(0, 50, "give the standard deviation of its noise, above 0", above=True),
    ] = None
    quantum: Annotated[float, Within(0, 50, "give the rounding step, 0 for none")] = 0.0
    cold_junction: AmbientOption = None
    junction_block: str = ""
    correction: Annotated[float, Within(-100, 100, "give what is added to the reading")] = 0.0
    calibrated_on: DateText = ""
    due_on: DateText = ""
    certificate: str = ""
    role: Annotated[  # left out: control where a loop names the sensor, else monitor
        str | None, OneOf(tuple(Role), dict.fromkeys(("safety", "limiter", "trip"), _SAFETY))
    ] = None
    where: str = ""

    def mistakes(self) -> Iterator[Mistake]:
        yield from self._signal_mistakes()
        yield from self._class_mistakes()
        if self.due_on and self.calibrated_on and self.due_on < self.calibrated_on:
            yield Mistake(
                ("due_on",),
                f"{self.due_on} lies before calibrated_on {self.calibrated_on}",
                "correct the dates",
            )

    def _signal_mistakes(self) -> Iterator[Mistake]:
        couple = self.element in THERMOCOUPLES
        if self.signal == "mA" and self.span is None:
            yield Mistake(
                ("span",),
                "is missing for a mA signal",
                "add span = [temperature at 4 mA, temperature at 20 mA]",
            )
        if self.signal != "mA" and self.span is not None:
            yield Mistake(("span",), "belongs to a mA signal only", "leave it out")
        if self.span is not None and (len(self.span) != 2 or self.span[0] >= self.span[-1]):
            yield Mistake(("span",), "is not [low, high] with low below high", "correct it")
        if self.signal in ("mV", "ohm") and self.element is None:
            yield Mistake(
                ("element",), f"is missing for a signal in {self.signal}", 'add element = "K" ...'
            )
        if self.signal == "mV" and self.element == "pt100":
            yield Mistake(("signal",), "a pt100 gives no mV", 'write signal = "ohm" or "degC"')
        if self.signal == "ohm" and couple:
            yield Mistake(
                ("signal",), f"a type {self.element} thermocouple gives no ohm", 'write "mV"'
            )
        if self.signal == "mV" and couple and self.cold_junction is None:
            yield Mistake(
                ("cold_junction",),
                "is missing for a signal in mV",
                'add cold_junction = a temperature or a channel such as "surround/cabinet"',
            )

    def _class_mistakes(self) -> Iterator[Mistake]:
        word = self.tolerance_class
        if word is None:
            return
        if self.element is None:
            yield Mistake(("element",), "is missing for a tolerance class", 'add element = "K" ...')
            return
        possible = TOLERANCE_CLASSES.get(self.element)
        if possible is not None and word not in possible:
            norm = "IEC 60751" if self.element == "pt100" else "IEC 60584-1"
            yield Mistake(
                ("tolerance_class",),
                f"{norm} knows no class {word} for {self.element}",
                f"use {' or '.join(possible)}, or leave it out",
            )
