"""Automatic strengths: what is kept out, how the search moves, what is chosen and reported."""

from __future__ import annotations

from dataclasses import replace
from typing import cast

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from recon.axes import LabelledArray
from recon.coils.calibration import central_block
from recon.holdout import held_out_of_frames, held_out_samples
from recon.pipeline import Reconstruction, reconstruct
from recon.settings import parse_settings
from recon.strength_search import Search, Trial, vertex
from recon.strengths import TIKHONOV_KNOWN, TV_KNOWN, WAVELET_KNOWN
from tests.recon.helpers import line_mask
from tests.recon.scans import Example, example


@given(st.integers(0, 2**32 - 1), st.sampled_from([2, 3, 4]), st.booleans())
def test_what_is_kept_out_is_measured_and_outside_calibration(seed: int, every: int, is_2d: bool) -> None:
    rng = np.random.default_rng(seed)
    mask = line_mask(48, 40, every=every, calibration=12)
    if is_2d:
        mask = rng.random((48, 40)) < 1 / every
        mask[18:30, 14:26] = True
    held = held_out_samples(mask, 0.2, rng, fewest=3)
    rows, columns = central_block(mask)
    assert held.any()
    assert not (held & ~mask).any()
    top, left = 24 - rows // 2, 20 - columns // 2
    assert not held[top : top + rows, left : left + columns].any()
    if not is_2d:
        np.testing.assert_array_equal(held, held[:, :1] & mask)
    outside = mask.sum() - rows * columns
    unit = 1 if is_2d else 40
    assert abs(held.sum() / unit - max(0.2 * outside / unit, 3)) <= 1


def test_lines_kept_out_are_spread_over_the_measured_ones() -> None:
    mask = np.ones((100, 4), np.bool_)
    mask[1::2] = False
    mask[40:60] = True
    held = np.flatnonzero(held_out_samples(mask, 0.25, np.random.default_rng(3))[:, 0])
    candidates = np.setdiff1d(np.flatnonzero(mask[:, 0]), np.arange(39, 61))
    strata = np.searchsorted(candidates, held) * len(held) // len(candidates)
    np.testing.assert_array_equal(strata, np.arange(len(held)))


def test_nothing_is_kept_out_where_there_is_too_little() -> None:
    mask = np.zeros((32, 8), np.bool_)
    mask[10:22] = True
    mask[[2, 28]] = True
    assert not held_out_samples(mask, 0.2, np.random.default_rng(0), fewest=3).any()


def test_frames_that_measure_the_same_lines_lose_the_same_ones() -> None:
    same = [line_mask(48, 40, every=2, calibration=12)] * 3
    held = held_out_of_frames(same, 0.2, np.random.default_rng(0), fewest=3)
    assert held[0].any()
    assert all((each == held[0]).all() for each in held)
    # interleaved frames: each line is measured in another one anyway
    shifted = [np.roll(line_mask(48, 40, every=3, calibration=0), frame, axis=0) for frame in range(3)]
    apart = held_out_of_frames(shifted, 0.2, np.random.default_rng(0), fewest=3)
    assert all((each & mask).sum() == each.sum() > 0 for each, mask in zip(apart, shifted, strict=True))
    assert len({int(np.flatnonzero(each[:, 0])[0]) % 3 for each in apart}) == 3


def test_vertex_of_a_parabola_is_found_and_stays_within_what_was_tried() -> None:
    assert vertex({x: 2 * (x - 0.3) ** 2 + 1 for x in (-1, 0, 1, 2)}) == pytest.approx(0.3)
    assert vertex({0: 3.0, 1: 2.0, 2: 1.0}) == 2
    assert vertex({0: 1.0, 1: 2.0, 2: 2.5}) == 0


def test_a_strength_that_changes_nothing_is_searched_without_failing() -> None:
    class Flat:
        """A trial whose error does not depend on the strength, as where a wavelet is too long for the image."""

        data, held, start = np.ones((2, 4, 1)), np.ones((4, 1), np.bool_), None

        def error(self, strengths: object) -> float:
            return 3.0

    search = Search([cast(Trial, Flat())], 1)
    factor, tried = search.best_factor({"wavelet_strength": 0.1}, ("wavelet_strength",))
    assert 1 / 2.3 <= min(factor, tried) <= max(factor, tried) <= 2.3
    assert [trial["held_out_error"] for trial in search.curve] == [3 / 8] * 3


