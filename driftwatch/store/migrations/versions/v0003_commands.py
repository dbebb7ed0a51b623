"""What came of a command and the value it gave, notes for the next shift, and databases that were set aside."""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0003"
down_revision = "0002"
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Widen ``command`` and ``note``, create ``predecessor``."""
    op.add_column("command", sa.Column("value", sa.Double()))
    op.add_column("command", sa.Column("unit", sa.Text()))
    op.add_column("command", sa.Column("outcome", sa.Text()))
    op.create_index("ix_command_request", "command", ["request"])
    op.drop_index("ix_note_time", "note")
    op.rename_table("note", "note_before")  # a column that must hold something cannot be added to a table with rows
    op.create_table(
        "note",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("by", sa.Text(), nullable=False),
        sa.Column("text", sa.Text(), nullable=False),
        sa.Column("handover", sa.Boolean(), nullable=False),
        sqlite_with_rowid=False,
    )
    op.execute("INSERT INTO note SELECT header, sequence, previous, time_ns, by, text, 0 FROM note_before")
    op.drop_table("note_before")
    op.create_index("ix_note_time", "note", ["time_ns"])
    op.create_table(
        "predecessor",
        sa.Column("id", sa.Integer(), primary_key=True),
        sa.Column("path", sa.Text(), nullable=False),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("at_ns", sa.BigInteger(), nullable=False),
    )
