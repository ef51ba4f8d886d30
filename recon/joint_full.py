"""Volumes whose mask varies along the readout: solved and judged in k-space, slab by slab where it is read."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from recon.averages import relative_weights
from recon.coils.noise import mix
from recon.consistency import ResidualFigures
from recon.joint_problem import StackedMaps
from recon.linear import density_weights
from recon.operators.encoding import Encoding
from recon.operators.fourier import inverse_transform, transform
from recon.preparation import Preparation, Sink
from recon.scan import PlaneIndex

_AXES = (-3, -2, -1)


class FullVolumes:
    """Encoding, data and judgement of volumes in k-space.

    Parameters
    ----------
    preparation : Preparation
    maps : StackedMaps or None
        None for the coil-by-coil method.
    """

    def __init__(self, preparation: Preparation, maps: StackedMaps | None) -> None:
        assert preparation.volume is not None
        self.preparation, self.maps = preparation, maps
        self.slabs = preparation.volume.slabs
        scan = preparation.volume.scan
        self.shape = scan.axes["kz"], scan.axes["ky"], scan.axes["kx"]
        outer = {axis: n for axis, n in scan.axes.items() if axis in ("frame", "contrast")}
        self.figures = ResidualFigures(self.shape, preparation.whitening, outer)
        self.counts: dict[PlaneIndex, NDArray[np.int64]] = {}

    def _whitened(self, volume: PlaneIndex) -> Iterator[tuple[int, NDArray[Any], NDArray[np.int64]]]:
        """kz, whitened samples (coil, ky, kx) and counts (ky, kx) of every slab."""
        for kz in range(self.shape[0]):
            samples = self.slabs.samples(volume._replace(slice=kz))
            yield kz, self.preparation.whitening.apply(samples.kspace), samples.counts
        self.slabs.release()

    def measure(self, volume: PlaneIndex) -> tuple[Encoding, NDArray[Any]]:
        """E and y of one volume, in noise units and virtual coils."""
        assert self.maps is not None
        scaled = self.maps.scaled
        data = np.empty_like(scaled)
        counts = np.empty(self.shape, np.int32)
        for kz, kspace, of_slab in self._whitened(volume):
            weights = relative_weights(of_slab, self.preparation.mean_count)
            data[:, kz] = self.preparation.compression.apply(kspace if weights is None else kspace * weights)
            counts[kz] = of_slab
        return Encoding(
            scaled, counts > 0, "volume", relative_weights(counts, self.preparation.mean_count)
        ), data

    def zero_filled(self, volume: PlaneIndex) -> NDArray[Any]:
        """u of the method `zero-filled`, see `recon.linear.zero_filled`."""
        assert self.maps is not None
        total = np.zeros(self.shape, np.complex64)
        power = np.zeros(self.shape, np.float32)
        data, mask = self._virtual(volume)
        density = density_weights(mask)
        for map_, samples in zip(self.maps.scaled, data, strict=True):
            total += map_.conj() * inverse_transform(samples * density, _AXES)
            power += np.abs(map_) ** 2
        return np.divide(total, power, out=np.zeros_like(total), where=power > 0)

    def _virtual(self, volume: PlaneIndex) -> tuple[NDArray[Any], NDArray[np.bool_]]:
        """Samples in virtual coils without weights, and the mask."""
        data = np.empty((self.preparation.compression.coils, *self.shape), np.complex64)
        mask = np.empty(self.shape, np.bool_)
        for kz, kspace, counts in self._whitened(volume):
            data[:, kz] = self.preparation.compression.apply(kspace)
            mask[kz] = counts > 0
        return data, mask

    def coil_by_coil(self, volume: PlaneIndex, sink: Sink) -> None:
        """Root-sum-of-squares of density-compensated coil images, which leave no residual."""
        data, mask = self._virtual(volume)  # without maps nothing is compressed
        for kz in range(self.shape[0]):
            index, slab = volume._replace(slice=kz), data[:, kz]
            self.figures.see(index, np.zeros_like(slab), slab, mask[kz])
        density = density_weights(mask)
        images = np.stack([self._written(inverse_transform(one * density, _AXES)) for one in data])
        image = np.sqrt(np.sum(np.abs(mix(self.preparation.whitening.unwhitener, images)) ** 2, axis=0))
        self._write(volume, image.astype(np.complex64), np.zeros(image.shape, np.complex64), sink)

    def finish(self, volume: PlaneIndex, u: NDArray[Any], sink: Sink) -> None:
        """Image units, residual and combination of one volume."""
        assert self.maps is not None
        m = np.where(self.maps.support, u / np.float32(self.preparation.kappa), 0).astype(np.complex64)
        residuals = np.empty((self.preparation.whitening.whitener.shape[0], *self.shape), np.complex64)
        for coil, map_ in enumerate(self._whitened_maps()):
            residuals[coil] = transform(map_ * m, _AXES)
        for kz, kspace, counts in self._whitened(volume):
            mask = counts > 0
            rest = np.where(mask, kspace - residuals[:, kz], 0)
            residuals[:, kz] = rest
            weights = relative_weights(counts, self.preparation.mean_count)
            if weights is not None:
                rest, kspace = rest * weights, kspace * weights
            self.figures.see(volume._replace(slice=kz), rest, kspace, mask)
        total, power = np.zeros(self.shape, np.complex64), np.zeros(self.shape, np.float32)
        for one, map_ in zip(residuals, self._whitened_maps(), strict=True):
            total += map_.conj() * inverse_transform(one, _AXES)
            power += np.abs(map_) ** 2
        difference = np.divide(total, power, out=np.zeros_like(total), where=power > 0)
        image = self._written(m)
        if self.preparation.settings.combination == "root-sum-of-squares":
            image = np.abs(image).astype(np.complex64)
        self._write(volume, image, self._written(difference), sink)

    def _whitened_maps(self) -> Iterator[NDArray[Any]]:
        """Map (z, y, x) of every whitened physical coil."""
        assert self.maps is not None
        coils = self.preparation.scan.coils
        if self.preparation.map_method == "supplied":  # virtual coils do not hold all of their whitened form
            whitened = np.empty((coils, *self.shape), np.complex64)
            for x in range(self.shape[2]):
                whitened[..., x] = self.preparation.make_maps(x).whitened
            yield from whitened
            return
        expansion = self.preparation.compression.matrix.conj().T * self.preparation.kappa
        for row in expansion.astype(np.complex64):
            yield np.tensordot(row, self.maps.scaled, axes=(0, 0))

    def _written(self, volume: NDArray[Any]) -> NDArray[np.complex64]:
        assert self.preparation.volume is not None
        return self.preparation.volume.grid.apply(volume)

    def _write(
        self, volume: PlaneIndex, image: NDArray[np.complex64], difference: NDArray[np.complex64], sink: Sink
    ) -> None:
        for x in range(image.shape[-1]):
            sink.write("image", volume._replace(slice=x), image[..., x])
            sink.write("residual_image", volume._replace(slice=x), difference[..., x])
