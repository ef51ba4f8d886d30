"""One job, carried out by a computing process of its own: start, watch, decide.

Independent of the queue engine, so that tests run it without one.
"""

from __future__ import annotations

import json
import logging
import os
import selectors
import subprocess
import tempfile
import threading
import time
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any, Final, Literal

from service.errors import COMPUTING_DIED, INTERNAL, WORKERS_DIED, problem, problem_of
from service.process import how_it_ended, python_command
from service.settings import child_environment
from service.store.attempts import AttemptStore
from service.store.files import Files
from service.store.jobs import JobRecord

log = logging.getLogger("fallow")

MOST_CHILD_DEATHS: Final = 2
MOST_WORKER_DEATHS: Final = 5
#: How often a running job's row is written, and with it looked at for a dismissal.
_NOTE_SECONDS: Final = 0.3
_LONGEST_LINE: Final = 1 << 20
_REMEDY: Final = "order the job again; if that fails too, give the machine more memory or take a smaller scan"


class Stopped(Exception):
    """The worker was asked to stop; the job went back to the queue."""


@dataclass(frozen=True)
class Outcome:
    """How a computing process ended.

    Attributes
    ----------
    kind : str
        `done`, `failed`, `died` or `overtaken` (by a dismissal or by another attempt).
    error : dict or None
        The problem, when `failed`.
    stage : str or None
        What it was doing, when `died`.
    how : str
        By which signal or exit status, when `died`.
    """

    kind: Literal["done", "failed", "died", "overtaken"]
    error: dict[str, Any] | None = None
    stage: str | None = None
    how: str = ""


