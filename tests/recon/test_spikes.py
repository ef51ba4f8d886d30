"""Spikes are found where they were planted, and nowhere else."""

from __future__ import annotations

from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from benchmarks import anatomy
from benchmarks.anatomy import CASES, Case
from recon.formats import open_scan
from recon.inspection import inspect
from recon.spikes import FACTOR, find_spikes, remove_spikes
from tests.recon.helpers import complex_normal, line_mask, numpy_transform
from tests.recon.scans import example

SAMPLES = Path(__file__).parents[2] / "sample_kspace"


simulate = lru_cache(maxsize=4)(anatomy.simulate)


@pytest.mark.parametrize("case", CASES[::4], ids=lambda case: case.name)
def test_clean_anatomy_has_none(case: Case) -> None:
    """Neither fully sampled nor undersampled; a scan of a single coil, the hardest, included."""
    scan = simulate(case)
    whole = np.ones(case.matrix, np.bool_)
    assert len(find_spikes(scan.kspace, scan.mask)) == 0
    assert len(find_spikes(scan.full_kspace, whole)) == 0
    assert len(find_spikes(scan.kspace[:1], scan.mask)) == 0


@pytest.mark.parametrize("name", ["cut_fruit_full.h5", "cut_fruit_undersampled.h5"])
def test_clean_sample_scan_has_none(name: str) -> None:
    with open_scan(SAMPLES / name) as scan:
        codes = {finding.code for finding in inspect(scan).findings}
    assert not codes & {"spike", "dead-coil", "coil-silent-in-noise"}


@pytest.mark.parametrize("every", [1, 2, 4, 6])
def test_straight_edges_have_none(every: int) -> None:
    """A rectangle's k-space is two narrow streaks through the centre, without noise as sharp as can be."""
    y, x = np.mgrid[-192:192, -192:192] / 192
    for angle in (0.0, 0.3, 0.9):
        u, v = x * np.cos(angle) + y * np.sin(angle), y * np.cos(angle) - x * np.sin(angle)
        picture = ((np.abs(u) < 0.6) & (np.abs(v) < 0.35)).astype(complex)
        kspace = numpy_transform(picture)[np.newaxis, 128:256, 128:256]
        mask = line_mask(128, 128, every, 16)
        assert len(find_spikes(kspace * mask, mask)) == 0


def test_noise_alone_has_none() -> None:
    rng = np.random.default_rng(0)
    for coils in (1, 4):
        assert len(find_spikes(complex_normal(rng, (coils, 256, 256)), np.ones((256, 256), np.bool_))) == 0


@pytest.mark.parametrize("case", [CASES[0], CASES[8], CASES[12]], ids=lambda case: case.name)
@pytest.mark.parametrize("in_coils", ["all", "one"])
def test_planted_spikes_are_found(case: Case, in_coils: str) -> None:
    """Of 500 noise standard deviations, a few per cent of the noise in each pixel, beyond a fifth of k-space."""
    scan = simulate(case)
    rng = np.random.default_rng(3)
    sd = np.sqrt(np.diag(scan.covariance).real)
    lines = np.flatnonzero(scan.mask[:, 0])
    planted = found = 0
    for _ in range(25):
        row, column = int(rng.choice(lines)), int(rng.integers(case.matrix[1]))
        if np.hypot(row - case.matrix[0] // 2, column - case.matrix[1] // 2) < 0.1 * sum(case.matrix):
            continue
        kspace = scan.kspace.copy()
        size = 500 * sd * np.exp(2j * np.pi * rng.random(len(sd)))
        kspace[:, row, column] += size if in_coils == "all" else size * (np.arange(len(sd)) == 3)
        places = find_spikes(kspace, scan.mask).tolist()
        assert places in ([], [[row, column]])
        planted, found = planted + 1, found + bool(places)
    assert planted > 10
    assert found >= 0.8 * planted


def test_threshold_is_the_power_of_the_surroundings() -> None:
    """Constant surroundings: a sample counts just above `FACTOR` times their power, and not just below."""
    for factor, count in ((1.01 * FACTOR, 1), (0.99 * FACTOR, 0)):
        kspace = np.ones((1, 40, 44), np.complex64)
        kspace[0, 8, 35] = np.sqrt(factor)
        assert len(find_spikes(kspace, np.ones((40, 44), np.bool_))) == count


def test_mirrored_maxima_are_of_the_object() -> None:
    """A grating in the object: two isolated samples, mirrored at the centre."""
    kspace = np.ones((1, 40, 44), np.complex64)
    kspace[0, 8, 35] = kspace[0, 32, 9] = 100
    assert len(find_spikes(kspace, np.ones((40, 44), np.bool_))) == 0


@pytest.mark.parametrize("kind", ["lines", "points"])
def test_neighbours_are_those_that_were_measured(kind: str) -> None:
    rng = np.random.default_rng(1)
    mask = line_mask(96, 80, 5, 12) if kind == "lines" else rng.random((96, 80)) < 0.2
    mask[86] = True
    kspace = complex_normal(rng, (3, 96, 80)) * mask
    kspace[:, 86, 70] = 40
    assert find_spikes(kspace, mask).tolist() == [[86, 70]]
    cleared = remove_spikes(kspace, mask)
    assert not cleared[86, 69:72].any()
    assert (mask & ~cleared).sum() == 3
    assert (mask & ~remove_spikes(kspace, mask, whole_lines=True)).sum() == 80


@pytest.mark.parametrize("kspace", [np.zeros((2, 9, 8)), np.ones((1, 1, 1)), np.ones((1, 3, 1))])
def test_small_and_empty_planes_have_none(kspace: Any) -> None:
    shape = kspace.shape[1:]
    assert len(find_spikes(kspace.astype(complex), np.ones(shape, np.bool_))) == 0
    assert len(find_spikes(kspace.astype(complex), np.zeros(shape, np.bool_))) == 0


def test_noise_free_scans_have_none() -> None:
    for found in (example(noise=0.0), example(noise=0.0, every=1), example(noise=0.0, coils=1)):
        assert "spike" not in [finding.code for finding in inspect(found.scan).findings]
