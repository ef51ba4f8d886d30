"""Accelerated proximal gradient for the wavelet-l1 + total-variation problem.

    minimise over u   1/2 ||E u - d||^2 + 1/2 ||u outside the maps||^2 + lambda_w / S sum_s ||W T_s u~||_1 (details)
                      + lambda_t TV(u) + lambda_f TV_frames(u) + lambda_r ||u||_*
    subject to        nothing, or u~ real, or u~ real and u >= 0

T_s are circular shifts of u~ (see `recon.shifts`); S is 1 unless cycle spinning is asked for. Of the wavelet terms the
first is exact inside the proximal map; the other shifts, and with u >= 0 all of them, are dual fields like that of TV.

u is a plane, a volume (TV isotropic over three axes, W along all of them) or a series of planes (TV and W in each
frame; total variation along the frames and the nuclear norm of the matrix (frame, pixel) join the frames).

u~ is u with the margin that brings its size to one on which W is orthogonal; the margin is free (it costs nothing in
the data term), so nothing is assumed about what lies beyond the border. Sizes that fit have no margin.

Method: proximal gradient with momentum. The momentum is the whole last step until it points uphill, and then starts
anew (greedy FISTA of Liang, Luo & Schoenlieb 2022, with the step 1/L; restart by O'Donoghue & Candes 2015): it needs
20 to 35 % fewer iterations here than the growing momentum of FISTA (Beck & Teboulle 2009), but can run in circles where
the proximal map is not exact: then FISTA's, with the same restart, takes over for good. The proximal map of all
penalties together has no closed form: for a dual field p of the TV term the wavelet part is exact, so one or a few
projected-gradient steps on p, warm-started from the previous iteration, are enough (Beck & Teboulle 2009, TV).
All gradients are of the quadratic form, so the gradient at the extrapolated point is the same extrapolation of two
known gradients: one normal operator for each iteration, and none for the optimality residual.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from recon import kernels
from recon.compiled import as_slabs
from recon.operators.base import inner, norm
from recon.operators.wavelet import Wavelet
from recon.penalties import nuclear_norm, project_spectral
from recon.shifts import ShiftedWavelets, shift_set
from recon.statement import Problem, Solution, StopReason

#: dual steps for each proximal map to begin with: on simulated scans of two heads, fifteen saved no iteration.
DUAL_STEPS: Final = 1
#: the same where the field has three components: frames far apart in the chain hear of each other step by step.
DUAL_STEPS_OF_THREE: Final = 6
#: the same where u >= 0 leaves the wavelet term to a dual field: half the time of one step on simulated scans.
DUAL_STEPS_OF_NONNEGATIVE: Final = 3
#: one step more whenever the optimality has not fallen by a fifth in this many iterations; and no more than so many.
PATIENCE: Final = 10
MOST_DUAL_STEPS: Final = 4
#: the same where wavelet terms have dual fields too, or the field has three components: four do not converge there.
MOST_DUAL_STEPS_OF_MANY: Final = 12
#: where convergence is slow, a cold start begins with all strengths this much larger, and lets them fall by this factor
#: in each iteration (continuation: Hale, Yin & Zhang 2008): up to a third of the iterations saved.
FIRST_FACTOR: Final = 32.0
FACTOR_DECAY: Final = 0.8
#: slow are planes of whole readouts, no more than this part of them measured; others only lose by it.
SLOW_FRACTION: Final = 0.3
#: nor is it worth it where the solve is stopped soon.
FEWEST_ITERATIONS: Final = 50
#: step of the dual gradient as a fraction of 1 / ||K||^2, K being all operators inside the dual terms; 2 is its limit.
DUAL_STEP: Final = 1.9


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

        max( ||g(x) + s|| / ||E^H d||,  (h(K x) - Re <p, K x>) / objective ) < tolerance

    g is the gradient of the data term, s the subgradient of the penalties that the proximal map supplies, h(K x) all
    penalties but the wavelet's and p their dual field. The first says how far s is from cancelling g; the second, never
    negative, how far p is from being a subgradient of h at K x. Both are zero exactly at the minimiser.

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
    state = _Iteration(problem, start, is_long=max_iterations >= FEWEST_ITERATIONS)
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
    """State of the iteration and its arithmetic. x, p, g as in the papers named above.

    Arrays are padded images of three axes (a plane has one slab); the compiled loops see them as real numbers.
    """

    def __init__(self, problem: Problem, start: Solution | None, *, is_long: bool = True) -> None:
        encoding = problem.encoding
        self.encoding = encoding
        self.problem = problem
        self.shape = encoding.domain_shape
        is_volume = encoding.depth == "volume"
        self.transform = Wavelet(self.shape, problem.wavelet, along_slabs=is_volume)
        self.wavelet_strength = problem.wavelet_strength if self.transform.levels > 0 else 0.0
        self.padded_shape = self.transform.domain_shape if self.wavelet_strength > 0 else self.shape
        self.window = tuple(slice(0, n) for n in self.shape)

        self.is_real, self.is_nonnegative = problem.constraint != "none", problem.constraint == "nonnegative"
        self.b = self._embed(self._projected(encoding.adjoint(problem.data)))
        self.real = self.b.real.dtype.type
        self._set_shifts(start)
        self._set_variation(is_volume)
        self.data_energy = norm(problem.data) ** 2
        self.scale = norm(self.b)
        self.lipschitz = self.real(encoding.squared_norm_bound())
        self.x = np.zeros_like(self.b) if start is None else start.padded.copy()
        axes = 3 if len(self.shape) == 3 and self.shape[0] > 1 else 2
        self.p = np.zeros((axes, *self.shape), self.b.dtype) if start is None else start.dual.copy()
        self.q = None
        if problem.low_rank_strength > 0:
            known = None if start is None else start.low_rank_dual
            self.q = np.zeros(self.shape, self.b.dtype) if known is None else known.copy()
        for array in (self.x, self.p, self.q):
            if array is not None:
                self._projected(array)  # a start may come from a problem without the constraint
        self.hx = self._normal(self.x)
        self.x_before, self.hx_before = self.x, self.hx
        is_slow = is_long and start is None and self._converges_slowly()
        self.factor = FIRST_FACTOR if is_slow else 1.0
        few = DUAL_STEPS_OF_NONNEGATIVE if self.is_nonnegative else DUAL_STEPS
        self.dual_steps = few if len(self.p) == 2 else DUAL_STEPS_OF_THREE
        self.is_greedy, self.t = True, 1.0
        self.best, self.since_best = np.inf, 0
        self.iterations = 0
        self.optimality = np.inf
        self.objective: list[float] = []

    def _set_shifts(self, start: Solution | None) -> None:
        """Split the wavelet term into the one that is exact and those with dual fields."""
        problem, self.shifted = self.problem, None
        if self.wavelet_strength == 0:
            return
        shifts = shift_set(self.transform, problem.wavelet_shifts)
        share = self.wavelet_strength / len(shifts)
        # the proximal map of the exact term does not go with u >= 0
        self.wavelet_strength = 0.0 if self.is_nonnegative else share
        rest = shifts if self.is_nonnegative else shifts[1:]
        if rest:
            known = None if start is None or start.shift_duals is None else start.shift_duals.copy()
            self.shifted = ShiftedWavelets(
                self.transform,
                rest,
                share,
                frames=self.encoding.depth == "series",
                dtype=self.b.dtype,
                known=None if known is None else self._projected(known),
            )

    def _set_variation(self, is_volume: bool) -> None:
        """Weights and radii of the dual field; a term of strength zero has weight zero, so its field stays zero."""
        problem, slabs = self.problem, self.shape[0] if len(self.shape) == 3 else 1
        inside = problem.tv_strength
        along = problem.tv_strength if is_volume else problem.temporal_strength
        pairs = zip(problem.weights, (along, inside, inside), strict=True)
        weights = [weight if strength > 0 else 0.0 for weight, strength in pairs]
        if slabs == 1:
            weights[0] = 0.0
        self.is_joint = is_volume
        self.weights = np.array(weights, self.real)
        self.radius, self.slab_radius = self.real(inside or 1.0), self.real(along or 1.0)
        squared_norm = 4 * sum(weight**2 for weight in weights) + (1 if problem.low_rank_strength > 0 else 0)
        squared_norm += 0 if self.shifted is None else len(self.shifted.shifts)
        self.has_dual = squared_norm > 0
        self.dual_step = DUAL_STEP / squared_norm if self.has_dual else 0.0

    def _converges_slowly(self) -> bool:
        """Whether strengths are worth being lowered step by step from far above their values."""
        encoding = self.encoding
        is_lines = encoding.axes == (-2,) and (len(self.shape) == 2 or self.shape[0] == 1)
        has_penalty = self.has_dual or self.wavelet_strength > 0
        measured = float(np.mean(encoding.weight != 0))
        return is_lines and has_penalty and not self.is_real and measured <= SLOW_FRACTION

    def step(self) -> None:
        """One accelerated proximal-gradient step with restart, and the optimality residual at its end."""
        t_next = (1 + np.sqrt(1 + 4 * self.t**2)) / 2
        beta = self.real(1.0 if self.is_greedy else (self.t - 1) / t_next)
        step = self.real(1 / self.lipschitz)
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
        objective = 0.5 * (quadratic + self.data_energy) - linear + penalty
        self.objective.append(objective)
        tiny = np.finfo(np.float64).tiny
        stationarity, gap = np.sqrt(stationarity) / self.scale, gap / max(objective, tiny)
        self.optimality = max(stationarity, gap)
        # an inexact proximal map stalls the acceleration in the end: make it more exact when that happens
        self.since_best += 1
        if self.factor > 1:
            # so far the optimality is that of another problem
            self.optimality = max(self.optimality, 1.0)
            self.factor, self.since_best = max(1.0, self.factor * FACTOR_DECAY), 0
        elif self.optimality < 0.8 * self.best:
            self.best, self.since_best = self.optimality, 0
        elif self.since_best >= PATIENCE:
            is_simple = self.shifted is None and len(self.p) == 2
            most = MOST_DUAL_STEPS if is_simple else MOST_DUAL_STEPS_OF_MANY
            self.is_greedy = self.is_greedy and self.dual_steps < MOST_DUAL_STEPS
            self.dual_steps, self.since_best = min(self.dual_steps + 1, most), 0
        is_uphill = restart > 0
        self.t = 1.0 if self.is_greedy or is_uphill else t_next
        self.x_before, self.hx_before = (x, hx) if is_uphill else (self.x, self.hx)
        self.x, self.hx = x, hx
        self.iterations += 1

    def _prox(self, v: NDArray[Any]) -> tuple[NDArray[Any], float, float]:
        """Proximal map of both penalties with step 1/L; also the TV term's duality gap and the penalties' value."""
        x = np.empty_like(v)
        if not self.has_dual:
            x[...] = v
            return x, 0.0, self._prox_exact(x)
        # the dual fields are kept free of the step: they are bounded by the strengths, and enter divided by L
        p, sigma, factor = (
            _deep_field(self.p),
            self.real(self.dual_step * self.lipschitz),
            self.real(self.factor),
        )
        for _ in range(self.dual_steps):
            self._minus_dual(v, x)
            self._prox_exact(x)
            radius, slab_radius = self.radius * factor, self.slab_radius * factor
            kernels.ascend_dual(p, as_slabs(x), sigma, self.weights, radius, slab_radius, self.is_joint)
            if self.q is not None:
                strength = self.problem.low_rank_strength * self.factor
                self.q = project_spectral(self.q + sigma * x[self.window], strength)
            if self.shifted is not None:
                self.shifted.ascend(x, sigma, self.factor)
        self._minus_dual(v, x)
        cost = self._prox_exact(x)
        inside, along, product = kernels.variation_sums(p, as_slabs(x), self.weights, self.is_joint)
        penalty = float(self.radius) * inside + float(self.slab_radius) * along
        if self.q is not None:
            penalty += self.problem.low_rank_strength * nuclear_norm(x[self.window])
            product += inner(self.q, np.ascontiguousarray(x[self.window])).real
        if self.shifted is not None:
            size, dot = self.shifted.sums(x)
            penalty, product = penalty + size, product + dot
        return x, penalty - product, cost + penalty

    def _minus_dual(self, v: NDArray[Any], out: NDArray[Any]) -> None:
        """out = v - K^H (p, q) / L."""
        inverse = self.real(1 / self.lipschitz)
        kernels.subtract_divergence(as_slabs(v), _deep_field(self.p), inverse, self.weights, as_slabs(out))
        if self.q is not None:
            out[self.window] -= inverse * self.q
        if self.shifted is not None:
            kernels.subtract(_flat(out), inverse, _flat(self.shifted.sum))

    def _prox_exact(self, x: NDArray[Any]) -> float:
        """Exact proximal map, in place, of the wavelet term with step 1/L, or of u >= 0; returns the term's value."""
        if self.is_nonnegative:
            inside = x[self.window].real
            np.maximum(inside, 0, out=inside)
        if self.wavelet_strength == 0:
            return 0.0
        real = as_slabs(x)
        slabs, rows, columns = (1, *self.transform.approximation_shape)[-3:]
        if self.encoding.depth == "series":
            slabs = len(real)  # each frame has its own approximation
        self.transform.analyse(x)
        threshold = self.real(self.wavelet_strength * self.factor / self.lipschitz)
        size = kernels.shrink(real, threshold, (slabs, rows, columns))
        self.transform.synthesise(x)
        return self.wavelet_strength * size

    def _normal(self, x: NDArray[Any]) -> NDArray[Any]:
        return self._embed(self._projected(self.encoding.normal(x[self.window])))

    def _projected(self, image: NDArray[Any]) -> NDArray[Any]:
        """The real part, in place, where the image is constrained to it: all that follows then stays real."""
        if self.is_real:
            image.imag = 0
        return image

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
            low_rank_dual=self.q,
            objective=self.objective,
            optimality=0.0 if reason == "nothing-to-solve" else float(self.optimality),
            iterations=self.iterations,
            stop_reason=reason,
            shift_duals=None if self.shifted is None else self.shifted.fields,
        )


def _flat(x: NDArray[Any]) -> NDArray[Any]:
    """All entries as real numbers in one row."""
    return x.reshape(-1).view(x.real.dtype)


def _deep_field(p: NDArray[Any]) -> NDArray[Any]:
    """A field of planes or volumes as real numbers with four axes."""
    real = p.view(p.real.dtype)
    return real if real.ndim == 4 else real[:, np.newaxis]
