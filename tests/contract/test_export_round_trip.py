"""What is exported reads back as it was recorded: every bit, every stamp, every text."""

from __future__ import annotations

import csv
import itertools
import math
from collections.abc import Iterator
from dataclasses import astuple, fields, replace
from pathlib import Path

import pytest
from hypothesis import Phase, given, settings
from hypothesis import strategies as st

from platewatch import cli_export
from platewatch.adapters.logs import read_log
from platewatch.adapters.storage import Store
from platewatch.adapters.tables_out import unguarded
from platewatch.types import (
    AlarmEvent,
    AlarmState,
    BatchEvent,
    Flag,
    Outcome,
    PeakRow,
    Reading,
)
from platewatch.units import from_iso

AT = 1_772_352_000_000_000  # 2026-03-01T08:00:00Z
UNITS = {"sensor/T1": "degC", "sensor/T2": "degC", "zone/Z1/duty": "1"}
ENDINGS = ["csv", "parquet"]

values = st.floats(0.0, 1.0) | st.sampled_from([0.1, 5e-324, 1 / 3, 0.9999999999999999])
temperatures = st.floats(-273.15, 3000.0)
readings = st.lists(
    st.builds(
        lambda n, channel, share, hot, flags: Reading(
            AT + n, channel, share if channel.startswith("zone") else hot, AT + n + 5, flags
        ),
        st.integers(0, 40),
        st.sampled_from([*UNITS]),
        values,
        temperatures,
        st.sampled_from([Flag.NONE, Flag.NONE, Flag.BACKLOG, Flag.LATE, Flag.REFUSED]),
    ),
    min_size=1,
    max_size=30,
    unique_by=lambda reading: (reading.at_us, reading.channel),
)
events = st.lists(
    st.tuples(st.integers(0, 40), st.sampled_from(["start", "load-on", "end"])),
    max_size=4,
    unique=True,
)
texts = st.text(st.characters(exclude_categories=["Cs"], exclude_characters="\0"), max_size=12)
# SQLite stores a REAL without a fraction as an integer, so the sign of zero is not kept.
numbers = st.floats(allow_nan=False, allow_infinity=False).map(lambda number: number + 0.0)
without_shrinking = [Phase.explicit, Phase.reuse, Phase.generate]  # a commit each is slow
maybe = st.none() | numbers


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Store]:
    """One record for all examples, each a plate of its own."""
    with Store.open(str(tmp_path_factory.mktemp("record") / "r.sqlite")) as opened:
        yield opened


numbered = itertools.count()


def new_plate(
    store: Store, seen: list[Reading], outcomes: list[Outcome], told: list[BatchEvent]
) -> str:
    plate = f"table-{next(numbered)}"
    store.write(plate, outcomes, seen, UNITS, told)
    return plate


@pytest.mark.parametrize("ending", ENDINGS)
@settings(max_examples=40, deadline=None, phases=without_shrinking)
@given(seen=readings, told=events)
def test_exported_readings_are_read_again_as_they_were_used(
    tmp_path_factory: pytest.TempPathFactory,
    store: Store,
    ending: str,
    seen: list[Reading],
    told: list[tuple[int, str]],
) -> None:
    """Design, section 4: the export is the log that replay takes, values to the last bit,
    stamps to the microsecond, batch events in their places; what was not used stays out."""
    if ending == "parquet":
        pytest.importorskip("pyarrow")
    batch = [BatchEvent(AT + n, event, '{"zone": "Z1"}') for n, event in sorted(told)]
    used = sorted((r.at_us, r.channel, r.value) for r in seen if r.usable)
    if not used:
        seen = [replace(r, flags=Flag.NONE) for r in seen]
        used = sorted((r.at_us, r.channel, r.value) for r in seen)
    log = tmp_path_factory.mktemp("out") / f"log.{ending}"
    cli_export.readings(store, cli_export.Wish(new_plate(store, seen, [], batch), log))
    rows = list(read_log(log, UNITS))
    back = [(r.at_us, r.channel, r.value) for row in rows for r in row.readings]
    assert sorted(back) == used
    assert [at_us for at_us, _, _ in back] == sorted(at_us for at_us, _, _ in back)
    again = [(row.event.at_us, row.event.event) for row in rows if row.event]
    assert sorted(again) == sorted((event.at_us, event.event) for event in batch)
    assert not [refusal for row in rows for refusal in row.refusals]


