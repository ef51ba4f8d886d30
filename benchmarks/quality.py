"""Errors on real anatomy: zero-filled, best Tikhonov, default settings, and the best that the objective can do.

    python -m benchmarks.quality [--reduced] [--output FILE.json] [--processes N]

Every case is a scan simulated by `benchmarks.anatomy`. Four images are compared with the truth:

- zero-filled: the linear image without any inversion;
- Tikhonov: the best strength of a grid, found with the truth in hand, with the same coil maps as ours;
- ours: default settings, no knowledge of the truth;
- best possible: the same objective solved to convergence with the true coil maps and the true noise covariance,
  and the best total strength and wavelet share of a grid, found with the truth in hand.
"""

from __future__ import annotations

import argparse
import json
import platform
import sys
import time
from concurrent.futures import ProcessPoolExecutor
from dataclasses import asdict, dataclass
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
import scipy

from benchmarks.anatomy import CASES, Case, SimulatedScan, as_scan, nrmse, simulate
from recon.caution import CAUTION
from recon.operators.encoding import Encoding
from recon.pipeline import reconstruct
from recon.settings import Settings
from recon.solver import Problem, Solution, solve


@dataclass(frozen=True)
class Grid:
    """Strengths tried with the truth in hand; totals rise until the error does."""

    tikhonov: tuple[float, ...]
    totals: tuple[float, ...]
    shares: tuple[float, ...]
    tolerance: float
    max_iterations: int


FULL_GRID = Grid(
    tikhonov=(0.0003, 0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1, 2),
    totals=(0.02, 0.035, 0.05, 0.07, 0.1, 0.15, 0.2, 0.3, 0.45, 0.7, 1.1, 1.6),
    shares=(0.0, 0.3, 0.45, 0.6),
    tolerance=2e-5,
    max_iterations=500,
)
REDUCED_GRID = Grid(
    tikhonov=(0.001, 0.005, 0.02, 0.1, 0.5),
    totals=(0.05, 0.1, 0.2, 0.4),
    shares=(0.3, 0.5),
    tolerance=1e-4,
    max_iterations=300,
)
#: once the error exceeds the smallest of its share by this factor, stronger penalties are not tried.
RISEN = 1.05
#: low, middle and high acceleration on both pictures.
REDUCED_CASES = (CASES[2], CASES[6], CASES[12])


@dataclass(frozen=True)
class Row:
    """One case of the table. Errors are pairs: at the best scale, and as the image stands."""

    case: str
    zero_filled: tuple[float, float]
    tikhonov: tuple[float, float]
    tikhonov_strength: float
    ours: tuple[float, float]
    best_possible: tuple[float, float]
    best_total: float
    best_wavelet_share: float
    ours_seconds: float
    ours_iterations: int
    ours_converged: bool

    @property
    def ratio(self) -> float:
        """Our error over the best possible one, both at the best scale."""
        return self.ours[0] / self.best_possible[0]


def true_problem(simulated: SimulatedScan) -> tuple[Encoding, np.ndarray[Any, Any], float]:
    """Return encoding and data of a scan in noise units with nothing estimated, and kappa."""
    values, vectors = np.linalg.eigh(simulated.covariance)
    whitener = (vectors / np.sqrt(values)) @ vectors.conj().T
    unit_maps = simulated.maps / np.sqrt(np.sum(np.abs(simulated.maps) ** 2, axis=0))
    whitened = np.tensordot(whitener, unit_maps, axes=1)
    power = np.sum(np.abs(whitened) ** 2, axis=0)
    kappa = float(np.sqrt(np.mean(power[simulated.object_mask])))
    encoding = Encoding((whitened / kappa).astype(np.complex64), simulated.mask)
    data = np.tensordot(whitener, simulated.kspace, axes=1).astype(np.complex64)
    return encoding, encoding.to_range(data), kappa


def best_possible(
    simulated: SimulatedScan, grid: Grid, wavelet: str
) -> tuple[tuple[float, float], float, float]:
    """Return the smallest error on a grid of strengths, with the total and the wavelet share that gave it."""
    encoding, data, kappa = true_problem(simulated)
    best: tuple[tuple[float, float], float, float] = ((np.inf, np.inf), 0.0, 0.0)
    for share in grid.shares:
        start: Solution | None = None
        smallest = np.inf
        for total in grid.totals:
            problem = Problem(encoding, data, wavelet, share * total, (1 - share) * total)
            start = solve(problem, tolerance=grid.tolerance, max_iterations=grid.max_iterations, start=start)
            error = nrmse(start.image / kappa, simulated)
            smallest = min(smallest, error[0])
            if error[0] < best[0][0]:
                best = (error, total, share)
            if error[0] > RISEN * smallest:
                break
    return best


