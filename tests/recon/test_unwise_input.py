"""Input that works, or nearly works, and deserves a word: no regularisation, hardly any calibration."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.errors import CalibrationMissing
from recon.feasibility import check_job
from recon.inspection import inspect
from recon.pipeline import reconstruct
from recon.scan import Scan
from recon.settings import parse_settings
from tests.recon.scans import error, example

NOTHING = {"wavelet_strength": 0, "tv_strength": 0}


def codes(settings: dict[str, Any], every: int = 2) -> list[str]:
    found = example(every=every)
    report = reconstruct(found.scan, parse_settings({"max_iterations": 3, **settings})).report
    return [finding["code"] for finding in report["findings"]]


@pytest.mark.parametrize("settings", [NOTHING, {"method": "tikhonov", "tikhonov_strength": 0}])
def test_least_squares_alone_is_said_so(settings: dict[str, Any]) -> None:
    """Source: common practice, no source: without a penalty an undersampled fit follows the noise."""
    assert "least-squares-alone" in codes(settings)
    assert "least-squares-alone" not in codes(settings, every=1)


@pytest.mark.parametrize(
    "settings",
    [{}, {"wavelet_strength": 0}, {"tv_strength": 0}, {"method": "tikhonov", **NOTHING}, {"method": "zero-filled"}],
)  # fmt: skip
def test_one_strength_is_enough(settings: dict[str, Any]) -> None:
    assert "least-squares-alone" not in codes(settings)


def test_least_squares_alone_fits_the_noise() -> None:
    """What the finding warns of: the smaller residual has the larger error."""
    found = example((96, 88), coils=4, every=3, noise=0.15)
    plain = reconstruct(found.scan, parse_settings(NOTHING))
    usual = reconstruct(found.scan, parse_settings({"wavelet_strength": 0.1, "tv_strength": 0.1}))
    chi = [each.report["consistency"]["reduced_chi_squared"]["value"] for each in (plain, usual)]
    assert chi[0] < chi[1]
    assert error(plain.image, found) > 1.5 * error(usual.image, found)


def with_calibration(lines: int) -> Scan:
    """A scan whose fully sampled centre has this many lines."""
    found = example(every=1)
    mask = (np.arange(48) - 24) % 2 == 0
    mask[24 - lines // 2 : 24 - lines // 2 + lines] = True
    mask[24 - lines // 2 - 1] = mask[24 - lines // 2 + lines] = False
    return replace(found.scan, mask_array=LabelledArray(mask, ("ky",)))


@pytest.mark.parametrize("maps", ["eigenvector", "adaptive"])
def test_calibration_smaller_than_the_kernel_is_refused(maps: str) -> None:
    """Both when the job is ordered and when it runs, with what to do instead."""
    settings = parse_settings({"coil_maps": maps})
    for lines in (1, 5, 7):
        scan = with_calibration(lines)
        with pytest.raises(
            CalibrationMissing, match=r"at least 8 x 8; the scan has \d x 44: .*add /reference"
        ):
            check_job(inspect(scan).as_dict(), settings)
        with pytest.raises(CalibrationMissing, match="at least 8 x 8"):
            reconstruct(scan, settings)


@pytest.mark.parametrize("maps", ["eigenvector", "adaptive"])
def test_smallest_calibration_works_and_says_so(maps: str) -> None:
    found = example(every=1)
    result = reconstruct(with_calibration(8), parse_settings({"coil_maps": maps}))
    assert "calibration-small" in [finding["code"] for finding in result.report["findings"]]
    assert error(result.image, found) < 0.2


@pytest.mark.parametrize("shape", [(5, 44), (44, 5), (3, 3), (1, 40)])
def test_matrix_smaller_than_the_kernel_is_reconstructed(shape: tuple[int, int]) -> None:
    """A kernel cannot be longer than the matrix: it becomes shorter by itself."""
    found = example(shape, every=1, noise=0.001)
    assert np.isfinite(reconstruct(found.scan).image).all()