@pytest.fixture(scope="module")
def found() -> Example:
    return example((64, 60), every=3, noise=0.05)


@pytest.fixture(scope="module")
def automatic(found: Example) -> Reconstruction:
    return reconstruct(found.scan)


def test_choice_and_curve_are_in_the_report(automatic: Reconstruction) -> None:
    told = automatic.report["solver"]["strengths"]
    assert told["criterion"] == "held-out-samples"
    assert told["known"] == {"wavelet_strength": WAVELET_KNOWN, "tv_strength": TV_KNOWN}
    assert 5 <= len(told["curve"]) <= 6
    lowest = min(told["curve"], key=lambda trial: trial["held_out_error"])
    assert lowest["held_out_error"] > 0.5  # no solution predicts the noise of what it has not seen
    for name, value in told["chosen"].items():
        assert automatic.report["settings"][name] == value
        between = sorted((told["known"][name], told["minimum"][name]))
        assert 0.7 * between[0] <= value <= 1.4 * between[1]


def test_chosen_numbers_set_by_hand_give_the_same_image(found: Example, automatic: Reconstruction) -> None:
    chosen = automatic.report["solver"]["strengths"]["chosen"]
    by_hand = reconstruct(found.scan, parse_settings(chosen))
    assert by_hand.report["solver"]["strengths"] is None
    difference = np.linalg.norm(by_hand.image - automatic.image) / np.linalg.norm(by_hand.image)
    assert difference < 5e-3


def test_choice_does_not_depend_on_the_scale_of_the_data(automatic: Reconstruction) -> None:
    other = reconstruct(example((64, 60), every=3, noise=0.05, scale=2.0**13).scan)
    chosen = automatic.report["solver"]["strengths"]["chosen"]
    # a power of two changes no digit
    assert other.report["solver"]["strengths"]["chosen"] == pytest.approx(chosen, rel=0.002)


@pytest.mark.parametrize("manual", ["wavelet_strength", "tv_strength"])
def test_a_strength_set_by_hand_stays(found: Example, manual: str) -> None:
    report = reconstruct(found.scan, parse_settings({manual: 0.2})).report
    assert report["settings"][manual] == 0.2
    assert manual not in report["solver"]["strengths"]["chosen"]
    assert {trial.get(manual) for trial in report["solver"]["strengths"]["curve"]} == {None}


def test_without_samples_to_spare_strengths_are_those_known_beforehand(found: Example) -> None:
    mask = np.zeros((64, 60), np.bool_)
    mask[20:44] = True
    kspace = np.asarray(found.scan.kspace_array.data) * mask
    scan = replace(
        found.scan,
        kspace_array=LabelledArray(kspace, found.scan.kspace_array.labels),
        mask_array=LabelledArray(mask, ("ky", "kx")),
    )
    report = reconstruct(scan).report
    assert report["solver"]["strengths"] is None
    assert report["settings"]["wavelet_strength"] == WAVELET_KNOWN
    assert report["settings"]["tv_strength"] == TV_KNOWN


def test_tikhonov_is_chosen_too_and_follows_the_noise() -> None:
    """The best weight of 1/2 ||u||^2 grows with the noise over the signal; known beforehand is one number."""
    settings = parse_settings({"method": "tikhonov"})
    quiet, loud = (
        reconstruct(example((64, 60), noise=noise).scan, settings).report["solver"]["strengths"]["chosen"]
        for noise in (0.01, 0.3)
    )
    assert quiet["tikhonov_strength"] < TIKHONOV_KNOWN < loud["tikhonov_strength"]


def test_methods_without_strengths_search_nothing(found: Example) -> None:
    report = reconstruct(found.scan, parse_settings({"method": "zero-filled"})).report
    assert report["solver"]["strengths"] is None


def test_one_choice_serves_all_planes_and_asks_a_few() -> None:
    report = reconstruct(example(sizes={"slice": 8}).scan, threads=2).report
    told = report["solver"]["strengths"]
    assert len(told["planes"]) == 3
    assert len({plane["slice"] for plane in told["planes"]}) == 3
    assert len(report["solver"]["planes"]) == 8
