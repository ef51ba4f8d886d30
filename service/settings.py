"""Settings of the service and its client. No other module reads the environment."""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Final, Self

DEFAULT_HOST: Final = "127.0.0.1"
DEFAULT_PORT: Final = 8765

#: Names under which a service on this machine is reached; `FALLOW_HOSTS` adds others.
LOCAL_HOSTS: Final = ("localhost", "127.0.0.1", "[::1]")

_GIB = 1 << 30


class SettingError(ValueError):
    """A setting of the service that cannot be used; the message says what is accepted."""


@dataclass(frozen=True, kw_only=True)
class ServiceSettings:
    """What one service is configured with.

    Attributes
    ----------
    data : Path
        Folder of everything that the service keeps.
    hosts : tuple of str
        Accepted host names of the Host header, without port.
    upload_limit : int
        Largest accepted scan file in bytes.
    stall_seconds : float
        An upload without data for this long is given up.
    gate_memory : int
        Address space in bytes of the process that opens uploads.
    gate_seconds : float
        Processor time of that process for a small file; large ones get more (`gate_seconds_per_gib`).
    heartbeat_seconds : float
        Interval of a worker's sign of life; one silent for six of them counts as dead.
    sweep_seconds : float
        Interval at which jobs without a workflow and jobs of dead workers are looked for.
    poll_seconds : float
        Interval at which a worker looks for a job.
    """

    data: Path
    hosts: tuple[str, ...] = LOCAL_HOSTS
    upload_limit: int = 4 * _GIB
    stall_seconds: float = 30.0
    gate_memory: int = 2 * _GIB
    gate_seconds: float = 60.0
    gate_seconds_per_gib: float = 120.0
    heartbeat_seconds: float = 2.0
    sweep_seconds: float = 2.0
    poll_seconds: float = 0.2
    idempotency_seconds: float = field(default=7 * 24 * 3600.0)

    @classmethod
    def from_environment(
        cls,
        data: str | os.PathLike[str] | None = None,
        *,
        hosts: tuple[str, ...] = (),
        environment: Mapping[str, str] | None = None,
    ) -> Self:
        """Read `FALLOW_DATA`, `FALLOW_HOSTS` and `FALLOW_UPLOAD_LIMIT`; arguments go before variables.

        Parameters
        ----------
        data : path, optional
            Data folder; by default that of `FALLOW_DATA`, else `fallow` in the user's data directory.
        hosts : tuple of str
            Host names accepted beside those of this machine and of `FALLOW_HOSTS`.
        environment : mapping, optional
            Variables; by default those of the process.

        Raises
        ------
        SettingError
            A variable that cannot be used.
        """
        variables = os.environ if environment is None else environment
        named = tuple(
            name.strip().lower() for name in variables.get("FALLOW_HOSTS", "").split(",") if name.strip()
        )
        every = dict.fromkeys((*LOCAL_HOSTS, *named, *(name.lower() for name in hosts)))
        return cls(
            data=data_folder(data, environment=variables),
            hosts=tuple(every),
            upload_limit=_bytes(variables, "FALLOW_UPLOAD_LIMIT", cls.upload_limit),
        )

    @property
    def token_file(self) -> Path:
        """Where the owner's token is."""
        return self.data / "token"

    @property
    def database_url(self) -> str:
        """Metadata of scans and jobs."""
        return f"sqlite:///{self.data / 'fallow.sqlite'}"

    @property
    def queue_url(self) -> str:
        """State of the queue engine."""
        return f"sqlite:///{self.data / 'queue.sqlite'}"

    @property
    def dead_seconds(self) -> float:
        """A worker silent for this long counts as dead."""
        return 6 * self.heartbeat_seconds


def data_folder(
    data: str | os.PathLike[str] | None = None, *, environment: Mapping[str, str] | None = None
) -> Path:
    """The data folder: the argument, else `FALLOW_DATA`, else `fallow` in the user's data directory (XDG)."""
    variables = os.environ if environment is None else environment
    chosen = os.fspath(data) if data is not None else variables.get("FALLOW_DATA", "")
    if chosen:
        return Path(chosen).expanduser().absolute()
    base = variables.get("XDG_DATA_HOME", "")
    # The base directory specification says that relative paths are to be ignored.
    root = Path(base) if base.startswith("/") else Path.home() / ".local" / "share"
    return root / "fallow"


def client_url() -> str:
    """Address that the client and the commands talk to: `FALLOW_URL`, else the service on this machine."""
    return os.environ.get("FALLOW_URL") or f"http://{DEFAULT_HOST}:{DEFAULT_PORT}"


def client_token(data: str | os.PathLike[str] | None = None, *, is_local: bool = True) -> str | None:
    """Token that the client and the commands send: `FALLOW_TOKEN`, else the owner's in the local data folder.

    Parameters
    ----------
    data : path, optional
        Data folder.
    is_local : bool
        Whether the token goes to this machine; the owner's token is never sent to another one.

    Returns
    -------
    str or None
        None where there is neither.
    """
    token = os.environ.get("FALLOW_TOKEN", "").strip()
    if token or not is_local:
        return token or None
    try:
        return (data_folder(data) / "token").read_text(encoding="ascii").strip() or None
    except (OSError, UnicodeDecodeError):
        return None


def child_environment(**extra: str) -> dict[str, str]:
    """Environment of a process that computes: one thread for every numerical library.

    Several workers share the cores already; threads of their own made one step ten times slower.
    """
    threads = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS")
    secrets = {"FALLOW_TOKEN"}
    kept = {name: value for name, value in os.environ.items() if name not in secrets}
    return {**kept, **dict.fromkeys(threads, "1"), "PYTHONUNBUFFERED": "1", **extra}


def computing_threads(workers: int = 1) -> int:
    """Threads for each computing process: `FALLOW_THREADS`, else an equal share of the usable cores.

    Parameters
    ----------
    workers : int
        Processes that compute at once on this machine.

    Raises
    ------
    SettingError
    """
    text = os.environ.get("FALLOW_THREADS", "").strip()
    if not text:
        return max(1, len(os.sched_getaffinity(0)) // max(1, workers))
    if not text.isascii() or not text.isdigit() or not 1 <= int(text) <= 1024:
        raise SettingError(f"FALLOW_THREADS is {text!r}; accepted is a whole number from 1 to 1024")
    return int(text)


def _bytes(variables: Mapping[str, str], name: str, default: int) -> int:
    text = variables.get(name, "").strip()
    if not text:
        return default
    if not text.isascii() or not text.isdigit() or int(text) == 0:
        raise SettingError(
            f"{name} is {text!r}; accepted is a positive whole number of bytes, such as {default}"
        )
    return int(text)
