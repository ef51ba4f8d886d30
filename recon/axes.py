"""Axis vocabulary and arrays that know the names of their axes.

Every array that enters Fallow is labelled. A `LabelledArray` may lie in memory or in an HDF5 file; `take` reads one
part of it and returns the remaining axes in the canonical order, whatever order the writer chose.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final, Protocol

import numpy as np
from numpy.typing import NDArray

#: k-space axes in canonical (C) order: `kx` is the readout, `ky` and `kz` are phase encodes.
KSPACE_AXES: Final = ("frame", "slice", "contrast", "average", "coil", "kz", "ky", "kx")
#: image-space axes in canonical order.
IMAGE_AXES: Final = ("frame", "slice", "contrast", "coil", "z", "y", "x")
#: axes over which planes are reconstructed one by one.
OUTER_AXES: Final = ("frame", "slice", "contrast")
#: label of an axis of length 2 that holds real and imaginary part.
COMPLEX_AXIS: Final = "complex"

_CANONICAL: Final = (
    "frame", "slice", "contrast", "average", "coil", "sample", "kz", "ky", "kx", "z", "y", "x",
)  # fmt: skip


def canonical(axes: Sequence[str]) -> tuple[str, ...]:
    """Return `axes` sorted into the canonical order."""
    return tuple(sorted(axes, key=_CANONICAL.index))


def image_axis(kspace_axis: str) -> str:
    """Return the image-space name of a k-space axis: `ky` becomes `y`, `slice` stays."""
    return kspace_axis[1:] if kspace_axis in ("kz", "ky", "kx") else kspace_axis


class ArrayLike(Protocol):
    """What `LabelledArray` needs of its storage: numpy arrays and h5py datasets both have it."""

    @property
    def shape(self) -> tuple[int, ...]: ...

    def __getitem__(self, key: Any) -> Any: ...


@dataclass(frozen=True)
class LabelledArray:
    """An array with named axes, in memory or on disk.

    Attributes
    ----------
    data : array-like
        Storage, indexed in the writer's order.
    labels : tuple of str
        One label for each storage axis; may contain `complex` (length 2: real and imaginary part).
    """

    data: ArrayLike
    labels: tuple[str, ...]

    @property
    def axes(self) -> tuple[str, ...]:
        """Labels in canonical order, without the `complex` axis."""
        return canonical([label for label in self.labels if label != COMPLEX_AXIS])

    @property
    def sizes(self) -> dict[str, int]:
        """Length of every axis, in canonical order."""
        by_label = dict(zip(self.labels, self.data.shape, strict=True))
        return {label: int(by_label[label]) for label in self.axes}

    def take(self, **index: int) -> NDArray[Any]:
        """Read the part at the given positions; the remaining axes come back in canonical order.

        Parameters
        ----------
        **index : int
            Position along named axes. Axes that the array does not have are ignored, so that a mask without a
            `slice` axis serves every slice.

        Returns
        -------
        ndarray
            Complex arrays as complex64, others (masks) as bool.
        """
        key = tuple(index.get(label, slice(None)) for label in self.labels)
        part = decode(np.asarray(self.data[key]), _complex_position(self.labels, index))
        left = [label for label in self.labels if label not in index and label != COMPLEX_AXIS]
        order = [left.index(label) for label in canonical(left)]
        return np.ascontiguousarray(part.transpose(order))


def _complex_position(labels: tuple[str, ...], index: dict[str, int]) -> int | None:
    left = [label for label in labels if label not in index]
    return left.index(COMPLEX_AXIS) if COMPLEX_AXIS in left else None


def decode(raw: NDArray[Any], complex_axis: int | None) -> NDArray[Any]:
    """Turn any of the accepted encodings into complex64 (or bool for masks)."""
    if raw.dtype.names is not None:
        real, imaginary = raw.dtype.names
        raw = raw[real] + np.complex64(1j) * raw[imaginary]
    elif complex_axis is not None:
        raw = np.take(raw, 0, axis=complex_axis) + np.complex64(1j) * np.take(raw, 1, axis=complex_axis)
    if raw.dtype.kind in "bu":
        return raw.astype(np.bool_)
    with np.errstate(over="ignore"):  # beyond single range it becomes Inf, which inspection refuses by name
        return raw.astype(np.complex64, copy=False)
