"""Coil maps of one slice in virtual coils, normalised so that the image's intensity is the object's.

    sum_c |S_c|^2 = 1 over the physical coils inside the object

whatever whitening and compression did: maps found in virtual coils are carried back to physical coils and scaled there.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Any, Final, Literal

import numpy as np
from numpy.typing import NDArray

from recon.coils.adaptive import adaptive_maps
from recon.coils.compression import Compression
from recon.coils.eigenvector import eigenvector_maps
from recon.coils.gathering import Calibration
from recon.coils.grids import nearest
from recon.coils.low_resolution import low_resolution_images, object_pixels
from recon.coils.noise import Whitening, mix
from recon.errors import InvalidScan
from recon.operators.fourier import crop_centre
from recon.scan import Scan

MapMethod = Literal["eigenvector", "adaptive", "supplied", "single-coil"]
#: the object, for the mean that defines noise units: pixels above this fraction of the largest magnitude.
OBJECT_LEVEL: Final = 0.1
#: and no object at all where fewer than this share of the pixels are.
SMALLEST_OBJECT: Final = 0.005


@dataclass(frozen=True)
class MapFigures:
    """How the maps of one slice were made.

    Attributes
    ----------
    source : {"scan", "time-average", "reference", "supplied", "none"}
    block : (rows, columns) or None
        Of the calibration they were computed from.
    object_share : float
        Share of the object, at the resolution of the calibration, where the maps are not zero.
    sets : int
        Sets of maps.
    kernel, subspace, threshold : (int, int), int, float, or None
        Of eigenvector maps: sides of the k-space patch, singular vectors kept, smallest eigenvalue inside the support.
    folded_share : float or None
        Of eigenvector maps: share of the object where the second eigenvalue is no smaller than that.
    """

    source: str
    block: tuple[int, int] | None = None
    object_share: float = 1.0
    sets: int = 1
    kernel: tuple[int, int] | None = None
    subspace: int | None = None
    threshold: float | None = None
    folded_share: float | None = None

    def as_dict(self) -> dict[str, Any]:
        """Plain JSON form."""
        return {
            "source": self.source,
            "block": None if self.block is None else {"rows": self.block[0], "columns": self.block[1]},
            "object_share": self.object_share,
            "sets": self.sets,
            "kernel": None if self.kernel is None else list(self.kernel),
            "subspace": self.subspace,
            "threshold": self.threshold,
            "folded_share": self.folded_share,
        }


@dataclass(frozen=True)
class CoilMaps:
    """Maps of one slice: one set, or two where the object exceeds the field of view.

    Attributes
    ----------
    virtual : complex64 (virtual coil, rows, columns) or (set, virtual coil, rows, columns)
        Whitened and compressed, for an image in the object's intensity; zero outside the object.
    whitened : complex64 (coil, rows, columns) or (set, coil, rows, columns)
        The same in all whitened physical coils.
    figures : MapFigures
    """

    virtual: NDArray[np.complex64]
    whitened: NDArray[np.complex64]
    figures: MapFigures

    @property
    def support(self) -> NDArray[np.bool_]:
        """Where any map is not zero: (rows, columns), or (set, rows, columns)."""
        return np.asarray(np.any(self.virtual != 0, axis=-3))


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
    sets : {1, 2}
        Sets of maps wanted, of eigenvector maps alone.
    largest : float
        Power of the largest low-resolution pixel of the object that all slices are part of; 0 where each stands alone.
    """

    def __init__(
        self,
        scan: Scan,
        method: MapMethod,
        whitening: Whitening,
        compression: Compression,
        shape: tuple[int, int],
        sets: int = 1,
        largest: float = 0.0,
    ) -> None:
        self.scan = scan
        self.method = method
        self.whitening = whitening
        self.compression = compression
        self.shape = shape
        self.sets = sets
        self.largest = largest

    def make(self, position: int, calibration: Calibration) -> CoilMaps:
        """Maps of one slice; a second set that would be zero everywhere is left out.

        Parameters
        ----------
        position : int
            Of the slice.
        calibration : Calibration
            Raw; of supplied maps it only says where the object is.

        Raises
        ------
        InvalidScan
            When supplied maps are zero everywhere, or wherever the object is.
        """
        blocks = [self.compression.apply(self.whitening.apply(block)) for block in calibration.blocks]
        if self.method == "supplied":
            return self._supplied(position, calibration, blocks)
        if self.method == "single-coil":
            return self._scaled(np.ones((1, 1, *self.shape), np.complex64), MapFigures("none"))
        figures = MapFigures(calibration.source, calibration.sides)
        if self.method == "adaptive":
            sets = adaptive_maps(blocks, self.shape, self.compression.reference)[np.newaxis]
        else:
            found = eigenvector_maps(
                blocks,
                self.shape,
                self.compression.reference,
                # the noise of a separate calibration is not that of the scan
                has_noise_units=self.whitening.has_noise_units and calibration.source != "reference",
                sets=self.sets,
            )
            sets = found.sets[:1] if not found.sets[-1].any() else found.sets
            is_folded = found.eigenvalues[1] >= found.threshold
            figures = replace(
                figures,
                kernel=found.kernel,
                subspace=found.subspace,
                threshold=found.threshold,
                folded_share=self._share_of_object(blocks, is_folded, without_object=0.0),
            )
        share = self._object_share(calibration, blocks, np.any(sets != 0, axis=(0, 1)))
        return self._scaled(sets, replace(figures, object_share=share, sets=len(sets)))

    def _scaled(self, sets: NDArray[np.complex64], figures: MapFigures) -> CoilMaps:
        """Bring maps in virtual coils (set, virtual coil, rows, columns) to one in physical coils, each set alone."""
        virtual, whitened = [], []
        for maps in sets:
            expanded = self.compression.expand(maps)
            scale = _inverse_size(mix(self.whitening.unwhitener, expanded))
            virtual.append(np.asarray(maps * scale, np.complex64))
            whitened.append(np.asarray(expanded * scale, np.complex64))
        if len(sets) == 1:
            return CoilMaps(virtual[0], whitened[0], figures)
        return CoilMaps(np.stack(virtual), np.stack(whitened), figures)

    def _share_of_object(
        self, blocks: list[NDArray[Any]], where: NDArray[np.bool_], *, without_object: float
    ) -> float:
        is_object = object_pixels(
            blocks, OBJECT_LEVEL, has_noise_units=self.whitening.has_noise_units, largest=self.largest
        )
        covered = nearest(where, is_object.shape)[is_object]
        # a few pixels are chance, in a slice without an object
        return float(covered.mean()) if covered.size > SMALLEST_OBJECT * is_object.size else without_object

    def _object_share(
        self, calibration: Calibration, blocks: list[NDArray[Any]], inside: NDArray[np.bool_]
    ) -> float:
        # gaps in the calibration would show the object where it is not
        if inside.all() or not calibration.is_full:
            return 1.0
        return self._share_of_object(blocks, inside, without_object=1.0)

    def _supplied(self, position: int, calibration: Calibration, blocks: list[NDArray[Any]]) -> CoilMaps:
        physical = self.scan.sensitivity(position)
        if physical is None:
            raise InvalidScan(
                "coil_maps is supplied, but the scan has no /sensitivity: write maps or choose another"
            )
        if physical.shape[-1] > self.shape[1]:
            physical = crop_centre(physical, self.shape[1])
        if not physical.any():
            raise InvalidScan(
                f"/sensitivity of slice {position} is zero everywhere; write the maps or leave them out"
            )
        physical = physical / np.abs(physical).max()  # so that squares stay in range
        whitened = self.whitening.apply(physical * _inverse_size(physical))
        share = self._object_share(calibration, blocks, np.any(physical != 0, axis=0))
        if share == 0:
            raise InvalidScan(
                f"/sensitivity of slice {position} is zero everywhere the scan shows an object: write maps of this "
                f"object in its place and orientation, or leave them out"
            )
        return CoilMaps(
            self.compression.apply(whitened), whitened, MapFigures("supplied", object_share=share)
        )


