"""The first tables."""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Go forward."""
    op.create_table(
        "actions",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.Column("who", sa.Text(), nullable=False),
        sa.Column("subject", sa.Text(), nullable=False),
        sa.Column("action", sa.Text(), nullable=False),
        sa.Column("text", sa.Text(), nullable=False),
        sa.Column("detail", sa.Text(), nullable=False),
        sa.Column("previous_hash", sa.String(length=64), nullable=False),
        sa.Column("hash", sa.String(length=64), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_actions")),
        sa.UniqueConstraint("hash", name=op.f("uq_actions_hash")),
    )
    with op.batch_alter_table("actions", schema=None) as batch_op:
        batch_op.create_index("ix_actions_subject", ["subject"], unique=False)

    op.create_table(
        "contexts",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("columns", sa.Text(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_contexts")),
        sa.UniqueConstraint("digest", name=op.f("uq_contexts_digest")),
    )
    op.create_table(
        "evaluations",
        sa.Column("characteristic", sa.Text(), nullable=False),
        sa.Column("plan_digest", sa.String(length=64), nullable=False),
        sa.Column("as_of_us", sa.BigInteger(), nullable=False),
        sa.Column("last_measurement_id", sa.BigInteger(), nullable=False),
        sa.Column("last_log_id", sa.BigInteger(), nullable=False),
        sa.PrimaryKeyConstraint("characteristic", name=op.f("pk_evaluations")),
    )
    op.create_table(
        "excursions",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("status", sa.String(length=12), nullable=False),
        sa.Column("tier", sa.String(length=8), nullable=False),
        sa.Column("pattern", sa.String(length=12), nullable=False),
        sa.Column("identity", sa.Text(), nullable=False),
        sa.Column("opened_us", sa.BigInteger(), nullable=False),
        sa.Column("updated_us", sa.BigInteger(), nullable=False),
        sa.Column(
            "merged_into", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=True
        ),
        sa.Column("payload", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(
            ["merged_into"], ["excursions.id"], name=op.f("fk_excursions_merged_into")
        ),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_excursions")),
    )
    with op.batch_alter_table("excursions", schema=None) as batch_op:
        batch_op.create_index("ix_excursions_identity", ["identity"], unique=False)

    op.create_table(
        "files",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("content_hash", sa.String(length=64), nullable=False),
        sa.Column("path", sa.Text(), nullable=False),
        sa.Column("kind", sa.String(length=16), nullable=True),
        sa.Column("outcome", sa.String(length=16), nullable=False),
        sa.Column("reason", sa.Text(), nullable=True),
        sa.Column("feed", sa.Text(), nullable=True),
        sa.Column("bytes", sa.BigInteger(), nullable=False),
        sa.Column("rows", sa.Integer(), nullable=False),
        sa.Column("loaded", sa.Integer(), nullable=False),
        sa.Column("duplicate", sa.Integer(), nullable=False),
        sa.Column("superseded", sa.Integer(), nullable=False),
        sa.Column("rejected", sa.Integer(), nullable=False),
        sa.Column("loaded_us", sa.BigInteger(), nullable=False),
        sa.Column("newest_us", sa.BigInteger(), nullable=True),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_files")),
        sa.UniqueConstraint("content_hash", name=op.f("uq_files_content_hash")),
    )
    op.create_table(
        "layouts",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("sites", sa.Text(), nullable=False),
        sa.Column("n", sa.Integer(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_layouts")),
        sa.UniqueConstraint("digest", name=op.f("uq_layouts_digest")),
    )
    op.create_table(
        "outbox",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("message_id", sa.Text(), nullable=False),
        sa.Column("as_of_us", sa.BigInteger(), nullable=False),
        sa.Column("recipient", sa.Text(), nullable=False),
        sa.Column("subject", sa.Text(), nullable=False),
        sa.Column("message", sa.LargeBinary(), nullable=False),
        sa.Column("state", sa.String(length=8), nullable=False),
        sa.Column("attempts", sa.Integer(), nullable=False),
        sa.Column("next_try_us", sa.BigInteger(), nullable=False),
        sa.Column("sent_us", sa.BigInteger(), nullable=True),
        sa.Column("last_error", sa.Text(), nullable=True),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_outbox")),
        sa.UniqueConstraint("message_id", name=op.f("uq_outbox_message_id")),
    )
    with op.batch_alter_table("outbox", schema=None) as batch_op:
        batch_op.create_index("ix_outbox_as_of_us", ["as_of_us"], unique=False)
        batch_op.create_index("ix_outbox_state", ["state"], unique=False)

    op.create_table(
        "passes",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("as_of_us", sa.BigInteger(), nullable=False),
        sa.Column("finished", sa.Integer(), nullable=False),
        sa.Column("last_measurement_id", sa.BigInteger(), nullable=False),
        sa.Column("last_log_id", sa.BigInteger(), nullable=False),
        sa.Column("result", sa.Text(), nullable=False),
        sa.Column("report", sa.Text(), nullable=True),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_passes")),
        sa.UniqueConstraint("as_of_us", name=op.f("uq_passes_as_of_us")),
    )
    op.create_table(
        "sightings",
        sa.Column("path", sa.Text(), nullable=False),
        sa.Column("bytes", sa.BigInteger(), nullable=False),
        sa.Column("modified_ns", sa.BigInteger(), nullable=False),
        sa.Column("content_hash", sa.String(length=64), nullable=False),
        sa.Column("seen_us", sa.BigInteger(), nullable=False),
        sa.PrimaryKeyConstraint("path", name=op.f("pk_sightings")),
    )
    op.create_table(
        "streams",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("characteristic", sa.Text(), nullable=False),
        sa.Column("context", sa.Text(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_streams")),
        sa.UniqueConstraint(
            "characteristic", "context", name=op.f("uq_streams_characteristic_context")
        ),
    )
    op.create_table(
        "baselines",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column(
            "stream_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False
        ),
        sa.Column("status", sa.String(length=12), nullable=False),
        sa.Column("from_us", sa.BigInteger(), nullable=False),
        sa.Column("first_us", sa.BigInteger(), nullable=False),
        sa.Column("last_us", sa.BigInteger(), nullable=False),
        sa.Column("n_points", sa.Integer(), nullable=False),
        sa.Column("payload", sa.Text(), nullable=False),
        sa.Column("made_us", sa.BigInteger(), nullable=False),
        sa.Column("made_by", sa.Text(), nullable=False),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("decided_us", sa.BigInteger(), nullable=True),
        sa.Column("decided_by", sa.Text(), nullable=True),
        sa.Column("decided_reason", sa.Text(), nullable=True),
        sa.ForeignKeyConstraint(["stream_id"], ["streams.id"], name=op.f("fk_baselines_stream_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_baselines")),
    )
    with op.batch_alter_table("baselines", schema=None) as batch_op:
        batch_op.create_index("ix_baselines_stream_id", ["stream_id"], unique=False)

    op.create_table(
        "bay_events",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("file_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("tool", sa.Text(), nullable=True),
        sa.Column("module", sa.Text(), nullable=True),
        sa.Column("text", sa.Text(), nullable=True),
        sa.Column("columns", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(["file_id"], ["files.id"], name=op.f("fk_bay_events_file_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_bay_events")),
    )
    with op.batch_alter_table("bay_events", schema=None) as batch_op:
        batch_op.create_index("ix_bay_events_at_us", ["at_us"], unique=False)
        batch_op.create_index("ix_bay_events_file_id", ["file_id"], unique=False)

    op.create_table(
        "excursion_history",
        sa.Column(
            "excursion_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False
        ),
        sa.Column("as_of_us", sa.BigInteger(), nullable=False),
        sa.Column("change", sa.String(length=12), nullable=False),
        sa.Column("tier", sa.String(length=8), nullable=False),
        sa.Column("pattern", sa.String(length=12), nullable=False),
        sa.Column("payload", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(
            ["excursion_id"], ["excursions.id"], name=op.f("fk_excursion_history_excursion_id")
        ),
        sa.PrimaryKeyConstraint("excursion_id", "as_of_us", name=op.f("pk_excursion_history")),
    )
    op.create_table(
        "measurements",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("file_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("parameter", sa.Text(), nullable=False),
        sa.Column("layer", sa.Text(), nullable=False),
        sa.Column("lot", sa.Text(), nullable=False),
        sa.Column("wafer", sa.Text(), nullable=False),
        sa.Column("measured_us", sa.BigInteger(), nullable=False),
        sa.Column("processed_us", sa.BigInteger(), nullable=True),
        sa.Column(
            "context_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False
        ),
        sa.Column(
            "layout_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False
        ),
        sa.Column("unit", sa.Text(), nullable=False),
        sa.Column("n", sa.Integer(), nullable=False),
        sa.Column("mean", sa.Float(precision=53), nullable=False),
        sa.Column("sum_squares", sa.Float(precision=53), nullable=False),
        sa.Column("site_values", sa.LargeBinary(), nullable=True),
        sa.Column("first_line", sa.Integer(), nullable=False),
        sa.Column("last_line", sa.Integer(), nullable=False),
        sa.ForeignKeyConstraint(
            ["context_id"], ["contexts.id"], name=op.f("fk_measurements_context_id")
        ),
        sa.ForeignKeyConstraint(["file_id"], ["files.id"], name=op.f("fk_measurements_file_id")),
        sa.ForeignKeyConstraint(
            ["layout_id"], ["layouts.id"], name=op.f("fk_measurements_layout_id")
        ),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_measurements")),
    )
    with op.batch_alter_table("measurements", schema=None) as batch_op:
        batch_op.create_index("ix_measurements_file_id", ["file_id"], unique=False)
        batch_op.create_index(
            "ix_measurements_lot_wafer_parameter_layer",
            ["lot", "wafer", "parameter", "layer"],
            unique=False,
        )
        batch_op.create_index("ix_measurements_measured_us", ["measured_us"], unique=False)

    op.create_table(
        "process_log",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("file_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("processed_us", sa.BigInteger(), nullable=False),
        sa.Column("lot", sa.Text(), nullable=False),
        sa.Column("wafer", sa.Text(), nullable=False),
        sa.Column("layer", sa.Text(), nullable=False),
        sa.Column("step", sa.Text(), nullable=False),
        sa.Column("tool", sa.Text(), nullable=False),
        sa.Column("module", sa.Text(), nullable=False),
        sa.Column(
            "context_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False
        ),
        sa.ForeignKeyConstraint(
            ["context_id"], ["contexts.id"], name=op.f("fk_process_log_context_id")
        ),
        sa.ForeignKeyConstraint(["file_id"], ["files.id"], name=op.f("fk_process_log_file_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_process_log")),
    )
    with op.batch_alter_table("process_log", schema=None) as batch_op:
        batch_op.create_index(
            "ix_process_log_context_id_processed_us",
            ["context_id", "processed_us"],
            unique=False,
        )
        batch_op.create_index("ix_process_log_file_id", ["file_id"], unique=False)
        batch_op.create_index(
            "ix_process_log_lot_wafer_layer", ["lot", "wafer", "layer"], unique=False
        )
        batch_op.create_index("ix_process_log_processed_us", ["processed_us"], unique=False)

    op.create_table(
        "rejects",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("file_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("severity", sa.String(length=8), nullable=False),
        sa.Column("line", sa.Integer(), nullable=False),
        sa.Column("column", sa.Text(), nullable=True),
        sa.Column("value", sa.Text(), nullable=True),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("text", sa.Text(), nullable=True),
        sa.ForeignKeyConstraint(["file_id"], ["files.id"], name=op.f("fk_rejects_file_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_rejects")),
    )
    with op.batch_alter_table("rejects", schema=None) as batch_op:
        batch_op.create_index("ix_rejects_file_id", ["file_id"], unique=False)

    op.create_table(
        "wafer_results",
        sa.Column(
            "stream_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False
        ),
        sa.Column("lot", sa.Text(), nullable=False),
        sa.Column("layer", sa.Text(), nullable=False),
        sa.Column("wafer", sa.Text(), nullable=False),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.Column("measured_us", sa.BigInteger(), nullable=False),
        sa.Column("processed_us", sa.BigInteger(), nullable=True),
        sa.Column(
            "context_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False
        ),
        sa.Column(
            "step_context_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False
        ),
        sa.Column("n_sites", sa.Integer(), nullable=False),
        sa.Column("mean", sa.Float(precision=53), nullable=False),
        sa.Column("sum_squares", sa.Float(precision=53), nullable=False),
        sa.Column("df", sa.Float(precision=53), nullable=False),
        sa.Column("statistics", sa.LargeBinary(), nullable=False),
        sa.Column("out_of_spec_sites", sa.Integer(), nullable=False),
        sa.ForeignKeyConstraint(
            ["context_id"], ["contexts.id"], name=op.f("fk_wafer_results_context_id")
        ),
        sa.ForeignKeyConstraint(
            ["step_context_id"], ["contexts.id"], name=op.f("fk_wafer_results_step_context_id")
        ),
        sa.ForeignKeyConstraint(
            ["stream_id"], ["streams.id"], name=op.f("fk_wafer_results_stream_id")
        ),
        sa.PrimaryKeyConstraint(
            "stream_id", "lot", "layer", "wafer", name=op.f("pk_wafer_results")
        ),
    )
    with op.batch_alter_table("wafer_results", schema=None) as batch_op:
        batch_op.create_index("ix_wafer_results_lot", ["lot"], unique=False)
        batch_op.create_index(
            "ix_wafer_results_stream_id_at_us", ["stream_id", "at_us"], unique=False
        )

    op.create_table(
        "points",
        sa.Column(
            "stream_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False
        ),
        sa.Column("statistic", sa.String(length=24), nullable=False),
        sa.Column("lot", sa.Text(), nullable=False),
        sa.Column("layer", sa.Text(), nullable=False),
        sa.Column("wafer", sa.Text(), nullable=False),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.Column("measured_us", sa.BigInteger(), nullable=False),
        sa.Column("processed_us", sa.BigInteger(), nullable=True),
        sa.Column("value", sa.Float(precision=53), nullable=False),
        sa.Column("n_wafers", sa.Integer(), nullable=False),
        sa.Column("n_sites", sa.Integer(), nullable=False),
        sa.Column("effective_sites", sa.Float(precision=53), nullable=False),
        sa.Column("df", sa.Float(precision=53), nullable=False),
        sa.Column(
            "baseline_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=True
        ),
        sa.Column("phase", sa.String(length=12), nullable=False),
        sa.Column("center", sa.Float(precision=53), nullable=True),
        sa.Column("lower_limit", sa.Float(precision=53), nullable=True),
        sa.Column("upper_limit", sa.Float(precision=53), nullable=True),
        sa.Column("sigma", sa.Float(precision=53), nullable=True),
        sa.Column("z", sa.Float(precision=53), nullable=True),
        sa.Column("rules", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(
            ["baseline_id"], ["baselines.id"], name=op.f("fk_points_baseline_id")
        ),
        sa.ForeignKeyConstraint(["stream_id"], ["streams.id"], name=op.f("fk_points_stream_id")),
        sa.PrimaryKeyConstraint(
            "stream_id", "statistic", "lot", "layer", "wafer", name=op.f("pk_points")
        ),
    )
    with op.batch_alter_table("points", schema=None) as batch_op:
        batch_op.create_index("ix_points_measured_us", ["measured_us"], unique=False)
        batch_op.create_index(
            "ix_points_stream_id_statistic_at_us",
            ["stream_id", "statistic", "at_us"],
            unique=False,
        )
