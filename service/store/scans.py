"""Rows of scans."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import datetime
from typing import Any

import sqlalchemy as sa

from service.errors import NotFound, WrongState
from service.store.database import Database
from service.store.pages import Filter, read_page
from service.store.tables import jobs, scans

UNFINISHED = ("accepted", "running")


@dataclass(frozen=True)
class ScanRecord:
    """One accepted scan; `facts` is what the inspection found, as JSON."""

    id: str
    owner: str
    label: str | None
    title: str | None
    sha256: str
    bytes: int
    state: str
    facts: dict[str, Any]
    created_at: datetime


class ScanStore:
    """Domain verbs on the table of scans."""

    def __init__(self, database: Database) -> None:
        self._database = database

    def add(self, scan: ScanRecord) -> ScanRecord:
        """Write a row; when the same content of the same owner is there already, that one takes the label, if any."""
        with self._database.write() as connection:
            there = _by_content(connection, scan.owner, scan.sha256)
            if there is not None and scan.label in {None, there.label}:
                return there
            if there is not None:
                connection.execute(sa.update(scans).where(scans.c.id == there.id).values(label=scan.label))
                return replace(there, label=scan.label)
            connection.execute(sa.insert(scans).values(**scan.__dict__))
        return scan

    def by_content(self, owner: str, sha256: str) -> ScanRecord | None:
        """The owner's scan with this content."""
        with self._database.read() as connection:
            return _by_content(connection, owner, sha256)

    def get(self, owner: str, scan_id: str) -> ScanRecord:
        """One scan.

        Raises
        ------
        NotFound
            Unknown, or another owner's.
        """
        with self._database.read() as connection:
            return find_scan(connection, owner, scan_id)

    def page(self, owner: str, wanted: Filter) -> tuple[list[ScanRecord], str | None]:
        """One page of the owner's scans, newest first, and the cursor of the next."""
        with self._database.read() as connection:
            rows, cursor = read_page(connection, scans, owner, wanted)
        return [ScanRecord(**row._mapping) for row in rows], cursor

    def remove(self, owner: str, scan_id: str) -> None:
        """Remove a row.

        Raises
        ------
        NotFound
        WrongState
            A job on this scan is not finished.
        """
        with self._database.write() as connection:
            find_scan(connection, owner, scan_id)
            query = sa.select(jobs.c.id).where(jobs.c.scan == scan_id, jobs.c.state.in_(UNFINISHED)).limit(1)
            job = connection.execute(query).scalar()
            if job is not None:
                raise WrongState(
                    f"job {job} still needs scan {scan_id}: wait for it or dismiss it, then delete the scan",
                    retry_after=5,
                )
            connection.execute(sa.delete(scans).where(scans.c.id == scan_id))

    def known(self) -> set[str]:
        """Identifiers of every scan there is."""
        with self._database.read() as connection:
            return set(connection.execute(sa.select(scans.c.id)).scalars())


def find_scan(connection: sa.Connection, owner: str, scan_id: str) -> ScanRecord:
    """Read one row within a transaction."""
    row = connection.execute(
        sa.select(scans).where(scans.c.id == scan_id, scans.c.owner == owner)
    ).one_or_none()
    if row is None:
        raise NotFound(f"there is no scan {scan_id!r}: see GET /v1/scans for those there are")
    return ScanRecord(**row._mapping)


def _by_content(connection: sa.Connection, owner: str, sha256: str) -> ScanRecord | None:
    row = connection.execute(
        sa.select(scans).where(scans.c.owner == owner, scans.c.sha256 == sha256)
    ).one_or_none()
    return None if row is None else ScanRecord(**row._mapping)
