"""reevaluation"""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0003"
down_revision = "0002"
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Go forward."""
    op.create_table(
        "reevaluations",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("key", sa.String(length=64), nullable=False),
        sa.Column("status", sa.String(length=12), nullable=False),
        sa.Column("epoch", sa.Integer(), nullable=False),
        sa.Column("as_of_us", sa.BigInteger(), nullable=False),
        sa.Column("last_measurement_id", sa.BigInteger(), nullable=False),
        sa.Column("last_log_id", sa.BigInteger(), nullable=False),
        sa.Column("plan_digests", sa.Text(), nullable=False),
        sa.Column("whole", sa.Text(), nullable=False),
        sa.Column("told", sa.Integer(), nullable=False),
        sa.Column("result", sa.Text(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_reevaluations")),
    )
    op.create_table(
        "reevaluation_parts",
        sa.Column("run_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("number", sa.Integer(), nullable=False),
        sa.Column("characteristic", sa.Text(), nullable=False),
        sa.Column("content", sa.LargeBinary(), nullable=False),
        sa.Column("result", sa.Text(), nullable=True),
        sa.ForeignKeyConstraint(
            ["run_id"], ["reevaluations.id"], name=op.f("fk_reevaluation_parts_run_id")
        ),
        sa.PrimaryKeyConstraint("run_id", "number", name=op.f("pk_reevaluation_parts")),
    )
