"""One job and its computing processes: deaths, refusals, dismissal, giving back."""

from __future__ import annotations

import sys
import textwrap
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
import sqlalchemy as sa

from service.prepare import prepare
from service.queue.attempt import JobRunner, Stopped
from service.settings import ServiceSettings
from service.store.attempts import AttemptStore
from service.store.database import Database
from service.store.files import Files
from service.store.jobs import JobRecord, JobStore
from service.store.tables import jobs

from .test_store import a_job, a_scan

#: A computing process that does as its order says, without computing.
_STAND_IN = """
import json, os, signal, sys, time
from pathlib import Path
from service.store.files import seal
order = json.load(sys.stdin)
folder, plan = Path(order["folder"]), order["settings"]
def tell(**message):
    print(json.dumps(message), flush=True)
tell(stage="solve", progress=0.5)
if plan.get("die") == "always" or plan.get("die") == "once" and not Path(plan["mark"]).exists():
    Path(plan["mark"]).touch()
    os.kill(os.getpid(), signal.SIGKILL)
if plan.get("complain"):
    print("Traceback of the stand-in", file=sys.stderr)
    sys.exit(3)
if plan.get("refuse"):
    tell(failed={"type": "urn:x", "title": "No", "status": 422, "detail": "not so"})
    sys.exit()
time.sleep(plan.get("seconds", 0))
(folder / "image.h5").write_bytes(b"image")
(folder / "report.json").write_text("{}")
if not plan.get("unsealed"):
    seal(folder)
tell(done=True)
"""


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


@pytest.fixture
def runner(database: Database, files: Files) -> JobRunner:
    """A runner whose computing process is the stand-in."""
    command = [sys.executable, "-c", textwrap.dedent(_STAND_IN)]
    return JobRunner(AttemptStore(database), files, "host-0", command=command)


def _job(database: Database, **plan: Any) -> JobRecord:
    return a_job(database, a_scan(database), settings=plan)


def _now(database: Database, job: JobRecord) -> JobRecord:
    return JobStore(database).get(job.owner, job.id)


def test_job_succeeds(database: Database, files: Files, runner: JobRunner) -> None:
    job = _job(database)
    runner.run(job.id)
    job = _now(database, job)
    assert (job.state, job.progress, job.attempts) == ("successful", 1.0, 1)
    assert job.files == files.published(job.id)
    assert list(files.drafts.iterdir()) == []


def test_one_death_is_tried_again(database: Database, runner: JobRunner, tmp_path: Path) -> None:
    job = _job(database, die="once", mark=str(tmp_path / "mark"))
    runner.run(job.id)
    job = _now(database, job)
    assert (job.state, job.attempts, job.child_deaths, job.worker_deaths) == ("successful", 2, 1, 0)


def test_two_deaths_fail_the_job(database: Database, files: Files, runner: JobRunner, tmp_path: Path) -> None:
    job = _job(database, die="always", mark=str(tmp_path / "mark"))
    runner.run(job.id)
    job = _now(database, job)
    assert (job.state, job.attempts) == ("failed", 2)
    assert job.error is not None
    assert "died 2 times" in job.error["detail"]
    assert "signal 9 (SIGKILL)" in job.error["detail"]
    assert job.error["stage"] == "solve"
    assert job.error["remedy"]
    assert list(files.drafts.iterdir()) == []
    runner.run(job.id)
    assert _now(database, job) == job, "a failed job is not begun again"


def test_last_words_are_logged_and_not_shown(
    database: Database, runner: JobRunner, caplog: pytest.LogCaptureFixture
) -> None:
    job = _job(database, complain=True)
    runner.run(job.id)
    job = _now(database, job)
    assert "Traceback of the stand-in" in caplog.text
    assert job.error is not None
    assert "exit status 3" in job.error["detail"]
    assert "Traceback" not in str(job.error)


def test_refusal_fails_the_job_at_once(database: Database, runner: JobRunner) -> None:
    job = _job(database, refuse=True)
    runner.run(job.id)
    job = _now(database, job)
    assert (job.state, job.attempts) == ("failed", 1)
    assert job.error is not None
    assert (job.error["detail"], job.error["stage"]) == ("not so", "solve")
    assert "settings" in job.error["remedy"]


def test_full_disk_fails_the_job_and_not_the_worker(
    database: Database, files: Files, runner: JobRunner, monkeypatch: pytest.MonkeyPatch
) -> None:
    def no_space(*arguments: object) -> Path:
        raise OSError(28, "No space left on device")

    job, other = _job(database), _job(database)
    with monkeypatch.context() as patch:
        patch.setattr(files, "new_draft", no_space)
        runner.run(job.id)
    job = _now(database, job)
    assert job.state == "failed"
    assert job.error is not None
    assert (job.error["status"], "disk" in job.error["detail"]) == (503, True)
    runner.run(other.id)
    assert _now(database, other).state == "successful"


def test_incomplete_results_are_no_success(database: Database, files: Files, runner: JobRunner) -> None:
    job = _job(database, unsealed=True)
    runner.run(job.id)
    job = _now(database, job)
    assert job.state == "failed"
    assert not files.result(job.id).exists()


def test_complete_results_are_not_computed_again(database: Database, files: Files, runner: JobRunner) -> None:
    """The worker died between publishing the results and writing the row."""
    job = _job(database)
    runner.run(job.id)
    with database.write() as connection:
        connection.execute(sa.update(jobs).values(state="running", files=None, finished_at=None))
    before = (files.result(job.id) / "image.h5").stat().st_mtime_ns
    runner.run(job.id)
    assert _now(database, job).state == "successful"
    assert (files.result(job.id) / "image.h5").stat().st_mtime_ns == before


def test_dismissal_ends_the_computing_process(database: Database, files: Files, runner: JobRunner) -> None:
    job = _job(database, seconds=60)
    thread = threading.Thread(target=runner.run, args=(job.id,))
    thread.start()
    _until(lambda: _now(database, job).stage == "solve")
    began = time.monotonic()
    JobStore(database).dismiss("owner", job.id)
    thread.join()
    assert time.monotonic() - began < 2
    assert _now(database, job).state == "dismissed"
    assert not files.result(job.id).exists()


def test_stopping_gives_the_job_back(database: Database, runner: JobRunner) -> None:
    job = _job(database, seconds=60)
    raised: list[type[BaseException]] = []

    def run() -> None:
        try:
            runner.run(job.id)
        except Stopped:
            raised.append(Stopped)

    thread = threading.Thread(target=run)
    thread.start()
    _until(lambda: _now(database, job).stage == "solve")
    runner.stop()
    thread.join()
    assert raised == [Stopped]
    assert _now(database, job).state == "accepted"
    with pytest.raises(Stopped):
        runner.run(job.id)


def test_job_that_kills_its_workers_fails(database: Database, runner: JobRunner) -> None:
    job = _job(database)
    store = AttemptStore(database)
    for _ in range(6):
        assert store.begin(job.id, "victim-0") is not None
    runner.run(job.id)
    job = _now(database, job)
    assert job.state == "failed"
    assert job.error is not None
    assert job.error["type"] == "urn:fallow:problem:workers-died"


def _until(is_so: Any, seconds: float = 20) -> None:
    deadline = time.monotonic() + seconds
    while not is_so():
        assert time.monotonic() < deadline
        time.sleep(0.02)
