"""What a lab asks for again and again gets columns of its own; runs get a digest, sittings their closing."""

from __future__ import annotations

import json

import sqlalchemy as sa
from alembic import op

revision = "0002"
down_revision = "0001"
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Add the columns and fill them from the JSON that is there."""
    with op.batch_alter_table("run") as table:
        table.add_column(sa.Column("serial_number", sa.Text))
        table.add_column(sa.Column("model", sa.Text))
        table.add_column(sa.Column("requirement_ber", sa.Float))
        table.add_column(sa.Column("digest", sa.String(64)))
    with op.batch_alter_table("sitting") as table:
        table.add_column(sa.Column("closing", sa.Text))
    op.create_index("run_serial_number", "run", ["serial_number", "started"])
    run = sa.table(
        "run",
        sa.column("id", sa.Integer),
        sa.column("settings", sa.Text),
        sa.column("device", sa.Text),
        sa.column("serial_number", sa.Text),
        sa.column("model", sa.Text),
        sa.column("requirement_ber", sa.Float),
    )
    connection = op.get_bind()
    for row in connection.execute(sa.select(run.c.id, run.c.settings, run.c.device)).all():
        device, requirement = json.loads(row.device), json.loads(row.settings).get("requirement") or {}
        connection.execute(
            sa.update(run)
            .where(run.c.id == row.id)
            .values(
                serial_number=device.get("serial_number"),
                model=device.get("model"),
                requirement_ber=requirement.get("ber"),
            )
        )
