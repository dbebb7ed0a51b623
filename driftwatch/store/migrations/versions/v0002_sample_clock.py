"""A table for what is known of each source's sample clock."""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0002"
down_revision = "0001"
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Create the table ``clock``."""
    op.create_table(
        "clock",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("source", sa.Text(), nullable=False),
        sa.Column("rate_hz", sa.Double()),
        sa.Column("deviation_ppm", sa.Double()),
        sa.Column("deviation_std_ppm", sa.Double()),
        sa.Column("span_s", sa.Double()),
        sa.Column("offset_s", sa.Double()),
        sa.Column("offset_std_s", sa.Double()),
        sqlite_with_rowid=False,
    )
    op.create_index("ix_clock_time", "clock", ["time_ns"])
