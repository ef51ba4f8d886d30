"""Database and files: schema, transactions, identifiers, complete-or-absent results."""

from __future__ import annotations

import json
import os
import threading
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
import sqlalchemy as sa
from alembic.autogenerate import compare_metadata
from alembic.migration import MigrationContext

from service.errors import NotFound
from service.ids import is_id, new_id
from service.store.attempts import AttemptStore
from service.store.database import Database
from service.store.files import Files, seal
from service.store.jobs import JobRecord, JobStore, insert_job
from service.store.scans import ScanRecord, ScanStore
from service.store.tables import jobs, metadata, now, scans


@pytest.fixture
def database(tmp_path: Path) -> Iterator[Database]:
    """A database with its tables."""
    opened = Database(f"sqlite:///{tmp_path / 'fallow.sqlite'}")
    opened.migrate()
    yield opened
    opened.close()


def a_scan(database: Database, owner: str = "owner", sha256: str | None = None) -> ScanRecord:
    """Write a row of a scan."""
    scan_id = new_id()
    scan = ScanRecord(
        scan_id, owner, None, None, sha256 or f"{scan_id:0>64}", 1, "ready", {"axes": {}}, now()
    )
    return ScanStore(database).add(scan)


def a_job(database: Database, scan: ScanRecord, priority: str = "routine", **fields: Any) -> JobRecord:
    """Write a row of a job."""
    row = {
        "id": new_id(), "owner": scan.owner, "kind": "reconstruction", "label": None, "scan": scan.id, "settings": {},
        "priority": priority, "work": 1000, "pace": "tikhonov", **fields,
    }  # fmt: skip
    with database.write() as connection:
        return insert_job(connection, row)


def test_migrations_make_the_tables(database: Database) -> None:
    with database.engine.connect() as connection:
        context = MigrationContext.configure(connection, opts={"compare_type": True})
        assert compare_metadata(context, metadata) == []
    assert database.is_current()
    database.migrate()


