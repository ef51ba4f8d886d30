"""Planes of a volume on their way to where finished images go: transposed, several readout positions at a time."""

from __future__ import annotations

from typing import Any, Final, Protocol

import numpy as np
from numpy.typing import NDArray

from recon.formats.image_layout import VOLUME_CHUNK
from recon.operators.fourier import zero_fill
from recon.scan import PlaneIndex

#: readout positions stored at once: whole chunks of the image file.
POSITIONS: Final = VOLUME_CHUNK


class VolumeSink(Protocol):
    """Where finished parts of a volume go."""

    def write_positions(
        self, name: str, index: PlaneIndex, positions: slice, part: NDArray[np.complex64]
    ) -> None:
        """Store some readout positions of a volume, (z, y, positions)."""


class PositionSink:
    """Takes planes (`slice` is x) and hands on blocks of them, so that memory holds a few at a time.

    Interpolation along x needs all positions at once: then a volume is held until it is complete.

    Parameters
    ----------
    target : VolumeSink
    positions : int
        Readout positions that come.
    written : int
        Readout positions of the image, more where it is interpolated.
    is_magnitude : bool
        Whether the image holds magnitudes, which interpolation must leave so.
    """

    def __init__(
        self, target: VolumeSink, positions: int, written: int, *, is_magnitude: bool = False
    ) -> None:
        self._target = target
        self._positions, self._written = positions, written
        self._is_magnitude = is_magnitude
        self._step = POSITIONS if self._positions == self._written else self._positions
        self._open: dict[tuple[Any, ...], tuple[NDArray[np.complex64], int]] = {}

    def write(self, name: str, index: PlaneIndex, plane: NDArray[np.complex64]) -> None:
        """Take in one plane (z, y) of `image` or `residual_image`."""
        start = index.slice // self._step * self._step
        width = min(self._step, self._positions - start)
        volume = index._replace(slice=0)
        key = name, volume, start
        part, have = self._open.pop(key, (None, 0))
        if part is None:
            part = np.empty((*plane.shape, width), np.complex64)
        part[..., index.slice - start] = plane
        if have + 1 < width:
            self._open[key] = part, have + 1
        elif self._positions == self._written:
            self._target.write_positions(name, volume, slice(start, start + width), part)
        else:
            finer = zero_fill(part, (self._written,))
            if self._is_magnitude and name == "image":
                finer = np.abs(finer).astype(np.complex64)
            self._target.write_positions(name, volume, slice(0, self._written), finer)
