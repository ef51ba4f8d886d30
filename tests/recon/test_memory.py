"""Refusing what will not fit, before its k-space is read."""

from __future__ import annotations

import tracemalloc
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from recon.axes import LabelledArray
from recon.errors import InvalidScan, InvalidSettings
from recon.formats import write_scan
from recon.memory import PROGRAM_BYTES, check_memory, estimate_bytes
from recon.pipeline import reconstruct, reconstruct_file
from recon.scan import Scan
from recon.settings import Settings, parse_settings
from tests.recon.scans import example
from tests.recon.volumes import plane_mask, volume

JOINT = Settings(volume="joint")


class Unreadable:
    """Storage of a large array that fails the test when it is read."""

    dtype = np.dtype(np.complex64)

    def __init__(self, shape: tuple[int, ...]) -> None:
        self.shape = shape

    def __getitem__(self, key: Any) -> Any:
        raise AssertionError("the k-space was read")


def large(shape: tuple[int, int, int] = (256, 160, 256), *, coils: int = 8) -> Scan:
    """Return a volume that is there in name only."""
    return Scan(
        LabelledArray(Unreadable((coils, *shape)), ("coil", "kz", "ky", "kx")),
        mask_array=LabelledArray(plane_mask(shape[:2], 6, block=24), ("kz", "ky")),
    )


def test_too_large_for_a_joint_problem_names_estimate_limit_and_planes() -> None:
    scan = large()
    expected = r"would take about 3\.\d GB.*there are 1 GB: choose planes \(0\.\d+ GB\)"
    with pytest.raises(InvalidSettings, match=expected) as caught:
        reconstruct(scan, JOINT, memory_limit_bytes=10**9)
    assert [problem["pointer"] for problem in caught.value.errors] == ["/volume"]
    with pytest.raises(AssertionError, match="was read"):
        reconstruct(scan, Settings(), memory_limit_bytes=10**9)
    with pytest.raises(AssertionError, match="was read"):
        reconstruct(scan, JOINT)


def test_too_large_in_any_way() -> None:
    with pytest.raises(InvalidSettings, match="fewer virtual coils"):
        check_memory(large(), JOINT, 300_000_000)
    with pytest.raises(
        InvalidScan, match=r"this volume would take about .* GB of memory, and there are 0\.3 GB"
    ):
        check_memory(large(), Settings(), 300_000_000)
    slices = Scan(LabelledArray(Unreadable((64, 2048, 2048)), ("coil", "ky", "kx")))
    with pytest.raises(InvalidScan, match="this scan would take"):
        check_memory(slices, Settings(), 10**9)
    check_memory(slices, Settings(), None)


def test_a_series_too_long_to_be_tied_can_be_solved_frame_by_frame() -> None:
    series = Scan(LabelledArray(Unreadable((2000, 8, 128, 128)), ("frame", "coil", "ky", "kx")))
    expected = r"received auto, which ties 2000 frames .* GB .*set temporal_strength to 0.*\(0\.2\d? GB\)"
    with pytest.raises(InvalidSettings, match=expected) as caught:
        reconstruct(series, memory_limit_bytes=10**9)
    assert [problem["pointer"] for problem in caught.value.errors] == ["/temporal_strength"]
    with pytest.raises(InvalidSettings, match="set temporal_strength and low_rank_strength to 0"):
        check_memory(series, parse_settings({"low_rank_strength": 0.1}), 10**9)
    check_memory(series, parse_settings({"temporal_strength": 0}), 10**9)
    with pytest.raises(InvalidScan, match="this scan would take"):
        check_memory(series, Settings(), PROGRAM_BYTES)


def test_the_estimate_of_a_series_counts_the_fields_of_cycle_spinning() -> None:
    found = example((64, 64), coils=1, sizes={"frame": 8})
    strengths = {"wavelet_strength": 0.1, "tv_strength": 0.1, "temporal_strength": 0.3}
    settings = parse_settings({**strengths, "wavelet_shifts": 16, "constraint": "real", "max_iterations": 2})
    reconstruct(example((24, 24), coils=1, sizes={"frame": 2}).scan, settings)
    tracemalloc.start()
    reconstruct(found.scan, settings)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    estimate = estimate_bytes(found.scan, settings) - PROGRAM_BYTES
    assert 0.4 * estimate < peak < 1.2 * estimate


def test_the_estimate_follows_what_decides() -> None:
    scan = large()
    joint = estimate_bytes(scan, JOINT)
    assert estimate_bytes(scan, parse_settings({"volume": "joint", "coil_compression": {"coils": 4}})) < joint
    assert estimate_bytes(scan, Settings()) < joint / 2
    assert estimate_bytes(scan, Settings(), threads=8) > estimate_bytes(scan, Settings())
    unknown = Scan(scan.kspace_array)  # without a mask every line may be there
    assert estimate_bytes(unknown, Settings()) > 2 * estimate_bytes(scan, Settings())


def test_a_file_is_refused_and_no_image_written(tmp_path: Path) -> None:
    found = volume((12, 12, 10))
    path = tmp_path / "scan.h5"
    write_scan(path, found.kspace, ("coil", "kz", "ky", "kx"), mask=found.mask, mask_axes=("kz", "ky"))
    with pytest.raises(InvalidScan, match="would take"):
        reconstruct_file(path, tmp_path / "image.h5", memory_limit_bytes=10**6)
    assert not (tmp_path / "image.h5").exists()


@pytest.mark.parametrize("mode", ["planes", "joint"])
def test_the_estimate_is_above_what_arrays_take_and_not_far_above(mode: str) -> None:
    shape = (40, 44, 64)
    found = volume(shape, acceleration=4)
    settings = parse_settings(
        {"volume": mode, "wavelet_strength": 0.1, "tv_strength": 0.1, "max_iterations": 3}
    )
    reconstruct(volume((12, 12, 10)).scan, settings)  # compiled loops are the program's own
    tracemalloc.start()
    reconstruct(found.scan, settings)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    estimate = estimate_bytes(found.scan, settings) - PROGRAM_BYTES
    assert 0.5 * estimate < peak + 2 * 16e6 < 1.3 * estimate  # two blocks of reading are not needed in memory
