"""Rows of jobs as the workers change them.

Every start of a job gets a number. What an attempt writes counts only while the row still carries its number and
says `running`: an attempt that was overtaken, or dismissed, learns of it at its next write and stops.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import sqlalchemy as sa

from service.store.database import Database
from service.store.jobs import JobRecord
from service.store.scans import UNFINISHED
from service.store.tables import jobs, now, scans


class AttemptStore:
    """Domain verbs on the table of jobs, for those who run them."""

    def __init__(self, database: Database) -> None:
        self._database = database

    def begin(self, job_id: str, worker: str, *, is_retry: bool = False) -> JobRecord | None:
        """Start an attempt.

        Parameters
        ----------
        worker : str
            Who runs it.
        is_retry : bool
            The same worker tries again; otherwise a row found `running` tells that the worker before died.

        Returns
        -------
        JobRecord or None
            None where there is nothing to do: finished, dismissed or removed.
        """
        with self._database.write() as connection:
            job = _read(connection, job_id)
            if job is None or job.is_finished:
                return None
            is_orphan = job.state == "running" and not is_retry
            connection.execute(
                sa.update(jobs)
                .where(jobs.c.id == job_id)
                .values(
                    state="running",
                    stage=None,
                    progress=0.0,
                    attempts=job.attempts + 1,
                    worker_deaths=job.worker_deaths + is_orphan,
                    worker=worker,
                    started_at=job.started_at or now(),
                    attempt_started_at=now(),
                )
            )
            return _read(connection, job_id)

    def note_progress(self, job: JobRecord, stage: str | None, progress: float) -> bool:
        """Write stage and progress; tells whether the attempt still counts."""
        return self._write(job, stage=stage, progress=min(max(progress, 0.0), 1.0))

    def note_child_death(self, job: JobRecord) -> int | None:
        """Count a death of the computing process; returns the new count, or None where the attempt is over."""
        if not self._write(job, child_deaths=jobs.c.child_deaths + 1):
            return None
        with self._database.read() as connection:
            found = _read(connection, job.id)
        return None if found is None else found.child_deaths

    def succeed(self, job: JobRecord, files: dict[str, Any]) -> bool:
        """End a job whose results are in their place."""
        return self._write(job, state="successful", stage=None, progress=1.0, files=files, finished_at=now())

    def fail(self, job: JobRecord, error: dict[str, Any]) -> bool:
        """End a job with a problem."""
        return self._write(job, state="failed", error=error, finished_at=now())

    def hand_back(self, job: JobRecord) -> bool:
        """Give a running job back, for another worker or a later start."""
        return self._write(job, state="accepted", stage=None, progress=0.0, worker=None)

    def is_unwanted(self, job_id: str) -> bool:
        """Whether nobody will ever ask for the results of a job: dismissed or removed."""
        with self._database.read() as connection:
            job = _read(connection, job_id)
        return job is None or job.state == "dismissed"

    def scan_sha256(self, scan_id: str) -> str | None:
        """Digest of a scan's file."""
        with self._database.read() as connection:
            return connection.execute(sa.select(scans.c.sha256).where(scans.c.id == scan_id)).scalar()

    def unqueued(self) -> Sequence[JobRecord]:
        """Jobs whose row was written, and not yet their place in the queue."""
        query = (
            sa.select(jobs)
            .where(jobs.c.state.in_(UNFINISHED), jobs.c.queued_at.is_(None))
            .order_by(jobs.c.id)
        )
        with self._database.read() as connection:
            return [JobRecord(**row._mapping) for row in connection.execute(query)]

    def queued(self) -> Sequence[JobRecord]:
        """Unfinished jobs that have their place in the queue."""
        query = sa.select(jobs).where(jobs.c.state.in_(UNFINISHED), jobs.c.queued_at.is_not(None))
        with self._database.read() as connection:
            return [JobRecord(**row._mapping) for row in connection.execute(query)]

    def mark_queued(self, job_id: str) -> None:
        """Note that a job has its place in the queue."""
        with self._database.write() as connection:
            connection.execute(sa.update(jobs).where(jobs.c.id == job_id).values(queued_at=now()))

    def mark_unqueued(self, job_id: str) -> None:
        """Note that the queue has lost a job, so that the next sweep puts it there again."""
        with self._database.write() as connection:
            connection.execute(sa.update(jobs).where(jobs.c.id == job_id).values(queued_at=None))

    def fail_unfinished(self, job_id: str, error: dict[str, Any]) -> None:
        """End a job that no attempt will end."""
        with self._database.write() as connection:
            connection.execute(
                sa.update(jobs)
                .where(jobs.c.id == job_id, jobs.c.state.in_(UNFINISHED))
                .values(state="failed", error=error, finished_at=now())
            )

    def _write(self, job: JobRecord, **values: Any) -> bool:
        with self._database.write() as connection:
            changed = connection.execute(
                sa.update(jobs)
                .where(jobs.c.id == job.id, jobs.c.state == "running", jobs.c.attempts == job.attempts)
                .values(**values)
            )
            return changed.rowcount == 1


def _read(connection: sa.Connection, job_id: str) -> JobRecord | None:
    row = connection.execute(sa.select(jobs).where(jobs.c.id == job_id)).one_or_none()
    return None if row is None else JobRecord(**row._mapping)
