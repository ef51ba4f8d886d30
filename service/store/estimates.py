"""Place in the queue and time left, from what is queued and from how long such jobs took lately."""

from __future__ import annotations

import statistics
import threading
import time
from datetime import timedelta

import sqlalchemy as sa

from service.store.database import Database
from service.store.jobs import JobRecord
from service.store.tables import jobs, now, workers

_REMEMBERED = 100
_REFRESH_SECONDS = 5.0
#: Below this the progress of a job says too little about its speed.
_TELLING_PROGRESS = 0.1


class Estimates:
    """Answers how long a job will still take, or that nobody knows."""

    def __init__(self, database: Database, dead_seconds: float) -> None:
        self._database = database
        self._dead = timedelta(seconds=dead_seconds)
        self._lock = threading.Lock()
        self._paces: dict[str, float] = {}
        self._read_at = float("-inf")

    def of(self, job: JobRecord) -> tuple[int | None, float | None]:
        """Place in the queue (1: next) of a waiting job, and seconds left of an unfinished one.

        Either is None where it does not apply or cannot be known.
        """
        if job.state == "running":
            return None, self._running(job)
        if job.state != "accepted":
            return None, None
        with self._database.read() as connection:
            ahead = connection.execute(
                sa.select(jobs.c.pace, sa.func.count(), sa.func.sum(jobs.c.work))
                .where(jobs.c.state == "accepted", jobs.c.turn < job.turn)
                .group_by(jobs.c.pace)
            ).all()
            running = connection.execute(sa.select(jobs).where(jobs.c.state == "running")).all()
            living = connection.execute(
                sa.select(sa.func.count()).select_from(workers).where(workers.c.seen_at > now() - self._dead)
            ).scalar_one()
        position = 1 + sum(count for _, count, _ in ahead)
        seconds = [self._expected(pace, work) for pace, _, work in ahead]
        seconds += [self._running(JobRecord(**row._mapping)) for row in running]
        own = self._expected(job.pace, job.work)
        if own is None or living == 0:
            return position, None
        known = [part for part in seconds if part is not None]
        if len(known) < len(seconds):
            return position, None
        return position, own + sum(known) / living

    def _running(self, job: JobRecord) -> float | None:
        if job.attempt_started_at is None:
            return None
        elapsed = max(0.0, (now() - job.attempt_started_at).total_seconds())
        if job.progress >= _TELLING_PROGRESS:
            return elapsed * (1 - job.progress) / job.progress
        expected = self._expected(job.pace, job.work)
        return None if expected is None else max(0.0, expected - elapsed)

    def _expected(self, pace: str, work: int) -> float | None:
        with self._lock:
            if pace not in self._paces or time.monotonic() - self._read_at > _REFRESH_SECONDS:
                self._paces = self._read_paces()
                self._read_at = time.monotonic()
        seconds = self._paces.get(pace)
        return None if seconds is None else seconds * work

    def _read_paces(self) -> dict[str, float]:
        """Median seconds per sample of each kind of work, over the newest successful jobs."""
        query = (
            sa.select(jobs.c.pace, jobs.c.work, jobs.c.attempt_started_at, jobs.c.finished_at)
            .where(jobs.c.state == "successful", jobs.c.attempt_started_at.is_not(None))
            .order_by(jobs.c.id.desc())
            .limit(_REMEMBERED)
        )
        found: dict[str, list[float]] = {}
        with self._database.read() as connection:
            for row in connection.execute(query):
                seconds = (row.finished_at - row.attempt_started_at).total_seconds()
                found.setdefault(row.pace, []).append(seconds / max(row.work, 1))
        return {pace: statistics.median(rates) for pace, rates in found.items()}
