"""Volumes solved plane by plane along a fully sampled readout."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.errors import InvalidScan, InvalidSettings
from recon.feasibility import check_job
from recon.formats import open_scan, read_image, write_scan
from recon.inspection import inspect
from recon.pipeline import reconstruct, reconstruct_file
from recon.scan import Scan
from recon.settings import Settings
from recon.volume import middle_plane
from tests.recon.helpers import nrmse
from tests.recon.volumes import fruit3, grid3, inverse3, maps3, plane_mask, transform3, volume

SMALL = (16, 18, 20)
QUICK = Settings(wavelet_strength=0.1, tv_strength=0.1, max_iterations=30)
UNCOMPRESSED = QUICK.model_copy(update={"coil_compression": None})


def test_planes_equal_each_readout_position_solved_as_a_scan_of_its_own() -> None:
    found = volume(SMALL)
    result = reconstruct(found.scan, UNCOMPRESSED)
    assert result.axes == ("z", "y", "x")
    # by hand: the unitary transform along kx, then a stack of phase-phase planes
    hybrid = inverse3(found.kspace, (-1,)).astype(np.complex64)
    stack = Scan(
        LabelledArray(np.moveaxis(hybrid, -1, 0), ("slice", "coil", "kz", "ky")),
        mask_array=found.scan.mask_array,
        noise_array=found.scan.noise_array,
    )
    expected = reconstruct(stack, UNCOMPRESSED)
    assert nrmse(result.image, np.moveaxis(expected.image, 0, -1)) < 1e-5
    assert nrmse(result.residual_image, np.moveaxis(expected.residual_image, 0, -1)) < 1e-4


@pytest.mark.parametrize("shape", [(20, 22, 24), (17, 21, 19)])
def test_a_rasterised_object_is_recovered_with_its_phase(shape: tuple[int, int, int]) -> None:
    found = volume(shape, oversampling=2, attributes={"field_of_view_mm": [80.0, 66.0, 60.0]})
    result = reconstruct(found.scan, QUICK)
    inside = np.abs(found.truth) > 0
    assert result.image.shape == shape
    assert nrmse(np.abs(result.image)[inside], np.abs(found.truth)[inside]) < 0.05
    # one phase reference for the volume: what the image has beside the object's phase is smooth, along x too
    extra = np.where(inside, result.image * found.truth.conj(), 0)
    step = np.angle(extra[..., 1:] * extra[..., :-1].conj())[inside[..., 1:] & inside[..., :-1]]
    assert np.abs(step).max() < 0.5


def test_compression_for_each_readout_position_keeps_the_image() -> None:
    found = volume(SMALL, coils=6)
    every = reconstruct(found.scan, UNCOMPRESSED)
    few = reconstruct(found.scan, QUICK)
    figures = few.report["preparation"]["coil_compression"]
    assert figures["fewest_virtual_coils"] < figures["virtual_coils"] <= 6
    inside = np.abs(found.truth) > 0
    assert nrmse(few.image[inside], every.image[inside]) < 0.03


@pytest.mark.parametrize(
    ("axes", "fastest_first"),
    [
        (("coil", "kz", "ky", "kx"), False),
        (("kx", "ky", "coil", "kz"), False),
        (("kz", "kx", "ky", "coil"), True),
    ],
)
def test_any_order_of_axes_in_a_file_gives_the_same_image_and_geometry(
    tmp_path: Path, axes: tuple[str, ...], fastest_first: bool
) -> None:
    found = volume(SMALL, oversampling=2)
    attributes = {
        "field_of_view_mm": [80.0, 36.0, 48.0], "readout_oversampling": 2.0, "slice_direction": [0.0, 0.0, 1.0],
    }  # fmt: skip
    path = tmp_path / "scan.h5"
    order = [("coil", "kz", "ky", "kx").index(axis) for axis in (axes[::-1] if fastest_first else axes)]
    with h5py.File(path, "w") as file:
        file.attrs.update(layout="fallow-scan", layout_version=1)
        file["kspace"] = found.kspace.transpose(order)
        file["kspace"].attrs["axes_fastest_first" if fastest_first else "axes"] = ",".join(axes)
        file["kspace"].attrs.update(attributes)
        file["mask"] = found.mask.T.astype(np.uint8)
        file["mask"].attrs["axes"] = "ky,kz"
        file["noise"] = found.noise
        file["noise"].attrs["axes"] = "coil,sample"
    report = reconstruct_file(path, tmp_path / "image.h5", QUICK)
    image = read_image(tmp_path / "image.h5")
    assert image.axes == ("z", "y", "x")
    np.testing.assert_array_equal(image.image, reconstruct(found.scan, QUICK).image)
    assert image.attributes["field_of_view_mm"] == [40.0, 36.0, 48.0]
    assert image.attributes["slice_direction"] == [0.0, 0.0, 1.0]
    assert report["preparation"]["matrix"]["kept"] == [16, 18, 20]


def test_frames_and_averages_of_a_volume() -> None:
    found = volume(SMALL, sizes={"frame": 2, "average": 2}, noise=0.05)
    result = reconstruct(found.scan, QUICK)
    assert result.axes == ("frame", "z", "y", "x")
    inside = np.abs(found.truth[0, 0]) > 0
    # the brightnesses of the averages are 1 and 1.25, then 1.5 and 1.75
    for frame, brightness in enumerate((1.125, 1.625)):
        expected = brightness * np.abs(found.truth[0, 0])[inside]
        assert nrmse(np.abs(result.image[frame])[inside], expected) < 0.06
    tied = QUICK.model_copy(update={"temporal_strength": 0.2})
    with pytest.raises(InvalidSettings, match=r"temporal_strength.*volume of its own"):
        reconstruct(found.scan, tied)


def test_the_report_stays_small_and_names_readout_positions() -> None:
    found = volume((16, 16, 40))
    report = reconstruct(found.scan, QUICK.model_copy(update={"max_iterations": 3})).report
    figures = report["consistency"]["reduced_chi_squared"]
    assert [figures["by_readout_position"][0]["from"], figures["by_readout_position"][-1]["to"]] == [0, 40]
    assert sum(group["samples"] for group in figures["by_readout_position"]) == figures["samples"]
    assert "by_slice" not in figures
    assert [plane["x"] for plane in report["solver"]["planes"]] == list(range(40))
    assert sum("objective" in plane for plane in report["solver"]["planes"]) <= 16


def test_positions_beyond_the_ends_of_the_object_are_no_fault_of_the_maps() -> None:
    found = volume((20, 22, 40))
    report = reconstruct(found.scan, QUICK.model_copy(update={"max_iterations": 1})).report
    slices = report["preparation"]["coil_maps"]["slices"]
    shares = [each["object_share"] for each in slices]
    assert shares[:4] == [1.0] * 4
    assert min(shares) < 1.0
    # nor does an object fold over where there is none
    assert [each["folded_share"] for each in slices[:4]] == [0.0] * 4
    assert "object-exceeds-field-of-view" not in [finding["code"] for finding in report["findings"]]


def test_residual_of_a_volume_is_as_large_as_its_noise() -> None:
    """Fully sampled without penalties, an image explains one of C coils' combinations: C - 1 of them are left."""
    found = volume(SMALL, mask=np.ones(SMALL[:2], bool))
    settings = Settings(wavelet_strength=0, tv_strength=0, coil_compression=None)
    figures = reconstruct(found.scan, settings).report["consistency"]["reduced_chi_squared"]
    assert figures["value"] == pytest.approx(3 / 4, abs=0.12)


