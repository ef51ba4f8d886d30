"""Repeated measurements: means, their weights, and what noise units make of them."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from recon.averages import block_scale, relative_weights
from recon.axes import LabelledArray
from recon.coils.noise import estimate_whitening
from recon.errors import InvalidScan
from recon.formats import open_scan, write_scan
from recon.inspection import inspect
from recon.operators.encoding import Encoding
from recon.pipeline import reconstruct
from recon.preparation import Preparation
from recon.prepare import prepare
from recon.scan import PlaneIndex, Scan
from recon.settings import Settings, parse_settings
from tests.recon.helpers import Array, coil_maps, complex_normal
from tests.recon.scans import error, example

AXES = ("average", "coil", "ky", "kx")
SIGMA = 0.02


def silently(_: str, __: float) -> None:
    """Progress that nobody reads."""


def repeated(masks: Array, *, noise: float = SIGMA, has_noise_scan: bool = True) -> tuple[Scan, Array, Any]:
    """A scan of averages that measure the lines of `masks` (average, ky); its clean k-space; the example behind it."""
    found = example(noise=0.0)
    full = example(noise=0.0, every=1)
    clean = np.asarray(full.scan.kspace_array.data)
    rng = np.random.default_rng(5)
    kspace = clean + noise * complex_normal(rng, (len(masks), *clean.shape))
    kspace = kspace * masks[:, np.newaxis, :, np.newaxis]
    silent = noise * complex_normal(rng, (4, 4000))
    scan = Scan(
        LabelledArray(kspace.astype(np.complex64), AXES),
        mask_array=LabelledArray(masks, ("average", "ky")),
        noise_array=LabelledArray(silent.astype(np.complex64), ("coil", "sample"))
        if has_noise_scan
        else None,
    )
    return scan, clean, found


def centre_repeated(lines: int = 48) -> Array:
    """Four averages: all measure the centre, one of them every second line outside."""
    masks = np.zeros((4, lines), np.bool_)
    masks[:, lines // 2 - 8 : lines // 2 + 8] = True
    masks[2, 1::2] = True
    return masks


@pytest.mark.parametrize("method", ["compressed-sensing", "tikhonov", "zero-filled"])
def test_four_averages_of_fourfold_noise_equal_one(method: str) -> None:
    """The same mean with the same noise is the same problem, so that one strength fits both."""
    found = example()
    one = found.scan
    mean = np.asarray(one.kspace_array.data)
    apart = 0.03 * complex_normal(np.random.default_rng(1), (4, *mean.shape)) * (mean != 0)
    kspace = (mean + apart - apart.mean(axis=0)).astype(np.complex64)
    assert one.noise_array is not None
    four = replace(
        one,
        kspace_array=LabelledArray(kspace, AXES),
        noise_array=LabelledArray(2 * np.asarray(one.noise_array.data), ("coil", "sample")),
    )
    settings = parse_settings({"method": method})
    expected, result = reconstruct(one, settings), reconstruct(four, settings)
    assert result.image.shape == expected.image.shape
    assert np.abs(result.image - expected.image).max() < 1e-5 * np.abs(expected.image).max()
    kappas = [each.report["preparation"]["noise_units"]["kappa"] for each in (expected, result)]
    assert kappas[1] == pytest.approx(kappas[0], rel=1e-5)
    assert prepare(four, settings, silently).load(PlaneIndex()).weights is None
    chi = [each.report["consistency"]["reduced_chi_squared"]["value"] for each in (expected, result)]
    assert chi[1] == pytest.approx(chi[0], rel=1e-4)


def test_weighted_means_are_the_stacked_measurements() -> None:
    """Least squares over all samples one by one and over weighted means have the same normal equations."""
    rng = np.random.default_rng(2)
    shape, averages = (12, 11), 5
    maps = coil_maps(3, shape)
    masks = rng.random((averages, *shape)) < 0.5
    data = complex_normal(rng, (averages, 3, *shape)) * masks[:, np.newaxis]
    counts = masks.sum(axis=0)
    mean_count = counts[counts > 0].mean()
    weighted = Encoding(maps, counts > 0, weights=relative_weights(counts, mean_count))
    mean = data.sum(axis=0) / np.maximum(counts, 1)
    x = complex_normal(rng, shape)
    parts = [Encoding(maps, mask) for mask in masks]
    stacked = sum(part.normal(x) for part in parts) / mean_count
    np.testing.assert_allclose(weighted.normal(x), stacked, atol=1e-6)
    pairs = zip(parts, data, strict=True)
    right = sum(part.adjoint(part.to_range(samples)) for part, samples in pairs) / mean_count
    np.testing.assert_allclose(weighted.adjoint(weighted.to_range(mean)), right, atol=1e-6)
    np.testing.assert_allclose(weighted.to_kspace(weighted.to_range(mean)), mean, atol=1e-6)


def test_residual_of_the_truth_has_unit_variance_at_every_count() -> None:
    """Reduced chi-squared of the true image is 1: scipy.stats' sd of a mean of M exponentials, 1/sqrt(M)."""
    scan, clean, _ = repeated(centre_repeated())
    preparation = prepare(scan, Settings(), silently)
    assert preparation.mean_count == pytest.approx((4 * 16 + 16) / 32)
    plane = preparation.load(PlaneIndex())
    assert plane.weights is not None
    truth = preparation.whitening.apply(clean.astype(np.complex64)) * plane.weights
    squares = np.abs(plane.weighted - truth) ** 2
    counts = np.broadcast_to(centre_repeated().sum(axis=0)[:, np.newaxis], plane.mask.shape)
    for count in (1, 4):
        values = squares[:, counts == count]
        assert values.mean() == pytest.approx(1, abs=5 / np.sqrt(values.size) + 0.04)
    assert not squares[:, counts == 0].any()


