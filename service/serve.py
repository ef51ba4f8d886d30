"""`fallow serve`: the HTTP interface in this process, local workers as child processes that end with it."""

from __future__ import annotations

import asyncio
import logging
import os
import signal
import socket
import time
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType
from typing import Final

import uvicorn
from fastapi import FastAPI

from recon.caution import CAUTION
from service.app import create_app
from service.logs import configure_logging
from service.process import how_it_ended, python_command
from service.provenance import fallow_version
from service.settings import (
    LOCAL_HOSTS,
    ServiceSettings,
    SettingError,
    child_environment,
    computing_threads,
)

log = logging.getLogger("fallow")

#: Open answers get this long when the service is stopped.
_GRACE_SECONDS: Final = 5
_WORKER_GRACE_SECONDS: Final = 15.0
#: A worker that lived shorter than this is started again with growing pauses.
_SHORT_LIFE_SECONDS: Final = 10.0
_LONGEST_PAUSE_SECONDS: Final = 30.0


def run_service(settings: ServiceSettings, host: str, port: int, workers: int) -> None:
    """Serve until SIGTERM or SIGINT.

    Parameters
    ----------
    settings : ServiceSettings
    host, port
        Where to listen; port 0 takes a free one.
    workers : int
        Local worker processes; one that dies is started again.

    Raises
    ------
    SettingError
        The address is taken, or not one of this machine; another service uses the data folder, or its token file
        cannot be used.
    """
    configure_logging()
    os.umask(0o077)
    asyncio.run(_serve(settings, host, port, workers))


async def _serve(settings: ServiceSettings, host: str, port: int, workers: int) -> None:
    threads = computing_threads(workers)
    app = create_app(settings)
    config = uvicorn.Config(
        app,
        host=host,
        port=port,
        log_config=None,
        access_log=False,
        server_header=False,
        # Errors at the start are raised, not logged.
        lifespan="off",
        timeout_graceful_shutdown=_GRACE_SECONDS,
    )
    listener = _bound_socket(host, port)
    try:
        async with app.router.lifespan_context(app):
            server = _Server(config, app)
            supervisors = [asyncio.create_task(_keep_worker(settings, threads)) for _ in range(workers)]
            address, taken = listener.getsockname()[:2]
            shown = f"[{address}]" if ":" in address else address
            log.info("Fallow %s listens on http://%s:%d", fallow_version(), shown, taken)
            log.info("data folder %s, token in %s", settings.data, settings.token_file)
            log.info("%s", CAUTION)
            if address not in {"127.0.0.1", "::1"} and settings.hosts == LOCAL_HOSTS:
                log.warning(
                    "other machines are answered once FALLOW_HOSTS names the host name that they call"
                )
            try:
                await server.serve(sockets=[listener])
            finally:
                for supervisor in supervisors:
                    supervisor.cancel()
                await asyncio.gather(*supervisors, return_exceptions=True)
        log.info("stopped")
    finally:
        listener.close()


def _bound_socket(host: str, port: int) -> socket.socket:
    """A socket on the address; uvicorn's own would end the process on a taken one instead of raising."""
    listener = socket.socket(socket.AF_INET6 if ":" in host else socket.AF_INET)
    listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
    try:
        listener.bind((host, port))
    except OSError as error:
        listener.close()
        reason = (error.strerror or str(error)).lower()
        raise SettingError(
            f"the service cannot listen on {host} port {port} ({reason}): choose another with --port or --host"
        ) from error
    return listener


class _Server(uvicorn.Server):
    """Lets those who wait for jobs go as soon as it is asked to stop, so that stopping does not wait for them."""

    def __init__(self, config: uvicorn.Config, app: FastAPI) -> None:
        super().__init__(config)
        self._app = app

    @contextmanager
    def capture_signals(self) -> Iterator[None]:
        """Take signals while serving; the parent class would raise them again before workers and files are closed."""
        loop = asyncio.get_running_loop()
        for number in (signal.SIGINT, signal.SIGTERM):
            loop.add_signal_handler(number, self.handle_exit, number, None)
        try:
            yield
        finally:
            for number in (signal.SIGINT, signal.SIGTERM):
                loop.remove_signal_handler(number)

    def handle_exit(self, sig: int, frame: FrameType | None) -> None:
        """Stop serving; asked twice, without waiting for open answers."""
        self._app.state.services.watch.close()
        super().handle_exit(sig, frame)


async def _keep_worker(settings: ServiceSettings, threads: int) -> None:
    """Run a worker, and another when it dies, until cancelled."""
    pause = 1.0
    while True:
        started = time.monotonic()
        worker = await asyncio.create_subprocess_exec(
            *python_command("service.worker", str(settings.data), str(os.getpid())),
            stdin=asyncio.subprocess.DEVNULL,
            env=child_environment(FALLOW_THREADS=str(threads)),
            # A key pressed in the terminal reaches the service alone, which then stops its workers in good order.
            start_new_session=True,
        )
        try:
            returncode = await worker.wait()
        except asyncio.CancelledError:
            await _end(worker)
            raise
        pause = (
            0.2
            if time.monotonic() - started > _SHORT_LIFE_SECONDS
            else min(2 * pause, _LONGEST_PAUSE_SECONDS)
        )
        log.warning("a worker ended by %s; another one starts in %.1f s", how_it_ended(returncode), pause)
        await asyncio.sleep(pause)


async def _end(worker: asyncio.subprocess.Process) -> None:
    """Ask a worker to stop, and make it when it does not."""
    if worker.returncode is not None:
        return
    worker.send_signal(signal.SIGTERM)
    try:
        await asyncio.wait_for(worker.wait(), _WORKER_GRACE_SECONDS)
    except TimeoutError:
        worker.kill()
        await worker.wait()
