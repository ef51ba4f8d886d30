"""The real application on a folder of its own, a small scan, and a stand-in for a worker."""

from __future__ import annotations

import asyncio
import os
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest
import uvicorn

from recon.formats import write_scan
from service.app import create_app
from service.process import python_command
from service.queue.attempt import JobRunner
from service.services import Services
from service.settings import ServiceSettings
from service.store.attempts import AttemptStore

MEDIA_TYPE = "application/x-hdf5"
UPLOAD_LIMIT = 1 << 20

MakeScan = Callable[..., bytes]


@pytest.fixture
def settings(tmp_path: Path) -> ServiceSettings:
    """Settings with short intervals and small limits."""
    return _settings(tmp_path / "data")


def _settings(data: Path) -> ServiceSettings:
    base = ServiceSettings.from_environment(data=data, environment={})
    return replace(base, upload_limit=UPLOAD_LIMIT, sweep_seconds=0.2, stall_seconds=5.0)


def send(client: Caller, content: bytes) -> dict[str, Any]:
    """Send a scan that is accepted."""
    answer = client.post("/v1/scans", content=content, headers={"Content-Type": MEDIA_TYPE})
    assert answer.status_code == 201, answer.text
    document: dict[str, Any] = answer.json()
    return document


class Caller(httpx.Client):
    """Calls a running application over HTTP; `parts` is what is behind its routes, `loop` where it runs."""

    parts: Services
    loop: asyncio.AbstractEventLoop


@contextmanager
def running(settings: ServiceSettings) -> Iterator[Caller]:
    """The application on a free port while the block runs, called with the owner's token."""
    app = create_app(settings)
    config = uvicorn.Config(app, port=0, log_config=None, access_log=False, lifespan="off")
    server = uvicorn.Server(config)
    listener = config.bind_socket()
    started = threading.Event()
    loops: list[asyncio.AbstractEventLoop] = []

    async def serve() -> None:
        try:
            async with app.router.lifespan_context(app):
                loops.append(asyncio.get_running_loop())
                started.set()
                await server.serve(sockets=[listener])
        finally:
            started.set()

    thread = threading.Thread(target=asyncio.run, args=(serve(),))
    thread.start()
    try:
        assert started.wait(60)
        assert loops, "the application did not start"
        token = settings.token_file.read_text().strip()
        with Caller(base_url=f"http://127.0.0.1:{listener.getsockname()[1]}", timeout=30) as caller:
            caller.headers["Authorization"] = f"Bearer {token}"
            caller.parts = app.state.services
            (caller.loop,) = loops
            yield caller
    finally:
        server.should_exit = True
        thread.join()
        listener.close()


@pytest.fixture
def client(settings: ServiceSettings) -> Iterator[Caller]:
    """A caller of the running application."""
    with running(settings) as caller:
        yield caller


@pytest.fixture(scope="module")
def shared(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Caller]:
    """One application for all tests of a module that leave nothing behind."""
    with running(_settings(tmp_path_factory.mktemp("shared") / "data")) as caller:
        yield caller


@pytest.fixture(scope="module")
def shared_scan(shared: Caller, tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """A scan of the shared application."""
    return send(shared, scan_content(tmp_path_factory.mktemp("scan") / "scan.h5"))


@pytest.fixture
def parts(client: Caller) -> Services:
    """What is behind the routes."""
    return client.parts


@pytest.fixture
def make_scan(tmp_path: Path) -> MakeScan:
    """Writes small scans: content of a file."""

    def make(seed: int = 0, shape: tuple[int, int, int] = (4, 32, 32), **extra: Any) -> bytes:
        return scan_content(tmp_path / f"scan-{seed}.h5", seed=seed, shape=shape, **extra)

    return make


def scan_content(
    path: Path, *, seed: int = 0, shape: tuple[int, int, int] = (4, 32, 32), **extra: Any
) -> bytes:
    """Write a scan of a disc seen by coils around it, half of its lines measured."""
    coils, rows, columns = shape
    noise = np.random.default_rng(seed)
    y, x = np.mgrid[-1 : 1 : rows * 1j, -1 : 1 : columns * 1j]
    angles = 2 * np.pi * np.arange(coils) / coils
    maps = (
        np.exp(-((y - np.sin(angles)[:, None, None]) ** 2 + (x - np.cos(angles)[:, None, None]) ** 2))
        * np.exp(1j * angles)[:, None, None]
    )
    image = 20.0 * maps * (x**2 + y**2 < 0.5)
    kspace = np.fft.fftshift(np.fft.fft2(np.fft.ifftshift(image, axes=(-2, -1)), norm="ortho"), axes=(-2, -1))
    kspace = kspace + 0.5 * (noise.normal(size=shape) + 1j * noise.normal(size=shape))
    mask = np.zeros(rows, dtype=bool)
    mask[::2] = True
    mask[rows // 2 - 8 : rows // 2 + 8] = True
    arguments: dict[str, Any] = {"mask": mask, "mask_axes": ("ky",), "title": f"apple {seed}", **extra}
    write_scan(path, kspace.astype(np.complex64), ("coil", "ky", "kx"), **arguments)
    return path.read_bytes()


@pytest.fixture
def scan(client: Caller, make_scan: MakeScan) -> dict[str, Any]:
    """An accepted scan."""
    return send(client, make_scan())


@pytest.fixture
def order(client: Caller, scan: dict[str, Any]) -> Callable[..., dict[str, Any]]:
    """Orders jobs on the scan."""

    def place(**fields: Any) -> dict[str, Any]:
        body = {"kind": "reconstruction", "scan": scan["id"], "settings": {"method": "zero-filled"}, **fields}
        answer = client.post("/v1/jobs", json=body)
        assert answer.status_code == 202, answer.text
        document: dict[str, Any] = answer.json()
        return document

    return place


@pytest.fixture
def runner(parts: Services) -> JobRunner:
    """What a worker does with a job, without the queue engine around it."""
    return runner_of(parts)


def runner_of(parts: Services) -> JobRunner:
    """Build a runner of jobs with the real computing process."""
    return JobRunner(
        AttemptStore(parts.database),
        parts.files,
        "test-0",
        command=python_command("service.compute", str(os.getpid())),
    )


@pytest.fixture
def finished(order: Callable[..., dict[str, Any]], runner: JobRunner) -> dict[str, Any]:
    """A job that was ordered and carried out."""
    job = order()
    runner.run(job["id"])
    return job


@contextmanager
def in_background(call: Callable[[], object]) -> Iterator[threading.Thread]:
    """Run a call in a thread while the block runs."""
    thread = threading.Thread(target=call)
    thread.start()
    try:
        yield thread
    finally:
        thread.join()
