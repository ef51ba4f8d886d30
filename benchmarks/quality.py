"""Errors on real anatomy: zero-filled, best Tikhonov, default settings, and the best that the plain objective can do.

Every case is a scan simulated by `benchmarks.anatomy`. Four images are compared with the truth:

- zero-filled: the linear image without any inversion;
- Tikhonov: the best strength of a grid, found with the truth in hand, with the same coil maps as ours;
- ours: default settings, no knowledge of the truth;
- best possible: the plain objective (no cycle spinning), converged, with the true coil maps and the true noise
  covariance, and the best total strength and wavelet share of a fine grid, found with the truth in hand.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import asdict, dataclass
from functools import partial
from typing import Any, Final

import numpy as np

from benchmarks.anatomy import CASES, Case, SimulatedScan, as_scan, nrmse, simulate
from benchmarks.automatic import REDUCED_CASE
from benchmarks.figures import Bar, Figure, Result, Run
from benchmarks.search import COARSE, FINE, Grid, best_of, side_by_side
from recon.caution import CAUTION
from recon.operators.encoding import Encoding
from recon.pipeline import reconstruct
from recon.settings import Settings
from recon.solver import solve
from recon.statement import Problem, Solution

#: strengths of the linear image.
TIKHONOV: Final = (0.0003, 0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0)
REDUCED_TIKHONOV: Final = (0.001, 0.005, 0.02, 0.1, 0.5)
#: how far each point of the grid is solved.
TOLERANCE: Final = 2e-5
MOST_ITERATIONS: Final = 500
#: low, middle and high acceleration on both pictures.
REDUCED_CASES: Final = (CASES[2], CASES[6], CASES[12])


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
    solutions: list[Solution] = []
    errors: dict[tuple[float, float], tuple[float, float]] = {}

    def error(total: float, share: float) -> float:
        problem = Problem(encoding, data, wavelet, share * total, (1 - share) * total)
        start = solutions[-1] if solutions else None
        solutions[:] = [solve(problem, tolerance=TOLERANCE, max_iterations=MOST_ITERATIONS, start=start)]
        errors[total, share] = nrmse(solutions[0].image / kappa, simulated)
        return errors[total, share][0]

    best = best_of(error, grid)
    return errors[best.total, best.share], best.total, best.share


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
        for strength in (TIKHONOV if grid is FINE else REDUCED_TIKHONOV)
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


def measure_best(run: Run) -> list[Result]:
    """Mean and worst ratio over the cases."""
    cases, grid = ([REDUCED_CASE], COARSE) if run.reduced else (list(CASES), FINE)
    rows = side_by_side(partial(evaluate, grid=grid), cases, run.processes)
    ratios = [row.ratio for row in rows]
    details = {"cases": [asdict(row) | {"ratio": row.ratio} for row in rows]}
    return [
        Result("best-possible-mean", float(np.mean(ratios)), details, table(rows)),
        Result("best-possible-worst", max(ratios)),
    ]


def _work(run: Run) -> Callable[[], Any]:
    return partial(reconstruct, as_scan(simulate(REDUCED_CASE if run.reduced else CASES[5])), Settings())


BEST_POSSIBLE = Figure(
    "best-possible",
    (
        Bar(
            "best-possible-mean",
            "error of the default pipeline over true maps, noise, best strength and mix, mean",
            "ratio",
            1.05,
            1.0,
        ),
        Bar("best-possible-worst", "the same, worst case", "ratio", 1.10),
    ),
    measure_best,
    _work,
)
