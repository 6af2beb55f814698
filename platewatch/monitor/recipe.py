"""Recipes: the steps a batch should go through."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum


class Do(StrEnum):
    RAMP = "ramp"
    SOAK = "soak"
    WAIT = "wait"
    COOL = "cool"


@dataclass(frozen=True)
class Step:
    """ramp: to_degC, rate_K_per_s;  soak: duration_s, spread_limit_K;
    wait: within_K, longest_s;  cool: to_degC."""

    do: Do
    to_degC: float | None = None
    rate_K_per_s: float | None = None
    duration_s: float | None = None
    within_K: float | None = None
    longest_s: float | None = None
    spread_limit_K: float | None = None


@dataclass(frozen=True)
class Recipe:
    name: str
    steps: tuple[Step, ...]

    @property
    def set_points_degC(self) -> tuple[float, ...]:
        """Where ramps lead to."""
        return tuple(s.to_degC for s in self.steps if s.do is Do.RAMP and s.to_degC is not None)
