"""Arrays handed to the client become a scan that the numerics read back unchanged."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from recon.formats import open_scan
from recon.scan import PlaneIndex
from service.client import InputRefused
from service.client.arrays import write_arrays


def samples(*shape: int, seed: int = 0) -> np.ndarray[Any, np.dtype[np.complex64]]:
    generator = np.random.default_rng(seed)
    return (generator.normal(size=shape) + 1j * generator.normal(size=shape)).astype(np.complex64)


def test_everything_a_scan_may_hold_is_read_back(tmp_path: Path) -> None:
    kspace, noise, reference = samples(2, 4, 6, 5), samples(4, 100, seed=1), samples(2, 4, 3, 5, seed=2)
    mask = np.arange(6) % 2 == 0
    kspace[:, :, ~mask] = 0
    write_arrays(
        tmp_path / "scan.h5",
        {
            "kspace": kspace,
            "axes": "slice,coil,ky,kx",
            "mask": mask,
            "mask_axes": ["ky"],
            "noise": noise,
            "reference": reference,
            "title": "pear",
            "repetition_time_ms": 12.5,
            "attributes": {"field_of_view_mm": [96.0, 90.0, 5.0], "sample_time_us": 4.0},
            "noise_attributes": {"sample_time_us": 2.0},
        },
    )
    with open_scan(tmp_path / "scan.h5") as scan:
        assert scan.axes == {"slice": 2, "coil": 4, "ky": 6, "kx": 5}
        np.testing.assert_array_equal(scan.kspace(PlaneIndex(slice=1)), kspace[1])
        np.testing.assert_array_equal(scan.mask(PlaneIndex()), np.repeat(mask[:, None], 5, axis=1))
        np.testing.assert_array_equal(scan.noise(), noise)
        np.testing.assert_array_equal(scan.reference(1), reference[1])
        assert (scan.title, scan.repetition_time_ms) == ("pear", 12.5)
        assert list(scan.attributes["field_of_view_mm"]) == [96.0, 90.0, 5.0]
        assert scan.noise_attributes["sample_time_us"] == 2.0


@pytest.mark.parametrize("order", [("coil", "ky", "kx"), ("kx", "ky", "coil"), ("ky", "coil", "kx")])
def test_axes_in_any_order(tmp_path: Path, order: tuple[str, ...]) -> None:
    kspace = samples(3, 5, 4)
    position = [("coil", "ky", "kx").index(axis) for axis in order]
    write_arrays(tmp_path / "scan.h5", {"kspace": kspace.transpose(position), "axes": order})
    with open_scan(tmp_path / "scan.h5") as scan:
        np.testing.assert_array_equal(scan.kspace(PlaneIndex()), kspace)


def test_double_precision_and_default_mask_axes(tmp_path: Path) -> None:
    mask = np.zeros((6, 5), dtype=bool)
    mask[::2] = True
    write_arrays(
        tmp_path / "scan.h5",
        {"kspace": samples(2, 6, 5).astype(np.complex128), "axes": ("coil", "ky", "kx"), "mask": mask},
    )
    with h5py.File(tmp_path / "scan.h5") as file:
        assert file["kspace"].dtype == np.complex128
        assert [dimension.label for dimension in file["mask"].dims] == ["ky", "kx"]
    with open_scan(tmp_path / "scan.h5") as scan:
        np.testing.assert_array_equal(scan.mask(PlaneIndex()), mask)


@pytest.mark.parametrize(
    ("arrays", "sentence"),
    [
        ({"axes": "coil,ky,kx"}, "hold no `kspace`"),
        ({"kspace": samples(2, 3, 4)}, "without `axes`"),
        ({"kspace": samples(2, 3, 4), "axes": "ky,kx"}, "names 2 axes"),
        ({"kspace": samples(3, 4), "axes": "ky,kx", "msk": 1}, "Unknown entry 'msk'"),
        ({"kspace": samples(3, 4), "axes": "ky,kx", "mask": np.ones(3)}, "`mask` has 1 dimensions"),
        (
            {"kspace": samples(3, 4), "axes": "ky,kx", "sensitivity": samples(3, 4)},
            "without `sensitivity_axes`",
        ),
        ({"kspace": samples(3, 4), "axes": "ky,kx", "noise_attributes": {"a": 1}}, "without `noise`"),
    ],
)
def test_arrays_that_make_no_scan(tmp_path: Path, arrays: dict[str, Any], sentence: str) -> None:
    with pytest.raises(InputRefused, match=sentence):
        write_arrays(tmp_path / "scan.h5", arrays)
