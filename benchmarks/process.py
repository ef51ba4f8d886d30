"""One job in a process of its own, file to file: its CPU time, start-up apart, and its peak memory.

    python -m benchmarks.process SCAN IMAGE SETTINGS THREADS

The child prints its figures as one line of JSON. Without SCAN it only imports the program, which is what an idle
computing process holds.
"""

from __future__ import annotations

import json
import resource
import subprocess
import sys
import time
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parent.parent


@dataclass(frozen=True)
class Job:
    """Figures of one process.

    Attributes
    ----------
    cpu_seconds, wall_seconds : float
        From the call to the complete image file.
    startup_seconds : float
        CPU time of the interpreter's start and of all imports.
    peak_bytes : int
        Largest resident size over the life of the process.
    peaks_by_stage : dict
        Largest resident size seen at the progress calls of each stage, in MB.
    planes, iterations : int
    converged_planes : int
    """

    cpu_seconds: float
    wall_seconds: float
    startup_seconds: float
    peak_bytes: int
    peaks_by_stage: dict[str, float]
    planes: int
    iterations: int
    converged_planes: int


def run_job(scan: Path, image: Path, settings: dict[str, Any], *, threads: int = 1) -> Job:
    """Reconstruct a scan file in a process of its own; the image is removed.

    Raises
    ------
    RuntimeError
        When the process fails, with the end of what it said.
    """
    figures = _child([str(scan), str(image), json.dumps(settings), str(threads)])
    image.unlink()
    return figures


def idle_bytes() -> int:
    """Return the peak resident size of a process that has imported the program and done nothing."""
    return _child([]).peak_bytes


def _child(arguments: list[str]) -> Job:
    command = [sys.executable, "-m", "benchmarks.process", *arguments]
    done = subprocess.run(command, capture_output=True, text=True, cwd=ROOT, check=False)
    if done.returncode != 0:
        raise RuntimeError(f"the job's process ended with status {done.returncode}: {done.stderr[-2000:]}")
    return Job(**json.loads(done.stdout))


def peak_bytes() -> int:
    """Return this process's largest resident size so far.

    Linux counts the size of the parent at the moment of the fork into `ru_maxrss`, so its own record is used there.
    """
    status = Path("/proc/self/status")
    if status.exists():
        return _status_bytes(status, "VmHWM")
    unit = 1 if sys.platform == "darwin" else 1024
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * unit


def _status_bytes(status: Path, name: str) -> int:
    (line,) = (line for line in status.read_text().splitlines() if line.startswith(f"{name}:"))
    return int(line.split()[1]) * 1024


def _main(arguments: list[str]) -> Job:
    from recon.pipeline import reconstruct_file
    from recon.settings import parse_settings

    startup = time.process_time()
    if not arguments:
        return Job(0.0, 0.0, startup, peak_bytes(), {}, 0, 0, 0)
    scan, image, settings, threads = arguments
    by_stage: dict[str, float] = {}
    status = Path("/proc/self/status")

    def progress(stage: str, fraction: float) -> None:
        if status.exists() and stage != "solve":  # called in every iteration: reading the size would count
            size = _status_bytes(status, "VmRSS") / 1e6
            by_stage[stage] = max(by_stage.get(stage, 0.0), size)

    wall = time.perf_counter()
    report = reconstruct_file(
        scan, image, parse_settings(json.loads(settings)), progress=progress, threads=int(threads)
    )
    solver = report["solver"]
    return Job(
        cpu_seconds=time.process_time() - startup,
        wall_seconds=time.perf_counter() - wall,
        startup_seconds=startup,
        peak_bytes=peak_bytes(),
        peaks_by_stage=by_stage,
        planes=len(solver["planes"]),
        iterations=solver["iterations"],
        converged_planes=solver["converged_planes"],
    )


if __name__ == "__main__":
    print(json.dumps(asdict(_main(sys.argv[1:]))))
