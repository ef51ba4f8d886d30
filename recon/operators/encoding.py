"""The measurement: coil maps, Fourier transform, sampling.

    E u = w P F (S_c u),  c = 1 ... C

for a plane, a series of planes that share maps (2-D + time), or a volume. Where all maps are zero (outside the object)
the data say nothing; there the image is measured once as zero with unit noise, like one more coil that sees the outside
alone. That keeps the problem well posed without a hard edge.

w is one, or sqrt(n / mean n) where positions were measured unequally often: there the data are means of n samples.

Where every readout is complete, the transform along the columns leaves the iteration: data are transformed along the
columns once, and F acts along the other axes alone.
"""

from __future__ import annotations

import copy
from typing import Any, Literal

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon import kernels
from recon.operators.base import LinearOperator
from recon.operators.fourier import inverse_transform, transform

#: what the first of three image axes is: frames are transformed one by one, the slabs of a volume together.
Depth = Literal["series", "volume"]


class Encoding(LinearOperator):
    """E for a plane, a series or a volume.

    Parameters
    ----------
    maps : complex (coil, rows, columns) or (coil, slabs, rows, columns)
        Whitened coil maps in noise units. Four axes for a series (one slab serves every frame) or a volume.
    mask : bool (rows, columns) or (slabs, rows, columns)
        True where sampled.
    depth : {"series", "volume"}
        Meaning of the slab axis, where there is one.
    weights : float, shape of the mask, optional
        w at the sampled positions; one everywhere where left out.

    Attributes
    ----------
    axes : tuple of int
        Transformed axes; without -1 the range is hybrid space (columns in image space).
    weight : float ndarray
        w, with one column where all columns share it.
    phase : complex ndarray or None
        e^{i phi} of the image's shape, see `absorb`.
    """

    def __init__(
        self,
        maps: NDArray[Any],
        mask: NDArray[np.bool_],
        depth: Depth = "volume",
        weights: NDArray[Any] | None = None,
    ) -> None:
        self.maps = np.ascontiguousarray(maps)
        self.phase: NDArray[Any] | None = None
        is_plane = maps.ndim == 3
        self.depth: Depth = "series" if is_plane else depth
        real = maps.real.dtype
        weight = mask.astype(real) if weights is None else np.where(mask, weights, 0).astype(real)
        has_complete_readouts = bool((weight == weight[..., :1]).all())
        self.axes = (
            *((-3,) if self.depth == "volume" else ()), -2, *(() if has_complete_readouts else (-1,))
        )  # fmt: skip
        self.domain_shape = maps.shape[1:] if is_plane else mask.shape
        self.range_shape = (len(maps), *self.domain_shape)
        self.weight = weight[..., :1] if has_complete_readouts else weight
        # A shift of the image multiplies k-space by a phase, which the mask leaves alone: so the normal operator
        # needs no shifts of the image, only the mask (the squared weights) in the order of the plain FFT.
        # It holds the scale of the inverse transform as well.
        count = np.prod([self.domain_shape[axis] for axis in self.axes])
        plain = np.fft.ifftshift(self.weight**2, axes=self.axes) / real.type(count)
        self._plain_mask = np.ascontiguousarray(plain if not is_plane else plain[np.newaxis])
        self._deep_maps = self.maps[:, np.newaxis] if is_plane else self.maps
        outside = ~np.any(maps != 0, axis=0)
        self._outside = np.broadcast_to(outside, self.domain_shape).astype(real) if outside.any() else None

    def absorb(self, phase: NDArray[Any]) -> Encoding:
        """The same measurement of v, u = e^{i phi} v: E' = E diag(e^{i phi}); `phase` is e^{i phi}."""
        encoding = copy.copy(self)
        encoding.phase = np.asarray(phase, self.maps.dtype)
        return encoding

    def with_phase(self, image: NDArray[Any]) -> NDArray[Any]:
        """u of v: the image with the phase that was taken out of it, if any was."""
        return image if self.phase is None else self.phase * image

    def to_range(self, kspace: NDArray[Any]) -> NDArray[Any]:
        """Weighted k-space, coil first and zero where not sampled, in the space that `forward` maps to."""
        out = np.empty(kspace.shape, kspace.dtype)
        for samples, target in zip(kspace, out, strict=True):  # coil by coil, for the sake of memory
            data = samples if -1 in self.axes else inverse_transform(samples, (-1,))
            np.multiply(data, self.weight, out=target)
            np.copyto(target, 0, where=self.weight == 0)
        return out

    def to_kspace(self, data: NDArray[Any]) -> NDArray[Any]:
        """The inverse of `to_range`: k-space, coil first."""
        kspace = data if -1 in self.axes else transform(data, (-1,))
        weight = self.weight
        return np.asarray(kspace * np.divide(1, weight, out=np.zeros_like(weight), where=weight != 0))

    def forward(self, x: NDArray[Any]) -> NDArray[Any]:
        """Image to sampled data, zero where not sampled."""
        x = x if self.phase is None else self.phase * x
        out = np.empty(self.range_shape, np.result_type(self.maps, x))
        for map_, target in zip(self.maps, out, strict=True):
            np.multiply(transform(map_ * x, self.axes), self.weight, out=target)
        return out

    def adjoint(self, y: NDArray[Any]) -> NDArray[Any]:
        """Sampled data to image."""
        out = np.zeros(self.domain_shape, y.dtype)
        for map_, samples in zip(self.maps, y, strict=True):
            image = inverse_transform(samples * self.weight, self.axes)
            image *= map_.conj()
            out += image
        return out if self.phase is None else np.conj(self.phase) * out

    def normal(self, x: NDArray[Any]) -> NDArray[Any]:
        """E^H E x plus x outside the object."""
        return self._normal(x) if self.phase is None else np.conj(self.phase) * self._normal(self.phase * x)

    def _normal(self, x: NDArray[Any]) -> NDArray[Any]:
        """`normal` without the phase, coil by coil so that each coil's plane stays in the cache."""
        x = np.ascontiguousarray(x)
        out = np.zeros_like(x) if self._outside is None else self._outside * x
        deep = x.reshape(-1, *x.shape[-2:])
        sums = out.reshape(deep.shape)
        if self.depth == "volume":
            for map_ in self._deep_maps:
                self._add_coil(map_, deep, self._plain_mask, sums)
            return out
        masks = np.broadcast_to(self._plain_mask, (len(deep), *self._plain_mask.shape[1:]))
        for frame, mask, total in zip(deep, masks, sums, strict=True):
            for map_ in self._deep_maps:
                self._add_coil(map_[0], frame, mask[np.newaxis], total)
        return out

    def _add_coil(self, map_: NDArray[Any], x: NDArray[Any], mask: NDArray[Any], out: NDArray[Any]) -> None:
        """out += S^H F^H P F S x for one coil."""
        weighted = np.empty_like(x)
        kernels.weigh(_real(map_), _real(x), _real(weighted))
        spectrum = scipy.fft.fftn(weighted, axes=self.axes, overwrite_x=True)
        kernels.scale(spectrum.reshape(-1, *x.shape[-2:]).view(mask.dtype), mask)
        image = scipy.fft.ifftn(spectrum, axes=self.axes, norm="forward", overwrite_x=True)
        kernels.add_conjugate(_real(map_), _real(image), _real(out))

    def power(self) -> NDArray[Any]:
        """sum_c |S_c|^2 at every pixel."""
        return np.asarray(np.sum(np.abs(self.maps) ** 2, axis=0))

    def squared_norm_bound(self) -> float:
        """Upper bound of ||E||^2, the outside included: max over pixels of sum_c |S_c|^2, times the largest w^2."""
        power = sum(np.abs(map_).astype(np.float64) ** 2 for map_ in self.maps)
        largest = float(np.max(power)) * float(np.max(self.weight)) ** 2
        return largest if self._outside is None else max(largest, 1.0)


def _real(x: NDArray[Any]) -> NDArray[Any]:
    """All entries as real numbers in one row."""
    return x.reshape(-1).view(x.real.dtype)
