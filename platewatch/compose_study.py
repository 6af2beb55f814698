"""Studies of a plate as described, for the commands that ask for them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from platewatch.compose_plate import Description, build_filter, reference_degC
from platewatch.studies.facts import Facts, derive
from platewatch.studies.picture import svg_picture
from platewatch.studies.picture_plate import plate_picture
from platewatch.studies.whatif import WhatIf, whatif_steady, whatif_transient
from platewatch.thermal.conduction import NOMINAL_AMBIENT_DEGC
from platewatch.thermal.grid import build_grid
from platewatch.units import TemperatureUnit

__all__ = ["Facts", "WhatIf", "derive_facts", "draw_field", "draw_plate", "what_if"]


def derive_facts(description: Description) -> Facts:
    """What follows from a description, for `check`."""
    return derive(build_filter(description), reference_degC(description))


def draw_plate(description: Description) -> str:
    """The plate as described, SVG."""
    return plate_picture(description.plate, build_grid(description.plate))


def draw_field(description: Description, found: WhatIf) -> str:
    """A calculated field in the plate's own unit, SVG."""
    return svg_picture(found, TemperatureUnit(description.unit))


def what_if(
    description: Description,
    powers: Mapping[str, float],
    surround: Mapping[str, float],
    loads: Sequence[str],
    after_s: float | None,
) -> WhatIf:
    """A calculated field: steady, or some time after a start at ambient.

    powers: W by zone;  surround: degC by channel, those not named count as 22 degC
    """
    plate = description.plate
    if after_s is None:
        return whatif_steady(plate, powers, surround, loads)
    start_degC = next(iter(surround.values()), NOMINAL_AMBIENT_DEGC)
    return whatif_transient(
        plate, powers, surround, loads, after_s=after_s, initial_degC=start_degC
    )
