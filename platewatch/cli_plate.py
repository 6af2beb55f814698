"""The commands about a plate as described: check and whatif."""

from __future__ import annotations

import json
from argparse import Namespace
from dataclasses import asdict
from pathlib import Path
from typing import Any

from platewatch import compose_plate as compose
from platewatch import compose_study as study
from platewatch.cli_parser import WHATIF_CAUTION
from platewatch.errors import SettingsError, StorageError
from platewatch.units import (
    SIGN,
    TemperatureUnit,
    plausible,
    to_degC,
    written,
    written_difference,
)


def check(arguments: Namespace) -> int:
    """Every mistake of a description, else what follows from it."""
    description = compose.describe(Path(arguments.plate))
    facts = study.derive_facts(description)
    if arguments.picture:
        _write_picture(Path(arguments.picture), study.draw_plate(description))
    if arguments.json:
        told = asdict(facts) | {"warnings": list(facts.warnings)}
        print(json.dumps(told, indent=2))
        return 0
    for line in _fact_lines(facts, Degrees(description.unit)):
        print(line)
    if arguments.picture:
        print(f"picture in {arguments.picture}")
    return 0


class Degrees:
    """Temperatures as the plate's own unit writes them."""

    def __init__(self, unit: TemperatureUnit) -> None:
        self._unit = unit

    def text(self, degC: float) -> str:
        return written(degC, self._unit)

    def difference(self, kelvin: float, digits: int = 1) -> str:
        return written_difference(kelvin, self._unit, digits)

    def read(self, option: str, text: str) -> float:
        """degC; raises SettingsError for what is no temperature."""
        value = _number(option, text)
        if not plausible(value, self._unit):
            raise SettingsError(
                f"{option}: {text} {SIGN[self._unit]} is no temperature of a room or a plate"
            )
        return to_degC(value, self._unit)


def _fact_lines(facts: study.Facts, degrees: Degrees) -> list[str]:
    at = degrees.text(facts.reference_degC)
    verdict = "thin" if facts.is_thin else "NOT thin"
    lines = [
        f"plate {facts.plate}: the description holds no mistake",
        f"cells             {facts.cells} of {facts.cell_m * 1e3:.1f} mm",
        f"loss              {facts.h_W_m2K:.1f} W/m²K, both faces at {at}",
        f"Biot number       {facts.biot:.3f} with the largest coefficient "
        f"{facts.h_largest_W_m2K:.4g} W/m²K: {verdict}",
    ]
    if facts.spread_m is not None:
        lines.append(f"spread length     {facts.spread_m * 1e3:.0f} mm")
    slow = "it loses no heat" if facts.slow_s is None else _duration(facts.slow_s)
    lines += [
        f"time constants    {slow} as a whole, {_duration(facts.even_s)} from place to place",
        f"reduced model     {facts.order} modes, at most {degrees.difference(facts.error_K, 2)} "
        "off the full model over a heat-up",
        f"heaters           {facts.watts:.0f} W in all",
    ]
    if isinstance(facts.full_power_degC, str):
        lines.append(f"full power        {facts.full_power_degC}")
    else:
        hottest, mean = facts.full_power_degC
        lines.append(
            f"full power        ends at {degrees.text(hottest)} at the hottest place, "
            f"{degrees.text(mean)} on average"
        )
    for zone in facts.support:
        names = ", ".join(zone.sensors) or "none"
        lines.append(
            f"zone {zone.zone:12s} thermocouples in reach: {names}; hottest place known to "
            f"± {degrees.difference(1.96 * zone.sd_K)} (95 %) in a steady hold"
        )
    return [*lines, *(f"warning: {text}" for text in facts.warnings)]


def _duration(seconds: float) -> str:
    return f"{seconds:.0f} s" if seconds < 120 else f"{seconds / 60:.0f} min"


