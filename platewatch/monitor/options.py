"""How the estimator and the forecast are to work; defaults suit most plates."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class EstimatorOptions:
    tick_s: float = 2.0
    late_s: float = 2.0

    @property
    def tick_us(self) -> int:
        return round(self.tick_s * 1e6)

    @property
    def late_us(self) -> int:
        return round(self.late_s * 1e6)


@dataclass(frozen=True)
class ForecastOptions:
    horizon_s: float = 900.0
    step_s: float = 10.0
    every_s: float = 5.0


@dataclass(frozen=True)
class CauseOptions:
    """off: names not to consider;  prior: (name, rate per plate-day)."""

    off: tuple[str, ...] = ()
    prior: tuple[tuple[str, float], ...] = ()


CAUSE_NAMES = (
    "zone not heating",
    "zone stays on",
    "cold load",
    "unknown heat",
    "loss changed",
    "sensor step",
    "sensor drift",
    "sensor stuck",
    "sensor loose",
    "sensor reversed",
    "sensor wrong type",
    "sensor lag changed",
    "sensor noisy",
    "junction block shift",
    "swapped pair",
)
