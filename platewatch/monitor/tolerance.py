"""How far a new sensor of a tolerance class may be off.

Thermocouples: IEC 60584-1:2013 (formerly 60584-2), for new wire.  Pt100: IEC 60751:2008,
wire-wound, from memory.  A class says nothing outside its own temperature range.
"""

from __future__ import annotations

from typing import NamedTuple

from platewatch.errors import SettingsError
from platewatch.thermal.plate import Sensor

BIAS_WITHOUT_CLASS_K = 0.2


class Rule(NamedTuple):
    """From low to high degC: the greater of least K and offset + share |t - origin|, K."""

    low_degC: float
    high_degC: float
    least_K: float
    share: float
    offset_K: float = 0.0
    origin_degC: float = 0.0

    def at(self, degC: float) -> float | None:
        if not self.low_degC <= degC <= self.high_degC:
            return None
        return max(self.least_K, self.offset_K + self.share * abs(degC - self.origin_degC))


# Types R and S, class 1: 1 K to 1100 degC, then 1 + 0.003 (t - 1100).
_NOBLE_1 = (
    Rule(0, 1100, 1.0, 0.0),
    Rule(1100, 1600, 1.0, 0.003, offset_K=1.0, origin_degC=1100),
)
_NOBLE_2 = (Rule(0, 1600, 1.5, 0.0025),)
_BASE_3 = (Rule(-200, 40, 2.5, 0.015),)

_RULES: dict[str, dict[str, tuple[Rule, ...]]] = {
    "K": {"1": (Rule(-40, 1000, 1.5, 0.004),), "2": (Rule(-40, 1200, 2.5, 0.0075),), "3": _BASE_3},
    "J": {"1": (Rule(-40, 750, 1.5, 0.004),), "2": (Rule(-40, 750, 2.5, 0.0075),)},
    "T": {
        "1": (Rule(-40, 350, 0.5, 0.004),),
        "2": (Rule(-40, 350, 1.0, 0.0075),),
        "3": (Rule(-200, 40, 1.0, 0.015),),
    },
    "N": {"1": (Rule(-40, 1000, 1.5, 0.004),), "2": (Rule(-40, 1200, 2.5, 0.0075),), "3": _BASE_3},
    "E": {"1": (Rule(-40, 800, 1.5, 0.004),), "2": (Rule(-40, 900, 2.5, 0.0075),), "3": _BASE_3},
    "S": {"1": _NOBLE_1, "2": _NOBLE_2},
    "R": {"1": _NOBLE_1, "2": _NOBLE_2},
    "B": {"2": (Rule(600, 1700, 1.5, 0.0025),), "3": (Rule(600, 1700, 4.0, 0.005),)},
    "pt100": {
        "AA": (Rule(-50, 250, 0.0, 0.0017, offset_K=0.1),),
        "A": (Rule(-100, 450, 0.0, 0.002, offset_K=0.15),),
        "B": (Rule(-196, 600, 0.0, 0.005, offset_K=0.3),),
        "C": (Rule(-196, 600, 0.0, 0.01, offset_K=0.6),),
    },
}

CLASSES: dict[str, tuple[str, ...]] = {element: tuple(rules) for element, rules in _RULES.items()}


def tolerance_K(element: str, tolerance_class: str, degC: float) -> float | None:
    """Greatest permitted deviation of a new sensor, K; None where its class does not reach.

    Raises SettingsError for a class that the element does not have.
    """
    if element not in _RULES:
        raise SettingsError(f"unknown element {element!r}; use one of {' '.join(_RULES)}")
    rules = _RULES[element].get(tolerance_class)
    if rules is None:
        raise SettingsError(
            f"element {element} has no tolerance class {tolerance_class!r}; "
            f"it has {', '.join(CLASSES[element])}"
        )
    return next((limit for rule in rules if (limit := rule.at(degC)) is not None), None)


def bias_sd_K(sensor: Sensor, reference_degC: float) -> float:
    """Anywhere within the limit of the class (IEC 60584-1, IEC 60751) with equal probability:
    the limit over the root of three (JCGM 100:2008, 4.3.7)."""
    if sensor.tolerance_class is None:
        return BIAS_WITHOUT_CLASS_K
    limit = tolerance_K(sensor.element, sensor.tolerance_class, reference_degC)
    return BIAS_WITHOUT_CLASS_K if limit is None else limit / 3**0.5
