"""Recorded logs: what is read, what is refused, and what is said about it."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from platewatch import units
from platewatch.adapters.logs import LogReader, LogRow, read_log
from platewatch.adapters.logs_columns import (
    WHITESPACE,
    ColumnRule,
    ColumnsMap,
    TimeRule,
    load_columns,
)
from platewatch.adapters.logs_write import write_wide_log
from platewatch.errors import NoDataError, PlatewatchError, SettingsError
from platewatch.types import BatchEvent, Reading

CHANNELS = {
    "sensor/T1": "degC",
    "sensor/T2": "degC",
    "zone/Z1/duty": "1",
    "surround/ambient": "degC",
}
AT = units.from_iso("2026-03-01T08:00:00Z")
S = 1_000_000


def log(folder: Path, text: str | bytes, **how: object) -> LogReader:
    path = folder / "log.csv"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return read_log(path, CHANNELS, **how)  # type: ignore[arg-type]


def rows(folder: Path, text: str, **how: object) -> list[LogRow]:
    return list(log(folder, text, **how))


def test_a_wide_log_gives_readings_in_file_order_that_arrived_in_time(tmp_path: Path) -> None:
    """First column at, then channel names; an empty cell is a missing value."""
    text = "at,sensor/T1,zone/Z1/duty\n2026-03-01T09:00:00+01:00,121.3,\n"
    text += "2026-03-01T08:00:02Z,121.4,0.45\n"
    found = [
        (r.at_us - AT, r.channel, r.value) for row in rows(tmp_path, text) for r in row.readings
    ]
    assert found == [
        (0, "sensor/T1", 121.3),
        (2 * S, "sensor/T1", 121.4),
        (2 * S, "zone/Z1/duty", 0.45),
    ]
    assert all(r.seen_us == r.at_us for row in rows(tmp_path, text) for r in row.readings)


@pytest.mark.parametrize(
    ("name", "cell"), [("at_ms", "1772352000123.000"), ("at_us", "1772352000123000")]
)
def test_integer_times_are_exact(tmp_path: Path, name: str, cell: str) -> None:
    """No float on the way: an epoch in microseconds does not fit a float's comfort."""
    (row,) = rows(tmp_path, f"{name},sensor/T1\n{cell},1\n")
    assert row.at_us == AT + 123_000


def test_times_without_offset_are_one_clear_mistake(tmp_path: Path) -> None:
    """Local time is never guessed; the message names the line and both remedies."""
    text = "at,sensor/T1\n2026-03-01T08:00:00Z,1\n2026-03-01 08:00:02,1\n"
    with pytest.raises(SettingsError, match=r"log.csv:3: time '2026-03-01 08:00:02' has no offset"):
        rows(tmp_path, text)
    found = rows(tmp_path, text, offset="-01:00")
    assert [row.at_us for row in found] == [AT, AT + 3602 * S]


def test_a_bad_cell_is_counted_with_its_line_and_the_row_is_kept(tmp_path: Path) -> None:
    """Text or NaN in a number cell is refused; what is beside it still counts."""
    text = "at_us,sensor/T1,sensor/T2,zone/Z1/duty\n"
    for n, cell in enumerate(["open", "nan", "inf", "1e999", "1_000", "12,5", "5000", "0x1"]):
        quoted = f'"{cell}"' if "," in cell else cell
        text += f"{AT + n * S},{quoted},120.5,0.4\n"
    reader = log(tmp_path, text)
    found = list(reader)
    assert [len(row.readings) for row in found] == [2] * 8
    assert str(found[0].refusals[0]) == "line 2, column sensor/T1: not a number; found 'open'"
    report = reader.report()
    assert (report.rows, report.readings, report.refused) == (8, 16, 8)
    assert dict(report.reasons)["not a number"] == 6


def test_a_row_with_an_unreadable_time_is_refused_whole(tmp_path: Path) -> None:
    """Without a time a value says nothing; the next row goes on."""
    reader = log(tmp_path, f"at_us,sensor/T1\nsoon,1\n12,1\n,1\n{AT},2\n")
    found = list(reader)
    assert [len(row.readings) for row in found] == [0, 1, 0, 1]
    assert reader.report().refused == 2


