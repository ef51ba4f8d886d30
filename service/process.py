"""Child processes: how they are started, limited and tied to the life of their parent."""

from __future__ import annotations

import ctypes
import os
import resource
import signal
import sys
from typing import Final

_PR_SET_PDEATHSIG: Final = 1


def python_command(module: str, *arguments: str) -> list[str]:
    """Command line that runs a module of ours.

    ``-P`` keeps the working folder off the import path: a file `recon.py` there is a user's own.
    """
    return [sys.executable, "-P", "-m", module, *arguments]


def die_with_parent(parent: int, with_signal: signal.Signals = signal.SIGKILL) -> None:
    """Have the kernel send this process a signal when the process (or thread) that started it ends.

    Parameters
    ----------
    parent : int
        Process that started this one; when it has ended before, this one ends at once.
    """
    libc = ctypes.CDLL(None, use_errno=True)
    if libc.prctl(_PR_SET_PDEATHSIG, int(with_signal), 0, 0, 0) != 0:
        raise OSError(ctypes.get_errno(), "the kernel refuses to tie this process to its parent")
    if os.getppid() != parent:
        os._exit(1)


def limit(*, memory: int, seconds: int, file_bytes: int, files: int) -> None:
    """Limit this process for good: address space, processor time, size of a written file, open files; no core dump."""
    for kind, soft, hard in (
        (resource.RLIMIT_AS, memory, memory),
        # Between the two the process gets SIGXCPU, which tells its parent why it ended; then it is killed.
        (resource.RLIMIT_CPU, seconds, seconds + 1),
        (resource.RLIMIT_FSIZE, file_bytes, file_bytes),
        (resource.RLIMIT_NOFILE, files, files),
        (resource.RLIMIT_CORE, 0, 0),
    ):
        _, highest = resource.getrlimit(kind)
        bound = hard if highest == resource.RLIM_INFINITY else min(hard, highest)
        resource.setrlimit(kind, (min(soft, bound), bound))


def private_output() -> int:
    """Keep standard output for the parent alone: whatever libraries print goes to standard error.

    Returns
    -------
    int
        Descriptor that the parent reads.
    """
    descriptor = os.dup(1)
    os.dup2(2, 1)
    return descriptor


def how_it_ended(returncode: int) -> str:
    """Say how a process ended."""
    if returncode >= 0:
        return f"exit status {returncode}"
    try:
        return f"signal {-returncode} ({signal.Signals(-returncode).name})"
    except ValueError:
        return f"signal {-returncode}"
