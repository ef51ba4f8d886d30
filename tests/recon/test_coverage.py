"""Partial Fourier, partial echo and resolution against geometry."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.coverage import coverage
from recon.inspection import inspect
from recon.pipeline import reconstruct
from recon.scan import PlaneIndex
from recon.settings import Settings, parse_settings
from tests.recon.scans import error, example


def lines(size: int, every: int, first: int, last: int, centre: int = 12) -> Any:
    """Every n-th line from `first` to `last`, and a fully sampled centre."""
    mask = (np.arange(size) - size // 2) % every == 0
    mask[size // 2 - centre // 2 : size // 2 + centre // 2] = True
    mask[:first] = mask[last + 1 :] = False
    return mask


@pytest.mark.parametrize("size", [128, 129])
@pytest.mark.parametrize("every", [1, 2, 4])
@pytest.mark.parametrize("side", ["negative", "positive"])
def test_partial_fourier_of_regular_masks_is_found(size: int, every: int, side: str) -> None:
    """Three quarters of the lines, in order: the fraction is geometry, to within one spacing."""
    kept = 3 * size // 4
    mask = lines(size, every, *((0, kept - 1) if side == "positive" else (size - kept, size - 1)))
    found = coverage(mask)
    assert found.missing == side
    assert found.fraction == pytest.approx(0.75, abs=every / size + 1e-9)


@pytest.mark.parametrize("size", [64, 65])
@pytest.mark.parametrize("every", [1, 2, 3, 4, 5, 6])
def test_symmetric_regular_masks_are_not_partial(size: int, every: int) -> None:
    for shift in range(every):
        mask = np.arange(size) % every == shift
        mask[size // 2 - 8 : size // 2 + 8] = True
        assert coverage(mask).missing is None
    padded = lines(size, 1, 10, size - 11 + (size % 2 == 0))
    assert coverage(padded).missing is None


def test_one_line_alone_is_not_partial() -> None:
    assert coverage(np.arange(16) == 8).missing is None
    assert coverage(np.arange(16) == 3).resolution_mm(16.0)["shorter_side_mm"] == 16.0


def test_random_masks_are_not_taken_for_partial_fourier() -> None:
    """Chance puts all of the outermost lines on one side now and then: in less than 2 % of masks here."""
    rng = np.random.default_rng(0)
    alarms = 0
    for _ in range(600):
        size, acceleration, power = int(rng.integers(64, 257)), rng.uniform(2, 6), rng.uniform(0, 3)
        density = (1 - np.abs(np.arange(size) - size // 2) / (size // 2 + 1)) ** power
        chosen = rng.choice(size, size=round(size / acceleration), replace=False, p=density / density.sum())
        mask = np.zeros(size, np.bool_)
        mask[chosen] = True
        mask[size // 2 - 8 : size // 2 + 8] = True
        alarms += coverage(mask).missing is not None
    assert alarms < 0.02 * 600


def test_resolution_is_one_over_twice_the_largest_spatial_frequency() -> None:
    """Source: Bracewell: pixel size = FOV/N, FOV = 1/delta-k, resolution = 1/(2 k_max); common practice, no source."""
    field, size = 192.0, 96
    delta_k = 1 / field
    whole = coverage(np.ones(size, np.bool_)).resolution_mm(field)
    assert set(whole.values()) == {2.0}
    assert set(coverage(np.ones(size + 1, np.bool_)).resolution_mm(field).values()) == {field / (size + 1)}
    mask = np.ones(size, np.bool_)
    mask[72:] = False  # 24 of the 48 cells on the positive side are left
    cut = coverage(mask).resolution_mm(field)
    assert cut["pixel_mm"] == cut["longer_side_mm"] == 2.0
    assert cut["shorter_side_mm"] == pytest.approx(1 / (2 * 24 * delta_k))


def test_report_says_what_was_left_out() -> None:
    """Lines missing on one side of ky, and one end of every readout."""
    found = example((64, 48), attributes={"field_of_view_mm": [96.0, 128.0, 4.0]})
    mask = np.array(found.scan.mask(PlaneIndex()))
    mask[46:] = False
    mask[:, :12] = False
    scan = replace(found.scan, mask_array=LabelledArray(mask, ("ky", "kx")))
    report = reconstruct(scan, Settings(max_iterations=3)).report
    partial = report["sampling"]["partial_fourier"]
    assert partial["ky"] == {"fraction": pytest.approx((32 + 13) / 64), "missing": "positive"}
    assert partial["kx"] == {"fraction": pytest.approx(36 / 48), "missing": "negative"}
    resolution = report["sampling"]["resolution"]
    assert resolution["ky"] == {
        "pixel_mm": 2.0,
        "longer_side_mm": 2.0,
        "shorter_side_mm": pytest.approx(128 / (2 * 13)),
    }
    assert resolution["kx"]["shorter_side_mm"] == pytest.approx(96 / 24)
    by_code = {finding["code"]: finding for finding in report["findings"]}
    assert "partial-echo" in by_code
    assert "positive side of ky" in by_code["partial-fourier"]["message"]
    assert all(
        'set constraint to "real"' in by_code[code]["message"] for code in ("partial-echo", "partial-fourier")
    )


def test_the_constraint_that_is_offered_fills_in_detail() -> None:
    """Source: Noll, Nishimura & Macovski 1991: smooth phase: a little over half of k-space is enough."""
    found = example((96, 88), every=1)
    scan = replace(found.scan, mask_array=LabelledArray(np.arange(96) < 60, ("ky",)))
    errors = []
    for constraint in ("none", "real"):
        settings = {"constraint": constraint, "wavelet_strength": 0.1, "tv_strength": 0.1}
        errors.append(error(reconstruct(scan, parse_settings(settings)).image, found))
    assert errors[1] < 0.9 * errors[0]


def test_whole_scan_has_no_such_finding() -> None:
    facts = inspect(example().scan)
    assert facts.sampling["partial_fourier"] == {}
    assert facts.sampling["resolution"] is None
    assert not {"partial-fourier", "partial-echo"} & {finding.code for finding in facts.findings}


def test_partial_echo_that_only_the_data_show_is_not_cropped_before_the_solve() -> None:
    """Without /mask, and with readout oversampling: a readout that is not complete cannot be transformed."""
    found = example(attributes={"readout_oversampling": 2.0})
    kspace = np.array(found.scan.kspace_array.data)
    kspace[..., :20] = 0
    scan = replace(
        found.scan, kspace_array=LabelledArray(kspace, found.scan.kspace_array.labels), mask_array=None
    )
    result = reconstruct(scan)
    assert result.image.shape == (48, 44)
    level = np.abs(result.image[found.inside]).mean() / found.truth[found.inside].mean()
    assert level == pytest.approx(1, abs=0.05)
