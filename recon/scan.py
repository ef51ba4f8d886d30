"""The `Scan` record: labelled arrays with their acquisition facts, checked once, read plane by plane."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from itertools import product
from types import TracebackType
from typing import Any, NamedTuple, Protocol, Self

import numpy as np
from numpy.typing import NDArray

from recon.averages import Mean, Samples
from recon.axes import OUTER_AXES, LabelledArray, image_axis
from recon.errors import InvalidScan
from recon.findings import Finding
from recon.scan_checks import validate
from recon.spikes import remove_spikes


class PlaneIndex(NamedTuple):
    """Which plane of a scan: position along `frame`, `slice` and `contrast` (0 where the axis is absent)."""

    frame: int = 0
    slice: int = 0
    contrast: int = 0


class Closeable(Protocol):
    """A file behind the arrays of a scan."""

    def close(self) -> None: ...


@dataclass
class Scan:
    """One acquisition. Arrays are read lazily; every method returns canonical axis order.

    Attributes
    ----------
    kspace_array : LabelledArray
        Complex, axes among `frame slice contrast average coil` and either `ky kx` or `kz ky`; a volume has
        `kz ky kx` and no `slice`.
    mask_array : LabelledArray or None
        Bool, a subset of the k-space axes without `coil`; None: inferred from zeros.
    noise_array : LabelledArray or None
        Complex, axes `coil sample`.
    reference_array : LabelledArray or None
        Separately acquired calibration k-space, axes `coil`, the plane axes and perhaps `slice`.
    sensitivity_array : LabelledArray or None
        Coil maps on the image axes `coil`, the plane's and perhaps `slice`.
    attributes : mapping
        Checked attributes of `/kspace` (see `recon.formats.attributes`), lengths in mm, times in ms or as named.
    noise_attributes : mapping
        Checked attributes of `/noise`.
    title, acquired_at, repetition_time_ms
        Optional root attributes.
    findings : list of Finding
        What the reader noticed.
    drops_spikes : bool
        Whether spikes (see `recon.spikes`) count as not sampled.
    """

    kspace_array: LabelledArray
    mask_array: LabelledArray | None = None
    noise_array: LabelledArray | None = None
    reference_array: LabelledArray | None = None
    sensitivity_array: LabelledArray | None = None
    attributes: Mapping[str, Any] = field(default_factory=dict)
    noise_attributes: Mapping[str, Any] = field(default_factory=dict)
    title: str | None = None
    acquired_at: str | None = None
    repetition_time_ms: float | None = None
    findings: list[Finding] = field(default_factory=list)
    file: Closeable | None = None
    drops_spikes: bool = False

    def __post_init__(self) -> None:
        validate(self, cropped_readout)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """Close the file behind the arrays, if there is one."""
        if self.file is not None:
            self.file.close()

    @property
    def axes(self) -> dict[str, int]:
        """Length of every k-space axis, canonical order."""
        return self.kspace_array.sizes

    @property
    def is_volume(self) -> bool:
        """Whether all three of `kz ky kx` are there."""
        return {"kz", "ky", "kx"} <= set(self.axes)

    @property
    def plane_axes(self) -> tuple[str, str]:
        """The two axes of one plane: (`ky`, `kx`) or (`kz`, `ky`); of a volume its phase encodes, `kz` and `ky`."""
        return ("kz", "ky") if "kz" in self.axes else ("ky", "kx")

    @property
    def plane_shape(self) -> tuple[int, int]:
        """Rows and columns of one plane of k-space."""
        rows, columns = self.plane_axes
        return self.axes[rows], self.axes[columns]

    @property
    def coils(self) -> int:
        """Number of receive channels (1 where the axis is absent)."""
        return self.axes.get("coil", 1)

    @property
    def averages(self) -> int:
        """How often a plane was measured (1 where the axis is absent)."""
        return self.axes.get("average", 1)

    @property
    def keeps_readouts(self) -> bool:
        """Whether readouts are left out as a whole or not at all."""
        return False

    @property
    def outer_axes(self) -> tuple[str, ...]:
        """Those of `frame slice contrast` that the scan has, in canonical order."""
        return tuple(axis for axis in OUTER_AXES if axis in self.axes)

    @property
    def image_axes(self) -> tuple[str, ...]:
        """Axes of the reconstructed image."""
        inner = ("kz", "ky", "kx") if self.is_volume else self.plane_axes
        return (*self.outer_axes, *(image_axis(axis) for axis in inner))

    def planes(self) -> list[PlaneIndex]:
        """Every plane, slice by slice, so that the planes which share maps follow each other."""
        sizes = [self.axes.get(axis, 1) for axis in OUTER_AXES]
        every = (PlaneIndex(*index) for index in product(*(range(size) for size in sizes)))
        return sorted(every, key=lambda index: (index.slice, index.frame, index.contrast))

    def kspace(self, index: PlaneIndex) -> NDArray[np.complex64]:
        """Read one plane: complex64 of shape (coil, rows, columns), the mean where there are averages."""
        if self.averages > 1:
            return self.samples(index).kspace
        return self._kspace(index, 0)

    def _kspace(self, index: PlaneIndex, average: int) -> NDArray[np.complex64]:
        part: NDArray[np.complex64] = self.kspace_array.take(**index._asdict(), average=average)
        return part if "coil" in self.axes else part[np.newaxis]

    def each_average(self, index: PlaneIndex) -> Iterator[tuple[NDArray[np.complex64], NDArray[np.bool_]]]:
        """Read the averages of one plane one by one: samples (coil, rows, columns) as stored, and their mask."""
        for average in range(self.averages):
            kspace = self._kspace(index, average)
            mask = self._mask(index, average, kspace)
            if self.drops_spikes:
                mask = remove_spikes(kspace, mask, whole_lines=self.keeps_readouts)
            yield kspace, mask

    def samples(self, index: PlaneIndex) -> Samples:
        """Read one plane: the mean of its averages, zero where not sampled, and how many samples are behind it."""
        mean = Mean()
        for kspace, mask in self.each_average(index):
            mean.add(kspace, mask)
        return mean.finish()

    def mask(self, index: PlaneIndex, kspace: NDArray[np.complex64] | None = None) -> NDArray[np.bool_]:
        """Sampling mask of one plane, broadcast to (rows, columns): what any of its averages has sampled.

        Without `/mask` a position counts as sampled when any coil holds a value other than zero there. Along a readout
        (`kx`) zeros inside a measured line are values, not gaps: there a column is left out only where every line is
        zero, as at the missing end of a partial echo.
        """
        if self.averages == 1 or (self.mask_array is not None and "average" not in self.mask_array.axes):
            return self._mask(index, 0, kspace)
        if self.mask_array is None:
            return self.samples(index).mask
        masks = (self._mask(index, average) for average in range(self.averages))
        return np.asarray(np.logical_or.reduce(list(masks)), np.bool_)

    def _mask(
        self, index: PlaneIndex, average: int, kspace: NDArray[np.complex64] | None = None
    ) -> NDArray[np.bool_]:
        if self.mask_array is None:
            data = self._kspace(index, average) if kspace is None else kspace
            sampled: NDArray[np.bool_] = np.any(data != 0, axis=0)
            if self.plane_axes[1] == "kx":
                sampled = readout_pattern(sampled)
            return sampled
        part = self.mask_array.take(**index._asdict(), average=average)
        left = [axis for axis in self.mask_array.axes if axis not in (*OUTER_AXES, "average")]
        shape = [self.axes[axis] if axis in left else 1 for axis in self.plane_axes]
        return np.broadcast_to(part.reshape(shape), self.plane_shape)

    def noise(self) -> NDArray[np.complex64] | None:
        """Noise-only samples, complex64 of shape (coil, sample), or None."""
        return None if self.noise_array is None else self.noise_array.take()

    def reference(self, position: int) -> NDArray[np.complex64] | None:
        """Calibration k-space for one slice, complex64 of shape (coil, rows, columns), or None."""
        if self.reference_array is None:
            return None
        return _with_coil(self.reference_array, self.reference_array.take(slice=position))

    def sensitivity(self, position: int) -> NDArray[np.complex64] | None:
        """Supplied coil maps for one slice, complex64 of shape (coil, rows, columns), or None."""
        if self.sensitivity_array is None:
            return None
        return _with_coil(self.sensitivity_array, self.sensitivity_array.take(slice=position))


def readout_pattern(holds: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Lines that hold anything, at the columns that hold anything: (rows, columns) as measured by whole readouts."""
    return np.asarray(holds.any(axis=1, keepdims=True) & holds.any(axis=0, keepdims=True))


def _with_coil(array: LabelledArray, part: NDArray[Any]) -> NDArray[Any]:
    return part if "coil" in array.axes else part[np.newaxis]


def cropped_readout(scan: Scan) -> int:
    """Columns of a plane, or readout positions of a volume, once readout oversampling is removed.

    Phase-phase planes keep their columns.

    Raises
    ------
    InvalidScan
        When the oversampling does not leave a whole number of columns.
    """
    columns = scan.axes.get("kx", scan.plane_shape[1])
    oversampling = float(scan.attributes.get("readout_oversampling", 1.0))
    if "kx" not in scan.axes or oversampling == 1.0:
        return columns
    exact = columns / oversampling
    if abs(exact - round(exact)) > 1e-6 or round(exact) < 1:
        raise InvalidScan(
            f"readout_oversampling {oversampling:g} does not divide the {columns} readout samples into a whole number; "
            f"correct the attribute"
        )
    return round(exact)
