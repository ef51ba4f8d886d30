"""Scans, jobs, idempotency keys and workers.

Revision ID: 0001
Revises:
"""

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None


def upgrade() -> None:
    op.create_table(
        "scans",
        sa.Column("id", sa.String(26), nullable=False),
        sa.Column("owner", sa.String(64), nullable=False),
        sa.Column("label", sa.String(200)),
        sa.Column("title", sa.Text),
        sa.Column("sha256", sa.String(64), nullable=False),
        sa.Column("bytes", sa.BigInteger, nullable=False),
        sa.Column("state", sa.String(16), nullable=False),
        sa.Column("facts", sa.JSON, nullable=False),
        sa.Column("created_at", sa.BigInteger, nullable=False),
        sa.PrimaryKeyConstraint("id", name="pk_scans"),
        sa.UniqueConstraint("owner", "sha256", name="uq_scans_owner_sha256"),
    )
    op.create_table(
        "jobs",
        sa.Column("id", sa.String(26), nullable=False),
        sa.Column("owner", sa.String(64), nullable=False),
        sa.Column("kind", sa.String(32), nullable=False),
        sa.Column("label", sa.String(200)),
        sa.Column("scan", sa.String(26), nullable=False),
        sa.Column("settings", sa.JSON, nullable=False),
        sa.Column("priority", sa.String(16), nullable=False),
        sa.Column("turn", sa.BigInteger, nullable=False),
        sa.Column("work", sa.BigInteger, nullable=False),
        sa.Column("pace", sa.String(64), nullable=False),
        sa.Column("state", sa.String(16), nullable=False),
        sa.Column("stage", sa.String(32)),
        sa.Column("progress", sa.Float, nullable=False),
        sa.Column("attempts", sa.Integer, nullable=False),
        sa.Column("child_deaths", sa.Integer, nullable=False),
        sa.Column("worker_deaths", sa.Integer, nullable=False),
        sa.Column("worker", sa.String(255)),
        sa.Column("error", sa.JSON),
        sa.Column("files", sa.JSON),
        sa.Column("created_at", sa.BigInteger, nullable=False),
        sa.Column("queued_at", sa.BigInteger),
        sa.Column("started_at", sa.BigInteger),
        sa.Column("attempt_started_at", sa.BigInteger),
        sa.Column("finished_at", sa.BigInteger),
        sa.PrimaryKeyConstraint("id", name="pk_jobs"),
    )
    op.create_index("ix_jobs_owner_id", "jobs", ["owner", "id"])
    op.create_index("ix_jobs_state_turn", "jobs", ["state", "turn"])
    op.create_index("ix_jobs_turn", "jobs", ["turn"])
    op.create_index("ix_jobs_scan", "jobs", ["scan"])
    op.create_table(
        "idempotency",
        sa.Column("owner", sa.String(64), nullable=False),
        sa.Column("key", sa.String(255), nullable=False),
        sa.Column("request", sa.String(64)),
        sa.Column("answer", sa.JSON),
        sa.Column("created_at", sa.BigInteger, nullable=False),
        sa.PrimaryKeyConstraint("owner", "key", name="pk_idempotency"),
    )
    op.create_index("ix_idempotency_created_at", "idempotency", ["created_at"])
    op.create_table(
        "workers",
        sa.Column("executor", sa.String(255), nullable=False),
        sa.Column("host", sa.String(255), nullable=False),
        sa.Column("process", sa.Integer, nullable=False),
        sa.Column("started_at", sa.BigInteger, nullable=False),
        sa.Column("seen_at", sa.BigInteger, nullable=False),
        sa.PrimaryKeyConstraint("executor", name="pk_workers"),
    )


def downgrade() -> None:
    for table in ("workers", "idempotency", "jobs", "scans"):
        op.drop_table(table)
