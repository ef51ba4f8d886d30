"""What both sides of the queue share: names, serializer and database of the engine."""

from __future__ import annotations

import logging
from typing import Final

import sqlalchemy as sa
from dbos import DBOS, DBOSClient, DBOSConfig, DBOSPortableJSONSerializer

from service.settings import ServiceSettings
from service.store.database import make_engine

APPLICATION: Final = "fallow"
#: Changes only when a queued job of an older version cannot be carried out any more; the engine's own choice, a hash
#: of the code, would strand queued jobs at every deployment.
APPLICATION_VERSION: Final = "1"
QUEUE: Final = "jobs"
WORKFLOW: Final = "run-job"


def prepare_engine(settings: ServiceSettings) -> None:
    """Create or update the engine's database and the queue in it; call it from one process at a time."""
    quieten()
    DBOS.migrate(settings.queue_url)
    engine = make_engine(settings.queue_url)
    client = open_client(engine)
    try:
        client.register_queue(
            QUEUE,
            worker_concurrency=1,
            polling_interval_sec=settings.poll_seconds,
            application_name=APPLICATION,
        )
    finally:
        client.destroy()
        engine.dispose()


def open_client(engine: sa.Engine) -> DBOSClient:
    """Open the engine for putting jobs in; nothing is executed by it."""
    quieten()
    # The default serializer unpickles what it finds in the database, which is to run whatever someone wrote there.
    return DBOSClient(
        system_database_engine=engine, serializer=DBOSPortableJSONSerializer(), application_name=APPLICATION
    )


def worker_config(settings: ServiceSettings, engine: sa.Engine, executor: str) -> DBOSConfig:
    """Configuration of the engine in a worker."""
    return {
        "name": APPLICATION,
        "system_database_url": settings.queue_url,
        "system_database_engine": engine,
        "application_version": APPLICATION_VERSION,
        "executor_id": executor,
        "serializer": DBOSPortableJSONSerializer(),
        "run_migrations": False,
        "log_level": "CRITICAL",
        "enable_otlp": False,
        # Nobody uses schedules: there is no need to look for them often.
        "scheduler_polling_interval_sec": 3600.0,
    }


def quieten() -> None:
    """Leave speaking to our own log: the engine reports cancelled jobs as errors, with tracebacks."""
    logging.getLogger("dbos").setLevel(logging.CRITICAL)
