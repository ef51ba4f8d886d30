"""Wait until the service at an address is ready: `wait_ready.py URL PID`. Fails when it ends, or after a minute."""

import os
import sys
import time

import httpx


def is_alive(process: int) -> bool:
    """Whether a process is running."""
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    return True


def wait_ready(url: str, process: int, seconds: float = 60.0) -> bool:
    """Whether the service became ready in time."""
    deadline = time.monotonic() + seconds
    with httpx.Client(timeout=5.0, trust_env=False) as client:
        while is_alive(process) and time.monotonic() < deadline:
            try:
                if client.get(f"{url}/health/ready").is_success:
                    return True
            except httpx.TransportError:
                pass
            time.sleep(0.1)
    return False


if __name__ == "__main__":
    sys.exit(not wait_ready(sys.argv[1], int(sys.argv[2])))
