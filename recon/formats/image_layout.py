"""Result file `image.h5`, layout version 1: written plane by plane, read back whole."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any, Final, Self

import h5py
import numpy as np
from numpy.typing import NDArray

from recon.caution import CAUTION
from recon.errors import InvalidScan
from recon.formats import hdf5
from recon.grid import ImageGrid
from recon.scan import PlaneIndex, Scan

LAYOUT: Final = "fallow-image"
LAYOUT_VERSION: Final = 1
#: side of the chunks that volumes are stored in.
VOLUME_CHUNK: Final = 16
_GEOMETRY: Final = (
    "field_of_view_mm",
    "slice_position_mm",
    "read_direction",
    "phase_direction",
    "slice_direction",
    "patient_position",
    "slice_spacing_mm",
    "frame_interval_ms",
    "echo_times_ms",
)


@dataclass(frozen=True)
class ImageFile:
    """What an `image.h5` holds.

    Attributes
    ----------
    image, residual_image : complex64 ndarray
        In the order of `axes`.
    axes : tuple of str
        Labels such as ("slice", "y", "x").
    report, provenance : dict
        The consistency report and where the image came from.
    attributes : dict
        Geometry of the image.
    """

    image: NDArray[np.complex64]
    residual_image: NDArray[np.complex64]
    axes: tuple[str, ...]
    report: dict[str, Any]
    provenance: dict[str, Any]
    attributes: dict[str, Any]


class ImageWriter:
    """Writes an image file plane by plane, so that memory does not grow with the number of planes.

    Parameters
    ----------
    path : path
        Where to write; give a temporary name and rename when `finish` has returned.
    scan : Scan
        Supplies axes and geometry.
    grid : ImageGrid
        Of one image plane.
    """

    def __init__(self, path: Path | str, scan: Scan, grid: ImageGrid) -> None:
        self._outer = scan.outer_axes
        sizes = [scan.axes[axis] for axis in self._outer]
        self._file = h5py.File(path, "w")
        self._file.attrs.update({"layout": LAYOUT, "layout_version": LAYOUT_VERSION, "caution": CAUTION})
        for name in ("image", "residual_image"):
            self._create(name, (*sizes, *grid.written), scan.image_axes)
        self._file["image"].attrs.update(geometry(scan, grid))

    def _create(self, name: str, shape: Sequence[int], axes: Sequence[str]) -> None:
        # a volume comes readout position by position: chunks of a few keep each write to whole chunks
        chunks = None
        if axes[-3:] == ("z", "y", "x"):
            chunks = (*(1,) * (len(shape) - 3), *(min(n, VOLUME_CHUNK) for n in shape[-3:]))
        written = self._file.create_dataset(name, shape, dtype=np.complex64, chunks=chunks)
        for position, label in enumerate(axes):
            written.dims[position].label = label

    def write(self, name: str, index: PlaneIndex, plane: NDArray[np.complex64]) -> None:
        """Store one plane of `image` or `residual_image`."""
        where = index._asdict()
        self._file[name][tuple(where[axis] for axis in self._outer)] = plane

    def write_positions(
        self, name: str, index: PlaneIndex, positions: slice, part: NDArray[np.complex64]
    ) -> None:
        """Store some readout positions of a volume, (z, y, positions)."""
        where = index._asdict()
        self._file[name][(*(where[axis] for axis in self._outer), ..., positions)] = part

    def finish(self, report: Mapping[str, Any], provenance: Mapping[str, Any]) -> None:
        """Add the report and close the file; without this call it is not a valid image file."""
        self._file.attrs["report"] = json.dumps(report, allow_nan=False)
        self._file.attrs["provenance"] = json.dumps(provenance, allow_nan=False)
        self._file.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._file.close()


def geometry(scan: Scan, grid: ImageGrid) -> dict[str, Any]:
    """Geometry attributes of the image: as in the scan, the field of view without oversampling."""
    found = {name: scan.attributes[name] for name in _GEOMETRY if name in scan.attributes}
    if "field_of_view_mm" in found:
        pairs = zip("xyz", found["field_of_view_mm"], strict=True)
        found["field_of_view_mm"] = [field * grid.share(axis) for axis, field in pairs]
    return found


def voxel_size_mm(scan: Scan, grid: ImageGrid) -> list[float] | None:
    """Pixel size in mm along the grid's axes, field of view over matrix; None where the field of view is unknown."""
    fields = geometry(scan, grid).get("field_of_view_mm")
    if fields is None:
        return None
    by_axis = dict(zip("xyz", fields, strict=True))
    return [by_axis[axis] / size for axis, size in zip(grid.axes, grid.written, strict=True)]


def read_image(path: Path | str) -> ImageFile:
    """Read an image file.

    Raises
    ------
    InvalidScan
        When the file is not a complete image file.
    """
    with hdf5.open_file(path) as file:
        if hdf5.text(file.attrs.get("layout")) != LAYOUT or "report" not in file.attrs:
            raise InvalidScan(
                f"{Path(path).name} is not a complete {LAYOUT} file; reconstruct the scan again"
            )
        image = file["image"]
        return ImageFile(
            image=image[()],
            residual_image=file["residual_image"][()],
            axes=tuple(str(dimension.label) for dimension in image.dims),
            report=json.loads(file.attrs["report"]),
            provenance=json.loads(file.attrs["provenance"]),
            attributes={
                name: value.tolist() if isinstance(value, np.ndarray | np.generic) else value
                for name, value in image.attrs.items()
                if name in _GEOMETRY
            },
        )