def test_calibration_block_has_the_noise_of_the_whitener() -> None:
    """The centre is quieter than the mean: its block is scaled so that unit noise is what the maps see."""
    scan, clean, _ = repeated(centre_repeated())
    preparation = prepare(scan, Settings(), silently)
    (raw,) = preparation.calibration[0].blocks
    block = preparation.whitening.apply(raw)
    inside = preparation.whitening.apply(clean.astype(np.complex64))[:, 16:32, 6:38]
    level = np.vdot(inside, block).real / np.vdot(inside, inside).real
    assert level == pytest.approx(np.sqrt(4 / 2.5), rel=0.01)
    assert np.mean(np.abs(block - level * inside) ** 2) == pytest.approx(1, abs=0.1)
    assert block_scale(np.array([4, 4, 1, 0])) == pytest.approx(1 / np.sqrt(np.mean([0.25, 0.25, 1])))


@pytest.mark.parametrize("method", ["compressed-sensing", "tikhonov", "zero-filled"])
def test_unequal_averages_are_reconstructed(method: str) -> None:
    scan, _, found = repeated(centre_repeated())
    result = reconstruct(scan, parse_settings({"method": method}))
    assert error(result.image, found) < (0.35 if method == "zero-filled" else 0.08)
    codes = [finding["code"] for finding in result.report["findings"]]
    assert "averages-unequal" in codes
    if method == "compressed-sensing":
        chi = result.report["consistency"]["reduced_chi_squared"]
        assert 0.6 < chi["value"] < 1.2
        assert np.mean(chi["by_coil"]) == pytest.approx(chi["value"], rel=0.02)


def test_frames_of_unequal_averages_are_solved_together() -> None:
    """The weights of each frame enter the joint problem: two equal frames give the image of one."""
    scan, _, found = repeated(centre_repeated())
    twice = replace(
        scan,
        kspace_array=LabelledArray(
            np.stack([np.asarray(scan.kspace_array.data)] * 2), ("frame", *scan.kspace_array.labels)
        ),
    )
    settings = parse_settings(
        {"wavelet_strength": 0.05, "tv_strength": 0.05, "coil_maps": "adaptive", "coil_compression": None}
    )
    alone = reconstruct(scan, settings).image
    joint = reconstruct(twice, settings.model_copy(update={"temporal_strength": 0.2})).image
    assert np.linalg.norm(joint - alone) < 0.01 * np.linalg.norm(alone)
    assert error(joint[0], found) < 0.08


def test_mask_of_each_average_is_inferred_from_its_zeros() -> None:
    scan, _, _ = repeated(centre_repeated())
    inferred = replace(scan, mask_array=None)
    given, found = scan.samples(PlaneIndex()), inferred.samples(PlaneIndex())
    np.testing.assert_array_equal(given.counts, found.counts)
    np.testing.assert_array_equal(given.kspace, found.kspace)
    np.testing.assert_array_equal(inferred.mask(PlaneIndex()), given.mask)
    np.testing.assert_array_equal(scan.mask(PlaneIndex()), given.mask)
    np.testing.assert_array_equal(inferred.kspace(PlaneIndex()), given.kspace)


def test_facts_count_averages() -> None:
    """Readouts are those of all averages; net acceleration compares with as many averages, fully sampled."""
    scan, _, _ = repeated(centre_repeated())
    sampling = inspect(scan).sampling
    assert sampling["readouts"] == 4 * 16 + 16
    assert sampling["net_acceleration"] == pytest.approx(4 * 48 / 80)
    assert sampling["sampled_fraction"] == pytest.approx(32 / 48)
    assert sampling["samples_per_position"] == {"fewest": 1, "most": 4, "mean": 2.5}
    equal, _, _ = repeated(np.ones((3, 48), np.bool_))
    facts = inspect(equal)
    assert "averages-combined" in [finding.code for finding in facts.findings]
    assert facts.sampling["net_acceleration"] == 1


