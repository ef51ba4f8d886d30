"""Coil images combined by their own local covariance."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.coils.adaptive import adaptive_directions
from recon.errors import InvalidSettings
from recon.feasibility import check_job
from recon.inspection import inspect
from recon.pipeline import reconstruct
from recon.settings import Settings, parse_settings
from tests.recon.helpers import coil_maps, complex_normal
from tests.recon.scans import error, example

ADAPTIVE = Settings(method="zero-filled", combination="adaptive")
PLAIN = Settings(method="zero-filled", combination="root-sum-of-squares")


def uneven() -> Any:
    """Coil noise of which some is four times as strong, and correlated."""
    deviation = np.array([1.0, 4.0, 1.0, 2.0]) * 0.04
    correlation = np.eye(4) + 0.4 * (np.eye(4, k=1) + np.eye(4, k=-1))
    return correlation * np.outer(deviation, deviation)


def test_adaptive_combination_is_quieter_than_root_sum_of_squares() -> None:
    """Source: Walsh, Gmitro & Marcellin 2000: near the optimum in SNR without maps; intensity is the object's."""
    found = example(every=1, covariance=uneven())
    adaptive = reconstruct(found.scan, ADAPTIVE)
    assert error(adaptive.image, found) < 0.75 * error(reconstruct(found.scan, PLAIN).image, found)
    optimal = reconstruct(found.scan, Settings(method="zero-filled"))
    assert error(adaptive.image, found) < 1.15 * error(optimal.image, found)
    scale = np.abs(adaptive.image)[found.inside].sum() / found.truth[found.inside].sum()
    assert scale == pytest.approx(1, abs=0.04)
    assert adaptive.report["consistency"]["reduced_chi_squared"] is None
    assert adaptive.report["preparation"]["coil_maps"]["source"] == "none"


def test_adaptive_combination_keeps_phase_differences_between_frames() -> None:
    """One phase reference for the whole scan: a frame turned by a phase stays so."""
    found = example(sizes={"frame": 2}, every=1, noise=0.005)
    kspace = np.array(found.scan.kspace_array.data)
    kspace[1] *= 0.8 * np.exp(0.7j)
    scan = replace(found.scan, kspace_array=LabelledArray(kspace, found.scan.kspace_array.labels))
    image = reconstruct(scan, ADAPTIVE).image
    turned = np.angle(image[1] * image[0].conj())[found.inside]
    assert np.median(turned) == pytest.approx(0.7, abs=0.01)
    assert np.abs(turned - 0.7).max() < 0.2


def test_adaptive_combination_needs_no_calibration_region() -> None:
    found = example(every=1)
    mask = np.arange(48) % 2 == 0
    scan = replace(found.scan, mask_array=LabelledArray(mask, ("ky",)))
    check_job(inspect(scan).as_dict(), ADAPTIVE)
    result = reconstruct(scan, ADAPTIVE)
    assert np.isfinite(result.image).all()
    assert result.image.any()


@pytest.mark.parametrize("shape", [(48, 44), (47, 33), (3, 40), (2, 2)])
def test_directions_are_those_of_the_coils(shape: tuple[int, int]) -> None:
    """Of an object without noise they are the true maps' directions, on any size of plane."""
    maps = coil_maps(5, shape)
    rng = np.random.default_rng(1)
    images = maps * (1 + 0.3 * rng.random(shape))
    reference = maps.reshape(5, -1).sum(axis=1)
    found = adaptive_directions(images.astype(np.complex64), reference)
    size = np.linalg.norm(found, axis=0) * np.linalg.norm(maps, axis=0)
    agreement = np.abs(np.sum(found.conj() * maps, axis=0)) / size
    if min(shape) > 8:
        inner = agreement[4:-4, 4:-4]  # maps are not periodic, windows at the border are
        assert inner.min() > 0.98
    np.testing.assert_allclose(np.linalg.norm(found, axis=0), 1, atol=1e-5)
    assert found.tobytes() == adaptive_directions(images.astype(np.complex64), reference).tobytes()
    noise = complex_normal(rng, (5, *shape)).astype(np.complex64)
    assert np.isfinite(adaptive_directions(noise, reference)).all()


@pytest.mark.parametrize("method", ["compressed-sensing", "tikhonov"])
def test_iterative_methods_refuse_adaptive_combination(method: str) -> None:
    facts = inspect(example().scan).as_dict()
    with pytest.raises(InvalidSettings, match="set coil_maps to adaptive") as refused:
        check_job(facts, parse_settings({"method": method, "combination": "adaptive"}))
    assert refused.value.errors[0]["pointer"] == "/combination"


def test_two_map_sets_are_refused_with_adaptive_combination() -> None:
    facts = inspect(example().scan).as_dict()
    with pytest.raises(InvalidSettings, match="need no maps"):
        check_job(facts, ADAPTIVE.model_copy(update={"map_sets": 2}))
