"""From an exception to one line for the user and an exit code for scripts."""

from __future__ import annotations

import os
import sys
from enum import IntEnum


class ExitCode(IntEnum):
    """What the exit codes of `fallow` mean."""

    DONE = 0
    INTERNAL_ERROR = 1
    REFUSED = 2
    JOB_FAILED = 3
    UNREACHABLE = 4
    INTERRUPTED = 130


class Refused(Exception):
    """Something on the command line, or a file it names, cannot be used; the message is the line to print."""


def explain(error: BaseException) -> tuple[str, ExitCode]:
    """The line to print and the exit code; an empty line where nothing is left to say."""
    from recon.errors import ReconError
    from service.settings import SettingError

    if isinstance(error, KeyboardInterrupt):
        return "interrupted.", ExitCode.INTERRUPTED
    if isinstance(error, BrokenPipeError):
        # Whoever read the output has gone; keep the interpreter from failing once more when it flushes.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return "", ExitCode.INTERNAL_ERROR
    if isinstance(error, Refused | ReconError | SettingError):
        return _line(error), ExitCode.REFUSED
    if type(error).__module__.startswith("service.client"):
        return _explain_client(error)
    if isinstance(error, OSError):
        return _explain_os(error)
    if isinstance(error, MemoryError):
        return "not enough memory for this scan: close other programs, or use a machine with more.", ExitCode(
            1
        )
    kind = type(error).__name__
    line = f"internal error ({kind}: {_line(error)}): run `fallow --traceback ...` for a bug report."
    return line, ExitCode.INTERNAL_ERROR


def _explain_client(error: BaseException) -> tuple[str, ExitCode]:
    from service.client.errors import (
        InputRefused,
        JobFailed,
        RequestRefused,
        ServiceFault,
        ServiceUnreachable,
    )

    line = _line(error)
    if isinstance(error, ServiceUnreachable):
        return line, ExitCode.UNREACHABLE
    if isinstance(error, JobFailed):
        return line, ExitCode.JOB_FAILED
    if isinstance(error, RequestRefused) and error.status == 401:
        remedy = "give a token with --token or FALLOW_TOKEN, or use the account that started the service."
        return f"{line.rstrip('.')}: {remedy}", ExitCode.REFUSED
    if isinstance(error, InputRefused) or (
        isinstance(error, RequestRefused) and not isinstance(error, ServiceFault)
    ):
        return line, ExitCode.REFUSED
    return line, ExitCode.INTERNAL_ERROR


def _explain_os(error: OSError) -> tuple[str, ExitCode]:
    where = f" {error.filename}" if error.filename else ""
    reason = error.strerror or str(error)
    if isinstance(
        error, FileNotFoundError | PermissionError | IsADirectoryError | NotADirectoryError | FileExistsError
    ):
        return f"cannot use{where}: {reason.lower()}; check the path and its permissions.", ExitCode.REFUSED
    return (
        f"{reason}{':' if where else ''}{where}; see that disk and folder are in order.",
        ExitCode.INTERNAL_ERROR,
    )


def _line(error: BaseException) -> str:
    return " ".join(str(error).split()) or type(error).__name__
