"""Proximal maps against their definition and an independent program."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from recon.operators.differences import Differences
from recon.operators.wavelet import Wavelet
from recon.penalties import TotalVariation, WaveletL1, project_ball, soft_threshold
from tests.recon.helpers import complex_normal

FINITE = st.floats(-100, 100, allow_subnormal=False)


@given(FINITE, FINITE, st.floats(0, 50))
def test_soft_threshold_shrinks_the_magnitude_and_keeps_the_phase(
    real: float, imaginary: float, t: float
) -> None:
    """Source: closed form: max(|v| - t, 0) in the direction of v (Donoho 1995)."""
    v = np.array([real + 1j * imaginary])
    x = soft_threshold(v, t)
    assert abs(x[0]) == pytest.approx(max(abs(v[0]) - t, 0), abs=1e-9)
    assert (x * v.conj())[0].imag == pytest.approx(0, abs=1e-9)
    assert (x * v.conj())[0].real >= -1e-12


@given(FINITE, FINITE, st.floats(0, 10), st.integers(0, 2**32 - 1))
def test_soft_threshold_minimises_its_objective(real: float, imaginary: float, t: float, seed: int) -> None:
    """Source: the definition: 1/2 |x - v|^2 + t |x| is nowhere lower."""
    v = np.array([real + 1j * imaginary])

    def objective(x: np.ndarray) -> float:
        return float((0.5 * np.abs(x - v) ** 2 + t * np.abs(x)).sum())

    x = soft_threshold(v, t)
    rng = np.random.default_rng(seed)
    for size in (1e-3, 0.1, 10):
        assert objective(x) <= objective(x + size * complex_normal(rng, (1,))) + 1e-9


def test_soft_threshold_of_zero_is_zero_in_both_precisions() -> None:
    for dtype in (np.complex64, np.complex128):
        out = soft_threshold(np.zeros(3, dtype), 0.5)
        assert out.dtype == dtype
        assert not out.any()
        np.testing.assert_array_equal(soft_threshold(np.ones(3, dtype), 0.0), np.ones(3, dtype))


def test_ball_projection_keeps_what_is_inside_and_caps_what_is_not() -> None:
    rng = np.random.default_rng(0)
    p = complex_normal(rng, (2, 6, 7)) * 2
    before = p.copy()
    size = np.sqrt((np.abs(before) ** 2).sum(0))
    out = project_ball(p, 1.5)
    np.testing.assert_allclose(np.sqrt((np.abs(out) ** 2).sum(0)), np.minimum(size, 1.5), atol=1e-12)
    inside = size <= 1.5
    np.testing.assert_allclose(out[:, inside], before[:, inside])


@pytest.mark.parametrize("shape", [(16, 24), (15, 21)])
def test_wavelet_prox_minimises_its_objective_and_reports_the_value(shape: tuple[int, int]) -> None:
    """Source: the definition of a proximal map (Moreau)."""
    rng = np.random.default_rng(1)
    penalty = WaveletL1(Wavelet(shape, "db2"), 0.7)
    v = complex_normal(rng, penalty.transform.domain_shape) * 2
    x, value = penalty.prox(v, 0.6)
    assert value == pytest.approx(penalty.value(x), rel=1e-9)

    def objective(u: np.ndarray) -> float:
        return 0.5 * float(np.linalg.norm(u - v)) ** 2 + 0.6 * penalty.value(u)

    lowest = objective(x)
    for size in (1e-4, 1e-2, 1):
        for _ in range(10):
            assert objective(x + size * complex_normal(rng, x.shape)) > lowest


def test_wavelet_penalty_leaves_the_approximation_free() -> None:
    transform = Wavelet((32, 32), "haar")
    penalty = WaveletL1(transform, 5.0)
    coefficients = np.zeros(transform.range_shape, np.complex128)
    coefficients[tuple(slice(0, n) for n in transform.approximation_shape)] = 3 - 1j
    image = transform.adjoint(coefficients)
    assert penalty.value(image) == pytest.approx(0, abs=1e-9)
    kept, _ = penalty.prox(image, 10.0)
    np.testing.assert_allclose(kept, image, atol=1e-12)


def test_total_variation_is_the_perimeter_times_the_step() -> None:
    """Source: coarea formula; a rectangle along the grid has no metrication error but at one corner."""
    image = np.zeros((20, 30), np.complex128)
    image[5:11, 8:20] = 2j
    tv = TotalVariation(Differences(image.shape), 0.5)
    corner = np.sqrt(2) - 2  # the forward differences meet in one pixel there
    assert tv.value(image) == pytest.approx(0.5 * 2 * (2 * 6 + 2 * 12 + corner), rel=1e-12)
    assert tv.value(np.full((20, 30), 3 + 4j)) == 0
