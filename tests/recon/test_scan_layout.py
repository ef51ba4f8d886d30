"""Scan layout version 1: every axis order, label form, complex encoding and precision reads back the same."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from recon.axes import KSPACE_AXES, LabelledArray, canonical
from recon.errors import InvalidScan
from recon.formats import open_scan, write_scan
from recon.formats.attributes import KSPACE_ATTRIBUTES, NOISE_ATTRIBUTES
from recon.scan import PlaneIndex, Scan
from tests.recon.helpers import complex_normal

LIMITS = settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


def encode(
    array: np.ndarray, labels: tuple[str, ...], encoding: str, bits: int, at: int
) -> tuple[Any, tuple[str, ...]]:
    """Return the array in one of the accepted complex encodings, with the labels it then has."""
    real = np.dtype(f"f{bits // 8}")
    if encoding == "native":
        return array.astype(f"c{bits // 4}"), labels
    if encoding == "compound":
        out = np.empty(array.shape, [("real", real), ("imag", real)])
        out["real"], out["imag"] = array.real, array.imag
        return out, labels
    at %= array.ndim + 1
    pair = np.stack([array.real, array.imag], axis=at).astype(real)
    return pair, (*labels[:at], "complex", *labels[at:])


def label(dataset: h5py.Dataset, labels: tuple[str, ...], forms: set[str]) -> None:
    """Label the axes of a dataset in the given forms."""
    if "dimensions" in forms:
        for position, name in enumerate(labels):
            dataset.dims[position].label = name
    if "axes" in forms:
        dataset.attrs["axes"] = ",".join(labels)
    if "axes_fastest_first" in forms:
        dataset.attrs["axes_fastest_first"] = ", ".join(reversed(labels))


@st.composite
def layouts(draw: st.DrawFn) -> dict[str, Any]:
    """Draw axes with sizes, an order, an encoding, a precision, label forms."""
    plane = draw(st.sampled_from([("ky", "kx"), ("kz", "ky")]))
    outer = draw(st.lists(st.sampled_from(["frame", "slice", "contrast", "coil"]), unique=True))
    axes = canonical([*outer, *plane])
    forms = st.sets(st.sampled_from(["dimensions", "axes", "axes_fastest_first"]), min_size=1)
    return {
        "axes": axes,
        "shape": tuple(draw(st.integers(1, 4)) for _ in axes),
        "order": tuple(draw(st.permutations(range(len(axes))))),
        "encoding": draw(st.sampled_from(["native", "compound", "pair"])),
        "bits": draw(st.sampled_from([32, 64])),
        "at": draw(st.integers(0, 6)),
        "forms": draw(forms),
        "big_endian": draw(st.booleans()),
    }


@LIMITS
@given(layouts())
def test_any_labelled_layout_reads_back_in_canonical_order(tmp_path: Path, layout: dict[str, Any]) -> None:
    axes, order = layout["axes"], layout["order"]
    array = complex_normal(np.random.default_rng(0), layout["shape"], np.complex64)
    stored, labels = encode(
        array.transpose(order),
        tuple(axes[i] for i in order),
        layout["encoding"],
        layout["bits"],
        layout["at"],
    )
    if layout["big_endian"]:
        stored = stored.astype(stored.dtype.newbyteorder(">"))
    path = tmp_path / "scan.h5"
    with h5py.File(path, "w") as file:
        file.attrs.update(layout="fallow-scan", layout_version=1)
        label(file.create_dataset("kspace", data=stored), labels, layout["forms"])
    with open_scan(path) as scan:
        assert scan.axes == dict(zip(axes, array.shape, strict=True))
        assert list(scan.axes) == list(axes)
        for index in scan.planes():
            plane = scan.kspace(index)
            key = tuple(index._asdict().get(axis, slice(None)) for axis in axes)
            np.testing.assert_array_equal(plane, array[key] if "coil" in axes else array[key][None])
            assert plane.dtype == np.complex64
            assert plane.flags.c_contiguous
        assert len(scan.planes()) == np.prod([scan.axes.get(a, 1) for a in ("frame", "slice", "contrast")])


@LIMITS
@given(st.data())
def test_masks_on_any_subset_of_axes_are_broadcast(tmp_path: Path, data: st.DataObject) -> None:
    sizes = {"frame": 2, "slice": 3, "coil": 2, "ky": 5, "kx": 4}
    subset = data.draw(st.lists(st.sampled_from(["frame", "slice", "ky", "kx"]), unique=True, min_size=1))
    rng = np.random.default_rng(data.draw(st.integers(0, 1000)))
    mask = rng.random([sizes[a] for a in subset]) < 0.6
    dtype = data.draw(st.sampled_from([np.bool_, np.uint8]))
    path = tmp_path / "scan.h5"
    kspace = complex_normal(rng, tuple(sizes.values()))
    write_scan(path, kspace, tuple(sizes), mask=mask.astype(dtype), mask_axes=subset)
    ordered = [axis for axis in sizes if axis in subset]
    spread = mask.transpose([subset.index(axis) for axis in ordered])
    spread = spread.reshape([sizes[axis] if axis in subset else 1 for axis in sizes])
    expected = np.broadcast_to(spread, tuple(sizes.values()))[:, :, 0]
    with open_scan(path) as scan:
        for index in scan.planes():
            np.testing.assert_array_equal(scan.mask(index), expected[index.frame, index.slice])


def test_column_major_writer_as_in_the_readme(tmp_path: Path) -> None:
    """What MATLAB's h5write stores: single precision, axes named fastest first, a leading pair for re and im."""
    kspace = complex_normal(np.random.default_rng(1), (3, 8, 6), np.complex64)  # coil, ky, kx
    path = tmp_path / "scan.h5"
    with h5py.File(path, "w") as file:
        file.attrs["layout"] = "fallow-scan"
        file.attrs["layout_version"] = np.float64(1)  # numbers are double there
        pair = np.stack([kspace.real, kspace.imag], axis=-1)  # column-major [2, nx, ny, nc]
        file.create_dataset("kspace", data=pair)
        file["kspace"].attrs["axes_fastest_first"] = "complex,kx,ky,coil"
    with open_scan(path) as scan:
        np.testing.assert_array_equal(scan.kspace(PlaneIndex()), kspace)


