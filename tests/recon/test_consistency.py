"""Residual figures in noise units against the statistics they must follow."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import chi2

from recon.coils.noise import Whitening, sample_covariance, whitening_from
from recon.consistency import ResidualFigures, residual, residual_image
from recon.scan import PlaneIndex
from tests.recon.helpers import Array, coil_maps, complex_normal, line_mask, numpy_transform
from tests.recon.test_noise import covariance, draw

SHAPE = (40, 36)


def figures_of(
    kspace: Array, mask: Array, image: Array, maps: Array, whitening: Whitening
) -> dict[str, Array]:
    """Return the residual figures of one image."""
    whitened = whitening.apply(kspace)
    r = residual(image, whitening.apply(maps), whitened, mask)
    figures = ResidualFigures(SHAPE, whitening, {})
    figures.see(PlaneIndex(), r, whitened, mask)
    found: dict[str, Array] = figures.as_dict()["reduced_chi_squared"]
    return found


def measured(psi: Array, seed: int) -> tuple[Array, Array, Array, Array]:
    """Return image, maps, mask and noisy samples."""
    coils = len(psi)
    maps = coil_maps(coils, SHAPE)
    image = np.zeros(SHAPE, np.complex128)
    image[10:30, 8:25] = 7 - 3j
    mask = line_mask(*SHAPE, every=2, calibration=8)
    noise = draw(psi, SHAPE[0] * SHAPE[1], seed).reshape(coils, *SHAPE)
    return image, maps, mask, (numpy_transform(maps * image) + noise) * mask


@pytest.mark.parametrize("coils", [1, 8])
def test_true_image_has_reduced_chi_squared_one_with_known_covariance(coils: int) -> None:
    """Source: scipy.stats: 2 M times the statistic is chi-squared with 2 M degrees of freedom."""
    psi = covariance(coils) * 0.3
    image, maps, mask, kspace = measured(psi, 1)
    found = figures_of(kspace, mask, image, maps, whitening_from(psi, "noise-scan", 0))
    samples = coils * int(mask.sum())
    assert found["samples"] == samples
    low, high = chi2.ppf([1e-4, 1 - 1e-4], 2 * samples) / (2 * samples)
    assert low < found["value"] < high
    per_coil = chi2.ppf([1e-5, 1 - 1e-5], 2 * samples / coils) / (2 * samples / coils)
    assert len(found["by_coil"]) == coils
    assert per_coil[0] < min(found["by_coil"])
    assert max(found["by_coil"]) < per_coil[1]


@pytest.mark.parametrize(("coils", "inflation"), [(8, 1.032), (32, 1.143)])
def test_inflation_by_an_estimated_covariance_is_corrected(coils: int, inflation: float) -> None:
    """Source: statistics of the inverse Wishart distribution: n / (n - C) with n = 256 noise samples.

    Mean over many noise scans; one alone scatters with variance 1 / M + 1 / (C n).
    """
    n, trials = 256, 60
    assert n / (n - coils) == pytest.approx(inflation, abs=5e-4)
    psi = covariance(coils)
    corrected, raw = [], []
    for trial in range(trials):
        image, maps, mask, kspace = measured(psi, 100 + trial)
        estimate = sample_covariance(draw(psi, n, 1000 + trial))
        corrected.append(
            float(figures_of(kspace, mask, image, maps, whitening_from(estimate, "noise-scan", n))["value"])
        )
        raw.append(
            float(figures_of(kspace, mask, image, maps, whitening_from(estimate, "noise-scan", 0))["value"])
        )
    samples = coils * int(line_mask(*SHAPE, every=2, calibration=8).sum())
    scatter = math.sqrt(1 / samples + 1 / (coils * n))
    assert np.mean(corrected) == pytest.approx(1, abs=4 * scatter / math.sqrt(trials))
    assert np.mean(raw) == pytest.approx(inflation, abs=4 * inflation * scatter / math.sqrt(trials))
    assert np.std(corrected) == pytest.approx(scatter, rel=0.4)


def test_a_wrong_image_is_told_from_the_true_one_and_rings_add_up() -> None:
    psi = covariance(4)
    image, maps, mask, kspace = measured(psi, 5)
    wrong = image.copy()
    wrong[15:20, 10:15] *= 0.2
    whitening = whitening_from(psi, "noise-scan", 0)
    found = figures_of(kspace, mask, wrong, maps, whitening)
    assert found["value"] > 1.1
    rings = found["by_ring"]
    total = sum(ring["samples"] * ring["value"] for ring in rings)
    assert total / found["samples"] == pytest.approx(found["value"], rel=1e-9)
    assert sum(ring["samples"] for ring in rings) == found["samples"]
    assert rings[0]["value"] > 2 * rings[-1]["value"]  # the missing patch is smooth


def test_residual_is_zero_where_nothing_was_sampled_and_for_exact_data() -> None:
    maps, mask = coil_maps(3, SHAPE), line_mask(*SHAPE, every=3, calibration=8)
    image = complex_normal(np.random.default_rng(0), SHAPE)
    kspace = numpy_transform(maps * image) * mask
    np.testing.assert_allclose(residual(image, maps, kspace, mask), 0, atol=1e-12)
    left = residual(0 * image, maps, kspace, mask)
    assert not left[:, ~mask].any()
    np.testing.assert_allclose(left, kspace)


def test_residual_image_shows_what_the_image_left_out_in_its_own_units() -> None:
    maps = coil_maps(4, SHAPE)
    detail = np.zeros(SHAPE, np.complex128)
    detail[20, 17] = 2 + 1j
    everywhere = np.ones(SHAPE, bool)
    left = residual(np.zeros(SHAPE), maps, numpy_transform(maps * detail), everywhere)
    np.testing.assert_allclose(residual_image(left, maps), detail, atol=1e-10)


def test_planes_of_a_slice_are_summed_into_their_slice() -> None:
    psi = np.eye(2)
    whitening = whitening_from(psi, "noise-scan", 0)
    figures = ResidualFigures(SHAPE, whitening, {"frame": 2, "slice": 3, "coil": 2})
    mask = np.ones(SHAPE, bool)
    rng = np.random.default_rng(0)
    for frame in (0, 1):
        for position, size in enumerate((1.0, 2.0, 3.0)):
            noise = size * complex_normal(rng, (2, *SHAPE))
            figures.see(PlaneIndex(frame=frame, slice=position), noise, noise, mask)
    found = figures.as_dict()["reduced_chi_squared"]
    np.testing.assert_allclose(found["by_slice"], [1, 4, 9], rtol=0.1)
    np.testing.assert_allclose(found["by_frame"], [14 / 3, 14 / 3], rtol=0.1)
    assert "by_contrast" not in found
