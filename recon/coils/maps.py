"""Coil maps of one slice in virtual coils, normalised so that the image's intensity is the object's.

    sum_c |S_c|^2 = 1 over the physical coils inside the object

whatever whitening and compression did: maps found in virtual coils are carried back to physical coils and scaled there.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from recon.coils.adaptive import adaptive_maps, low_resolution_images
from recon.coils.compression import Compression
from recon.coils.eigenvector import eigenvector_maps
from recon.coils.noise import Whitening, mix
from recon.errors import InvalidScan
from recon.operators.fourier import crop_centre
from recon.scan import Scan

MapMethod = Literal["eigenvector", "adaptive", "supplied", "single-coil"]
#: the object, for the mean that defines noise units: pixels above this fraction of the largest magnitude.
OBJECT_LEVEL = 0.1


@dataclass(frozen=True)
class CoilMaps:
    """Maps of one slice.

    Attributes
    ----------
    virtual : complex64 (virtual coil, rows, columns)
        Whitened and compressed, for an image in the object's intensity; zero outside the object.
    whitened : complex64 (coil, rows, columns)
        The same in all whitened physical coils.
    """

    virtual: NDArray[np.complex64]
    whitened: NDArray[np.complex64]

    @property
    def support(self) -> NDArray[np.bool_]:
        """Where any map is not zero."""
        return np.asarray(np.any(self.virtual != 0, axis=0))


class MapMaker:
    """Makes the maps of every slice by one method.

    Parameters
    ----------
    scan : Scan
    method : MapMethod
    whitening : Whitening
    compression : Compression
    shape : (rows, columns)
        Of the plane that is solved.
    """

    def __init__(
        self,
        scan: Scan,
        method: MapMethod,
        whitening: Whitening,
        compression: Compression,
        shape: tuple[int, int],
    ) -> None:
        self.scan = scan
        self.method = method
        self.whitening = whitening
        self.compression = compression
        self.shape = shape

    def make(self, position: int, blocks: list[NDArray[Any]]) -> CoilMaps:
        """Maps of one slice from its whitened calibration blocks (not needed for supplied maps).

        Raises
        ------
        InvalidScan
            When supplied maps are zero everywhere or hold NaN or Inf.
        """
        compressed = [self.compression.apply(block) for block in blocks]
        if self.method == "supplied":
            return self._supplied(position)
        if self.method == "single-coil":
            virtual = np.ones((1, *self.shape), np.complex64)
        elif self.method == "adaptive":
            virtual = adaptive_maps(compressed, self.shape, self.compression.reference)
        else:
            virtual, _ = eigenvector_maps(
                compressed,
                self.shape,
                self.compression.reference,
                has_noise_units=self.whitening.has_noise_units,
            )
        whitened = self.compression.expand(virtual)
        scale = _inverse_size(mix(self.whitening.unwhitener, whitened))
        return CoilMaps(np.asarray(virtual * scale, np.complex64), np.asarray(whitened * scale, np.complex64))

    def _supplied(self, position: int) -> CoilMaps:
        physical = self.scan.sensitivity(position)
        if physical is None:
            raise InvalidScan(
                "coil_maps is supplied, but the scan has no /sensitivity: write maps or choose another"
            )
        if not np.isfinite(physical).all():
            raise InvalidScan("/sensitivity contains NaN or Inf; write finite numbers")
        if physical.shape[-1] > self.shape[1]:
            physical = crop_centre(physical, self.shape[1])
        elif physical.shape[-1] < self.shape[1]:
            raise InvalidScan(
                "/sensitivity has readout oversampling removed, but the mask varies along kx, so that the plane is "
                "solved with it: supply maps of the whole encoded field of view"
            )
        if not physical.any():
            raise InvalidScan(
                f"/sensitivity of slice {position} is zero everywhere; write the maps or leave them out"
            )
        whitened = self.whitening.apply(physical * _inverse_size(physical))
        return CoilMaps(self.compression.apply(whitened), whitened)


def _inverse_size(maps: NDArray[Any]) -> NDArray[np.float32]:
    size = np.sqrt(np.sum(np.abs(maps) ** 2, axis=0, dtype=np.float64))
    return np.divide(1.0, size, out=np.zeros_like(size), where=size > 0).astype(np.float32)


def squared_gain(block: NDArray[Any], whitening: Whitening, compression: Compression) -> tuple[float, float]:
    """Sum and count, over the object's low-resolution pixels, of S^H Psi^-1 S with sum |S|^2 = 1 in physical coils.

    The coil images of a calibration block point along S at each pixel, which is all that the ratio needs; so the mean
    over every slice is known before the first is solved.

    Parameters
    ----------
    block : complex (coil, rows, columns)
        Whitened calibration k-space.
    """
    images = low_resolution_images(block)
    virtual = np.asarray(np.sum(np.abs(compression.apply(images)) ** 2, axis=0, dtype=np.float64))
    physical = np.asarray(np.sum(np.abs(mix(whitening.unwhitener, images)) ** 2, axis=0, dtype=np.float64))
    inside = virtual > OBJECT_LEVEL**2 * virtual.max()
    if virtual.max() == 0:
        return 0.0, 0.0
    return float(np.sum(virtual[inside] / physical[inside])), float(inside.sum())
