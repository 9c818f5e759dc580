"""The tables of the store as this version knows them; migrations hold how they came about.

Times are UTC in integer nanoseconds, counts are in bits, JSON is text. `run_id` is a store's own
number for a run; the key (UUIDv7) is what the world knows it by. Rows of `second` and `event` are
written once and never changed.
"""

from __future__ import annotations

from sqlalchemy import (
    BigInteger,
    Boolean,
    Column,
    Float,
    ForeignKey,
    ForeignKeyConstraint,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    PrimaryKeyConstraint,
    String,
    Table,
    Text,
)

HEAD = "0002"  # the newest revision; a test holds it against the migrations

metadata = MetaData()

run = Table(
    "run",
    metadata,
    Column("id", Integer, primary_key=True),
    Column("key", String(36), nullable=False, unique=True),
    Column("title", Text, nullable=False),
    Column("command", Text, nullable=False),
    Column("started", BigInteger, nullable=False),
    Column("ended", BigInteger),
    Column("status", Text, nullable=False),
    Column("ended_by", Text),
    Column("verdict", Text),
    Column("profile_text", Text, nullable=False),
    Column("overrides", Text, nullable=False),
    Column("settings", Text, nullable=False),
    Column("device", Text, nullable=False),
    Column("stated", Text),
    # What the lab asks for again and again, taken out of the JSON.
    Column("serial_number", Text),
    Column("model", Text),
    Column("requirement_ber", Float),
    Column("digest", String(64)),
    Index("run_started", "started"),
    Index("run_serial_number", "serial_number", "started"),
)

sitting = Table(
    "sitting",
    metadata,
    Column("run_id", Integer, ForeignKey("run.id"), nullable=False),
    Column("number", Integer, nullable=False),
    Column("started", BigInteger, nullable=False),
    Column("ended", BigInteger),
    Column("status", Text, nullable=False),
    Column("host", Text, nullable=False),
    Column("versions", Text, nullable=False),
    Column("undecided_bits", BigInteger, nullable=False),
    Column("last_commit", BigInteger, nullable=False),
    Column("closing", Text),  # how the run stood when this sitting ended and another one followed
    PrimaryKeyConstraint("run_id", "number"),
)

point = Table(
    "point",
    metadata,
    Column("run_id", Integer, ForeignKey("run.id"), nullable=False),
    Column("number", Integer, nullable=False),
    Column("conditions", Text, nullable=False),
    Column("started", BigInteger, nullable=False),
    Column("ended", BigInteger),
    Column("ended_by", Text),
    Column("facts", Text, nullable=False),
    Column("after_received", BigInteger, nullable=False),
    Column("after_compared", BigInteger, nullable=False),
    Column("after_unaligned", BigInteger, nullable=False),
    Column("after_errors", BigInteger, nullable=False),
    Column("after_ones_as_zeros", BigInteger, nullable=False),
    Column("after_zeros_as_ones", BigInteger, nullable=False),
    PrimaryKeyConstraint("run_id", "number"),
)

second = Table(
    "second",
    metadata,
    Column("run_id", Integer, nullable=False),
    Column("number", Integer, nullable=False),
    Column("point", Integer, nullable=False),
    Column("sitting", Integer, nullable=False),
    Column("at", BigInteger, nullable=False),
    Column("duration_ns", BigInteger, nullable=False),
    Column("sent", BigInteger, nullable=False),
    Column("received", BigInteger, nullable=False),
    Column("compared", BigInteger, nullable=False),
    Column("unaligned", BigInteger, nullable=False),
    Column("errors", BigInteger, nullable=False),
    Column("ones_as_zeros", BigInteger, nullable=False),
    Column("zeros_as_ones", BigInteger, nullable=False),
    Column("due", Boolean, nullable=False),
    Column("slips", Integer, nullable=False),
    Column("bits_lost", BigInteger, nullable=False),
    Column("bits_inserted", BigInteger, nullable=False),
    Column("first_bit", BigInteger, nullable=False),
    Column("positions", LargeBinary),  # gaps as base-128 numbers, see coding.py; NULL: none
    Column("kinds", LargeBinary),  # one bit for each position
    Column("positions_complete", Boolean, nullable=False),
    Column("stretches", LargeBinary),  # NULL: one aligned stretch of all received bits
    PrimaryKeyConstraint("run_id", "number"),
    ForeignKeyConstraint(["run_id", "point"], ["point.run_id", "point.number"]),
    ForeignKeyConstraint(["run_id", "sitting"], ["sitting.run_id", "sitting.number"]),
)

event = Table(
    "event",
    metadata,
    Column("run_id", Integer, ForeignKey("run.id"), nullable=False),
    Column("number", Integer, nullable=False),
    Column("point", Integer),
    Column("kind", Text, nullable=False),
    Column("bit", BigInteger),
    Column("at", BigInteger),
    Column("text", Text, nullable=False),
    Column("data", Text, nullable=False),
    PrimaryKeyConstraint("run_id", "number"),
)

note = Table(
    "note",
    metadata,
    Column("run_id", Integer, ForeignKey("run.id"), nullable=False),
    Column("number", Integer, nullable=False),
    Column("at", BigInteger, nullable=False),
    Column("who", Text, nullable=False),
    Column("text", Text, nullable=False),
    Column("void", Boolean, nullable=False),
    PrimaryKeyConstraint("run_id", "number"),
)