def test_mask_missing_is_inferred_line_by_line() -> None:
    found = volume(SMALL)
    inferred = volume(SMALL, has_mask=False)
    np.testing.assert_array_equal(
        reconstruct(found.scan, QUICK).image, reconstruct(inferred.scan, QUICK).image
    )
    codes = [finding.code for finding in inspect(inferred.scan).findings]
    assert "mask-inferred" in codes


def test_zeros_inside_lines_are_values_and_missing_ends_of_all_lines_are_not() -> None:
    """Quantised data hold zeros by chance; a partial echo leaves the same end out of every line."""
    found = volume(SMALL, coils=1, has_mask=False)
    quantised = found.kspace.copy()
    quantised[:, :, :, 3] *= np.random.default_rng(0).random(SMALL[:2]) < 0.5
    axes = ("coil", "kz", "ky", "kx")
    facts = inspect(Scan(LabelledArray(quantised, axes))).sampling
    assert not facts["varies_along_readout"]
    assert facts["sampled_fraction"] == pytest.approx(found.mask.mean())
    quantised[..., :5] = 0
    partial = Scan(LabelledArray(quantised, axes))
    facts = inspect(partial).sampling
    assert facts["varies_along_readout"]
    assert facts["sampled_fraction"] == pytest.approx(found.mask.mean() * 15 / 20)
    with pytest.raises(InvalidSettings, match="choose joint"):
        reconstruct(partial, QUICK)
    report = reconstruct(partial, QUICK.model_copy(update={"volume": "joint"})).report
    assert "partial-echo" in [finding["code"] for finding in report["findings"]]
    masked = Scan(LabelledArray(quantised, axes), mask_array=LabelledArray(found.mask, ("kz", "ky")))
    (empty,) = [finding for finding in inspect(masked).findings if finding.code == "sampled-zeros"]
    assert empty.numbers["positions"] == 5 * found.mask.sum()


def test_facts_are_those_of_the_plane_of_phase_encodes() -> None:
    found = volume(SMALL, oversampling=2, attributes={"field_of_view_mm": [80.0, 36.0, 48.0]})
    facts = inspect(found.scan).as_dict()
    assert facts["axes"] == {"coil": 4, "kz": 16, "ky": 18, "kx": 40}
    assert facts["sampling"]["net_acceleration"] == pytest.approx(found.mask.size / found.mask.sum())
    assert facts["sampling"]["calibration"]["rows"] >= 12
    assert not facts["sampling"]["varies_along_readout"]
    assert facts["sampling"]["readouts"] == found.mask.sum()
    assert facts["image"]["axes"] == ["z", "y", "x"]
    assert facts["image"]["matrix"] == [16, 18, 20]
    assert facts["image"]["pixel_size_mm"] == [3.0, 2.0, 2.0]
    assert set(facts["sampling"]["resolution"]) == {"kz", "ky", "kx"}
    check_job(facts, Settings())


