"""Exact recovery of a piecewise constant object from 22 radial lines.

Source: Candes, Romberg & Tao 2006, Robust uncertainty principles: the Shepp-Logan phantom on 256 x 256 pixels from 22
radial lines of its transform, minimising total variation. The object is the rasterised modified phantom, which is
piecewise constant on the grid as analytic k-space would not be.
"""

from __future__ import annotations

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.operators.encoding import Encoding
from recon.phantom import rasterise, shepp_logan
from recon.pipeline import reconstruct
from recon.scan import Scan
from recon.settings import Settings
from recon.solver import solve
from recon.statement import Problem, Solution
from tests.recon.helpers import Array, nrmse, numpy_inverse, numpy_transform, radial_mask

SIZE = 256
LINES = 22


@pytest.fixture(scope="module")
def phantom() -> Array:
    return rasterise(shepp_logan("modified"), (SIZE, SIZE), centre="middle").real


@pytest.fixture(scope="module")
def mask() -> Array:
    return radial_mask(SIZE, LINES)


def contrast(image: Array, number: int) -> float:
    """Return mean inside one of the small ellipses (away from its edge) less the brain's level about it."""
    small = shepp_logan("modified")[number]
    y, x = np.mgrid[:SIZE, :SIZE]
    x, y = (x - (SIZE - 1) / 2) * 2 / SIZE, (y - (SIZE - 1) / 2) * 2 / SIZE
    distance = np.hypot(
        (x - small.centre[0]) / small.semi_axes[0], (y - small.centre[1]) / small.semi_axes[1]
    )
    ring = (distance > 1.3) & (distance < 1.6)
    return float(image[distance < 0.8].mean() - image[ring].mean())


def test_the_zero_filled_image_is_far_off(phantom: Array, mask: Array) -> None:
    assert mask.mean() < 0.09
    assert nrmse(numpy_inverse(numpy_transform(phantom) * mask).real, phantom) > 0.4


def test_strength_continued_to_zero_recovers_the_phantom(phantom: Array, mask: Array) -> None:
    """NRMSE below 1e-3, and the contrast of the small ellipses (0.1) within 1 %."""
    encoding = Encoding(np.ones((1, SIZE, SIZE), np.complex64), mask)
    data = encoding.to_range((numpy_transform(phantom) * mask).astype(np.complex64)[None])
    found: Solution | None = None
    for strength, iterations in ((1e-3, 200), (2e-4, 120), (5e-5, 120), (1e-5, 150)):
        found = solve(
            Problem(encoding, data, "db4", 0.0, strength),
            tolerance=1e-7,
            max_iterations=iterations,
            start=found,
        )
    assert found is not None
    assert nrmse(found.image, phantom) < 1e-3
    for number in (5, 6, 7, 8, 9):
        assert contrast(found.image.real, number) == pytest.approx(contrast(phantom, number), rel=0.01)


@pytest.mark.slow
def test_the_whole_path_recovers_the_phantom_at_one_weak_strength(phantom: Array, mask: Array) -> None:
    scan = Scan(
        LabelledArray((numpy_transform(phantom) * mask).astype(np.complex64), ("ky", "kx")),
        mask_array=LabelledArray(mask, ("ky", "kx")),
    )
    result = reconstruct(
        scan, Settings(wavelet_strength=0.0, tv_strength=4e-4, tolerance=1e-6, max_iterations=1300)
    )
    assert nrmse(np.abs(result.image), phantom) < 1e-3
