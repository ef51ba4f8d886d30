"""SIGKILL of worker, computing process or service in the middle of a job: it finishes, once, completely."""

from __future__ import annotations

import base64
import hashlib
import time
from typing import Any

import httpx
import pytest

from recon.formats import read_image

from .conftest import MEDIA_TYPE, SLICES, Lab, computing_processes, is_alive

pytestmark = [pytest.mark.acceptance, pytest.mark.slow]


def assert_finished_once(lab: Lab, job_id: str, attempts: int) -> None:
    """The job is successful, its results are complete and unique, and nothing goes on with it."""
    job = lab.until_finished(job_id)
    assert job["state"] == "successful", job
    assert job["attempts"] == attempts
    answer = lab.get(f"/v1/jobs/{job_id}/image.h5")
    digest = base64.b64encode(hashlib.sha256(answer.content).digest()).decode()
    assert answer.headers["repr-digest"] == f"sha-256=:{digest}:"
    path = lab.data.parent / "collected.h5"
    path.write_bytes(answer.content)
    result = read_image(path)
    assert result.image.shape == (SLICES, 128, 128)
    # Every slice was solved: each has its disc.
    assert (abs(result.image).max(axis=(1, 2)) > 1).all()
    assert lab.get(f"/v1/jobs/{job_id}/report").json()["provenance"] == result.provenance
    assert lab.get(f"/v1/jobs/{job_id}/pictures/image.png").content.startswith(b"\x89PNG")
    time.sleep(3)
    assert lab.job(job_id) == job, "something went on with a finished job"
    assert computing_processes(lab.data) == []
    assert [path.name for path in (lab.data / "results").iterdir()] == [job_id]
    assert list((lab.data / "drafts").iterdir()) == []
    lab.record(f"one complete result of {len(answer.content)} bytes, digest right, nothing left over")


def test_computing_process_killed(lab: Lab, long_scan: bytes) -> None:
    lab.serve(workers=1)
    job = lab.order(lab.send(long_scan))
    lab.kill(lab.until_half_done(job), "computing process")
    assert_finished_once(lab, job, attempts=2)


def test_computing_process_killed_twice(lab: Lab, long_scan: bytes) -> None:
    lab.serve(workers=1)
    scan = lab.send(long_scan)
    job = lab.order(scan)
    lab.kill(lab.until_half_done(job), "computing process")
    lab.kill(lab.until_half_done(job, attempts=2), "computing process")
    found = lab.until_finished(job)
    assert found["state"] == "failed"
    error: dict[str, Any] = found["error"]
    assert error["type"] == "urn:fallow:problem:computing-died"
    assert "SIGKILL" in error["detail"]
    assert error["stage"] in {"coil-maps", "solve", "combine", "consistency", "write"}
    assert error["remedy"]
    assert lab.get(f"/v1/jobs/{job}/image.h5").status_code == 409
    lab.record(f"the reason: {error['detail']}")
    other = lab.order(scan, max_iterations=2)
    assert lab.until_finished(other)["state"] == "successful"


def test_worker_killed_and_started_again(lab: Lab, long_scan: bytes) -> None:
    lab.serve()
    worker = lab.work()
    job = lab.order(lab.send(long_scan))
    child = lab.until_half_done(job)
    lab.kill(worker, "worker")
    time.sleep(0.5)
    assert not is_alive(child), "the computing process outlived its worker"
    lab.record("its computing process is gone too")
    lab.work()
    assert_finished_once(lab, job, attempts=2)


def test_worker_killed_and_another_takes_over(lab: Lab, long_scan: bytes) -> None:
    lab.serve()
    workers = [lab.work(), lab.work()]
    job = lab.order(lab.send(long_scan))
    child = lab.until_half_done(job)
    parent = _parent(child)
    (victim,) = [worker for worker in workers if worker.pid == parent]
    lab.kill(victim, "worker")
    assert_finished_once(lab, job, attempts=2)


