"""The wavelet transform against Daubechies' table and PyWavelets."""

from __future__ import annotations

import numpy as np
import pytest
import pywt

from recon.operators.wavelet import Wavelet
from recon.settings import WAVELETS
from tests.recon.helpers import complex_normal


def test_daubechies_filter_taps() -> None:
    """Source: Daubechies 1992, Ten Lectures on Wavelets, table 6.1, N = 2 (closed form) and N = 4.

    The taps of N = 4 are a value from memory; they are also checked through the conditions that define them.
    """
    root = np.sqrt(3)
    db2 = np.array([1 + root, 3 + root, 3 - root, 1 - root]) / (4 * np.sqrt(2))
    np.testing.assert_allclose(_low_pass("db2"), db2, atol=1e-12)
    db4 = np.array(
        [
            0.2303778133088964, 0.7148465705529154, 0.6308807679298587, -0.0279837694168599,
            -0.1870348117190931, 0.0308413818355607, 0.0328830116668852, -0.0105974017850690,
        ]
    )  # fmt: skip
    np.testing.assert_allclose(_low_pass("db4"), db4, atol=1e-10)


def _low_pass(name: str) -> np.ndarray:
    taps = np.array(pywt.Wavelet(name).rec_lo)
    return taps if abs(taps[0]) > abs(taps[-1]) else taps[::-1]


@pytest.mark.parametrize("order", [2, 4, 7, 10])
def test_daubechies_wavelets_have_vanishing_moments_and_orthonormal_shifts(order: int) -> None:
    """Source: Daubechies 1992: N vanishing moments; filter orthogonal to its even shifts."""
    low, high = (np.array(f) for f in (pywt.Wavelet(f"db{order}").rec_lo, pywt.Wavelet(f"db{order}").rec_hi))
    n = np.arange(low.size)
    for moment in range(order):
        assert abs((high * (n / low.size) ** moment).sum()) < 1e-6
    for shift in range(0, low.size, 2):
        assert (low[shift:] * low[: low.size - shift]).sum() == pytest.approx(1.0 * (shift == 0), abs=1e-8)


@pytest.mark.parametrize("name", WAVELETS)
@pytest.mark.parametrize("shape", [(64, 48), (45, 63), (255, 31)])
def test_every_accepted_wavelet_reconstructs_perfectly(name: str, shape: tuple[int, int]) -> None:
    """Source: perfect reconstruction and Parseval; 255 is where PyWavelets' own transform is not orthogonal."""
    wavelet = Wavelet(shape, name)
    x = complex_normal(np.random.default_rng(0), wavelet.domain_shape)
    coefficients = wavelet.forward(x)
    assert np.linalg.norm(coefficients) == pytest.approx(np.linalg.norm(x), rel=1e-9)
    np.testing.assert_allclose(wavelet.adjoint(coefficients), x, atol=1e-9)
    assert all(
        0 <= padded - n < 2**wavelet.levels for padded, n in zip(wavelet.domain_shape, shape, strict=True)
    )


def test_equals_pywavelets_where_the_size_fits() -> None:
    """Source: PyWavelets wavedec2, mode periodization; as sets, since both lay the blocks out their own way."""
    wavelet = Wavelet((64, 32), "db3")
    x = complex_normal(np.random.default_rng(1), (64, 32))
    ours = wavelet.forward(x)
    theirs = pywt.wavedec2(x, "db3", mode="periodization", level=wavelet.levels)
    corner = ours[tuple(slice(0, n) for n in wavelet.approximation_shape)]
    np.testing.assert_allclose(corner, theirs[0], atol=1e-12)
    flat = np.concatenate([theirs[0].ravel(), *(band.ravel() for level in theirs[1:] for band in level)])
    np.testing.assert_allclose(np.sort(np.abs(ours).ravel()), np.sort(np.abs(flat)), atol=1e-12)


def test_pywavelets_alone_fails_at_255() -> None:
    """Why sizes are padded: measured here, so that the reason can be dropped the day it goes away."""
    x = complex_normal(np.random.default_rng(2), (255, 255))
    parts = pywt.wavedec2(x, "db4", mode="periodization", level=4)
    energy = np.sum(np.abs(parts[0]) ** 2) + sum(np.sum(np.abs(b) ** 2) for level in parts[1:] for b in level)
    assert abs(np.sqrt(energy) / np.linalg.norm(x) - 1) > 1e-3


@pytest.mark.parametrize("name", ["haar", "db4", "sym6"])
def test_a_constant_has_no_details(name: str) -> None:
    """Source: one vanishing moment: only the unpenalised approximation sees a constant."""
    wavelet = Wavelet((64, 64), name)
    coefficients = wavelet.forward(np.ones((64, 64), np.complex128))
    corner = tuple(slice(0, n) for n in wavelet.approximation_shape)
    assert np.abs(coefficients[corner]).min() > 1
    coefficients[corner] = 0
    assert np.abs(coefficients).max() < 1e-9
