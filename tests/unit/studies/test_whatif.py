"""What a plate would do: steady, after a time, with a load on it; and its picture."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from dataclasses import replace

import numpy as np
import pytest

from platewatch.errors import PlateError
from platewatch.studies.picture import svg_picture
from platewatch.studies.whatif import CAUTION, hottest_place, whatif_steady, whatif_transient
from platewatch.thermal.grid import build_grid
from platewatch.thermal.plate import (
    Circle,
    Contact,
    Correlation,
    Material,
    Plate,
    Rectangle,
    Sensor,
    Surface,
    Table,
    Zone,
)

IRON = Material(
    "iron",
    Table((20.0, 200.0), (53.0, 49.0)),
    7150.0,
    Table((20.0, 300.0), (460.0, 560.0)),
    0.7,
    "-",
)
UP = Surface("surround/ambient", correlation=Correlation.NATURAL_UP)
DOWN = Surface("surround/ambient", correlation=Correlation.NATURAL_DOWN)
ZONES = (
    Zone("H1", (Rectangle(0.025, 0.025, 0.2, 0.15),), 700.0, 25.0, 1.0),
    Zone("H2", (Rectangle(0.225, 0.025, 0.2, 0.15),), 700.0, 25.0, 1.0),
)
MOULD = Contact("mould", Rectangle(0.05, 0.05, 0.15, 0.15), 400.0, 7200.0)


def plate(**more) -> Plate:
    return Plate(
        "trial-plate",
        Rectangle(0, 0, 0.45, 0.35),
        0.015,
        IRON,
        UP,
        DOWN,
        holes=(Circle(0.225, 0.04, 0.024),),
        zones=ZONES,
        sensors=(Sensor("A1", 0.125, 0.1), Sensor("A2", 0.325, 0.1)),
        contacts=(MOULD,),
        **more,
    )


POWERS = {"H1": 300.0, "H2": 200.0}


def test_a_long_time_leads_to_the_steady_field():
    """Two routes: the implicit steps after ten hours and Newton at once."""
    steady = whatif_steady(plate(), POWERS, {"ambient": 25.0}, cell_m=0.012)
    late = whatif_transient(plate(), POWERS, {"ambient": 25.0}, cell_m=0.012, after_s=36000.0)
    assert np.abs(late.T - steady.T).max() < 0.02
    assert late.hottest_degC == pytest.approx(steady.hottest_degC, abs=0.02)


def test_the_account_of_heat_closes():
    """In = stored + lost: to rounding when steady, to the steps' accuracy in time."""
    steady = whatif_steady(plate(), POWERS, cell_m=0.012)
    assert steady.energy.lost == pytest.approx(500.0, rel=1e-9)
    soon = whatif_transient(plate(), POWERS, cell_m=0.012, after_s=900.0)
    assert soon.energy.entered == pytest.approx(500.0 * 900.0)
    assert soon.energy.stored + soon.energy.lost == pytest.approx(soon.energy.entered, rel=1e-4)


def test_a_cold_load_holds_its_place_down_and_warms():
    """Mould of 7200 J/K on 9 W/K: 22 + (T - 22)(1 - exp(-300/800)) for a plate between 100
    and 150 degC, so 46 to 62 degC after five minutes, and the plate under it colder."""
    bare = whatif_transient(plate(), POWERS, cell_m=0.012, after_s=300.0, initial_degC=150.0)
    loaded = whatif_transient(
        plate(), POWERS, loads=("mould",), cell_m=0.012, after_s=300.0, initial_degC=150.0
    )
    assert 46 < loaded.load_degC["mould"] < 62
    assert loaded.at(0.125, 0.125) < bare.at(0.125, 0.125) - 5
    total = loaded.energy
    assert total.entered == pytest.approx(total.stored + total.lost, rel=1e-3, abs=200)


def test_a_load_left_long_enough_takes_the_temperature_under_it():
    """It loses no heat of its own, so it changes nothing when steady."""
    bare = whatif_steady(plate(), POWERS, cell_m=0.012)
    loaded = whatif_steady(plate(), POWERS, loads=("mould",), cell_m=0.012)
    lowest, highest = bare.at(0.06, 0.19), bare.hottest_degC
    assert lowest < loaded.load_degC["mould"] < highest
    assert loaded.mean_degC == pytest.approx(bare.mean_degC, abs=0.5)


def test_a_warmer_room_warms_the_plate():
    """`ambient` without the prefix is the same channel."""
    cold = whatif_steady(plate(), POWERS, {"ambient": 15.0}, cell_m=0.02)
    warm = whatif_steady(plate(), POWERS, {"surround/ambient": 35.0}, cell_m=0.02)
    assert warm.mean_degC > cold.mean_degC + 10


def test_no_power_leaves_the_plate_at_room_temperature():
    """Natural convection has no slope there; the answer is still found."""
    result = whatif_steady(plate(), {}, {"ambient": 24.0}, cell_m=0.02)
    assert np.abs(result.T - 24.0).max() < 0.01


@pytest.mark.parametrize(
    ("ask", "words"),
    [
        (lambda: whatif_steady(plate(), {"H9": 1.0}), "H9"),
        (lambda: whatif_steady(plate(), POWERS, {"fan": 20.0}), "surround/ambient"),
        (lambda: whatif_steady(plate(), POWERS, loads=("lid",)), "mould"),
        (lambda: whatif_steady(plate(), {"H1": 1e8}), "beyond"),
        (lambda: whatif_transient(plate(), POWERS, after_s=0.0), "above zero"),
        (lambda: whatif_steady(plate(), POWERS, cell_m=0.02).at(2.0, 0.1), "not on the plate"),
        (lambda: whatif_steady(plate(), POWERS, cell_m=0.02).at(0.225, 0.04), "not on the plate"),
    ],
)
def test_a_foreseeable_mistake_is_one_clear_sentence(ask, words):
    """Unknown names list the known ones; impossible questions say why."""
    with pytest.raises(PlateError, match=words):
        ask()


def test_a_peak_between_cells_is_found_below_the_cell():
    """A paraboloid's top, exactly."""
    grid = build_grid(replace(plate(), holes=()), 0.01)
    field = 200 - 900 * (grid.x - 0.2137) ** 2 - 1500 * (grid.y - 0.1482) ** 2
    assert hottest_place(grid, field) == pytest.approx((200.0, 0.2137, 0.1482), abs=1e-9)


def test_the_picture_shows_plate_zones_sensors_scale_and_caution():
    """Self-contained SVG: names, numbers at the scale, the caution's exact words."""
    result = whatif_steady(plate(), POWERS, cell_m=0.012)
    picture = svg_picture(result)
    root = ET.fromstring(picture)
    words = " ".join("".join(e.itertext()) for e in root.iter() if e.tag.endswith("text"))
    assert CAUTION in words
    for name in ("H1", "H2", "A1", "A2", f"{result.hottest_degC:.1f} °C"):
        assert name in words
    assert f"{result.coldest_degC:.1f} °C" in words
    assert re.search(r"https?://(?!www\.w3\.org)", picture) is None


def test_the_picture_escapes_names_from_the_description():
    """A plate called `<b>` stays text."""
    result = whatif_steady(replace(plate(), name="<b>&"), POWERS, cell_m=0.03)
    assert "<b>&" not in svg_picture(result)
    assert ET.fromstring(svg_picture(result, lowest=0.0, highest=300.0)) is not None
    assert np.isfinite(result.T).all()
