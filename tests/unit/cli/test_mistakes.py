"""Foreseeable mistakes: one clear line, the exit code of their kind, never a traceback."""

from __future__ import annotations

import sqlite3
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from _pytest.capture import CaptureFixture

from platewatch.cli import main

HEADER = "at,sensor/T1\n"
ROW = "2026-03-01T08:00:00Z,120.0\n"


def text_file(folder: Path, name: str, text: str) -> str:
    (folder / name).write_text(text, encoding="utf-8")
    return str(folder / name)


def foreign_database(folder: Path) -> str:
    connection = sqlite3.connect(folder / "foreign.sqlite")
    connection.execute("CREATE TABLE t (x)")
    connection.commit()
    connection.close()
    return str(folder / "foreign.sqlite")


Words = Callable[[Path, str, str], list[str]]  # folder, plate, record

# What a person types, the exit code, and words that the one line must hold.
MISTAKES: dict[str, tuple[Words, int, tuple[str, ...]]] = {
    "unknown command": (lambda d, p, r: ["chek", p], 2, ("did you mean check",)),
    "no command": (lambda d, p, r: [], 2, ("COMMAND",)),
    "unknown option": (lambda d, p, r: ["check", p, "--jsn"], 2, ("--jsn", "--help")),
    "no such description": (lambda d, p, r: ["check", "nosuch.toml"], 2, ("nosuch.toml",)),
    "description is a folder": (lambda d, p, r: ["check", str(d)], 2, (".",)),
    "bad TOML": (
        lambda d, p, r: ["check", text_file(d, "bad.toml", "[plate\nname=1\n")],
        2,
        ("bad.toml:1",),
    ),
    "no broker address": (
        lambda d, p, r: ["run", p, "--broker", "127.0.0.1:none"],
        2,
        ("HOST:PORT",),
    ),
    "one plate twice": (lambda d, p, r: ["run", p, p], 2, ("table-1", "twice")),
    "record in a missing folder": (
        lambda d, p, r: ["run", p, "--db", str(d / "no" / "a.sqlite"), "--for", "0.1"],
        4,
        ("does not exist",),
    ),
    "no such log": (
        lambda d, p, r: ["replay", p, str(d / "no.csv"), "--db", str(d / "o.sqlite")],
        3,
        ("no such file",),
    ),
    "empty log": (
        lambda d, p, r: ["replay", p, text_file(d, "e.csv", ""), "--db", str(d / "o.sqlite")],
        3,
        ("empty",),
    ),
    "log with a header only": (
        lambda d, p, r: ["replay", p, text_file(d, "h.csv", HEADER), "--db", str(d / "o.sqlite")],
        3,
        ("no rows",),
    ),
    "unknown sensor in the log": (
        lambda d, p, r: [
            "replay",
            p,
            text_file(d, "u.csv", "at,sensor/T11\n2026-03-01T08:00:00Z,1\n"),
            "--db",
            str(d / "o.sqlite"),
        ],
        2,
        ("sensor/T11", "did you mean"),
    ),
    "time without an offset": (
        lambda d, p, r: [
            "replay",
            p,
            text_file(d, "t.csv", HEADER + "2026-03-01T08:00:00,1\n"),
            "--db",
            str(d / "o.sqlite"),
        ],
        2,
        ("offset",),
    ),
    "replay over an older record": (
        lambda d, p, r: ["replay", p, text_file(d, "g.csv", HEADER + ROW), "--db", r],
        4,
        ("exists already",),
    ),
    "replay into its own input": (
        lambda d, p, r: ["replay", p, r, "--db", r],
        4,
        ("is the log itself",),
    ),
    "replay of another program's database": (
        lambda d, p, r: ["replay", p, foreign_database(d), "--db", str(d / "o.sqlite")],
        4,
        ("not one of platewatch",),
    ),
    "replay of a time that is not in the log": (
        lambda d, p, r: [
            "replay",
            p,
            text_file(d, "g.csv", HEADER + ROW),
            "--db",
            str(d / "o.sqlite"),
            "--from",
            "2027-01-01T00:00:00Z",
        ],
        3,
        ("--from",),
    ),
    "no time": (
        lambda d, p, r: ["export", "peaks", "--db", r, "--out", str(d / "x.csv"), "--to", "noon"],
        2,
        ("--to", "noon"),
    ),
    "no such record": (
        lambda d, p, r: ["verify", "--db", str(d / "no.sqlite")],
        4,
        ("no such database",),
    ),
    "text taken for a record": (
        lambda d, p, r: ["verify", "--db", text_file(d, "a.txt", "hello " * 300)],
        4,
        ("not a database",),
    ),
    "another plate": (
        lambda d, p, r: ["alarms", "--db", r, "--plate", "table-2"],
        3,
        ("table-2", "table-1"),
    ),
    "no record named": (lambda d, p, r: ["alarms"], 2, ("--db",)),
    "acknowledged by nobody": (
        lambda d, p, r: ["alarms", "ack", "peak-now", "T5", "--db", r],
        2,
        ("--person",),
    ),
    "no such alarm": (
        lambda d, p, r: ["alarms", "ack", "peak-now", "T55", "--db", r, "--person", "late shift"],
        2,
        ("did you mean peak-now T5",),
    ),
    "unknown ending": (
        lambda d, p, r: ["export", "peaks", "--db", r, "--out", str(d / "x.xls")],
        2,
        (".csv or .parquet",),
    ),
    "field without a moment": (
        lambda d, p, r: ["export", "field", "--db", r, "--out", str(d / "x.csv")],
        2,
        ("--at",),
    ),
    "field before the record begins": (
        lambda d, p, r: [
            "export",
            "field",
            "--db",
            r,
            "--out",
            str(d / "x.csv"),
            "--at",
            "2020-01-01T00:00:00Z",
        ],
        3,
        ("no field",),
    ),
    "output folder is a file": (
        lambda d, p, r: [
            "export",
            "peaks",
            "--db",
            r,
            "--out",
            text_file(d, "file", "") + "/x.csv",
        ],
        4,
        ("x.csv",),
    ),
    "backup over a file": (
        lambda d, p, r: ["backup", "--db", r, "--to", text_file(d, "there.sqlite", "x")],
        4,
        ("exists already",),
    ),
    "zone that is not there": (
        lambda d, p, r: ["whatif", p, "--power", "Z9=300"],
        2,
        ("Z9",),
    ),
    "power without a number": (
        lambda d, p, r: ["whatif", p, "--power", "Z1=lots"],
        2,
        ("lots", "no number"),
    ),
    "power that is not a number": (lambda d, p, r: ["whatif", p, "--power", "Z1=nan"], 2, ("nan",)),
    "power that cools": (
        lambda d, p, r: ["whatif", p, "--power", "Z1=-300"],
        2,
        ("-300 W", "no heater"),
    ),
    "one zone twice": (
        lambda d, p, r: ["whatif", p, "--power", "Z1=300", "--power", "Z1=200"],
        2,
        ("Z1", "twice"),
    ),
    "room below absolute zero": (
        lambda d, p, r: ["whatif", p, "--power", "Z1=300", "--ambient", "-400"],
        2,
        ("-400 °C", "no temperature"),
    ),
    "picture into a missing folder": (
        lambda d, p, r: ["whatif", p, "--picture", str(d / "no" / "x.svg")],
        4,
        ("does not exist",),
    ),
    "drawing into a missing folder": (
        lambda d, p, r: ["check", p, "--picture", str(d / "no" / "x.svg")],
        4,
        ("does not exist",),
    ),
    "picture of another kind": (
        lambda d, p, r: ["check", p, "--picture", str(d / "x.png")],
        2,
        ("x.png", ".svg"),
    ),
    "place off the plate": (
        lambda d, p, r: ["whatif", p, "--power", "Z1=300", "--at", "9000,1"],
        2,
        ("9000", "not on the plate"),
    ),
    "unknown batch": (
        lambda d, p, r: ["demo", "hot-load", "--data", str(d)],
        2,
        ("hot-load", "cold-load"),
    ),
    "demo data where a file is": (
        lambda d, p, r: ["demo", "--data", text_file(d, "taken", "") + "/sub"],
        4,
        ("--data",),
    ),
}