def test_short_and_long_rows_lose_nothing_that_has_a_heading(tmp_path: Path) -> None:
    """A row cut off by a power failure keeps what it has; cells without heading are refused."""
    text = f"at_us,sensor/T1,sensor/T2\n{AT},1\n\n{AT + 1},1,2,3\n{AT + 2},1,2"
    found = rows(tmp_path, text)
    assert [(row.line, len(row.readings), len(row.refusals)) for row in found] == [
        (2, 1, 0),
        (4, 2, 1),
        (5, 2, 0),
    ]


def test_steps_back_and_doubled_stamps_are_counted_and_kept_in_order(tmp_path: Path) -> None:
    """The ticks decide what is late; the reader only counts and keeps the file's order."""
    reader = log(
        tmp_path, "at_us,sensor/T1\n" + "".join(f"{AT + n * S},1\n" for n in (0, 5, 3, 5, 6))
    )
    stamps = [row.at_us for row in reader]
    report = reader.report(late=1)
    assert stamps == [AT + n * S for n in (0, 5, 3, 5, 6)]
    assert (report.backward, report.duplicates, report.late) == (1, 1, 1)
    assert report.largest_step_back_us == 2 * S


@pytest.mark.parametrize(
    ("content", "kind", "says"),
    [
        (b"", NoDataError, "is empty"),
        (b" \n", NoDataError, "is empty"),
        (b"at,sensor/T1\n", NoDataError, "header and no rows"),
        (b"SQLite format 3\0....", SettingsError, "is a database"),
        (b"PAR1xxxx", SettingsError, "not readable as Parquet"),
        (b"\x1f\x8b\x08", SettingsError, "unpack it first"),
        (b"PK\x03\x04zip", SettingsError, "save the table as CSV"),
        (b"\x7fELF\0\0", SettingsError, "is binary"),
        ("at,sensor/T1\n".encode("utf-16"), SettingsError, "UTF-16"),
        (b"at,sensor/T1\n2026-03-01T08:00:00Z,\xff\n", SettingsError, "not UTF-8"),
        (b"at,\xff\n", SettingsError, "not UTF-8"),
        (b"at,sensor/T1,sensor/T1\n1,1,1\n", SettingsError, "is there 2 times"),
        (b"at;sensor/T1\n1;1\n", SettingsError, "semicolons"),
        (b"time,sensor/T1\n1,1\n", SettingsError, "begins with at, at_ms or at_us"),
        (b"at,sensor/T11\n1,1\n", SettingsError, r"'sensor/T11'; did you mean sensor/T1\?"),
        (b"at,a,b,c,d,e,f,g\n", SettingsError, "and 2 more"),
        (b"at\n2026-03-01T08:00:00Z\n", NoDataError, "no column of this plate"),
        (b'at,sensor/T1\n"' + b"x" * 200_000, SettingsError, "not readable as CSV"),
    ],
)
def test_a_file_that_is_no_log_gets_one_clear_line(
    tmp_path: Path, content: bytes, kind: type[PlatewatchError], says: str
) -> None:
    """Each foreseeable mistake names the file and what to do, without a traceback."""
    with pytest.raises(kind, match=says) as caught:
        list(log(tmp_path, content))
    assert str(tmp_path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_missing_log_is_no_data(tmp_path: Path) -> None:
    """Exit code 3 is for no data; a folder is none either."""
    for path in (tmp_path / "none.csv", tmp_path):
        with pytest.raises(NoDataError, match=str(path)):
            read_log(path, CHANNELS)


def test_unknown_columns_can_be_passed_over_on_request(tmp_path: Path) -> None:
    """A log of a larger plant may hold more than this plate."""
    text = f"at_us,sensor/T1,oven/door\n{AT},1,open\n"
    (row,) = rows(tmp_path, text, ignore_unknown=True)
    assert [r.channel for r in row.readings] == ["sensor/T1"]
    assert row.refusals == ()


def test_batch_events_are_read_from_their_column(tmp_path: Path) -> None:
    """The same object as on the bus; its own time counts, else that of the row."""
    text = f'at_us,sensor/T1,batch\n{AT},1,"{{""event"":""load-on"",""zone"":""Z1""}}"\n'
    text += (
        f'{AT + S},1,"[1]"\n{AT + 2 * S},,'
        + '"{""event"":""end"",""at"":""2026-03-01T08:00:01Z""}"\n'
    )
    found = rows(tmp_path, text)
    events = [row.event for row in found if row.event]
    assert [(e.at_us - AT, e.event) for e in events] == [(0, "load-on"), (S, "end")]
    assert [r.column for row in found for r in row.refusals] == ["batch"]


values = st.floats(-273.15, 3000.0)
records = st.lists(
    st.tuples(st.integers(0, 50), st.sampled_from(["sensor/T1", "sensor/T2"]), values),
    min_size=1,
    max_size=30,
)


@given(records, st.booleans())
def test_what_is_written_reads_back_exactly(
    tmp_path_factory: pytest.TempPathFactory, found: list[tuple[int, str, float]], named: bool
) -> None:
    """Floats by repr and integer stamps: same readings, same order among stamps."""
    path = tmp_path_factory.mktemp("log") / "wide.csv"
    readings = [Reading(AT + n, channel, value, AT + n) for n, channel, value in found]
    channels = ["sensor/T1", "sensor/T2"] if named else None
    count = write_wide_log(path, iter(readings), channels=channels)
    back = list(read_log(path, CHANNELS))
    assert len(back) == count
    again = [reading for row in back for reading in row.readings]
    assert sorted(again, key=repr) == sorted(readings, key=repr)
    stamps = [reading.at_us for reading in readings]
    assert [reading.at_us for reading in again] == stamps


def test_events_are_written_between_the_readings_and_read_back(tmp_path: Path) -> None:
    """The batch column keeps place, zone and time of each event."""
    path = tmp_path / "log.csv"
    readings = [Reading(AT + n * S, "sensor/T1", float(n), 0) for n in (0, 2)]
    events = [
        BatchEvent(AT + 5 * S, "end", ""),
        BatchEvent(AT + 2 * S, "step", '{"event":"step","step":"soak"}'),
        BatchEvent(AT + S, "load-on", '{"event":"load-on","zone":"Z1"}'),
    ]
    assert write_wide_log(path, readings, events=events) == 4
    back = [row.event for row in read_log(path, CHANNELS) if row.event]
    assert [(e.at_us - AT, e.event) for e in back] == [
        (S, "load-on"),
        (2 * S, "step"),
        (5 * S, "end"),
    ]
    assert '"zone": "Z1"' in back[0].detail


MAP = """
delimiter = ";"
[time]
column = "Zeit"
format = "%d.%m.%Y %H:%M:%S"
offset = "+01:00"
[[column]]
column = "Fuehler"
name = "sensor/T1"
unit = "degF"
scale = 0.1
offset = 32
[[column]]
column = "Stellgrad"
name = "zone/Z1/duty"
unit = "%"
"""


def test_a_foreign_file_is_read_through_a_columns_map(tmp_path: Path) -> None:
    """value = cell * scale + offset in the file's unit, then the channel's unit."""
    (tmp_path / "map.toml").write_text(MAP)
    columns = load_columns(tmp_path / "map.toml")
    text = "Nr;Zeit;Fuehler;Stellgrad\n1;01.03.2026 09:00:00;1800;45\n"
    (row,) = rows(tmp_path, text, columns=columns)
    assert row.at_us == AT
    found = {r.channel: r.value for r in row.readings}
    assert found["sensor/T1"] == pytest.approx(100.0, abs=1e-12)  # 212 degF
    assert found["zone/Z1/duty"] == pytest.approx(0.45, abs=1e-12)


@pytest.mark.parametrize(
    ("old", "new", "says"),
    [
        ('column = "Zeit"', "", r"time: is missing"),
        ("scale = 0.1", "scael = 0.1", "unknown key 'scael'; did you mean scale"),
        ("scale = 0.1", 'scale = "x"', "is not a number"),
        ("+01:00", "+1 h", "is no offset"),
        ("%d.%m.%Y %H:%M:%S", "german", "write iso, s, ms, us or a pattern"),
        ('";"', '";;"', "one character"),
        ("delimiter", "= delimiter", "not valid TOML"),
        ('name = "sensor/T1"', "", r"column\[1\].name: is missing"),
        ('name = "sensor/T1"', 'name = "sensor/T11"', "no channel of this plate; did you mean"),
        ('column = "Fuehler"', 'column = "Fuhler"', "has no column 'Fuhler'; did you mean Fuehler"),
        ('unit = "%"', 'unit = "W"', "cannot become 1"),
    ],
)
def test_a_mistake_in_a_columns_map_says_what_to_write(
    tmp_path: Path, old: str, new: str, says: str
) -> None:
    """Misspelt keys, units that do not fit, columns that are not there."""
    assert old in MAP
    (tmp_path / "map.toml").write_text(MAP.replace(old, new))
    text = "Nr;Zeit;Fuehler;Stellgrad\n1;01.03.2026 09:00:00;1800;45\n"
    with pytest.raises(SettingsError, match=says):
        rows(tmp_path, text, columns=load_columns(tmp_path / "map.toml"))


def test_seconds_from_a_start_and_columns_without_names(tmp_path: Path) -> None:
    """Many laboratory files count seconds and have no header; whitespace parts them."""
    columns = ColumnsMap(
        TimeRule("1", "s", origin_us=AT),
        (ColumnRule("3", "sensor/T1"),),
        delimiter=WHITESPACE,
        header=False,
    )
    found = rows(tmp_path, "   0.00   9.0  129.320\n   2.1   9.0  129.5\n", columns=columns)
    assert [(row.line, row.at_us) for row in found] == [(1, AT), (2, AT + 2_100_000)]
    assert [row.readings[0].value for row in found] == [129.32, 129.5]


def recorded(name: str) -> Path:
    folder = os.environ.get("PLATEWATCH_DATA")
    if not folder:
        pytest.skip("needs the open measured data; set PLATEWATCH_DATA to their folder")
    return Path(folder) / name


def test_the_machine_temperature_record_keeps_its_known_faults() -> None:
    """Numenta Anomaly Benchmark (MIT), machine temperature: 22,695 rows, one step back of
    3300 s (2014-01-07 02:55 to 02:00), 12 doubled stamps, times without an offset."""
    path = recorded("nab_machine_temperature/machine_temperature_system_failure.csv")
    columns = ColumnsMap(TimeRule("timestamp"), (ColumnRule("value", "sensor/T1"),))
    with pytest.raises(SettingsError, match=r"csv:2: time '2013-12-02 21:15:00' has no offset"):
        list(read_log(path, CHANNELS, columns=columns))
    reader = read_log(path, CHANNELS, columns=columns, offset="Z")
    assert sum(len(row.readings) for row in reader) == 22_695
    report = reader.report()
    assert (report.rows, report.duplicates, report.backward) == (22_695, 12, 1)
    assert report.largest_step_back_us == 3_300 * S


def test_the_lamp_heated_plate_record_is_read() -> None:
    """DaISy 99-001 (Roy Smith, UCSB), t < 1000 s, step 2 s: 192.028 degC at 398 s and
    86.376 degC at 798 s."""
    path = recorded("daisy_heating_system/heating_system_t0_1000.dat")
    columns = ColumnsMap(
        TimeRule("1", "s", origin_us=AT),
        (ColumnRule("3", "sensor/T1"), ColumnRule("2", "zone/Z1/duty", scale=0.1)),
        delimiter=WHITESPACE,
        header=False,
    )
    found = {
        r.at_us - AT: r.value
        for row in read_log(path, CHANNELS, columns=columns)
        for r in row.readings
        if r.channel == "sensor/T1"
    }
    assert len(found) == 500
    assert (found[398 * S], found[798 * S]) == (192.028, 86.376)
