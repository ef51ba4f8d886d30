"""What is checked of a scan: names and shapes against each other when it is made, and that its numbers are finite."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from itertools import product
from typing import TYPE_CHECKING

import numpy as np

from recon.axes import COMPLEX_AXIS, KSPACE_AXES, LabelledArray, image_axis
from recon.errors import InvalidScan

if TYPE_CHECKING:
    from recon.scan import Scan


def validate(scan: Scan, cropped_columns: Callable[[Scan], int]) -> None:
    """Check names and shapes of everything in a scan against each other.

    Parameters
    ----------
    scan : Scan
    cropped_columns : callable
        Readout positions without oversampling.

    Raises
    ------
    InvalidScan
        Naming the object, what was received, what is accepted and what to do.
    """
    _check_kspace_axes(scan.kspace_array)
    for name in ("kspace", "noise", "reference", "sensitivity"):
        _check_numbers(f"/{name}", getattr(scan, f"{name}_array"))
    sizes = scan.axes
    plane = ("kz", "ky", "kx") if scan.is_volume else scan.plane_axes
    image = tuple(image_axis(axis) for axis in plane)
    fixed: dict[str, int] = {axis: sizes[axis] for axis in sizes if axis in ("slice", "coil")}
    if scan.mask_array is not None:
        accepted = [axis for axis in sizes if axis != "coil"]
        _check_subset("/mask", scan.mask_array, {axis: sizes[axis] for axis in accepted})
    if scan.noise_array is not None:
        _check_noise(scan.noise_array, scan.coils)
    if scan.reference_array is not None:
        _check_calibration("/reference", scan.reference_array, fixed, plane)
    if scan.sensitivity_array is not None:
        _check_calibration("/sensitivity", scan.sensitivity_array, fixed, image)
        _check_map_size(scan, scan.sensitivity_array, image, cropped_columns(scan))


def _check_numbers(name: str, array: LabelledArray | None) -> None:
    """Arrays handed over in memory are checked as a file's are."""
    if array is None or not isinstance(array.data, np.ndarray):
        return
    dtype = array.data.dtype
    is_complex = (
        dtype.kind == "c" or dtype.names is not None or (dtype.kind == "f" and COMPLEX_AXIS in array.labels)
    )
    if not is_complex:
        raise InvalidScan(
            f"{name} holds {dtype} numbers; accepted are complex ones: convert before handing them over"
        )


def _check_kspace_axes(array: LabelledArray) -> None:
    axes = [label for label in array.labels if label != COMPLEX_AXIS]
    phases = {"kz", "ky", "kx"} & set(axes)
    if phases not in ({"ky", "kx"}, {"kz", "ky"}, {"kz", "ky", "kx"}):
        raise InvalidScan(
            f"/kspace has the axes {', '.join(axes)}; a plane needs exactly ky and kx, or kz and ky (one readout "
            f"position), a volume kz, ky and kx: label the axes so, out of {', '.join(KSPACE_AXES)}"
        )
    if len(phases) == 3 and "slice" in axes:
        raise InvalidScan(
            f"/kspace has the axes {', '.join(axes)}; a volume (kz, ky and kx) has no slice axis: write one scan for "
            f"each slab"
        )
    for label, size in array.sizes.items():
        if size == 0:
            raise InvalidScan(f"/kspace has no samples: axis {label} has length 0; write at least one")


def _check_subset(name: str, array: LabelledArray, accepted: Mapping[str, int]) -> None:
    for label, size in array.sizes.items():
        if label not in accepted:
            raise InvalidScan(
                f"{name} has the axis {label}; accepted is any subset of the k-space axes without coil: "
                f"{', '.join(accepted)}"
            )
        if size != accepted[label]:
            raise InvalidScan(
                f"{name} has length {size} along {label}, /kspace has {accepted[label]}: write one entry for each "
                f"position"
            )


def _check_noise(array: LabelledArray, coils: int) -> None:
    if set(array.axes) != {"coil", "sample"}:
        raise InvalidScan(
            f"/noise has the axes {', '.join(array.axes)}; accepted are exactly coil and sample"
        )
    sizes = array.sizes
    if sizes["coil"] != coils:
        raise InvalidScan(
            f"/noise has {sizes['coil']} coils, /kspace has {coils}: write the same coils in the same order"
        )
    if sizes["sample"] <= coils:
        raise InvalidScan(
            f"/noise has {sizes['sample']} samples for {coils} coils; more samples than coils are needed to estimate "
            f"the noise covariance: write a longer noise readout or leave /noise out"
        )


def _check_calibration(
    name: str, array: LabelledArray, fixed: Mapping[str, int], plane: tuple[str, ...]
) -> None:
    accepted = [*fixed, *plane]
    axes = array.axes
    optional = {"slice"} | ({"coil"} if fixed.get("coil", 1) == 1 else set())
    unknown = [axis for axis in axes if axis not in accepted]
    absent = [axis for axis in accepted if axis not in axes and axis not in optional]
    if unknown or absent:
        raise InvalidScan(f"{name} has the axes {', '.join(axes)}; accepted are {', '.join(accepted)}")
    for label, size in array.sizes.items():
        if label in fixed and size != fixed[label]:
            raise InvalidScan(
                f"{name} has length {size} along {label}, /kspace has {fixed[label]}: write the same number"
            )
        if size == 0:
            raise InvalidScan(
                f"{name} has length 0 along {label}; write at least one sample or leave {name} out"
            )


def _check_map_size(scan: Scan, array: LabelledArray, image: tuple[str, ...], columns: int) -> None:
    received = tuple(array.sizes[axis] for axis in image)
    encoded = tuple(scan.axes["k" + axis] for axis in image)
    cropped = (*encoded[:-1], columns)
    if received not in (encoded, cropped):
        raise InvalidScan(
            f"/sensitivity has the matrix {received}; accepted is that of k-space, {encoded}"
            + (f", or {cropped} with readout oversampling removed" if cropped != encoded else "")
        )


def check_finite(scan: Scan) -> None:
    """Raise `InvalidScan` when `/noise`, `/reference` or `/sensitivity` holds NaN or Inf (`see` looks at `/kspace`)."""
    others = {
        "/noise": scan.noise_array,
        "/reference": scan.reference_array,
        "/sensitivity": scan.sensitivity_array,
    }
    for name, array in others.items():
        if array is None:
            continue
        sizes = array.sizes
        for position, coil in product(range(sizes.get("slice", 1)), range(sizes.get("coil", 1))):
            if not np.isfinite(array.take(slice=position, coil=coil).view(np.float32)).all():
                raise InvalidScan(
                    f"{name} contains NaN or Inf; write finite numbers in single-precision range"
                )
