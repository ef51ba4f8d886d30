"""The sample scans are what their generator says, small enough to carry, and readable."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from recon.formats import open_scan
from recon.phantom import pixel_centres, rasterise
from recon.pipeline import reconstruct
from recon.scan import PlaneIndex
from recon.settings import parse_settings
from sample_kspace.make_sample import (
    ACCELERATION,
    CALIBRATION_LINES,
    COILS,
    MATRIX,
    NOISE_SAMPLE_TIME_US,
    RECEIVER_NOISE_BANDWIDTH,
    SAMPLE_TIME_US,
    Sample,
    fruit,
    make_sample,
    write_sample,
)
from tests.recon.helpers import Array

FOLDER = Path(__file__).parents[2] / "sample_kspace"
NAMES = ("cut_fruit_full.h5", "cut_fruit_undersampled.h5")


@pytest.fixture(scope="module")
def sample() -> Sample:
    return make_sample()


@pytest.mark.parametrize("name", NAMES)
def test_files_hold_what_the_generator_makes(sample: Sample, name: str) -> None:
    with open_scan(FOLDER / name) as scan:
        assert scan.axes == {"slice": 2, "coil": COILS, "ky": MATRIX[0], "kx": MATRIX[1]}
        noise = scan.noise()
        assert noise is not None
        np.testing.assert_allclose(noise, sample.noise, rtol=0, atol=1e-5 * np.abs(sample.noise).max())
        for index in scan.planes():
            expected = sample.kspace[index.slice]
            if name == "cut_fruit_full.h5":
                assert scan.mask(index).all()
            else:
                expected = expected * sample.mask[:, None]
                np.testing.assert_array_equal(scan.mask(index), np.repeat(sample.mask[:, None], MATRIX[1], 1))
            kspace = scan.kspace(index)
            np.testing.assert_allclose(kspace, expected, rtol=0, atol=1e-5 * np.abs(expected).max())


def test_generator_writes_the_same_bytes_every_time(tmp_path: Path) -> None:
    (tmp_path / "a").mkdir()
    (tmp_path / "b").mkdir()
    first, second = write_sample(tmp_path / "a"), write_sample(tmp_path / "b")
    assert [path.name for path in first] == list(NAMES)
    for a, b in zip(first, second, strict=True):
        assert a.read_bytes() == b.read_bytes()


@pytest.mark.parametrize("name", NAMES)
def test_files_stay_small(name: str) -> None:
    assert (FOLDER / name).stat().st_size < 5_000_000


def test_mask_has_the_stated_lines(sample: Sample) -> None:
    assert sample.mask.sum() == round(MATRIX[0] / ACCELERATION) == 60
    centre = MATRIX[0] // 2
    assert sample.mask[centre - CALIBRATION_LINES // 2 : centre + CALIBRATION_LINES // 2].all()


def test_noise_scan_has_the_stated_covariance(sample: Sample) -> None:
    """Source: Kellman & McVeigh 2005: white noise, its variance proportional to bandwidth."""
    estimated = sample.noise @ sample.noise.conj().T / sample.noise.shape[1]
    expected = sample.covariance * SAMPLE_TIME_US / NOISE_SAMPLE_TIME_US * RECEIVER_NOISE_BANDWIDTH
    deviation = np.abs(estimated - expected) / np.sqrt(np.outer(np.diag(expected), np.diag(expected)).real)
    assert deviation.max() < 5 / np.sqrt(sample.noise.shape[1])


def test_defects_lie_in_the_fruit_and_slices_differ() -> None:
    first, second = fruit(0), fruit(1)
    assert first != second
    for parts in (first, second):
        peel = parts[0].semi_axes
        for part in parts[1:]:
            x, y = part.centre
            assert np.hypot(x / peel[0], y / peel[1]) < 0.9
        picture = rasterise(parts, (300, 300)).real
        assert picture.min() > -1e-9  # a signal density cannot be negative


def test_undersampled_scan_shows_zeros_where_nothing_was_measured(sample: Sample) -> None:
    with open_scan(FOLDER / NAMES[1]) as scan:
        kspace = scan.kspace(PlaneIndex(slice=1))
        assert not kspace[:, ~sample.mask].any()
        assert kspace[:, sample.mask].all()


def _reconstruct(name: str, **values: Any) -> tuple[Array, dict[str, Any]]:
    with open_scan(FOLDER / name) as scan:
        result = reconstruct(scan, parse_settings(values))
    return np.abs(result.image).astype(np.float64), result.report


def _contrast(image: Array, centre: tuple[float, float], radius: float) -> float:
    """Return the mean within a radius over the mean of a ring about it, less one; centre as `fruit` has it."""
    y, x = (pixel_centres(n) for n in MATRIX)
    distance = np.hypot(y[:, None] - centre[1], x[None, :] - centre[0])
    ring = (distance > 1.6 * radius) & (distance < 2.2 * radius)
    return float(image[distance < 0.7 * radius].mean() / image[ring].mean() - 1)


def test_sample_gives_the_image_that_the_readme_promises() -> None:
    """Figures of `sample_kspace/README.md`, against the least-squares image of the fully sampled twin."""
    full, report = _reconstruct(NAMES[0], wavelet_strength=0, tv_strength=0)
    assert report["findings"] == []
    inside = full > 0.1 * full.max()

    def error(image: Array) -> float:
        return float(np.linalg.norm((image - full)[inside]) / np.linalg.norm(full[inside]))

    ours, report = _reconstruct(NAMES[1])
    assert report["findings"] == []
    assert report["solver"]["converged_planes"] == 2
    assert report["consistency"]["reduced_chi_squared"]["value"] == pytest.approx(0.9, abs=0.06)
    assert error(ours) == pytest.approx(0.044, abs=0.005)
    assert error(_reconstruct(NAMES[1], method="tikhonov")[0]) == pytest.approx(0.08, abs=0.01)
    assert error(_reconstruct(NAMES[1], method="zero-filled")[0]) == pytest.approx(0.14, abs=0.01)
    tunnel = fruit(1)[-1]
    for image in (full, ours):
        assert _contrast(image[1], tunnel.centre, tunnel.semi_axes[0]) < -0.15


def test_faint_patch_is_a_tenth_darker_and_survives() -> None:
    patch = fruit(0)[-1]
    assert patch.value == pytest.approx(-0.1 * 0.8, rel=0.01)
    y, x = (pixel_centres(n) for n in MATRIX)
    turn = np.deg2rad(patch.angle)
    dx, dy = x[None, :] - patch.centre[0], y[:, None] - patch.centre[1]
    along, across = np.cos(turn) * dx + np.sin(turn) * dy, np.cos(turn) * dy - np.sin(turn) * dx
    distance = np.hypot(along / patch.semi_axes[0], across / patch.semi_axes[1])
    flesh = rasterise(fruit(0)[:-1], MATRIX).real > 0.6
    levels = []
    for name in NAMES:
        image, _ = _reconstruct(name)
        levels.append(
            image[0][flesh & (distance < 0.8)].mean()
            / image[0][flesh & (distance > 1.2) & (distance < 1.9)].mean()
        )
    assert levels[0] < 0.97
    assert levels[1] < 0.97
    assert levels[1] == pytest.approx(levels[0], abs=0.03)
