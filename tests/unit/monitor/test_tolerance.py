"""How far a new sensor may be off."""

import pytest

from platewatch.errors import SettingsError
from platewatch.monitor.signals import element_range_degC
from platewatch.monitor.tolerance import CLASSES, tolerance_K


@pytest.mark.parametrize(
    ("element", "tolerance_class", "degC", "expected"),
    [
        # IEC 60584-1:2013, read in published copies of its table
        ("K", "1", 300.0, 1.5),
        ("K", "1", 400.0, 1.6),
        ("K", "1", 1000.0, 4.0),
        ("K", "2", 200.0, 2.5),
        ("K", "2", 400.0, 3.0),
        ("T", "1", 200.0, 0.8),
        ("J", "2", 333.0, 2.5),
        ("J", "1", 375.0, 1.5),
        ("J", "1", 376.0, 1.504),
        ("K", "3", -200.0, 3.0),
        ("T", "3", -100.0, 1.5),
        ("S", "1", 1000.0, 1.0),
        ("R", "1", 1600.0, 2.5),
        ("S", "2", 1000.0, 2.5),
        ("B", "2", 600.0, 1.5),
        ("B", "3", 1000.0, 5.0),
        # IEC 60751, from memory
        ("pt100", "AA", 100.0, 0.27),
        ("pt100", "A", 100.0, 0.35),
        ("pt100", "B", 100.0, 0.8),
        ("pt100", "B", -100.0, 0.8),
        ("pt100", "C", 100.0, 1.6),
    ],
)
def test_a_new_sensor_may_be_off_by_what_its_class_says(element, tolerance_class, degC, expected):
    """The greater of a fixed and a proportional limit."""
    assert tolerance_K(element, tolerance_class, degC) == pytest.approx(expected, abs=1e-9)


@pytest.mark.parametrize(
    ("element", "tolerance_class", "degC"),
    [("K", "1", 1001.0), ("K", "3", 100.0), ("T", "2", 351.0), ("B", "2", 200.0)],
)
def test_a_class_says_nothing_outside_its_own_range(element, tolerance_class, degC):
    """None, so that nobody takes an extrapolated limit for the standard's."""
    assert tolerance_K(element, tolerance_class, degC) is None


@pytest.mark.parametrize(
    ("element", "tolerance_class"), [("J", "3"), ("B", "1"), ("pt100", "1"), ("K", "A"), ("S", "3")]
)
def test_an_impossible_class_names_the_possible_ones(element, tolerance_class):
    """The description is wrong, and the message says what it may hold."""
    with pytest.raises(SettingsError, match=", ".join(CLASSES[element])):
        tolerance_K(element, tolerance_class, 100.0)


@pytest.mark.parametrize("element", CLASSES)
def test_every_element_has_a_range_and_a_class(element):
    """Tolerances and conversions know the same elements."""
    low, high = element_range_degC(element)
    reached = [tolerance_K(element, c, 650.0 if element == "B" else 20.0) for c in CLASSES[element]]
    assert low < high
    assert None not in reached


def test_an_unknown_element_is_refused():
    """A misspelt element does not pass as one without tolerance."""
    with pytest.raises(SettingsError, match="unknown element"):
        tolerance_K("pt1000", "A", 20.0)
