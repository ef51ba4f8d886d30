"""The measurement: coil maps, Fourier transform, sampling.

    E u = P F (S_c u),  c = 1 ... C

Where all maps are zero (outside the object) the data say nothing; there the image is measured once as zero with unit
noise, like one more coil that sees the outside alone. That keeps the problem well posed without a hard edge.

Where every sampled row is complete (1-D undersampling along the rows axis) the transform along the columns leaves the
iteration: data are transformed along the columns once, and F acts along the rows alone.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon import kernels
from recon.operators.base import LinearOperator
from recon.operators.fourier import inverse_transform, transform


def transform_axes(mask: NDArray[np.bool_]) -> tuple[int, ...]:
    """Axes whose transform has to stay in the iteration: rows alone when the mask is constant along columns."""
    is_constant = bool((mask == mask[:, :1]).all())
    return (-2,) if is_constant else (-2, -1)


class Encoding(LinearOperator):
    """E for one plane.

    Parameters
    ----------
    maps : complex64 (coil, rows, columns)
        Whitened coil maps in noise units.
    mask : bool (rows, columns)
        True where sampled.

    Attributes
    ----------
    axes : tuple of int
        Transformed axes; the range is hybrid space (columns in image space) when this is (-2,).
    """

    def __init__(self, maps: NDArray[Any], mask: NDArray[np.bool_]) -> None:
        self.maps = np.ascontiguousarray(maps)
        self.axes = transform_axes(mask)
        self.domain_shape = maps.shape[1:]
        self.range_shape = maps.shape
        self._mask = mask[:, :1] if self.axes == (-2,) else mask
        # A shift of the image multiplies k-space by a phase, which the mask leaves alone: so the normal operator
        # needs no shifts of the image, only the mask in the order of the plain FFT.
        self._plain_mask = np.ascontiguousarray(np.fft.ifftshift(self._mask, axes=self.axes)).astype(
            maps.real.dtype
        )
        self._conjugate_maps = maps.conj()
        outside = ~np.any(maps != 0, axis=0)
        self._outside = outside.astype(maps.real.dtype) if outside.any() else None

    def to_range(self, kspace: NDArray[Any]) -> NDArray[Any]:
        """Masked k-space (coil, rows, columns) in the space that `forward` maps to."""
        data = kspace if len(self.axes) == 2 else inverse_transform(kspace, (-1,))
        return np.where(self._mask, data, 0)

    def to_kspace(self, data: NDArray[Any]) -> NDArray[Any]:
        """The inverse of `to_range`: k-space (coil, rows, columns)."""
        return data if len(self.axes) == 2 else transform(data, (-1,))

    def forward(self, x: NDArray[Any]) -> NDArray[Any]:
        """Image to sampled data, zero where not sampled."""
        return transform(self.maps * x, self.axes) * self._mask

    def adjoint(self, y: NDArray[Any]) -> NDArray[Any]:
        """Sampled data to image."""
        images = inverse_transform(y * self._mask, self.axes)
        images *= self._conjugate_maps
        return np.asarray(images.sum(axis=0, dtype=images.dtype))

    def normal(self, x: NDArray[Any]) -> NDArray[Any]:
        """E^H E x plus x outside the object, coil by coil so that each coil's plane stays in the cache."""
        x = np.ascontiguousarray(x)
        out = np.zeros_like(x) if self._outside is None else self._outside * x
        plane = np.empty_like(x)
        flat, sums, real = x.reshape(-1), out.reshape(-1), x.real.dtype
        for map_ in self.maps.reshape(len(self.maps), -1):
            kernels.weigh(map_.view(real), flat.view(real), plane.reshape(-1).view(real))
            spectrum = scipy.fft.fftn(plane, axes=self.axes, overwrite_x=True)
            spectrum *= self._plain_mask
            image = scipy.fft.ifftn(spectrum, axes=self.axes, overwrite_x=True)
            kernels.add_conjugate(map_.view(real), image.reshape(-1).view(real), sums.view(real))
        return out

    def squared_norm_bound(self) -> float:
        """Upper bound of ||E||^2, the outside included: max over pixels of sum_c |S_c|^2 (P and F have norm one)."""
        largest = float(np.max(np.sum(np.abs(self.maps) ** 2, axis=0, dtype=np.float64)))
        return largest if self._outside is None else max(largest, 1.0)
