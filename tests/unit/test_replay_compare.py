"""Two lists of alarms side by side."""

from __future__ import annotations

from platewatch.replay import Raised
from platewatch.replay_compare import Change, difference_lines, differences


def raised(second: int, subject: str, alarm: str = "peak-now") -> Raised:
    return Raised(f"2026-03-01T08:00:{second:02d}Z", alarm, subject, "high", "zone Z5", "hot")


def test_each_alarm_is_compared_with_its_own_like() -> None:
    """The first raising with the first, the second with the second; the rest came or went."""
    before = [raised(10, "T5"), raised(20, "T5"), raised(30, "product")]
    after = [raised(4, "T5"), raised(25, "T5"), raised(40, "T5"), raised(50, "T9")]
    found = [(d.change, d.subject, d.by_s) for d in differences(before, after)]
    assert found == [
        (Change.EARLIER, "T5", -6.0),
        (Change.LATER, "T5", 5.0),
        (Change.GONE, "product", 0.0),
        (Change.ADDED, "T5", 0.0),
        (Change.ADDED, "T9", 0.0),
    ]


def test_a_person_reads_what_changed_in_order_of_time() -> None:
    """One line an alarm, with its time and how it moved."""
    found = differences([raised(10, "T5"), raised(30, "a")], [raised(4, "T5"), raised(50, "b")])
    assert difference_lines(found, "own.toml", "other.toml") == [
        "with the limits of other.toml instead of those of own.toml:",
        "  ~ 2026-03-01T08:00:04Z  peak-now T5: 6 s earlier",
        "  - 2026-03-01T08:00:30Z  peak-now a: no longer raised",
        "  + 2026-03-01T08:00:50Z  peak-now b: raised only now",
    ]


def test_equal_lists_are_said_to_be_equal() -> None:
    """No empty list to be wondered at."""
    for both in ([], [raised(1, "T5")]):
        (line,) = difference_lines(differences(both, both), "a.toml", "b.toml")
        assert "the same" in line
