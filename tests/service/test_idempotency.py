"""`Idempotency-Key`: one effect and one answer."""

from __future__ import annotations

import threading
from collections.abc import Callable
from datetime import timedelta
from typing import Any

import pytest
import sqlalchemy as sa

from service.store.tables import idempotency, now

from .conftest import MEDIA_TYPE, Caller, MakeScan

Order = Callable[..., dict[str, Any]]


def _order(client: Caller, scan: dict[str, Any], key: str, **changes: Any) -> Any:
    body = {"kind": "reconstruction", "scan": scan["id"], **changes}
    return client.post("/v1/jobs", json=body, headers={"Idempotency-Key": key})


def test_same_order_has_one_effect_and_one_answer(client: Caller, scan: dict[str, Any]) -> None:
    first, again = _order(client, scan, "k-1"), _order(client, scan, "k-1")
    assert first.status_code == again.status_code == 202
    assert first.json() == again.json()
    assert first.headers["location"] == again.headers["location"]
    assert len(client.get("/v1/jobs").json()["items"]) == 1
    client.post(f"/v1/jobs/{first.json()['id']}/dismiss")
    assert _order(client, scan, "k-1").json() == first.json(), "the answer of the first time"
    assert _order(client, scan, "k-2").json()["id"] != first.json()["id"]


def test_many_at_once_have_one_effect(client: Caller, scan: dict[str, Any]) -> None:
    answers: list[Any] = []
    threads = [threading.Thread(target=lambda: answers.append(_order(client, scan, "k"))) for _ in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert {answer.status_code for answer in answers} == {202}
    assert len({answer.json()["id"] for answer in answers}) == 1
    assert len(client.get("/v1/jobs").json()["items"]) == 1


def test_other_order_under_the_same_key_is_refused(client: Caller, scan: dict[str, Any]) -> None:
    _order(client, scan, "k")
    answer = _order(client, scan, "k", label="other")
    assert answer.status_code == 422
    assert "Idempotency-Key" in answer.json()["detail"]


def test_refused_order_does_not_use_the_key_up(client: Caller, scan: dict[str, Any]) -> None:
    assert _order(client, scan, "k", settings={"tolerance": 9}).status_code == 422
    assert _order(client, scan, "k").status_code == 202


def test_key_is_forgotten_after_seven_days(client: Caller, scan: dict[str, Any]) -> None:
    first = _order(client, scan, "k")
    with client.parts.database.write() as connection:
        connection.execute(sa.update(idempotency).values(created_at=now() - timedelta(days=6, hours=23)))
    assert _order(client, scan, "k").json() == first.json()
    with client.parts.database.write() as connection:
        connection.execute(sa.update(idempotency).values(created_at=now() - timedelta(days=7, minutes=1)))
    assert _order(client, scan, "k").json()["id"] != first.json()["id"]


@pytest.mark.parametrize("key", ["", "two words", "x" * 256])
def test_key_that_is_none_is_refused(shared: Caller, shared_scan: dict[str, Any], key: str) -> None:
    assert _order(shared, shared_scan, key).status_code == 400


def test_upload_under_a_key(client: Caller, make_scan: MakeScan) -> None:
    headers = {"Content-Type": MEDIA_TYPE, "Idempotency-Key": "k"}
    content = make_scan()
    first = client.post("/v1/scans", content=content, headers=headers)
    again = client.post("/v1/scans", content=content, headers=headers)
    assert first.status_code == again.status_code == 201
    assert first.json() == again.json()
    assert client.post("/v1/scans", content=make_scan(1), headers=headers).status_code == 422
    assert client.post("/v1/scans?label=other", content=content, headers=headers).status_code == 422
    assert len(client.get("/v1/scans").json()["items"]) == 1


def test_refused_upload_does_not_use_the_key_up(client: Caller, make_scan: MakeScan) -> None:
    headers = {"Content-Type": MEDIA_TYPE, "Idempotency-Key": "k"}
    assert client.post("/v1/scans", content=b"no scan", headers=headers).status_code == 422
    assert client.post("/v1/scans", content=make_scan(), headers=headers).status_code == 201


def test_key_in_flight_is_said(client: Caller, make_scan: MakeScan) -> None:
    content = make_scan()
    headers = {"Content-Type": MEDIA_TYPE, "Idempotency-Key": "k"}
    second: list[Any] = []

    def slowly() -> Any:
        yield content[:1000]
        while not list(client.parts.files.incoming.iterdir()):
            pass
        second.append(client.post("/v1/scans", content=content, headers=headers))
        yield content[1000:]

    first = client.post("/v1/scans", content=slowly(), headers=headers)
    assert first.status_code == 201
    assert second[0].status_code == 409
    assert second[0].headers["retry-after"]
