"""What the automatic strength and mix cost against the best ones, which only the truth could tell.

Both images come from the whole pipeline with the same estimated maps, noise and everything else: one with default
settings, the others with manual strengths from a fine grid of totals and wavelet shares.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np

from benchmarks.anatomy import CASES, HELD_OUT, Case, as_scan, nrmse, simulate
from benchmarks.figures import Bar, Figure, Result, Run
from benchmarks.search import COARSE, FINE, Grid, best_of, side_by_side
from recon.pipeline import reconstruct
from recon.settings import Settings

REDUCED_CASE = Case("sagittal", 0, (96, 88), 2, 25, 5)


def compare(case: Case, grid: Grid) -> dict[str, Any]:
    """Return the error with default settings, and the smallest one on the grid."""
    simulated = simulate(case)
    scan = as_scan(simulated)
    ours = reconstruct(scan, Settings())

    def error(total: float, share: float) -> float:
        manual = Settings(wavelet_strength=share * total, tv_strength=(1 - share) * total)
        return nrmse(reconstruct(scan, manual).image, simulated)[0]

    best = best_of(error, grid)
    ours_error = nrmse(ours.image, simulated)[0]
    chosen = ours.report["settings"]
    return {
        "case": case.name,
        "held_out": case in HELD_OUT,
        "automatic_percent": 100 * ours_error,
        "best_percent": 100 * best.error,
        "ratio": ours_error / best.error,
        "best_total": best.total,
        "best_share": best.share,
        "grid_points": best.points,
        "wavelet_strength": chosen["wavelet_strength"],
        "tv_strength": chosen["tv_strength"],
    }


def table(rows: list[dict[str, Any]]) -> str:
    """Return the cases as text."""
    head = (
        f"{'case':<38}{'automatic':>10}{'best':>8}{'ratio':>8}{'best total, share':>20}{'chosen w, tv':>18}"
    )
    lines = [head]
    for row in rows:
        name = f"{row['case']}{' *' if row['held_out'] else ''}"
        chosen = "  ".join(
            f"{value:.3f}" if isinstance(value, float) else str(value)
            for value in (row["wavelet_strength"], row["tv_strength"])
        )
        lines.append(
            f"{name:<38}{row['automatic_percent']:>9.2f}%{row['best_percent']:>7.2f}%{row['ratio']:>8.3f}"
            f"{row['best_total']:>13.3f}, {row['best_share']:.2f}{chosen:>18}"
        )
    return "\n".join([*lines, "* held out: nothing was chosen with these"])


def measure_automatic(run: Run) -> list[Result]:
    """Mean and worst ratio over the cases, the held-out ones among them."""
    cases = [REDUCED_CASE] if run.reduced else [*CASES, *HELD_OUT]
    grid = COARSE if run.reduced else FINE
    rows = side_by_side(partial(compare, grid=grid), cases, run.processes)
    ratios = [row["ratio"] for row in rows]
    held_out = [row["ratio"] for row in rows if row["held_out"]]
    details: dict[str, Any] = {"cases": rows}
    if held_out:
        details |= {"held_out_mean": float(np.mean(held_out)), "held_out_worst": max(held_out)}
    return [
        Result("automatic-mean", float(np.mean(ratios)), details, table(rows)),
        Result("automatic-worst", max(ratios)),
    ]


def _work(run: Run) -> Callable[[], Any]:
    return partial(reconstruct, as_scan(simulate(REDUCED_CASE if run.reduced else CASES[5])), Settings())


AUTOMATIC = Figure(
    "automatic",
    (
        Bar("automatic-mean", "error with automatic strength and mix over the best, mean", "ratio", 1.05),
        Bar("automatic-worst", "the same, worst case", "ratio", 1.10, 1.05),
    ),
    measure_automatic,
    _work,
)
