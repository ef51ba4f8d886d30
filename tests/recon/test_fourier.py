"""The centred unitary transform, cropping, and the geometry that follows from them."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from recon.operators.fourier import crop_centre, crop_readout, inverse_transform, transform
from recon.phantom import Ellipse, ellipse_kspace
from tests.recon.helpers import complex_normal, numpy_inverse, numpy_transform

SIZES = st.integers(1, 17)


@given(SIZES, SIZES)
def test_equals_numpy_and_is_unitary(rows: int, columns: int) -> None:
    """Source: numpy.fft; Parseval (Bracewell)."""
    x = complex_normal(np.random.default_rng(rows * 31 + columns), (2, rows, columns))
    np.testing.assert_allclose(transform(x), numpy_transform(x), atol=1e-12)
    np.testing.assert_allclose(inverse_transform(x), numpy_inverse(x), atol=1e-12)
    np.testing.assert_allclose(inverse_transform(transform(x)), x, atol=1e-12)
    assert np.linalg.norm(transform(x)) == pytest.approx(np.linalg.norm(x), rel=1e-12)


@given(SIZES, SIZES)
def test_definition(rows: int, columns: int) -> None:
    """Source: the sum itself, DC and origin at index n // 2."""
    x = complex_normal(np.random.default_rng(rows * 17 + columns), (rows, columns))
    r, c = np.arange(rows) - rows // 2, np.arange(columns) - columns // 2
    left = np.exp(-2j * np.pi * np.outer(r, r) / rows) / np.sqrt(rows)
    right = np.exp(-2j * np.pi * np.outer(c, c) / columns) / np.sqrt(columns)
    np.testing.assert_allclose(transform(x), left @ x @ right, atol=1e-11)


@pytest.mark.parametrize("shape", [(8, 8), (9, 7), (8, 5)])
def test_dc_lies_at_half_the_size(shape: tuple[int, int]) -> None:
    kspace = transform(np.ones(shape, np.complex128))
    expected = np.zeros(shape)
    expected[shape[0] // 2, shape[1] // 2] = np.sqrt(shape[0] * shape[1])
    np.testing.assert_allclose(kspace, expected, atol=1e-12)


@pytest.mark.parametrize("n", [16, 17])
def test_shift_theorem(n: int) -> None:
    """Source: Bracewell: a shift by one pixel is a phase ramp of one turn over the axis."""
    x = complex_normal(np.random.default_rng(0), (3, n))
    ramp = np.exp(-2j * np.pi * (np.arange(n) - n // 2) / n)
    np.testing.assert_allclose(transform(np.roll(x, 1, axis=-1)), transform(x) * ramp, atol=1e-12)


@pytest.mark.parametrize("n", [64, 65])
def test_gaussian_becomes_a_gaussian(n: int) -> None:
    """Source: Bracewell: exp(-pi r^2 / s^2) becomes s exp(-pi s^2 k^2)."""
    r = np.arange(n) - n // 2
    s = np.sqrt(n)  # the width at which transform and object look alike
    gaussian = np.exp(-np.pi * r**2 / s**2)
    picture = np.outer(gaussian, gaussian).astype(np.complex128)
    np.testing.assert_allclose(transform(picture), picture, atol=1e-12)


@pytest.mark.parametrize("dtype", [np.complex64, np.complex128])
def test_precision_is_kept(dtype: type) -> None:
    x = complex_normal(np.random.default_rng(0), (5, 6), dtype)
    assert transform(x).dtype == inverse_transform(x).dtype == dtype


@given(st.integers(1, 40), st.data())
def test_crop_keeps_the_centre_at_half_the_size(n: int, data: st.DataObject) -> None:
    size = data.draw(st.integers(1, n))
    positions = np.arange(n) - n // 2
    kept = crop_centre(positions, size)
    np.testing.assert_array_equal(kept, np.arange(size) - size // 2)


@pytest.mark.parametrize(("columns", "kept"), [(64, 32), (63, 31), (64, 33)])
def test_readout_crop_removes_oversampling_and_keeps_values_and_noise(columns: int, kept: int) -> None:
    """Source: FOV = 1 / delta k: half the columns of the image cover half the field of view."""
    rng = np.random.default_rng(1)
    image = complex_normal(rng, (2, 10, columns))
    cropped = numpy_inverse(crop_readout(numpy_transform(image), kept))
    start = columns // 2 - kept // 2
    np.testing.assert_allclose(cropped, image[..., start : start + kept], atol=1e-12)
    noise = complex_normal(rng, (4, 400, columns))
    variance = np.mean(np.abs(crop_readout(noise, kept)) ** 2)
    assert variance == pytest.approx(1, abs=5 / np.sqrt(4 * 400 * kept))


def test_field_of_view_is_the_inverse_of_the_sampling_step() -> None:
    """Source: pixel = FOV / N, FOV = 1 / delta k, resolution = 1 / (2 k_max); common practice.

    A disc at a quarter of the field of view must appear n / 4 pixels from the origin whatever n is, and an object
    displaced by a whole field of view is indistinguishable from one that is not.
    """
    for n in (32, 48, 63):
        image = numpy_inverse(ellipse_kspace([Ellipse(1, (0.5, 0), (0.12, 0.12))], (n, n)))
        weights = np.abs(image) ** 2
        pixels = np.arange(n) - n // 2
        assert (weights.sum(0) * pixels).sum() / weights.sum() == pytest.approx(0.25 * n, abs=0.1)
    here = ellipse_kspace([Ellipse(1, (0.1, 0.2), (0.3, 0.2))], (20, 20))
    folded = ellipse_kspace([Ellipse(1, (2.1, 0.2), (0.3, 0.2))], (20, 20))
    np.testing.assert_allclose(folded, here, atol=1e-12)
