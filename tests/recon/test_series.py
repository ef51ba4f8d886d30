"""Frames of one slice solved together (2-D + time) through the whole path."""

from __future__ import annotations

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.phantom import Ellipse, ellipse_kspace, ring_coils
from recon.pipeline import Reconstruction, reconstruct
from recon.scan import Scan
from recon.settings import parse_settings
from tests.recon.helpers import Array, complex_normal, numpy_inverse
from tests.recon.scans import OBJECT, PHASE

FRAMES, COILS, SHAPE = 10, 4, (48, 44)


@pytest.fixture(scope="module")
def moving() -> tuple[Scan, Array, Array]:
    """Return a beating object sampled with other lines in each frame, the truth, and where the object is."""
    rng = np.random.default_rng(2)
    maps = [coil * PHASE for coil in ring_coils(COILS)]
    clean = []
    for frame in range(FRAMES):
        beat = 0.14 + 0.05 * np.sin(2 * np.pi * frame / FRAMES)
        clean.append(ellipse_kspace([*OBJECT, Ellipse(0.8, (0.1, 0.35), (beat, beat))], SHAPE, maps=maps))
    kspace = np.array(clean)
    truth = np.sqrt(np.sum(np.abs(numpy_inverse(kspace)) ** 2, axis=1))
    deviation = 0.06
    kspace = kspace + deviation * complex_normal(rng, kspace.shape)
    mask = np.zeros((FRAMES, SHAPE[0]), np.bool_)
    mask[:, 20:28] = True
    for lines in mask:
        lines[rng.choice(SHAPE[0], 6, replace=False)] = True
    noise = deviation * complex_normal(rng, (COILS, 2000))
    scan = Scan(
        LabelledArray(kspace.astype(np.complex64), ("frame", "coil", "ky", "kx")),
        mask_array=LabelledArray(mask, ("frame", "ky")),
        noise_array=LabelledArray(noise.astype(np.complex64), ("coil", "sample")),
    )
    return scan, truth, truth > 0.1 * truth.max()


def error(result: Reconstruction, truth: Array, inside: Array) -> float:
    return float(np.linalg.norm((np.abs(result.image) - truth)[inside]) / np.linalg.norm(truth[inside]))


def test_frames_tied_together_beat_frames_alone_at_equal_data(moving: tuple[Scan, Array, Array]) -> None:
    """Temporal total variation, or a low-rank term: error of a moving object below 0.85 of frame by frame."""
    scan, truth, inside = moving
    alone = reconstruct(scan, parse_settings({"temporal_strength": 0}))
    assert [plane["frames"] for plane in alone.report["solver"]["planes"]] == [1] * FRAMES
    for settings in ({"temporal_strength": "auto"}, {"low_rank_strength": 8.0}):
        tied = reconstruct(scan, parse_settings(settings))
        (solved,) = tied.report["solver"]["planes"]
        assert solved["frames"] == FRAMES
        assert solved["stop_reason"] == "optimal"
        assert error(tied, truth, inside) < 0.85 * error(alone, truth, inside)
        assert len(tied.report["consistency"]["reduced_chi_squared"]["by_frame"]) == FRAMES


def test_series_keeps_what_moves(moving: tuple[Scan, Array, Array]) -> None:
    """The beating ellipse's signal in time follows the truth; it is not averaged away."""
    scan, truth, _ = moving
    tied = np.abs(reconstruct(scan, parse_settings({"temporal_strength": "auto"})).image)
    changing = np.std(truth, axis=0) > 0.5 * np.std(truth, axis=0).max()
    correlation = np.corrcoef(
        (tied - tied.mean(axis=0))[:, changing].ravel(), (truth - truth.mean(axis=0))[:, changing].ravel()
    )
    assert correlation[0, 1] > 0.9


def test_temporal_auto_is_resolved_in_the_report(moving: tuple[Scan, Array, Array]) -> None:
    """What was used is a number in the report's settings."""
    report = reconstruct(moving[0], parse_settings({"temporal_strength": "auto", "max_iterations": 2})).report
    assert report["settings"]["temporal_strength"] > 0
    messages = {finding["code"]: finding["message"] for finding in report["findings"]}
    assert messages["not-converged"].startswith("1 of 1 series stopped at 2 iterations")
