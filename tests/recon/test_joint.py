"""Volumes solved as one problem."""

from __future__ import annotations

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.errors import CalibrationMissing, InvalidSettings
from recon.joint_problem import voxel_weights
from recon.operators.encoding import Encoding
from recon.pipeline import reconstruct
from recon.scan import Scan
from recon.settings import Settings, parse_settings
from recon.solver import solve
from recon.statement import Problem
from tests.recon.helpers import Array, line_mask, nrmse
from tests.recon.volumes import inverse3, maps3, plane_mask, volume

SMALL = (16, 18, 20)
JOINT = Settings(
    wavelet="haar",
    wavelet_strength=0.1,
    tv_strength=0.15,
    volume="joint",
    coil_compression=None,
    tolerance=1e-4,
)


def with_maps(scan: Scan, shape: tuple[int, int, int], coils: int = 4) -> Scan:
    """The same scan with its true maps."""
    return Scan(
        scan.kspace_array,
        mask_array=scan.mask_array,
        noise_array=scan.noise_array,
        sensitivity_array=LabelledArray(maps3(coils, shape).astype(np.complex64), ("coil", "z", "y", "x")),
        attributes=scan.attributes,
    )


def varying(mask: Array, columns: int) -> Array:
    """A mask (kz, ky, kx) that also leaves out the first quarter of every readout (a partial echo)."""
    full = np.repeat(mask[..., np.newaxis], columns, axis=2)
    full[..., : columns // 4] = False
    return full


@pytest.mark.parametrize("is_complete", [True, False])
def test_joint_equals_the_problem_made_by_hand(is_complete: bool) -> None:
    mask = plane_mask(SMALL[:2], 2)
    full = np.repeat(mask[..., np.newaxis], 20, axis=2) if is_complete else varying(mask, 20)
    field = [60.0, 54.0, 96.0]  # voxels of 3 x 3 x 6 mm
    found = volume(SMALL, mask=mask if is_complete else full, attributes={"field_of_view_mm": field})
    result = reconstruct(with_maps(found.scan, SMALL), JOINT)

    # by hand, in k-space: white noise of known size, so that whitening is division by it
    size = np.sqrt(np.mean(np.abs(found.noise) ** 2) * 2000 / (2000 - 4))
    kappa = result.report["preparation"]["noise_units"]["kappa"]
    assert kappa == pytest.approx(1 / size, rel=0.1)
    encoding = Encoding((maps3(4, SMALL) / (size * kappa)).astype(np.complex64), full)
    data = encoding.to_range((found.kspace / size).astype(np.complex64))
    weights = np.array([1 / 6, 1 / 3, 1 / 3])
    weights /= np.sqrt(np.mean(weights**2))
    z, y, x = (float(weight) for weight in weights)
    problem = Problem(encoding, data, "haar", 0.1, 0.15, weights=(z, y, x))
    expected = solve(problem, tolerance=JOINT.tolerance, max_iterations=200).image / kappa
    # the pipeline whitens with the measured covariance, which differs from a multiple of the identity by sampling
    assert nrmse(result.image, expected) < 0.01
    residual = result.report["consistency"]["reduced_chi_squared"]
    assert 0.5 < residual["value"] < 1.2
    assert result.report["solver"]["converged_planes"] == 1
    assert result.report["solver"]["solved_as"] == "volumes"


def test_joint_is_better_than_planes_at_their_best_strength() -> None:
    """Noise that is independent from position to position, and an object that is not."""
    shape = (24, 24, 32)
    found = volume(shape, acceleration=3, noise=0.3)
    scan, inside = with_maps(found.scan, shape), np.abs(found.truth) > 0

    def error(mode: str, strength: float) -> float:
        values = {"volume": mode, "wavelet": "haar", "tolerance": 5e-4}
        settings = parse_settings({**values, "wavelet_strength": 0.3 * strength, "tv_strength": strength})
        return nrmse(reconstruct(scan, settings).image[inside], found.truth[inside])

    assert error("joint", 0.3) < 0.95 * min(error("planes", strength) for strength in (0.3, 0.5))


@pytest.mark.parametrize("shape", [(17, 19, 21), (16, 16, 11)])
def test_a_mask_that_varies_along_the_readout_is_solved_in_k_space(shape: tuple[int, int, int]) -> None:
    full = varying(plane_mask(shape[:2], 2), 2 * shape[2])
    found = volume(shape, oversampling=2, mask=full)
    with pytest.raises(InvalidSettings, match="choose joint"):
        reconstruct(found.scan, JOINT.model_copy(update={"volume": "planes"}))
    result = reconstruct(found.scan, JOINT)
    assert result.image.shape == shape
    inside = np.abs(found.truth) > 0
    assert nrmse(np.abs(result.image)[inside], np.abs(found.truth)[inside]) < 0.12
    figures = result.report["consistency"]["reduced_chi_squared"]
    assert figures["samples"] == 4 * full.sum()
    assert sum(ring["samples"] for ring in figures["by_ring"]) == figures["samples"]


def test_residual_image_of_both_spaces_agrees() -> None:
    """A complete mask given position by position is solved in hybrid space; one sample less, in k-space."""
    mask = plane_mask(SMALL[:2], 2)
    full = np.repeat(mask[..., np.newaxis], 20, axis=2)
    almost = full.copy()
    almost[0, np.flatnonzero(mask[0])[0], 0] = False
    images = []
    for each in (full, almost):
        scan = with_maps(volume(SMALL, mask=each).scan, SMALL)
        images.append(reconstruct(scan, JOINT))
    assert nrmse(images[1].image, images[0].image) < 5e-3
    assert nrmse(images[1].residual_image, images[0].residual_image) < 0.05
    values = [one.report["consistency"]["reduced_chi_squared"]["value"] for one in images]
    assert values[1] == pytest.approx(values[0], rel=0.01)


@pytest.mark.parametrize("values", [
    {"method": "tikhonov"},
    {"method": "zero-filled"},
    {"method": "zero-filled", "combination": "root-sum-of-squares"},
])  # fmt: skip
@pytest.mark.parametrize("is_complete", [True, False])
def test_linear_methods_and_frames(values: dict[str, str], is_complete: bool) -> None:
    mask = np.ones(SMALL[:2], bool)
    full = mask if is_complete else np.repeat(mask[..., np.newaxis], 20, axis=2)
    if not is_complete:
        full[3, 4, 0] = False
    found = volume(SMALL, mask=full, sizes={"frame": 2}, noise=0.005)
    settings = parse_settings({**values, "volume": "joint", "tikhonov_strength": 0.001})
    result = reconstruct(found.scan, settings)
    assert result.axes == ("frame", "z", "y", "x")
    inside = np.abs(found.truth[0]) > 0
    for frame, brightness in enumerate((1.0, 1.25)):
        expected = brightness * np.abs(found.truth[0])[inside]
        assert nrmse(np.abs(result.image[frame])[inside], expected) < 0.02


def test_interpolation_of_a_volume_to_a_finer_matrix() -> None:
    """The finer image passes through the coarse one where their pixels coincide (even ratio, centres n // 2)."""
    attributes = {"reconstructed_matrix": [40.0, 36.0, 16.0]}
    for settings in (JOINT, JOINT.model_copy(update={"volume": "planes"})):
        plain = reconstruct(volume(SMALL).scan, settings).image
        finer = reconstruct(volume(SMALL, attributes=attributes).scan, settings).image
        assert finer.shape == (16, 36, 40)
        np.testing.assert_allclose(finer[:, ::2, ::2], plain, atol=1e-5)


def test_weights_of_differences_follow_the_voxels() -> None:
    found = volume(SMALL)
    assert voxel_weights(found.scan) == (1.0, 1.0, 1.0)
    cubes = volume(SMALL, oversampling=2, attributes={"field_of_view_mm": [80.0, 36.0, 32.0]})
    np.testing.assert_allclose(voxel_weights(cubes.scan), (1, 1, 1))
    flat = volume(SMALL, attributes={"field_of_view_mm": [20.0, 18.0, 64.0]})  # 1 x 1 x 4 mm
    z, y, x = voxel_weights(flat.scan)
    np.testing.assert_allclose((y / z, x / z), 4)
    assert z**2 + y**2 + x**2 == pytest.approx(3)


def test_refusals() -> None:
    plane = Scan(
        LabelledArray(np.ones((2, 24, 20), np.complex64), ("coil", "ky", "kx")),
        mask_array=LabelledArray(line_mask(24, 20, 2, 12), ("ky", "kx")),
    )
    with pytest.raises(InvalidSettings, match=r"volume.*coil, ky, kx.*label"):
        reconstruct(plane, JOINT)
    gappy = np.zeros(SMALL, bool)
    gappy[::2, ::2, ::2] = True
    with pytest.raises(CalibrationMissing):
        reconstruct(volume(SMALL, mask=gappy).scan, JOINT)


def test_inverse_transforms_of_the_tests_agree_with_each_other() -> None:
    found = volume(SMALL, noise=0.0, mask=np.ones(SMALL[:2], bool))
    coils = inverse3(found.kspace)
    np.testing.assert_allclose(np.sum(maps3(4, SMALL).conj() * coils, axis=0), found.truth, atol=1e-5)


@pytest.mark.parametrize("constraint", ["real", "nonnegative"])
@pytest.mark.parametrize("is_complete", [True, False])
def test_constraints_and_cycle_spinning_in_both_spaces(constraint: str, is_complete: bool) -> None:
    mask = plane_mask(SMALL[:2], 2)
    full = mask if is_complete else np.repeat(mask[..., np.newaxis], 20, axis=2)
    if not is_complete:
        full[0, :, 0] = False
    found = volume(SMALL, mask=full)
    update = {"constraint": constraint, "wavelet_shifts": 2, "tolerance": 1e-3}
    image = reconstruct(with_maps(found.scan, SMALL), JOINT.model_copy(update=update)).image
    inside = np.abs(found.truth) > 0
    assert nrmse(image[inside], found.truth[inside]) < 0.12
