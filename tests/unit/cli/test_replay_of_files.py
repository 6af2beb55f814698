"""Replaying what others recorded, and what other limits would have said."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import pytest
from _pytest.capture import CaptureFixture

from platewatch.cli import main
from tests.unit.cli.conftest import DUTIES, PLATE, SENSORS, START_US, write_log

Cli = CaptureFixture[str]
MAP = """
delimiter = ";"
[time]
column = "Zeit"
format = "%d.%m.%Y %H:%M:%S"
offset = "+01:00"
"""


def foreign_log(log: Path, folder: Path) -> tuple[str, str]:
    """The log as another program writes it (degF in tenths, local time), and its map."""
    from datetime import UTC, datetime, timedelta

    columns, rows = MAP, []
    names = {name: name.replace("/", "_") for name in (*SENSORS, *DUTIES)}
    for name, column in names.items():
        columns += f'[[column]]\ncolumn = "{column}"\nname = "{name}"\n'
        columns += 'unit = "degF"\nscale = 0.1\n' if name in SENSORS else 'unit = "%"\n'
    with log.open(encoding="utf-8") as file:
        for row in csv.DictReader(file):
            at = datetime.fromtimestamp(int(row["at_us"]) // 10**6, UTC) + timedelta(hours=1)
            cells = [at.strftime("%d.%m.%Y %H:%M:%S")]
            cells += [f"{(float(row[n]) * 1.8 + 32) * 10:.1f}" for n in SENSORS]
            rows.append([*cells, *(str(float(row[n]) * 100) for n in DUTIES), "comment"])
    head = ["Zeit", *names.values(), "Notiz"]
    text = "\n".join(";".join(cells) for cells in [head, *rows])
    (folder / "foreign.csv").write_text(text + "\n", encoding="utf-8")
    (folder / "map.toml").write_text(columns, encoding="utf-8")
    return str(folder / "foreign.csv"), str(folder / "map.toml")


def peaks_of(record: Path, folder: Path) -> list[list[float]]:
    out = folder / f"{record.stem}-peaks.csv"
    assert main(["export", "peaks", "--db", str(record), "--out", str(out)]) == 0
    with out.open(encoding="utf-8") as file:
        return [[float(r[n]) for n in ("at_us", "now_degC")] for r in csv.DictReader(file)]


def test_a_foreign_file_with_its_columns_map_gives_the_same_peaks(tmp_path: Path) -> None:
    """Design, section 4: any CSV with --columns; degF in tenths and local time become the
    same plate, up to the rounding of the file (0.01 degF)."""
    log = write_log(tmp_path / "own.csv", 20)
    foreign, columns = foreign_log(log, tmp_path)
    words = ["replay", str(PLATE)]
    assert main([*words, str(log), "--db", str(tmp_path / "a.sqlite")]) == 0
    assert main([*words, foreign, "--columns", columns, "--db", str(tmp_path / "b.sqlite")]) == 0
    own, theirs = (peaks_of(tmp_path / f"{name}.sqlite", tmp_path) for name in "ab")
    assert len(own) == 20
    assert theirs == [pytest.approx(row, rel=0, abs=0.01) for row in own]


def test_a_parquet_log_replays_as_the_csv_does(tmp_path: Path) -> None:
    """Design, section 4: Parquet with its extra; to the last bit."""
    pytest.importorskip("pyarrow")
    log = write_log(tmp_path / "own.csv", 20)
    records = [tmp_path / "a.sqlite", tmp_path / "b.sqlite"]
    assert main(["replay", str(PLATE), str(log), "--db", str(records[0])]) == 0
    exported = tmp_path / "log.parquet"
    assert main(["export", "readings", "--db", str(records[0]), "--out", str(exported)]) == 0
    assert main(["replay", str(PLATE), str(exported), "--db", str(records[1])]) == 0
    assert peaks_of(records[0], tmp_path) == peaks_of(records[1], tmp_path)


def test_part_of_a_log_is_replayed(tmp_path: Path, capfd: Cli) -> None:
    """Design, section 2: --from and --to with an offset, half-open."""
    log = write_log(tmp_path / "own.csv", 20)
    words = ["replay", str(PLATE), str(log), "--db", str(tmp_path / "a.sqlite"), "--json"]
    times = ["--from", "2026-03-01T09:00:10+01:00", "--to", "2026-03-01T08:00:30Z"]
    assert main([*words, *times]) == 0
    assert json.loads(capfd.readouterr().out)["rows"] == 10


@pytest.fixture
def lower(tmp_path: Path) -> str:
    """The demo table with its alarm limit of 135 degC lowered to 120.5 degC."""
    text = PLATE.read_text(encoding="utf-8")
    assert "value = 135.0" in text
    other = tmp_path / "lower.toml"
    other.write_text(text.replace("value = 135.0", "value = 120.5"), encoding="utf-8")
    return str(other)


def test_other_limits_are_shown_by_what_they_change(tmp_path: Path, lower: str, capfd: Cli) -> None:
    """Investigation: a plate at 120 degC raises nothing with a limit of 135 degC; with
    120.5 degC it does, and the list says that this alarm is new."""
    log = write_log(tmp_path / "own.csv", 20)
    words = ["replay", str(PLATE), str(log), "--limits", lower]
    assert main([*words, "--db", str(tmp_path / "a.sqlite")]) == 1
    told = capfd.readouterr().out
    assert f"with the limits of {lower} instead of those of {PLATE}:" in told
    assert "peak-now product: raised only now" in told
    assert main([*words, "--db", str(tmp_path / "b.sqlite"), "--json"]) == 1
    found = json.loads(capfd.readouterr().out)["differences"]
    assert {each["change"] for each in found} == {"added"}
    assert all(each["before"] == "" and each["after"] for each in found)


def test_limits_that_change_nothing_are_said_to_change_nothing(tmp_path: Path, capfd: Cli) -> None:
    """The same limits give the same list."""
    log = write_log(tmp_path / "own.csv", 8)
    words = ["replay", str(PLATE), str(log), "--db", str(tmp_path / "a.sqlite")]
    assert main([*words, "--limits", str(PLATE)]) == 0
    assert "the alarms are the same" in capfd.readouterr().out


def parquet_file(folder: Path, times: object, **columns: list[object]) -> str:
    arrow, parquet = pytest.importorskip("pyarrow"), pytest.importorskip("pyarrow.parquet")
    path = folder / "log.parquet"
    arrays = {"at": times, **{k.replace("_", "/", 1): v for k, v in columns.items()}}
    parquet.write_table(arrow.table(arrays), path)
    return str(path)


def test_times_of_other_programs_parquet_are_read_with_their_zone(
    tmp_path: Path, capfd: Cli
) -> None:
    """A column of time stamps in nanoseconds with a zone; a missing value and a NaN."""
    arrow = pytest.importorskip("pyarrow")
    stamps = [(START_US + 2_000_000 * n) * 1000 for n in range(3)]
    times = arrow.array(stamps, arrow.timestamp("ns", "Europe/Berlin"))
    log = parquet_file(tmp_path, times, sensor_T1=[120.5, None, float("nan")])
    assert main(["replay", str(PLATE), log, "--db", str(tmp_path / "a.sqlite"), "--json"]) == 0
    told = json.loads(capfd.readouterr().out)
    assert (told["rows"], told["stored"], told["refused"]) == (3, 1, 1)
    assert told["hottest"]["at"] == "2026-03-01T08:00:00Z"


def test_parquet_times_without_a_zone_are_one_clear_mistake(tmp_path: Path, capfd: Cli) -> None:
    """Local time is never guessed, whatever the form of the file."""
    arrow = pytest.importorskip("pyarrow")
    times = arrow.array([START_US], arrow.timestamp("us"))
    log = parquet_file(tmp_path, times, sensor_T1=[120.5])
    assert main(["replay", str(PLATE), log, "--db", str(tmp_path / "a.sqlite")]) == 2
    (line,) = capfd.readouterr().err.strip().splitlines()
    assert "log.parquet:2" in line
    assert "has no offset" in line
