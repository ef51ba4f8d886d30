"""Peak memory of problems that have to be solved in one piece, as a multiple of their k-space.

Each scan is reconstructed from file to file in a process of its own; what a process holds that has only imported the
program is told beside it. A few iterations are enough, since the solver allocates everything in its first.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict
from functools import partial
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from benchmarks.anatomy import COILS
from benchmarks.figures import Bar, Figure, Result, Run
from benchmarks.moving import Motion, simulate_series
from benchmarks.process import idle_bytes, run_job
from benchmarks.scan_files import write_volume
from recon.formats import write_scan
from recon.pipeline import reconstruct_file
from recon.settings import parse_settings

ITERATIONS = 12
JOINT: dict[str, Any] = {"volume": "joint", "max_iterations": ITERATIONS}
SERIES: dict[str, Any] = {"temporal_strength": "auto", "max_iterations": ITERATIONS}


def joint_scan(run: Run) -> Path:
    """Write a cube with two phase encodes at R=6."""
    path = run.folder / "joint.h5"
    side, calibration = (24, 10) if run.reduced else (96, 20)
    write_volume(path, matrix=(side, side, side), acceleration=4, calibration=calibration)
    return path


def series_scan(run: Run) -> Path:
    """Write a series of frames."""
    path = run.folder / "series.h5"
    frames, matrix, acceleration = (6, 64, 4) if run.reduced else (32, 128, 6)
    scan = simulate_series(Motion("breathe", acceleration, 30, 301, frames, matrix)).scan
    assert scan.mask_array is not None
    assert scan.noise_array is not None
    kspace, mask, noise = (
        np.asarray(array.data) for array in (scan.kspace_array, scan.mask_array, scan.noise_array)
    )
    axes = scan.kspace_array.axes
    write_scan(path, kspace, axes, mask=mask, mask_axes=scan.mask_array.axes, noise=noise)
    return path


def kspace_bytes(scan: Path) -> int:
    """Return the size of a scan's k-space in complex64."""
    with h5py.File(scan) as file:
        return int(file["kspace"].size) * 8


def _measure(run: Run, name: str, write: Callable[[Run], Path], settings: dict[str, Any]) -> list[Result]:
    scan = write(run)
    size, idle = kspace_bytes(scan), idle_bytes()
    job = run_job(scan, scan.with_suffix(".image.h5"), settings)
    scan.unlink()
    details = asdict(job) | {
        "coils": COILS,
        "kspace_mb": size / 1e6,
        "peak_mb": job.peak_bytes / 1e6,
        "idle_mb": idle / 1e6,
        "multiple_without_idle": (job.peak_bytes - idle) / size,
    }
    return [Result(name, job.peak_bytes / size, details)]


def _work(run: Run, write: Callable[[Run], Path], settings: dict[str, Any]) -> Callable[[], Any]:
    scan = write(run)
    return partial(reconstruct_file, scan, scan.with_suffix(".image.h5"), parse_settings(settings))


def _figure(name: str, what: str, write: Callable[[Run], Path], settings: dict[str, Any]) -> Figure:
    return Figure(
        name,
        (Bar(name, what, "x", 12, 8),),
        partial(_measure, name=name, write=write, settings=settings),
        partial(_work, write=write, settings=settings),
    )


JOINT_VOLUME = _figure(
    "memory-joint", "peak memory over k-space, 3-D joint 8 x 96 x 96 x 96", joint_scan, JOINT
)
JOINT_SERIES = _figure(
    "memory-series", "peak memory over k-space, 2-D + time 8 x 128 x 128 x 32", series_scan, SERIES
)
