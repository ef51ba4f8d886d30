"""`/health`: whether the service lives and can do its work; needs no token and tells no secrets."""

from __future__ import annotations

import os
from collections.abc import Callable
from typing import Final

from fastapi import APIRouter
from sqlalchemy import text

from service.api.routing import Parts, Route, documented
from service.errors import Unavailable, shortage
from service.provenance import fallow_version
from service.schemas import Health
from service.services import Services
from service.store.files import free_bytes

router = APIRouter(prefix="/health", tags=["health"], route_class=Route)

_LEAST_FREE_BYTES: Final = 64 << 20


@router.get("/live", responses=documented())
async def is_live() -> Health:
    """Tell that the process answers."""
    return Health(status="live", version=fallow_version())


@router.get("/ready", responses=documented())
def is_ready(parts: Parts) -> Health:
    """Tell whether scans and jobs are accepted, and how many workers take jobs."""
    wrong = {name: found for name, check in _CHECKS.items() if (found := _trouble(check, parts)) is not None}
    if wrong:
        raise Unavailable(
            "the service is not ready: " + "; ".join(f"{name}: {what}" for name, what in wrong.items()),
            errors=[{"parameter": name, "detail": what} for name, what in wrong.items()],
            retry_after=5,
        )
    checks = dict.fromkeys(_CHECKS, "ok")
    return Health(status="ready", version=fallow_version(), checks=checks, workers=parts.workers.living())


def _database(parts: Services) -> None:
    with parts.database.read() as connection:
        connection.execute(text("SELECT 1"))
    if not parts.database.is_current():
        raise OSError("the schema is that of another version")


def _queue(parts: Services) -> None:
    parts.queue.check()


def _disk(parts: Services) -> None:
    if not os.access(parts.files.incoming, os.W_OK):
        raise OSError("the data folder cannot be written")
    if free_bytes(parts.files.data) < _LEAST_FREE_BYTES:
        raise OSError(f"less than {_LEAST_FREE_BYTES >> 20} MiB are free in the data folder")


_CHECKS: Final[dict[str, Callable[[Services], None]]] = {
    "database": _database,
    "queue": _queue,
    "disk": _disk,
}


def _trouble(check: Callable[[Services], None], parts: Services) -> str | None:
    try:
        check(parts)
    except OSError as error:
        return str(error)
    except Exception as error:
        return shortage(error) or type(error).__name__
    return None
