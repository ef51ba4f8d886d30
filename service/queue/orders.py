"""The side of the queue that puts jobs in, takes them out, and makes sure that none is forgotten."""

from __future__ import annotations

import itertools
import logging
import threading
from collections.abc import Callable
from typing import Any, Final

from dbos import DBOSClient

from service.errors import INTERNAL, problem
from service.queue.engine import APPLICATION, APPLICATION_VERSION, QUEUE, WORKFLOW, open_client
from service.queue.slots import WorkerStore, vacant
from service.settings import ServiceSettings
from service.store.attempts import AttemptStore
from service.store.database import Database, make_engine
from service.store.files import Files
from service.store.jobs import JobRecord

log = logging.getLogger("fallow")

#: Every so many sweeps one is thorough.
_THOROUGH_EVERY = 10
#: The engine waits for a locked database without end: it is asked only when the lock is free within this time.
_PATIENCE_SECONDS: Final = 2.0
_UNDER_WAY = frozenset({"ENQUEUED", "DELAYED", "PENDING"})


class JobQueue:
    """Domain verbs on the queue. Every one may be called again without harm.

    All of them wait for a database: call them from a thread, never from an event loop.
    """

    def __init__(self, settings: ServiceSettings, database: Database, files: Files) -> None:
        self._engine = make_engine(settings.queue_url)
        self._impatient = make_engine(settings.queue_url, patience_seconds=_PATIENCE_SECONDS)
        self._client: DBOSClient = open_client(self._engine)
        self._attempts = AttemptStore(database)
        self._workers = WorkerStore(database, settings.dead_seconds)
        self._locks = files.locks
        self._sweep_seconds = settings.sweep_seconds
        self._stop = threading.Event()
        self._sweeper: threading.Thread | None = None

    def put(self, job: JobRecord) -> None:
        """Give a job, whose row is written, its place in the queue; the workflow has the identifier of the job."""
        self._client.enqueue(
            {
                "workflow_name": WORKFLOW,
                "queue_name": QUEUE,
                "workflow_id": job.id,
                "app_version": APPLICATION_VERSION,
                "application_name": APPLICATION,
                "priority": job.turn,
            },
            job.id,
        )
        self._attempts.mark_queued(job.id)

    def cancel(self, job_id: str) -> None:
        """Take a job out; the process computing it, if any, ends within about a second."""
        self._client.cancel_workflow(job_id)

    def forget(self, job_id: str) -> None:
        """Remove the engine's memory of a finished job."""
        self._client.delete_workflow(job_id)

    def put_soon(self, job: JobRecord) -> None:
        """Put a job in, or leave that to the sweep when the databases do not answer soon."""
        self._soon(job.id, "gets its place in the queue later", lambda: self.put(job))

    def cancel_soon(self, job_id: str) -> None:
        """Take a dismissed job out, if possible soon; otherwise the worker that meets it leaves it alone."""
        self._soon(
            job_id, "stays in the queue until a worker finds it dismissed", lambda: self.cancel(job_id)
        )

    def forget_soon(self, job_id: str) -> None:
        """Remove the engine's memory of a finished job, if possible soon; what stays of it does no harm."""
        self._soon(job_id, "is remembered by the queue", lambda: self.forget(job_id))

    def check(self) -> None:
        """Make sure that the engine's database can be written; raises what is wrong otherwise."""
        with self._impatient.begin():
            pass

    def _soon(self, job_id: str, otherwise: str, call: Callable[[], None]) -> None:
        try:
            self.check()
            call()
        except Exception as error:
            log.warning("job %s %s: the database does not answer (%s)", job_id, otherwise, error)

    def start_sweeping(self) -> None:
        """Look for forgotten jobs at intervals, from a thread of its own, until `close`."""
        self._sweeper = threading.Thread(target=self._sweep_repeatedly, name="fallow-sweep", daemon=True)
        self._sweeper.start()

    def close(self) -> None:
        """Stop sweeping and close the engine's database."""
        self._stop.set()
        if self._sweeper is not None:
            self._sweeper.join()
        self._client.destroy()
        self._engine.dispose()
        self._impatient.dispose()

    def sweep(self, *, is_thorough: bool = True) -> None:
        """Put in every job without a place, and free those whose worker is dead.

        Parameters
        ----------
        is_thorough : bool
            Also compare every unfinished row with its workflow, which takes long when thousands wait.
        """
        self.check()
        for job in self._attempts.unqueued():
            self.put(job)
        silent = self._workers.silent()
        for status in self._client.list_workflows(status="PENDING", load_input=False, load_output=False):
            self._free(status.workflow_id, status.executor_id or "", silent)
        if is_thorough:
            self._compare()

    def _compare(self) -> None:
        queued = self._attempts.queued()
        known = {status.workflow_id: status.status for status in self._statuses([job.id for job in queued])}
        for job in queued:
            if job.id not in known:
                log.warning("job %s has lost its place in the queue and gets a new one", job.id)
                self._attempts.mark_unqueued(job.id)
            elif known[job.id] not in _UNDER_WAY:
                self._end(job.id)

    def _statuses(self, job_ids: list[str]) -> list[Any]:
        found: list[Any] = []
        for start in range(0, len(job_ids), 500):
            found += self._client.list_workflows(
                workflow_ids=job_ids[start : start + 500], load_input=False, load_output=False
            )
        return found

    def _free(self, job_id: str, executor: str, silent: set[str]) -> None:
        with vacant(self._locks, executor) as is_gone:
            # Looked at again while the place is kept empty: somebody else may have freed it just before.
            if (is_gone or executor in silent) and self._is_held_by(job_id, executor):
                log.warning("worker %s is dead: job %s goes back to the queue", executor, job_id)
                self._client.resume_workflow(job_id, queue_name=QUEUE)

    def _is_held_by(self, job_id: str, executor: str) -> bool:
        return any(
            status.status == "PENDING" and (status.executor_id or "") == executor
            for status in self._statuses([job_id])
        )

    def _end(self, job_id: str) -> None:
        """End a row whose workflow has ended without ending it, which only a fault of ours can do."""
        # The row was read before the workflow: it may have ended in the meantime, and then nothing is written.
        detail = "the worker failed while it carried the job out: order the job again, and report it if that recurs"
        self._attempts.fail_unfinished(
            job_id, problem(INTERNAL, detail, stage=None, remedy="order the job again")
        )

    def _sweep_repeatedly(self) -> None:
        for number in itertools.count():
            try:
                self.sweep(is_thorough=number % _THOROUGH_EVERY == 0)
            except Exception:
                log.exception("the sweep of the queue failed and is tried again")
            if self._stop.wait(self._sweep_seconds):
                return
