"""Two sets of coil maps, for an object that exceeds the field of view and folds onto itself."""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.coils.combination import combine_sets
from recon.coils.eigenvector import eigenvector_maps
from recon.coils.findings import SIZEABLE_FOLD
from recon.errors import InvalidSettings
from recon.feasibility import check_job
from recon.inspection import inspect
from recon.operators.base import dot_test
from recon.operators.encoding import Encoding
from recon.operators.folded import FoldedEncoding
from recon.phantom import Ellipse, ellipse_kspace, rasterise, ring_coils
from recon.pipeline import reconstruct
from recon.scan import Scan
from recon.settings import Settings, parse_settings
from tests.recon.helpers import Array, coil_maps, complex_normal, line_mask, numpy_inverse
from tests.recon.scans import PHASE, example

COILS, SHAPE, SIGMA = 8, (64, 60), 0.02


@cache
def folded() -> tuple[Scan, Array, Array]:
    """Return a scan of an object 1.2 times as tall as the field of view, its coils' root-sum-of-squares, and itself.

    Every second row of k-space over twice the field of view is k-space over the field of view, object folded.
    """
    rng = np.random.default_rng(0)
    large = [
        Ellipse(1.0, (0.02, -0.03), (0.7, 0.6), 5),
        Ellipse(-0.4, (0.2, 0.1), (0.2, 0.15)),
        Ellipse(0.6, (0.1, 0.47), (0.25, 0.08)),
    ]
    doubled = ellipse_kspace(large, (2 * SHAPE[0], SHAPE[1]), maps=[c * PHASE for c in ring_coils(COILS)])
    clean = doubled[:, ::2] * np.sqrt(2)
    kspace = clean + SIGMA * complex_normal(rng, clean.shape)
    mask = line_mask(*SHAPE, every=2, calibration=24)
    noise = SIGMA * complex_normal(rng, (COILS, 2000))
    scan = Scan(
        LabelledArray((kspace * mask).astype(np.complex64), ("coil", "ky", "kx")),
        mask_array=LabelledArray(mask, ("ky", "kx")),
        noise_array=LabelledArray(noise.astype(np.complex64), ("coil", "sample")),
    )
    tall = rasterise(large, (2 * SHAPE[0], SHAPE[1])).real > 0.1
    over = tall.reshape(2, SHAPE[0], SHAPE[1])
    # rows beyond the middle half of the doubled field of view fall onto the other end
    inside = tall[SHAPE[0] // 2 : 3 * SHAPE[0] // 2]
    beyond = np.concatenate([over[1, SHAPE[0] // 2 :], over[0, : SHAPE[0] // 2]])
    return scan, np.sqrt((np.abs(numpy_inverse(clean)) ** 2).sum(axis=0)), inside & beyond


def error(image: Array) -> float:
    _, truth, _ = folded()
    inside = truth > 0.1 * truth.max()
    return float(np.linalg.norm((np.abs(image) - truth)[inside]) / np.linalg.norm(truth[inside]))


@pytest.mark.parametrize(
    ("method", "factor"), [("compressed-sensing", 0.5), ("tikhonov", 0.65), ("zero-filled", 1.0)]
)
def test_two_sets_reconstruct_an_object_that_folds_over(method: str, factor: float) -> None:
    """Source: Uecker et al. 2014: two map sets are needed when the object folds over; one leaves artefacts."""
    scan, _, _ = folded()
    one = reconstruct(scan, parse_settings({"method": method}))
    two = reconstruct(scan, parse_settings({"method": method, "map_sets": 2}))
    assert error(two.image) < factor * error(one.image)
    assert [r.report["preparation"]["coil_maps"]["slices"][0]["sets"] for r in (one, two)] == [1, 2]
    if method == "compressed-sensing":
        chi = [r.report["consistency"]["reduced_chi_squared"]["value"] for r in (one, two)]
        assert chi[0] > 1.2
        assert chi[1] < 1.05


def test_second_eigenvalue_is_one_where_the_object_folds_over_and_nowhere_else() -> None:
    """Source: Uecker et al. 2014: as many eigenvalues are one as places of the object fall together."""
    scan, _, fold = folded()
    block = np.asarray(scan.kspace_array.data)[:, 20:44, 14:46] / SIGMA
    found = eigenvector_maps([block], SHAPE, np.ones(COILS), has_noise_units=True, sets=2)
    first, second = found.eigenvalues
    assert np.quantile(first[fold], 0.01) > 0.98
    assert np.quantile(second[fold], 0.05) > 0.95
    middle = np.zeros(SHAPE, np.bool_)
    middle[24:40] = True  # far from both ends
    assert second[middle].max() < found.threshold
    assert not found.sets[1][:, middle].any()
    np.testing.assert_allclose(np.linalg.norm(found.sets[0], axis=0)[fold], 1, atol=1e-5)
    both = np.any(found.sets[1] != 0, axis=0)
    overlap = np.abs(np.sum(found.sets[0].conj() * found.sets[1], axis=0))[both]
    assert np.quantile(overlap, 0.95) < 0.05  # orthogonal on the coarse grid, nearly so between its points


def test_report_asks_for_two_sets_where_one_is_not_enough() -> None:
    scan, _, _ = folded()
    for settings, expected in (
        (Settings(max_iterations=2), True),
        (Settings(map_sets=2, max_iterations=2), False),
    ):
        report = reconstruct(scan, settings).report
        found = {finding["code"]: finding for finding in report["findings"]}
        assert ("object-exceeds-field-of-view" in found) is expected
        assert "second-map-set-empty" not in found
    share = report["preparation"]["coil_maps"]["slices"][0]["folded_share"]
    assert SIZEABLE_FOLD < share < 0.4


def test_two_sets_of_an_object_inside_the_field_of_view_are_one() -> None:
    found = example()
    one = reconstruct(found.scan)
    two = reconstruct(found.scan, Settings(map_sets=2))
    codes = [finding["code"] for finding in one.report["findings"]]
    assert "object-exceeds-field-of-view" not in codes
    if two.report["preparation"]["coil_maps"]["slices"][0]["sets"] == 1:
        assert "second-map-set-empty" in [finding["code"] for finding in two.report["findings"]]
    assert np.linalg.norm(np.abs(two.image) - np.abs(one.image)) < 0.1 * np.linalg.norm(one.image)


@pytest.mark.parametrize("has_gaps", [False, True])
def test_encoding_of_two_sets_against_its_parts(has_gaps: bool) -> None:
    """The adjoint, the normal operator and the norm's bound; one set in two halves is the plain encoding."""
    rng = np.random.default_rng(4)
    maps = coil_maps(4, (12, 10), np.complex64)
    second = complex_normal(rng, maps.shape).astype(np.complex64)
    second[:, :3] = 0
    mask = rng.random((12, 10)) < 0.5 if has_gaps else line_mask(12, 10, every=2, calibration=4)
    encoding = FoldedEncoding(np.stack([maps, second]), mask, weights=mask * np.float32(1.5))
    assert dot_test(encoding, rng) < 1e-5
    x = complex_normal(rng, (2, 12, 10)).astype(np.complex64)
    outside = np.zeros_like(x)
    outside[1, :3] = x[1, :3]
    expected = encoding.adjoint(encoding.forward(x)) + outside
    np.testing.assert_allclose(encoding.normal(x), expected, atol=1e-4)
    vector = x
    for _ in range(30):
        vector = encoding.normal(vector / np.linalg.norm(vector))
    assert np.linalg.norm(vector) <= encoding.squared_norm_bound() * (1 + 1e-5)
    plain = Encoding(maps, mask)
    np.testing.assert_allclose(
        FoldedEncoding(np.stack([maps, second]), mask).forward(np.stack([x[0], 0 * x[0]])),
        plain.forward(x[0]),
        atol=1e-5,
    )


def test_image_of_two_sets_has_both_magnitudes_and_the_first_phase() -> None:
    images = np.array([[[3j, 0]], [[4, 2j]]], np.complex64)
    np.testing.assert_allclose(combine_sets(images), [[5j, 2]], atol=1e-6)
    np.testing.assert_array_equal(combine_sets(images[0]), images[0])


@pytest.mark.parametrize(
    ("values", "sizes", "coils", "message"),
    [
        ({"coil_maps": "adaptive"}, {}, 4, "adaptive"),
        ({}, {}, 1, "one coil"),
        ({"method": "zero-filled", "combination": "root-sum-of-squares"}, {}, 4, "coil by coil"),
        ({"temporal_strength": 0.1}, {"frame": 2}, 4, "temporal_strength"),
        ({"low_rank_strength": 1.0}, {"frame": 2}, 4, "low_rank_strength"),
    ],
)
def test_two_sets_are_refused_where_they_cannot_be_had(
    values: dict[str, Any], sizes: dict[str, int], coils: int, message: str
) -> None:
    facts = inspect(example(coils=coils, sizes=sizes).scan).as_dict()
    with pytest.raises(InvalidSettings, match=message) as refused:
        check_job(facts, parse_settings({**values, "map_sets": 2}))
    assert refused.value.errors[0]["pointer"] == "/map_sets"


@pytest.mark.parametrize("value", [0, 3, True, "2", 2.0])
def test_number_of_sets_is_one_or_two(value: object) -> None:
    with pytest.raises(InvalidSettings, match="map_sets"):
        parse_settings({"map_sets": value})
