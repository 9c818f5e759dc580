"""The first form: runs, sittings, points, seconds, events, notes."""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None


def _count(name: str) -> sa.Column[int]:
    return sa.Column(name, sa.BigInteger, nullable=False)


def _tally(prefix: str = "") -> list[sa.Column[int]]:
    names = ("received", "compared", "unaligned", "errors", "ones_as_zeros", "zeros_as_ones")
    return [_count(prefix + name) for name in names]


def upgrade() -> None:
    """Make the tables."""
    op.create_table(
        "run",
        sa.Column("id", sa.Integer, primary_key=True),
        sa.Column("key", sa.String(36), nullable=False, unique=True),
        sa.Column("title", sa.Text, nullable=False),
        sa.Column("command", sa.Text, nullable=False),
        sa.Column("started", sa.BigInteger, nullable=False),
        sa.Column("ended", sa.BigInteger),
        sa.Column("status", sa.Text, nullable=False),
        sa.Column("ended_by", sa.Text),
        sa.Column("verdict", sa.Text),
        sa.Column("profile_text", sa.Text, nullable=False),
        sa.Column("overrides", sa.Text, nullable=False),
        sa.Column("settings", sa.Text, nullable=False),
        sa.Column("device", sa.Text, nullable=False),
        sa.Column("stated", sa.Text),
    )
    op.create_index("run_started", "run", ["started"])
    op.create_table(
        "sitting",
        sa.Column("run_id", sa.Integer, sa.ForeignKey("run.id"), nullable=False),
        sa.Column("number", sa.Integer, nullable=False),
        sa.Column("started", sa.BigInteger, nullable=False),
        sa.Column("ended", sa.BigInteger),
        sa.Column("status", sa.Text, nullable=False),
        sa.Column("host", sa.Text, nullable=False),
        sa.Column("versions", sa.Text, nullable=False),
        _count("undecided_bits"),
        _count("last_commit"),
        sa.PrimaryKeyConstraint("run_id", "number"),
    )
    op.create_table(
        "point",
        sa.Column("run_id", sa.Integer, sa.ForeignKey("run.id"), nullable=False),
        sa.Column("number", sa.Integer, nullable=False),
        sa.Column("conditions", sa.Text, nullable=False),
        sa.Column("started", sa.BigInteger, nullable=False),
        sa.Column("ended", sa.BigInteger),
        sa.Column("ended_by", sa.Text),
        sa.Column("facts", sa.Text, nullable=False),
        *_tally("after_"),
        sa.PrimaryKeyConstraint("run_id", "number"),
    )
    op.create_table(
        "second",
        sa.Column("run_id", sa.Integer, nullable=False),
        sa.Column("number", sa.Integer, nullable=False),
        sa.Column("point", sa.Integer, nullable=False),
        sa.Column("sitting", sa.Integer, nullable=False),
        _count("at"),
        _count("duration_ns"),
        _count("sent"),
        *_tally(),
        sa.Column("due", sa.Boolean, nullable=False),
        sa.Column("slips", sa.Integer, nullable=False),
        _count("bits_lost"),
        _count("bits_inserted"),
        _count("first_bit"),
        sa.Column("positions", sa.LargeBinary),
        sa.Column("kinds", sa.LargeBinary),
        sa.Column("positions_complete", sa.Boolean, nullable=False),
        sa.Column("stretches", sa.LargeBinary),
        sa.PrimaryKeyConstraint("run_id", "number"),
        sa.ForeignKeyConstraint(["run_id", "point"], ["point.run_id", "point.number"]),
        sa.ForeignKeyConstraint(["run_id", "sitting"], ["sitting.run_id", "sitting.number"]),
    )
    op.create_table(
        "event",
        sa.Column("run_id", sa.Integer, sa.ForeignKey("run.id"), nullable=False),
        sa.Column("number", sa.Integer, nullable=False),
        sa.Column("point", sa.Integer),
        sa.Column("kind", sa.Text, nullable=False),
        sa.Column("bit", sa.BigInteger),
        sa.Column("at", sa.BigInteger),
        sa.Column("text", sa.Text, nullable=False),
        sa.Column("data", sa.Text, nullable=False),
        sa.PrimaryKeyConstraint("run_id", "number"),
    )
    op.create_table(
        "note",
        sa.Column("run_id", sa.Integer, sa.ForeignKey("run.id"), nullable=False),
        sa.Column("number", sa.Integer, nullable=False),
        sa.Column("at", sa.BigInteger, nullable=False),
        sa.Column("who", sa.Text, nullable=False),
        sa.Column("text", sa.Text, nullable=False),
        sa.Column("void", sa.Boolean, nullable=False),
        sa.PrimaryKeyConstraint("run_id", "number"),
    )
