"""A worker process: claims one job after the other and has each computed in a child process."""

from __future__ import annotations

import logging
import os
import signal
import sys
import threading
from types import FrameType

from service.logs import configure_logging
from service.prepare import prepare
from service.process import die_with_parent
from service.queue.attempt import JobRunner
from service.queue.executor import Executor
from service.queue.orders import JobQueue
from service.queue.slots import Slot, WorkerStore
from service.settings import ServiceSettings
from service.store.attempts import AttemptStore
from service.store.database import Database

log = logging.getLogger("fallow")

_STOP_SECONDS = 20.0


def run_worker(settings: ServiceSettings) -> None:
    """Work until SIGTERM or SIGINT; the running job is given back then, and the process ends.

    It does not return: threads of the queue engine would keep the interpreter from ending.
    """
    configure_logging()
    os.umask(0o077)
    stop = threading.Event()

    def ask_to_stop(number: int, frame: FrameType | None) -> None:
        stop.set()

    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, ask_to_stop)
    files = prepare(settings)
    database = Database(settings.database_url)
    slot = Slot.take(files.locks)
    heartbeats = WorkerStore(database, settings.dead_seconds)
    heartbeats.beat(slot.executor)
    queue = JobQueue(settings, database, files)
    executor = Executor(settings, JobRunner(AttemptStore(database), files, slot.executor), slot.executor)
    executor.start()
    queue.start_sweeping()
    log.info("worker %s takes jobs (process %d)", slot.executor, os.getpid())
    while not stop.wait(settings.heartbeat_seconds):
        try:
            heartbeats.beat(slot.executor)
        except Exception:
            log.exception("worker %s could not write its sign of life and tries again", slot.executor)
    # Whatever hangs: the kernel frees the slot, and the next worker takes the job over.
    threading.Timer(_STOP_SECONDS, os._exit, (1,)).start()
    executor.stop()
    queue.close()
    heartbeats.leave(slot.executor)
    log.info("worker %s stopped", slot.executor)
    logging.shutdown()
    os._exit(0)


def main() -> None:
    """Run as a process of its own: ``python -m service.worker DATA PARENT``."""
    data, parent = sys.argv[1:]
    die_with_parent(int(parent), signal.SIGTERM)
    run_worker(ServiceSettings.from_environment(data=data))


if __name__ == "__main__":
    main()