def test_everything_written_is_read_back(tmp_path: Path) -> None:
    rng = np.random.default_rng(2)
    path = tmp_path / "scan.h5"
    kspace = complex_normal(rng, (2, 3, 8, 6), np.complex64)
    noise = complex_normal(rng, (3, 50), np.complex64)
    reference = complex_normal(rng, (2, 3, 4, 4), np.complex64)
    maps = complex_normal(rng, (3, 8, 6), np.complex64)
    mask = np.arange(8) % 2 == 0
    write_scan(
        path, kspace, ("slice", "coil", "ky", "kx"),
        mask=mask, mask_axes=("ky",), noise=noise.T, noise_axes=("sample", "coil"),
        reference=reference, reference_axes=("slice", "coil", "ky", "kx"),
        sensitivity=maps, sensitivity_axes=("coil", "y", "x"),
        attributes={"field_of_view_mm": [60.0, 80.0, 4.0], "sample_time_us": 4.0},
        noise_attributes={"receiver_noise_bandwidth": 0.79},
        title="Pear", acquired_at="2026-03-02T10:00:00Z", repetition_time_ms=250.0, compression="gzip",
    )  # fmt: skip
    with open_scan(path) as scan:
        assert scan.title == "Pear"
        assert scan.acquired_at == "2026-03-02T10:00:00Z"
        assert scan.repetition_time_ms == 250
        assert scan.attributes == {"field_of_view_mm": [60, 80, 4], "sample_time_us": 4}
        assert scan.noise_attributes == {"receiver_noise_bandwidth": 0.79}
        assert scan.findings == []
        np.testing.assert_array_equal(scan.noise(), noise)
        for s in (0, 1):
            np.testing.assert_array_equal(scan.kspace(PlaneIndex(slice=s)), kspace[s])
            np.testing.assert_array_equal(scan.reference(s), reference[s])
            np.testing.assert_array_equal(scan.sensitivity(s), maps)
            np.testing.assert_array_equal(scan.mask(PlaneIndex(slice=s)), np.repeat(mask[:, None], 6, axis=1))


def test_missing_mask_is_inferred_from_zeros_by_readout(tmp_path: Path) -> None:
    kspace = complex_normal(np.random.default_rng(3), (2, 6, 5), np.complex64)
    kspace[:, [1, 4]] = 0
    kspace[:, 2, 3] = 0  # a zero inside a measured readout is a value
    path = tmp_path / "scan.h5"
    write_scan(path, kspace, ("coil", "ky", "kx"))
    with open_scan(path) as scan:
        mask = scan.mask(PlaneIndex())
    np.testing.assert_array_equal(mask, np.repeat(~np.isin(np.arange(6), [1, 4])[:, None], 5, axis=1))