def evaluate(case: Case, grid: Grid) -> Row:
    """Return one row of the table."""
    simulated = simulate(case)
    scan = as_scan(simulated)
    started = time.perf_counter()
    ours = reconstruct(scan, Settings())
    seconds = time.perf_counter() - started
    zero_filled = reconstruct(scan, Settings(method="zero-filled"))
    linear = {
        strength: nrmse(
            reconstruct(scan, Settings(method="tikhonov", tikhonov_strength=strength)).image, simulated
        )
        for strength in grid.tikhonov
    }
    strength = min(linear, key=lambda s: linear[s][0])
    best, total, share = best_possible(simulated, grid, Settings().wavelet)
    solver = ours.report["solver"]
    return Row(
        case=case.name,
        zero_filled=nrmse(zero_filled.image, simulated),
        tikhonov=linear[strength],
        tikhonov_strength=strength,
        ours=nrmse(ours.image, simulated),
        best_possible=best,
        best_total=total,
        best_wavelet_share=share,
        ours_seconds=seconds,
        ours_iterations=solver["iterations"],
        ours_converged=solver["converged_planes"] == 1,
    )


def table(rows: list[Row]) -> str:
    """Return the table as text: errors in percent, scaled (unscaled)."""
    head = f"{'case':<36}{'zero-filled':>15}{'Tikhonov':>15}{'ours':>15}{'best possible':>15}{'ratio':>7}{'time':>8}"
    lines = ["NRMSE in %, best scale (unscaled), magnitudes in the object", "", head, "-" * len(head)]
    for row in rows:
        errors = (row.zero_filled, row.tikhonov, row.ours, row.best_possible)
        shown = "".join(f"{f'{100 * a:.2f} ({100 * b:.2f})':>15}" for a, b in errors)
        lines.append(f"{row.case:<36}{shown}{row.ratio:>7.3f}{row.ours_seconds:>6.1f} s")
    ratios = [row.ratio for row in rows]
    beaten = sum(row.ours[0] < row.tikhonov[0] for row in rows)
    lines += [
        "-" * len(head),
        f"ours / best possible: mean {np.mean(ratios):.3f}, worst {max(ratios):.3f}",
        f"ours below the best Tikhonov in {beaten} of {len(rows)} cases",
        CAUTION,
    ]
    return "\n".join(lines)


def machine() -> dict[str, Any]:
    """Return what a reader needs to compare times: no names of machine or user."""
    return {
        "architecture": platform.machine(),
        "system": platform.system(),
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
    }


def main(arguments: list[str] | None = None) -> int:
    """Print the table and write the figures; exit status 1 when a limit is missed."""
    parser = argparse.ArgumentParser(description="Error table on real anatomy.")
    parser.add_argument("--reduced", action="store_true", help="three cases and a coarse grid")
    parser.add_argument("--output", type=Path, help="write the figures as JSON")
    parser.add_argument("--processes", type=int, default=1, help="cases computed side by side")
    options = parser.parse_args(arguments)
    grid, cases = (REDUCED_GRID, REDUCED_CASES) if options.reduced else (FULL_GRID, CASES)
    if options.processes > 1:
        with ProcessPoolExecutor(options.processes) as pool:
            rows = list(pool.map(partial(evaluate, grid=grid), cases))
    else:
        rows = [evaluate(case, grid) for case in cases]
    print(table(rows))
    ratios = [row.ratio for row in rows]
    figures = {
        "caution": CAUTION,
        "rows": [asdict(row) | {"ratio": row.ratio} for row in rows],
        "ratio_mean": float(np.mean(ratios)),
        "ratio_worst": max(ratios),
        "grid": asdict(grid),
        "machine": machine(),
    }
    if options.output:
        options.output.write_text(json.dumps(figures, indent=2) + "\n")
    passed = (
        all(row.ours[0] < row.tikhonov[0] for row in rows) and np.mean(ratios) <= 1.10 and max(ratios) <= 1.25
    )
    return 0 if passed else 1


if __name__ == "__main__":
    sys.exit(main())
