"""Scan layout version 1 (HDF5): read, write, validate."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Final

import h5py
import numpy as np
from numpy.typing import ArrayLike

from recon.axes import KSPACE_AXES, LabelledArray
from recon.errors import InvalidScan
from recon.findings import Finding
from recon.formats import hdf5
from recon.formats.attributes import (
    KSPACE_ATTRIBUTES,
    NOISE_ATTRIBUTES,
    check_slices,
    check_value,
    read_attributes,
)
from recon.grid import image_grid
from recon.scan import Scan

LAYOUT: Final = "fallow-scan"
LAYOUT_VERSION: Final = 1
OBJECTS: Final = ("kspace", "mask", "noise", "reference", "sensitivity")
_ACCEPTED_AXES: Final = {
    "kspace": KSPACE_AXES,
    "mask": tuple(axis for axis in KSPACE_AXES if axis != "coil"),
    "noise": ("coil", "sample"),
    "reference": ("slice", "coil", "kz", "ky", "kx"),
    "sensitivity": ("slice", "coil", "z", "y", "x"),
}
_TEXT_LIMIT: Final = 200


def read_scan(path: Path | str) -> Scan:
    """Open a scan file; arrays are read only when asked for.

    Parameters
    ----------
    path : path
        An HDF5 file in scan layout version 1.

    Returns
    -------
    Scan
        Close it, or use it as a context manager.

    Raises
    ------
    InvalidScan
        Naming what was received, what is accepted and what to do.
    """
    file = hdf5.open_file(path)
    try:
        return _read(file)
    except InvalidScan:
        file.close()
        raise
    except (OSError, RuntimeError, ValueError, KeyError, UnicodeError, TypeError) as error:
        file.close()
        raise InvalidScan(f"the file is damaged ({type(error).__name__}); write it again") from None


def _read(file: h5py.File) -> Scan:
    _check_layout(file)
    arrays: dict[str, LabelledArray | None] = {}
    for name in OBJECTS:
        read = hdf5.mask_array if name == "mask" else hdf5.complex_array
        arrays[name] = read(file, name, _ACCEPTED_AXES[name])
    kspace = arrays["kspace"]
    if kspace is None:
        raise InvalidScan("the file has no /kspace; write the k-space array as the dataset /kspace")
    findings = _ignored_objects(file)
    attributes, ignored = read_attributes(file["kspace"], "/kspace", KSPACE_ATTRIBUTES)
    findings += ignored
    check_slices(attributes, kspace.sizes.get("slice", 1))
    noise_attributes: dict[str, Any] = {}
    if arrays["noise"] is not None:
        noise_attributes, ignored = read_attributes(file["noise"], "/noise", NOISE_ATTRIBUTES)
        findings += ignored
    scan = Scan(
        kspace,
        mask_array=arrays["mask"],
        noise_array=arrays["noise"],
        reference_array=arrays["reference"],
        sensitivity_array=arrays["sensitivity"],
        attributes=attributes,
        noise_attributes=noise_attributes,
        title=_root_text(file, "title"),
        acquired_at=_root_text(file, "acquired_at"),
        repetition_time_ms=_root_number(file, "repetition_time_ms"),
        findings=findings,
        file=file,
    )
    image_grid(scan)  # refuses sizes that do not fit
    return scan


def _check_layout(file: h5py.File) -> None:
    layout = hdf5.text(file.attrs.get("layout"))
    if layout != LAYOUT:
        shown = "no such attribute" if layout is None else repr(layout[:40])
        raise InvalidScan(f'root attribute layout: received {shown}; accepted is "{LAYOUT}": write it')
    version = np.asarray(file.attrs.get("layout_version", 0))
    if version.size != 1 or version.dtype.kind not in "iuf" or int(version.reshape(-1)[0]) != LAYOUT_VERSION:
        raise InvalidScan(f"root attribute layout_version: received {version}; accepted is {LAYOUT_VERSION}")


def _root_text(file: h5py.File, name: str) -> str | None:
    if name not in file.attrs:
        return None
    value = hdf5.text(file.attrs[name])
    if value is None:
        raise InvalidScan(f"root attribute {name} is not text; write a string or leave it out")
    return "".join(character for character in value if character.isprintable())[:_TEXT_LIMIT]


def _root_number(file: h5py.File, name: str) -> float | None:
    if name not in file.attrs:
        return None
    number = check_value("/", name, file.attrs[name], {name: KSPACE_ATTRIBUTES["frame_interval_ms"]})
    return float(number) if isinstance(number, float) else None


def _ignored_objects(file: h5py.File) -> list[Finding]:
    others = [name for name in file if name not in OBJECTS]
    if not others:
        return []
    return [
        Finding(
            "objects-ignored",
            "info",
            f"The file holds {len(others)} object(s) that the scan layout does not know: they have no effect; check "
            f"their names against {', '.join('/' + name for name in OBJECTS)}.",
            "/",
            {"count": len(others)},
        )
    ]


def write_scan(
    path: Path | str,
    kspace: ArrayLike,
    axes: Sequence[str],
    *,
    mask: ArrayLike | None = None,
    mask_axes: Sequence[str] | None = None,
    noise: ArrayLike | None = None,
    noise_axes: Sequence[str] = ("coil", "sample"),
    reference: ArrayLike | None = None,
    reference_axes: Sequence[str] | None = None,
    sensitivity: ArrayLike | None = None,
    sensitivity_axes: Sequence[str] | None = None,
    attributes: Mapping[str, Any] | None = None,
    noise_attributes: Mapping[str, Any] | None = None,
    title: str | None = None,
    acquired_at: str | None = None,
    repetition_time_ms: float | None = None,
    compression: str | None = None,
) -> None:
    """Write a scan file in layout version 1 and check it by reading it back.

    Parameters
    ----------
    path : path
        Where to write; an existing file is replaced.
    kspace : array_like, complex
        In the order of `axes` (C order).
    axes, mask_axes, noise_axes, reference_axes, sensitivity_axes : sequence of str
        Labels of each array; required with the array they describe.
    compression : {"gzip", "lzf"} or None
        HDF5 filter for the arrays.

    Raises
    ------
    InvalidScan
        When what was given is no valid scan (the file is removed again).
    """
    given = {
        "kspace": (kspace, axes),
        "mask": (mask, mask_axes),
        "noise": (noise, noise_axes),
        "reference": (reference, reference_axes),
        "sensitivity": (sensitivity, sensitivity_axes),
    }
    texts = {"title": title, "acquired_at": acquired_at, "repetition_time_ms": repetition_time_ms}
    try:
        with h5py.File(path, "w") as file:
            file.attrs["layout"] = LAYOUT
            file.attrs["layout_version"] = LAYOUT_VERSION
            file.attrs.update({name: value for name, value in texts.items() if value is not None})
            for name, (array, labels) in given.items():
                if array is not None:
                    _write_array(file, name, array, labels, compression)
            file["kspace"].attrs.update(attributes or {})
            if noise_attributes and noise is None:
                raise InvalidScan("noise_attributes were given without noise; give both or neither")
            if noise_attributes:
                file["noise"].attrs.update(noise_attributes)
        read_scan(path).close()
    except InvalidScan:
        Path(path).unlink(missing_ok=True)
        raise


def _write_array(
    file: h5py.File, name: str, array: ArrayLike, labels: Sequence[str] | None, compression: str | None
) -> None:
    values = np.asarray(array)
    if labels is None or len(labels) != values.ndim:
        raise InvalidScan(
            f"/{name} has {values.ndim} dimensions and the labels {labels}; give one label for each"
        )
    options = {"compression": compression, "shuffle": True} if compression else {}
    written = file.create_dataset(name, data=values, **options)
    for position, label in enumerate(labels):
        written.dims[position].label = label
