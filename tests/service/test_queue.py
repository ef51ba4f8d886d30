"""The queue: dead workers, forgotten rows, slots and signs of life."""

from __future__ import annotations

import base64
import os
import pickle
import signal
import subprocess
import sys
from collections.abc import Iterator
from datetime import timedelta
from pathlib import Path
from typing import Any

import pytest
import sqlalchemy as sa

from service.prepare import prepare
from service.queue.orders import JobQueue
from service.queue.slots import Lock, Slot, WorkerStore, vacant
from service.settings import ServiceSettings
from service.store.database import Database
from service.store.files import Files
from service.store.jobs import JobRecord, JobStore
from service.store.tables import now, workers

from .test_store import a_job, a_scan


@pytest.fixture
def settings(tmp_path: Path) -> ServiceSettings:
    """Settings of an empty folder."""
    return ServiceSettings(data=tmp_path / "data")


@pytest.fixture
def files(settings: ServiceSettings) -> Files:
    """Prepared folders and databases."""
    return prepare(settings)


@pytest.fixture
def database(settings: ServiceSettings, files: Files) -> Iterator[Database]:
    """The metadata."""
    opened = Database(settings.database_url)
    yield opened
    opened.close()


def _job(database: Database, **plan: Any) -> JobRecord:
    return a_job(database, a_scan(database), settings=plan)


def _now(database: Database, job: JobRecord) -> JobRecord:
    return JobStore(database).get(job.owner, job.id)


@pytest.fixture
def queue(settings: ServiceSettings, database: Database, files: Files) -> Iterator[JobQueue]:
    """The side that puts jobs in."""
    opened = JobQueue(settings, database, files)
    yield opened
    opened.close()


def _workflow(queue: JobQueue, job: JobRecord) -> Any:
    return queue._client.list_workflows(workflow_ids=[job.id])[0]


def test_sweep_starts_rows_without_workflow(database: Database, queue: JobQueue) -> None:
    """The service died between writing the row and putting the job in."""
    job = _job(database)
    queue.sweep()
    workflow = _workflow(queue, job)
    assert (workflow.status, workflow.queue_name, workflow.priority) == ("ENQUEUED", "jobs", job.turn)
    queued_at = _now(database, job).queued_at
    assert queued_at is not None
    queue.sweep()
    queue.put(job)
    assert len(queue._client.list_workflows()) == 1


def test_sweep_puts_lost_jobs_in_again(database: Database, queue: JobQueue) -> None:
    job = _job(database)
    queue.put(job)
    queue.forget(job.id)
    queue.sweep()
    queue.sweep()
    assert _workflow(queue, job).status == "ENQUEUED"


def test_sweep_ends_rows_whose_workflow_has_ended(database: Database, queue: JobQueue) -> None:
    job = _job(database)
    queue.put(job)
    queue.cancel(job.id)
    queue.sweep()
    job = _now(database, job)
    assert job.state == "failed"
    assert job.error is not None
    assert job.error["status"] == 500


def _claim(queue: JobQueue, job: JobRecord, executor: str) -> None:
    """Have the engine believe that an executor runs a job."""
    queue.put(job)
    with queue._engine.begin() as connection:
        connection.exec_driver_sql(
            "UPDATE workflow_status SET status = 'PENDING', executor_id = ? WHERE workflow_uuid = ?",
            (executor, job.id),
        )


def test_sweep_frees_jobs_of_dead_workers_only(database: Database, files: Files, queue: JobQueue) -> None:
    slot = Slot.take(files.locks)
    living, dead, far = _job(database), _job(database), _job(database)
    gone = slot.executor.removesuffix("0") + "7"
    for job, executor in ((living, slot.executor), (dead, gone), (far, "elsewhere-0")):
        _claim(queue, job, executor)
    with database.write() as connection:
        row = {
            "executor": "elsewhere-0",
            "host": "elsewhere",
            "process": 1,
            "started_at": now(),
            "seen_at": now(),
        }
        connection.execute(sa.insert(workers).values(**row))
    queue.sweep()
    assert [_workflow(queue, job).status for job in (living, dead, far)] == ["PENDING", "ENQUEUED", "PENDING"]
    with database.write() as connection:
        connection.execute(sa.update(workers).values(seen_at=now() - timedelta(minutes=5)))
    queue.sweep()
    assert [_workflow(queue, job).status for job in (living, far)] == ["PENDING", "ENQUEUED"]
    slot.release()


def test_slots_are_the_lowest_free_numbers(files: Files) -> None:
    slots = [Slot.take(files.locks) for _ in range(3)]
    assert [slot.executor.rpartition("-")[2] for slot in slots] == ["0", "1", "2"]
    slots[1].release()
    with vacant(files.locks, slots[1].executor) as is_gone:
        assert is_gone
        assert Slot.take(files.locks).executor.endswith("-3"), "nobody takes a place that is being looked at"
    with vacant(files.locks, slots[0].executor) as is_gone:
        assert not is_gone
    with vacant(files.locks, "elsewhere-0") as is_gone:
        assert not is_gone


def test_lock_goes_with_its_process(files: Files) -> None:
    path = files.locks / "held"
    program = (
        "import sys, time; from pathlib import Path; from service.queue.slots import Lock; "
        "lock = Lock.take(Path(sys.argv[1])); print('held', flush=True); time.sleep(60)"
    )
    holder = subprocess.Popen([sys.executable, "-c", program, str(path)], stdout=subprocess.PIPE)
    assert holder.stdout is not None
    with holder.stdout:
        holder.stdout.readline()
    assert Lock.take(path) is None
    holder.send_signal(signal.SIGKILL)
    holder.wait()
    lock = Lock.take(path)
    assert lock is not None
    lock.release()


def test_signs_of_life(database: Database) -> None:
    store = WorkerStore(database, dead_seconds=10)
    store.beat("host-0")
    store.beat("host-0")
    assert (store.living(), store.silent()) == (1, set())
    with database.write() as connection:
        connection.execute(sa.update(workers).values(seen_at=now() - timedelta(seconds=11)))
    assert (store.living(), store.silent()) == (0, {"host-0"})
    store.leave("host-0")
    assert store.silent() == set()


def test_engine_reads_no_pickles(database: Database, queue: JobQueue, tmp_path: Path) -> None:
    """Whoever can write into the engine's database must not get a command run by that."""

    class Trap:
        def __reduce__(self) -> tuple[Any, tuple[str]]:
            return os.system, (f"touch {tmp_path / 'sprung'}",)

    job = _job(database)
    queue.put(job)
    text = base64.b64encode(pickle.dumps(Trap())).decode()
    with queue._engine.begin() as connection:
        connection.exec_driver_sql(
            "UPDATE workflow_status SET inputs = ?, serialization = 'py_pickle'", (text,)
        )
    queue.sweep()
    assert not (tmp_path / "sprung").exists()
