"""Rows of jobs: what the caller sees of them, and how they are made, listed and removed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final

import sqlalchemy as sa

from service.errors import NotFound, WrongState
from service.store.database import Database
from service.store.pages import Filter, read_page
from service.store.scans import UNFINISHED
from service.store.tables import jobs, now

STATES: Final = ("accepted", "running", "successful", "failed", "dismissed")
#: Where each priority begins in the order of turns; lower runs first.
BANDS: Final = {"urgent": 0, "routine": 1 << 30}


@dataclass(frozen=True)
class JobRecord:
    """One row; see `service.store.tables.jobs` for what the fields mean."""

    id: str
    owner: str
    kind: str
    label: str | None
    scan: str
    settings: dict[str, Any]
    priority: str
    turn: int
    work: int
    pace: str
    state: str
    stage: str | None
    progress: float
    attempts: int
    child_deaths: int
    worker_deaths: int
    worker: str | None
    error: dict[str, Any] | None
    files: dict[str, Any] | None
    created_at: datetime
    queued_at: datetime | None
    started_at: datetime | None
    attempt_started_at: datetime | None
    finished_at: datetime | None

    @property
    def is_finished(self) -> bool:
        """Whether nothing will happen to it any more."""
        return self.state not in UNFINISHED


class JobStore:
    """Domain verbs on the table of jobs, for those who order them."""

    def __init__(self, database: Database) -> None:
        self._database = database

    def get(self, owner: str, job_id: str) -> JobRecord:
        """One job.

        Raises
        ------
        NotFound
            Unknown, or another owner's.
        """
        with self._database.read() as connection:
            return _find(connection, owner, job_id)

    def page(self, owner: str, wanted: Filter) -> tuple[list[JobRecord], str | None]:
        """One page of the owner's jobs, newest first, and the cursor of the next."""
        with self._database.read() as connection:
            rows, cursor = read_page(connection, jobs, owner, wanted)
        return [JobRecord(**row._mapping) for row in rows], cursor

    def dismiss(self, owner: str, job_id: str) -> JobRecord:
        """End a waiting or running job; one that is dismissed already stays so.

        Raises
        ------
        NotFound
        WrongState
            It is successful or failed.
        """
        with self._database.write() as connection:
            job = _find(connection, owner, job_id)
            if job.state in {"successful", "failed"}:
                raise WrongState(f"job {job_id} is {job.state} already: a finished job cannot be dismissed")
            if job.state != "dismissed":
                connection.execute(
                    sa.update(jobs).where(jobs.c.id == job_id).values(state="dismissed", finished_at=now())
                )
            return _find(connection, owner, job_id)

    def remove(self, owner: str, job_id: str) -> None:
        """Remove the row of a finished job.

        Raises
        ------
        NotFound
        WrongState
            It is not finished.
        """
        with self._database.write() as connection:
            job = _find(connection, owner, job_id)
            if not job.is_finished:
                raise WrongState(
                    f"job {job_id} is {job.state}: dismiss it or wait for it, then delete it", retry_after=2
                )
            connection.execute(sa.delete(jobs).where(jobs.c.id == job_id))

    def known_results(self) -> set[str]:
        """Identifiers of every job that has, or may still get, results."""
        with self._database.read() as connection:
            query = sa.select(jobs.c.id).where(jobs.c.state.in_((*UNFINISHED, "successful")))
            return set(connection.execute(query).scalars())

    def glance(self, job_ids: Sequence[str]) -> dict[str, tuple[Any, ...]]:
        """What changes while a job runs, for many jobs at once; removed ones are left out."""
        query = sa.select(jobs.c.id, jobs.c.state, jobs.c.stage, jobs.c.progress, jobs.c.attempts).where(
            jobs.c.id.in_(job_ids)
        )
        with self._database.read() as connection:
            return {row.id: tuple(row[1:]) for row in connection.execute(query)}


def insert_job(connection: sa.Connection, job: dict[str, Any]) -> JobRecord:
    """Write the row of a new job, last of its priority, within a transaction.

    Parameters
    ----------
    job : dict
        `id owner kind label scan settings priority work pace`.
    """
    band = BANDS[job["priority"]]
    end = band + (1 << 30)
    last = connection.execute(
        sa.select(sa.func.max(jobs.c.turn)).where(jobs.c.turn >= band, jobs.c.turn < end)
    )
    connection.execute(
        sa.insert(jobs).values(
            **job,
            turn=max(band, last.scalar() or 0) + 1,
            state="accepted",
            progress=0.0,
            attempts=0,
            child_deaths=0,
            worker_deaths=0,
            created_at=now(),
        )
    )
    return _find(connection, job["owner"], job["id"])


def _find(connection: sa.Connection, owner: str, job_id: str) -> JobRecord:
    row = connection.execute(sa.select(jobs).where(jobs.c.id == job_id, jobs.c.owner == owner)).one_or_none()
    if row is None:
        raise NotFound(f"there is no job {job_id!r}: see GET /v1/jobs for those there are")
    return JobRecord(**row._mapping)