def test_reference_and_maps_of_a_volume(tmp_path: Path) -> None:
    found = volume(SMALL, mask=plane_mask(SMALL[:2], 2, block=2))
    with pytest.raises(InvalidScan, match="/reference"):
        reconstruct(found.scan, QUICK)
    block = transform3(fruit3(SMALL) * maps3(4, SMALL))[:, 2:14, 3:15, 4:16].astype(np.complex64)
    reference = Scan(
        found.scan.kspace_array,
        mask_array=found.scan.mask_array,
        noise_array=found.scan.noise_array,
        reference_array=LabelledArray(3 * block, ("coil", "kz", "ky", "kx")),
    )
    inside = np.abs(found.truth) > 0
    image = reconstruct(reference, QUICK).image
    assert nrmse(np.abs(image)[inside], np.abs(found.truth)[inside]) < 0.08
    path = tmp_path / "scan.h5"
    write_scan(
        path, found.kspace, ("coil", "kz", "ky", "kx"), mask=found.mask, mask_axes=("kz", "ky"),
        noise=found.noise, sensitivity=maps3(4, SMALL).transpose(3, 0, 1, 2).astype(np.complex64),
        sensitivity_axes=("x", "coil", "z", "y"),
    )  # fmt: skip
    with open_scan(path) as scan:
        result = reconstruct(scan, QUICK)
    assert result.report["preparation"]["coil_maps"]["method"] == "supplied"
    assert nrmse(result.image[inside], found.truth[inside]) < 0.05


def test_noise_estimated_from_the_periphery_is_near_the_measured_noise() -> None:
    found = volume((24, 24, 32), has_noise=False, noise=0.05)
    report = reconstruct(found.scan, QUICK.model_copy(update={"max_iterations": 2})).report
    known = reconstruct(
        volume((24, 24, 32), noise=0.05).scan, QUICK.model_copy(update={"max_iterations": 2})
    ).report
    assert report["preparation"]["whitening"]["source"] == "periphery"
    ratio = report["preparation"]["noise_units"]["kappa"] / known["preparation"]["noise_units"]["kappa"]
    assert 0.6 < ratio < 1.1


def test_the_unit_of_a_noise_free_volume_is_its_largest_zero_filled_value() -> None:
    """A Gaussian, whose k-space is a Gaussian that ends in rounding (Bracewell)."""
    z, y, x = (axis * 12 for axis in grid3((24, 24, 24)))
    image = np.exp(-(z**2 + y**2 + x**2) / (2 * 2.2**2))
    kspace = transform3(np.stack([image, 0.5j * image])).astype(np.complex64)
    scan = Scan(
        LabelledArray(kspace, ("coil", "kz", "ky", "kx")),
        mask_array=LabelledArray(np.ones((24, 24), bool), ("kz", "ky")),
    )
    report = reconstruct(scan, QUICK.model_copy(update={"max_iterations": 2})).report
    zero_filled = np.sqrt(1 + 0.5**2)
    assert report["preparation"]["whitening"]["source"] == "none"
    assert report["preparation"]["noise_units"]["kappa"] == pytest.approx(1 / zero_filled, rel=1e-4)


def test_middle_plane_is_that_of_the_full_transform() -> None:
    found = volume((15, 12, 10))
    samples, _ = middle_plane(found.scan)
    expected = inverse3(found.kspace)[:, 7]
    np.testing.assert_allclose(inverse3(samples, (-2, -1)), expected, atol=1e-5)


def test_refusals() -> None:
    found = volume(SMALL)
    varying = np.repeat(found.mask[..., np.newaxis], SMALL[2], axis=2)
    varying[3, :, 4] = False
    scan = volume(SMALL, mask=varying).scan
    with pytest.raises(InvalidSettings, match="constant along kx"):
        reconstruct(scan, QUICK)
    assert "readout-undersampled" in [finding.code for finding in inspect(scan).findings]
    with pytest.raises(InvalidScan, match="slice"):
        Scan(LabelledArray(np.ones((2, 3, 4, 5), np.complex64), ("slice", "kz", "ky", "kx")))
    empty = found.kspace.copy()
    empty[1, 2, 3, 4] = np.nan
    with pytest.raises(InvalidScan, match="NaN or Inf in kz 2"):
        inspect(Scan(LabelledArray(empty, ("coil", "kz", "ky", "kx"))))
    with pytest.raises(InvalidScan, match="false everywhere"):
        inspect(volume(SMALL, mask=np.zeros(SMALL[:2], bool)).scan)
