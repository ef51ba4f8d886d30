"""The tables, as SQLAlchemy Core. A change here comes with a migration; a test compares the two."""

from __future__ import annotations

from datetime import UTC, datetime
from typing import Any, Final

import sqlalchemy as sa


class Moment(sa.types.TypeDecorator[datetime]):
    """A moment in UTC, kept as whole microseconds since 1970: sorts and compares alike on every database."""

    impl = sa.BigInteger
    cache_ok = True

    def process_bind_param(self, value: datetime | None, dialect: sa.Dialect) -> int | None:
        if value is None:
            return None
        return round(value.timestamp() * 1_000_000)

    def process_result_value(self, value: Any, dialect: sa.Dialect) -> datetime | None:
        return None if value is None else datetime.fromtimestamp(value / 1_000_000, UTC)


def now() -> datetime:
    """The present moment in UTC."""
    return datetime.now(UTC)


metadata: Final = sa.MetaData(
    naming_convention={
        "ix": "ix_%(table_name)s_%(column_0_N_name)s",
        "uq": "uq_%(table_name)s_%(column_0_N_name)s",
        "pk": "pk_%(table_name)s",
    }
)

scans: Final = sa.Table(
    "scans",
    metadata,
    sa.Column("id", sa.String(26), primary_key=True),
    sa.Column("owner", sa.String(64), nullable=False),
    sa.Column("label", sa.String(200)),
    sa.Column("title", sa.Text),
    sa.Column("sha256", sa.String(64), nullable=False),
    sa.Column("bytes", sa.BigInteger, nullable=False),
    sa.Column("state", sa.String(16), nullable=False),
    sa.Column("facts", sa.JSON, nullable=False),
    sa.Column("created_at", Moment, nullable=False),
    sa.UniqueConstraint("owner", "sha256"),
)

jobs: Final = sa.Table(
    "jobs",
    metadata,
    sa.Column("id", sa.String(26), primary_key=True),
    sa.Column("owner", sa.String(64), nullable=False),
    sa.Column("kind", sa.String(32), nullable=False),
    sa.Column("label", sa.String(200)),
    sa.Column("scan", sa.String(26), nullable=False),
    sa.Column("settings", sa.JSON, nullable=False),
    sa.Column("priority", sa.String(16), nullable=False),
    # Lower runs first: the band of the priority, then the order of arrival.
    sa.Column("turn", sa.BigInteger, nullable=False),
    # Number of k-space samples, and what they are put through: the two that the duration depends on.
    sa.Column("work", sa.BigInteger, nullable=False),
    sa.Column("pace", sa.String(64), nullable=False),
    sa.Column("state", sa.String(16), nullable=False),
    sa.Column("stage", sa.String(32)),
    sa.Column("progress", sa.Float, nullable=False),
    sa.Column("attempts", sa.Integer, nullable=False),
    sa.Column("child_deaths", sa.Integer, nullable=False),
    sa.Column("worker_deaths", sa.Integer, nullable=False),
    sa.Column("worker", sa.String(255)),
    sa.Column("error", sa.JSON(none_as_null=True)),
    sa.Column("files", sa.JSON(none_as_null=True)),
    sa.Column("created_at", Moment, nullable=False),
    sa.Column("queued_at", Moment),
    sa.Column("started_at", Moment),
    sa.Column("attempt_started_at", Moment),
    sa.Column("finished_at", Moment),
    sa.Index(None, "owner", "id"),
    sa.Index(None, "state", "turn"),
    sa.Index(None, "turn"),
    sa.Index(None, "scan"),
)

idempotency: Final = sa.Table(
    "idempotency",
    metadata,
    sa.Column("owner", sa.String(64), primary_key=True),
    sa.Column("key", sa.String(255), primary_key=True),
    sa.Column("request", sa.String(64)),
    sa.Column("answer", sa.JSON(none_as_null=True)),
    sa.Column("created_at", Moment, nullable=False),
    sa.Index(None, "created_at"),
)

workers: Final = sa.Table(
    "workers",
    metadata,
    sa.Column("executor", sa.String(255), primary_key=True),
    sa.Column("host", sa.String(255), nullable=False),
    sa.Column("process", sa.Integer, nullable=False),
    sa.Column("started_at", Moment, nullable=False),
    sa.Column("seen_at", Moment, nullable=False),
)
