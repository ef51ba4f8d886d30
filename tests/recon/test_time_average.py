"""Coil maps from the mean over frames that sample other lines each."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.coils.calibration import prefers_time_average
from recon.coils.gathering import Gatherer
from recon.errors import CalibrationMissing
from recon.feasibility import check_job
from recon.inspection import inspect
from recon.phantom import Ellipse, ellipse_kspace, ring_coils
from recon.pipeline import reconstruct
from recon.scan import PlaneIndex, Scan
from recon.settings import Settings, parse_settings
from tests.recon.helpers import Array, complex_normal, numpy_inverse
from tests.recon.scans import PHASE, Example, error, example

FRAMES = 4


def lines(frames: int = FRAMES, rows: int = 48, every: int = 3, calibration: int = 0) -> Array:
    """Return masks (frame, ky): every third line, shifted by one from frame to frame, and perhaps a centre."""
    mask = (np.arange(rows)[np.newaxis] - np.arange(frames)[:, np.newaxis]) % every == 0
    mask[:, rows // 2 - calibration // 2 : rows // 2 - calibration // 2 + calibration] = True
    return np.asarray(mask)


def interleaved(sizes: dict[str, int] | None = None, **options: Any) -> Example:
    """Return a series without calibration lines in any frame, in which a small ellipse grows."""
    sizes = sizes or {"frame": FRAMES}
    full = example(sizes=sizes, every=1, **options)
    stored = full.scan.kspace_array
    kspace, brightness = np.asarray(stored.data), full.truth / full.truth[(0,) * len(sizes)]
    kspace = kspace / brightness.mean(axis=(-2, -1))[..., None, None, None]
    coils, encoded = ring_coils(4), kspace.shape[-2:]
    for frame in range(FRAMES):
        size = 0.08 + 0.02 * frame
        grown = ellipse_kspace(
            [Ellipse(0.6, (0.1, 0.3), (size, size))], encoded, maps=[c * PHASE for c in coils]
        )
        kspace[frame] += grown
    mask = lines().reshape(FRAMES, *(1,) * (kspace.ndim - 3), 48, 1)
    scan = replace(
        full.scan,
        kspace_array=LabelledArray((kspace * mask).astype(np.complex64), stored.labels),
        mask_array=LabelledArray(lines(), ("frame", "ky")),
    )
    truth = np.sqrt((np.abs(numpy_inverse(kspace)) ** 2).sum(axis=-3))
    return Example(scan, truth, full.inside)


@pytest.mark.parametrize(("method", "factor"), [("eigenvector", 1.12), ("adaptive", 1.15)])
def test_interleaved_frames_need_no_calibration_lines(method: str, factor: float) -> None:
    """Source: Kellman, Epstein & McVeigh 2001: maps from the temporal average of interleaved undersampling.

    The error is near that with maps from a fully sampled reference.
    """
    found = interleaved()
    settings = parse_settings({"coil_maps": method})
    check_job(inspect(found.scan).as_dict(), settings)
    result = reconstruct(found.scan, settings)
    with_reference = replace(
        found.scan,
        reference_array=LabelledArray(
            np.asarray(example(every=1).scan.kspace_array.data)[:, 8:40, 6:38], ("coil", "ky", "kx")
        ),
    )
    assert error(result.image, found) < factor * error(reconstruct(with_reference, settings).image, found)
    maps = result.report["preparation"]["coil_maps"]
    assert maps["source"] == "time-average"
    assert maps["slices"][0]["block"] == {"rows": 32, "columns": 32}
    assert result.report["sampling"]["time_average_calibration"] == {"rows": 48, "columns": 44}
    codes = [finding["code"] for finding in result.report["findings"]]
    assert "calibration-time-average" in codes
    assert "calibration-small" not in codes


def test_every_slice_and_contrast_has_its_own_average() -> None:
    found = interleaved(
        {"frame": FRAMES, "slice": 2, "contrast": 2}, attributes={"readout_oversampling": 2.0}
    )
    report = reconstruct(found.scan, Settings(max_iterations=3)).report
    slices = report["preparation"]["coil_maps"]["slices"]
    assert [(each["slice"], each["source"]) for each in slices] == [(0, "time-average"), (1, "time-average")]


def test_mean_is_that_of_the_frames_that_sampled_a_position() -> None:
    """Positions sampled by two of the frames hold the mean of two; noise of the block is that of one sample."""
    rng = np.random.default_rng(3)
    kspace = complex_normal(rng, (FRAMES, 2, 48, 44)).astype(np.complex64)
    mask = lines()
    scan = Scan(
        LabelledArray(kspace, ("frame", "coil", "ky", "kx")),
        mask_array=LabelledArray(mask, ("frame", "ky")),
    )
    gatherer = Gatherer(scan, (48, 44), needs_full=True)
    for index in scan.planes():
        gatherer.see(index, scan.samples(index))
    calibration = gatherer.finish()[0]
    assert calibration.source == "time-average"
    (block,) = calibration.blocks
    expected = (kspace * mask[:, np.newaxis, :, np.newaxis]).sum(axis=0) / mask.sum(axis=0)[:, np.newaxis]
    expected = expected[:, 8:40, 6:38]
    scale = np.vdot(expected, block).real / np.vdot(expected, expected).real
    np.testing.assert_allclose(block, scale * expected, atol=1e-5)
    assert np.mean(np.abs(block) ** 2) == pytest.approx(1, abs=0.1)


def test_frames_with_a_centre_of_their_own_keep_it() -> None:
    """The mean is used when its centre is larger, as counted up to the largest block that maps are computed from."""
    assert not prefers_time_average((24, 200), (24, 200))
    assert not prefers_time_average((32, 200), (200, 200))
    assert prefers_time_average((24, 200), (31, 200))
    full = example(sizes={"frame": 2})
    report = reconstruct(full.scan, Settings(max_iterations=2)).report
    assert report["preparation"]["coil_maps"]["source"] == "scan"
    assert report["preparation"]["coil_maps"]["slices"][0]["block"] == {"rows": 17, "columns": 32}


def test_frames_that_together_leave_gaps_are_refused_at_submission_and_by_the_job() -> None:
    found = interleaved()
    mask = np.repeat(lines()[:1], FRAMES, axis=0)
    scan = replace(found.scan, mask_array=LabelledArray(mask, ("frame", "ky")))
    with pytest.raises(CalibrationMissing, match="/reference"):
        check_job(inspect(scan).as_dict(), Settings())
    with pytest.raises(CalibrationMissing, match="/reference"):
        reconstruct(scan)
    assert PlaneIndex(frame=1) in scan.planes()
