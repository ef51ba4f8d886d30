"""The client against dropped connections, restarts, damaged downloads and servers that are not Fallow."""

from __future__ import annotations

import base64
import hashlib
import socket
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from service.client import (
    Client,
    DamagedDownload,
    InputRefused,
    JobFailed,
    RequestRefused,
    ServiceFault,
    ServiceUnreachable,
    WaitTimedOut,
    connection,
)
from tests.client.scripted import DROP, Received, Step, answer, refusal, scripted

JOB = {"id": "j1", "state": "running", "stage": "solve", "progress": 0.5, "caution": "c"}
DONE = {**JOB, "state": "successful", "progress": 1.0}
SCAN = {"id": "s1", "state": "ready"}


def digest(content: bytes) -> str:
    return f"sha-256=:{base64.b64encode(hashlib.sha256(content).digest()).decode()}:"


@pytest.fixture
def scan_file(tmp_path: Path) -> Path:
    path = tmp_path / "scan.h5"
    path.write_bytes(bytes(range(256)) * 5000)
    return path


def test_dropped_submission_is_repeated_with_the_same_key_and_whole_body(scan_file: Path) -> None:
    """A lost answer must not make a second job: RFC 9110 section 9.2.2 on retries, Idempotency-Key on the order."""
    with scripted(DROP, answer(SCAN, 201), DROP, DROP, answer(JOB, 202)) as service:
        with Client(service.url, "t") as client:
            job = client.submit(scan_file, {"method": "tikhonov"}, label="pear")
        assert job.id == "j1"
    uploads, orders = service.received[:2], service.received[2:]
    for upload in uploads:
        assert upload.path == "/v1/scans?label=pear"
        assert upload.body == scan_file.read_bytes()
        assert upload.headers["Content-Type"] == "application/x-hdf5"
        assert upload.headers["Repr-Digest"] == digest(scan_file.read_bytes())
        assert upload.headers["Authorization"] == "Bearer t"
    assert len({order.headers["Idempotency-Key"] for order in orders}) == 1
    assert len({order.body for order in orders}) == 1


