"""The compiled loops against the same arithmetic in NumPy, on planes and on volumes."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import pywt

from recon import kernels
from recon.operators import filters
from recon.operators.differences import Differences
from recon.penalties import TotalVariation, project_ball, soft_threshold
from tests.recon.helpers import Array, complex_normal

SHAPES = [(1, 7, 9), (1, 1, 6), (1, 5, 1), (3, 6, 5), (4, 1, 1)]
DTYPES = [np.complex64, np.complex128]
WEIGHTS = np.array([0.7, 1.0, 1.3])


def reals(x: Array) -> Array:
    """Return complex numbers as pairs of reals along the last axis."""
    return x.view(x.real.dtype)


def gradient(x: Array, axes: int) -> Array:
    """Return weighted forward differences, zero across borders; the last `axes` of the three axes."""
    parts = []
    for axis in range(3 - axes, 3):
        part = np.zeros_like(x)
        inner = [slice(None)] * 3
        inner[axis] = slice(0, x.shape[axis] - 1)
        part[tuple(inner)] = WEIGHTS[axis] * np.diff(x, axis=axis)
        parts.append(part)
    return np.stack(parts)


def dual_field(rng: np.random.Generator, shape: tuple[int, ...], dtype: Any, axes: int) -> Array:
    """Return a random field with zeros across the borders, as the loops expect."""
    p = complex_normal(rng, (axes, *shape), dtype)
    for k, axis in enumerate(range(3 - axes, 3)):
        last = [slice(None)] * 3
        last[axis] = slice(shape[axis] - 1, None)
        p[k][tuple(last)] = 0
    return p


def limit(dtype: Any) -> float:
    return 2e-5 if dtype == np.complex64 else 1e-12


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("margin", [0, 3])
def test_divergence_is_the_adjoint_of_the_differences(
    shape: tuple[int, int, int], dtype: Any, margin: int
) -> None:
    """Source: linear algebra: <D x, p> = <x, D^H p>, and the margin is left alone."""
    rng = np.random.default_rng(0)
    axes = 3 if shape[0] > 1 else 2
    p = dual_field(rng, shape, dtype, axes)
    padded = (shape[0], shape[1] + margin, shape[2] + margin)
    v = complex_normal(rng, padded, dtype)
    out = np.empty_like(v)
    weights = WEIGHTS.astype(v.real.dtype)
    kernels.subtract_divergence(reals(v), reals(p), v.real.dtype.type(0.5), weights, reals(out))
    window = tuple(slice(0, n) for n in shape)
    x = complex_normal(rng, shape, np.complex128)
    applied = (v - out)[window] / 0.5
    assert np.vdot(gradient(x, axes), p) == pytest.approx(
        np.vdot(x, applied), rel=limit(dtype), abs=10 * limit(dtype)
    )
    outside = np.ones(padded, bool)
    outside[window] = False
    np.testing.assert_array_equal(out[outside], v[outside])


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("is_joint", [True, False])
def test_dual_ascent_is_a_step_and_a_projection(
    shape: tuple[int, int, int], dtype: Any, is_joint: bool
) -> None:
    rng = np.random.default_rng(1)
    axes = 3 if shape[0] > 1 else 2
    p, x = dual_field(rng, shape, dtype, axes), complex_normal(rng, shape, dtype)
    moved = p + 0.4 * gradient(x, axes)
    real = x.real.dtype.type
    if is_joint or axes == 2:
        size = np.sqrt((np.abs(moved) ** 2).sum(axis=0))
        expected = moved * np.minimum(1, 0.6 / np.maximum(size, 1e-30))
    else:
        size = np.sqrt((np.abs(moved[1:]) ** 2).sum(axis=0))
        expected = moved * np.minimum(1, 0.6 / np.maximum(size, 1e-30))
        expected[0] = moved[0] * np.minimum(1, 0.3 / np.maximum(np.abs(moved[0]), 1e-30))
    kernels.ascend_dual(reals(p), reals(x), real(0.4), WEIGHTS.astype(real), real(0.6), real(0.3), is_joint)
    np.testing.assert_allclose(p, expected, atol=limit(dtype))


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("is_joint", [True, False])
def test_variation_sums(shape: tuple[int, int, int], is_joint: bool) -> None:
    rng = np.random.default_rng(2)
    axes = 3 if shape[0] > 1 else 2
    p, x = dual_field(rng, shape, np.complex128, axes), complex_normal(rng, shape)
    d = gradient(x, axes)
    joint, apart, product = kernels.variation_sums(reals(p), reals(x), WEIGHTS, is_joint)
    together = d if is_joint or axes == 2 else d[1:]
    assert joint == pytest.approx(np.sqrt((np.abs(together) ** 2).sum(axis=0)).sum(), rel=1e-12)
    assert apart == pytest.approx(0.0 if is_joint or axes == 2 else np.abs(d[0]).sum(), rel=1e-12)
    assert product == pytest.approx(np.vdot(p, d).real, rel=1e-12, abs=1e-12)


def test_plane_loops_say_the_same_as_the_readable_penalties() -> None:
    rng = np.random.default_rng(3)
    x, weights = complex_normal(rng, (8, 11)), np.ones(3)
    differences = Differences((8, 11))
    p = dual_field(rng, (1, 8, 11), np.complex128, 2)
    expected = project_ball(p[:, 0] + 0.3 * differences.forward(x), 0.5)
    kernels.ascend_dual(reals(p), reals(x[None]), 0.3, weights, 0.5, 0.0, True)
    np.testing.assert_allclose(p[:, 0], expected, atol=1e-12)
    total, _, _ = kernels.variation_sums(reals(p), reals(x[None]), weights, True)
    assert 0.7 * total == pytest.approx(TotalVariation(differences, 0.7).value(x), rel=1e-12)


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("threshold", [0.4, 50.0])
def test_shrink_is_soft_thresholding_outside_the_corner(dtype: Any, threshold: float) -> None:
    x = complex_normal(np.random.default_rng(4), (3, 8, 6), dtype)
    x[0, 5, 5] = 0
    expected = soft_threshold(x, threshold)
    expected[:2, :4, :3] = x[:2, :4, :3]
    left = kernels.shrink(reals(x), x.real.dtype.type(threshold), (2, 4, 3))
    np.testing.assert_allclose(x, expected, atol=limit(dtype))
    penalised = np.ones(x.shape, bool)
    penalised[:2, :4, :3] = False
    assert left == pytest.approx(np.abs(expected[penalised]).sum(), rel=1e-5, abs=1e-12)


@pytest.mark.parametrize("name", ["haar", "db2", "db4", "sym5", "coif2", "db10"])
@pytest.mark.parametrize("dtype", DTYPES)
def test_wavelet_loops_equal_pywavelets(name: str, dtype: Any) -> None:
    """Source: PyWavelets dwt2, mode periodization, block by block, on each slab of a volume."""
    wavelet = pywt.Wavelet(name)
    x = complex_normal(np.random.default_rng(5), (2, 32, 40), dtype)
    low, high = (np.array(f, x.real.dtype) for f in (wavelet.dec_lo, wavelet.dec_hi))
    out = x.copy()
    filters.analyse(reals(out), low, high, 1, 0)
    for slab, found in zip(x, out, strict=True):
        approximation, (horizontal, vertical, diagonal) = pywt.dwt2(slab, wavelet, mode="periodization")
        np.testing.assert_allclose(found[:16, :20], approximation, atol=10 * limit(dtype))
        np.testing.assert_allclose(found[16:, :20], horizontal, atol=10 * limit(dtype))
        np.testing.assert_allclose(found[:16, 20:], vertical, atol=10 * limit(dtype))
        np.testing.assert_allclose(found[16:, 20:], diagonal, atol=10 * limit(dtype))
    filters.synthesise(reals(out), low, high, 1, 0)
    np.testing.assert_allclose(out, x, atol=10 * limit(dtype))


@pytest.mark.parametrize("dtype", DTYPES)
def test_extrapolated_step_and_progress_sums(dtype: Any) -> None:
    rng = np.random.default_rng(6)
    x, before, hx, hbefore, b, new, hnew = (complex_normal(rng, (5000,), dtype) for _ in range(7))
    real = x.real.dtype.type
    beta, step = real(0.3), real(0.25)
    v = np.empty_like(x)
    state = (reals(x), reals(before), reals(hx), reals(hbefore), reals(b))
    kernels.extrapolated_step(*state, beta, step, reals(v))
    y, g = x + 0.3 * (x - before), hx + 0.3 * (hx - hbefore) - b
    np.testing.assert_allclose(v, y - 0.25 * g, atol=limit(dtype))
    judged = (reals(new), reals(hnew), reals(v), reals(b), reals(x), reals(before))
    found = kernels.progress_sums(*judged, beta, real(4.0))
    expected = (
        np.linalg.norm(4 * (v - new) + hnew - b) ** 2,
        np.vdot(new, hnew).real,
        np.vdot(new, b).real,
        np.vdot(y - new, new - x).real,
    )
    np.testing.assert_allclose(found, expected, rtol=1e-4 if dtype == np.complex64 else 1e-10, atol=0.05)


@pytest.mark.parametrize("dtype", DTYPES)
def test_complex_products(dtype: Any) -> None:
    rng = np.random.default_rng(7)
    a, x, y = (complex_normal(rng, (101,), dtype) for _ in range(3))
    out = np.empty_like(x)
    kernels.weigh(reals(a), reals(x), reals(out))
    np.testing.assert_allclose(out, a * x, atol=limit(dtype))
    total = y.copy()
    kernels.add_conjugate(reals(a), reals(x), reals(total))
    np.testing.assert_allclose(total, y + a.conj() * x, atol=limit(dtype))


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("columns", [1, 5])
def test_scale_is_a_product_with_real_numbers(dtype: Any, columns: int) -> None:
    rng = np.random.default_rng(8)
    x = complex_normal(rng, (2, 6, 5), dtype)
    factor = rng.integers(0, 3, (2, 6, columns)).astype(x.real.dtype)
    expected = x * factor
    kernels.scale(reals(x), factor)
    np.testing.assert_allclose(x, expected, atol=limit(dtype))


@pytest.mark.parametrize("dtype", DTYPES)
def test_dual_coefficients_are_projected_outside_the_corner(dtype: Any) -> None:
    """A step, then the nearest coefficients of at most the radius; what is not penalised has no dual."""
    rng = np.random.default_rng(9)
    q, c = complex_normal(rng, (2, 8, 6), dtype), complex_normal(rng, (2, 8, 6), dtype)
    free = np.zeros(q.shape, bool)
    free[:1, :4, :3] = True
    moved = np.where(free, 0, q + 0.7 * c)
    expected = moved * np.minimum(1, 0.5 / np.maximum(np.abs(moved), 1e-30))
    real = q.real.dtype.type
    kernels.ascend_coefficients(reals(q), reals(c), real(0.7), real(0.5), (1, 4, 3))
    np.testing.assert_allclose(q, expected, atol=limit(dtype))
    size, product = kernels.coefficient_sums(reals(q), reals(c), (1, 4, 3))
    assert size == pytest.approx(np.abs(c[~free]).sum(), rel=1e-5)
    assert product == pytest.approx(np.vdot(q, c).real, rel=1e-4, abs=1e-4)
    expected = c - 0.3 * q
    kernels.subtract(reals(c).ravel(), real(0.3), reals(q).ravel())
    np.testing.assert_allclose(c, expected, atol=limit(dtype))
