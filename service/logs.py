"""The log: lines on standard error, quiet by default."""

from __future__ import annotations

import logging
import time


def configure_logging() -> None:
    """Send what `fallow` logs to standard error, one line each, in UTC."""
    log = logging.getLogger("fallow")
    if log.handlers:
        return
    handler = logging.StreamHandler()
    formatter = logging.Formatter("%(asctime)s %(levelname)s %(message)s", datefmt="%Y-%m-%dT%H:%M:%SZ")
    formatter.converter = time.gmtime
    handler.setFormatter(formatter)
    log.addHandler(handler)
    log.setLevel(logging.INFO)
    log.propagate = False
