"""`fallow serve` and `fallow worker`: the long-running processes."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from service.commands.failures import ExitCode, Refused
from service.settings import DEFAULT_HOST, DEFAULT_PORT

if TYPE_CHECKING:
    _Commands = argparse._SubParsersAction[argparse.ArgumentParser]

_SERVER_PACKAGES = ("alembic", "dbos", "fastapi", "sqlalchemy", "uvicorn")


def add_commands(commands: _Commands) -> None:
    """Add both to the parser."""
    serve = commands.add_parser("serve", help="start the service and one local worker")
    serve.add_argument("--host", default=DEFAULT_HOST, help="address to listen on (default: %(default)s)")
    serve.add_argument(
        "--port",
        type=_port,
        default=DEFAULT_PORT,
        help="port to listen on, 0 for a free one (default: %(default)s)",
    )
    serve.add_argument(
        "--workers", type=_count, default=1, metavar="N", help="local worker processes (default: %(default)s)"
    )
    worker = commands.add_parser("worker", help="start one more worker on a data folder")
    for command in (serve, worker):
        command.add_argument(
            "--data",
            type=Path,
            metavar="FOLDER",
            help="data folder (default: FALLOW_DATA, or the user's data directory)",
        )
    serve.set_defaults(run=run_serve)
    worker.set_defaults(run=run_worker)


def run_serve(arguments: argparse.Namespace) -> int:
    """Serve until stopped; the local workers end with it."""
    _check_server_packages()
    from service.serve import run_service
    from service.settings import ServiceSettings

    run_service(
        ServiceSettings.from_environment(data=arguments.data),
        host=arguments.host,
        port=arguments.port,
        workers=arguments.workers,
    )
    return ExitCode.DONE


def run_worker(arguments: argparse.Namespace) -> int:
    """Work until stopped."""
    _check_server_packages()
    from service.settings import ServiceSettings
    from service.worker import run_worker

    run_worker(ServiceSettings.from_environment(data=arguments.data))
    return ExitCode.DONE


def _check_server_packages() -> None:
    from importlib.util import find_spec

    missing = [name for name in _SERVER_PACKAGES if find_spec(name) is None]
    if missing:
        raise Refused(
            f"the service needs {', '.join(missing)}: install it with `pip install 'fallow[server]'`."
        )


def _port(text: str) -> int:
    if not text.isdecimal() or int(text) > 65535:
        raise argparse.ArgumentTypeError(
            f"expected a port from 1 to 65535, or 0 for a free one, received {text!r}"
        )
    return int(text)


def _count(text: str) -> int:
    if not text.isdecimal() or int(text) > 64:
        raise argparse.ArgumentTypeError(f"expected a number of workers from 0 to 64, received {text!r}")
    return int(text)
