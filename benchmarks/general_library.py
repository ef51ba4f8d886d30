"""Time to a small objective gap against a general-purpose library of operators and proximal maps.

The rival is PyProximal's primal-dual solver (Chambolle & Pock 2011) on PyLops operators, with the very operators of
this program inside: encoding, wavelet, differences. Both minimise the plain objective (no cycle spinning) of the same
slice from a cold start. The rival gets the settings that were fastest for it: the data term is either one more dual
block, or a proximal map solved by conjugate gradients that start from the previous answer; primal and dual step are
balanced by a factor; the adaptive variant finds the balance itself. The fastest few are run each time (`RIVALS`, which
`python -m benchmarks.general_library` ranks anew), the best of them counts. The dual map of the wavelet term is that
of a group norm of groups of one, since the library's l1 norm clips real and imaginary parts apart.

The gap is (objective - optimum) / optimum, judged in double precision by the plain forms of `recon.penalties`; finding
out when it is reached costs neither side any time.
"""

from __future__ import annotations

import contextlib
import time
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from typing import Any, Final

import numpy as np
import pylops
import pyproximal
from numpy.typing import NDArray
from pyproximal.optimization.cls_primaldual import AdaptivePrimalDual, PrimalDual

from benchmarks.anatomy import simulate
from benchmarks.figures import Bar, Figure, Result, Run
from benchmarks.machine import cpu_seconds
from benchmarks.scan_files import large_case
from benchmarks.solving import NEVER, iterations_to, stated_problem
from recon.operators.base import LinearOperator, norm
from recon.operators.differences import Differences
from recon.operators.wavelet import Wavelet
from recon.penalties import TotalVariation, WaveletL1
from recon.solver import solve
from recon.statement import Problem

GAP: Final = 1e-3
SNR: Final = 40
#: iterations of the library between two looks at its objective: of some hundreds, so little is lost.
JUDGED_EVERY: Final = 3


class Wrapped(pylops.LinearOperator):  # type: ignore[misc]
    """One of this program's operators as the library takes it: vectors in, vectors out."""

    def __init__(self, operator: LinearOperator) -> None:
        self.inside = operator
        super().__init__(dtype=np.complex64, dims=operator.domain_shape, dimsd=operator.range_shape)

    def _matvec(self, x: NDArray[Any]) -> NDArray[Any]:
        shaped = x.reshape(self.inside.domain_shape).astype(np.complex64, copy=False)
        return self.inside.forward(shaped).ravel()

    def _rmatvec(self, y: NDArray[Any]) -> NDArray[Any]:
        shaped = y.reshape(self.inside.range_shape).astype(np.complex64, copy=False)
        return self.inside.adjoint(shaped).ravel()


@dataclass(frozen=True)
class Rival:
    """Settings of the library's solver.

    Attributes
    ----------
    inner : int
        Conjugate-gradient iterations of the data term's proximal map; 0: the data term is a dual block.
    balance : float
        Primal over dual step: tau = balance / ||K||, mu = 1 / (balance ||K||), K being the stacked operator.
    is_adaptive : bool
        The adaptive variant, which changes the balance as it goes.
    """

    inner: int
    balance: float
    is_adaptive: bool = False

    @property
    def name(self) -> str:
        data = f"data by {self.inner} conjugate gradients" if self.inner else "data as a dual block"
        return f"{data}, balance {self.balance:g}{', adaptive' if self.is_adaptive else ''}"


#: all that were tried.
TRIED: Final = tuple(
    Rival(inner, balance, is_adaptive)
    for inner in (0, 1, 2, 3, 4, 6)
    for balance in (20.0, 10.0, 30.0, 60.0, 100.0, 3.0, 1.0)
    for is_adaptive in (False, True)
)
#: the fastest of them, the best first; and the fastest without an inner solver.
RIVALS: Final = (Rival(3, 20.0), Rival(2, 20.0), Rival(4, 30.0), Rival(0, 10.0))


class ReachedError(Exception):
    """Stops the library's solver from its callback."""


def plain_problem(run: Run) -> Problem:
    """Return the plain objective of one slice: lines at R=4, default strengths."""
    stated = stated_problem(simulate(large_case(90, SNR, 41, matrix=64 if run.reduced else 256)))
    strengths = stated.wavelet_strength, stated.tv_strength
    return Problem(stated.encoding, stated.data, stated.wavelet, *strengths)


def objective(problem: Problem, image: NDArray[Any]) -> float:
    """The objective in double precision, every term by its plain form; for sizes on which the wavelet fits."""
    u = image.reshape(problem.encoding.domain_shape).astype(np.complex128)
    residual = problem.encoding.forward(u) - problem.data
    outside = ~np.any(problem.encoding.maps != 0, axis=0)
    shape = problem.encoding.domain_shape
    penalties = (
        WaveletL1(Wavelet(shape, problem.wavelet), problem.wavelet_strength),
        TotalVariation(Differences(shape), problem.tv_strength),
    )
    data = 0.5 * norm(residual) ** 2 + 0.5 * norm(u[outside]) ** 2
    return data + sum(penalty.value(u) for penalty in penalties)


