"""What every process does first: folders, database, queue. Any number of processes may start at once."""

from __future__ import annotations

from service.queue.engine import prepare_engine
from service.queue.slots import waited_lock
from service.settings import ServiceSettings
from service.store.database import Database
from service.store.files import Files


def prepare(settings: ServiceSettings) -> Files:
    """Create or update folders, metadata and queue of a data folder.

    Returns
    -------
    Files
    """
    files = Files(settings.data)
    files.create()
    with waited_lock(files.locks / "prepare"):
        database = Database(settings.database_url)
        try:
            database.migrate()
        finally:
            database.close()
        prepare_engine(settings)
    return files
