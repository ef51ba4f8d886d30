"""Noise: whitening, dwell time, estimation, and what noise looks like in magnitude images."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.coils.combination import root_sum_of_squares
from recon.coils.noise import dwell_scale, estimate_whitening, sample_covariance, whitening_from
from recon.errors import InvalidScan
from recon.operators.fourier import inverse_transform
from recon.phantom import Ellipse, ellipse_kspace, ring_coils
from recon.pipeline import reconstruct
from recon.scan import Scan
from recon.settings import Settings
from tests.recon.helpers import Array, complex_normal
from tests.recon.scans import example

AXES = ("coil", "ky", "kx")


def covariance(coils: int, seed: int = 0) -> Array:
    """Return a covariance with correlations up to 0.5 and standard deviations fivefold apart."""
    rng = np.random.default_rng(seed)
    distance = np.abs(np.subtract.outer(np.arange(coils), np.arange(coils)))
    phases = np.exp(2j * np.pi * rng.uniform(size=coils))
    sd = 5.0 ** rng.permutation(np.linspace(0, 1, coils))
    matrix: Array = 0.5**distance * np.outer(phases, phases.conj()) * np.outer(sd, sd)
    return matrix


def draw(psi: Array, samples: int, seed: int) -> Array:
    """Return noise of a covariance, shape (coils, samples)."""
    noise: Array = np.linalg.cholesky(psi) @ complex_normal(np.random.default_rng(seed), (len(psi), samples))
    return noise


@pytest.mark.parametrize("coils", [1, 4, 32])
def test_covariance_after_whitening_is_the_identity_within_sampling_error(coils: int) -> None:
    """Source: Kellman & McVeigh 2005; entries of a sample covariance scatter by 1 / sqrt(samples)."""
    psi, samples = covariance(coils) * 3e-4, 20_000
    whitening = whitening_from(sample_covariance(draw(psi, samples, 1)), "noise-scan", samples)
    whitened = whitening.apply(draw(psi, samples, 2).astype(np.complex64))
    deviation = np.abs(sample_covariance(whitened) - np.eye(coils))
    assert deviation.max() < 5 * math.sqrt(2 / samples)
    assert whitened.dtype == np.complex64
    np.testing.assert_allclose(whitening.whitener @ whitening.unwhitener, np.eye(coils), atol=1e-10)


@pytest.mark.parametrize(
    ("noise_time", "image_time", "bandwidth", "expected"),
    [
        (None, None, None, 1.0),
        (5.0, 10.0, None, 0.5),
        (5.0, 10.0, 0.8, 0.625),
        (None, None, 0.5, 2.0),
        (4.0, None, None, 1.0),
    ],
)
def test_dwell_factor(
    noise_time: float | None, image_time: float | None, bandwidth: float | None, expected: float
) -> None:
    """Source: Kellman & McVeigh 2005: noise over image sample time, divided by the receiver's noise bandwidth."""
    assert dwell_scale(noise_time, image_time, bandwidth) == pytest.approx(expected)


def test_noise_scan_at_another_dwell_time_and_bandwidth_whitens_the_image() -> None:
    """Source: Kellman & McVeigh 2005, by simulating the receiver.

    A receiver samples white noise; its filter passes 0.75 of the band, which lowers the mean noise power of the
    noise scan to 0.75; sampling four times as slowly lets in a quarter of the power. The image's own band is
    passed in full.
    """
    coils, samples = 4, 40_000
    at_image_dwell = covariance(coils)
    noise = draw(at_image_dwell * 4 * 0.75, samples, 1).astype(np.complex64)
    kspace = draw(at_image_dwell, 100 * 200, 2).reshape(coils, 100, 200).astype(np.complex64)
    scan = Scan(
        LabelledArray(kspace, AXES),
        noise_array=LabelledArray(noise, ("coil", "sample")),
        attributes={"sample_time_us": 8.0},
        noise_attributes={"sample_time_us": 2.0, "receiver_noise_bandwidth": 0.75},
    )
    whitening = estimate_whitening(scan)
    assert whitening.source == "noise-scan"
    assert whitening.samples == samples
    whitened = sample_covariance(whitening.apply(kspace).reshape(coils, -1))
    assert np.abs(whitened - np.eye(coils)).max() < 5 * math.sqrt(1 / samples + 1 / 20_000)


def test_noise_is_estimated_from_the_periphery_when_there_is_no_noise_scan() -> None:
    """A smooth object leaves little signal in the corners of k-space; what is left makes the estimate larger."""
    psi = covariance(4) * 0.01
    clean = ellipse_kspace([Ellipse(3.0, (0, 0), (0.6, 0.5))], (96, 96), maps=ring_coils(4))
    noise = draw(psi, 96 * 96, 3).reshape(4, 96, 96)
    scan = Scan(LabelledArray((clean + noise).astype(np.complex64), AXES))
    whitening = estimate_whitening(scan)
    assert whitening.source == "periphery"
    ratio = np.diag(whitening.covariance).real / np.diag(psi).real
    assert ratio.min() > 0.75
    assert ratio.max() < 1.6


def test_scan_without_noise_says_so() -> None:
    """A Gaussian object's k-space is a Gaussian, below rounding at the periphery."""
    r = np.arange(64) - 32
    gaussian = np.exp(-np.pi * np.add.outer(r**2, r**2) / 64)
    kspace = np.stack([gaussian, 1j * gaussian]).astype(np.complex64)
    whitening = estimate_whitening(Scan(LabelledArray(kspace, AXES)))
    assert whitening.source == "none"
    assert not whitening.has_noise_units