@pytest.mark.parametrize("mistake", MISTAKES)
def test_a_foreseeable_mistake_gives_one_clear_line(
    mistake: str, tmp_path: Path, plate: str, hot_record: str, capfd: CaptureFixture[str]
) -> None:
    """Design, section 2: exit codes by whose mistake it is; no traceback."""
    words, code, told = MISTAKES[mistake]
    assert main(words(tmp_path, plate, hot_record)) == code
    lines = capfd.readouterr().err.strip().splitlines()
    assert len(lines) == 1, lines
    assert lines[0].startswith("platewatch: ")
    assert all(text in lines[0] for text in told), lines[0]


def test_every_mistake_of_a_description_is_told_at_once(
    tmp_path: Path, plate: str, capfd: CaptureFixture[str]
) -> None:
    """Design, section 3: all mistakes, one line each with file and line."""
    text = Path(plate).read_text(encoding="utf-8")
    text = text.replace("x_mm = 1140", "x_mm = 1400").replace("watts = 1100.0", "wats = 1100.0", 1)
    bad = text_file(tmp_path, "two.toml", text)
    assert main(["check", bad]) == 2
    told = capfd.readouterr().err
    assert "x_mm" in told
    assert "zone[1].wats" in told
    assert "watts" in told.replace("zone[1].wats", "")
    assert all(line.startswith(f"platewatch: {bad}:") for line in told.strip().splitlines())


