"""Place in the queue and time left, from what is queued and from how long such jobs took lately."""

from __future__ import annotations

import statistics
import threading
import time
from bisect import bisect_left
from collections.abc import Sequence
from datetime import timedelta

import sqlalchemy as sa

from service.store.database import Database
from service.store.jobs import JobRecord
from service.store.tables import jobs, now, workers

#: Place in the queue, and seconds left.
Estimate = tuple[int | None, float | None]

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

    def of(self, job: JobRecord) -> Estimate:
        """Place in the queue (1: next) of a waiting job, and seconds left of an unfinished one.

        Either is None where it does not apply or cannot be known.
        """
        return self.of_all([job])[0]

    def of_all(self, asked: Sequence[JobRecord]) -> list[Estimate]:
        """The same for many jobs, from one look at the queue."""
        if any(job.state == "accepted" for job in asked):
            turns, until_start = self._queue()
        found: list[Estimate] = []
        for job in asked:
            if job.state == "accepted":
                place = bisect_left(turns, job.turn)
                start, own = until_start[place], self._expected(job.pace, job.work)
                found.append((place + 1, None if start is None or own is None else start + own))
            else:
                found.append((None, self._running(job) if job.state == "running" else None))
        return found

    def _queue(self) -> tuple[list[int], list[float | None]]:
        """Turns of all waiting jobs in order, and the seconds until the one at each place starts."""
        with self._database.read() as connection:
            waiting = connection.execute(
                sa.select(jobs.c.turn, jobs.c.pace, jobs.c.work)
                .where(jobs.c.state == "accepted")
                .order_by(jobs.c.turn)
            ).all()
            running = connection.execute(sa.select(jobs).where(jobs.c.state == "running")).all()
            living = connection.execute(
                sa.select(sa.func.count()).select_from(workers).where(workers.c.seen_at > now() - self._dead)
            ).scalar_one()
        work = [self._running(JobRecord(**row._mapping)) for row in running]
        total = None if living == 0 or None in work else sum(part for part in work if part is not None)
        starts: list[float | None] = []
        for row in waiting:
            starts.append(None if total is None else total / living)
            expected = self._expected(row.pace, row.work)
            total = None if total is None or expected is None else total + expected
        starts.append(None if total is None else total / living)
        return [row.turn for row in waiting], starts

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