def test_sending_a_large_scan_shows_its_progress(
    scan_file: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    with scripted(answer(SCAN, 201), answer(SCAN, 200)) as service, Client(service.url, "t") as client:
        client.upload(scan_file, progress=True)
        assert capsys.readouterr().err == ""
        monkeypatch.setattr(connection, "SHOWN_FROM_BYTES", 1 << 20)
        client.upload(scan_file, progress=True)
    assert capsys.readouterr().err.splitlines()[-1] == "100 %  sending"


def test_upload_that_breaks_off_late_is_tried_again(scan_file: Path) -> None:
    """Patience counts from the break, not from the beginning of a long upload."""

    def slow(request: Received) -> Step:
        time.sleep(0.5)
        return DROP

    with scripted(slow, answer(SCAN, 201)) as service, Client(service.url, "t", patience=0.2) as client:
        assert client.upload(scan_file)["id"] == "s1"


def test_every_submission_has_a_key_of_its_own(scan_file: Path) -> None:
    with scripted(answer(JOB, 202), answer(JOB, 202)) as service:
        with Client(service.url, "t") as client:
            client.reconstruct("s1")
            client.reconstruct("s1")
    first, second = service.received
    assert first.headers["Idempotency-Key"] != second.headers["Idempotency-Key"]


def test_first_try_still_in_flight_is_waited_for() -> None:
    with scripted(refusal(409, "in flight"), answer(JOB, 202)) as service, Client(service.url, "t") as client:
        assert client.reconstruct("s1").id == "j1"


def test_busy_service_is_asked_again_after_its_retry_after() -> None:
    busy = Step(503, b"{}", {"Retry-After": "1"})
    with scripted(busy, answer(JOB)) as service, Client(service.url, "t") as client:
        started = time.monotonic()
        assert client.job("j1").state == "running"
        assert time.monotonic() - started >= 1


def test_service_out_of_order_is_unreachable_with_its_reason() -> None:
    step = refusal(503, "The disk is full.")
    with scripted(*[step] * 9) as service, Client(service.url, "t", patience=0.3) as client:
        with pytest.raises(ServiceUnreachable, match="The disk is full"):
            client.job("j1")


def test_refused_connection_names_the_address_and_the_remedy() -> None:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        url = f"http://127.0.0.1:{probe.getsockname()[1]}"
        with Client(url, "t", patience=0.2) as client, pytest.raises(ServiceUnreachable) as caught:
            client.job("j1")
    assert url in str(caught.value)
    assert "fallow serve" in str(caught.value)


def test_refusal_carries_the_problem_and_one_sentence() -> None:
    errors = [{"pointer": "/settings/tolerance", "detail": "must be above 0"}]
    with (
        scripted(refusal(422, "Settings refused.", errors=errors)) as service,
        Client(service.url, "t") as client,
    ):
        with pytest.raises(RequestRefused) as caught:
            client.reconstruct("s1", {"tolerance": 0})
    assert len(service.received) == 1
    assert caught.value.status == 422
    assert caught.value.problem["errors"] == errors
    assert str(caught.value) == "Settings refused. (settings/tolerance: must be above 0)"


def test_server_fault_is_told_apart_from_a_refusal() -> None:
    with scripted(refusal(500, "Fault 7.")) as service, Client(service.url, "t") as client:
        with pytest.raises(ServiceFault, match="Fault 7"):
            client.job("j1")


def test_another_kind_of_server_is_recognised() -> None:
    with (
        scripted(Step(404, b"<html>", {"Content-Type": "text/html"})) as service,
        Client(service.url, "t") as client,
    ):
        with pytest.raises(RequestRefused, match="not as Fallow does"):
            client.job("j1")


def test_wait_survives_a_restart_of_the_service() -> None:
    with (
        scripted(answer(JOB), DROP, DROP, answer(DONE)) as service,
        Client(service.url, "t", patience=0.1) as client,
    ):
        assert client.job("j1").wait().state == "successful"
    assert {request.headers.get("Prefer") for request in service.received[1:]} == {"wait=20"}


def test_wait_raises_when_the_job_failed() -> None:
    failed = {**JOB, "state": "failed", "error": {"title": "t", "detail": "The worker ran out of memory."}}
    with scripted(answer(failed)) as service, Client(service.url, "t") as client:
        with pytest.raises(JobFailed, match=r"Job j1 failed: The worker ran out of memory\.") as caught:
            client.job("j1").wait()
    assert caught.value.problem["title"] == "t"


def test_wait_ends_at_its_timeout() -> None:
    with scripted(*[answer(JOB)] * 20) as service, Client(service.url, "t") as client:
        with pytest.raises(WaitTimedOut, match=r"not done after 0\.3 s"):
            client.job("j1").wait(timeout=0.3)
    assert len(service.received) < 5


def test_download_goes_on_where_it_broke_off(tmp_path: Path) -> None:
    content = bytes(range(256)) * 40
    headers = {"ETag": '"e"', "Repr-Digest": digest(content)}

    def rest(request: Received) -> Step:
        assert request.headers["Range"] == "bytes=1000-"
        assert request.headers["If-Range"] == '"e"'
        return Step(206, content[1000:], headers)

    steps: list[Step | Callable[[Received], Step]] = [
        answer(DONE),
        answer({"verdict": "consistent"}),
        Step(200, content, headers, cut_after=1000),
        rest,
        Step(200, b"png"),
    ]
    with scripted(*steps) as service, Client(service.url, "t") as client:
        paths = client.job("j1").save(tmp_path / "new" / "folder")
    assert [path.name for path in paths] == ["image.h5", "report.json", "image.png"]
    assert paths[0].read_bytes() == content
    assert paths[2].read_bytes() == b"png"


def test_damaged_download_is_refused_and_leaves_no_file(tmp_path: Path) -> None:
    damaged = Step(200, b"half", {"Repr-Digest": digest(b"whole")})
    with scripted(answer(DONE), answer({}), damaged) as service, Client(service.url, "t") as client:
        with pytest.raises(DamagedDownload, match="differs from its digest"):
            client.job("j1").save(tmp_path)
    assert list(tmp_path.iterdir()) == []


def test_lists_are_followed_to_their_end() -> None:
    pages = [answer({"items": [JOB, JOB], "next": "c1"}), answer({"items": [DONE], "next": None})]
    with scripted(*pages) as service, Client(service.url, "t") as client:
        assert [job.state for job in client.jobs(label="a b", state=None)] == [
            "running",
            "running",
            "successful",
        ]
    assert [request.path for request in service.received] == [
        "/v1/jobs?label=a+b",
        "/v1/jobs?label=a+b&cursor=c1",
    ]


def test_proxy_of_the_outside_world_does_not_swallow_local_calls(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("HTTP_PROXY", "http://127.0.0.1:9")
    with scripted(answer(JOB)) as service, Client(service.url, "t") as client:
        assert client.job("j1").id == "j1"


def test_owner_token_goes_to_this_machine_alone(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "token").write_text("secret\n")
    monkeypatch.setenv("FALLOW_DATA", str(tmp_path))
    monkeypatch.delenv("FALLOW_TOKEN", raising=False)
    with scripted(answer(JOB)) as service:
        monkeypatch.setenv("FALLOW_URL", service.url)
        with Client() as client:
            client.job("j1")
    assert service.received[0].headers["Authorization"] == "Bearer secret"
    with Client("https://lab.example") as away:
        assert "authorization" not in away._transport._http.headers


@pytest.mark.parametrize("url", ["ftp://somewhere", "127.0.0.1:80", "lab"])
def test_address_must_be_http(url: str) -> None:
    with pytest.raises(InputRefused, match="no address of a service"):
        Client(url, "t")


def test_missing_scan_file_is_found_before_anything_is_sent(tmp_path: Path) -> None:
    with scripted() as service, Client(service.url, "t") as client:
        with pytest.raises(InputRefused, match="No scan file at"):
            client.submit(tmp_path / "none.h5")
    assert service.received == []
