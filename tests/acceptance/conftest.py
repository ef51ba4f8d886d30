"""Real processes: a service, workers and their computing processes, to be killed at will."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest

from recon.formats import write_scan
from service.settings import child_environment
from tests.processes import free_port, waited_for

MEDIA_TYPE = "application/x-hdf5"
SLICES = 24
#: Long enough to be killed in the middle, short enough for a test: bounded steps on each of 24 slices.
SETTINGS = {"max_iterations": 50, "tolerance": 1e-6}


#: What `fallow serve` and `fallow worker` do, also where only the source tree is there.
_PROGRAMS = {
    "serve": "import sys; from service.serve import run_service; from service.settings import ServiceSettings as S; "
    "run_service(S.from_environment(sys.argv[1]), '127.0.0.1', int(sys.argv[2]), int(sys.argv[3]))",
    "worker": "import sys; from service.worker import run_worker; from service.settings import ServiceSettings as S; "
    "run_worker(S.from_environment(sys.argv[1]))",
}


class Record:
    """What happened when, in lines for people."""

    def __init__(self) -> None:
        self._began = time.monotonic()

    def __call__(self, line: str) -> None:
        """Write one line."""
        sys.stdout.write(f"{time.monotonic() - self._began:7.2f} s  {line}\n")


class Lab:
    """One data folder and the processes on it."""

    def __init__(self, folder: Path, record: Record) -> None:
        self.data = folder / "data"
        self.record = record
        self._folder = folder
        self._processes: list[subprocess.Popen[bytes]] = []
        self._port = free_port()
        self._http = httpx.Client(base_url=f"http://127.0.0.1:{self._port}", timeout=30)

    def serve(self, workers: int = 0) -> subprocess.Popen[bytes]:
        """Start the service and wait until it answers."""
        service = self._start("serve", str(self._port), str(workers))
        waited_for(f"http://127.0.0.1:{self._port}/health/ready", service, self._log(service))
        self._http.headers["Authorization"] = f"Bearer {(self.data / 'token').read_text().strip()}"
        self.record(f"service started (process {service.pid}, {workers} local workers)")
        return service

    def work(self) -> subprocess.Popen[bytes]:
        """Start a worker."""
        worker = self._start("worker")
        self.record(f"worker started (process {worker.pid})")
        return worker

    def send(self, content: bytes) -> str:
        """Send a scan; its identifier."""
        answer = self._http.post("/v1/scans", content=content, headers={"Content-Type": MEDIA_TYPE})
        assert answer.status_code in {200, 201}, answer.text
        return str(answer.json()["id"])

    def order(self, scan: str, **settings: Any) -> str:
        """Order a job; its identifier."""
        body = {"kind": "reconstruction", "scan": scan, "settings": {**SETTINGS, **settings}}
        answer = self._http.post("/v1/jobs", json=body)
        assert answer.status_code == 202, answer.text
        job = str(answer.json()["id"])
        self.record(f"job {job} ordered")
        return job

    def get(self, path: str, **arguments: Any) -> httpx.Response:
        """Ask the service."""
        return self._http.get(path, **arguments)

    def job(self, job_id: str) -> dict[str, Any]:
        """One job as the service tells it."""
        document: dict[str, Any] = self._http.get(f"/v1/jobs/{job_id}").json()
        return document

    def dismiss(self, job_id: str) -> dict[str, Any]:
        """Dismiss a job."""
        answer = self._http.post(f"/v1/jobs/{job_id}/dismiss")
        assert answer.status_code == 200, answer.text
        document: dict[str, Any] = answer.json()
        return document

    def until(
        self, job_id: str, is_so: Callable[[dict[str, Any]], bool], seconds: float = 120
    ) -> dict[str, Any]:
        """Wait until something holds of a job."""
        deadline = time.monotonic() + seconds
        while time.monotonic() < deadline:
            job = self.job(job_id)
            if is_so(job):
                return job
            time.sleep(0.05)
        raise AssertionError(f"after {seconds} s still {job}")

    def until_half_done(self, job_id: str, attempts: int = 1) -> int:
        """Wait until a job is in the middle of its computation; the computing process."""
        job = self.until(
            job_id,
            lambda job: job["state"] == "running" and job["attempts"] == attempts and job["progress"] > 0.4,
        )
        (child,) = computing_processes(self.data)
        self.record(f"job at {job['progress']:.0%}, attempt {attempts}, computed by process {child}")
        return child

    def until_finished(self, job_id: str) -> dict[str, Any]:
        """Wait until a job is finished."""
        job = self.until(job_id, lambda job: job["finished_at"] is not None)
        self.record(f"job {job['state']} after {job['attempts']} attempts")
        return job

    def kill(self, process: subprocess.Popen[bytes] | int, what: str) -> None:
        """Send SIGKILL to one process that this test started."""
        number = process if isinstance(process, int) else process.pid
        os.kill(number, signal.SIGKILL)
        if not isinstance(process, int):
            process.wait()
        self.record(f"SIGKILL to {what} (process {number})")

    def close(self) -> None:
        """End everything."""
        self._http.close()
        for process in self._processes:
            if process.poll() is None:
                process.terminate()
        for process in self._processes:
            try:
                process.wait(20)
            except subprocess.TimeoutExpired:
                process.kill()
                process.wait()

    def logs(self) -> str:
        """What all processes have logged."""
        return "".join(self._log(process).read_text(errors="replace") for process in self._processes)

    def _start(self, *arguments: str) -> subprocess.Popen[bytes]:
        command, *rest = arguments
        log = self._folder / f"log-{len(self._processes)}"
        with log.open("wb") as out:
            process = subprocess.Popen(
                [sys.executable, "-c", _PROGRAMS[command], str(self.data), *rest],
                stdout=out,
                stderr=out,
                env=child_environment(),
            )
        self._processes.append(process)
        return process

    def _log(self, process: subprocess.Popen[bytes]) -> Path:
        return self._folder / f"log-{self._processes.index(process)}"


def processes_with(*words: str) -> list[int]:
    """Processes whose command line has all these words."""
    found = []
    for entry in Path("/proc").iterdir():
        if entry.name.isdecimal():
            try:
                line = (entry / "cmdline").read_bytes().decode(errors="replace").split("\0")
                state = (entry / "stat").read_text().rpartition(")")[2].split()[0]
            except OSError:
                continue
            if state != "Z" and all(word in line for word in words):
                found.append(int(entry.name))
    return found


def computing_processes(data: Path) -> list[int]:
    """Computing processes whose worker works on this data folder."""
    found = []
    for number in processes_with("service.compute"):
        try:
            parent = int(Path(f"/proc/{number}/stat").read_text().rpartition(")")[2].split()[1])
            line = Path(f"/proc/{parent}/cmdline").read_bytes().decode().split("\0")
        except OSError:
            continue
        if str(data) in line:
            found.append(number)
    return found


def is_alive(process: int) -> bool:
    """Whether a process runs."""
    try:
        return Path(f"/proc/{process}/stat").read_text().rpartition(")")[2].split()[0] != "Z"
    except OSError:
        return False


@pytest.fixture
def lab(tmp_path: Path) -> Iterator[Lab]:
    """A data folder with no process on it yet."""
    opened = Lab(tmp_path, Record())
    try:
        yield opened
    finally:
        opened.close()


@pytest.fixture(scope="session")
def long_scan(tmp_path_factory: pytest.TempPathFactory) -> bytes:
    """24 slices of 128 x 128 with 4 coils, half of the lines measured."""
    noise = np.random.default_rng(1)
    y, x = np.mgrid[-1:1:128j, -1:1:128j]
    angles = np.pi / 2 * np.arange(4)[:, None, None]
    maps = np.exp(-((y - np.sin(angles)) ** 2) - (x - np.cos(angles)) ** 2 + 1j * angles)
    discs = np.stack([20.0 * (x**2 + y**2 < 0.3 + 0.01 * s) * (1 + (x > 0.2)) for s in range(SLICES)])
    image = discs[:, None] * maps
    kspace = np.fft.fftshift(np.fft.fft2(np.fft.ifftshift(image, axes=(-2, -1)), norm="ortho"), axes=(-2, -1))
    kspace = kspace + noise.normal(size=image.shape) + 1j * noise.normal(size=image.shape)
    mask = np.zeros(128, bool)
    mask[::2] = True
    mask[52:76] = True
    path = tmp_path_factory.mktemp("scan") / "apples.h5"
    write_scan(path, kspace.astype(np.complex64), ("slice", "coil", "ky", "kx"), mask=mask, mask_axes=("ky",))
    return path.read_bytes()
