"""Facts about masks against counting and Parseval."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from recon.sampling import SamplingFacts, peak_side_lobe
from tests.recon.helpers import line_mask


@given(st.integers(2, 12), st.integers(2, 12), st.integers(0, 2**32 - 1))
def test_peak_side_lobe_is_at_least_the_rms_one_of_parseval(rows: int, columns: int, seed: int) -> None:
    """Source: Parseval; Lustig et al. 2007: rms side-lobe over peak is sqrt((N - M) / (M (N - 1)))."""
    mask = np.random.default_rng(seed).random((rows, columns)) < 0.5
    mask[rows // 2, columns // 2] = True
    n, m = mask.size, int(mask.sum())
    spread = np.abs(np.fft.ifft2(mask))
    rms = np.sqrt((np.sum(spread**2) - spread[0, 0] ** 2) / (n - 1)) / spread[0, 0]
    parseval = np.sqrt((n - m) / (m * (n - 1)))
    assert rms == pytest.approx(parseval, abs=1e-12)
    assert peak_side_lobe(mask) >= parseval - 1e-12


def test_peak_side_lobe_of_regular_undersampling_is_a_full_copy() -> None:
    """Source: aliasing: every second line makes a second object as bright as the first."""
    assert peak_side_lobe(np.repeat((np.arange(24) % 2 == 0)[:, None], 16, axis=1)) == pytest.approx(1)
    assert peak_side_lobe(np.ones((24, 16), bool)) == pytest.approx(0, abs=1e-12)
    assert peak_side_lobe(line_mask(24, 16, every=2, calibration=8)) < 0.9


def test_accelerations_and_calibration_of_a_known_mask() -> None:
    facts = SamplingFacts((64, 48))
    mask = line_mask(64, 48, every=4, calibration=14)
    facts.see(mask)
    facts.see(mask)
    found = facts.as_dict()
    lines = 14 + 13  # central block, and every fourth of the other 50
    assert found["net_acceleration"] == pytest.approx(64 / lines)
    assert found["sampled_fraction"] == pytest.approx(lines / 64)
    assert found["nominal_acceleration"] == pytest.approx(50 / 13)
    assert found["calibration"] == {"rows": 14, "columns": 48}
    assert found["distinct_masks"] == 1
    assert found["varies_along_readout"] is False


def test_frames_with_different_masks_are_told_apart() -> None:
    facts = SamplingFacts((32, 32))
    for shift in (0, 1, 0):
        mask = np.roll(line_mask(32, 32, every=4, calibration=8), shift, axis=0)
        facts.see(mask)
    assert facts.as_dict()["distinct_masks"] == 2
