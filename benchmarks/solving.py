"""Time of the solve alone: one slice from a cold start to within 0.3 % of the converged image.

The problem is the one that the pipeline states with default settings, strengths, maps and noise units included; it is
taken from there. The answer is the same solver's, run to a far smaller residual. Distances are of magnitudes, where the
object exceeds a tenth of its maximum. Only the solver's own work is timed; the number of iterations that it needs is
found beforehand.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any
from unittest import mock

import numpy as np
from numpy.typing import NDArray

from benchmarks.anatomy import SimulatedScan, as_scan, nrmse, simulate
from benchmarks.figures import Bar, Figure, Result, Run
from benchmarks.machine import cpu_seconds
from benchmarks.scan_files import large_case
from recon import plane
from recon.pipeline import reconstruct
from recon.settings import Settings
from recon.solver import solve
from recon.statement import Problem

CLOSE = 3e-3
SNRS = (30, 80)
CONVERGED = 2e-6
MOST_ITERATIONS = 1500
#: never reached, so that `max_iterations` alone decides.
NEVER = 1e-30


def stated_problem(simulated: SimulatedScan) -> Problem:
    """Return the problem whose solution the pipeline writes as the image, with default settings.

    Raises
    ------
    RuntimeError
        When the pipeline no longer hands its problem to `recon.plane.solve`.
    """
    problems: list[Problem] = []

    def keep(problem: Problem, **options: Any) -> Any:
        problems.append(problem)
        return solve(problem, **(options | {"max_iterations": min(3, options["max_iterations"])}))

    with mock.patch.object(plane, "solve", keep):
        reconstruct(as_scan(simulated), Settings())
    if not problems:
        raise RuntimeError(
            "the pipeline solved nothing through recon.plane.solve; take its problem from where it does"
        )
    return problems[-1]


def distance(image: NDArray[Any], answer: NDArray[Any], inside: NDArray[np.bool_]) -> float:
    """Return || |a| - |b| || / || b || over the object."""
    a, b = np.abs(image)[inside].astype(np.float64), np.abs(answer)[inside].astype(np.float64)
    return float(np.linalg.norm(a - b) / np.linalg.norm(b))


def iterations_to(is_close: Callable[[int], bool], most: int) -> int:
    """Return the smallest number of iterations after which the solver is close, by doubling and halving.

    Raises
    ------
    RuntimeError
        When it is not close after `most`.
    """
    high = 8
    while not is_close(high):
        if high >= most:
            raise RuntimeError(f"not close to the answer after {most} iterations")
        high = min(2 * high, most)
    low = high // 2 if high > 8 else 0
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if is_close(middle) else (middle, high)
    return high


def _after(problem: Problem, iterations: int) -> NDArray[Any]:
    return solve(problem, tolerance=NEVER, max_iterations=iterations).image


def measure_case(run: Run, snr: float, *, points: bool) -> dict[str, Any]:
    """Return iterations and CPU seconds to come close, and where the default tolerance stops."""
    simulated = simulate(large_case(90, snr, 41, matrix=64 if run.reduced else 256, points=points))
    problem = stated_problem(simulated)
    goal = 1e-4 if run.reduced else CONVERGED
    answer = solve(problem, tolerance=goal, max_iterations=MOST_ITERATIONS)
    inside = simulated.object_mask

    def is_close(iterations: int) -> bool:
        return distance(_after(problem, iterations), answer.image, inside) < CLOSE

    count = iterations_to(is_close, MOST_ITERATIONS)
    seconds = cpu_seconds(partial(_after, problem, count), run.times(5))
    settings = Settings()
    stop = partial(solve, problem, tolerance=settings.tolerance, max_iterations=settings.max_iterations)
    stopped = stop()
    return {
        "snr": snr,
        "iterations": count,
        "close_seconds": seconds,
        "answer_iterations": answer.iterations,
        "answer_optimality": answer.optimality,
        "wavelet_strength": problem.wavelet_strength,
        "tv_strength": problem.tv_strength,
        "default_stop_iterations": stopped.iterations,
        "default_stop_distance": distance(stopped.image, answer.image, inside),
        "default_stop_seconds": cpu_seconds(stop, run.times(3)),
        "error_percent": 100 * nrmse(answer.image, simulated)[0],
    }


def _measure(run: Run, name: str, *, points: bool) -> list[Result]:
    cases = [measure_case(run, snr, points=points) for snr in SNRS]
    return [Result(name, max(case["close_seconds"] for case in cases), {"cases": cases})]


def _work(run: Run, *, points: bool) -> Callable[[], Any]:
    simulated = simulate(large_case(90, SNRS[0], 41, matrix=64 if run.reduced else 256, points=points))
    return partial(_after, stated_problem(simulated), 40)


LINES = Figure(
    "solve-lines",
    (Bar("solve-lines", "solve to 0.3 %, 8 x 256 x 256, lines R=4", "U", 60, 30),),
    partial(_measure, name="solve-lines", points=False),
    partial(_work, points=False),
)
POINTS = Figure(
    "solve-points",
    (Bar("solve-points", "solve to 0.3 %, 8 x 256 x 256, points R=4", "U", 110, 60),),
    partial(_measure, name="solve-points", points=True),
    partial(_work, points=True),
)
