"""Accelerated proximal gradient for the wavelet-l1 + total-variation problem.

    minimise over u   1/2 ||E u - d||^2 + lambda_w ||W u~||_1 (detail coefficients) + lambda_t TV(u)

u~ is u with the margin that brings its size to one on which W is orthogonal; the margin is free (it costs nothing in
the data term), so nothing is assumed about what lies beyond the border. Sizes that fit have no margin.

Method: FISTA (Beck & Teboulle 2009) with gradient restart (O'Donoghue & Candes 2015). The proximal map of the two
penalties together has no closed form: for a dual field p of the TV term the wavelet part is exact, so a few
projected-gradient steps on p, warm-started from the previous iteration, are enough (Beck & Teboulle 2009, TV).
All gradients are of the quadratic form, so the gradient at the extrapolated point is the same extrapolation of two
known gradients: one normal operator for each iteration, and none for the optimality residual.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any, Final, Literal

import numpy as np
from numpy.typing import NDArray

from recon.operators.base import inner, norm
from recon.operators.differences import Differences
from recon.operators.encoding import Encoding
from recon.operators.wavelet import Wavelet
from recon.penalties import TotalVariation, WaveletL1, project_ball

#: dual steps for each proximal map; two were the cheapest on heads of two scanners (three: as many iterations).
DUAL_STEPS: Final = 2
#: step of the dual gradient, just below its limit of 2 / ||D||^2.
DUAL_STEP: Final = 1.9 / Differences.BOUND

StopReason = Literal["optimal", "iteration-limit", "nothing-to-solve"]


@dataclass(frozen=True)
class Problem:
    """One plane's problem.

    Attributes
    ----------
    encoding : Encoding
    data : complex ndarray
        Whitened samples in the range of `encoding` (see `Encoding.to_range`).
    wavelet : str
    wavelet_strength, tv_strength : float
        lambda_w and lambda_t, in noise units.
    """

    encoding: Encoding
    data: NDArray[Any]
    wavelet: str
    wavelet_strength: float
    tv_strength: float


@dataclass(frozen=True)
class Solution:
    """What the solver returns; not having converged is a value here, not an exception.

    Attributes
    ----------
    image : complex ndarray (rows, columns)
        u, in noise units.
    padded, dual : ndarray
        Full primal and dual state, for warm starts.
    objective : list of float
        Objective after each iteration.
    optimality : float
        Relative optimality residual at the end (see `solve`).
    iterations : int
    stop_reason : {"optimal", "iteration-limit", "nothing-to-solve"}
    """

    image: NDArray[Any]
    padded: NDArray[Any]
    dual: NDArray[Any]
    objective: list[float] = field(repr=False)
    optimality: float
    iterations: int
    stop_reason: StopReason


def solve(
    problem: Problem,
    *,
    tolerance: float,
    max_iterations: int,
    start: Solution | None = None,
    callback: Callable[[int, float], None] | None = None,
) -> Solution:
    """Minimise the objective of the module's docstring.

    Stops when the relative optimality residual falls below `tolerance`:

        max( ||g(x) + s|| / ||E^H d||,  (lambda_t TV(x) - Re <p, D x>) / objective ) < tolerance

    g is the gradient of the data term, s the subgradient of the penalties that the proximal map supplies, and p the
    dual field of the TV term. The first says how far s is from cancelling g; the second, never negative, how far p is
    from being a subgradient of TV at x. Both are zero exactly at the minimiser.

    Parameters
    ----------
    problem : Problem
    tolerance : float
    max_iterations : int
    start : Solution, optional
        Warm start from the solution of a neighbouring problem of the same shape and wavelet.
    callback : callable, optional
        Called as `callback(iteration, optimality)` after each iteration; raise from it to cancel.

    Returns
    -------
    Solution
    """
    state = _Iteration(problem, start)
    if state.scale == 0.0:
        return state.solution("nothing-to-solve")
    for iteration in range(1, max_iterations + 1):
        state.step()
        if callback is not None:
            callback(iteration, state.optimality)
        if state.optimality < tolerance:
            return state.solution("optimal")
    return state.solution("iteration-limit")


class _Iteration:
    """State of the iteration and its pure arithmetic. x, y, p, g, t as in the papers named above."""

    def __init__(self, problem: Problem, start: Solution | None) -> None:
        encoding = problem.encoding
        self.encoding = encoding
        rows, columns = encoding.domain_shape
        self.shape = (rows, columns)
        transform = Wavelet(self.shape, problem.wavelet)
        has_wavelet = problem.wavelet_strength > 0 and transform.levels > 0
        self.wavelet = WaveletL1(transform, problem.wavelet_strength) if has_wavelet else None
        differences = Differences(self.shape)
        self.tv = TotalVariation(differences, problem.tv_strength) if problem.tv_strength > 0 else None
        self.padded_shape = transform.domain_shape if has_wavelet else self.shape
        self.window = tuple(slice(0, n) for n in self.shape)

        self.b = self._embed(encoding.adjoint(problem.data))
        self.data_energy = norm(problem.data) ** 2
        self.scale = norm(self.b)
        self.lipschitz = self.b.real.dtype.type(encoding.squared_norm_bound())
        self.x = np.zeros_like(self.b) if start is None else start.padded.copy()
        self.p = np.zeros((2, *self.shape), self.b.dtype) if start is None else start.dual.copy()
        self.hx = self._normal(self.x)
        self.x_before, self.hx_before = self.x, self.hx
        self.t = 1.0
        self.iterations = 0
        self.optimality = np.inf
        self.objective: list[float] = []

    def step(self) -> None:
        """One accelerated proximal-gradient step with restart, and the optimality residual at its end."""
        t_next = (1 + np.sqrt(1 + 4 * self.t**2)) / 2
        beta = self.b.real.dtype.type((self.t - 1) / t_next)
        y = self.x + beta * (self.x - self.x_before)
        g = self.hx + beta * (self.hx - self.hx_before) - self.b
        x, gap, penalty = self._prox(y - g / self.lipschitz)
        hx = self._normal(x)
        if inner(y - x, x - self.x).real > 0:
            t_next = 1.0
        # the proximal map's own optimality condition supplies the subgradient s = L (y - x) - g(y)
        stationarity = norm(self.lipschitz * (y - x) - g + (hx - self.b)) / self.scale
        data_term = 0.5 * (inner(x, hx).real + self.data_energy) - inner(x, self.b).real
        objective = data_term + penalty
        self.objective.append(objective)
        self.optimality = max(stationarity, gap / max(objective, np.finfo(np.float64).tiny))
        self.x_before, self.hx_before, self.x, self.hx, self.t = self.x, self.hx, x, hx, t_next
        self.iterations += 1

    def _prox(self, v: NDArray[Any]) -> tuple[NDArray[Any], float, float]:
        """Proximal map of both penalties with step 1/L; also the TV term's duality gap and the penalties' value."""
        step = 1.0 / float(self.lipschitz)
        if self.tv is None:
            x, cost = self._prox_wavelet(v, step)
            return x, 0.0, cost
        # the dual field is kept free of the step: |p| <= lambda_t, and enters as p / L
        D, p, sigma = self.tv.differences, self.p, self.lipschitz * self.b.real.dtype.type(DUAL_STEP)
        for _ in range(DUAL_STEPS):
            x, _ = self._prox_wavelet(self._minus_adjoint(v, p), step)
            gradient = D.forward(x[self.window])
            p = project_ball(p + sigma * gradient, self.tv.strength)
        x, wavelet_cost = self._prox_wavelet(self._minus_adjoint(v, p), step)
        gradient = D.forward(x[self.window])
        self.p = p
        tv_cost = self.tv.cost(gradient)
        return x, tv_cost - inner(p, gradient).real, wavelet_cost + tv_cost

    def _prox_wavelet(self, v: NDArray[Any], step: float) -> tuple[NDArray[Any], float]:
        return (v, 0.0) if self.wavelet is None else self.wavelet.prox(v, step)

    def _minus_adjoint(self, v: NDArray[Any], p: NDArray[Any]) -> NDArray[Any]:
        assert self.tv is not None
        out = v.copy()
        out[self.window] -= self.tv.differences.adjoint(p) / self.lipschitz
        return out

    def _normal(self, x: NDArray[Any]) -> NDArray[Any]:
        return self._embed(self.encoding.normal(x[self.window]))

    def _embed(self, image: NDArray[Any]) -> NDArray[Any]:
        if self.padded_shape == self.shape:
            return image
        out = np.zeros(self.padded_shape, image.dtype)
        out[self.window] = image
        return out

    def solution(self, reason: StopReason) -> Solution:
        """Freeze the state."""
        return Solution(
            image=self.x[self.window].copy(),
            padded=self.x,
            dual=self.p,
            objective=self.objective,
            optimality=0.0 if reason == "nothing-to-solve" else float(self.optimality),
            iterations=self.iterations,
            stop_reason=reason,
        )