def run_rival(problem: Problem, rival: Rival, seen: Callable[[NDArray[Any]], None], iterations: int) -> None:
    """Run the library's solver from zero; `seen` gets each iterate."""
    shape = problem.encoding.domain_shape
    outside = ~np.any(problem.encoding.maps != 0, axis=0)
    encoding = Wrapped(problem.encoding)
    data = problem.data.ravel()
    if outside.any():
        beyond = pylops.Diagonal(outside.ravel().astype(np.complex64), dtype=np.complex64)
        encoding = pylops.VStack([encoding, beyond], dtype=np.complex64)
        data = np.concatenate([data, np.zeros(outside.size, np.complex64)])
    wavelet = Wavelet(shape, problem.wavelet)
    is_detail = np.ones(wavelet.range_shape, np.bool_)
    is_detail[tuple(slice(0, n) for n in wavelet.approximation_shape)] = False
    kept = np.flatnonzero(is_detail.ravel())
    details = pylops.Restriction(is_detail.size, kept, dtype=np.complex64) @ Wrapped(wavelet)
    differences = Differences(shape)
    blocks: list[Any] = [details, Wrapped(differences)]
    terms: list[Any] = [
        pyproximal.L21(ndim=1, sigma=problem.wavelet_strength),
        pyproximal.L21(ndim=2, sigma=problem.tv_strength),
    ]
    squared = 1 + differences.bound
    if rival.inner:
        first = pyproximal.L2(Op=encoding, b=data, niter=rival.inner, warm=True, solver="cg")
    else:
        first = pyproximal.L2(sigma=0.0)
        blocks.append(encoding)
        terms.append(pyproximal.L2(b=data))
        squared += problem.encoding.squared_norm_bound()
    stacked = pylops.VStack(blocks, dtype=np.complex64)
    together = pyproximal.VStack(terms, nn=[block.shape[0] for block in blocks])
    bound = float(np.sqrt(squared)) * 1.001
    steps = {"tau": rival.balance / bound, "mu": 1 / (rival.balance * bound)}
    solver = AdaptivePrimalDual() if rival.is_adaptive else PrimalDual()
    solver.callback = lambda x, *_: seen(x)
    start = np.zeros(stacked.shape[1], np.complex64)
    solver.solve(first, together, stacked, start, **steps, niter=iterations)


def time_rival(problem: Problem, rival: Rival, goal: float, most: float) -> tuple[float, int, float]:
    """Return CPU seconds and iterations until the objective is at the goal, and the objective then.

    The seconds are infinite where `most` of them do not suffice. Judging is left out of them.
    """
    state = {"count": 0, "judging": 0.0, "seconds": np.inf, "value": np.inf}
    started = time.process_time()

    def seen(x: NDArray[Any]) -> None:
        now = time.process_time()
        state["count"] += 1
        if state["count"] % JUDGED_EVERY:
            return
        state["value"] = objective(problem, x)
        elapsed = now - started - state["judging"]
        if state["value"] <= goal:
            state["seconds"] = elapsed
            raise ReachedError
        if elapsed > most:
            raise ReachedError
        state["judging"] += time.process_time() - now

    with contextlib.suppress(ReachedError):
        run_rival(problem, rival, seen, 100_000)
    return float(state["seconds"]), int(state["count"]), float(state["value"])


def time_ours(problem: Problem, goal: float, repeats: int) -> tuple[float, int]:
    """Return CPU seconds and iterations of this program's solver to the goal."""

    def image(iterations: int) -> NDArray[Any]:
        return solve(problem, tolerance=NEVER, max_iterations=iterations).image

    count = iterations_to(lambda n: objective(problem, image(n)) <= goal, 2000)
    return cpu_seconds(partial(image, count), repeats), count


def rank(
    problem: Problem, rivals: tuple[Rival, ...], goal: float, tell: Callable[[str], None] | None = None
) -> list[dict[str, Any]]:
    """Time all rivals, the fastest first; each is given up at twice the time of the best so far."""
    rows: list[dict[str, Any]] = []
    best = np.inf
    for rival in rivals:
        seconds, iterations, _ = time_rival(problem, rival, goal, 2 * best)
        best = min(best, seconds)
        rows.append({"settings": rival.name, "library_seconds": seconds, "iterations": iterations})
        if tell is not None:
            tell(f"{seconds:8.2f} s {iterations:5d} iterations  {rival.name}")
    reached = [row for row in rows if np.isfinite(row["library_seconds"])]
    return sorted(reached, key=lambda row: float(row["library_seconds"]))


def measure_library(run: Run) -> list[Result]:
    """The library's time over ours."""
    problem = plain_problem(run)
    optimum = objective(problem, solve(problem, tolerance=1e-6, max_iterations=2000).image)
    goal = optimum * (1 + GAP)
    seconds, iterations = time_ours(problem, goal, run.times(5))
    rivals = rank(problem, RIVALS[:1] if run.reduced else RIVALS, goal)
    details = {"ours_seconds": seconds, "iterations": iterations, "optimum": optimum, "rivals": rivals}
    return [Result("general-library", rivals[0]["library_seconds"] / seconds, details)]


def _work(run: Run) -> Callable[[], Any]:
    return partial(solve, plain_problem(run), tolerance=NEVER, max_iterations=30)


GENERAL_LIBRARY = Figure(
    "general-library",
    (
        Bar(
            "general-library",
            "times faster to a gap of 0.001 than a general library",
            "x",
            20,
            50,
            at_least=True,
        ),
    ),
    measure_library,
    _work,
)

if __name__ == "__main__":
    from pathlib import Path

    the_problem = plain_problem(Run(False, None, 1, Path()))
    the_goal = objective(the_problem, solve(the_problem, tolerance=1e-6, max_iterations=2000).image) * (
        1 + GAP
    )
    rank(the_problem, TRIED, the_goal, print)