@pytest.mark.parametrize(
    ("noise", "message"), [(np.zeros((2, 9)), "only zeros"), (np.full((2, 9), np.nan), "NaN")]
)
def test_unusable_noise_scans_are_refused(noise: Array, message: str) -> None:
    scan = Scan(
        LabelledArray(np.ones((2, 4, 4), np.complex64), AXES),
        noise_array=LabelledArray(noise.astype(np.complex64), ("coil", "sample")),
    )
    with pytest.raises(InvalidScan, match=message):
        estimate_whitening(scan)


def test_a_dead_coil_does_not_take_over() -> None:
    """A channel that delivers exact zeros has no noise; it must not get infinite weight."""
    noise = draw(np.eye(3), 500, 4)
    noise[1] = 0
    whitening = whitening_from(sample_covariance(noise), "noise-scan", 500)
    assert np.isfinite(whitening.whitener).all()
    signal = np.array([1.0, 0.0, 1.0], np.complex64)
    assert np.abs(whitening.whitener @ signal)[1] < 1e-3


@pytest.mark.parametrize(
    ("coils", "mean"), [(1, math.sqrt(math.pi / 2)), (2, 1.8800), (4, 2.7416), (8, 3.938)]
)
def test_background_of_magnitude_images(coils: int, mean: float) -> None:
    """Source: Gudbjartsson & Patz 1995; Constantinides et al. 1997.

    In units of the standard deviation of the real part: mean 1.2533 and sd 0.6551 for one coil, and
    sqrt(pi/2) (2n-1)!! / (2^(n-1) (n-1)!) for the root-sum-of-squares of n coils.
    """
    sigma = 1 / math.sqrt(2)  # noise units: E|n|^2 = 1
    magnitude = (
        root_sum_of_squares(complex_normal(np.random.default_rng(coils), (coils, 400, 500))).real / sigma
    )
    odd = math.prod(range(1, 2 * coils, 2))
    exact = math.sqrt(math.pi / 2) * odd / (2 ** (coils - 1) * math.factorial(coils - 1))
    assert exact == pytest.approx(mean, abs=6e-4)
    assert magnitude.mean() == pytest.approx(exact, abs=5 * 0.71 / math.sqrt(magnitude.size))
    if coils == 1:
        assert exact == pytest.approx(1.2533, abs=1e-4)
        assert magnitude.std() == pytest.approx(0.6551, abs=0.005)


def test_unitary_transforms_keep_noise_units() -> None:
    """Source: Parseval: noise of unit variance per k-space sample is noise of unit variance per pixel."""
    image = inverse_transform(complex_normal(np.random.default_rng(0), (300, 301)))
    assert np.mean(np.abs(image) ** 2) == pytest.approx(1, abs=5 / math.sqrt(image.size))


def test_two_image_difference_and_background_give_the_same_signal_to_noise_ratio() -> None:
    """Source: NEMA MS 1: the difference of two acquisitions, and the background of one magnitude image.

    Both are compared with the simulated truth, one coil, fully sampled, zero-filled.
    """
    shape, sigma, level = (128, 128), 0.05, 2.0
    disc = Ellipse(level, (0, 0), (0.5, 0.5))
    clean = ellipse_kspace([disc], shape)
    rng = np.random.default_rng(8)
    first, second = (
        np.abs(
            reconstruct(
                Scan(
                    LabelledArray(
                        (clean + sigma * complex_normal(rng, shape)).astype(np.complex64), ("ky", "kx")
                    )
                ),
                Settings(method="zero-filled"),
            ).image
        )
        for _ in range(2)
    )
    y, x = np.ogrid[:128, :128]
    radius = np.hypot(y - 64, x - 64)
    inside, corner = radius < 20, radius > 75
    by_difference = first[inside].mean() / ((first - second)[inside].std() / math.sqrt(2))
    # The phantom's truncation leaves traces in the background, far below the noise at this distance.
    by_background = first[inside].mean() / (first[corner].std() / 0.6551)
    truth = level / (sigma / math.sqrt(2))
    tolerance = 4 / math.sqrt(2 * inside.sum())
    assert by_difference == pytest.approx(truth, rel=tolerance)
    assert by_background == pytest.approx(truth, rel=tolerance)


def test_image_does_not_depend_on_the_dwell_time_of_the_noise_scan() -> None:
    """Source: Kellman & McVeigh 2005: four times the bandwidth, filtered to 0.75 of it, and readouts oversampled."""
    found = example(attributes={"readout_oversampling": 2.0, "sample_time_us": 8.0})
    assert found.scan.noise_array is not None
    noise = np.asarray(found.scan.noise_array.data)
    faster = LabelledArray((noise * np.sqrt(4 * 0.75)).astype(np.complex64), ("coil", "sample"))
    attributes = {"sample_time_us": 2.0, "receiver_noise_bandwidth": 0.75}
    first = reconstruct(replace(found.scan, noise_attributes={"sample_time_us": 8.0}))
    second = reconstruct(replace(found.scan, noise_array=faster, noise_attributes=attributes))
    assert np.abs(second.image - first.image).max() < 1e-4 * np.abs(first.image).max()
    chi = [each.report["consistency"]["reduced_chi_squared"]["value"] for each in (first, second)]
    assert chi[1] == pytest.approx(chi[0], rel=1e-3)
    assert 0.6 < chi[0] < 1.1