def whatif(arguments: Namespace) -> int:
    """The field that powers and surroundings would give."""
    description = compose.describe(Path(arguments.plate))
    degrees = Degrees(description.unit)
    places = [_place(text) for text in arguments.at]
    powers = _powers(arguments.power)
    if sum(powers.values()) < 0:
        raise SettingsError(
            f"--power: {sum(powers.values()):g} W in all would cool the plate, which no heater "
            "does; give watts above 0"
        )
    found = study.what_if(
        description,
        powers,
        _ambients(arguments.ambient, description, degrees),
        tuple(arguments.load),
        arguments.after,
    )
    at = [(x, y, found.at(x / 1e3, y / 1e3)) for x, y in places]
    if arguments.picture:
        _write_picture(Path(arguments.picture), study.draw_field(description, found))
    if arguments.json:
        print(json.dumps(_whatif_object(found, at), indent=2))
        return 0
    when = "steady" if found.after_s is None else f"after {_duration(found.after_s)}"
    place = f"x {found.hottest_x_m * 1e3:.0f} mm, y {found.hottest_y_m * 1e3:.0f} mm"
    print(f"{when}: hottest {degrees.text(found.hottest_degC)} at {place}")
    print(f"coldest {degrees.text(found.coldest_degC)}, mean {degrees.text(found.mean_degC)}")
    for name, degC in found.load_degC.items():
        print(f"load {name}: {degrees.text(degC)}")
    for x, y, degC in at:
        print(f"x {x:g} mm, y {y:g} mm: {degrees.text(degC)}")
    energy = found.energy
    unit = "W" if found.after_s is None else "J"
    print(
        f"heat: {energy.entered:.4g} {unit} in, {energy.stored:.4g} {unit} stored, "
        f"{energy.lost:.4g} {unit} lost"
    )
    for line in _power_notes(description, powers):
        print(line)
    if arguments.picture:
        print(f"picture in {arguments.picture}")
    print(WHATIF_CAUTION)
    return 0


def _number(option: str, text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = float("nan")
    if not abs(value) < 1e12:
        raise SettingsError(f"{option}: {text!r} is no number")
    return value


def _power(text: str) -> tuple[str, float]:
    zone, separator, watts = text.partition("=")
    if not separator or not zone:
        raise SettingsError(f"--power {text!r} is not ZONE=W; write --power Z1=300")
    return zone, _number("--power", watts)


def _powers(given: list[str]) -> dict[str, float]:
    """W by zone, each named once."""
    powers: dict[str, float] = {}
    for zone, watts in map(_power, given):
        if zone in powers:
            raise SettingsError(f"--power: zone {zone} is named twice; give each zone once")
        powers[zone] = watts
    return powers


def _power_notes(description: compose.Description, powers: dict[str, float]) -> list[str]:
    """What a person should see of powers that no heater of this plate gives."""
    notes = []
    for name, watts in powers.items():
        zone = description.plate.zone(name)
        if watts > zone.watts:
            notes.append(f"note: zone {name} is rated {zone.watts:g} W, not {watts:g} W")
        elif watts < 0:
            notes.append(f"note: zone {name} takes {-watts:g} W away, which no heater does")
    return notes


def _ambients(
    given: list[str], description: compose.Description, degrees: Degrees
) -> dict[str, float]:
    """degC by surround channel: one number for all of them, or NAME=T for one."""
    channels = compose.thermal_channels(description)
    found: dict[str, float] = {}
    for text in given:
        name, separator, value = text.rpartition("=")
        degC = degrees.read("--ambient", value)
        if separator:
            found[name] = degC
        elif not channels:
            raise SettingsError(
                "--ambient: every surrounding of this plate is a fixed number in its description"
            )
        else:
            found |= dict.fromkeys(channels, degC)
    return found


def _place(text: str) -> tuple[float, float]:
    parts = text.split(",")
    if len(parts) != 2:
        raise SettingsError(f"--at {text!r} is not X,Y in mm; write --at 200,200")
    return _number("--at", parts[0]), _number("--at", parts[1])


def _write_picture(path: Path, svg: str) -> None:
    if path.suffix.lower() != ".svg":
        raise SettingsError(f"--picture {path}: only SVG can be drawn; give a name in .svg")
    if not path.parent.is_dir():
        raise StorageError(f"{path}: folder {path.parent} does not exist; create it first")
    try:
        path.write_text(svg, encoding="utf-8")
    except OSError as error:
        raise StorageError(f"{path}: cannot be written ({error.strerror})") from None


def _whatif_object(found: study.WhatIf, at: list[tuple[float, float, float]]) -> dict[str, Any]:
    return {
        "plate": found.plate.name,
        "after_s": found.after_s,
        "hottest": {
            "degC": found.hottest_degC,
            "x_mm": found.hottest_x_m * 1e3,
            "y_mm": found.hottest_y_m * 1e3,
        },
        "coldest_degC": found.coldest_degC,
        "mean_degC": found.mean_degC,
        "loads_degC": dict(found.load_degC),
        "at": [{"x_mm": x, "y_mm": y, "degC": degC} for x, y, degC in at],
        "heat": asdict(found.energy) | {"unit": "W" if found.after_s is None else "J"},
        "caution": WHATIF_CAUTION,
    }
