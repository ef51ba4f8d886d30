"""Noise units against published risk estimates: Stein's unbiased risk estimate and the universal threshold."""

from __future__ import annotations

import numpy as np

from recon.operators.encoding import Encoding
from recon.operators.fourier import transform
from recon.penalties import soft_threshold
from recon.phantom import rasterise
from recon.solver import solve
from recon.statement import Problem
from tests.recon.helpers import complex_normal
from tests.recon.scans import OBJECT


def test_stein_estimate_of_soft_thresholding_is_unbiased() -> None:
    """Stein 1981: E(||f(y) - y||^2 - N + 2 div f) = E ||f(y) - x||^2 for y = x + n, E|n|^2 = 1 (closed form of div)."""
    rng = np.random.default_rng(5)
    x = np.where(rng.random(4000) < 0.1, 5 * complex_normal(rng, (4000,)), 0)
    threshold = 0.9
    gaps = []
    for _ in range(200):
        y = x + complex_normal(rng, x.shape)
        f = soft_threshold(y, threshold)
        size = np.abs(y)
        # half the divergence over real and imaginary parts of y (1 - t / |y|) outside the ball
        divergence = np.sum(np.where(size > threshold, 1 - threshold / (2 * np.maximum(size, threshold)), 0))
        estimate = np.sum(np.abs(f - y) ** 2) - x.size + 2 * divergence
        gaps.append(estimate - np.sum(np.abs(f - x) ** 2))
    error = np.std(gaps) / np.sqrt(len(gaps))
    assert abs(np.mean(gaps)) < 4 * error
    assert error < 0.01 * x.size  # the test can tell a bias of a few percent


def test_monte_carlo_stein_estimate_of_the_solver_is_unbiased() -> None:
    """Ramani, Blu & Unser 2008: div f = Re <b, f(y + e b) - f(y)> / e; here f is the solver, in noise units."""
    rng = np.random.default_rng(6)
    shape = (32, 32)
    encoding = Encoding(np.ones((1, *shape), np.complex64), np.ones(shape, np.bool_))
    truth = 20 * rasterise(OBJECT, shape, supersampling=1)
    clean = transform(truth)[np.newaxis]
    step = 0.1

    def fit(kspace: np.ndarray[tuple[int, ...], np.dtype[np.complex64]]) -> np.ndarray:
        problem = Problem(encoding, encoding.to_range(kspace), "db2", 0.3, 0.3)
        return solve(problem, tolerance=1e-6, max_iterations=400).image

    gaps = []
    for _ in range(24):
        kspace = (clean + complex_normal(rng, clean.shape)).astype(np.complex64)
        probe = complex_normal(rng, clean.shape).astype(np.complex64)
        u, moved = fit(kspace), fit(kspace + np.float32(step) * probe)
        measured = encoding.to_range(kspace)
        divergence = np.vdot(encoding.to_range(probe), encoding.forward(moved - u)).real / step
        residual = np.sum(np.abs(encoding.forward(u) - measured) ** 2)
        estimate = residual - u.size + 2 * divergence
        gaps.append(estimate - np.sum(np.abs(u - truth) ** 2))
    error = np.std(gaps) / np.sqrt(len(gaps))
    assert abs(np.mean(gaps)) < 4 * error
    assert error < 0.03 * truth.size


def test_universal_threshold_removes_noise_alone() -> None:
    """Donoho & Johnstone 1994: sigma sqrt(2 ln N), sigma per real part: sqrt(ln N) where E|n|^2 = 1.

    The probability that the largest of N real parts exceeds it is below 1 / sqrt(pi ln N).
    """
    rng = np.random.default_rng(7)
    count, draws = 4096, 400
    threshold = np.sqrt(np.log(count))
    noise = complex_normal(rng, (draws, count)).real
    left = soft_threshold(noise.astype(np.complex128), float(threshold))
    exceeded = np.mean(np.any(left != 0, axis=1))
    bound = 1 / np.sqrt(np.pi * np.log(count))
    assert exceeded < bound + 3 * np.sqrt(bound / draws)
    smaller = soft_threshold(noise.astype(np.complex128), float(threshold / 1.3))
    assert np.mean(np.any(smaller != 0, axis=1)) > 0.9  # a little less does not do