def test_noise_without_a_noise_scan_is_that_of_the_mean() -> None:
    """The periphery shows single samples; whitening is for means of four."""
    scan, _, _ = repeated(np.ones((4, 48), np.bool_), noise=0.2, has_noise_scan=False)
    psi = np.diag(estimate_whitening(scan, 4.0).covariance).real
    assert psi == pytest.approx(0.2**2 / 4, rel=0.35)
    assert reconstruct(scan).report["preparation"]["averages"] == {"mean_count": 4.0}


def test_averages_are_read_one_by_one() -> None:
    scan, _, _ = repeated(np.ones((6, 48), np.bool_))
    data = np.asarray(scan.kspace_array.data)
    sizes = []

    class Spy:
        shape = data.shape

        def __getitem__(self, key: Any) -> Array:
            part: Array = data[key]
            sizes.append(part.size)
            return part

    reconstruct(replace(scan, kspace_array=LabelledArray(Spy(), AXES)), Settings(max_iterations=2))
    assert max(sizes) == data[0].size


def test_average_axis_in_any_order_of_a_file(tmp_path: Path) -> None:
    scan, _, _ = repeated(centre_repeated())
    data = np.asarray(scan.kspace_array.data)
    path = tmp_path / "scan.h5"
    write_scan(
        path, np.moveaxis(data, 0, -1), (*AXES[1:], "average"), mask=centre_repeated(), mask_axes=("average", "ky")
    )  # fmt: skip
    with open_scan(path) as read:
        np.testing.assert_array_equal(read.samples(PlaneIndex()).kspace, scan.samples(PlaneIndex()).kspace)
        assert read.image_axes == ("y", "x")


def test_averages_that_cannot_be_used_are_refused() -> None:
    scan, _, _ = repeated(centre_repeated())
    with pytest.raises(InvalidScan, match="3 along average"):
        replace(scan, mask_array=LabelledArray(centre_repeated()[:3], ("average", "ky")))
    with pytest.raises(InvalidScan, match="false everywhere"):
        inspect(replace(scan, mask_array=LabelledArray(np.zeros((4, 48), np.bool_), ("average", "ky"))))
    data = np.array(scan.kspace_array.data)
    data[2, 1, 20, 3] = np.nan
    with pytest.raises(InvalidScan, match="NaN or Inf in average 2"):
        inspect(replace(scan, kspace_array=LabelledArray(data, AXES)))


def test_average_that_measured_nothing_is_left_out() -> None:
    scan, _, _ = repeated(centre_repeated())
    empty = centre_repeated()
    empty[0] = False
    assert inspect(replace(scan, mask_array=LabelledArray(empty, ("average", "ky")))).sampling[
        "samples_per_position"
    ] == {
        "fewest": 1,
        "most": 3,
        "mean": (16 * 3 + 16) / 32,
    }


def test_weights_pay_where_counts_differ(monkeypatch: pytest.MonkeyPatch) -> None:
    """Every fourth line measured sixteen times among lines measured once: noise of equal weight would spoil them."""
    masks = np.zeros((16, 48), np.bool_)
    masks[0] = np.arange(48) % 4 != 3
    masks[:, ::4] = masks[:, 16:32] = True
    scan, _, found = repeated(masks, noise=0.4)
    settings = parse_settings({"wavelet_strength": 0.2, "tv_strength": 0.2})
    weighted = error(reconstruct(scan, settings).image, found)
    load = Preparation.load
    monkeypatch.setattr(Preparation, "load", lambda self, index: load(self, index)._replace(weights=None))
    assert weighted < 0.6 * error(reconstruct(scan, settings).image, found)


def test_scatter_of_averages_is_their_noise() -> None:
    """Source: statistics: the variance within positions is that of the noise, whatever the object."""
    scan, _, _ = repeated(centre_repeated())
    assert inspect(scan).sampling["scatter_over_noise"] == pytest.approx(1, abs=0.06)
    noise = scan.noise_array
    assert noise is not None
    faster = replace(
        scan,
        noise_array=LabelledArray(2 * np.asarray(noise.data), noise.labels),
        attributes={"sample_time_us": 8.0},
        noise_attributes={"sample_time_us": 2.0},
    )
    assert inspect(faster).sampling["scatter_over_noise"] == pytest.approx(1, abs=0.06)
    assert inspect(example().scan).sampling["scatter_over_noise"] is None
    assert inspect(replace(scan, noise_array=None)).sampling["scatter_over_noise"] is None


@pytest.mark.parametrize("turn", [0.0, 0.3])
def test_averages_that_disagree_are_reported(turn: float) -> None:
    """A phase that drifts from average to average."""
    scan, _, _ = repeated(centre_repeated())
    phases = np.exp(1j * turn * np.arange(4)).reshape(-1, 1, 1, 1)
    kspace = (np.asarray(scan.kspace_array.data) * phases).astype(np.complex64)
    found = inspect(replace(scan, kspace_array=LabelledArray(kspace, AXES)))
    assert ("averages-disagree" in [finding.code for finding in found.findings]) == (turn > 0)