peak_rows = st.builds(
    PeakRow,
    at_us=st.integers(AT, AT + 10**12),
    **{f.name: numbers for f in fields(PeakRow) if f.type == "float"},
    now_zone=texts,
    ahead_zone=texts,
    cause=texts,
    limit_degC=maybe,
    p_over=maybe,
    to_limit_s=maybe,
)


def table(path: Path) -> list[dict[str, object]]:
    """Rows by column name; texts without their guard."""
    if path.suffix == ".parquet":
        parquet = pytest.importorskip("pyarrow.parquet")
        return list(parquet.read_table(path).to_pylist())
    with path.open(encoding="utf-8", newline="") as file:
        return [{k: unguarded(v) for k, v in row.items()} for row in csv.DictReader(file)]


def same(cell: object, value: object) -> bool:
    """Is this exported cell that recorded value?"""
    if value is None:
        return cell in ("", None)
    if isinstance(value, float):
        found = float(str(cell))
        return found == value and math.copysign(1, found) == math.copysign(1, value)
    return str(cell) == str(value)


@pytest.mark.parametrize("ending", ENDINGS)
@settings(max_examples=40, deadline=None, phases=without_shrinking)
@given(rows=st.lists(peak_rows, min_size=1, max_size=8, unique_by=lambda row: row.at_us))
def test_exported_peaks_are_the_recorded_ones(
    tmp_path_factory: pytest.TempPathFactory, store: Store, ending: str, rows: list[PeakRow]
) -> None:
    """RFC 4180 or Parquet: the same bits, whatever a zone or a cause is called; each row
    with its time in ISO 8601 with an offset beside the integer."""
    outcomes = [Outcome(row.at_us, peak=row) for row in rows]
    out = tmp_path_factory.mktemp("out") / f"peaks.{ending}"
    assert cli_export.peaks(store, cli_export.Wish(new_plate(store, [], outcomes, []), out))
    found = table(out)
    for cells, row in zip(found, sorted(rows, key=lambda row: row.at_us), strict=True):
        assert from_iso(str(cells["at"])) == row.at_us
        assert str(cells["at"]).endswith("Z")
        for column, value in zip(fields(PeakRow), astuple(row), strict=True):
            assert same(cells[column.name], value), (column.name, cells, row)


FORMULAS = ['=HYPERLINK("http://x","y")', "+1+1", "-2+3", "@SUM(A1)", "\t=1", "\r=1", "'=1"]


@pytest.mark.parametrize("ending", ENDINGS)
@pytest.mark.parametrize("text", FORMULAS)
def test_what_people_wrote_is_never_a_formula_of_a_spreadsheet(
    text: str, ending: str, store: Store, tmp_path: Path
) -> None:
    """OWASP, CSV injection: names and reasons are written by anyone; the guard is taken off
    again without loss.  Parquet has typed texts and needs none."""
    event = AlarmEvent(
        at_us=AT,
        alarm="peak-now",
        subject=text,
        place=text,
        from_state=AlarmState.UNACKNOWLEDGED,
        to_state=AlarmState.ACKNOWLEDGED,
        priority="high",
        value=-1.5,
        limit_value=None,
        cause=text,
        message=text,
        person=text,
        reason=text,
    )
    out = tmp_path / f"alarms.{ending}"
    plate = new_plate(store, [], [Outcome(AT, alarm_events=(event,))], [])
    assert cli_export.alarm_events(store, cli_export.Wish(plate, out)) == 1
    (cells,) = table(out)
    assert all(same(cells[f.name], getattr(event, f.name)) for f in fields(AlarmEvent))
    if ending == "csv":
        with out.open(encoding="utf-8", newline="") as file:
            raw = list(csv.reader(file))[1]
        assert [cell for cell in raw if cell.startswith(("=", "+", "@", "\t", "\r"))] == []
        assert [cell for cell in raw if cell.startswith("-")] == ["-1.5"]


def test_an_export_that_fails_halfway_leaves_the_old_log(tmp_path: Path) -> None:
    """Whole or not at all: a disk that fills up must not cost yesterday's file."""
    log = tmp_path / "log.csv"
    log.write_text("yesterday")
    from platewatch.adapters.logs_write import write_wide_log

    def failing() -> Iterator[Reading]:
        yield Reading(AT, "sensor/T1", 1.0, AT)
        raise RuntimeError("the database went away")

    with pytest.raises(RuntimeError):
        write_wide_log(log, failing(), channels=["sensor/T1"])
    assert [(p.name, p.read_text()) for p in tmp_path.iterdir()] == [("log.csv", "yesterday")]
