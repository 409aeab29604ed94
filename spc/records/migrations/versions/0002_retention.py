"""retention"""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0002"
down_revision = "0001"
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Go forward."""
    op.create_table(
        "aggregated_months",
        sa.Column("month", sa.String(length=7), nullable=False),
        sa.Column("begins_us", sa.BigInteger(), nullable=False),
        sa.Column("ends_us", sa.BigInteger(), nullable=False),
        sa.Column("started_us", sa.BigInteger(), nullable=False),
        sa.Column("done_us", sa.BigInteger(), nullable=True),
        sa.Column("last_measurement_id", sa.BigInteger(), nullable=False),
        sa.Column("measurements", sa.Integer(), nullable=False),
        sa.Column("site_values", sa.BigInteger(), nullable=False),
        sa.PrimaryKeyConstraint("month", name=op.f("pk_aggregated_months")),
    )
    op.create_table(
        "archived",
        sa.Column("path", sa.Text(), nullable=False),
        sa.Column("content_hash", sa.String(length=64), nullable=False),
        sa.Column("archive_path", sa.Text(), nullable=False),
        sa.Column("bytes", sa.BigInteger(), nullable=False),
        sa.Column("archived_us", sa.BigInteger(), nullable=False),
        sa.PrimaryKeyConstraint("path", "content_hash", name=op.f("pk_archived")),
    )
    op.create_table(
        "kept_studies",
        sa.Column("characteristic", sa.Text(), nullable=False),
        sa.Column("context", sa.Text(), nullable=False),
        sa.Column("month", sa.String(length=7), nullable=False),
        sa.Column("asked", sa.Text(), nullable=False),
        sa.Column("n_wafers", sa.Integer(), nullable=False),
        sa.Column("made_us", sa.BigInteger(), nullable=False),
        sa.Column("numbers", sa.Text(), nullable=False),
        sa.Column("verdict", sa.Text(), nullable=False),
        sa.PrimaryKeyConstraint("characteristic", "context", "month", name=op.f("pk_kept_studies")),
    )
    op.create_table(
        "kept_distances",
        sa.Column(
            "stream_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False
        ),
        sa.Column("lot", sa.Text(), nullable=False),
        sa.Column("layer", sa.Text(), nullable=False),
        sa.Column("wafer", sa.Text(), nullable=False),
        sa.Column(
            "baseline_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False
        ),
        sa.Column("n_wafers", sa.Integer(), nullable=False),
        sa.Column("value", sa.Float(precision=53), nullable=False),
        sa.Column("df", sa.Float(precision=53), nullable=False),
        sa.Column("z", sa.Float(precision=53), nullable=True),
        sa.ForeignKeyConstraint(
            ["baseline_id"], ["baselines.id"], name=op.f("fk_kept_distances_baseline_id")
        ),
        sa.ForeignKeyConstraint(
            ["stream_id"], ["streams.id"], name=op.f("fk_kept_distances_stream_id")
        ),
        sa.PrimaryKeyConstraint(
            "stream_id", "lot", "layer", "wafer", name=op.f("pk_kept_distances")
        ),
    )
    with op.batch_alter_table("kept_distances", schema=None) as batch_op:
        batch_op.create_index(batch_op.f("ix_kept_distances_lot"), ["lot"], unique=False)

    op.create_table(
        "kept_wafers",
        sa.Column(
            "stream_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False
        ),
        sa.Column("lot", sa.Text(), nullable=False),
        sa.Column("layer", sa.Text(), nullable=False),
        sa.Column("wafer", sa.Text(), nullable=False),
        sa.Column("measured_us", sa.BigInteger(), nullable=False),
        sa.Column(
            "baseline_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=True
        ),
        sa.Column("unit", sa.Text(), nullable=False),
        sa.Column("n_sites", sa.Integer(), nullable=False),
        sa.Column("mean", sa.Float(precision=53), nullable=False),
        sa.Column("sum_squares", sa.Float(precision=53), nullable=False),
        sa.Column("df", sa.Float(precision=53), nullable=False),
        sa.Column("out_of_spec_sites", sa.Integer(), nullable=False),
        sa.Column("names", sa.Text(), nullable=False),
        sa.Column("statistics", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(
            ["baseline_id"], ["baselines.id"], name=op.f("fk_kept_wafers_baseline_id")
        ),
        sa.ForeignKeyConstraint(
            ["stream_id"], ["streams.id"], name=op.f("fk_kept_wafers_stream_id")
        ),
        sa.PrimaryKeyConstraint("stream_id", "lot", "layer", "wafer", name=op.f("pk_kept_wafers")),
    )
    with op.batch_alter_table("kept_wafers", schema=None) as batch_op:
        batch_op.create_index(batch_op.f("ix_kept_wafers_lot"), ["lot"], unique=False)
