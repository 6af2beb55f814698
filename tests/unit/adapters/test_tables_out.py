"""Tables for other programs: exact, safe in a spreadsheet, whole or not there."""

from __future__ import annotations

import csv
import math
import os
import sys
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from platewatch.adapters.tables_out import unguarded, write_table
from platewatch.errors import SettingsError, StorageError


def read_csv(path: Path) -> list[list[str]]:
    with open(path, encoding="utf-8", newline="") as file:
        return list(csv.reader(file))


@settings(max_examples=100, deadline=None)
@given(
    st.lists(
        st.tuples(
            st.integers(),
            st.floats(allow_nan=False),
            st.text(st.characters(exclude_categories=["Cs"])),
        ),
        max_size=20,
    )
)
def test_a_csv_gives_back_every_number_and_text_exactly(
    tmp_path_factory: pytest.TempPathFactory, rows: list[tuple[int, float, str]]
):
    """RFC 4180 round trip: same bits, same characters, quotes and line ends included."""
    path = tmp_path_factory.mktemp("out") / "t.csv"
    assert write_table(path, ["at_us", "degC", "cause"], rows) == len(rows)
    head, *found = read_csv(path)
    assert head == ["at_us", "degC", "cause"]
    assert [(int(a), float(b), unguarded(c)) for a, b, c in found] == rows
    assert [math.copysign(1, float(b)) for _, b, _ in found] == [
        math.copysign(1, b) for _, b, _ in rows
    ]


@pytest.mark.parametrize("text", ["=1+1", "+1", "-1", "@SUM(A1)", "\t=1", "\r=1"])
def test_a_text_cell_is_never_taken_for_a_formula(text: str, tmp_path: Path):
    """A sensor may be named by anyone; a spreadsheet must not run it (OWASP, CSV injection)."""
    write_table(tmp_path / "t.csv", [text], [[text]])
    for (cell,) in read_csv(tmp_path / "t.csv"):
        assert cell == "'" + text


def test_negative_numbers_stay_numbers(tmp_path: Path):
    write_table(tmp_path / "t.csv", ["a", "b", "c"], [[-1, -2.5, np.float64(-0.1)]])
    assert read_csv(tmp_path / "t.csv")[1] == ["-1", "-2.5", "-0.1"]


def test_a_missing_value_is_an_empty_cell(tmp_path: Path):
    write_table(tmp_path / "t.csv", ["a", "b", "c"], [[None, 1.0, True]])
    assert read_csv(tmp_path / "t.csv")[1] == ["", "1.0", "true"]


def test_lines_end_as_the_standard_says(tmp_path: Path):
    """RFC 4180 section 2: CRLF, quotes doubled."""
    write_table(tmp_path / "t.csv", ["a", "b"], [['say "no"', "x,y"]])
    assert (tmp_path / "t.csv").read_bytes() == b'a,b\r\n"say ""no""","x,y"\r\n'


def failing_rows() -> Iterator[list[float]]:
    yield [1.0]
    raise StorageError("the database went away")


@pytest.mark.parametrize("name", ["t.csv", "t.parquet"])
def test_an_export_that_fails_leaves_the_old_file_and_nothing_else(name: str, tmp_path: Path):
    if name.endswith("parquet"):
        pytest.importorskip("pyarrow")
    (tmp_path / name).write_text("yesterday")
    with pytest.raises(StorageError, match="went away"):
        write_table(tmp_path / name, ["a"], failing_rows())
    assert [(p.name, p.read_text()) for p in tmp_path.iterdir()] == [(name, "yesterday")]


def test_a_missing_folder_is_named_before_any_row_is_read(tmp_path: Path):
    with pytest.raises(StorageError, match=r"folder .*none does not exist"):
        write_table(tmp_path / "none" / "t.csv", ["a"], failing_rows())
    with pytest.raises(StorageError, match="is a folder"):
        write_table(tmp_path, ["a"], failing_rows())


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs /dev/full")
def test_a_full_disk_is_one_line(tmp_path: Path):
    """/dev/full stands for the disk: every write to it fails with ENOSPC."""
    (tmp_path / f".t.csv.{os.getpid()}.part").symlink_to("/dev/full")
    with pytest.raises(StorageError, match="No space left") as error:
        write_table(tmp_path / "t.csv", ["a"], [[1.0]] * 100_000)
    assert "\n" not in str(error.value)
    assert list(tmp_path.iterdir()) == []


def test_parquet_keeps_types_and_missing_values(tmp_path: Path):
    parquet = pytest.importorskip("pyarrow.parquet")
    rows = [[1, 0.1, "=x", None, True], [2, math.nan, "é", 3.5, False]]
    columns = ["at_us", "degC", "cause", "limit_degC", "inferred"]
    assert write_table(tmp_path / "t.parquet", columns, rows) == 2
    table = parquet.read_table(tmp_path / "t.parquet")
    assert [str(kind) for kind in table.schema.types] == [
        "int64",
        "double",
        "string",
        "double",
        "bool",
    ]
    found = table.to_pydict()
    assert found["cause"] == ["=x", "é"]
    assert found["limit_degC"] == [None, 3.5]
    assert found["degC"][0] == 0.1
    assert math.isnan(found["degC"][1])


def test_a_long_parquet_is_written_in_parts_with_one_schema(tmp_path: Path):
    parquet = pytest.importorskip("pyarrow.parquet")
    rows = ((n, float(n)) for n in range(150_000))
    assert write_table(tmp_path / "t.parquet", ["n", "x"], rows) == 150_000
    file = parquet.ParquetFile(tmp_path / "t.parquet")
    assert (file.metadata.num_rows, file.num_row_groups) == (150_000, 3)
    assert file.read().column("n").to_pylist() == list(range(150_000))


def test_an_empty_parquet_still_has_its_columns(tmp_path: Path):
    parquet = pytest.importorskip("pyarrow.parquet")
    assert write_table(tmp_path / "t.parquet", ["n", "zone"], [], [int, str]) == 0
    assert [str(t) for t in parquet.read_table(tmp_path / "t.parquet").schema.types] == [
        "int64",
        "string",
    ]


def test_a_column_that_changes_its_kind_is_named(tmp_path: Path):
    pytest.importorskip("pyarrow")
    with pytest.raises(StorageError, match="column 'x' does not hold double"):
        write_table(tmp_path / "t.parquet", ["x"], [[1.5], ["text"]])
    assert list(tmp_path.iterdir()) == []


def test_parquet_without_its_extra_says_what_to_install(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    with pytest.raises(SettingsError, match=r"platewatch\[parquet\]"):
        write_table(tmp_path / "t.parquet", ["x"], [])
