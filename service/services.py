"""The parts that the HTTP interface calls, opened and closed together."""

from __future__ import annotations

import logging
import shutil
from typing import Final

from service.gate import Gate
from service.prepare import prepare
from service.queue.orders import JobQueue
from service.queue.slots import Lock, WorkerStore
from service.settings import ServiceSettings, SettingError
from service.store.database import Database
from service.store.estimates import Estimates
from service.store.idempotency import IdempotencyStore
from service.store.jobs import JobStore
from service.store.scans import ScanStore
from service.tokens import Tokens, owner_token
from service.watch import Watch

log = logging.getLogger("fallow")

#: A caller who waits for an answer is told of a locked database after this long; workers have more patience.
_PATIENCE_SECONDS: Final = 5.0


class Services:
    """Everything behind the routes of one data folder.

    Raises
    ------
    SettingError
        Another service uses the data folder, or its token file cannot be used.
    """

    def __init__(self, settings: ServiceSettings) -> None:
        self.settings = settings
        self.files = prepare(settings)
        lock = Lock.take(self.files.locks / "service")
        if lock is None:
            raise SettingError(
                f"another Fallow service uses the data folder {settings.data}: stop it first, or choose another with "
                "--data or FALLOW_DATA"
            )
        self._lock = lock
        self.tokens = Tokens(owner_token(settings.token_file))
        self.database = Database(settings.database_url, patience_seconds=_PATIENCE_SECONDS)
        self.scans = ScanStore(self.database)
        self.jobs = JobStore(self.database)
        self.idempotency = IdempotencyStore(self.database, settings.idempotency_seconds)
        self.workers = WorkerStore(self.database, settings.dead_seconds)
        self.estimates = Estimates(self.database, settings.dead_seconds)
        self.queue = JobQueue(settings, self.database, self.files)
        self.gate = Gate(settings)
        self.watch = Watch(self.jobs)
        self._clear_away()
        self.queue.start_sweeping()

    def close(self) -> None:
        """Close in reverse order."""
        self.watch.close()
        self.queue.close()
        self.database.close()
        self._lock.release()

    def _clear_away(self) -> None:
        """Remove what an earlier process left half done; nobody else receives uploads while the lock is held."""
        self.files.clear_incoming()
        self.idempotency.forget_unanswered()
        self.idempotency.forget_old()
        scans, results = self.scans.known(), self.jobs.known_results()
        for path in self.files.scans.iterdir():
            if path.stem not in scans:
                log.info("removing %s, which belongs to no scan", path.name)
                path.unlink(missing_ok=True)
        for folder, known in ((self.files.results, results), (self.files.drafts, results)):
            for path in folder.iterdir():
                if path.name.partition("-")[0] not in known:
                    shutil.rmtree(path, ignore_errors=True)
