"""`fallow serve` and `fallow worker` as commands: together they do a job, and both end politely."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from pathlib import Path

import pytest

from service.client import Client
from tests.cli.bad_scans import good
from tests.processes import free_port, stop, waited_for

ROOT = Path(__file__).parents[2]

pytestmark = pytest.mark.acceptance


def start(folder: Path, *arguments: str) -> subprocess.Popen[bytes]:
    """Start a command; its log is named for it."""
    with (folder / f"{arguments[0]}.log").open("wb") as log:
        return subprocess.Popen(
            [sys.executable, "-m", "service.cli", *arguments, "--data", str(folder / "data")],
            env={**os.environ, "PYTHONPATH": str(ROOT)}, cwd=folder, stdout=log, stderr=log,
        )  # fmt: skip


def test_service_and_worker_of_their_own(tmp_path: Path) -> None:
    good(tmp_path / "scan.h5")
    url = f"http://127.0.0.1:{free_port()}"
    service = start(tmp_path, "serve", "--workers", "0", "--port", url.rpartition(":")[2])
    worker = start(tmp_path, "worker")
    try:
        waited_for(f"{url}/health/ready", service, tmp_path / "serve.log", 120)
        with Client(url, (tmp_path / "data" / "token").read_text().strip()) as client:
            job = client.submit(tmp_path / "scan.h5", {"method": "zero-filled"}).wait(timeout=120)
        assert job.state == "successful"
        worker.send_signal(signal.SIGTERM)
        service.send_signal(signal.SIGINT)
        assert worker.wait(60) == 0, (tmp_path / "worker.log").read_text()
        assert service.wait(60) == 0, (tmp_path / "serve.log").read_text()
    finally:
        stop(worker)
        stop(service)
