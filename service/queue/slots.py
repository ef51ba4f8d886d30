"""Which workers live: one lock file for each worker of a machine, and a sign of life in the database.

An executor of the engine needs a name that is unique and stays: the machine's name and the lowest number whose lock
file nobody holds. Two executors of one name would take each other's running jobs.
"""

from __future__ import annotations

import fcntl
import os
import socket
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import timedelta
from pathlib import Path
from typing import Final, Self

import sqlalchemy as sa

from service.store.database import Database
from service.store.tables import now, workers

_MOST_SLOTS: Final = 1000


class Lock:
    """An exclusive lock on a file, given up when its process ends, however that happens."""

    def __init__(self, descriptor: int) -> None:
        self._descriptor = descriptor

    @classmethod
    def take(cls, path: Path) -> Self | None:
        """Take the lock, or return None when another process holds it."""
        descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o600)
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            os.close(descriptor)
            return None
        return cls(descriptor)

    def release(self) -> None:
        """Give the lock up."""
        os.close(self._descriptor)


@contextmanager
def waited_lock(path: Path) -> Iterator[None]:
    """Hold a lock, after waiting for it."""
    descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o600)
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX)
        yield
    finally:
        os.close(descriptor)


class Slot:
    """The place of one worker on this machine."""

    def __init__(self, executor: str, lock: Lock) -> None:
        self.executor = executor
        self._lock = lock

    @classmethod
    def take(cls, folder: Path) -> Self:
        """Take the lowest free place."""
        for number in range(_MOST_SLOTS):
            lock = Lock.take(_lock_file(folder, number))
            if lock is not None:
                return cls(f"{socket.gethostname()}-{number}", lock)
        raise RuntimeError(f"{_MOST_SLOTS} workers run on this machine already: stop some of them first")

    def release(self) -> None:
        """Give the place up."""
        self._lock.release()


class WorkerStore:
    """Signs of life of the workers."""

    def __init__(self, database: Database, dead_seconds: float) -> None:
        self._database = database
        self._dead = timedelta(seconds=dead_seconds)

    def beat(self, executor: str) -> None:
        """Write a sign of life of this process."""
        present = {"host": socket.gethostname(), "process": os.getpid(), "seen_at": now()}
        with self._database.write() as connection:
            changed = connection.execute(
                sa.update(workers).where(workers.c.executor == executor).values(**present)
            )
            if changed.rowcount == 0:
                connection.execute(sa.insert(workers).values(executor=executor, started_at=now(), **present))

    def leave(self, executor: str) -> None:
        """Note that a worker stopped in good order."""
        with self._database.write() as connection:
            connection.execute(sa.delete(workers).where(workers.c.executor == executor))

    def living(self) -> int:
        """Number of workers that were heard of lately."""
        query = sa.select(sa.func.count()).select_from(workers).where(workers.c.seen_at > now() - self._dead)
        with self._database.read() as connection:
            return connection.execute(query).scalar_one()

    def silent(self) -> set[str]:
        """Executors that were not heard of for too long."""
        with self._database.read() as connection:
            query = sa.select(workers.c.executor).where(workers.c.seen_at <= now() - self._dead)
            return set(connection.execute(query).scalars())


@contextmanager
def vacant(folder: Path, executor: str) -> Iterator[bool]:
    """Tell whether an executor of this machine is gone, and keep its place empty meanwhile.

    While the block runs no new worker can take the place and with it the name.
    """
    host, _, number = executor.rpartition("-")
    if host != socket.gethostname() or not number.isdecimal():
        yield False
        return
    lock = Lock.take(_lock_file(folder, int(number)))
    try:
        yield lock is not None
    finally:
        if lock is not None:
            lock.release()


def _lock_file(folder: Path, number: int) -> Path:
    return folder / f"worker-{number}"
