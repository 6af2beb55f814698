"""Listing, acknowledging, exporting, checking and copying a record."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import pytest
from _pytest.capture import CaptureFixture

from platewatch.cli import main

Cli = CaptureFixture[str]
CONFIG = Path(__file__).resolve().parents[3] / "config"


@pytest.fixture
def record(hot_record: str, tmp_path: Path) -> str:
    """A copy that a test may write into."""
    assert main(["backup", "--db", hot_record, "--to", str(tmp_path / "r.sqlite")]) == 0
    return str(tmp_path / "r.sqlite")


def test_an_operator_reads_priority_place_and_message_of_an_alarm(record: str, capfd: Cli) -> None:
    """Design, section 7: zone and place, where, how sure, what to look at."""
    capfd.readouterr()
    assert main(["alarms", "--db", record]) == 0
    told = capfd.readouterr().out
    assert "NEW HIGH  peak-now T5" in told
    assert "terminal X1:5" in told
    assert "switches nothing" in told


def test_an_acknowledgement_is_written_with_its_person(record: str, capfd: Cli) -> None:
    """Design, section 8: it reaches the daemon through the database, as an action."""
    words = ["alarms", "ack", "peak-now", "T5", "--db", record, "--person", "late shift"]
    assert main([*words, "--reason", "seen at the plate"]) == 0
    assert "late shift acknowledges peak-now T5" in capfd.readouterr().out
    from platewatch.compose import open_store

    with open_store(record, read_only=True) as store:
        action = store.unapplied_actions("table-1")[0]
    assert (action.person, action.verb, action.alarm) == ("late shift", "ack", "peak-now")
    assert action.reason == "seen at the plate"


def test_alarms_are_read_by_a_machine(record: str, capfd: Cli) -> None:
    """--json gives every field of the newest event of each alarm."""
    capfd.readouterr()
    assert main(["alarms", "--db", record, "--json"]) == 0
    rows = {(r["alarm"], r["subject"]): r for r in json.loads(capfd.readouterr().out)}
    assert rows["peak-now", "T5"]["to_state"] == "unacknowledged"
    assert rows["peak-now", "T5"]["limit_value"] == 135.0


def test_exported_readings_replay_to_the_same_peaks(record: str, tmp_path: Path) -> None:
    """Design, section 4: the export is the wide log that replay reads, to the last bit."""
    log, again = tmp_path / "log.csv", tmp_path / "again.sqlite"
    plate = CONFIG / "demo-table.toml"
    assert main(["export", "readings", "--db", record, "--out", str(log)]) == 0
    assert main(["replay", str(plate), str(log), "--db", str(again)]) == 1
    tables = []
    for name, source in (("a.csv", record), ("b.csv", str(again))):
        out = tmp_path / name
        assert main(["export", "peaks", "--db", source, "--out", str(out)]) == 0
        tables.append(out.read_text(encoding="utf-8"))
    assert tables[0] == tables[1]
    assert len(tables[0].splitlines()) == 91  # 90 ticks and the header


@pytest.mark.parametrize("ending", ["csv", "parquet"])
def test_every_table_is_exported_in_both_forms(
    record: str, tmp_path: Path, ending: str, capfd: Cli
) -> None:
    """Design, section 2: CSV or, by its ending, Parquet."""
    if ending == "parquet":
        pytest.importorskip("pyarrow", reason="needs the extra platewatch[parquet]")
    at = ["--at", "2026-03-01T08:02:31Z"]
    for what, more in (("readings", []), ("peaks", []), ("alarms", []), ("field", at)):
        out = tmp_path / f"{what}.{ending}"
        assert main(["export", what, "--db", record, "--out", str(out), *more]) == 0
        assert out.stat().st_size > 0
    assert "rows in" in capfd.readouterr().out


def test_the_field_of_a_moment_agrees_with_the_recorded_peak(record: str, tmp_path: Path) -> None:
    """Stepping forward from the last stored state gives the field that live had.

    The recorded peak is the mean of the largest value over draws, at most a few sd
    above the largest mean (design, section 6), and never below it.
    """
    out, peaks = tmp_path / "field.csv", tmp_path / "peaks.csv"
    at = "2026-03-01T08:02:30Z"
    assert main(["export", "field", "--db", record, "--out", str(out), "--at", at]) == 0
    assert main(["export", "peaks", "--db", record, "--out", str(peaks)]) == 0
    with out.open(encoding="utf-8") as file:
        cells = list(csv.DictReader(file))
    with peaks.open(encoding="utf-8") as file:
        row = next(r for r in csv.DictReader(file) if r["at"] == at)
    hottest = max(cells, key=lambda cell: float(cell["degC"]))
    assert len(cells) == 2400
    above = float(row["now_degC"]) - float(hottest["degC"])
    assert -1e-3 <= above <= 3 * float(hottest["sd_K"])


def test_an_honest_record_verifies_and_a_changed_one_does_not(record: str, capfd: Cli) -> None:
    """Design, section 2: exit 1 on a finding."""
    import sqlite3

    assert main(["verify", "--db", record]) == 0
    with sqlite3.connect(record) as connection:
        connection.execute("UPDATE alarm_event SET priority = 'low' WHERE seq = 1")
    connection.close()
    capfd.readouterr()
    assert main(["verify", "--db", record, "--json"]) == 1
    told = json.loads(capfd.readouterr().out)
    assert not told["ok"]
    assert told["findings"]


def test_tidy_says_what_it_removed(record: str, capfd: Cli) -> None:
    """The readings of March 2026 are past one day; alarms and peaks stay."""
    capfd.readouterr()
    words = ["tidy", "--db", record, "--keep-readings-days", "1", "--keep-days", "40000"]
    assert main([*words, "--json"]) == 0
    rows = json.loads(capfd.readouterr().out)["rows"]
    assert rows["reading"] == 90 * 15
    assert "peak" not in rows


def test_replay_with_other_limits_raises_other_alarms(
    hot_record: str, plate: str, tmp_path: Path, capfd: Cli
) -> None:
    """Investigation: the same record with an alarm limit of 160 degC raises none."""
    text = Path(plate).read_text(encoding="utf-8").replace("value = 135.0", "value = 160.0")
    other = tmp_path / "other.toml"
    other.write_text(text, encoding="utf-8")
    out = str(tmp_path / "o.sqlite")
    assert main(["replay", plate, hot_record, "--db", out, "--limits", str(other), "--json"]) in (
        0,
        1,
    )
    told = json.loads(capfd.readouterr().out)
    assert "peak-now" not in {raised["alarm"] for raised in told["raised"]}
    assert told["ticks"] == 90
    assert told["notes"]


def test_check_gives_the_facts_of_the_demo_table(plate: str, capfd: Cli) -> None:
    """Loss, Biot number and spread length against a calculation by hand.

    At 120 and 22 degC: radiation 0.8 * 5.67e-8 * (393.15^2 + 295.15^2) * 688.3 = 7.55; the
    upper face 0.15 Ra^(1/3) k / L with Ra = 6.7e7, k = 0.0297, L = 0.24 m: 7.54 (McAdams,
    from memory); bottom 1.5; together 16.6 W/m2K.  2 %: air tables differ by as much.
    """
    assert main(["check", plate, "--json"]) == 0
    facts = json.loads(capfd.readouterr().out)
    assert facts["cells"] == 2400
    assert facts["h_W_m2K"] == pytest.approx(16.6, rel=0.02)
    assert facts["biot"] == pytest.approx(16.6 * 0.02 / 48.0, rel=0.02)
    assert facts["spread_m"] == pytest.approx((48.0 * 0.02 / 16.6) ** 0.5, rel=0.01)
    assert facts["watts"] == 6600.0
    assert facts["warnings"] == []
    assert {zone["zone"] for zone in facts["support"]} == {f"Z{n}" for n in range(1, 7)}


def test_whatif_ends_with_its_caution_and_balances_its_heat(
    plate: str, tmp_path: Path, capfd: Cli
) -> None:
    """Design, sections 2 and 10."""
    picture = tmp_path / "p.svg"
    words = ["whatif", plate, "--power", "Z1=300", "--ambient", "25", "--at", "200,200"]
    assert main([*words, "--picture", str(picture)]) == 0
    told = capfd.readouterr().out
    assert told.rstrip().endswith("before changing a recipe, limit or sensor.")
    assert picture.read_text(encoding="utf-8").startswith("<svg")
    assert main([*words, "--steady", "--json"]) == 0
    found = json.loads(capfd.readouterr().out)
    assert found["heat"]["lost"] == pytest.approx(300.0, abs=1e-3)
    assert found["at"][0]["degC"] < found["hottest"]["degC"]


@pytest.mark.parametrize("name", sorted(path.name for path in CONFIG.glob("*.toml")))
def test_every_plate_in_config_is_checked_without_a_mistake(name: str, capfd: Cli) -> None:
    """Design, section 3: each is loaded and run by a test."""
    assert main(["check", str(CONFIG / name)]) == 0
    told = capfd.readouterr().out
    assert "holds no mistake" in told
    assert "spread length" in told


def test_a_part_of_a_record_is_replayed(
    hot_record: str, plate: str, tmp_path: Path, capfd: Cli
) -> None:
    """Design, section 2: --from and --to, half-open."""
    words = ["replay", plate, hot_record, "--db", str(tmp_path / "o.sqlite"), "--json"]
    times = ["--from", "2026-03-01T08:01:00Z", "--to", "2026-03-01T08:02:00Z"]
    assert main([*words, *times]) in (0, 1)
    told = json.loads(capfd.readouterr().out)
    assert told["rows"] == told["stored"] == 30 * 15
    assert told["ticks"] == 30


def test_a_replay_that_found_nothing_leaves_nothing(
    hot_record: str, plate: str, tmp_path: Path
) -> None:
    """So that the second try, with the right times, is not told of an older record."""
    out = tmp_path / "o.sqlite"
    words = ["replay", plate, hot_record, "--db", str(out)]
    assert main([*words, "--from", "2027-01-01T00:00:00Z"]) == 3
    assert not list(tmp_path.iterdir())
    assert main(words) == 1


def test_refusals_are_told_to_a_machine_by_reason(plate: str, tmp_path: Path, capfd: Cli) -> None:
    """--json of a replay names each reason with its count."""
    log = tmp_path / "n.csv"
    log.write_text("at,sensor/T1\n2026-03-01T08:00:00Z,1\n2026-03-01T08:00:02Z,NaN\n")
    assert main(["replay", plate, str(log), "--db", str(tmp_path / "o.sqlite"), "--json"]) == 0
    assert json.loads(capfd.readouterr().out)["reasons"] == {"not a number": 1}
