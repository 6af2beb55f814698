"""What `check` says about a plate from its description alone."""

from __future__ import annotations

import numpy as np
import pytest

from platewatch.thermal.conduction import build_model
from platewatch.thermal.facts import PlateFacts, plate_facts
from platewatch.thermal.grid import build_grid
from platewatch.thermal.plate import Contact, Layer, Material, Plate, Rectangle, Surface, Table
from platewatch.thermal.reduction import reduce

ALLOY = Material("6061", Table.constant(167.0), 2700.0, Table.constant(896.0), 0.1, "handbook")
GLASS = Material("glass", Table.constant(1.4), 2500.0, Table.constant(750.0), 0.9, "handbook")


def facts(loss: float = 10.0, **more) -> PlateFacts:
    face = Surface(25.0, coefficient=loss)
    plate = Plate("P1", Rectangle(0, 0, 0.4, 0.3), 0.012, ALLOY, face, face, **more)
    return plate_facts(reduce(build_model(plate, build_grid(plate, 0.01), 150.0)))


def test_the_time_constants_of_the_main_plate_are_the_published_ones():
    """Mean 1451.52 s exactly, first x mode 202.137918 s, first y mode 121.079469 s
    (calculated in closed form); the grid's share of the modes is below 0.1 %."""
    found = facts().time_constants_s
    assert found[0] == pytest.approx(1451.52, rel=1e-9)
    assert found[1:] == pytest.approx((202.137918, 121.079469), rel=1e-3)


def test_a_thin_plate_needs_no_core_band():
    """Bi = h d / k = 10 x 0.012 / 167; heat spreads sqrt(k d / H) = 317 mm."""
    found = facts()
    assert found.biot == pytest.approx(10 * 0.012 / 167)
    assert found.spread_m == pytest.approx(np.sqrt(167 * 0.012 / 20))
    assert found.is_thin
    assert found.core_band_K(30000) == 0


def test_a_hard_pressed_load_makes_a_plate_thick():
    """A contact of 5000 W/m2K: Bi 0.36; 30 kW/m2 adds q d / (3 k) = 0.72 K."""
    load = Contact("die", Rectangle(0.1, 0.1, 0.1, 0.1), 5000.0, 2000.0)
    found = facts(contacts=(load,))
    assert found.biot == pytest.approx(5000 * 0.012 / 167)
    assert found.core_band_K(30000) == pytest.approx(30000 * 0.012 / 167 / 3)


def test_a_glass_layer_counts_through_the_thickness():
    """4 mm of glass on the plate: its d / k adds to that of the metal."""
    found = facts(layers=(Layer(GLASS, 0.004),))
    assert found.biot == pytest.approx(10 * (0.012 / 167 + 0.004 / 1.4))


def test_a_plate_without_loss_never_settles():
    """Its slowest time constant is infinite, and so is the reach of a disturbance."""
    found = facts(0.0)
    assert found.time_constants_s[0] == np.inf
    assert found.spread_m == np.inf