class JobRunner:
    """Carries out jobs one after the other.

    Parameters
    ----------
    worker : str
        Name under which the attempts are recorded.
    command : sequence of str
        What to start for a job; the order goes to its standard input.
    """

    def __init__(
        self, store: AttemptStore, files: Files, worker: str, *, command: Sequence[str] | None = None
    ) -> None:
        self._store = store
        self._files = files
        self._worker = worker
        self._command = list(command or python_command("service.compute", str(os.getpid())))
        self._stop = threading.Event()

    def stop(self) -> None:
        """Have the running job given back and no other begun."""
        self._stop.set()

    def run(self, job_id: str) -> None:
        """Carry out one job to its end, whatever that is.

        Raises
        ------
        Stopped
            `stop` was called; the job is waiting again.
        """
        if self._stop.is_set():
            raise Stopped
        job = self._store.begin(job_id, self._worker)
        while job is not None:
            if job.worker_deaths >= MOST_WORKER_DEATHS:
                detail = f"workers died {job.worker_deaths} times while they carried this job out"
                self._store.fail(job, problem(WORKERS_DIED, detail, stage=None, remedy=_REMEDY))
                return
            try:
                outcome = self._attempt(job)
            except Stopped:
                self._store.hand_back(job)
                raise
            except Exception as error:  # the job ends with it, the worker goes on
                document = problem_of(error)[0]
                outcome = Outcome("failed", error={"stage": None, "remedy": _remedy(document), **document})
            if outcome.kind != "died":
                self._conclude(job, outcome)
                return
            deaths = self._store.note_child_death(job)
            log.warning("job %s: the computing process died (%s)", job.id, outcome.how)
            if deaths is None:
                return
            if deaths >= MOST_CHILD_DEATHS:
                detail = f"the process computing this job died {deaths} times, last by {outcome.how}"
                self._store.fail(job, problem(COMPUTING_DIED, detail, stage=outcome.stage, remedy=_REMEDY))
                return
            job = self._store.begin(job_id, self._worker, is_retry=True)

    def _attempt(self, job: JobRecord) -> Outcome:
        """Run one computing process, unless an attempt before has left complete results."""
        if self._files.published(job.id) is not None:
            return Outcome("done")
        sha256 = self._store.scan_sha256(job.scan)
        if sha256 is None:
            detail = f"scan {job.scan} of this job is gone"
            return Outcome("failed", error=problem(INTERNAL, detail, remedy="send the scan again"))
        draft = self._files.new_draft(job.id, job.attempts)
        order = {
            "scan": str(self._files.scan(job.scan)),
            "scan_sha256": sha256,
            "settings": job.settings,
            "folder": str(draft),
            "title": job.label or job.id,
        }
        try:
            outcome = self._compute(job, order)
            if outcome.kind == "done":
                self._files.publish(job.id, draft)
                if self._files.published(job.id) is None:
                    self._files.remove_result(job.id)
                    return Outcome("died", stage="write", how="leaving incomplete results")
            return outcome
        finally:
            self._files.remove_draft(draft)

    def _compute(self, job: JobRecord, order: dict[str, Any]) -> Outcome:
        with tempfile.TemporaryFile() as errors:
            child = subprocess.Popen(
                self._command,
                stdin=subprocess.PIPE,
                stdout=subprocess.PIPE,
                stderr=errors,
                env=child_environment(),
            )
            try:
                outcome = self._watch(job, child, order)
            finally:
                # Also on an exception of ours: nothing may go on writing into the draft.
                child.kill()
                child.wait()
                for pipe in (child.stdin, child.stdout):
                    if pipe is not None:
                        pipe.close()
            if outcome.kind == "died":
                _log_tail(job, errors)
                return replace(outcome, how=how_it_ended(child.returncode))
            return outcome

    def _watch(self, job: JobRecord, child: subprocess.Popen[bytes], order: dict[str, Any]) -> Outcome:
        """Follow a computing process to its end; `died` when it ended without saying how."""
        assert child.stdin is not None
        assert child.stdout is not None
        try:
            child.stdin.write(json.dumps(order).encode())
            child.stdin.close()
        except BrokenPipeError:
            child.wait()
            return Outcome("died")
        stage: str | None = None
        progress, noted = 0.0, 0.0
        pending = b""
        with selectors.DefaultSelector() as selector:
            selector.register(child.stdout, selectors.EVENT_READ)
            while True:
                if self._stop.is_set():
                    raise Stopped
                chunk = os.read(child.stdout.fileno(), 65536) if selector.select(_NOTE_SECONDS) else None
                if chunk == b"":
                    child.wait()
                    return Outcome("died", stage=stage)
                *lines, pending = (pending + (chunk or b"")).split(b"\n")
                for line in lines:
                    message = json.loads(line)
                    if "done" in message:
                        return Outcome("done")
                    if "failed" in message:
                        error = {"stage": stage, "remedy": _remedy(message["failed"]), **message["failed"]}
                        return Outcome("failed", error=error)
                    if message["stage"] != stage:
                        noted = 0.0
                    stage, progress = message["stage"], message["progress"]
                if len(pending) > _LONGEST_LINE:
                    return Outcome("died", stage=stage)
                if time.monotonic() - noted >= _NOTE_SECONDS:
                    noted = time.monotonic()
                    if not self._store.note_progress(job, stage, progress):
                        return Outcome("overtaken")

    def _conclude(self, job: JobRecord, outcome: Outcome) -> None:
        if outcome.kind == "done":
            manifest = self._files.published(job.id)
            # Dismissed or overtaken in the last moment: a dismissed job keeps no results.
            if (
                manifest is not None
                and not self._store.succeed(job, manifest)
                and self._store.is_unwanted(job.id)
            ):
                self._files.remove_result(job.id)
        elif outcome.kind == "failed" and outcome.error is not None:
            self._store.fail(job, outcome.error)


def _remedy(error: dict[str, Any]) -> str:
    if error["status"] == 422:
        return "change the settings or the scan as the detail says, and order the job again"
    return _REMEDY


def _log_tail(job: JobRecord, errors: Any) -> None:
    """Log the end of what a dead process wrote to standard error."""
    errors.seek(0, os.SEEK_END)
    errors.seek(max(0, errors.tell() - 2000))
    tail = errors.read().decode("utf-8", "replace").strip()
    if tail:
        log.warning("job %s: last words of the computing process: %s", job.id, tail)
