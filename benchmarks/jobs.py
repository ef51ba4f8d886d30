"""Whole jobs, file to file, each in a process of its own: time for each slice, a volume, and growth with slices.

The time is the CPU time of all threads of the process, from the call to the complete image file; the interpreter's
start and the imports are told beside it. A small job beforehand fills the cache of compiled kernels.
"""

from __future__ import annotations

import statistics
from collections.abc import Callable
from dataclasses import asdict
from functools import partial
from pathlib import Path
from typing import Any

from benchmarks.figures import Bar, Figure, Result, Run
from benchmarks.process import Job, run_job
from benchmarks.scan_files import write_slices, write_volume
from recon.pipeline import reconstruct_file
from recon.settings import parse_settings

#: strengths of the job with fixed strength: those that suit the SNR of the simulated volume.
FIXED: dict[str, Any] = {"wavelet_strength": 0.08, "tv_strength": 0.09}


def repeated(
    scan: Path, settings: dict[str, Any], times: int, *, threads: int = 1
) -> tuple[Job, list[float]]:
    """Return the job with the median CPU time of some runs, and the CPU times of all."""
    jobs = [run_job(scan, scan.with_suffix(".image.h5"), settings, threads=threads) for _ in range(times)]
    seconds = [job.cpu_seconds for job in jobs]
    median = statistics.median_low(seconds)
    return next(job for job in jobs if job.cpu_seconds == median), seconds


def warm_up(run: Run) -> None:
    """Fill the cache of compiled kernels, whose compilation happens once for each installation."""
    if run.reduced:
        return
    scan = run.folder / "warm-up.h5"
    write_slices(scan, slices=1, matrix=64)
    run_job(scan, scan.with_suffix(".image.h5"), {"max_iterations": 2})
    scan.unlink()


def _slices_file(run: Run, slices: int, matrix: int) -> Path:
    path = run.folder / f"slices-{slices}-{matrix}.h5"
    if not path.exists():
        write_slices(path, slices=slices, matrix=matrix)
    return path


def _pipeline_size(run: Run) -> tuple[int, int]:
    return (2, 64) if run.reduced else (64, 256)


def measure_pipeline(run: Run) -> list[Result]:
    """CPU seconds for each slice of a scan of many, default settings."""
    warm_up(run)
    slices, matrix = _pipeline_size(run)
    scan = _slices_file(run, slices, matrix)
    job, seconds = repeated(scan, {}, run.times(1))
    details = asdict(job) | {
        "slices": slices,
        "matrix": matrix,
        "runs": [value / slices for value in seconds],
        "with_startup_per_slice_seconds": (job.cpu_seconds + job.startup_seconds) / slices,
        "iterations_per_slice": job.iterations / slices,
    }
    scan.unlink()
    return [Result("pipeline", job.cpu_seconds / slices, details)]


def _volume_file(run: Run) -> Path:
    path = run.folder / "volume.h5"
    matrix, calibration = ((24, 32, 12), 10) if run.reduced else ((160, 256, 256), 24)
    write_volume(path, matrix=matrix, acceleration=6, calibration=calibration)
    return path


def measure_volume(run: Run) -> list[Result]:
    """CPU seconds of a whole volume with two phase encodes, solved plane by plane along the readout."""
    warm_up(run)
    scan = _volume_file(run)
    job, seconds = repeated(scan, {"volume": "planes", **FIXED}, run.times(1))
    size = scan.stat().st_size / 1e6
    scan.unlink()
    return [Result("volume", job.cpu_seconds, asdict(job) | {"runs": seconds, "scan_mb": size})]


def measure_growth(run: Run) -> list[Result]:
    """Time for each slice, and peak memory, of a scan of many slices over those of a scan of few.

    Time at a matrix of 128 with default settings; memory at 256, two iterations for each slice, since neither the
    strengths nor the iterations change what is kept.
    """
    warm_up(run)
    few, many = (1, 3) if run.reduced else (8, 128)
    small, large = (48, 48) if run.reduced else (128, 256)
    timed, weighed = {}, {}
    for slices in (few, many):
        scan = _slices_file(run, slices, small)
        # the shorter job is the noisier one
        job, _ = repeated(scan, {}, run.times(3 if slices == few else 1))
        timed[slices] = job.cpu_seconds / slices
        scan.unlink(missing_ok=True)
        scan = _slices_file(run, slices, large)
        weighed[slices] = run_job(scan, scan.with_suffix(".image.h5"), {**FIXED, "max_iterations": 2})
        scan.unlink(missing_ok=True)
    peaks = {slices: job.peak_bytes / 1e6 for slices, job in weighed.items()}
    return [
        Result(
            "slices-time",
            timed[many] / timed[few],
            {"few": few, "many": many, "few_seconds": timed[few], "many_seconds": timed[many]},
        ),
        Result(
            "slices-memory",
            peaks[many] / peaks[few],
            {"few": few, "many": many, "few_mb": peaks[few], "many_mb": peaks[many]},
        ),
    ]


def _job_work(scan: Path, settings: dict[str, Any]) -> Callable[[], Any]:
    return partial(reconstruct_file, scan, scan.with_suffix(".image.h5"), parse_settings(settings))


def _pipeline_work(run: Run) -> Callable[[], Any]:
    slices, matrix = _pipeline_size(run)
    return _job_work(_slices_file(run, min(slices, 8), matrix), {})


def _volume_work(run: Run) -> Callable[[], Any]:
    return _job_work(_volume_file(run), {"volume": "planes", **FIXED})


PIPELINE = Figure(
    "pipeline",
    (Bar("pipeline", "whole pipeline for each slice of 64, 8 x 256 x 256", "U", 200, 100),),
    measure_pipeline,
    _pipeline_work,
)
VOLUME = Figure(
    "volume",
    (Bar("volume", "whole job, 8 x 256 x 160 x 256, points R=6", "U", 20_000, 10_000),),
    measure_volume,
    _volume_work,
)
GROWTH = Figure(
    "slices",
    (
        Bar("slices-time", "time for each slice, 128 slices over 8", "ratio", 1.10),
        Bar("slices-memory", "peak memory, 128 slices over 8", "ratio", 1.10),
    ),
    measure_growth,
    _pipeline_work,
)
