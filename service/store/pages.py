"""Pages of a list: newest first, continued from a cursor."""

from __future__ import annotations

import base64
import binascii
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

import sqlalchemy as sa

from service.errors import Malformed
from service.ids import is_id


@dataclass(frozen=True)
class Filter:
    """Which rows a list shows.

    Attributes
    ----------
    label, state : str or None
        Exactly this one.
    created_after, created_before : datetime or None
        Made at or after, and before, this moment.
    cursor : str or None
        Where the page before ended.
    limit : int
        Most rows of a page.
    """

    label: str | None = None
    state: str | None = None
    created_after: datetime | None = None
    created_before: datetime | None = None
    cursor: str | None = None
    limit: int = 50


def read_page(
    connection: sa.Connection, table: sa.Table, owner: str, wanted: Filter
) -> tuple[Sequence[sa.Row[Any]], str | None]:
    """Read one page of an owner's rows and the cursor of the next one.

    Identifiers sort by time, so that a page neither repeats nor misses rows when new ones arrive meanwhile.
    """
    query = sa.select(table).where(table.c.owner == owner).order_by(table.c.id.desc()).limit(wanted.limit + 1)
    if wanted.label is not None:
        query = query.where(table.c.label == wanted.label)
    if wanted.state is not None:
        query = query.where(table.c.state == wanted.state)
    if wanted.created_after is not None:
        query = query.where(table.c.created_at >= wanted.created_after)
    if wanted.created_before is not None:
        query = query.where(table.c.created_at < wanted.created_before)
    if wanted.cursor is not None:
        query = query.where(table.c.id < _decode(wanted.cursor))
    rows = connection.execute(query).all()
    if len(rows) <= wanted.limit:
        return rows, None
    return rows[:-1], _encode(rows[-2].id)


def _encode(identifier: str) -> str:
    return base64.urlsafe_b64encode(identifier.encode()).decode().rstrip("=")


def _decode(cursor: str) -> str:
    try:
        identifier = base64.urlsafe_b64decode(cursor + "=" * (-len(cursor) % 4)).decode("ascii")
    except (binascii.Error, ValueError):
        identifier = ""
    if not is_id(identifier):
        raise Malformed(
            f"the cursor {cursor!r} is not one of this list: pass on the `next` of the page before, or leave it out",
            errors=[{"parameter": "cursor", "detail": "not a cursor of this list"}],
        )
    return identifier
