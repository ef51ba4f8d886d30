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

from recon import kernels
from recon.operators.base import norm
from recon.operators.differences import Differences
from recon.operators.encoding import Encoding
from recon.operators.wavelet import Wavelet

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
    """State of the iteration and its arithmetic. x, p, g, t as in the papers named above.

    Arrays are padded images of three axes (a plane has one slab); the compiled loops see them as real numbers.
    """

    def __init__(self, problem: Problem, start: Solution | None) -> None:
        encoding = problem.encoding
        self.encoding = encoding
        rows, columns = encoding.domain_shape
        self.transform = Wavelet((rows, columns), problem.wavelet)
        self.wavelet_strength = problem.wavelet_strength if self.transform.levels > 0 else 0.0
        self.tv_strength = problem.tv_strength
        self.shape = (rows, columns)
        self.padded_shape = self.transform.domain_shape if self.wavelet_strength > 0 else self.shape
        self.window = tuple(slice(0, n) for n in self.shape)

        self.b = self._embed(encoding.adjoint(problem.data))
        self.real = self.b.real.dtype.type
        self.weights = np.ones(3, self.real)
        self.data_energy = norm(problem.data) ** 2
        self.scale = norm(self.b)
        self.lipschitz = self.real(encoding.squared_norm_bound())
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
        beta, step = self.real((self.t - 1) / t_next), self.real(1 / self.lipschitz)
        state = (_flat(self.x), _flat(self.x_before), _flat(self.hx), _flat(self.hx_before), _flat(self.b))
        v = np.empty_like(self.b)
        kernels.extrapolated_step(*state, beta, step, _flat(v))
        x, gap, penalty = self._prox(v)
        hx = self._normal(x)
        # the proximal map's own optimality condition supplies the subgradient s = L (y - x) - g(y) = L (v - x)
        sums = kernels.progress_sums(
            _flat(x),
            _flat(hx),
            _flat(v),
            _flat(self.b),
            _flat(self.x),
            _flat(self.x_before),
            beta,
            self.lipschitz,
        )
        stationarity, quadratic, linear, restart = sums
        if restart > 0:
            t_next = 1.0
        objective = 0.5 * (quadratic + self.data_energy) - linear + penalty
        self.objective.append(objective)
        tiny = np.finfo(np.float64).tiny
        self.optimality = max(np.sqrt(stationarity) / self.scale, gap / max(objective, tiny))
        self.x_before, self.hx_before, self.x, self.hx, self.t = self.x, self.hx, x, hx, t_next
        self.iterations += 1

    def _prox(self, v: NDArray[Any]) -> tuple[NDArray[Any], float, float]:
        """Proximal map of both penalties with step 1/L; also the TV term's duality gap and the penalties' value."""
        x = np.empty_like(v)
        if self.tv_strength == 0:
            x[...] = v
            return x, 0.0, self._prox_wavelet(x)
        # the dual field is kept free of the step: |p| <= lambda_t, and enters as p / L
        p, inverse, radius = _deep(self.p), self.real(1 / self.lipschitz), self.real(self.tv_strength)
        sigma, none = self.real(DUAL_STEP * self.lipschitz), self.real(0)
        for _ in range(DUAL_STEPS):
            kernels.subtract_divergence(_deep(v), p, inverse, self.weights, _deep(x))
            self._prox_wavelet(x)
            kernels.ascend_dual(p, _deep(x), sigma, self.weights, radius, none, True)
        kernels.subtract_divergence(_deep(v), p, inverse, self.weights, _deep(x))
        wavelet_cost = self._prox_wavelet(x)
        variation, _, product = kernels.variation_sums(p, _deep(x), self.weights, True)
        tv_cost = self.tv_strength * variation
        return x, tv_cost - product, wavelet_cost + tv_cost

    def _prox_wavelet(self, x: NDArray[Any]) -> float:
        """Exact proximal map of the wavelet term with step 1/L, in place; returns its value."""
        if self.wavelet_strength == 0:
            return 0.0
        real, (low, high) = _deep(x), self.transform.filters(self.b.dtype)
        rows, columns = self.transform.approximation_shape
        kernels.analyse(real, low, high, self.transform.levels)
        size = kernels.shrink(real, self.real(self.wavelet_strength / self.lipschitz), (1, rows, columns))
        kernels.synthesise(real, low, high, self.transform.levels)
        return self.wavelet_strength * size

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


def _flat(x: NDArray[Any]) -> NDArray[Any]:
    """All entries as real numbers in one row."""
    return x.reshape(-1).view(x.real.dtype)


def _deep(x: NDArray[Any]) -> NDArray[Any]:
    """A plane, or a field of planes, as real numbers with a slab axis before the rows."""
    return x.view(x.real.dtype)[..., np.newaxis, :, :]
