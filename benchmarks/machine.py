"""The yardstick that times are measured in, CPU time, and what a reader must know of the machine."""

from __future__ import annotations

import os
import platform
import statistics
import time
from collections.abc import Callable
from typing import Any

import numba
import numpy as np
import scipy
import scipy.fft

COILS, ROWS, COLUMNS = 8, 256, 256


def yardstick(repeats: int = 15) -> float:
    """Return U in CPU seconds: the median time of fft2 and ifft2 over 8 x 256 x 256 complex64, one thread."""
    data = np.ones((COILS, ROWS, COLUMNS), np.complex64)
    times = []
    for _ in range(repeats):
        started = time.process_time()
        scipy.fft.ifft2(scipy.fft.fft2(data, workers=1), workers=1)
        times.append(time.process_time() - started)
    return statistics.median(times)


def cpu_seconds(work: Callable[[], Any], repeats: int) -> float:
    """Return the median CPU time of this process, all its threads together, over some calls."""
    times = []
    for _ in range(repeats):
        started = time.process_time()
        work()
        times.append(time.process_time() - started)
    return statistics.median(times)


def facts() -> dict[str, Any]:
    """Return what a reader needs to compare times: no names of machine or user."""
    return {
        "architecture": platform.machine(),
        "cores": os.cpu_count(),
        "system": platform.system(),
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
        "numba": numba.__version__,
    }
