"""The first tables: what a run's records share, and one table for each kind of record.

Written out, not generated from the vocabulary: a migration says for ever what it did, whatever the vocabulary becomes.
"""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Create every table of revision 0001."""
    op.create_table(
        "header",
        sa.Column("id", sa.Integer(), primary_key=True),
        sa.Column("run", sa.Text(), nullable=False),
        sa.Column("station", sa.Text(), nullable=False),
        sa.Column("origin", sa.Text(), nullable=False),
        sa.Column("time_quality", sa.Text(), nullable=False),
        sa.Column("opened_ns", sa.BigInteger(), nullable=False),
        sa.UniqueConstraint("run", "station", "origin", "time_quality", name="uq_header"),
    )
    op.create_table(
        "alert",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("alert", sa.Text(), nullable=False),
        sa.Column("occurrence", sa.Text(), nullable=False),
        sa.Column("condition", sa.Text(), nullable=False),
        sa.Column("channel", sa.Text()),
        sa.Column("mode", sa.Text()),
        sa.Column("quantity", sa.Text()),
        sa.Column("basis", sa.Text()),
        sa.Column("value", sa.Double()),
        sa.Column("value_std", sa.Double()),
        sa.Column("unit", sa.Text()),
        sa.Column("low", sa.Double()),
        sa.Column("high", sa.Double()),
        sa.Column("baseline", sa.BigInteger()),
        sa.Column("confidence", sa.Double()),
        sa.Column("probability", sa.Double()),
        sa.Column("determinate", sa.Boolean(), nullable=False),
        sa.Column("since_ns", sa.BigInteger(), nullable=False),
        sa.Column("state", sa.Text(), nullable=False),
        sa.Column("previous_state", sa.Text(), nullable=False),
        sa.Column("priority", sa.Text(), nullable=False),
        sa.Column("by", sa.Text()),
        sa.Column("reason", sa.Text()),
        sa.Column("shelved_until_ns", sa.BigInteger()),
        sa.Column("because", sa.Text(), nullable=False),
        sa.Column("evidence", sa.Text(), nullable=False),
        sqlite_with_rowid=False,
    )
    op.create_index("ix_alert_about", "alert", ["header", "channel", "mode", "time_ns"])
    op.create_index("ix_alert_alert", "alert", ["header", "alert", "sequence"])
    op.create_index("ix_alert_time", "alert", ["time_ns"])
    op.create_table(
        "baseline",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("channel", sa.Text(), nullable=False),
        sa.Column("mode", sa.Text(), nullable=False),
        sa.Column("regime", sa.Text()),
        sa.Column("version", sa.BigInteger(), nullable=False),
        sa.Column("frequency_hz", sa.Double()),
        sa.Column("frequency_std_hz", sa.Double()),
        sa.Column("q", sa.Double()),
        sa.Column("q_std", sa.Double()),
        sa.Column("readings", sa.BigInteger(), nullable=False),
        sa.Column("from_ns", sa.BigInteger(), nullable=False),
        sa.Column("until_ns", sa.BigInteger(), nullable=False),
        sqlite_with_rowid=False,
    )
    op.create_index("ix_baseline_about", "baseline", ["header", "channel", "mode", "time_ns"])
    op.create_index("ix_baseline_time", "baseline", ["time_ns"])
    op.create_table(
        "change",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("channel", sa.Text(), nullable=False),
        sa.Column("mode", sa.Text(), nullable=False),
        sa.Column("quantity", sa.Text(), nullable=False),
        sa.Column("size", sa.Double()),
        sa.Column("size_std", sa.Double()),
        sa.Column("onset_ns", sa.BigInteger(), nullable=False),
        sa.Column("onset_low_ns", sa.BigInteger(), nullable=False),
        sa.Column("onset_high_ns", sa.BigInteger(), nullable=False),
        sqlite_with_rowid=False,
    )
    op.create_index("ix_change_about", "change", ["header", "channel", "mode", "time_ns"])
    op.create_index("ix_change_time", "change", ["time_ns"])
    op.create_table(
        "command",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("request", sa.Text(), nullable=False),
        sa.Column("by", sa.Text(), nullable=False),
        sa.Column("action", sa.Text(), nullable=False),
        sa.Column("target", sa.Text()),
        sa.Column("reason", sa.Text()),
        sqlite_with_rowid=False,
    )
    op.create_index("ix_command_time", "command", ["time_ns"])
    op.create_table(
        "covariate",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.Column("value", sa.Double()),
        sa.Column("unit", sa.Text(), nullable=False),
        sqlite_with_rowid=False,
    )
    op.create_index("ix_covariate_time", "covariate", ["time_ns"])
    op.create_table(
        "decay",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("channel", sa.Text(), nullable=False),
        sa.Column("mode", sa.Text(), nullable=False),
        sa.Column("amplitude", sa.Double()),
        sa.Column("frequency_slope", sa.Double()),
        sa.Column("frequency_slope_std", sa.Double()),
        sa.Column("q_slope", sa.Double()),
        sa.Column("q_slope_std", sa.Double()),
        sqlite_with_rowid=False,
    )
    op.create_index("ix_decay_about", "decay", ["header", "channel", "mode", "time_ns"])
    op.create_index("ix_decay_time", "decay", ["time_ns"])
    op.create_table(
        "health",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("channel", sa.Text()),
        sa.Column("fault", sa.Text(), nullable=False),
        sa.Column("phase", sa.Text(), nullable=False),
        sa.Column("incident", sa.Text(), nullable=False),
        sa.Column("since_ns", sa.BigInteger(), nullable=False),
        sa.Column("seconds", sa.Double()),
        sa.Column("first_sample", sa.BigInteger()),
        sa.Column("lost_samples", sa.BigInteger(), nullable=False),
        sa.Column("value", sa.Double()),
        sa.Column("limit", sa.Double()),
        sa.Column("unit", sa.Text()),
        sa.Column("detail", sa.Text()),
        sqlite_with_rowid=False,
    )
    op.create_index("ix_health_about", "health", ["header", "channel", "time_ns"])
    op.create_index("ix_health_time", "health", ["time_ns"])
    op.create_table(
        "level",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("channel", sa.Text(), nullable=False),
        sa.Column("window_s", sa.Double()),
        sa.Column("rms", sa.Double()),
        sa.Column("peak", sa.Double()),
        sa.Column("crest", sa.Double()),
        sa.Column("kurtosis", sa.Double()),
        sa.Column("band_hz", sa.Text(), nullable=False),
        sa.Column("unit", sa.Text(), nullable=False),
        sqlite_with_rowid=False,
    )
    op.create_index("ix_level_about", "level", ["header", "channel", "time_ns"])
    op.create_index("ix_level_time", "level", ["time_ns"])
    op.create_table(
        "measurement",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("channel", sa.Text(), nullable=False),
        sa.Column("mode", sa.Text(), nullable=False),
        sa.Column("method", sa.Text(), nullable=False),
        sa.Column("regime", sa.Text()),
        sa.Column("window_s", sa.Double()),
        sa.Column("first_sample", sa.BigInteger(), nullable=False),
        sa.Column("samples", sa.BigInteger(), nullable=False),
        sa.Column("frequency_hz", sa.Double()),
        sa.Column("frequency_std_hz", sa.Double()),
        sa.Column("q", sa.Double()),
        sa.Column("q_std", sa.Double()),
        sa.Column("q_low", sa.Double()),
        sa.Column("q_high", sa.Double()),
        sa.Column("frequency_q_correlation", sa.Double()),
        sa.Column("level", sa.Double()),
        sa.Column("level_unit", sa.Text(), nullable=False),
        sa.Column("snr_db", sa.Double()),
        sa.Column("fit_p", sa.Double()),
        sa.Column("usable", sa.Boolean(), nullable=False),
        sa.Column("reasons", sa.Text(), nullable=False),
        sqlite_with_rowid=False,
    )
    op.create_index("ix_measurement_about", "measurement", ["header", "channel", "mode", "time_ns"])
    op.create_index("ix_measurement_time", "measurement", ["time_ns"])
    op.create_table(
        "note",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("by", sa.Text(), nullable=False),
        sa.Column("text", sa.Text(), nullable=False),
        sqlite_with_rowid=False,
    )
    op.create_index("ix_note_time", "note", ["time_ns"])
    op.create_table(
        "run",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("phase", sa.Text(), nullable=False),
        sa.Column("config_sha256", sa.Text(), nullable=False),
        sa.Column("version", sa.Text(), nullable=False),
        sa.Column("sources", sa.Text(), nullable=False),
        sa.Column("assumed", sa.Text(), nullable=False),
        sa.Column("samples", sa.BigInteger(), nullable=False),
        sa.Column("reason", sa.Text()),
        sqlite_with_rowid=False,
    )
    op.create_index("ix_run_time", "run", ["time_ns"])
    op.create_table(
        "tone",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("channel", sa.Text(), nullable=False),
        sa.Column("frequency_hz", sa.Double()),
        sa.Column("frequency_std_hz", sa.Double()),
        sa.Column("level", sa.Double()),
        sa.Column("level_unit", sa.Text(), nullable=False),
        sa.Column("order", sa.Double()),
        sqlite_with_rowid=False,
    )
    op.create_index("ix_tone_about", "tone", ["header", "channel", "time_ns"])
    op.create_index("ix_tone_time", "tone", ["time_ns"])
    op.create_table(
        "track",
        sa.Column("header", sa.Integer(), sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger(), primary_key=True),
        sa.Column("previous", sa.BigInteger()),
        sa.Column("time_ns", sa.BigInteger(), nullable=False),
        sa.Column("channel", sa.Text(), nullable=False),
        sa.Column("mode", sa.Text(), nullable=False),
        sa.Column("status", sa.Text(), nullable=False),
        sa.Column("regime", sa.Text()),
        sa.Column("frequency_hz", sa.Double()),
        sa.Column("frequency_std_hz", sa.Double()),
        sa.Column("q", sa.Double()),
        sa.Column("q_std", sa.Double()),
        sa.Column("q_low", sa.Double()),
        sa.Column("q_high", sa.Double()),
        sa.Column("frequency_q_correlation", sa.Double()),
        sa.Column("frequency_compensated_hz", sa.Double()),
        sa.Column("frequency_compensated_std_hz", sa.Double()),
        sa.Column("q_compensated", sa.Double()),
        sa.Column("q_compensated_std", sa.Double()),
        sa.Column("clock_std_ppm", sa.Double()),
        sa.Column("drift_per_day", sa.Double()),
        sa.Column("drift_std_per_day", sa.Double()),
        sa.Column("q_drift_per_day", sa.Double()),
        sa.Column("q_drift_std_per_day", sa.Double()),
        sa.Column("baseline", sa.BigInteger()),
        sa.Column("last_measurement_ns", sa.BigInteger()),
        sa.Column("reason", sa.Text()),
        sqlite_with_rowid=False,
    )
    op.create_index("ix_track_about", "track", ["header", "channel", "mode", "time_ns"])
    op.create_index("ix_track_time", "track", ["time_ns"])
