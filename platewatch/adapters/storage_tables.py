"""Tables of the record, as SQLAlchemy Core; names and columns are a public contract.

Times are integer microseconds UTC (`at_us` source, `seen_us` arrival), temperatures degC.
A float that is not a number is stored as NULL.
"""

from __future__ import annotations

from sqlalchemy import (
    BigInteger,
    Column,
    Float,
    ForeignKey,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    PrimaryKeyConstraint,
    Table,
    Text,
    UniqueConstraint,
)

SCHEMA_NUMBER = 1
APPLICATION_ID = 0x504C5754  # "PLWT" in the file header, so that a foreign file is recognised

metadata = MetaData()


def _time(name: str = "at_us") -> Column[int]:
    return Column(name, BigInteger, nullable=False)


def _text(name: str) -> Column[str]:
    return Column(name, Text, nullable=False)


def _number(name: str) -> Column[float]:
    return Column(name, Float)


def _by_time(
    name: str, *columns: Column[int] | Column[str] | Column[float], key: str = ""
) -> Table:
    """A table keyed by (plate, at_us[, key]): one plate's rows lie together in time order."""
    names = ["plate", "at_us", *key.split()]
    return Table(
        name,
        metadata,
        _time(),
        _text("plate"),
        *columns,
        PrimaryKeyConstraint(*names),
        sqlite_with_rowid=False,
    )


def _chained(name: str, *columns: Column[int] | Column[str] | Column[float]) -> Table:
    """An append-only table whose rows carry the hash of the row before.

    AUTOINCREMENT keeps the highest number ever used, so a removed tail leaves a hole.
    """
    return Table(
        name,
        metadata,
        Column("seq", Integer, primary_key=True),
        _time(),
        *columns,
        _text("prev_hash"),
        _text("hash"),
        sqlite_autoincrement=True,
    )


channel = Table(
    "channel",
    metadata,
    Column("id", Integer, primary_key=True),
    _text("plate"),
    _text("name"),
    _text("unit"),
    # The unit belongs to the key: a channel that changes its unit gets a new id, and the
    # readings stored before keep their meaning.
    UniqueConstraint("plate", "name", "unit"),
)

reading = Table(
    "reading",
    metadata,
    _time(),
    Column("channel_id", Integer, ForeignKey("channel.id"), nullable=False),
    _number("value"),
    Column("flags", Integer, nullable=False),
    _time("seen_us"),
    PrimaryKeyConstraint("at_us", "channel_id"),
    sqlite_with_rowid=False,
)

peak = _by_time(
    "peak",
    _number("now_degC"),
    _number("now_sd_K"),
    _number("now_x_mm"),
    _number("now_y_mm"),
    _text("now_zone"),
    _number("ahead_degC"),
    _number("ahead_sd_K"),
    _number("ahead_in_s"),
    _number("ahead_x_mm"),
    _number("ahead_y_mm"),
    _text("ahead_zone"),
    _number("limit_degC"),
    _number("p_over"),
    _number("to_limit_s"),
    _text("cause"),
)

zone_power = _by_time(
    "zone_power",
    _text("zone"),
    _number("called_W"),
    _number("inferred_W"),
    _number("sd_W"),
    key="zone",
)

cause_probability = _by_time(
    "cause_probability",
    _text("cause"),
    _text("place"),
    _number("probability"),
    key="cause place",
)

alarm_limit_probability = _by_time(
    "alarm_limit_probability",
    _text("alarm_limit"),
    _number("p_over"),
    _number("to_limit_s"),
    _number("to_limit_05_s"),
    _number("to_limit_95_s"),
    key="alarm_limit",
)

basis = Table(
    "basis",
    metadata,
    Column("hash", Text, primary_key=True),
    _text("plate"),
    _text("description_sha256"),
)

field_shot = Table(
    "field_shot",
    metadata,
    _time(),
    _text("plate"),
    _text("basis"),
    Column("state", LargeBinary, nullable=False),
    PrimaryKeyConstraint("plate", "at_us"),
)

alarm_event = _chained(
    "alarm_event",
    _time("seen_us"),
    _text("plate"),
    _text("alarm"),
    _text("subject"),
    _text("place"),
    _text("from_state"),
    _text("to_state"),
    _text("priority"),
    _number("value"),
    _number("limit_value"),
    Column("limit_version", Integer, nullable=False),
    _text("cause"),
    Column("group_no", Integer, nullable=False),
    _text("person"),
    _text("reason"),
    _text("message"),
)
Index("alarm_event_instance", *(alarm_event.c[n] for n in ("plate", "alarm", "subject", "seq")))

person_action = _chained(
    "person_action",
    _text("plate"),
    _text("person"),
    _text("verb"),
    _text("alarm"),
    _text("subject"),
    _text("reason"),
)

# The tick that used an action is known later; the chained row itself is never touched again.
action_applied = Table(
    "action_applied",
    metadata,
    Column("seq", Integer, ForeignKey("person_action.seq"), primary_key=True),
    _time(),
)

log_note = _chained("log_note", _text("plate"), _text("person"), _text("text"))

run = Table(
    "run",
    metadata,
    Column("run_no", Integer, primary_key=True),
    _time("started_us"),
    _text("version"),
    _text("description_sha256"),
    _text("plate"),
    # How far the ticks had come; in a silence only the record knows it.
    Column("last_tick_us", BigInteger),
    sqlite_autoincrement=True,
)

description = Table(
    "description",
    metadata,
    Column("sha256", Text, primary_key=True),
    Column("content", LargeBinary, nullable=False),
)

gap = Table(
    "gap",
    metadata,
    _text("plate"),
    _time("from_us"),
    # The key comes first: else the integrity check of SQLite 3.40 misreads the row.
    _text("what"),
    _time("to_us"),
    PrimaryKeyConstraint("plate", "from_us", "what"),
    sqlite_with_rowid=False,
)

clock_note = Table(
    "clock_note",
    metadata,
    Column("id", Integer, primary_key=True),
    _time(),
    _text("plate"),
    Column("offset_us", BigInteger, nullable=False),
    _text("what"),
)

batch = Table(
    "batch",
    metadata,
    Column("id", Integer, primary_key=True),
    _time(),
    _text("plate"),
    _text("event"),
    _text("detail"),
    UniqueConstraint("plate", "at_us", "event", "detail"),
)

# Dead letters: each kind once, with how often it came.
refusal = Table(
    "refusal",
    metadata,
    _text("plate"),
    _text("topic"),
    _text("channel"),
    _text("reason"),
    Column("count", Integer, nullable=False),
    _time("first_us"),
    _time("last_us"),
    _text("detail"),
    _text("excerpt"),
    PrimaryKeyConstraint("plate", "topic", "channel", "reason"),
)

schema_number = Table("schema_number", metadata, Column("number", Integer, primary_key=True))

CHAINS = (person_action, alarm_event, log_note)


def insert_sql(table: Table, *, known: str = "DO NOTHING") -> str:
    """Text for `exec_driver_sql` with tuples in column order; a row already there is kept.

    Measured at 0.9 to 1.0 of raw sqlite3, where Core dictionaries reach 0.5 to 0.8.
    """
    names = [c.name for c in table.columns]
    marks = ", ".join("?" * len(names))
    quoted = ", ".join(f'"{name}"' for name in names)
    return f'INSERT INTO "{table.name}" ({quoted}) VALUES ({marks}) ON CONFLICT {known}'
