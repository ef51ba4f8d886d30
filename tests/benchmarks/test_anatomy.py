"""The simulated scans are what they claim to be, and the default settings do on them what they promise."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from benchmarks import anatomy
from benchmarks.anatomy import (
    CASES,
    HELD_OUT,
    AnatomyMissingError,
    Case,
    SimulatedScan,
    as_scan,
    nrmse,
    simulate,
)
from benchmarks.jobs import FIXED
from benchmarks.process import idle_bytes, run_job
from benchmarks.quality import REDUCED_CASES, Row, evaluate, table, true_problem
from benchmarks.scan_files import write_slices
from benchmarks.scanner import centred_ifft, draw_noise
from benchmarks.search import COARSE
from recon.caution import CAUTION
from recon.coils.noise import whitening_from
from recon.consistency import ResidualFigures, residual
from recon.pipeline import reconstruct
from recon.scan import PlaneIndex
from recon.settings import Settings

SMALL = Case("sagittal", 0, (128, 120), 3, 25, 5)


@pytest.fixture(scope="module")
def small() -> SimulatedScan:
    return simulate(SMALL)


def test_cases_span_what_they_must() -> None:
    assert len(CASES) >= 10
    assert len({case.name for case in CASES}) == len(CASES)
    assert {case.picture for case in CASES} == {"axial", "sagittal"}
    assert (min(c.acceleration for c in CASES), max(c.acceleration for c in CASES)) == (2, 6)
    assert (min(c.snr for c in CASES), max(c.snr for c in CASES)) == (12, 80)


@pytest.mark.anatomy
def test_no_matrix_exceeds_three_quarters_of_the_native_grid() -> None:
    for case in (*CASES, *HELD_OUT):
        native = anatomy.native_picture(case).shape
        assert all(n <= 0.75 * full for n, full in zip(case.matrix, native, strict=True))


def test_too_large_a_matrix_is_refused() -> None:
    with pytest.raises(ValueError, match=r"0\.75"):
        simulate(dataclasses.replace(SMALL, matrix=(200, 120)))


def test_a_missing_package_is_named() -> None:
    with pytest.raises(AnatomyMissingError, match="not-a-distribution"):
        anatomy.installed_file("not-a-distribution", "picture.nii.gz")


def test_signal_to_noise_ratio_is_the_one_asked_for(small: SimulatedScan) -> None:
    """Source: Roemer et al. 1990: measured on many noise draws of the fully sampled optimal combination."""
    rng = np.random.default_rng(0)
    precision = np.linalg.inv(small.covariance)
    weights = np.einsum("cyx,cd->dyx", small.maps.conj(), precision)
    power = np.einsum("dyx,dyx->yx", weights, small.maps).real
    deviations = []
    for _ in range(30):
        noise = centred_ifft(draw_noise(small.covariance, SMALL.matrix, rng))
        deviations.append(np.abs(np.einsum("dyx,dyx->yx", weights, noise) / power) ** 2)
    sd = np.sqrt(np.mean(deviations, axis=0))
    snr = np.mean(np.abs(small.image[small.object_mask]) / sd[small.object_mask])
    assert snr == pytest.approx(SMALL.snr, rel=0.03)


def test_true_image_and_maps_explain_the_samples(small: SimulatedScan) -> None:
    """The cropped product of object and coil fields is nearly the product of cropped object and fields.

    What differs lies at the rim of k-space, far below the noise: reduced chi-squared of the truth is one.
    """
    whitening = whitening_from(small.covariance, "noise-scan", 0)
    kspace = whitening.apply(small.kspace)
    figures = ResidualFigures(SMALL.matrix, whitening, {})
    left = residual(small.image, whitening.apply(small.maps), kspace, small.mask)
    figures.see(PlaneIndex(), left, kspace, small.mask)
    assert figures.as_dict()["reduced_chi_squared"]["value"] == pytest.approx(1, abs=0.03)


def test_noise_scan_and_spread_are_as_asked(small: SimulatedScan) -> None:
    estimated = small.noise @ small.noise.conj().T / small.noise.shape[1]
    scale = np.sqrt(np.outer(np.diag(small.covariance), np.diag(small.covariance)).real)
    assert (np.abs(estimated - small.covariance) / scale).max() < 5 / np.sqrt(small.noise.shape[1])
    sd = np.sqrt(np.diag(small.covariance).real)
    assert sd.max() / sd.min() == pytest.approx(SMALL.noise_spread, rel=1e-6)
    correlation = np.abs(small.covariance) / scale
    assert correlation[0, 1] == pytest.approx(SMALL.noise_correlation)


def test_mask_has_the_lines_of_its_acceleration(small: SimulatedScan) -> None:
    lines = small.mask[:, 0]
    assert lines.sum() == round(128 / 3)
    assert lines[64 - 12 : 64 + 12].all()
    assert (small.mask == lines[:, None]).all()
    assert not small.kspace[:, ~small.mask].any()


def test_same_case_gives_the_same_numbers(small: SimulatedScan) -> None:
    again = simulate(SMALL)
    np.testing.assert_array_equal(again.kspace, small.kspace)
    np.testing.assert_array_equal(again.noise, small.noise)


def test_error_measure() -> None:
    truth = np.zeros((8, 8))
    truth[2:6, 2:6] = 4.0
    fake = SimulatedScan(
        *(np.zeros(1, np.complex64),) * 2, np.ones((8, 8), bool), np.zeros(1, np.complex64),
        *(np.zeros(1, np.complex128),) * 3, truth, truth > 0.4,
    )  # fmt: skip
    assert nrmse(truth, fake) == (0, 0)
    best, unscaled = nrmse(-1.1 * truth, fake)
    assert best == pytest.approx(0, abs=1e-12)
    assert unscaled == pytest.approx(0.1)
    assert nrmse(np.where(truth > 0, truth, 100.0), fake) == (0, 0)  # outside the object nothing counts


def test_problem_with_nothing_estimated_has_unit_noise(small: SimulatedScan) -> None:
    encoding, data, kappa = true_problem(small)
    u = (kappa * small.image * np.sqrt(np.sum(np.abs(small.maps) ** 2, axis=0))).astype(np.complex64)
    left = (data - encoding.forward(u))[:, small.mask]
    assert np.mean(np.abs(left) ** 2) == pytest.approx(1, abs=0.03)
    power = np.sum(np.abs(encoding.maps) ** 2, axis=0)[small.object_mask]
    assert power.mean() == pytest.approx(1, rel=1e-4)


def test_default_noise_units_agree_with_the_truth(small: SimulatedScan) -> None:
    """kappa of calibration and noise scan alone, against the one of true maps and true covariance."""
    _, _, kappa = true_problem(small)
    report = reconstruct(as_scan(small), Settings(max_iterations=1)).report
    assert report["preparation"]["noise_units"]["kappa"] == pytest.approx(kappa, rel=0.1)


@pytest.mark.anatomy
@pytest.mark.slow
@pytest.mark.parametrize("case", REDUCED_CASES, ids=lambda case: case.name)
def test_defaults_beat_tikhonov_and_come_near_the_best_possible(case: Case) -> None:
    """The table of `benchmarks/quality.py` on fewer cases and a coarser grid, with the limits of the whole."""
    row = evaluate(case, COARSE)
    assert row.ours[0] < row.tikhonov[0] < row.zero_filled[0]
    assert row.ratio < 1.15
    assert row.ours[1] < 1.05 * row.ours[0]
    assert row.ours_converged


def test_table_shows_every_figure() -> None:
    row = Row("head", (0.2, 0.21), (0.1, 0.11), 0.5, (0.06, 0.061), (0.05, 0.05), 0.2, 0.3, 1.5, 80, True)
    text = table([row])
    for shown in ("head", "20.00 (21.00)", "10.00 (11.00)", "6.00 (6.10)", "5.00 (5.00)", "1.200", CAUTION):
        assert shown in text


@pytest.mark.slow
def test_peak_memory_does_not_grow_with_the_number_of_slices(tmp_path: Path) -> None:
    """Ten times the slices, 38 MB more of k-space: less than 10 % more memory."""
    peaks = []
    for slices in (4, 40):
        scan = tmp_path / f"{slices}.h5"
        write_slices(scan, slices=slices, matrix=128)
        job = run_job(scan, tmp_path / "image.h5", {**FIXED, "max_iterations": 2})
        assert job.planes == slices
        peaks.append(job.peak_bytes)
    assert idle_bytes() < peaks[0]
    assert peaks[1] < 1.1 * peaks[0]