def test_a_port_that_is_taken_is_named(tmp_path: Path, capfd: CaptureFixture[str]) -> None:
    """The demo says which port and what to do, and starts nothing."""
    import socket

    pytest.importorskip("iotcore", reason="needs the extra platewatch[demo]")
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = taken.getsockname()[1]
        assert main(["demo", "--data", str(tmp_path), "--port", str(port)]) == 2
    assert f"port {port}" in capfd.readouterr().err


def test_a_bad_cell_is_counted_and_the_replay_goes_on(
    tmp_path: Path, plate: str, capfd: CaptureFixture[str]
) -> None:
    """NaN and text in a cell are refused with their reason; nothing is filled in."""
    rows = [
        f"2026-03-01T08:00:{s:02d}Z,{v}" for s, v in ((0, "120"), (2, "NaN"), (4, "x"), (6, "9e9"))
    ]
    log = text_file(tmp_path, "n.csv", HEADER + "\n".join(rows) + "\n")
    assert main(["replay", plate, log, "--db", str(tmp_path / "o.sqlite")]) == 0
    told = capfd.readouterr().out
    assert "1 readings stored, 3 refused" in told
    assert "refused 2 times: not a number" in told


LIGHT = """
import resource, sys
before = resource.getrusage(resource.RUSAGE_SELF)
from platewatch.cli import main
try:
    main(["--help"])
except SystemExit:
    pass
after = resource.getrusage(resource.RUSAGE_SELF)
heavy = {"numpy", "pandas", "sqlalchemy", "scipy", "pydantic", "rich"} & set(sys.modules)
print("heavy:", sorted(heavy))
print("cpu:", after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime)
"""


def test_help_comes_at_once() -> None:
    """Design, section 12: --help within 60 ms of CPU, without loading numpy."""
    done = subprocess.run(
        [sys.executable, "-c", LIGHT], capture_output=True, text=True, check=True, timeout=30
    )
    assert "heavy: []" in done.stdout
    assert float(done.stdout.rsplit("cpu:", 1)[1]) <= 0.060


@pytest.mark.parametrize(
    "command",
    ["check", "run", "demo", "replay", "whatif", "alarms", "export", "verify", "backup", "tidy"],
)
def test_every_command_helps_with_an_example(command: str, capfd: CaptureFixture[str]) -> None:
    """Design, section 2: help with an example and the exit codes."""
    with pytest.raises(SystemExit) as ended:
        main([command, "--help"])
    assert ended.value.code == 0
    told = capfd.readouterr().out
    assert f"example: platewatch {command}" in told
    assert "exit codes" in told
