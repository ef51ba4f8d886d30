"""Server-sent events: how a job goes, until it is finished."""

from __future__ import annotations

import json
import threading
from collections.abc import Callable, Iterator
from typing import Any

import httpx

from service.queue.attempt import JobRunner

from .conftest import Caller

Order = Callable[..., dict[str, Any]]


def _events(answer: httpx.Response) -> Iterator[tuple[str, dict[str, Any]]]:
    name = ""
    for line in answer.iter_lines():
        field, _, value = line.partition(": ")
        if field == "event":
            name = value
        elif field == "data":
            yield name, json.loads(value)


def test_stream_tells_the_course_and_ends(client: Caller, order: Order, runner: JobRunner) -> None:
    job = order(settings={"max_iterations": 40, "tolerance": 1e-6})
    with client.stream("GET", f"/v1/jobs/{job['id']}/events") as answer:
        assert answer.headers["content-type"].startswith("text/event-stream")
        events = _events(answer)
        name, first = next(events)
        assert (name, first["state"], first["queue_position"]) == ("progress", "accepted", 1)
        thread = threading.Thread(target=runner.run, args=(job["id"],))
        thread.start()
        told = list(events)
        thread.join()
    assert [name for name, _ in told[:-1]] == ["progress"] * (len(told) - 1)
    assert {event["state"] for _, event in told[:-1]} == {"running"}
    progress = [event["progress"] for _, event in told]
    assert progress == sorted(progress)
    name, last = told[-1]
    assert name == "finished"
    assert last == client.get(f"/v1/jobs/{job['id']}").json()
    assert last["state"] == "successful"


def test_finished_job_has_one_event(client: Caller, order: Order) -> None:
    job = order()
    client.post(f"/v1/jobs/{job['id']}/dismiss")
    answer = client.get(f"/v1/jobs/{job['id']}/events")
    ((name, event),) = _events(answer)
    assert (name, event["state"]) == ("finished", "dismissed")


def test_stream_ends_when_the_job_is_removed(client: Caller, order: Order) -> None:
    job = order()
    with client.stream("GET", f"/v1/jobs/{job['id']}/events") as answer:
        events = _events(answer)
        next(events)
        client.parts.jobs.dismiss("owner", job["id"])
        client.parts.jobs.remove("owner", job["id"])
        assert [name for name, _ in events] in ([], ["finished"])


def test_streams_end_when_the_service_stops(client: Caller, order: Order) -> None:
    job = order()
    with client.stream("GET", f"/v1/jobs/{job['id']}/events") as answer:
        events = _events(answer)
        next(events)
        client.loop.call_soon_threadsafe(client.parts.watch.close)
        assert list(events) == []