def test_transactions_do_not_lose_what_others_wrote(database: Database, tmp_path: Path) -> None:
    """Read, then write: without a lock from the beginning one of two such transactions would be lost or refused."""
    scan = a_scan(database)
    job = a_job(database, scan)
    other = Database(f"sqlite:///{tmp_path / 'fallow.sqlite'}")

    def count(store: Database) -> None:
        for _ in range(50):
            with store.write() as connection:
                held = connection.execute(sa.select(jobs.c.child_deaths)).scalar_one()
                connection.execute(sa.update(jobs).values(child_deaths=held + 1))

    threads = [threading.Thread(target=count, args=(store,)) for store in (database, other, database)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    other.close()
    with database.read() as connection:
        assert (
            connection.execute(sa.select(jobs.c.child_deaths).where(jobs.c.id == job.id)).scalar_one() == 150
        )


def test_database_is_durable(database: Database) -> None:
    with database.read() as connection:
        pragmas = {
            name: connection.exec_driver_sql(f"PRAGMA {name}").scalar()
            for name in ("journal_mode", "synchronous", "busy_timeout", "foreign_keys")
        }
    assert pragmas == {"journal_mode": "wal", "synchronous": 2, "busy_timeout": 30000, "foreign_keys": 1}


def test_failed_transaction_leaves_nothing(database: Database) -> None:
    def fail_half_way() -> None:
        with database.write() as connection:
            connection.execute(sa.insert(scans).values(**a_record()))
            raise RuntimeError

    with pytest.raises(RuntimeError):
        fail_half_way()
    assert ScanStore(database).known() == set()


def a_record() -> dict[str, Any]:
    """A row of a scan that is not written."""
    return ScanRecord(new_id(), "owner", None, None, "0" * 64, 1, "ready", {}, now()).__dict__


def test_moments_come_back_as_they_were(database: Database) -> None:
    moment = datetime(2026, 2, 3, 4, 5, 6, 789012, UTC)
    record = {**a_record(), "created_at": moment}
    with database.write() as connection:
        connection.execute(sa.insert(scans).values(**record))
    assert ScanStore(database).get("owner", record["id"]).created_at == moment


def test_same_content_is_kept_once_for_each_owner(database: Database) -> None:
    first = a_scan(database, "one", "a" * 64)
    assert a_scan(database, "one", "a" * 64).id == first.id
    assert a_scan(database, "two", "a" * 64).id != first.id


def test_owners_do_not_see_each_other(database: Database) -> None:
    scan = a_scan(database, "one")
    job = a_job(database, scan)
    for call in (
        lambda: ScanStore(database).get("two", scan.id),
        lambda: ScanStore(database).remove("two", scan.id),
        lambda: JobStore(database).get("two", job.id),
        lambda: JobStore(database).dismiss("two", job.id),
        lambda: JobStore(database).remove("two", job.id),
    ):
        with pytest.raises(NotFound):
            call()


def test_turns_follow_arrival_within_a_priority(database: Database) -> None:
    scan = a_scan(database)
    routine, urgent = (
        [a_job(database, scan) for _ in range(2)],
        [a_job(database, scan, "urgent") for _ in range(2)],
    )
    turns = [job.turn for job in (*urgent, *routine)]
    assert turns == sorted(turns)
    assert len(set(turns)) == 4
    assert 1 <= min(turns) <= max(turns) < 2**31


def test_identifiers_sort_by_time() -> None:
    made = [new_id() for _ in range(2000)]
    assert made == sorted(made)
    assert len(set(made)) == 2000
    assert all(is_id(one) for one in made)
    assert not is_id("../../etc/passwd")


def test_attempt_that_was_overtaken_writes_nothing(database: Database) -> None:
    store = AttemptStore(database)
    job = a_job(database, a_scan(database))
    first = store.begin(job.id, "a-0")
    assert first is not None
    second = store.begin(job.id, "b-0")
    assert second is not None
    assert (second.attempts, second.worker_deaths, second.started_at) == (2, 1, first.started_at)
    assert not store.note_progress(first, "solve", 0.5)
    assert not store.succeed(first, {})
    assert store.note_child_death(first) is None
    assert store.succeed(second, {"image.h5": {}})
    assert not store.fail(second, {})
    assert store.begin(job.id, "c-0") is None


def test_given_back_job_is_no_death(database: Database) -> None:
    store = AttemptStore(database)
    job = a_job(database, a_scan(database))
    first = store.begin(job.id, "a-0")
    assert first is not None
    assert store.hand_back(first)
    second = store.begin(job.id, "a-0")
    assert second is not None
    assert second.worker_deaths == 0


def test_dismissal_ends_an_attempt(database: Database) -> None:
    store, held = AttemptStore(database), JobStore(database)
    job = store.begin(a_job(database, a_scan(database)).id, "a-0")
    assert job is not None
    held.dismiss("owner", job.id)
    assert not store.note_progress(job, "solve", 0.5)
    assert held.get("owner", job.id).state == "dismissed"
    assert store.is_unwanted(job.id)
    held.remove("owner", job.id)
    assert store.is_unwanted(job.id)


def _draft(files: Files, job_id: str, attempt: int = 1) -> Path:
    draft = files.new_draft(job_id, attempt)
    (draft / "image.h5").write_bytes(b"image")
    (draft / "report.json").write_text("{}")
    seal(draft)
    return draft


@pytest.fixture
def files(tmp_path: Path) -> Files:
    """Empty folders."""
    made = Files(tmp_path / "data")
    made.create()
    return made


def test_results_appear_at_once_and_stay(files: Files) -> None:
    assert files.published("job") is None
    files.publish("job", _draft(files, "job"))
    manifest = files.published("job")
    assert manifest is not None
    assert manifest["image.h5"]["bytes"] == 5
    late = _draft(files, "job", 2)
    (late / "image.h5").write_bytes(b"other")
    files.publish("job", late)
    assert (files.result("job") / "image.h5").read_bytes() == b"image"
    assert list(files.drafts.iterdir()) == []
    files.remove_result("job")
    files.remove_result("job")
    assert files.published("job") is None
    assert list(files.drafts.iterdir()) == []


@pytest.mark.parametrize("damage", ["no manifest", "half a manifest", "short file", "lost file"])
def test_incomplete_results_do_not_count(files: Files, damage: str) -> None:
    draft = _draft(files, "job")
    manifest = draft / "manifest.json"
    if damage == "no manifest":
        manifest.unlink()
    elif damage == "half a manifest":
        manifest.write_text(manifest.read_text()[:20])
    elif damage == "short file":
        (draft / "image.h5").write_bytes(b"imag")
    else:
        (draft / "image.h5").unlink()
    draft.rename(files.result("job"))
    assert files.published("job") is None


def test_new_draft_replaces_those_of_attempts_before(files: Files) -> None:
    _draft(files, "job", 1)
    other = _draft(files, "other", 1)
    draft = files.new_draft("job", 2)
    assert sorted(files.drafts.iterdir()) == sorted([draft, other])


def test_manifest_has_true_digests(files: Files) -> None:
    import hashlib

    draft = _draft(files, "job")
    manifest = json.loads((draft / "manifest.json").read_text())
    assert manifest["image.h5"] == {"bytes": 5, "sha256": hashlib.sha256(b"image").hexdigest()}
    assert sorted(manifest) == ["image.h5", "report.json"]


def test_folders_are_private(files: Files) -> None:
    for folder in (files.data, files.incoming, files.scans, files.results, files.drafts, files.locks):
        assert os.stat(folder).st_mode & 0o077 == 0


def test_time_filter(database: Database) -> None:
    from service.store.pages import Filter

    scan = a_scan(database)
    later = scan.created_at + timedelta(seconds=1)
    store = ScanStore(database)
    assert store.page("owner", Filter(created_after=scan.created_at))[0] == [scan]
    assert store.page("owner", Filter(created_before=scan.created_at))[0] == []
    assert store.page("owner", Filter(created_after=later))[0] == []
