"""The written matrix: oversampling cropped, pixels interpolated, geometry that follows."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.errors import InvalidScan
from recon.feasibility import check_job
from recon.formats import read_image, write_scan
from recon.grid import image_grid
from recon.inspection import inspect
from recon.operators.fourier import zero_fill
from recon.phantom import Ellipse, ellipse_kspace, rasterise
from recon.pipeline import reconstruct, reconstruct_file
from recon.scan import Scan
from recon.settings import Settings, parse_settings
from tests.recon.helpers import complex_normal
from tests.recon.scans import example
from tests.recon.volumes import volume


def with_attributes(scan: Scan, **attributes: Any) -> Scan:
    return replace(scan, attributes={**scan.attributes, **attributes})


@pytest.mark.parametrize(("before", "after"), [((8, 9), (16, 18)), ((7, 8), (9, 8)), ((6, 6), (7, 13))])
def test_interpolation_by_zero_filling_is_trigonometric(
    before: tuple[int, int], after: tuple[int, int]
) -> None:
    """A wave of fewer cycles than the Nyquist rate keeps its values everywhere, centres n//2 in place."""

    def wave(shape: tuple[int, int]) -> Any:
        y, x = ((np.arange(n) - n // 2) / n for n in shape)
        return np.exp(2j * np.pi * (2 * y[:, np.newaxis] - x))

    np.testing.assert_allclose(zero_fill(wave(before), after), wave(after), atol=1e-12)


def test_zero_filling_to_the_same_size_changes_nothing() -> None:
    image = complex_normal(np.random.default_rng(0), (3, 5, 6), np.complex64)
    np.testing.assert_allclose(zero_fill(image, (5, 6)), image, atol=1e-6)


@pytest.mark.parametrize(("rows", "oversampling", "kept"), [(60, 1.25, 48), (63, 1.3, 48), (61, 1.0, 61)])
def test_phase_oversampling_is_cropped_from_the_image(rows: int, oversampling: float, kept: int) -> None:
    """What lies in the margin is solved for and left out: the rest is the image of the whole field of view."""
    found = example((rows, 44), every=2)
    whole = reconstruct(found.scan)
    result = reconstruct(with_attributes(found.scan, phase_oversampling=oversampling))
    start = rows // 2 - kept // 2
    np.testing.assert_array_equal(result.image, whole.image[start : start + kept])
    np.testing.assert_array_equal(result.residual_image, whole.residual_image[start : start + kept])
    assert result.report["preparation"]["matrix"]["kept"] == [kept, 44]


@pytest.mark.parametrize("method", ["compressed-sensing", "zero-filled"])
@pytest.mark.parametrize("combination", ["sensitivity", "root-sum-of-squares"])
def test_interpolated_image_keeps_its_values(method: str, combination: str) -> None:
    """Every second pixel of a doubled matrix is the coarse image's; magnitudes stay magnitudes."""
    settings = parse_settings({"method": method, "combination": combination})
    found = example()
    coarse = reconstruct(found.scan, settings)
    fine = reconstruct(with_attributes(found.scan, reconstructed_matrix=[88, 96, 1]), settings)
    assert fine.image.shape == fine.residual_image.shape == (96, 88)
    np.testing.assert_allclose(fine.image[::2, ::2], coarse.image, atol=2e-5)
    if combination == "root-sum-of-squares":
        assert fine.image.real.min() >= 0
        assert not fine.image.imag.any()
    assert np.isfinite(fine.image).all()


def test_interpolation_agrees_with_the_object() -> None:
    """Source: Bracewell: sinc interpolation of a band-limited image; the object's own k-space on a larger matrix."""
    scene = [Ellipse(1.0, (0.1, -0.05), (0.5, 0.6))]
    coarse = ellipse_kspace(scene, (61, 48))
    scan = Scan(LabelledArray(coarse.astype(np.complex64), ("ky", "kx")))
    image = reconstruct(
        with_attributes(scan, reconstructed_matrix=[96, 122, 1]), Settings(method="zero-filled")
    ).image
    inside = rasterise([Ellipse(1.0, (0.1, -0.05), (0.4, 0.5))], (122, 96)).real > 0.99
    assert np.abs(image[inside]).mean() == pytest.approx(1, abs=0.01)


def test_geometry_follows(tmp_path: Path) -> None:
    """Source: pixel size = FOV / N: of the image, oversampling left out, on the written matrix."""
    found = example((60, 44), attributes={"readout_oversampling": 2.0})
    assert found.scan.mask_array is not None
    attributes = {
        "field_of_view_mm": [176.0, 120.0, 3.0],
        "readout_oversampling": 2.0,
        "phase_oversampling": 1.25,
        "reconstructed_matrix": [88, 96, 1],
    }
    write_scan(
        tmp_path / "scan.h5", np.asarray(found.scan.kspace_array.data), found.scan.kspace_array.labels,
        mask=np.asarray(found.scan.mask_array.data), mask_axes=("ky", "kx"), attributes=attributes,
    )  # fmt: skip
    reconstruct_file(tmp_path / "scan.h5", tmp_path / "image.h5", Settings(max_iterations=3))
    stored = read_image(tmp_path / "image.h5")
    assert stored.image.shape == stored.residual_image.shape == (96, 88)
    assert stored.attributes["field_of_view_mm"] == [88.0, 96.0, 3.0]
    facts = inspect(replace(found.scan, attributes=attributes))
    assert facts.image["matrix"] == [96, 88]
    assert facts.image["pixel_size_mm"] == [1.0, 1.0]
    assert facts.image["solved_plane"] == [60, 44]


def test_phase_phase_planes_crop_ky_alone() -> None:
    scan = with_attributes(
        Scan(LabelledArray(np.ones((2, 20, 30), np.complex64), ("coil", "kz", "ky"))),
        phase_oversampling=1.5,
        field_of_view_mm=[10.0, 30.0, 20.0],
    )
    grid = image_grid(scan)
    assert (grid.axes, grid.kept, grid.written) == (("z", "y"), (20, 20), (20, 20))
    assert [grid.share(axis) for axis in "xyz"] == [1.0, pytest.approx(2 / 3), 1.0]


@pytest.mark.parametrize("kind", ["planes", "joint"])
def test_volumes_are_cropped_and_interpolated(kind: str) -> None:
    """Phase oversampling is that of ky; every second voxel of a doubled matrix is the coarse one's, a magnitude."""
    scan = volume((12, 14, 10)).scan
    settings = parse_settings({"combination": "root-sum-of-squares", "volume": kind, "max_iterations": 3})
    whole = reconstruct(scan, settings).image
    attributes = {"phase_oversampling": 1.25, "reconstructed_matrix": [20, 22, 24]}
    np.testing.assert_array_equal(
        reconstruct(with_attributes(scan, phase_oversampling=1.25), settings).image, whole[:, 2:13]
    )
    fine = reconstruct(with_attributes(scan, **attributes), settings).image
    assert fine.shape == (24, 22, 20)
    np.testing.assert_allclose(fine[::2, 1::2, ::2], whole[:, 2:13], atol=1e-5)
    assert fine.real.min() >= 0
    assert not fine.imag.any()


@pytest.mark.parametrize("matrix", [[43, 48, 1], [44, 47, 1], [44, 48, 2], [44, 200, 1], [44, 48, 0]])
def test_matrix_that_is_no_interpolation_is_refused(matrix: list[int]) -> None:
    """A smaller one would throw away what was measured, a huge one invents pixels."""
    with pytest.raises(InvalidScan, match=r"reconstructed_matrix .* accepted along"):
        reconstruct(with_attributes(example().scan, reconstructed_matrix=matrix))


def test_calibration_is_judged_by_the_plane_that_is_solved() -> None:
    """Interpolation and cropping of the image change nothing about what maps need."""
    scan = with_attributes(example((20, 44)).scan, phase_oversampling=4.0, reconstructed_matrix=[88, 10, 1])
    check_job(inspect(scan).as_dict(), Settings())
    assert reconstruct(scan, Settings(max_iterations=3)).image.shape == (10, 88)
