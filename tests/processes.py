"""Processes that tests start: free ports, waiting until one serves, ending it."""

from __future__ import annotations

import signal
import socket
import subprocess
import time
from pathlib import Path

import httpx


def heed_interrupts() -> None:
    """For `preexec_fn`: SIGINT works again, also where the tests run in the background of a shell, which ignores it."""
    signal.signal(signal.SIGINT, signal.SIG_DFL)


def free_port() -> int:
    """A port that nothing listens on."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def waited_for(url: str, process: subprocess.Popen[bytes], log: Path, seconds: float = 60.0) -> None:
    """Wait until an address answers 200; the process's log is shown when it does not."""
    deadline = time.monotonic() + seconds
    while time.monotonic() < deadline and process.poll() is None:
        try:
            if httpx.get(url, timeout=5, trust_env=False).is_success:
                return
        except httpx.TransportError:
            pass
        time.sleep(0.1)
    raise AssertionError(
        f"nothing serves at {url} after {seconds} s: {log.read_text(errors='replace')[-3000:]}"
    )


def stop(process: subprocess.Popen[bytes], seconds: float = 30.0) -> None:
    """Ask a process to end, wait, and kill it when it does not."""
    if process.poll() is None:
        process.terminate()
        try:
            process.wait(seconds)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()
