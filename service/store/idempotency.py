"""Idempotency keys: the same request under the same key has one effect and one answer."""

from __future__ import annotations

from datetime import timedelta
from typing import Any

import sqlalchemy as sa

from service.errors import Refused, WrongState
from service.store.database import Database
from service.store.tables import idempotency, now


class IdempotencyStore:
    """Domain verbs on the table of keys.

    Parameters
    ----------
    keep_seconds : float
        How long a key is remembered.
    """

    def __init__(self, database: Database, keep_seconds: float) -> None:
        self._database = database
        self._keep = timedelta(seconds=keep_seconds)

    def claim(self, owner: str, key: str) -> tuple[str | None, dict[str, Any]] | None:
        """Take a key before its request is known, as uploads do.

        Returns
        -------
        (str, dict) or None
            Fingerprint of the request and its answer, where the key was used before; None where it is new and now
            taken.

        Raises
        ------
        WrongState
            The first request under this key is still being answered.
        """
        with self._database.write() as connection:
            used = self._find(connection, owner, key)
            if used is not None:
                return used
            connection.execute(sa.insert(idempotency).values(owner=owner, key=key, created_at=now()))
        return None

    def release(self, owner: str, key: str) -> None:
        """Give up a key whose request was not carried out."""
        with self._database.write() as connection:
            connection.execute(_of(sa.delete(idempotency), owner, key).where(idempotency.c.answer.is_(None)))

    def settle(self, owner: str, key: str, request: str, answer: dict[str, Any]) -> None:
        """Write the answer of a claimed key."""
        with self._database.write() as connection:
            connection.execute(_of(sa.update(idempotency), owner, key).values(request=request, answer=answer))

    def find(self, connection: sa.Connection, owner: str, key: str, request: str) -> dict[str, Any] | None:
        """The answer that this request got before under this key, within a transaction.

        Raises
        ------
        Refused
            The key was used for another request.
        WrongState
            The first request under this key is still being answered.
        """
        used = self._find(connection, owner, key)
        if used is None:
            return None
        check_same_request(key, used[0], request)
        return used[1]

    def record(
        self, connection: sa.Connection, owner: str, key: str, request: str, answer: dict[str, Any]
    ) -> None:
        """Write a key with its answer, within the transaction that carries the request out."""
        connection.execute(
            sa.insert(idempotency).values(
                owner=owner, key=key, request=request, answer=answer, created_at=now()
            )
        )

    def forget_unanswered(self) -> None:
        """Give up the keys of requests that died with an earlier process."""
        with self._database.write() as connection:
            connection.execute(sa.delete(idempotency).where(idempotency.c.answer.is_(None)))

    def forget_old(self) -> None:
        """Remove the keys whose time is over."""
        with self._database.write() as connection:
            connection.execute(sa.delete(idempotency).where(idempotency.c.created_at < now() - self._keep))

    def _find(
        self, connection: sa.Connection, owner: str, key: str
    ) -> tuple[str | None, dict[str, Any]] | None:
        connection.execute(
            _of(sa.delete(idempotency), owner, key).where(idempotency.c.created_at < now() - self._keep)
        )
        row = connection.execute(_of(sa.select(idempotency), owner, key)).one_or_none()
        if row is None:
            return None
        if row.answer is None:
            raise WrongState(
                f"the first request with the Idempotency-Key {key!r} is still being answered: repeat this one later",
                retry_after=1,
            )
        return row.request, row.answer


def check_same_request(key: str, before: str | None, request: str) -> None:
    """Refuse a key that was used for another request."""
    if before != request:
        raise Refused(
            f"the Idempotency-Key {key!r} was used for another request within the last days: use a new key for a new "
            "request"
        )


def _of(statement: Any, owner: str, key: str) -> Any:
    return statement.where(idempotency.c.owner == owner, idempotency.c.key == key)