def test_unknown_attributes_and_objects_are_findings(tmp_path: Path) -> None:
    path = tmp_path / "scan.h5"
    write_scan(
        path,
        complex_normal(np.random.default_rng(0), (2, 4, 4)),
        ("coil", "ky", "kx"),
        attributes={"fov": 3.0},
    )
    with h5py.File(path, "a") as file:
        file["maps"] = np.ones(3)
    with open_scan(path) as scan:
        codes = {finding.code: finding for finding in scan.findings}
    assert set(codes) == {"attribute-ignored", "objects-ignored"}
    assert "fov" in codes["attribute-ignored"].message
    assert all(finding.severity == "info" for finding in codes.values())


GOOD: dict[str, Any] = {
    "field_of_view_mm": [100, 100, 5], "readout_oversampling": 2, "phase_oversampling": 1.3,
    "reconstructed_matrix": [4, 6, 1], "slice_position_mm": [[0, 0, 0]],
    "read_direction": [1, 0, 0], "phase_direction": [0, 1, 0], "slice_direction": [0, 0, 1],
    "patient_position": "HFS", "slice_spacing_mm": 4, "frame_interval_ms": 30, "echo_times_ms": [3.0, 5.0],
    "sample_time_us": 5,
}  # fmt: skip
BAD: list[tuple[str, Any]] = [
    ("field_of_view_mm", [100, 100]), ("field_of_view_mm", [100, -1, 5]), ("field_of_view_mm", "wide"),
    ("readout_oversampling", 0.5), ("readout_oversampling", np.nan), ("readout_oversampling", 3.0),
    ("slice_position_mm", [0, 0]), ("read_direction", [1, 1, 0]), ("patient_position", "upside down"),
    ("slice_spacing_mm", 0), ("frame_interval_ms", -1), ("echo_times_ms", [0.0]), ("sample_time_us", np.inf),
    ("phase_oversampling", 0.9), ("phase_oversampling", "much"), ("reconstructed_matrix", [2, 4, 1]),
    ("reconstructed_matrix", [4, 4]), ("reconstructed_matrix", [4.5, 4, 1]), ("reconstructed_matrix", [4, 4, 2]),
    ("reconstructed_matrix", [4, 100_000, 1]),
]  # fmt: skip


def test_every_known_attribute_is_accepted(tmp_path: Path) -> None:
    assert set(GOOD) == set(KSPACE_ATTRIBUTES)
    assert set(NOISE_ATTRIBUTES) == {"sample_time_us", "receiver_noise_bandwidth"}
    path = tmp_path / "scan.h5"
    write_scan(
        path, complex_normal(np.random.default_rng(0), (2, 4, 4)), ("coil", "ky", "kx"), attributes=GOOD
    )
    with open_scan(path) as scan:
        assert set(scan.attributes) == set(GOOD)
        assert scan.findings == []


@pytest.mark.parametrize(("name", "value"), BAD)
def test_attributes_out_of_range_are_refused_by_name(tmp_path: Path, name: str, value: Any) -> None:
    path = tmp_path / "scan.h5"
    kspace = complex_normal(np.random.default_rng(0), (2, 4, 4))
    with pytest.raises(InvalidScan, match=name):
        write_scan(path, kspace, ("coil", "ky", "kx"), attributes={name: value})
    assert not path.exists()


@pytest.mark.parametrize("value", [0.0, 1.01, "narrow"])
def test_receiver_noise_bandwidth_is_above_zero_and_up_to_one(tmp_path: Path, value: Any) -> None:
    rng = np.random.default_rng(0)
    with pytest.raises(InvalidScan, match="receiver_noise_bandwidth"):
        write_scan(
            tmp_path / "scan.h5", complex_normal(rng, (2, 4, 4)), ("coil", "ky", "kx"),
            noise=complex_normal(rng, (2, 9)), noise_attributes={"receiver_noise_bandwidth": value},
        )  # fmt: skip


def test_planes_of_one_slice_follow_each_other() -> None:
    array = LabelledArray(
        np.zeros((2, 3, 2, 1, 4, 4), np.complex64), ("frame", "slice", "contrast", "coil", "ky", "kx")
    )
    planes = Scan(array).planes()
    assert len(planes) == len(set(planes)) == 12
    assert [p.slice for p in planes] == sorted(p.slice for p in planes)


def test_vocabulary() -> None:
    assert KSPACE_AXES == ("frame", "slice", "contrast", "average", "coil", "kz", "ky", "kx")
