"""Following jobs: one query at intervals for everybody who waits, whoever changes the row."""

from __future__ import annotations

import asyncio
import logging
import time
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from typing import Any, Final

from service.store.jobs import JobRecord, JobStore

log = logging.getLogger("fallow")

_INTERVAL_SECONDS: Final = 0.15


class Follower:
    """One who follows one job."""

    def __init__(self, watch: Watch) -> None:
        self._watch = watch
        self.changed = asyncio.Event()

    async def next(self, seconds: float) -> bool:
        """Wait for a change of the job, `seconds` at most; tells whether there was one, or the service is stopping."""
        try:
            await asyncio.wait_for(self.changed.wait(), max(0.0, seconds))
        except TimeoutError:
            return False
        if not self._watch.is_closed:
            self.changed.clear()
        return True


class Watch:
    """Looks at the rows of all followed jobs and wakes those who follow them."""

    def __init__(self, jobs: JobStore) -> None:
        self._jobs = jobs
        self._followers: dict[str, set[Follower]] = {}
        self._seen: dict[str, tuple[Any, ...] | None] = {}
        self._task: asyncio.Task[None] | None = None
        self.is_closed = False

    @asynccontextmanager
    async def follow(self, job_id: str) -> AsyncIterator[Follower]:
        """Follow a job within the block; read the row inside it, so that no change is missed."""
        follower = Follower(self)
        if self.is_closed:
            follower.changed.set()
        self._followers.setdefault(job_id, set()).add(follower)
        if self._task is None:
            self._task = asyncio.create_task(self._look())
        try:
            yield follower
        finally:
            self._followers[job_id].discard(follower)
            if not self._followers[job_id]:
                del self._followers[job_id]
                self._seen.pop(job_id, None)

    async def until_finished(self, owner: str, job_id: str, seconds: float) -> JobRecord:
        """Wait until a job is finished, `seconds` at most, and return it as it is then."""
        deadline = time.monotonic() + seconds
        async with self.follow(job_id) as follower:
            while True:
                job = await asyncio.to_thread(self._jobs.get, owner, job_id)
                left = deadline - time.monotonic()
                if job.is_finished or left <= 0 or self.is_closed:
                    return job
                await follower.next(left)

    def close(self) -> None:
        """Let everybody go who waits: the service is stopping."""
        self.is_closed = True
        for follower in [one for group in self._followers.values() for one in group]:
            follower.changed.set()
        if self._task is not None:
            self._task.cancel()

    async def _look(self) -> None:
        while self._followers:
            wanted = list(self._followers)
            try:
                found = await asyncio.to_thread(self._jobs.glance, wanted)
            except Exception:
                log.exception("the followed jobs could not be read and are tried again")
                found = dict(self._seen)  # type: ignore[arg-type]
            for job_id in wanted:
                now = found.get(job_id)
                # The first look counts as a change: the row may have changed since the follower read it.
                if job_id in self._followers and (job_id not in self._seen or self._seen[job_id] != now):
                    self._seen[job_id] = now
                    for follower in self._followers[job_id]:
                        follower.changed.set()
            await asyncio.sleep(_INTERVAL_SECONDS)
        self._task = None
