"""Intensity follows the anatomy, not the noise, the receiver or the units."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from benchmarks.anatomy import Case, SimulatedScan, as_scan, nrmse, simulate
from recon.axes import LabelledArray
from recon.pipeline import reconstruct
from recon.scan import Scan
from recon.settings import Settings
from tests.recon.scans import example

#: coil noise fivefold apart, neighbours correlated by 0.5.
UNEVEN = Case("sagittal", 0, (128, 128), 3, 30, 21, noise_spread=5.0, noise_correlation=0.5)

#: where strengths are chosen, rounding may move their last digit.
FIXED = Settings(wavelet_strength=0.08, tv_strength=0.08)


@pytest.fixture(scope="module")
def uneven() -> SimulatedScan:
    return simulate(UNEVEN)


@pytest.mark.parametrize("maps", ["eigenvector", "adaptive"])
def test_best_scale_and_scale_one_agree_with_uneven_correlated_coil_noise(
    uneven: SimulatedScan, maps: str
) -> None:
    """The image is the object times sqrt(sum |S|^2) of the physical coils whatever the whitener is."""
    image = reconstruct(as_scan(uneven), Settings.model_validate({"coil_maps": maps})).image
    best, as_it_stands = nrmse(image, uneven)
    assert as_it_stands < 1.05 * best
    assert best < 0.12


@pytest.mark.parametrize("method", ["tikhonov", "zero-filled"])
def test_linear_methods_follow_the_anatomy_too(uneven: SimulatedScan, method: str) -> None:
    """Linear baselines lose high frequencies, so their best scale is a little above one, never far from it."""
    image = np.abs(reconstruct(as_scan(uneven), Settings.model_validate({"method": method})).image)
    a, t = image[uneven.object_mask].astype(np.float64), uneven.truth[uneven.object_mask]
    assert float(a @ t / (a @ a)) == pytest.approx(1, abs=0.1)


def test_intensity_does_not_depend_on_which_coils_are_noisy(uneven: SimulatedScan) -> None:
    """Two receivers with opposite noise see the same object: same brightness everywhere within noise and bias."""
    other = simulate(replace(UNEVEN, noise_spread=0.2))
    first, second = (
        np.abs(reconstruct(as_scan(scan)).image)[uneven.object_mask].astype(np.float64)
        for scan in (uneven, other)
    )
    assert float(first @ second / (second @ second)) == pytest.approx(1, abs=0.02)


@pytest.mark.parametrize("factor", [1000.0, 1e-6, 3e8])
def test_scaling_scan_and_noise_scales_the_image_alone(factor: float) -> None:
    one, other = (reconstruct(example(scale=scale).scan, FIXED) for scale in (1.0, factor))
    scaled = other.image.astype(np.complex128) / factor
    assert np.linalg.norm(scaled - one.image) / np.linalg.norm(one.image) < 1e-4
    ours, theirs = (r.report["consistency"]["reduced_chi_squared"]["value"] for r in (one, other))
    assert theirs == pytest.approx(ours, rel=1e-3)
    assert other.report["solver"]["iterations"] == pytest.approx(one.report["solver"]["iterations"], abs=3)


def test_scaling_without_a_noise_scan() -> None:
    one, other = (
        reconstruct(example(scale=scale, has_noise_scan=False).scan, FIXED) for scale in (1.0, 1000.0)
    )
    scaled = other.image.astype(np.complex128) / 1000
    assert np.linalg.norm(scaled - one.image) / np.linalg.norm(one.image) < 1e-4


def test_a_constant_phase_of_the_scan_is_kept_and_changes_no_magnitude() -> None:
    found = example()
    turned = (found.scan.kspace_array.take() * np.exp(0.8j)).astype(np.complex64)
    one = reconstruct(found.scan)
    other = reconstruct(
        Scan(
            LabelledArray(turned, ("coil", "ky", "kx")),
            mask_array=found.scan.mask_array,
            noise_array=found.scan.noise_array,
        )
    )
    first, second = one.image[found.inside], other.image[found.inside]
    assert np.linalg.norm(second - first * np.exp(0.8j)) / np.linalg.norm(first) < 2e-3


def test_noisier_scans_are_smoothed_more_by_the_same_strength() -> None:
    """Strengths are in noise units: the same number means more smoothing where there is more noise."""
    same = Settings(wavelet_strength=0.08, tv_strength=0.08)
    quiet, loud = (reconstruct(example(noise=noise).scan, same) for noise in (0.01, 0.1))
    inside = example().inside
    roughness = [
        np.abs(np.diff(np.abs(result.image), axis=1))[inside[:, 1:]].mean()
        / np.abs(result.image)[inside].mean()
        for result in (quiet, loud)
    ]
    assert roughness[1] < 3 * roughness[0]  # tenfold noise, far less than tenfold roughness
    settings = [result.report["settings"] for result in (quiet, loud)]
    assert settings[0] == settings[1]
    kappas = [result.report["preparation"]["noise_units"]["kappa"] for result in (quiet, loud)]
    assert kappas[0] / kappas[1] == pytest.approx(10, rel=0.05)
