"""Every shape and axis that a scan may have goes through the whole path."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from recon.axes import LabelledArray
from recon.errors import CalibrationMissing
from recon.phantom import ring_coils
from recon.pipeline import reconstruct
from recon.scan import PlaneIndex, Scan
from recon.settings import Settings, parse_settings
from tests.recon.helpers import complex_normal, numpy_transform, radial_mask
from tests.recon.scans import error, example

CASES: dict[str, dict[str, Any]] = {
    "even": {},
    "odd rows": {"shape": (47, 44)},
    "odd columns": {"shape": (48, 45)},
    "odd both": {"shape": (51, 43)},
    "wide": {"shape": (40, 72)},
    "tall": {"shape": (76, 33)},
    "one coil": {"coils": 1, "every": 1, "noise": 0.01},
    "two coils": {"coils": 2},
    "32 coils": {"coils": 32, "every": 3},
    "one slice": {"sizes": {"slice": 1}},
    "three slices": {"sizes": {"slice": 3}},
    "frames": {"sizes": {"frame": 3}},
    "contrasts": {"sizes": {"contrast": 2}},
    "all outer axes": {"sizes": {"frame": 2, "slice": 2, "contrast": 2}, "shape": (40, 40)},
    "phase-phase plane": {"plane": ("kz", "ky")},
    "phase-phase plane of two slices": {"plane": ("kz", "ky"), "sizes": {"slice": 2}},
    "readout oversampling": {"attributes": {"readout_oversampling": 2.0}},
    "fully sampled": {"every": 1},
}


@pytest.mark.parametrize("case", CASES)
def test_shape_is_reconstructed_to_within_the_noise(case: str) -> None:
    found = example(**CASES[case])
    result = reconstruct(found.scan)
    outer = [found.scan.axes[axis] for axis in found.scan.outer_axes]
    assert result.image.shape == result.residual_image.shape == (*outer, *found.inside.shape)
    assert result.axes == found.scan.image_axes
    assert result.image.dtype == np.complex64
    assert np.isfinite(result.image).all()
    assert error(result.image, found) < 0.06
    solver = result.report["solver"]
    assert solver["converged_planes"] == len(solver["planes"])
    assert sum(plane["frames"] for plane in solver["planes"]) == len(found.scan.planes())
    # An image of N pixels can explain N of M samples' noise at most.
    explained = result.image.size / result.report["consistency"]["reduced_chi_squared"]["samples"]
    assert 1 - explained - 0.05 < result.report["consistency"]["reduced_chi_squared"]["value"] < 1.2


def test_64_slices() -> None:
    found = example((32, 32), sizes={"slice": 64})
    result = reconstruct(found.scan, Settings(tolerance=1e-2))
    assert result.image.shape == (64, 32, 32)
    level = np.abs(result.image[:, found.inside]).mean(axis=1)
    np.testing.assert_allclose(level / level[0], 1 + 0.25 * np.arange(64), rtol=0.05)


@pytest.mark.parametrize("method", ["compressed-sensing", "tikhonov", "zero-filled"])
@pytest.mark.parametrize("combination", ["sensitivity", "root-sum-of-squares"])
@pytest.mark.parametrize("maps", ["eigenvector", "adaptive"])
def test_every_method_combination_and_map_kind(method: str, combination: str, maps: str) -> None:
    found = example()
    result = reconstruct(
        found.scan,
        parse_settings(
            {"method": method, "combination": combination, "coil_maps": maps, "tikhonov_strength": 0.03}
        ),
    )
    assert error(result.image, found) < (0.35 if method == "zero-filled" else 0.08)
    assert result.report["settings"]["method"] == method
    if combination == "root-sum-of-squares":
        assert not result.image.imag.any()


def test_combinations_agree_in_magnitude() -> None:
    """Source: Roemer 1990: for one image and unit maps, both are the object times sqrt(sum |S|^2)."""
    found = example()
    one = reconstruct(found.scan, Settings(combination="sensitivity"))
    other = reconstruct(found.scan, Settings(combination="root-sum-of-squares"))
    np.testing.assert_allclose(np.abs(one.image), np.abs(other.image), atol=2e-3 * np.abs(one.image).max())


@pytest.mark.parametrize("compression", [None, "auto", {"keep_energy": 0.999}, {"coils": 6}])
def test_coil_compression_does_not_change_the_intensity(compression: Any) -> None:
    found = example(coils=8)
    whole = reconstruct(found.scan, parse_settings({"coil_compression": None}))
    result = reconstruct(found.scan, parse_settings({"coil_compression": compression}))
    level = np.abs(result.image[found.inside]).mean() / np.abs(whole.image[found.inside]).mean()
    assert level == pytest.approx(1, abs=0.01)
    assert error(result.image, found) < 0.06


def test_supplied_maps_are_used_and_their_scale_is_not() -> None:
    """True maps times any factor give the same image, normalised over physical coils."""
    found = example()
    maps = np.stack([coil.on_grid((48, 44)) for coil in ring_coils(4)])
    images = []
    for factor in (1.0, 37.5):
        scan = Scan(
            found.scan.kspace_array,
            mask_array=found.scan.mask_array,
            noise_array=found.scan.noise_array,
            sensitivity_array=LabelledArray((factor * maps).astype(np.complex64), ("coil", "y", "x")),
        )
        result = reconstruct(scan)
        assert result.report["settings"]["coil_maps"] == "supplied"
        images.append(result.image)
        assert error(result.image, found) < 0.05
    np.testing.assert_allclose(images[0], images[1], atol=1e-4 * np.abs(images[0]).max())


def test_reference_scan_supplies_calibration_that_the_mask_does_not() -> None:
    found = example(every=2)
    lines = np.arange(48) % 2 == 0
    reference = found.scan.kspace_array.take()[:, 16:32, 14:30]
    scan = Scan(
        LabelledArray(found.scan.kspace_array.take() * lines[:, None], ("coil", "ky", "kx")),
        mask_array=LabelledArray(lines, ("ky",)),
        noise_array=found.scan.noise_array,
        reference_array=LabelledArray(reference, ("coil", "ky", "kx")),
    )
    assert error(reconstruct(scan).image, found) < 0.07


def test_two_dimensional_masks() -> None:
    found = example((48, 48), every=1)
    mask = radial_mask(48, 20)
    mask[16:32, 16:32] = True
    scan = Scan(
        found.scan.kspace_array,
        mask_array=LabelledArray(mask, ("ky", "kx")),
        noise_array=found.scan.noise_array,
    )
    result = reconstruct(scan)
    assert error(result.image, found) < 0.06
    codes = [finding["code"] for finding in result.report["findings"]]
    assert "readout-undersampled" in codes
    assert "samples-outside-mask" in codes


def test_samples_outside_the_mask_have_no_influence() -> None:
    found = example(every=3)
    kspace = found.scan.kspace_array.take()
    mask = found.scan.mask(PlaneIndex())
    dirty = np.where(mask, kspace, 1e3 * (1 + 1j)).astype(np.complex64)
    one = reconstruct(found.scan)
    other = reconstruct(
        Scan(
            LabelledArray(dirty, ("coil", "ky", "kx")),
            mask_array=found.scan.mask_array,
            noise_array=found.scan.noise_array,
        )
    )
    np.testing.assert_array_equal(one.image, other.image)


def test_phase_between_frames_survives() -> None:
    """One set of maps and one phase reference for a slice: what changes from frame to frame is in the image."""
    found = example(noise=0.005)
    kspace = found.scan.kspace_array.take()
    turns = np.exp(1j * np.array([0.0, 0.7, 2.5]))
    frames = (turns[:, None, None, None] * kspace).astype(np.complex64)
    scan = Scan(
        LabelledArray(frames, ("frame", "coil", "ky", "kx")),
        mask_array=found.scan.mask_array,
        noise_array=found.scan.noise_array,
    )
    # total variation along the frames draws them together by a hair
    for strength, tolerance in ((0.0, 0.005), ("auto", 0.01)):
        result = reconstruct(scan, parse_settings({"temporal_strength": strength}))
        inside = result.image[:, found.inside]
        difference = np.angle(np.sum(inside[1:] * inside[:1].conj(), axis=1))
        np.testing.assert_allclose(difference, [0.7, 2.5], atol=tolerance)


@settings(max_examples=60)
@given(
    st.integers(1, 14), st.integers(1, 14), st.integers(1, 4), st.booleans(), st.floats(0.2, 1), st.booleans()
)
def test_any_small_scan_gives_a_finite_image_or_a_clear_refusal(
    rows: int, columns: int, coils: int, has_noise: bool, density: float, is_line_mask: bool
) -> None:
    rng = np.random.default_rng(rows * 1000 + columns * 10 + coils)
    mask = rng.random((rows, 1 if is_line_mask else columns)) < density
    mask = np.broadcast_to(mask, (rows, columns)).copy()
    mask[rows // 2, columns // 2] = True
    scan = Scan(
        LabelledArray(complex_normal(rng, (coils, rows, columns), np.complex64), ("coil", "ky", "kx")),
        mask_array=LabelledArray(mask, ("ky", "kx")),
        noise_array=LabelledArray(complex_normal(rng, (coils, 40), np.complex64), ("coil", "sample"))
        if has_noise
        else None,
    )
    try:
        result = reconstruct(scan, Settings(max_iterations=20))
    except CalibrationMissing:
        return
    assert result.image.shape == (rows, columns)
    assert np.isfinite(result.image).all()
    assert np.isfinite(result.residual_image).all()


def test_a_single_coil_without_a_coil_axis() -> None:
    truth = np.zeros((40, 36), np.complex128)
    truth[10:30, 8:28] = 5
    kspace = numpy_transform(truth)
    rng = np.random.default_rng(0)
    kspace = kspace + 0.1 * (rng.standard_normal(kspace.shape) + 1j * rng.standard_normal(kspace.shape))
    result = reconstruct(Scan(LabelledArray(kspace.astype(np.complex64), ("ky", "kx"))))
    assert result.image.shape == (40, 36)
    assert np.linalg.norm(np.abs(result.image) - np.abs(truth)) / np.linalg.norm(truth) < 0.05
