"""What is no scan, or no scan that can be reconstructed: one clear sentence each, never a traceback of HDF5."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import suppress
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from recon.errors import CalibrationMissing, InvalidScan, InvalidSettings, ReconError
from recon.feasibility import check_job
from recon.formats import open_scan
from recon.inspection import inspect
from recon.settings import Settings, parse_settings
from tests.recon.helpers import complex_normal, line_mask

Breaker = Callable[[h5py.File], None]


def good_scan(path: Path, *, shape: tuple[int, int] = (24, 20), coils: int = 3) -> Path:
    """Write a small complete scan by h5py alone."""
    rng = np.random.default_rng(0)
    mask = line_mask(*shape, every=2, calibration=16)
    with h5py.File(path, "w") as file:
        file.attrs.update(layout="fallow-scan", layout_version=1)
        file["kspace"] = (complex_normal(rng, (coils, *shape)) * mask).astype(np.complex64)
        file["kspace"].attrs["axes"] = "coil,ky,kx"
        file["mask"] = mask
        file["mask"].attrs["axes"] = "ky,kx"
        file["noise"] = complex_normal(rng, (coils, 100), np.complex64)
        file["noise"].attrs["axes"] = "coil,sample"
    return path


def replace(file: h5py.File, name: str, data: Any, axes: str | None) -> None:
    """Put another dataset in the place of one."""
    if name in file:
        del file[name]
    file.create_dataset(name, data=data)
    if axes is not None:
        file[name].attrs["axes"] = axes


def _disagree(file: h5py.File) -> None:
    file["kspace"].attrs["axes_fastest_first"] = "coil,ky,kx"


def _dimension_labels_disagree(file: h5py.File) -> None:
    for position, name in enumerate(("coil", "kx", "ky")):
        file["kspace"].dims[position].label = name


def _external_link(file: h5py.File) -> None:
    del file["mask"]
    file["mask"] = h5py.ExternalLink("elsewhere.h5", "/mask")


def _soft_link(file: h5py.File) -> None:
    del file["mask"]
    file["mask"] = h5py.SoftLink("/kspace")


def _virtual(file: h5py.File) -> None:
    layout = h5py.VirtualLayout(shape=(3, 24, 20), dtype=np.complex64)
    layout[:] = h5py.VirtualSource("elsewhere.h5", "kspace", shape=(3, 24, 20))
    del file["kspace"]
    file.create_virtual_dataset("kspace", layout)
    file["kspace"].attrs["axes"] = "coil,ky,kx"


def _external_storage(file: h5py.File) -> None:
    del file["noise"]
    file.create_dataset("noise", (3, 100), "f4", external=[("elsewhere.raw", 0, 1200)])
    file["noise"].attrs["axes"] = "coil,sample"


def _group(file: h5py.File) -> None:
    del file["kspace"]
    file.create_group("kspace")


def _without_kspace(file: h5py.File) -> None:
    del file["kspace"]


def _unlabelled(file: h5py.File) -> None:
    del file["kspace"].attrs["axes"]


ONES = np.ones((3, 24, 20), np.complex64)
REFUSED_ON_OPENING: dict[str, tuple[Breaker, str]] = {
    "missing kspace": (_without_kspace, "no /kspace"),
    "kspace is a group": (_group, "/kspace is a group"),
    "unlabelled axes": (_unlabelled, "unlabelled"),
    "unknown axis": (lambda f: replace(f, "kspace", ONES, "coil,ky,time"), "unknown axis time"),
    "axis named twice": (lambda f: replace(f, "kspace", ONES, "coil,ky,ky"), "twice"),
    "too few labels": (lambda f: replace(f, "kspace", ONES, "ky,kx"), "3 dimensions but 2"),
    "no plane": (lambda f: replace(f, "kspace", ONES, "coil,slice,kx"), "ky and kx"),
    "attributes disagree": (_disagree, "disagree"),
    "dimension labels disagree": (_dimension_labels_disagree, "disagree"),
    "integer kspace": (lambda f: replace(f, "kspace", ONES.real.astype("i2"), "coil,ky,kx"), "int16"),
    "real kspace": (lambda f: replace(f, "kspace", ONES.real, "coil,ky,kx"), "float32"),
    "text kspace": (lambda f: replace(f, "kspace", b"abc", "coil,ky,kx"), "/kspace"),
    "complex axis of length 3": (
        lambda f: replace(f, "kspace", np.ones((3, 24, 20), "f4"), "complex,ky,kx"),
        "length 3",
    ),
    "half precision": (
        lambda f: replace(f, "kspace", np.ones((24, 20, 2), "f2"), "ky,kx,complex"),
        "single or double",
    ),
    "zero-size axis": (lambda f: replace(f, "kspace", ONES[:, :0], "coil,ky,kx"), "length 0"),
    "mask of another shape": (
        lambda f: replace(f, "mask", np.ones((24, 19), bool), "ky,kx"),
        "length 19 along kx",
    ),
    "mask with a coil axis": (lambda f: replace(f, "mask", np.ones((3, 24), bool), "coil,ky"), "/mask"),
    "mask of floats": (lambda f: replace(f, "mask", np.ones((24, 20)), "ky,kx"), "/mask"),
    "noise of other coils": (lambda f: replace(f, "noise", ONES[:2, 0], "coil,sample"), "2 coils"),
    "noise without samples": (lambda f: replace(f, "noise", ONES[:, 0, :0], "coil,sample"), "0 samples"),
    "noise shorter than coils": (lambda f: replace(f, "noise", ONES[:, 0, :3], "coil,sample"), "3 samples"),
    "maps of another shape": (lambda f: replace(f, "sensitivity", ONES[:, :5], "coil,y,x"), "/sensitivity"),
    "reference of other coils": (lambda f: replace(f, "reference", ONES[:1], "coil,ky,kx"), "/reference"),
    "external link": (_external_link, "external link, into another file"),
    "soft link": (_soft_link, "soft link"),
    "virtual dataset": (_virtual, "virtual"),
    "external storage": (_external_storage, "another file"),
    "another layout": (lambda f: f.attrs.update(layout="other"), "layout"),
    "another version": (lambda f: f.attrs.update(layout_version=2), "layout_version"),
}


@pytest.mark.parametrize("case", REFUSED_ON_OPENING)
def test_refused_on_opening_with_one_clear_sentence(tmp_path: Path, case: str) -> None:
    path = good_scan(tmp_path / "scan.h5")
    break_it, expected = REFUSED_ON_OPENING[case]
    with h5py.File(path, "a") as file:
        break_it(file)
    with pytest.raises(InvalidScan) as caught:
        open_scan(path)
    message = str(caught.value)
    assert expected in message
    assert "\n" not in message
    assert len(message) < 400
    assert str(tmp_path) not in message


def test_the_unbroken_scan_is_accepted(tmp_path: Path) -> None:
    with open_scan(good_scan(tmp_path / "scan.h5")) as scan:
        assert inspect(scan).findings == []


@pytest.mark.parametrize(
    ("content", "expected"),
    [(b"", "HDF5"), (b"not a scan at all" * 100, "HDF5"), (b"\x89HDF\r\n\x1a\n", "HDF5")],
)
def test_files_that_are_not_hdf5(tmp_path: Path, content: bytes, expected: str) -> None:
    path = tmp_path / "scan.h5"
    path.write_bytes(content)
    with pytest.raises(InvalidScan, match=expected):
        open_scan(path)


def test_missing_file_and_folder(tmp_path: Path) -> None:
    with pytest.raises(InvalidScan, match="no such file"):
        open_scan(tmp_path / "nothing.h5")
    with pytest.raises(InvalidScan, match="no such file"):
        open_scan(tmp_path)


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.floats(0, 0.999))
def test_truncated_anywhere(tmp_path: Path, part: float) -> None:
    whole = good_scan(tmp_path / "whole.h5").read_bytes()
    path = tmp_path / "part.h5"
    path.write_bytes(whole[: int(part * len(whole))])
    with pytest.raises(InvalidScan), open_scan(path) as scan:
        inspect(scan)


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.data())
def test_flipped_bytes_are_refused_or_harmless_never_a_crash(tmp_path: Path, data: st.DataObject) -> None:
    content = bytearray(good_scan(tmp_path / "whole.h5", shape=(12, 10)).read_bytes())
    for _ in range(data.draw(st.integers(1, 4))):
        # the first kilobytes hold the structure; array bytes are only numbers
        content[data.draw(st.integers(0, min(len(content), 4000) - 1))] = data.draw(st.integers(0, 255))
    path = tmp_path / "flipped.h5"
    path.write_bytes(bytes(content))
    with suppress(ReconError), open_scan(path) as scan:
        inspect(scan)


def _put(name: str, index: tuple[int, ...], value: complex) -> Breaker:
    def change(file: h5py.File) -> None:
        file[name][index] = value

    return change


@pytest.mark.parametrize(
    ("break_it", "expected"),
    [
        (_put("kspace", (1, 0, 3), np.nan), "/kspace contains NaN or Inf"),
        (_put("kspace", (2, 12, 0), 1j * np.inf), "/kspace contains NaN or Inf"),
        (_put("noise", (0, 99), np.nan), "/noise contains NaN or Inf"),
        (lambda f: replace(f, "mask", np.zeros((24, 20), bool), "ky,kx"), "false everywhere"),
        (lambda f: replace(f, "kspace", np.zeros((3, 24, 20), np.complex64), "coil,ky,kx"), "only zeros"),
        (lambda f: replace(f, "kspace", np.full((3, 24, 20), 1e39 + 0j), "coil,ky,kx"), "NaN or Inf"),
    ],
)
def test_refused_on_inspection(tmp_path: Path, break_it: Breaker, expected: str) -> None:
    path = good_scan(tmp_path / "scan.h5")
    with h5py.File(path, "a") as file:
        break_it(file)
    with open_scan(path) as scan, pytest.raises(InvalidScan, match=expected):
        inspect(scan)


def _facts(path: Path) -> dict[str, Any]:
    with open_scan(path) as scan:
        return inspect(scan).as_dict()


def test_no_calibration_region_and_no_maps_is_refused_when_maps_are_needed(tmp_path: Path) -> None:
    path = good_scan(tmp_path / "scan.h5")
    gappy = np.repeat((np.arange(24) % 2 == 0)[:, None], 20, axis=1)
    with h5py.File(path, "a") as file:
        replace(file, "mask", gappy, "ky,kx")
    facts = _facts(path)
    for settings_ in (Settings(), Settings(method="tikhonov"), Settings(method="zero-filled")):
        with pytest.raises(CalibrationMissing, match="/reference"):
            check_job(facts, settings_)
    check_job(facts, Settings(method="zero-filled", combination="root-sum-of-squares"))
    with h5py.File(path, "a") as file:
        replace(file, "reference", np.ones((3, 12, 12), np.complex64), "coil,ky,kx")
    check_job(_facts(path), Settings())
    with h5py.File(path, "a") as file:
        del file["reference"]
        replace(file, "sensitivity", ONES, "coil,y,x")
    check_job(_facts(path), Settings())


def test_settings_that_the_scan_cannot_serve(tmp_path: Path) -> None:
    facts = _facts(good_scan(tmp_path / "scan.h5"))
    check_job(facts, Settings())
    with pytest.raises(InvalidSettings, match="coil_compression"):
        check_job(facts, parse_settings({"coil_compression": {"coils": 4}}))
    with pytest.raises(InvalidSettings, match="coil_maps"):
        check_job(facts, parse_settings({"coil_maps": "supplied"}))


@pytest.mark.parametrize(
    ("values", "pointer"),
    [
        ({"wavelet_strength": -0.1}, "/wavelet_strength"),
        ({"wavelet_strength": True}, "/wavelet_strength"),
        ({"wavelet_strength": 1e7}, "/wavelet_strength"),
        ({"tv_strength": float("nan")}, "/tv_strength"),
        ({"tv_strength": float("inf")}, "/tv_strength"),
        ({"tikhonov_strength": "strong"}, "/tikhonov_strength"),
        ({"wavelet": "db99"}, "/wavelet"),
        ({"wavelet": "bior2.2"}, "/wavelet"),
        ({"method": "magic"}, "/method"),
        ({"coil_maps": "guess"}, "/coil_maps"),
        ({"coil_compression": {"coils": 0}}, "/coil_compression"),
        ({"coil_compression": {"keep_energy": 1.5}}, "/coil_compression"),
        ({"coil_compression": 8}, "/coil_compression"),
        ({"combination": "average"}, "/combination"),
        ({"tolerance": 0}, "/tolerance"),
        ({"tolerance": 1}, "/tolerance"),
        ({"max_iterations": 0}, "/max_iterations"),
        ({"max_iterations": 2.5}, "/max_iterations"),
        ({"max_iterations": "many"}, "/max_iterations"),
        ({"temporal_strength": -0.1}, "/temporal_strength"),
        ({"strength": 0.1}, "/strength"),
        ({"constraint": "positive"}, "/constraint"),
        ({"seed": 1}, "/seed"),
    ],
)
def test_settings_out_of_range_or_unknown(values: dict[str, Any], pointer: str) -> None:
    with pytest.raises(InvalidSettings) as caught:
        parse_settings(values)
    assert [problem["pointer"] for problem in caught.value.errors] == [pointer]
    assert caught.value.errors[0]["detail"]


def test_every_bad_setting_is_listed_at_once() -> None:
    with pytest.raises(InvalidSettings) as caught:
        parse_settings({"tolerance": -1, "tv_strength": -1, "colour": "red"})
    assert {problem["pointer"] for problem in caught.value.errors} == {
        "/tolerance",
        "/tv_strength",
        "/colour",
    }


@pytest.mark.parametrize("values", [[], "settings", 3])
def test_settings_must_be_an_object(values: Any) -> None:
    with pytest.raises(InvalidSettings):
        parse_settings(values)