def test_service_killed_while_a_worker_works(lab: Lab, long_scan: bytes) -> None:
    service = lab.serve()
    lab.work()
    job = lab.order(lab.send(long_scan))
    lab.until_half_done(job)
    lab.kill(service, "service")
    lab.serve()
    assert_finished_once(lab, job, attempts=1)


def test_service_killed_with_its_own_worker(lab: Lab, long_scan: bytes) -> None:
    service = lab.serve(workers=1)
    job = lab.order(lab.send(long_scan))
    child = lab.until_half_done(job)
    lab.kill(service, "service")
    deadline = time.monotonic() + 5
    while is_alive(child) and time.monotonic() < deadline:
        time.sleep(0.05)
    assert not is_alive(child), "a worker of the service outlived it"
    lab.record("its worker and computing process are gone too")
    lab.serve(workers=1)
    assert_finished_once(lab, job, attempts=2)


def test_everything_killed(lab: Lab, long_scan: bytes) -> None:
    service = lab.serve()
    worker = lab.work()
    scan = lab.send(long_scan)
    job, waiting = lab.order(scan), lab.order(scan, max_iterations=2)
    child = lab.until_half_done(job)
    for process, what in ((child, "computing process"), (worker, "worker"), (service, "service")):
        lab.kill(process, what)
    lab.serve()
    lab.work()
    assert lab.until_finished(job)["state"] == "successful"
    assert lab.until_finished(waiting)["attempts"] == 1


def test_service_stopped_in_good_order(lab: Lab, long_scan: bytes) -> None:
    service = lab.serve(workers=1)
    job = lab.order(lab.send(long_scan))
    child = lab.until_half_done(job)
    began = time.monotonic()
    service.terminate()
    assert service.wait(20) == 0
    lab.record(f"service and worker stopped in {time.monotonic() - began:.1f} s")
    assert not is_alive(child)
    assert "went back" not in lab.logs()
    lab.serve(workers=1)
    assert_finished_once(lab, job, attempts=2)


def test_service_killed_during_an_upload(lab: Lab, long_scan: bytes) -> None:
    service = lab.serve()

    def halves() -> Any:
        yield long_scan[: len(long_scan) // 2]
        lab.kill(service, "service")
        yield long_scan[len(long_scan) // 2 :]

    url = str(lab.get("/health/live").request.url.join("/v1/scans"))
    token = (lab.data / "token").read_text().strip()
    headers = {"Content-Type": MEDIA_TYPE, "Authorization": f"Bearer {token}"}
    with pytest.raises(httpx.TransportError):
        httpx.post(url, content=halves(), headers=headers)
    assert len(list((lab.data / "incoming").iterdir())) == 1
    lab.serve()
    assert list((lab.data / "incoming").iterdir()) == []
    assert lab.get("/v1/scans").json()["items"] == []
    lab.record("half an upload was left and cleared away at the next start")
    lab.send(long_scan)


def test_dismissed_job_ends_within_two_seconds(lab: Lab, long_scan: bytes) -> None:
    lab.serve(workers=1)
    scan = lab.send(long_scan)
    job = lab.order(scan)
    child = lab.until_half_done(job)
    began = time.monotonic()
    assert lab.dismiss(job)["state"] == "dismissed"
    while is_alive(child):
        assert time.monotonic() - began < 2, "the computing process goes on"
        time.sleep(0.02)
    lab.record(f"dismissed; its computing process ended {time.monotonic() - began:.2f} s after the call")
    assert lab.until_finished(lab.order(scan, max_iterations=2))["state"] == "successful"
    assert lab.job(job)["state"] == "dismissed"
    assert not (lab.data / "results" / job).exists()
    assert lab.get(f"/v1/jobs/{job}/image.h5").status_code == 409


def _parent(process: int) -> int:
    from pathlib import Path

    return int(Path(f"/proc/{process}/stat").read_text().rpartition(")")[2].split()[1])