def _inverse_size(maps: NDArray[Any]) -> NDArray[np.float32]:
    size = np.sqrt(np.sum(np.abs(maps) ** 2, axis=0, dtype=np.float64))
    return np.divide(1.0, size, out=np.zeros_like(size), where=size > 0).astype(np.float32)


def largest_power(blocks: Iterable[NDArray[Any]], whitening: Whitening) -> float:
    """Largest sum over the coils of |m_c|^2 at any low-resolution pixel of any block."""
    return max(
        float(np.sum(np.abs(low_resolution_images(whitening.apply(block))) ** 2, axis=0).max())
        for block in blocks
    )


def squared_gain(pairs: list[tuple[NDArray[Any], Compression]], whitening: Whitening) -> float:
    """Mean over the object of S^H Psi^-1 S with sum |S|^2 = 1 in physical coils, 1 where there is no object.

    The coil images of a calibration block point along S at each pixel, which is all that the ratio needs; so the mean
    over every slice is known before the first is solved.

    Parameters
    ----------
    pairs : list of (complex (coil, rows, columns), Compression)
        Raw calibration k-space of every slice, and that slice's virtual coils.
    """
    powers = []
    for block, compression in pairs:
        images = low_resolution_images(whitening.apply(block))
        virtual = np.sum(np.abs(compression.apply(images)) ** 2, axis=0, dtype=np.float64)
        physical = np.sum(np.abs(mix(whitening.unwhitener, images)) ** 2, axis=0, dtype=np.float64)
        powers.append((np.asarray(virtual), np.asarray(physical)))
    # one level for the whole scan, so that slices without an object do not count
    level = OBJECT_LEVEL**2 * max(float(virtual.max()) for virtual, _ in powers)
    total, count = 0.0, 0
    for virtual, physical in powers:
        inside = virtual > level
        total += float(np.sum(virtual[inside] / physical[inside]))
        count += int(inside.sum())
    return total / count if count else 1.0
