"""Print the service's usual port when it is free, else another free one."""

import socket

from service.settings import DEFAULT_HOST, DEFAULT_PORT


def free_port() -> int:
    """A port that nothing listens on."""
    for port in (DEFAULT_PORT, 0):
        with socket.socket() as probe:
            probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
            try:
                probe.bind((DEFAULT_HOST, port))
            except OSError:
                continue
            return int(probe.getsockname()[1])
    raise SystemExit("No port is free on this machine: stop a service and try again.")


print(free_port())
